// What the constructors of plants share: the object, the one way to make it, wording of messages.
#ifndef LATEWOOD_PLANT_PLANT_H
#define LATEWOOD_PLANT_PLANT_H

#include "base/arena.h"

#include <latewood/modes.h>
#include <latewood/plant.h>

#define LW__PLANT_MAX_SHOWN (4 * LW_PLANT_MAX_PORTS) // outputs of a connection

// One block: the view, then what it points to.
struct lw_plant {
    lw_plant_view view;
    struct lw__flow *flow;   // NULL: no flow
    struct lw__modes *modes; // NULL: no modes
};

// What flows that are copies of each other share. Of a flow's view, C has a row of one 1 for an
// output that is a state, and D a 1 where an output follows an input without delay.
typedef struct lw__flow {
    lw_flow_def def; // first
    int references;
} lw__flow;
void lw__flow_release(lw__flow *flow);

// The definition of a plant with modes, shared likewise.
typedef struct lw__modes {
    lw_modes_def def; // first
    lw__arena *arena; // holds this and what it points to
    int references;
} lw__modes;
void lw__modes_release(lw__modes *modes);

// `part "tube": its plant is a flow; ...` for functions that need matrices.
lw_status lw__plant_refuse_flow(const lw_plant *plant, const char *what, const char *name,
                                lw_error *err);

// Make a checked copy of the plant that `from` describes. d, start, delay (zeros) and the lists of
// names (defaults) may be NULL; matrices without elements too.
lw_status lw__plant_make(const lw_plant_view *from, int most_outputs, lw_plant **out,
                         lw_error *err);

// `inductance is -1; permitted above 0`: LW_ERR_NOT_FINITE or LW_ERR_ARGUMENT is up to the caller.
lw_status lw__plant_bad(lw_status status, const char *field, double value, const char *permitted,
                        lw_error *err);

#endif
