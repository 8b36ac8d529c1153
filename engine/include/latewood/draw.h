// Random draws by address: a draw depends on what it is for, never on what was drawn before.
//
//   philox4x32-10(key = seed, counter = run 64 | stream 32 | job 32)
//
// Counter words, low first: job, stream, run low, run high. Key words: seed low, seed high.
// Method: J. Salmon, M. Moraes, R. Dror, D. Shaw, "Parallel random numbers: as easy as 1, 2, 3",
// SC'11.
#ifndef LATEWOOD_DRAW_H
#define LATEWOOD_DRAW_H

#include <latewood/status.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_address {
    uint64_t seed;
    uint64_t run;
    uint32_t stream;
    uint32_t job;
} lw_address;

// The raw block function: 4 counter words, 2 key words, 4 output words.
LW_API void lw_philox4x32_10(const uint32_t counter[4], const uint32_t key[2], uint32_t out[4]);

// Two uniforms in the open interval (0, 1): (top 53 bits of out[1]:out[0], out[3]:out[2]) + 1/2,
// times 2^-53, the topmost held just below 1.
LW_API void lw_draw_pair(lw_address at, double u[2]);
// The first of the pair.
LW_API double lw_draw_uniform(lw_address at);

// Stream of a name ("link.takes"): FNV-1a 64 folded to 32 bits by xor.
LW_API uint32_t lw_stream(const char *name);

#ifdef __cplusplus
}
#endif
#endif
