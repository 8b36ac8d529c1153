// The sandbox in which the program runs a study: what it sees, and what it may use.
#ifndef LATEWOOD_BINDINGS_PROGRAM_SANDBOX_H
#define LATEWOOD_BINDINGS_PROGRAM_SANDBOX_H

#include <lua.h>
#include <stddef.h>

#define LW__PROGRAM_MEMORY ((size_t)1 << 30)         // bytes
#define LW__PROGRAM_INSTRUCTIONS INT64_C(2000000000) // Lua instructions, see ..._allow_again

// Memory of a state, counted against the limit: the allocator's context.
typedef struct lw__budget {
    size_t used;
} lw__budget;
void *lw__program_allocate(void *budget, void *p, size_t old_size, size_t new_size);

// Open what shipped modules use, put the shipped modules where `require` finds them, and leave
// nothing on the stack. May raise.
void lw__program_open(lua_State *L);

// Run a study file inside the sandbox. Leaves one value and returns 0, or leaves a message and
// returns an exit code. Called inside a protected call.
int lw__program_study(lua_State *L, const char *path);

// Push the list of { kind, name, path } of the files that the study is made of so far: "study",
// "module", "data".
void lw__program_inputs(lua_State *L);

// Begin another stretch: the file of the study, the building of one rig and each run may use the
// instructions anew. Once they were used up nothing brings them back.
void lw__program_allow_again(lua_State *L);

// Nonzero once the instructions are used up.
int lw__program_exhausted(lua_State *L);

#endif
