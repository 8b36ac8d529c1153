// Philox 4x32-10 and uniforms by address. See draw.h.

#include <latewood/draw.h>

#define MULTIPLIER_0 UINT32_C(0xD2511F53)
#define MULTIPLIER_1 UINT32_C(0xCD9E8D57)
#define WEYL_0 UINT32_C(0x9E3779B9)
#define WEYL_1 UINT32_C(0xBB67AE85)
#define ROUNDS 10

void lw_philox4x32_10(const uint32_t counter[4], const uint32_t key[2], uint32_t out[4])
{
    uint32_t c0 = counter[0], c1 = counter[1], c2 = counter[2], c3 = counter[3];
    uint32_t k0 = key[0], k1 = key[1];
    for (int round = 0; round < ROUNDS; round++) {
        uint64_t a = (uint64_t)MULTIPLIER_0 * c0, b = (uint64_t)MULTIPLIER_1 * c2;
        c0 = (uint32_t)(b >> 32) ^ c1 ^ k0;
        c1 = (uint32_t)b;
        c2 = (uint32_t)(a >> 32) ^ c3 ^ k1;
        c3 = (uint32_t)a;
        k0 += WEYL_0;
        k1 += WEYL_1;
    }
    out[0] = c0;
    out[1] = c1;
    out[2] = c2;
    out[3] = c3;
}

static void block_at(lw_address at, uint32_t out[4])
{
    uint32_t counter[4] = {at.job, at.stream, (uint32_t)at.run, (uint32_t)(at.run >> 32)};
    uint32_t key[2] = {(uint32_t)at.seed, (uint32_t)(at.seed >> 32)};
    lw_philox4x32_10(counter, key, out);
}

// The middle of one of 2^53 equal cells; the topmost would round to 1 and is held below.
static double uniform(uint32_t low, uint32_t high)
{
    uint64_t cell = ((uint64_t)high << 32 | low) >> 11;
    double u = ((double)cell + 0.5) * 0x1p-53;
    return u < 1 ? u : 1 - 0x1p-53;
}

void lw_draw_pair(lw_address at, double u[2])
{
    uint32_t out[4];
    block_at(at, out);
    u[0] = uniform(out[0], out[1]);
    u[1] = uniform(out[2], out[3]);
}

double lw_draw_uniform(lw_address at)
{
    uint32_t out[4];
    block_at(at, out);
    return uniform(out[0], out[1]);
}

uint32_t lw_stream(const char *name)
{
    uint64_t hash = UINT64_C(14695981039346656037);
    for (const unsigned char *c = (const unsigned char *)name; *c != 0; c++)
        hash = (hash ^ *c) * UINT64_C(1099511628211);
    return (uint32_t)(hash >> 32) ^ (uint32_t)hash;
}
