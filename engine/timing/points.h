// A timing as points with weights: what cdfs of sums, moments and nodes are summed over.
#ifndef LATEWOOD_TIMING_POINTS_H
#define LATEWOOD_TIMING_POINTS_H

#include <latewood/timing.h>

// Of points: `sure` marks an atom. Of cuts: a place where the cdf jumps or kinks, rather than one
// that only keeps pieces short enough.
typedef struct lw__point {
    double x, weight;
    int sure;
} lw__point;

typedef struct lw__points {
    lw__point *p;
    int n, room, failed; // failed: memory could not be had
} lw__points;

typedef struct lw__how {
    const lw__points *cuts; // where what is summed kinks; NULL: nowhere
    int parts;              // equal parts that each piece is split into
    int n_nodes;            // > 0: polynomials of degree 2 n_nodes - 1 are all that is summed
} lw__how;

void lw__points_add(lw__points *list, double x, double weight, int sure);
void lw__points_free(lw__points *list);
// Cuts of a timing with density: bounds and a grid of quantiles.
void lw__smooth_cuts(const lw_timing *t, lw__points *out);
// Gauss-Legendre between the cuts; each piece keeps its probability.
void lw__smooth_points(const lw_timing *t, const lw__how *how, lw__points *out);
// Of a sum of independent timings: cuts, at most a few hundred.
void lw__sum_cuts(const lw_timing *t, lw__points *out);
// Raw moment, order 1 to 4; NaN for lack of memory.
double lw__points_moment(const lw_timing *t, int order);

#endif
