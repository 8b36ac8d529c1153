// The userdata of a source.
#ifndef LATEWOOD_BINDINGS_SOURCE_H
#define LATEWOOD_BINDINGS_SOURCE_H

#include "box.h"

// User values: the numbers of a table; the prepared call of a Lua function.
#define SOURCE_NUMBERS 1
#define SOURCE_CALL 2
#define SOURCE_USER_VALUES 2

typedef struct lw__lua_source {
    lw_source_def def;
} lw__lua_source;

#endif
