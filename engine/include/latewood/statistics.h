// Statistics of a batch: what n runs allow to be said, with bounds that hold without assuming a
// distribution wherever there are such bounds.
//
// Everything takes rows in the order of their index, so that a result does not depend on who
// computed them. `confidence` is between 0 and 1.
#ifndef LATEWOOD_STATISTICS_H
#define LATEWOOD_STATISTICS_H

#include <latewood/status.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef enum lw_side {
    LW_SIDE_BOTH,  // [lo, hi], each side errs with (1 - confidence) / 2
    LW_SIDE_LOWER, // only lo is bounded
    LW_SIDE_UPPER  // only hi is bounded
} lw_side;

typedef struct lw_interval {
    double lo, hi;
} lw_interval;

// ---- proportions: `hits` of `n`, 0 <= hits <= n, 1 <= n <= 2^53

// Exact bounds. Method: C. J. Clopper, E. S. Pearson, Biometrika 26 (1934) 404-413, by inverting
// the binomial tail; relative error below 1e-9 up to n = 1e8.
LW_API lw_status lw_proportion_exact(int64_t hits, int64_t n, double confidence, lw_side side,
                                     lw_interval *out, lw_error *err);
// Approximate bounds, shorter on average. Method: E. B. Wilson, J. Am. Stat. Assoc. 22 (1927)
// 209-212, without continuity correction.
LW_API lw_status lw_proportion_wilson(int64_t hits, int64_t n, double confidence, lw_side side,
                                      lw_interval *out, lw_error *err);

// Chance of at least `hits` among n of chance p each. Method: incomplete beta function as a
// continued fraction (Abramowitz and Stegun 26.5.8) with the density after C. Loader (2000).
LW_API double lw_binomial_at_least(int64_t hits, int64_t n, double p);

// ---- rates: `count` events within an exposure (hours of operation) above 0

// Exact bounds of the rate. Method: F. Garwood, Biometrika 28 (1936) 437-442.
LW_API lw_status lw_rate_exact(int64_t count, double exposure, double confidence, lw_side side,
                               lw_interval *out, lw_error *err);

// ---- quantiles without a distribution

// Quantile of sorted values, 0 < share < 1: the smallest value with at least that share at or
// below it.
LW_API double lw_sorted_quantile(int64_t n, const double *sorted, double share);
// Ranks (from 1) of the order statistics that bracket the quantile with at least `confidence`.
// Rank 0 or n + 1: that side is not bounded by so few values.
//   method  H. A. David, H. N. Nagaraja, Order Statistics, section 7.1 (from memory)
LW_API lw_status lw_quantile_ranks(int64_t n, double share, double confidence, lw_side side,
                                   int64_t *lo, int64_t *hi, lw_error *err);
// Chance that the quantile lies between the order statistics of ranks lo and hi.
LW_API double lw_quantile_coverage(int64_t n, double share, int64_t lo, int64_t hi);
// Runs needed so that the order-th largest value bounds `share` of all with `confidence`.
//   method  S. S. Wilks, Ann. Math. Stat. 12 (1941) 91-96
LW_API lw_status lw_tolerance_runs(double share, double confidence, int64_t order, int64_t *n,
                                   lw_error *err);

// ---- moments, gathered in extended precision

typedef struct lw_moments {
    int64_t n;
    double first;                               // about which sums are taken
    double sum[2], square[2], product[2], last; // product: of neighbours
    double lowest, highest;
    int64_t lowest_at, highest_at; // index as counted by add
} lw_moments;

LW_API lw_moments lw_moments_none(void);
LW_API void lw_moments_add(lw_moments *m, double x);
LW_API double lw_moments_mean(const lw_moments *m);      // NAN where n is 0
LW_API double lw_moments_deviation(const lw_moments *m); // of the sample (n - 1); NAN below 2
// Autocorrelation of neighbours, sum of products over sum of squares about the mean.
LW_API double lw_moments_neighbours(const lw_moments *m);
// Interval of the mean by Student's t; exact for normal values only, which is said where shown.
LW_API lw_status lw_mean_interval(const lw_moments *m, double confidence, lw_side side,
                                  lw_interval *out, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
