// The userdata of a run, and what rig:run is told to observe.
#ifndef LATEWOOD_BINDINGS_RUN_H
#define LATEWOOD_BINDINGS_RUN_H

#include "fields.h"

// User values: the rig; the snapshot of what its functions reach; the message of a function that
// ended the run.
#define RUN_RIG 1
#define RUN_SNAPSHOT 2
#define RUN_MESSAGE 3
#define RUN_USER_VALUES 3

typedef struct lw__lua_run {
    lw_watch *watch; // until frozen
    lw_frozen *frozen;
    lw_run *run;
    uint64_t seed, number;
    lw_tick lasts;
    int busy; // inside lw_run_advance
    int finished;
} lw__lua_run;

// The run at index 1, open.
lw__lua_run *lw__lua_run_self(lua_State *L);
// The rig at 1, frozen with the options at 2 (none: for a second); held by the stack's top.
const lw_frozen *lw__lua_rig_frozen(lua_State *L, const char *what);
// Place of a name in the records (metrics); raises with the nearest one.
int lw__lua_record_place(lua_State *L, const lw__lua_run *run, int index);
int lw__lua_metric_place(lua_State *L, const lw__lua_run *run, int index);
// Add the lists `record` and `metrics` of the table to the watch.
void lw__lua_watch_read(const lw__lua_reader *r, lw_watch *watch);

// The run that is being advanced in this Lua state, for lw.random, and how many runs are inside one
// another: a law may run another rig.
typedef struct lw__lua_present {
    const lw__lua_run *run;
    int depth;
} lw__lua_present;
lw__lua_present *lw__lua_present_of(lua_State *L);

#endif
