// Order statistics: quantiles with bounds that hold for any distribution, and sample sizes.

#include "batch/binomial.h"

#include <math.h>

double lw_sorted_quantile(int64_t n, const double *sorted, double share)
{
    if (n < 1)
        return (double)NAN;
    double rank = ceil(share * (double)n);
    int64_t k = rank < 1 ? 1 : rank > (double)n ? n : (int64_t)rank;
    return sorted[k - 1];
}

// With X the number of values below the quantile, binomial(n, share):
// the k-th smallest is at or below it where X >= k, above it where X < k.
double lw_quantile_coverage(int64_t n, double share, int64_t lo, int64_t hi)
{
    double from_lo = lo < 1 ? 1 : lw_binomial_at_least(lo, n, share);
    double from_hi = hi > n ? 0 : lw_binomial_at_least(hi, n, share);
    return from_lo - from_hi;
}

// Largest k in 0..n + 1 with P(X >= k) >= chance.
static int64_t largest_rank(int64_t n, double share, double chance)
{
    int64_t low = 0, high = n + 1;
    while (high - low > 1) {
        int64_t middle = low + (high - low) / 2;
        *(lw_binomial_at_least(middle, n, share) >= chance ? &low : &high) = middle;
    }
    return low;
}

lw_status lw_quantile_ranks(int64_t n, double share, double confidence, lw_side side, int64_t *lo,
                            int64_t *hi, lw_error *err)
{
    if (n < 1 || !(share > 0 && share < 1))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "share is %.12g of %lld values; between 0 and 1 of at least one value "
                            "is wanted",
                            share, (long long)n);
    lw_status status = lw__confidence_check(confidence, err);
    if (status != LW_OK)
        return status;
    double tail = lw__tail(confidence, side);
    *lo = side == LW_SIDE_UPPER ? 0 : largest_rank(n, share, 1 - tail);
    // smallest k with P(X >= k) <= tail
    int64_t low = 0, high = n + 1;
    while (high - low > 1) {
        int64_t middle = low + (high - low) / 2;
        *(lw_binomial_at_least(middle, n, share) <= tail ? &high : &low) = middle;
    }
    *hi = side == LW_SIDE_LOWER ? n + 1 : high;
    return LW_OK;
}

lw_status lw_tolerance_runs(double share, double confidence, int64_t order, int64_t *n,
                            lw_error *err)
{
    if (!(share > 0 && share < 1) || order < 1 || order > 1000000)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "share is %.12g, order %lld; between 0 and 1, and 1 to 1000000, are "
                            "permitted",
                            share, (long long)order);
    lw_status status = lw__confidence_check(confidence, err);
    if (status != LW_OK)
        return status;
    const int64_t most = INT64_C(1) << 40;
    int64_t low = order - 1, high = order;
    while (lw_binomial_at_least(order, high, 1 - share) < confidence) {
        low = high;
        high *= 2;
        if (high > most)
            return lw_error_set(err, LW_ERR_CAPACITY, "more than 2^40 runs would be needed");
    }
    while (high - low > 1) {
        int64_t middle = low + (high - low) / 2;
        *(lw_binomial_at_least(order, middle, 1 - share) >= confidence ? &high : &low) = middle;
    }
    *n = high;
    return LW_OK;
}
