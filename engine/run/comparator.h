// Frozen comparators and trips, and what runs keep of them.
#ifndef LATEWOOD_RUN_COMPARATOR_H
#define LATEWOOD_RUN_COMPARATOR_H

#include "run/crossing.h"
#include "run/pwm.h"

#define LW__EDGES_IN_FLIGHT 64 // crossings within the delay of a comparator
#define LW__CHATTER_EDGES 1000 // in a row, each within LW__CHATTER_TIME of the one before
#define LW__CHATTER_TIME 1000  // ticks

typedef struct lw__comparator {
    const lw__comparator_item *item;
    const char *name;
    lw__reference of, against;
    lw__condition condition; // of - level
    int side;                // +1: output 1 above, -1: below
    double hysteresis, start;
    lw_tick delay, blanking;
    int timer, delay_timer; // next crossing found; next change of the output where it is delayed
    int search_op;
    // cells
    int out, found, queue_at;         // doubles: output; instant of the crossing found, of those
                                      // in flight [s]
    int beyond, known, blind_until;   // integers: before the delay; set at time zero
    int crossed_at, in_a_row;         // tick of the last crossing, quick ones so far
    int queue, head, count, n_events; // ticks of changes in flight; crossings so far
    lw__set rises, falls;             // trips
    lw__set after;                    // what names it as its trigger
    lw__set observers;
    int log;
} lw__comparator;

typedef struct lw__trip {
    const lw__trip_item *item;
    const char *name;
    const lw__comparator *by;
    lw__dac *dac;
    lw__pwm *pwm; // where the output is one; dac is then its register
    lw_tick time;
    int timer;   // LW_TRIP_TIME, else -1
    int active;  // integer cell: 1 while it holds the output, 2 past its time
    int n_trips; // integer cell: how often
} lw__trip;

// Cells first, so that others may read the outputs; then what comparators and trips refer to.
lw_status lw__freeze_event_cells(lw__freezer *w);
lw_status lw__freeze_events(lw__freezer *w);
// Cells at time zero.
void lw__events_start(lw__lane *s);
// Operations (event_ops.c).
void lw__event_search(LW__CONTEXT, const lw__comparator *c);
void lw__event_cross(LW__CONTEXT, const lw__comparator *c);
void lw__event_edge(LW__CONTEXT, const lw__comparator *c);
void lw__event_trip(LW__CONTEXT, const lw__trip *t);
void lw__event_release(LW__CONTEXT, const lw__trip *t);
void lw__event_latch(LW__CONTEXT, const lw__trip *t);
void lw__events_describe(const lw_frozen *z, void (*say)(void *context, const char *text),
                         void *context);

#endif
