// Metrics of jobs: distributions of their times, misses, and gaps between outputs.
#ifndef LATEWOOD_RUN_JOB_METRIC_H
#define LATEWOOD_RUN_JOB_METRIC_H

#include "run/freezer.h"
#include "run/schedule.h"
#include "run/track.h"

// Times of a job, in the order of LW_JOB_TIMES (watch.h), then that between its writes.
typedef enum lw__job_time {
#define LW__JOB_TIME_ENUM(name, words) LW__JOB_##name,
    LW_JOB_TIMES(LW__JOB_TIME_ENUM)
#undef LW__JOB_TIME_ENUM
        LW__JOB_LATENCY,
    LW__JOB_GAP,
    LW__JOB_NO_TIME // counts
} lw__job_time;

// Whether `def` is of a task, a frame, or of the gaps of a dac; then its metric is set up.
int lw__job_metric_concerns(const lw__freezer *w, const lw_metric_def *def);
lw_status lw__job_metric_freeze(lw__freezer *w, lw__metric *m);
void lw__job_metric_start(lw__lane *s, const lw__metric *m);
double lw__job_metric_value(const lw__lane *s, const lw__metric *m);

// A histogram of times from integer cell `cells` on, beside sum, count and largest in `own`.
#define LW__TIME_FIRST_OCTAVE 10
#define LW__TIME_OCTAVES 42
#define LW__TIME_PER_OCTAVE 512
#define LW__TIME_CELLS (LW__TIME_OCTAVES * LW__TIME_PER_OCTAVE + 1) // the first: below 2^10 ps
void lw__time_take(lw__lane *s, const lw__metric *m, lw_tick time);
double lw__time_percentile(const lw__lane *s, const lw__metric *m);

#endif
