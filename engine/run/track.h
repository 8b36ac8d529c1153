// Tracks: one signal followed through a window, piece by piece, for the metrics taken of it.
#ifndef LATEWOOD_RUN_TRACK_H
#define LATEWOOD_RUN_TRACK_H

#include "run/motion.h"

// What the metrics of a track need beyond its plain sums.
typedef enum lw__need {
    LW__NEED_EXTREMES = 1,
    LW__NEED_MEAN = 2,
    LW__NEED_SQUARE = 4,
    LW__NEED_ABSOLUTE = 8,
    LW__NEED_TIMED = 16,
    LW__NEED_ERROR_SQUARE = 32,
    LW__NEED_ERROR_PEAK = 64,
    LW__NEED_OWN = 128 // a metric of its own reads each piece
} lw__need;

// A signal over a stretch as polynomials in s from 0 to 1.
typedef struct lw__piece {
    double y[LW__POLY_MAX + 1], e[LW__POLY_MAX + 1]; // signal, and signal less wanted
    int degree;
    double begin, length; // since `from` [s]
} lw__piece;

// Sums of a track: doubles from `sums` on.
typedef enum lw__sum {
    LW__SUM_MAXIMUM,
    LW__SUM_MAXIMUM_AT, // since `from` [s]
    LW__SUM_MINIMUM,
    LW__SUM_MINIMUM_AT,
    LW__SUM_VALUE,
    LW__SUM_SQUARE,
    LW__SUM_ABSOLUTE,
    LW__SUM_TIMED,
    LW__SUM_ERROR_SQUARE,
    LW__SUM_ERROR_PEAK,
    LW__SUM_FINAL,  // value of the signal at the end of the last piece
    LW__SUM_WANTED, // and of what it is taken against
    LW__SUM_BASE,
    LW__SUM_SECONDS, // length of the window so far
    LW__N_SUMS
} lw__sum;

typedef struct lw__track {
    const char *name;          // of the signal, for messages
    lw__reference of, against; // against: a constant where nothing is named
    const char *against_name;
    double level; // at the end; NAN: not known before the end
    double base;  // NAN: found when the window opens
    lw_tick from, until;
    int needs, timer;
    lw_tick piece; // longest stretch one polynomial serves
    int degree;
    int n_x, n_u; // of the group where `of` is a row
    // cells
    int x, u, held, wanted, sums; // doubles
    int began, open;              // integers; open: 0 not yet, 1 open, 2 closed
    // where a signal is a row of a group with a motion: its pieces come as that moves
    const lw__group *moving;
    int done; // integer: tick up to which they were taken
} lw__track;

// A metric: a reading of a track, or of a loop's latencies.
typedef struct lw__metric {
    lw_metric_def def;
    int track; // -1: of a loop, or of jobs
    int loop;
    int task, dac, job_time; // of jobs (job_metric.h), -1
    const lw__dac *aged;     // of the age of its output, NULL
    double lo, per_cell;     // histogram of latencies: cells over the timing's support
    int own;                 // doubles: latencies and ages: sum, count or weight, largest; others
                             // as metric_piece.c has it
    int cells;               // integers: histogram
} lw__metric;

#define LW__CELLS 1000
#define LW__N_OWN 4
#define LW__NOT_YET (-1.0)

void lw__track_update(lw__lane *s, int track);
void lw__track_finish(lw__lane *s, int track);
void lw__outputs_finish(lw__lane *s);
// An accepted stretch of the group that the track follows; all of them up to the present tick were
// given.
void lw__track_stretch(lw__lane *s, int track, const lw__stretch *stretch);
void lw__track_done(lw__lane *s, int track);
void lw__track_latency(lw__lane *s, int loop, lw_tick latency);
// A fresh value at a dac's output: what stood there stood since `before`, from the sample of
// `sampled` (below 0: none yet).
void lw__track_output(lw__lane *s, const lw__dac *dac, lw_tick before, lw_tick sampled);

// Cells of a metric at time zero.
void lw__metric_start(lw__lane *s, const lw__metric *m);
// What metrics of their own read off a piece, and what they come to (metric_piece.c).
void lw__metric_piece(lw__lane *s, const lw__metric *m, const lw__track *t, const lw__piece *p);
double lw__metric_own(const lw__lane *s, const lw__metric *m, const lw__track *t, double seconds);
// Where a polynomial turns, in (0, 1).
int lw__turning_points(int degree, const double *c, double *roots);
double lw__metric_value(const lw__lane *s, int metric);

#endif
