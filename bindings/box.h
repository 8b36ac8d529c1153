// What every file of the module shares: userdata that own engine objects, messages that begin with
// the user's line, and the list of the functions registered in module.c.
//
// Workload: constructors, a few hundred calls a rig; nothing here is on the path of a run.
//
// Invariants
// 1. An engine object is taken only into a box that is already on the stack, so an error raised at
//    any later point leaves it to the collector.
// 2. Memory handed to the engine during a call is a userdata or a string on the stack of that call.
// 3. No raising function of Lua is called from inside an engine call.
#ifndef LATEWOOD_BINDINGS_BOX_H
#define LATEWOOD_BINDINGS_BOX_H

#include <latewood/law.h>
#include <latewood/plant.h>
#include <latewood/rig.h>
#include <latewood/run.h>
#include <latewood/status.h>
#include <latewood/timing.h>
#include <lauxlib.h>
#include <lua.h>

#define LW__LUA_PLANT "latewood.plant"
#define LW__LUA_SOURCE "latewood.source"
#define LW__LUA_TIMING "latewood.timing"
#define LW__LUA_LAW "latewood.law"
#define LW__LUA_RIG "latewood.rig"
#define LW__LUA_RUN "latewood.run"
#define LW__LUA_INT "latewood.int"

typedef struct lw__lua_plant {
    lw_plant *it;
} lw__lua_plant;

typedef struct lw__lua_timing {
    lw_timing *it;
} lw__lua_timing;

typedef struct lw__lua_int {
    lua_Integer value;
} lw__lua_int;

// ---- messages

// Push and return where the user's code stands ("mount.lua:14"): the innermost Lua function that
// is not of a shipped module. "" where there is none.
const char *lw__lua_origin(lua_State *L);
// Raise `origin: message`; the message alone where the origin is empty.
int lw__lua_fail_at(lua_State *L, const char *origin, const char *format, ...);
// The same at the user's line.
int lw__lua_fail(lua_State *L, const char *format, ...);
// Raise what the engine said. Text that begins with `origin` already is not given it again.
int lw__lua_raise(lua_State *L, const char *origin, const lw_error *err);
// Push `text` in quotes, long text cut short at a whole character.
const char *lw__lua_quote(lua_State *L, const char *text);
// Push what stands at `index`, as messages show a value: "a table", nan, "5 V" in quotes.
const char *lw__lua_shown(lua_State *L, int index);

// ---- boxes

// A zeroed userdata of `size` bytes and class `name`, on the stack.
void *lw__lua_new(lua_State *L, const char *name, size_t size, int n_user_values);
// The object at `index`; raises where it is no `name` (`what` in words, "a plant"; `field` says
// where it was found).
void *lw__lua_check(lua_State *L, int index, const char *name, const char *field, const char *what);
// Room for n elements of `size`, zeroed, owned by a userdata on the stack.
void *lw__lua_room(lua_State *L, size_t n, size_t size);
// Push a list of texts, or of numbers; return 1.
int lw__lua_push_names(lua_State *L, int n, const char *const *names);
int lw__lua_push_numbers(lua_State *L, int n, const double *v);
// A string without embedded zero bytes; raises with `field` otherwise.
const char *lw__lua_text(lua_State *L, int index, const char *field);

#endif
