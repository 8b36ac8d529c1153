// Draws by address. See draw.h; the generator is in philox.h.

#include <latewood/draw.h>

#include "base/philox.h"

void lw_philox4x32_10(const uint32_t counter[4], const uint32_t key[2], uint32_t out[4])
{
    lw__words w =
        lw__philox((lw__words){counter[0], counter[1], counter[2], counter[3], key[0], key[1]});
    out[0] = (uint32_t)w.c0;
    out[1] = (uint32_t)w.c1;
    out[2] = (uint32_t)w.c2;
    out[3] = (uint32_t)w.c3;
}

void lw_draw_pair(lw_address at, double u[2])
{
    lw__words w = lw__philox((lw__words){at.job, at.stream, (uint32_t)at.run, at.run >> 32,
                                         (uint32_t)at.seed, (uint32_t)(at.seed >> 32)});
    u[0] = lw__uniform(w.c0, w.c1);
    u[1] = lw__uniform(w.c2, w.c3);
}

double lw_draw_uniform(lw_address at)
{
    return lw__draw_uniform(at.seed, at.run, at.stream, at.job);
}

uint32_t lw_stream(const char *name)
{
    uint64_t hash = UINT64_C(14695981039346656037);
    for (const unsigned char *c = (const unsigned char *)name; *c != 0; c++)
        hash = (hash ^ *c) * UINT64_C(1099511628211);
    return (uint32_t)(hash >> 32) ^ (uint32_t)hash;
}
