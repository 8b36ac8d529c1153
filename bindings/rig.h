// The userdata of a rig.
#ifndef LATEWOOD_BINDINGS_RIG_H
#define LATEWOOD_BINDINGS_RIG_H

#include "fields.h"

#include <latewood/sensor.h>

// User values: list of the laws and sources that call Lua; set of the origins given to the engine;
// periods of the adcs in seconds, by name; carriers of the pwms, by name.
#define RIG_CALLS 1
#define RIG_ORIGINS 2
#define RIG_PERIODS 3
#define RIG_CARRIERS 4
#define RIG_USER_VALUES 4

typedef struct lw__lua_rig {
    lw_rig *it;
} lw__lua_rig;

// The rig at index 1, open.
lw__lua_rig *lw__lua_rig_self(lua_State *L);
// Begin with the table at index 2: its name is read, its origin noted in the rig.
lw__lua_reader lw__lua_rig_read(lua_State *L, const char *what, const char **name);
// Raise what adding to the rig came to, or return the rig.
int lw__lua_rig_added(const lw__lua_reader *r, lw_status status, const lw_error *err);
// The clock that a thing takes from a carrier by `at` and `phase`; nothing where `at` is not there.
void lw__lua_carrier_clock(const lw__lua_reader *r, lw_period *every, double *offset);
// What stands before an adc: its fields analog and filter.
void lw__lua_read_front(const lw__lua_reader *r, lw_adc_front *front);
// Hold the object at `index` for as long as the rig: a run calls into it.
void lw__lua_rig_keep(lua_State *L, int index);
// Raise what the engine said about the rig at `rig`, at the line of the thing it names.
int lw__lua_rig_raise(lua_State *L, int rig, const lw_error *err);

#endif
