// What constructors of plants share across files.
#ifndef LATEWOOD_BINDINGS_PLANT_H
#define LATEWOOD_BINDINGS_PLANT_H

#include "call.h"

// User values of a plant that is a flow in Lua: its prepared call, the functions side by side; the
// list of names that messages use.
#define PLANT_CALL 1
#define PLANT_NAMES 2
#define PLANT_USER_VALUES 2

// Read the field `delay` and lay it over the plant.
void lw__lua_plant_delays(const lw__lua_reader *r, lw__lua_plant *box);

#endif
