// Timings: random or replayed durations, in seconds.
//
// A lw_timing is an immutable tree, shared by reference count. Every timing is bounded: the
// unbounded families take a truncation. A draw is a pure function of address, parameters and (for
// timings with memory) a small state advanced once a job number.
#ifndef LATEWOOD_TIMING_H
#define LATEWOOD_TIMING_H

#include <latewood/draw.h>
#include <latewood/status.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_timing lw_timing;

LW_API lw_timing *lw_timing_hold(const lw_timing *timing); // one more reference
LW_API void lw_timing_free(lw_timing *timing);             // one less; NULL is allowed

// Families. Errors name parameter, value and range. All in seconds; values may be negative unless
// the user of the timing forbids it (lw_timing_support tells).
LW_API lw_status lw_timing_constant(double value, lw_timing **out, lw_error *err);
LW_API lw_status lw_timing_uniform(double lo, double hi, lw_timing **out, lw_error *err);
LW_API lw_status lw_timing_triangular(double lo, double mode, double hi, lw_timing **out,
                                      lw_error *err);
// Normal, cut to [lo, hi] (NAN: mean -+ 4 deviations) and renormalised.
LW_API lw_status lw_timing_normal(double mean, double deviation, double lo, double hi,
                                  lw_timing **out, lw_error *err);
// shift + exp(normal(log(median), sigma)), cut at `hi` (NAN: the 1 - 1e-6 quantile).
LW_API lw_status lw_timing_log_normal(double median, double sigma, double shift, double hi,
                                      lw_timing **out, lw_error *err);
// shift + exponential of mean `mean`, cut at `hi` (NAN: the 1 - 1e-6 quantile).
LW_API lw_status lw_timing_exponential(double shift, double mean, double hi, lw_timing **out,
                                       lw_error *err);
// Gumbel of maxima: location - scale log(-log u), cut to [lo, hi] (NAN: 1e-6 and 1 - 1e-6
// quantiles).
LW_API lw_status lw_timing_gumbel(double location, double scale, double lo, double hi,
                                  lw_timing **out, lw_error *err);
// Value i with weight w[i] >= 0 (NULL: equal), sum > 0.
LW_API lw_status lw_timing_discrete(int n, const double *value, const double *weight,
                                    lw_timing **out, lw_error *err);
// Uniform within bins: edge[0..n], weight[0..n-1].
LW_API lw_status lw_timing_histogram(int n, const double *edge, const double *weight,
                                     lw_timing **out, lw_error *err);
// Element (start + job) mod n of a recorded list; start 0, or (random_start) one draw a run.
LW_API lw_status lw_timing_replay(int n, const double *value, int random_start, lw_timing **out,
                                  lw_error *err);
// One duration a line of plain text, in `scale` seconds ("us" = 1e-6); blank lines and lines
// beginning with # or ; are skipped. Errors name file, line, text. Constant memory but the list.
LW_API lw_status lw_timing_replay_file(const char *path, double scale, int random_start,
                                       lw_timing **out, lw_error *err);
// Quiet and burst modes: a two-state chain over job numbers, starting quiet; enter and leave are
// probabilities a job, in [0, 1].
LW_API lw_status lw_timing_modes(const lw_timing *quiet, const lw_timing *burst, double enter,
                                 double leave, lw_timing **out, lw_error *err);
// Usually `usual`; with probability `chance` a job, `usual + stall`. With `every` > 0 the stall
// comes at jobs phase, phase + every, ... instead (chance ignored); phase < 0: one draw a run.
LW_API lw_status lw_timing_stall(const lw_timing *usual, const lw_timing *stall, double chance,
                                 int64_t every, int64_t phase, lw_timing **out, lw_error *err);
// Arithmetic: independent sum and maximum; factor * t + shift.
LW_API lw_status lw_timing_sum(const lw_timing *a, const lw_timing *b, lw_timing **out,
                               lw_error *err);
LW_API lw_status lw_timing_maximum(const lw_timing *a, const lw_timing *b, lw_timing **out,
                                   lw_error *err);
LW_API lw_status lw_timing_affine(const lw_timing *t, double factor, double shift, lw_timing **out,
                                  lw_error *err);

// What runs use. `state` holds lw_timing_n_state doubles (0 for timings without memory), zeroed at
// the start of a run; it is advanced by one job a call, so a timing with memory is drawn once for
// every job number in order, skipped ones included. Further uniforms of one draw use the streams
// of "name#1", "name#2", ..., which the caller prepares: stream[0 .. lw_timing_n_streams - 1].
LW_API int lw_timing_n_streams(const lw_timing *t);
LW_API int lw_timing_n_state(const lw_timing *t);
LW_API double lw_timing_draw(const lw_timing *t, uint64_t seed, uint64_t run, uint32_t job,
                             const uint32_t *stream, double *state);
// Value from given uniforms (n_streams of them), for timings without memory or replay.
LW_API double lw_timing_quantile(const lw_timing *t, const double *u);

// What analysis uses: of one job's value in the long run (stationary mode probabilities, replay as
// its list taken at random). Support is exact. cdf, density and quantile_of of sums and maxima are
// by quadrature (1e-9). moment: raw moment, order 1..4. nodes: n-point quadrature with sum of
// weights 1, exact expectation for polynomials of degree 2 n - 1 where the family allows it.
LW_API void lw_timing_support(const lw_timing *t, double *lo, double *hi);
LW_API double lw_timing_cdf(const lw_timing *t, double x);
LW_API double lw_timing_density(const lw_timing *t, double x); // 0 at atoms
LW_API double lw_timing_median(const lw_timing *t);
LW_API double lw_timing_moment(const lw_timing *t, int order);
LW_API lw_status lw_timing_nodes(const lw_timing *t, int n, double *x, double *weight,
                                 lw_error *err);
// One line in words ("uniform 6 us to 11 us"), truncated to `size`.
LW_API void lw_timing_describe(const lw_timing *t, char *text, int size);
// NaN, or the constant if the timing is one.
LW_API double lw_timing_as_constant(const lw_timing *t);

#ifdef __cplusplus
}
#endif
#endif
