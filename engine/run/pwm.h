// A frozen pwm: carrier, legs, cells.
#ifndef LATEWOOD_RUN_PWM_H
#define LATEWOOD_RUN_PWM_H

#include "run/crossing.h"
#include "run/freezer.h"
#include "run/state.h"

#define LW__PWM_LEGS 2

typedef struct lw__pwm {
    const lw__pwm_item *item;
    const char *name;
    const lw__dac *dac; // its register and what was taken over
    lw__drives drives;
    lw_period stretch; // grid: a period, of a triangle half of one
    lw_tick offset;
    double seconds;         // of the carrier's period
    int n_legs, per_period; // stretches in a period
    lw_tick dead;
    double least; // share of a period
    lw__reference supply, current;
    // peak-current control
    int by_peak, search_op;
    lw__reference measured, wanted_current;
    lw__condition condition; // measured - wanted
    lw_tick blanking;
    int log; // record of edges, -1
    // cells
    int level, duty;               // doubles
    int count;                     // integers: stretches so far
    int state, wanted, moved;      // integers, a leg each: high; what it goes to; 1:
                                   // it has switched in this stretch
    int timer, edge[LW__PWM_LEGS]; // timers
    int written_op;
    int tripped; // integer cell: trips that hold its level; -1: none can
} lw__pwm;

// Cells first, so that others may read the outputs; then what pwms refer to.
lw_status lw__freeze_pwm_cells(lw__freezer *w);
lw_status lw__freeze_pwms(lw__freezer *w);
// Level at time zero, and the plant input it drives.
double lw__pwm_first(const lw__pwm_item *item);
// Operations (pwm_ops.c).
// Give the output what it should have: the mean, or what its legs are at.
void lw__pwm_mean(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_legs(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_stretch(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_edge(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_written(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_search(LW__CONTEXT, const lw__pwm *m);
void lw__pwm_start(lw__lane *s, const lw__pwm *m);
void lw__pwms_describe(const lw_frozen *z, void (*say)(void *context, const char *text),
                       void *context);

#endif
