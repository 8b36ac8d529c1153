// What a host of the Lua module needs: the opening function, and what it may leave in the
// registry.
//
// The module sets no globals and runs in any Lua 5.4 state. Its parts written in Lua are required
// as "latewood.NAME" when first indexed (lw.study requires "latewood.study"), through the global
// `require` as it stood when the module was opened.
#ifndef LATEWOOD_BINDINGS_LATEWOOD_LUA_H
#define LATEWOOD_BINDINGS_LATEWOOD_LUA_H

#include <lua.h>

// Registry key of a string that begins the chunk name of every shipped Lua module
// ("@scripts/latewood/"). Messages then name the user's line, not a line of those modules. Where
// a host sets none, the folder in which `require` finds the first of them is taken.
#define LATEWOOD_SCRIPTS "latewood.scripts"

// Registry key of a function that turns the path of a data file, as a study wrote it, into the
// path to open, or returns nil and a reason. Where a host sets none, paths are taken as written.
#define LATEWOOD_RESOLVE "latewood.resolve"

// Leaves the module table on the stack and returns 1. May raise (memory).
LUAMOD_API int luaopen_latewood(lua_State *L);

#endif
