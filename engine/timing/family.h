// What a family of timings is: a small table of functions over a node of a tree.
#ifndef LATEWOOD_TIMING_FAMILY_H
#define LATEWOOD_TIMING_FAMILY_H

#include "timing/points.h"

#include <latewood/timing.h>

// Where a draw happens: address without stream, streams and state of the node at hand. A node
// takes its own share of both and passes the rest on.
typedef struct lw__draw_at {
    uint64_t seed, run;
    uint32_t job;
    const uint32_t *stream;
    double *state;
} lw__draw_at;

typedef struct lw__family {
    const char *name;
    // value of one job; moves at->stream and at->state past what the node used
    double (*draw)(const lw_timing *t, lw__draw_at *at);
    // value from uniforms, *u moved on; NULL: drawn only
    double (*quantile)(const lw_timing *t, const double **u);
    double (*cdf)(const lw_timing *t, double x);
    double (*density)(const lw_timing *t, double x);
    double (*moment)(const lw_timing *t, int order);
    void (*describe)(const lw_timing *t, char *text, int size);
    void (*cuts)(const lw_timing *t, lw__points *out);
    void (*points)(const lw_timing *t, const lw__how *how, lw__points *out);
} lw__family;

struct lw_timing {
    const lw__family *family;
    int references;
    int n_streams, n_state; // of the whole tree
    int n;                  // length of the lists
    double *value, *weight; // of lists; weight cumulated to 1
    double p[6];            // parameters of the family
    double lo, hi;          // support
    lw_timing *a, *b;
    int64_t every, phase; // of stalls
    int has_atoms, has_density;
};

#define LW__ONCE_A_RUN UINT32_MAX // job number of draws made once a run

// A node with its children held; NULL for lack of memory.
lw_timing *lw__timing_node(const lw__family *family, const lw_timing *a, const lw_timing *b);
// A time as one reads it: "50 us".
typedef struct lw__words_of_time {
    char text[32];
} lw__words_of_time;
lw__words_of_time lw__timing_words(double seconds);

lw_status lw__timing_give(lw_timing *t, lw_timing **out, lw_error *err);
lw_status lw__timing_bad(lw_error *err, const char *name, double value, const char *range);
double lw__timing_uniform_of(lw__draw_at *at); // takes one stream

// Inverse of the cdf by bisection on the support, to the last bit.
double lw__timing_invert(const lw_timing *t, double p);

#endif
