// Time: signed 64-bit counts of picoseconds, and periods that need not be whole ticks.
#ifndef LATEWOOD_TIME_H
#define LATEWOOD_TIME_H

#include <latewood/status.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef int64_t lw_tick;

#define LW_TICKS_PER_SECOND INT64_C(1000000000000)
#define LW_TICK_MAX INT64_C(9000000000000000000) // 104 days; the rest is headroom for sums
#define LW_NEVER INT64_MAX

// A period in ticks as the fraction num/den, num > 0, den > 0, in lowest terms.
typedef struct lw_period {
    int64_t num;
    int64_t den;
} lw_period;

// Nearest tick to `seconds`, halves up. The product with 1e12 is rounded to a double first, so that
// 2.5e-12 is a half, as it is written.
//   returns LW_ERR_TIME if not finite or beyond +-LW_TICK_MAX
LW_API lw_status lw_tick_from_seconds(double seconds, lw_tick *tick);
LW_API double lw_tick_seconds(lw_tick tick);

// offset + round(k * period), halves up, exact in 128 bits; LW_NEVER if beyond LW_TICK_MAX.
LW_API lw_tick lw_period_at(lw_period period, lw_tick offset, int64_t k);
LW_API double lw_period_seconds(lw_period period);
// Least k >= 0 with lw_period_at(period, offset, k) >= t.
LW_API int64_t lw_period_index(lw_period period, lw_tick offset, lw_tick t);
// Period of whole ticks.
LW_API lw_period lw_period_of_ticks(lw_tick ticks);

#ifdef __cplusplus
}
#endif
#endif
