// Moments in one pass, in double-double about the first value; bounds of means and of rates.

#include "batch/binomial.h"

#include "base/dd.h"

#include <latewood/elementary.h>

#include <gsl/gsl_cdf.h>
#include <gsl/gsl_errno.h>
#include <gsl/gsl_sf_gamma.h>
#include <math.h>

// ---- moments

lw_moments lw_moments_none(void)
{
    return (lw_moments){.lowest = (double)INFINITY, .highest = -(double)INFINITY};
}

static void gather(double *sum, lw__dd term)
{
    lw__dd s = lw__dd_add((lw__dd){sum[0], sum[1]}, term);
    sum[0] = s.hi;
    sum[1] = s.lo;
}

void lw_moments_add(lw_moments *m, double x)
{
    if (m->n == 0)
        m->first = m->last = x;
    lw__dd d = lw__dd_two_sum(x, -m->first), before = lw__dd_two_sum(m->last, -m->first);
    gather(m->sum, d);
    gather(m->square, lw__dd_mul(d, d));
    if (m->n > 0)
        gather(m->product, lw__dd_mul(d, before));
    if (x < m->lowest) {
        m->lowest = x;
        m->lowest_at = m->n;
    }
    if (x > m->highest) {
        m->highest = x;
        m->highest_at = m->n;
    }
    m->last = x;
    m->n++;
}

double lw_moments_mean(const lw_moments *m)
{
    if (m->n == 0)
        return (double)NAN;
    lw__dd mean = lw__dd_div((lw__dd){m->sum[0], m->sum[1]}, lw__dd_from_double((double)m->n));
    return lw__dd_to_double(lw__dd_add(mean, lw__dd_from_double(m->first)));
}

// Sum of squares about the mean.
static lw__dd about_mean(const lw_moments *m)
{
    lw__dd sum = {m->sum[0], m->sum[1]};
    lw__dd share = lw__dd_div(lw__dd_mul(sum, sum), lw__dd_from_double((double)m->n));
    return lw__dd_sub((lw__dd){m->square[0], m->square[1]}, share);
}

double lw_moments_deviation(const lw_moments *m)
{
    if (m->n < 2)
        return (double)NAN;
    return sqrt(fmax(lw__dd_to_double(about_mean(m)), 0) / (double)(m->n - 1));
}

// sum (x_i - a)(x_(i+1) - a) = sum of products - a (2 S - first - last) + (n - 1) a^2, all about
// the first value, a the mean.
double lw_moments_neighbours(const lw_moments *m)
{
    double squares = m->n > 1 ? lw__dd_to_double(about_mean(m)) : 0;
    if (!(squares > 0))
        return (double)NAN;
    lw__dd sum = {m->sum[0], m->sum[1]}, n = lw__dd_from_double((double)m->n);
    lw__dd a = lw__dd_div(sum, n), last = lw__dd_two_sum(m->last, -m->first);
    lw__dd both = lw__dd_sub(lw__dd_scale(sum, 2), last);
    lw__dd r = lw__dd_sub((lw__dd){m->product[0], m->product[1]}, lw__dd_mul(a, both));
    r = lw__dd_add(r, lw__dd_mul(lw__dd_mul(a, a), lw__dd_from_double((double)(m->n - 1))));
    return lw__dd_to_double(r) / squares;
}

// ---- bounds

static double student(const void *context, double t)
{
    return gsl_cdf_tdist_P(t, *(const double *)context);
}

lw_status lw_mean_interval(const lw_moments *m, double confidence, lw_side side, lw_interval *out,
                           lw_error *err)
{
    lw_status status = lw__confidence_check(confidence, err);
    if (status != LW_OK)
        return status;
    if (m->n < 2)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "an interval of a mean takes at least 2 values; there are %lld",
                            (long long)m->n);
    double freedom = (double)(m->n - 1), mean = lw_moments_mean(m);
    double t = lw__invert(student, &freedom, 0, 1e9, 1 - lw__tail(confidence, side));
    double half = t * lw_moments_deviation(m) / sqrt((double)m->n);
    *out = (lw_interval){side == LW_SIDE_UPPER ? -(double)INFINITY : mean - half,
                         side == LW_SIDE_LOWER ? (double)INFINITY : mean + half};
    return LW_OK;
}

// Chance of at least `count` events where the mean is x: the incomplete gamma function.
static double events(const void *context, double x)
{
    gsl_sf_result r;
    gsl_error_handler_t *before = gsl_set_error_handler_off();
    int failed = gsl_sf_gamma_inc_P_e(*(const double *)context, x, &r);
    gsl_set_error_handler(before);
    return failed ? (double)NAN : r.val;
}

lw_status lw_rate_exact(int64_t count, double exposure, double confidence, lw_side side,
                        lw_interval *out, lw_error *err)
{
    lw_status status = lw__confidence_check(confidence, err);
    if (status != LW_OK)
        return status;
    if (count < 0 || !(exposure > 0 && isfinite(exposure)))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "%lld events within %.12g; a count from 0 on and an exposure above 0 "
                            "are wanted",
                            (long long)count, exposure);
    double tail = lw__tail(confidence, side), k = (double)count, next = k + 1;
    double reach = 100 + 20 * next - 20 * lw_normal_quantile(tail) * sqrt(next);
    lw_interval r = {0, (double)INFINITY};
    if (side != LW_SIDE_UPPER && count > 0)
        r.lo = lw__invert(events, &k, 0, reach, tail) / exposure;
    if (side != LW_SIDE_LOWER)
        r.hi = lw__invert(events, &next, 0, reach, 1 - tail) / exposure;
    if (isnan(r.lo) || isnan(r.hi))
        return lw_error_set(err, LW_ERR_NOT_FINITE, "a bound of a rate was not found");
    *out = r;
    return LW_OK;
}
