// What to observe of a run: records and metrics. Observing changes no other byte of a run.
#ifndef LATEWOOD_WATCH_H
#define LATEWOOD_WATCH_H

#include <latewood/status.h>
#include <latewood/time.h>
#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_watch lw_watch;

LW_API lw_status lw_watch_new(lw_watch **out, lw_error *err);
LW_API void lw_watch_free(lw_watch *watch);

// Record a signal at instants, each the right limit: a rising list of n ticks, or (n = 0) every
// `every` from `from` to `until`. Columns: time, value.
typedef struct lw_record_def {
    const char *origin, *signal;
    int n;
    const lw_tick *at;
    lw_period every;
    lw_tick from, until;
    int64_t limit; // rows; reaching it ends the run with LW_ERR_CAPACITY. 0: 1,000,000
} lw_record_def;
LW_API lw_status lw_watch_record(lw_watch *watch, const lw_record_def *def, lw_error *err);

// Record every event of an adc, a dac, a loop or a comparator, by its name. Columns [s where a
// time]:
//   adc   sample, time (end of conversion), then for each channel input, value, code (input1,
//         value1, code1, ... where there are several)
//   dac   time, asked, limited, value, code, saturated - one row a write that reaches the output
//         (each latch edge with fresh data; each write where there is no latch)
//   loop  sample, time (of the step), written (NAN: lost), latency, job, then each output of the
//         law, then each state after the step
//   comparator  time (of the output's change), value (0 or 1), crossed (the instant of the crossing
//         itself, not rounded to a tick)
// A trip's begin and end are rows of its dac.
LW_API lw_status lw_watch_events(lw_watch *watch, const char *origin, const char *name,
                                 int64_t limit, lw_error *err);

// Times of the jobs of a task, each with mean, maximum and percentile.
#define LW_JOB_TIMES(X)                                                                            \
    X(LATENESS, "release lateness") /* nominal to actual release */                                \
    X(START, "start delay")         /* nominal release to start */                                 \
    X(RESPONSE, "response")         /* nominal release to finish */                                \
    X(EXECUTION, "execution")                                                                      \
    X(READ_TO_WRITE, "read to write")                                                              \
    X(DATA_AGE, "data age") /* sample to read */
#define LW_JOB_METRICS(X)                                                                          \
    X(LATENESS_MEAN, "release lateness mean")                                                      \
    X(LATENESS_MAXIMUM, "release lateness maximum")                                                \
    X(LATENESS_PERCENTILE, "release lateness percentile")                                          \
    X(START_MEAN, "start delay mean")                                                              \
    X(START_MAXIMUM, "start delay maximum")                                                        \
    X(START_PERCENTILE, "start delay percentile")                                                  \
    X(RESPONSE_MEAN, "response mean")                                                              \
    X(RESPONSE_MAXIMUM, "response maximum")                                                        \
    X(RESPONSE_PERCENTILE, "response percentile")                                                  \
    X(EXECUTION_MEAN, "execution mean")                                                            \
    X(EXECUTION_MAXIMUM, "execution maximum")                                                      \
    X(EXECUTION_PERCENTILE, "execution percentile")                                                \
    X(READ_TO_WRITE_MEAN, "read to write mean")                                                    \
    X(READ_TO_WRITE_MAXIMUM, "read to write maximum")                                              \
    X(READ_TO_WRITE_PERCENTILE, "read to write percentile")                                        \
    X(DATA_AGE_MEAN, "data age mean")                                                              \
    X(DATA_AGE_MAXIMUM, "data age maximum")                                                        \
    X(DATA_AGE_PERCENTILE, "data age percentile")                                                  \
    X(GAP, "gap between outputs") /* the largest, of a task's writes or a dac's fresh outputs */   \
    X(GAP_MEAN, "gap between outputs mean")                                                        \
    X(GAP_PERCENTILE, "gap between outputs percentile")                                            \
    X(JOBS, "jobs") /* finished */                                                                 \
    X(SKIPPED, "skipped jobs")                                                                     \
    X(ABORTED, "aborted jobs")                                                                     \
    X(MISSES_IN_A_ROW, "misses in a row")         /* the longest run of missed deadlines */        \
    X(MISSES_IN_WINDOW, "misses within a window") /* the most among `window` jobs in a row */

