// The edges of an encoder whose speed is taken by time: when they come, on the exact solution.
#ifndef LATEWOOD_RUN_EDGES_H
#define LATEWOOD_RUN_EDGES_H

#include "run/crossing.h"
#include "run/state.h"

typedef struct lw__edges {
    const lw__edges_item *item;
    const char *name; // of the encoder
    const lw__adc *adc;
    lw__condition condition; // the angle against 0
    double per_count;        // angle of a count
    int n;                   // edges between two stamps that are compared
    int timer, search_op;
    // cells
    int span, steps, last;       // doubles, signals: [s] between the last stamp and the one n
                                 // edges before, counts within it, [s] the last stamp
    int count, known, direction; // integers: floor of the angle; -1 or +1, of the next edge
    int stamps, places;          // integers, n + 1 each, newest first: of edges; which edge it was
    int n_edges, edge_at, quick; // integers: so far; tick of the last one; quick ones in a row
    lw__set observers;
} lw__edges;

// Cells first, so that others may read them; then the angle.
lw_status lw__freeze_edges_cells(lw__freezer *w);
lw_status lw__freeze_edges(lw__freezer *w);
void lw__edges_start(lw__lane *s);
// Operations.
void lw__edges_search(LW__CONTEXT, const lw__edges *e); // phase 8: where the next edge is
void lw__edges_come(LW__CONTEXT, const lw__edges *e);   // phase 0: it is here

#endif
