// What the constructors of plants share: the object, the one way to make it, wording of messages.
#ifndef LATEWOOD_PLANT_PLANT_H
#define LATEWOOD_PLANT_PLANT_H

#include <latewood/plant.h>

#define LW__PLANT_MAX_SHOWN (4 * LW_PLANT_MAX_PORTS) // outputs of a connection

// One block: the view, then what it points to.
struct lw_plant {
    lw_plant_view view;
};

// Make a checked copy of the plant that `from` describes. d, start, delay (zeros) and the lists of
// names (defaults) may be NULL; matrices without elements too.
lw_status lw__plant_make(const lw_plant_view *from, int most_outputs, lw_plant **out,
                         lw_error *err);

// `inductance is -1; permitted above 0`: LW_ERR_NOT_FINITE or LW_ERR_ARGUMENT is up to the caller.
lw_status lw__plant_bad(lw_status status, const char *field, double value, const char *permitted,
                        lw_error *err);

#endif