// X(name, in words)
#define LW_METRIC_LIST(X)                                                                          \
    X(MAXIMUM, "maximum") /* largest value of the signal */                                        \
    X(MINIMUM, "minimum")                                                                          \
    X(PEAK, "peak")              /* extreme farthest beyond the level, as a value */               \
    X(PEAK_TIME, "peak time")    /* its instant since `from` */                                    \
    X(OVERSHOOT, "overshoot")    /* (peak - level) / |level - base|, at least 0 */                 \
    X(SETTLING, "settling time") /* since `from`; NAN: outside the band at the end */              \
    X(RISE, "rise time")         /* low to high share of base..level; NAN: not reached */          \
    X(MEAN, "mean")                                                                                \
    X(RMS, "rms")                                                                                  \
    X(FINAL, "final") /* value at the end of the window */                                         \
    X(IAE, "iae")     /* integrals of the error against `against` */                               \
    X(ISE, "ise")                                                                                  \
    X(ITAE, "itae") /* time counts since `from` */                                                 \
    X(ERROR_RMS, "error rms")                                                                      \
    X(ERROR_PEAK, "error peak") /* largest |error| */                                              \
    X(RIPPLE, "ripple")         /* largest less least value */                                     \
    X(UNDERSHOOT, "undershoot") /* farthest beyond the base, away from the level, as overshoot */  \
    X(ITSE, "itse")             /* integral of time since `from` and squared error */              \
    X(MEAN_ERROR, "mean error")                                                                    \
    X(STEADY_ERROR, "steady-state error") /* mean error over the `last` part of the window */      \
    X(EFFORT, "control effort")           /* integral of the squared signal */                     \
    X(VARIATION, "total variation")       /* of the signal: its way up and down, jumps included */ \
    X(REVERSALS, "reversals")             /* turns of more than `step` */                          \
    X(CHATTER, "chatter")                 /* reversals a second */                                 \
    X(MASK_VIOLATION, "mask violation")   /* farthest outside the mask, 0 inside */                \
    X(MASK_TIME, "time outside mask")     /* [s] */                                                \
    X(MASK_FIRST, "first outside mask")   /* [s] since `from`; NAN: never */                       \
    X(OUTPUT_AGE, "output age") /* of a dac [s]: largest age of the sample that stands there */    \
    X(OUTPUT_AGE_MEAN, "output age mean") /* over time */                                          \
    X(OUTPUT_AGE_PERCENTILE,                                                                       \
      "output age percentile")            /* of the ages just before an output changes */          \
    X(SATURATION_TIME, "saturation time") /* of a dac [s] */                                       \
    /* of a loop or a task [s]: sample to write */                                                 \
    X(LATENCY_PERCENTILE, "latency percentile") /* by a histogram */                               \
    X(LATENCY_MEAN, "latency mean")                                                                \
    X(LATENCY_MAXIMUM, "latency maximum")                                                          \
    X(LOST, "lost")     /* writes of a loop or task that were lost */                              \
    X(MISSED, "missed") /* samples of a loop; deadlines of a task, skipped and aborted jobs too */ \
    LW_JOB_METRICS(X)

typedef enum lw_metric_kind {
#define LW_METRIC_ENUM(name, words) LW_METRIC_##name,
    LW_METRIC_LIST(LW_METRIC_ENUM)
#undef LW_METRIC_ENUM
} lw_metric_kind;

LW_API const char *lw_metric_words(lw_metric_kind kind);
LW_API int lw_metric_count(void);

// Metrics are those of the continuous signal: extremes, crossings and integrals between samples
// are found, not sampled.
typedef struct lw_metric_def {
    const char *origin, *name;
    lw_metric_kind kind;
    const char *of; // a signal; for saturation time and output age a dac; for latency, lost and
                    // missed a loop or a task; for times and counts of jobs a task
    const char *against; // signal the error is taken against (a source or a value), or NULL
    double level;        // level where against is NULL; NAN: none given
    double base; // level at the start; NAN: `against` at `from`, or the signal's value at `from`
                 // where that equals the level
    double band; // share of |level - base| for settling (default 0.02)
    double low, high;  // shares for rise (default 0.1, 0.9)
    double share;      // of a percentile, in (0, 1)
    double band_value; // settling: half the band as a value, in place of the share; NAN: none
    double low_value, high_value; // rise: levels in place of shares; NAN: none
    double step;                  // reversals: turns no larger than this are none (default 0)
    lw_tick last; // only the last part of the window counts, of this length, and is the window; 0:
                  // all of it, for steady-state error a tenth. Of a signal's metrics
    int n_mask;   // mask: corners, times [s] since `from` rising from 0
    const double *mask_time, *mask_low, *mask_high; // straight lines between; NAN: no limit there
    int64_t window;                                 // jobs of "misses within a window"
    lw_tick from, until;                            // window; LW_NEVER: the end of the run
} lw_metric_def;
LW_API lw_metric_def lw_metric_default(lw_metric_kind kind);
LW_API lw_status lw_watch_metric(lw_watch *watch, const lw_metric_def *def, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
