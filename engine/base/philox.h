// Philox 4x32-10 inline, for draws on the hot path: the address as four numbers, because a
// structure passed by value costs more than the draw.
#ifndef LATEWOOD_BASE_PHILOX_H
#define LATEWOOD_BASE_PHILOX_H

#include <stdint.h>

#define LW__PHILOX_M0 UINT64_C(0xD2511F53)
#define LW__PHILOX_M1 UINT64_C(0xCD9E8D57)
#define LW__PHILOX_W0 UINT32_C(0x9E3779B9)
#define LW__PHILOX_W1 UINT32_C(0xBB67AE85)

// The four words of a block, each in 64 bits: then products and shifts stay in registers.
typedef struct lw__words {
    uint64_t c0, c1, c2, c3;
    uint32_t k0, k1;
} lw__words;

static inline lw__words lw__philox_round(lw__words w)
{
    uint64_t a = LW__PHILOX_M0 * w.c0, b = LW__PHILOX_M1 * w.c2;
    return (lw__words){b >> 32 ^ w.c1 ^ w.k0, (uint32_t)b,          a >> 32 ^ w.c3 ^ w.k1,
                       (uint32_t)a,           w.k0 + LW__PHILOX_W0, w.k1 + LW__PHILOX_W1};
}

// Ten rounds, written out.
static inline lw__words lw__philox(lw__words w)
{
    w = lw__philox_round(lw__philox_round(lw__philox_round(lw__philox_round(lw__philox_round(w)))));
    return lw__philox_round(
        lw__philox_round(lw__philox_round(lw__philox_round(lw__philox_round(w)))));
}

// The middle of one of 2^53 equal cells; the topmost would round to 1 and is held below.
static inline double lw__uniform(uint64_t low, uint64_t high)
{
    int64_t cell = (int64_t)((high << 32 | low) >> 11);
    double u = ((double)cell + 0.5) * 0x1p-53;
    return u < 1 ? u : 1 - 0x1p-53;
}

// As lw_draw_uniform.
static inline double lw__draw_uniform(uint64_t seed, uint64_t run, uint32_t stream, uint32_t job)
{
    lw__words w = lw__philox(
        (lw__words){job, stream, (uint32_t)run, run >> 32, (uint32_t)seed, (uint32_t)(seed >> 32)});
    return lw__uniform(w.c0, w.c1);
}

#endif
