// Samples: the values of one metric over the runs of a point.
#ifndef LATEWOOD_BINDINGS_PROGRAM_SAMPLE_H
#define LATEWOOD_BINDINGS_PROGRAM_SAMPLE_H

#include <latewood/ledger.h>
#include <latewood/statistics.h>
#include <lua.h>

// Values by run, NAN where undefined or where the run ended early; runs rise.
typedef struct lw__program_sample {
    int64_t n, room, n_undefined;
    int64_t *run;
    double *value, *sorted; // sorted: defined values, made when first asked for
    int failed;             // memory ran out
} lw__program_sample;

// A sample on top of the stack, empty.
lw__program_sample *lw__program_sample_new(lua_State *L);
// Take up one value; nonzero: no memory.
int lw__program_sample_add(lw__program_sample *s, int64_t run, double value);
// Read "both", "lower" or "upper" at `index`.
lw_side lw__program_side(lua_State *L, int index);
// Register the class; leaves nothing.
void lw__program_sample_class(lua_State *L);

#endif
