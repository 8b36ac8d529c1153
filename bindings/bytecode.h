// What a Lua function assigns and which globals it reads, found in its bytecode (Lua 5.4).
#ifndef LATEWOOD_BINDINGS_BYTECODE_H
#define LATEWOOD_BINDINGS_BYTECODE_H

#include <lua.h>
#include <stddef.h>

typedef enum lw__lua_use {
    USE_SETS_UPVALUE, // assigns upvalue `upvalue` of the function
    USE_SETS_GLOBAL,  // assigns global `name`
    USE_GETS_GLOBAL   // reads global `name`
} lw__lua_use;

typedef struct lw__lua_found {
    lw__lua_use use;
    int upvalue; // from 1
    const char *name;
    size_t n_name; // its bytes
    int line;      // 0 where the function carries no lines
} lw__lua_found;

// Call `found` for each use in the function at `index` and in the functions nested in it. Locals of
// the function, also where a nested one assigns them, are not its upvalues. `found` may raise and
// leaves the stack as it was. Returns 0 where the bytecode is not that of a known Lua 5.4.
int lw__lua_scan(lua_State *L, int index, void (*found)(void *context, const lw__lua_found *use),
                 void *context);

#endif
