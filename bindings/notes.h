// Where the functions of lw.math that have kinks note what they switch on, while a flow runs.
//
// A notebook a Lua state, held by the registry and by each noting function as its upvalue.
#ifndef LATEWOOD_BINDINGS_NOTES_H
#define LATEWOOD_BINDINGS_NOTES_H

#include <lua.h>

typedef struct lw__lua_notes {
    double *at; // NULL: nobody asks
    int n;      // noted so far, also beyond room
    int room;
    const double *sides; // room: the side to take of each, -1 or 1; 0, or NULL: as it is
} lw__lua_notes;

// The notebook of this state, made when first asked for, pushed on the stack.
lw__lua_notes *lw__lua_notes_of(lua_State *L);

#endif
