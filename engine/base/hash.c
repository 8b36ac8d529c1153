// SHA-256, FIPS 180-4. Workload: a study and its data files, once a batch.

#include <latewood/hash.h>

#include <stdio.h>
#include <string.h>

static const uint32_t k[64] = {
    0x428a2f98, 0x71374491, 0xb5c0fbcf, 0xe9b5dba5, 0x3956c25b, 0x59f111f1, 0x923f82a4, 0xab1c5ed5,
    0xd807aa98, 0x12835b01, 0x243185be, 0x550c7dc3, 0x72be5d74, 0x80deb1fe, 0x9bdc06a7, 0xc19bf174,
    0xe49b69c1, 0xefbe4786, 0x0fc19dc6, 0x240ca1cc, 0x2de92c6f, 0x4a7484aa, 0x5cb0a9dc, 0x76f988da,
    0x983e5152, 0xa831c66d, 0xb00327c8, 0xbf597fc7, 0xc6e00bf3, 0xd5a79147, 0x06ca6351, 0x14292967,
    0x27b70a85, 0x2e1b2138, 0x4d2c6dfc, 0x53380d13, 0x650a7354, 0x766a0abb, 0x81c2c92e, 0x92722c85,
    0xa2bfe8a1, 0xa81a664b, 0xc24b8b70, 0xc76c51a3, 0xd192e819, 0xd6990624, 0xf40e3585, 0x106aa070,
    0x19a4c116, 0x1e376c08, 0x2748774c, 0x34b0bcb5, 0x391c0cb3, 0x4ed8aa4a, 0x5b9cca4f, 0x682e6ff3,
    0x748f82ee, 0x78a5636f, 0x84c87814, 0x8cc70208, 0x90befffa, 0xa4506ceb, 0xbef9a3f7, 0xc67178f2};

lw_hash lw_hash_begin(void)
{
    return (lw_hash){.state = {0x6a09e667, 0xbb67ae85, 0x3c6ef372, 0xa54ff53a, 0x510e527f,
                               0x9b05688c, 0x1f83d9ab, 0x5be0cd19}};
}

static uint32_t turned(uint32_t x, int by)
{
    return x >> by | x << (32 - by);
}

static void take_block(lw_hash *h)
{
    uint32_t w[64], s[8];
    for (int t = 0; t < 16; t++)
        w[t] = (uint32_t)h->block[4 * t] << 24 | (uint32_t)h->block[4 * t + 1] << 16 |
               (uint32_t)h->block[4 * t + 2] << 8 | h->block[4 * t + 3];
    for (int t = 16; t < 64; t++)
        w[t] = w[t - 16] + w[t - 7] +
               (turned(w[t - 15], 7) ^ turned(w[t - 15], 18) ^ w[t - 15] >> 3) +
               (turned(w[t - 2], 17) ^ turned(w[t - 2], 19) ^ w[t - 2] >> 10);
    memcpy(s, h->state, sizeof s);
    for (int t = 0; t < 64; t++) {
        uint32_t big1 = turned(s[4], 6) ^ turned(s[4], 11) ^ turned(s[4], 25);
        uint32_t big0 = turned(s[0], 2) ^ turned(s[0], 13) ^ turned(s[0], 22);
        uint32_t one = s[7] + big1 + ((s[4] & s[5]) ^ (~s[4] & s[6])) + k[t] + w[t];
        uint32_t two = big0 + ((s[0] & s[1]) ^ (s[0] & s[2]) ^ (s[1] & s[2]));
        memmove(s + 1, s, 7 * sizeof *s);
        s[4] += one;
        s[0] = one + two;
    }
    for (int i = 0; i < 8; i++)
        h->state[i] += s[i];
}

void lw_hash_add(lw_hash *h, const void *bytes, size_t n)
{
    const unsigned char *from = bytes;
    while (n > 0) {
        size_t used = h->n_bytes % 64, part = 64 - used < n ? 64 - used : n;
        memcpy(h->block + used, from, part);
        h->n_bytes += part;
        from += part;
        n -= part;
        if (h->n_bytes % 64 == 0)
            take_block(h);
    }
}

char *lw_hash_text(lw_hash *h, char out[65])
{
    uint64_t n_bits = h->n_bytes * 8;
    unsigned char length[8];
    for (int i = 0; i < 8; i++)
        length[i] = (unsigned char)(n_bits >> (56 - 8 * i));
    lw_hash_add(h, "\x80", 1);
    while (h->n_bytes % 64 != 56)
        lw_hash_add(h, "", 1);
    lw_hash_add(h, length, 8);
    for (int i = 0; i < 8; i++)
        snprintf(out + 8 * i, 9, "%08x", h->state[i]);
    return out;
}
