// White noise on a group: what is drawn at each of its anchors.
#ifndef LATEWOOD_RUN_WHITE_H
#define LATEWOOD_RUN_WHITE_H

#include "run/freezer.h"
#include "run/state.h"

typedef struct lw__white {
    const lw__noise_item *item;
    int n; // plant states of the group
    int n_steps;
    struct lw__white_step {
        lw_tick length;
        const double *factor; // n x n, lower: square root of the covariance over the length
    } step[3];                // of the grid, and from time zero to its first instant
    const uint32_t *streams;  // n
} lw__white;

lw_status lw__freeze_white(lw__freezer *w);
// At an instant of the anchor grid, when the anchor has moved.
void lw__white_kick(lw__lane *s, const lw__group *g);
void lw__white_describe(const lw_frozen *z, void (*say)(void *context, const char *text),
                        void *context);

#endif
