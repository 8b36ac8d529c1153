// A Lua function prepared to be called from inside a run.
//
// Workload: once a period of a loop, or once a tick of a source's clock; a call pushes numbers,
// calls, reads numbers, and allocates nothing of its own.
//
// Invariants
// 1. The function runs on a thread of its own under lua_pcall, so nothing it raises passes through
//    the engine. What it raised is kept in `error` for the run that ends by it.
// 2. Thread and function are held by the user value of the call's userdata, never by the registry.
// 3. Between calls the thread's stack holds `top` values: the function, then what its owner keeps.
#ifndef LATEWOOD_BINDINGS_CALL_H
#define LATEWOOD_BINDINGS_CALL_H

#include "fields.h"

#define CALL_FUNCTION 1 // its place on the thread's stack

typedef struct lw__lua_call {
    lua_State *thread;
    int top;
    int busy;       // the function is running
    lw_error error; // LW_OK until a call failed
} lw__lua_call;

// A userdata of `size` bytes that begins with a lw__lua_call, on the stack: the function at
// `function`, room for n_slots values above it.
void *lw__lua_call_new(lua_State *L, int function, size_t size, int n_slots);
// Raise unless the value at `index` is a Lua function that changes nothing but its own locals.
void lw__lua_call_check(const lw__lua_reader *r, const char *field, int index);

// Keep a message, clear the thread's stack down to `top`, return 1: what the thread's function
// raised (on top of its stack); that it returned the value at `index` in place of `what`, or a
// number that is not whole; that it was called from inside itself.
int lw__lua_call_failed(lw__lua_call *call);
int lw__lua_call_returned(lw__lua_call *call, int index, const char *what);
int lw__lua_call_not_whole(lw__lua_call *call, double value, const char *what);
int lw__lua_call_again(lw__lua_call *call);

#endif
