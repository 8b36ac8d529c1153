// lw.statistics: what values of many runs allow to be said.
//
// sample(list)  of numbers, run 0 first; nan where undefined
//   methods  n(), undefined(), mean(), deviation(), lowest(), highest() (value and run),
//            mean_interval(confidence, side), quantile(share), quantile_interval(share,
//            confidence, side) (-inf, inf where n is too small), minus(other): a sample of the
//            differences run by run; at(k): run and value
// proportion(hits, n, confidence, side), rate(count, exposure, confidence, side): lo, hi
// tolerance_runs(share, confidence, order)
// side: "both", "lower", "upper"
#ifndef LATEWOOD_BINDINGS_STATISTICS_H
#define LATEWOOD_BINDINGS_STATISTICS_H

#include <latewood/ledger.h>
#include <latewood/statistics.h>
#include <lua.h>

// Values by run, NAN where undefined or where the run ended early; runs rise.
typedef struct lw__lua_sample {
    int64_t n, room, n_undefined;
    int64_t *run;
    double *value, *sorted; // sorted: defined values, made when first asked for
    int failed;             // memory ran out
} lw__lua_sample;

// A sample on top of the stack, empty.
lw__lua_sample *lw__lua_sample_new(lua_State *L);
// Take up one value; nonzero: no memory.
int lw__lua_sample_add(lw__lua_sample *s, int64_t run, double value);
// Read "both", "lower" or "upper" at `index`.
lw_side lw__lua_side(lua_State *L, int index);
// Register the class; leaves nothing.
void lw__lua_sample_class(lua_State *L);

#endif
