// Quantiser: range and resolution of converters, usable alone.
//
// Invariants
// 1. A code is a whole number within lo / LSB .. hi / LSB - 1.
// 2. Only exact scaling and rint or floor: the same bits everywhere.

#include <latewood/rig.h>

#include <math.h>
#include <stddef.h>

lw_quantiser lw_quantiser_default(void)
{
    return (lw_quantiser){.bits = 0, .lo = (double)NAN, .hi = (double)NAN, LW_ROUND_NEAREST};
}

lw_status lw_quantiser_check(const lw_quantiser *q, lw_error *err)
{
    if (q->bits < 0 || q->bits > 32)
        return lw_error_set(err, LW_ERR_ARGUMENT, "bits is %d; permitted 0 to 32", q->bits);
    int no_range = isnan(q->lo) && isnan(q->hi);
    if (no_range && q->bits == 0)
        return LW_OK;
    if (no_range)
        return lw_error_set(err, LW_ERR_ARGUMENT, "bits is %d but range is missing", q->bits);
    if (!isfinite(q->lo) || !isfinite(q->hi) || !(q->lo < q->hi))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "range is %g to %g; the first must be below the second, both finite",
                            q->lo, q->hi);
    double lsb = ldexp(q->hi - q->lo, -q->bits), steps = q->lo / lsb;
    if (q->bits > 0 && steps != rint(steps))
        return lw_error_set(
            err, LW_ERR_ARGUMENT,
            "range begins at %g, which is %.17g LSB of %g; a whole number is wanted", q->lo, steps,
            lsb);
    return LW_OK;
}

double lw_quantise(const lw_quantiser *q, double y, double *code)
{
    double c = (double)NAN;
    if (q->bits > 0) {
        double lsb = ldexp(q->hi - q->lo, -q->bits);
        double lowest = q->lo / lsb, highest = q->hi / lsb - 1;
        c = q->rounding == LW_ROUND_NEAREST ? rint(y / lsb) : floor(y / lsb);
        c = c < lowest ? lowest : c > highest ? highest : c;
        y = c * lsb;
    } else if (!isnan(q->lo)) {
        y = y < q->lo ? q->lo : y > q->hi ? q->hi : y;
    }
    if (code != NULL)
        *code = c;
    return y;
}
