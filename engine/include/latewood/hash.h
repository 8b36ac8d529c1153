// Hashes of files: SHA-256 (FIPS 180-4).
#ifndef LATEWOOD_HASH_H
#define LATEWOOD_HASH_H

#include <latewood/status.h>
#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_hash {
    uint32_t state[8];
    uint64_t n_bytes;
    unsigned char block[64];
} lw_hash;

LW_API lw_hash lw_hash_begin(void);
LW_API void lw_hash_add(lw_hash *h, const void *bytes, size_t n);
// 64 hexadecimal digits and a terminating zero; `h` is used up.
LW_API char *lw_hash_text(lw_hash *h, char out[65]);

#ifdef __cplusplus
}
#endif
#endif
