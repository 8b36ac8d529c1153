// The Lua modules of scripts/latewood/ that the program carries inside itself.
//
// The build makes the list from the files (scripts/embed.sh); only the program is linked with it.
#ifndef LATEWOOD_BINDINGS_SHIPPED_H
#define LATEWOOD_BINDINGS_SHIPPED_H

#include <stddef.h>

typedef struct lw__shipped {
    const char *name;          // as `require` is given it: "latewood.study"
    const char *file;          // where it came from, for messages: "scripts/latewood/study.lua"
    const unsigned char *text; // Lua source, followed by a zero that does not count
    size_t n_bytes;
} lw__shipped;

// Ends with an entry whose name is NULL.
extern const lw__shipped lw__shipped_modules[];

#endif
