// The userdata of a control law.
#ifndef LATEWOOD_BINDINGS_LAW_H
#define LATEWOOD_BINDINGS_LAW_H

#include "call.h"

// User value of a law that is a Lua function: its prepared call.
#define LAW_CALL 1
#define LAW_USER_VALUES 1

typedef struct lw__lua_law {
    lw_law *it;
    lw__lua_call *call; // NULL where the law is no Lua function
} lw__lua_law;

lw__lua_law *lw__lua_law_new(lua_State *L);

// Raise, at the law's own line, if its arrays hold more than their elements: what a step keeps
// beside them would pass from run to run.
void lw__lua_own_check(lua_State *L, const lw__lua_call *call);

#endif
