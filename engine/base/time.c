// Time: ticks of a picosecond and rational periods, in 128 bits where products need them.

#include <latewood/time.h>

#include <math.h>

__extension__ typedef __int128 wide;
__extension__ typedef unsigned __int128 unsigned_wide;

lw_status lw_tick_from_seconds(double seconds, lw_tick *tick)
{
    double exact = seconds * (double)LW_TICKS_PER_SECOND, whole = floor(exact);
    if (!(fabs(exact) <= (double)LW_TICK_MAX))
        return LW_ERR_TIME;
    *tick = (lw_tick)whole + (exact - whole >= 0.5);
    return LW_OK;
}

double lw_tick_seconds(lw_tick tick)
{
    return (double)tick / (double)LW_TICKS_PER_SECOND;
}

// floor(a / b), b > 0
static wide floor_ratio(wide a, wide b)
{
    wide q = a / b;
    return a % b < 0 ? q - 1 : q;
}

lw_tick lw_period_at(lw_period period, lw_tick offset, int64_t k)
{
    wide at = floor_ratio(2 * (wide)k * period.num + period.den, 2 * (wide)period.den) + offset;
    return at > LW_TICK_MAX || at < -LW_TICK_MAX ? LW_NEVER : (lw_tick)at;
}

double lw_period_seconds(lw_period period)
{
    return (double)period.num / (double)period.den / (double)LW_TICKS_PER_SECOND;
}

// With d = t - offset, round(k num / den) >= d if and only if 2 k num >= den (2 d - 1). The right
// side needs 128 bits without a sign: den < 2^63 and 2 d < 2^65.
int64_t lw_period_index(lw_period period, lw_tick offset, lw_tick t)
{
    if (t <= offset)
        return 0;
    t = t > LW_TICK_MAX ? LW_TICK_MAX + 1 : t; // from there on every instant is LW_NEVER
    unsigned_wide distance = (unsigned_wide)((wide)t - offset);
    unsigned_wide least = (unsigned_wide)period.den * (2 * distance - 1);
    unsigned_wide step = 2 * (unsigned_wide)period.num;
    return (int64_t)(least / step + (least % step != 0));
}

lw_period lw_period_of_ticks(lw_tick ticks)
{
    return (lw_period){ticks, 1};
}
