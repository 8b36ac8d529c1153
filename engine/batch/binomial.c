// Binomial tails and their inversion.
//
// Workload: a few inversions a verdict, each some hundred tails; a tail takes some sqrt(n) steps,
// 10^4 at n = 1e8.
//
// Invariants
// 1. A tail that cannot be had is NAN, and a bound found from it is an error, never a number.

#include "batch/binomial.h"

#include <latewood/elementary.h>

#include <float.h>
#include <math.h>

#define TWO_PI 6.283185307179586

// ---- density, after C. Loader, "Fast and accurate computation of binomial probabilities" (2000)

// log n! less Stirling's formula.
static double stirling_rest(double n)
{
    if (n < 16) {
        double factorial = 1;
        for (int k = 2; k <= (int)n; k++)
            factorial *= k;
        return n == 0 ? 0 : lw_log(factorial) - 0.5 * lw_log(TWO_PI * n) - n * lw_log(n) + n;
    }
    double q = 1 / (n * n);
    return (1.0 / 12 - q * (1.0 / 360 - q * (1.0 / 1260 - q * (1.0 / 1680 - q / 1188)))) / n;
}

// x log(x / m) - d with d = x - m, without cancellation near x = m.
static double deviance(double x, double m, double d)
{
    if (fabs(d) >= 0.1 * (x + m))
        return x * lw_log(x / m) - d;
    double v = d / (x + m), sum = d * v, term = 2 * x * v, before;
    int k = 1;
    do {
        term *= v * v;
        before = sum;
        sum += term / (2 * k++ + 1);
    } while (sum != before);
    return sum;
}

static double density(double k, double n, double p)
{
    double d = k - n * p; // for the others it is -d: n (1 - p) would lose digits of a small p
    if (k == 0)
        return lw_exp(n * lw_log1p(-p));
    if (k == n)
        return lw_exp(n * lw_log(p));
    double e = stirling_rest(n) - stirling_rest(k) - stirling_rest(n - k) - deviance(k, n * p, d) -
               deviance(n - k, n - n * p, -d);
    return lw_exp(e) * sqrt(n / (TWO_PI * k * (n - k)));
}

// ---- tail

// Continued fraction of the incomplete beta function, by the method of Lentz (1976) as modified by
// Thompson and Barnett (1986).
static double beta_fraction(double a, double b, double x)
{
    const double least = 1e-300;
    double c = 1, d = 1 - (a + b) * x / (a + 1);
    d = 1 / (fabs(d) < least ? least : d);
    double h = d, m = 1;
    for (; m < 1e7; m++) {
        for (int odd = 0; odd < 2; odd++) {
            double f = odd ? -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
                           : m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m));
            d = 1 + f * d;
            d = 1 / (fabs(d) < least ? least : d);
            c = 1 + f / c;
            c = fabs(c) < least ? least : c;
            h *= c * d;
        }
        if (fabs(c * d - 1) < 1e-15)
            return h;
    }
    return (double)NAN;
}

double lw_binomial_at_least(int64_t hits, int64_t n, double p)
{
    double a = (double)hits, b = (double)(n - hits) + 1;
    if (hits > n)
        return 0;
    if (hits <= 0 || p >= 1)
        return 1;
    if (p <= 0)
        return 0;
    double dense = density(a, (double)n, p), q = 1 - p;
    if (p <= (a + 1) / (a + b + 2))
        return dense * q * beta_fraction(a, b, p);
    return 1 - dense * a * q / b * beta_fraction(b, a, q);
}

// ---- inversion

double lw__invert(lw__rising f, const void *context, double lo, double hi, double wanted)
{
    for (int k = 0; k < 2000 && hi - lo > 2 * DBL_EPSILON * hi; k++) {
        double middle = lo > 0 && hi > 4 * lo ? sqrt(lo) * sqrt(hi) : lo + 0.5 * (hi - lo);
        double value = f(context, middle);
        if (isnan(value))
            return value;
        *(value < wanted ? &lo : &hi) = middle;
    }
    return lo + 0.5 * (hi - lo);
}

lw_status lw__confidence_check(double confidence, lw_error *err)
{
    if (confidence > 0 && confidence < 1)
        return LW_OK;
    return lw_error_set(err, LW_ERR_ARGUMENT, "confidence is %.12g; permitted between 0 and 1",
                        confidence);
}

double lw__tail(double confidence, lw_side side)
{
    return side == LW_SIDE_BOTH ? 0.5 * (1 - confidence) : 1 - confidence;
}

// ---- proportions

static lw_status check_counts(int64_t hits, int64_t n, double confidence, lw_error *err)
{
    if (n < 1 || n > INT64_C(9007199254740992))
        return lw_error_set(err, LW_ERR_ARGUMENT, "the number of runs is %lld; permitted 1 to 2^53",
                            (long long)n);
    if (hits < 0 || hits > n)
        return lw_error_set(err, LW_ERR_ARGUMENT, "the count is %lld; permitted 0 to %lld",
                            (long long)hits, (long long)n);
    return lw__confidence_check(confidence, err);
}

typedef struct count_of {
    int64_t hits, n;
} count_of;

static double at_least(const void *context, double p)
{
    const count_of *c = context;
    return lw_binomial_at_least(c->hits, c->n, p);
}

lw_status lw_proportion_exact(int64_t hits, int64_t n, double confidence, lw_side side,
                              lw_interval *out, lw_error *err)
{
    lw_status status = check_counts(hits, n, confidence, err);
    if (status != LW_OK)
        return status;
    double tail = lw__tail(confidence, side);
    lw_interval r = {0, 1};
    if (side != LW_SIDE_UPPER && hits > 0)
        r.lo = lw__invert(at_least, &(count_of){hits, n}, 0, 1, tail);
    // P(at most hits | p) = P(at least n - hits | 1 - p): solved for 1 - p, which may be small
    if (side != LW_SIDE_LOWER && hits < n) {
        if (2 * hits > n)
            r.hi = 1 - lw__invert(at_least, &(count_of){n - hits, n}, 0, 1, tail);
        else
            r.hi = lw__invert(at_least, &(count_of){hits + 1, n}, 0, 1, 1 - tail);
    }
    if (isnan(r.lo) || isnan(r.hi))
        return lw_error_set(err, LW_ERR_NOT_FINITE, "a bound of %lld in %lld was not found",
                            (long long)hits, (long long)n);
    *out = r;
    return LW_OK;
}

lw_status lw_proportion_wilson(int64_t hits, int64_t n, double confidence, lw_side side,
                               lw_interval *out, lw_error *err)
{
    lw_status status = check_counts(hits, n, confidence, err);
    if (status != LW_OK)
        return status;
    double m = (double)n, p = (double)hits / m;
    double z = -lw_normal_quantile(lw__tail(confidence, side)), zz = z * z / m;
    double centre = (p + 0.5 * zz) / (1 + zz);
    double half = z / (1 + zz) * sqrt(p * (1 - p) / m + zz / (4 * m));
    *out = (lw_interval){side == LW_SIDE_UPPER || hits == 0 ? 0 : centre - half,
                         side == LW_SIDE_LOWER || hits == n ? 1 : centre + half};
    return LW_OK;
}
