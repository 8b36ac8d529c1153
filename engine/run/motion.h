// How a group moves that is not one linear system: nonlinear flows, circuits with modes.
//
// A group without a motion goes by its kernel. A group with one has own events: its samples, its
// input changes, the corners of moving sources that drive it, its grid, and what it does to itself.
// At each of them it moves its anchor to the present tick by `advance`; nothing else moves it. On
// the way it hands every stretch it has accepted to those who watch (lw__observe), in order of
// time. Whoever looks in between gets a trial: the same arithmetic into scratch, nothing stored.
#ifndef LATEWOOD_RUN_MOTION_H
#define LATEWOOD_RUN_MOTION_H

#include "run/poly.h"
#include "run/state.h"

// A stretch over which every row of the group is a polynomial.
typedef struct lw__stretch {
    const lw__group *group;
    lw_tick anchor;    // times count from here
    double begin, end; // [s] since the anchor, end > begin
    // Coefficients of a row in s = (t - begin) / (end - begin), constant first; the degree, at most
    // LW__POLY_MAX.
    int (*row)(const struct lw__stretch *stretch, int row, double *c);
    const void *context;
} lw__stretch;

typedef void (*lw__take_stretch)(void *context, const lw__stretch *stretch);

struct lw__motion {
    const char *name;
    double tolerance; // share of a signal's size by which a trial and an advance may differ
    // Cells of its own at time zero.
    void (*start)(lw__lane *s, const lw__group *g);
    // Move the anchor to s->now; every stretch goes to lw__observe, then lw__observed is called. A
    // failure ends the lane by lw__end_lane_at. The cells are those of s->width lanes.
    void (*advance)(lw__lane *s, const lw__group *g);
    // Told after an advance, when an input has its new value or a source has turned its corner.
    void (*changed)(lw__lane *s, const lw__group *g);
    // One row at s->now, by trial where the anchor stands earlier; NAN where the trial fails.
    double (*row)(const lw__lane *s, const lw__group *g, int row);
    // A trial from the anchor to s->now, its stretches to `take`; 0, or the failure with its
    // instant and words.
    lw_status (*look)(const lw__lane *s, const lw__group *g, lw__take_stretch take, void *context,
                      lw_tick *at, const char **text);
    // Lines for `describe`.
    void (*describe)(const lw__group *g, void (*say)(void *context, const char *text),
                     void *context);
};

// End the lane by what a group did to itself at a tick up to s->now.
static inline void lw__end_lane_at(lw__lane *s, lw_tick at, lw_status status, const char *what,
                                   const char *text)
{
    if (s->status == LW_OK)
        s->now = at < s->now ? at : s->now;
    lw__end_lane(s, status, what, text);
}

// Hand an accepted stretch to the tracks and records of the group; then say that all up to s->now
// has been handed over. Instants of records before `limit` are served.
void lw__observe(lw__lane *s, const lw__stretch *stretch, lw_tick limit);
void lw__observed(lw__lane *s, const lw__group *g, lw_tick limit);
// At the end of a run: trials bring tracks and records of every such group up to s->now.
void lw__observe_end(lw__lane *s);

#endif
