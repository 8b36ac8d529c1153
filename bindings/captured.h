// What a function of a run can reach beyond its parameters: it may read that, and not change it.
//
// Two checks. Before: assignments to upvalues and globals, found in the bytecode. After: every
// table and function reachable from it, compared with a copy made when the run was.
#ifndef LATEWOOD_BINDINGS_CAPTURED_H
#define LATEWOOD_BINDINGS_CAPTURED_H

#include "fields.h"

// Raise, at the line of the assignment, if the function at `index` or a function that it captures
// assigns an upvalue or a global.
void lw__lua_refuse_assignments(const lw__lua_reader *r, const char *field, int index);

// Push an empty snapshot; add what the function at `function` reaches.
void lw__lua_snapshot_new(lua_State *L);
void lw__lua_snapshot_add(lua_State *L, int snapshot, int function);
// NULL, or what has changed since, on the stack.
const char *lw__lua_snapshot_compare(lua_State *L, int snapshot);

// The table at `index`, of a library, counts as constant: it is not looked into.
void lw__lua_keep_constant(lua_State *L, int index);

#endif
