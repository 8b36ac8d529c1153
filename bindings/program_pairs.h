// pairs of the sandbox: walks a table in one order.
#ifndef LATEWOOD_BINDINGS_PROGRAM_PAIRS_H
#define LATEWOOD_BINDINGS_PROGRAM_PAIRS_H

#include <lua.h>

// pairs(t): 1 to #t, then the other numbers from the least, texts by bytes, false and true, and
// last, in no stated order, keys that have none. Entries that are nil when their turn comes are
// left out; new ones are not walked. Metamethod __pairs as in Lua's own.
int lw__program_pairs(lua_State *L);

#endif
