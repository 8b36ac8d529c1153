// A linear plant as it is kept: one allocation with all matrices, names beside it.
#ifndef LATEWOOD_PLANT_PLANT_H
#define LATEWOOD_PLANT_PLANT_H

#include <latewood/plant.h>

#define LW__PLANT_MAX_OUTPUTS (4 * LW_PLANT_MAX_PORTS) // of a composition

struct lw_plant {
    lw_plant_view view;
    double *numbers; // all matrices
    char **names;    // states, inputs, outputs
};

// Sizes and matrices with the limits of a composition; names may be NULL.
lw_status lw__plant_make(int most_outputs, const lw_plant_view *from, lw_plant **out,
                         lw_error *err);

#endif
