// The law of a loop or task, and the signals on its inputs and outputs.
#ifndef LATEWOOD_BINDINGS_WIRES_H
#define LATEWOOD_BINDINGS_WIRES_H

#include "fields.h"
#include "law.h"

#include <latewood/rig.h>

#define LW__LUA_INPUT_NAMES (LW_LAW_MAX_PORTS + 4)

// Field "law", held by the rig at index 1 where it calls Lua.
lw__lua_law *lw__lua_law_field(const lw__lua_reader *r);
// Names under which inputs may be stated: those of the law, and the common part of numbered ones;
// a law whose input has the name of one of the `fields` is refused.
int lw__lua_input_names(const lw__lua_reader *r, const lw_law_def *law, int n_fields,
                        const lw__lua_field *fields, const char **names);
lw_wire *lw__lua_inputs(const lw__lua_reader *r, const lw_law_def *law, int n_names,
                        const char *const *names, int *n);
// Field "output": one name or a list.
lw_wire *lw__lua_outputs(const lw__lua_reader *r, const lw_law_def *law, int *n);

#endif
