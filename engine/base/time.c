// Time: ticks of a picosecond and rational periods, in 128 bits where products need them.

#include <latewood/time.h>

#include <math.h>

__extension__ typedef __int128 wide;

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

int64_t lw_period_index(lw_period period, lw_tick offset, lw_tick t)
{
    if (t <= offset)
        return 0;
    int64_t k = (int64_t)(((wide)t - offset) * period.den / period.num);
    while (k > 0 && lw_period_at(period, offset, k - 1) >= t)
        k--;
    while (lw_period_at(period, offset, k) < t)
        k++;
    return k;
}

lw_period lw_period_of_ticks(lw_tick ticks)
{
    return (lw_period){ticks, 1};
}
