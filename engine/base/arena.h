// A growing arena: memory taken piece by piece and given back at once.
#ifndef LATEWOOD_BASE_ARENA_H
#define LATEWOOD_BASE_ARENA_H

#include <stddef.h>

typedef struct lw__arena lw__arena;

lw__arena *lw__arena_new(void);                        // NULL on failure
void *lw__arena_get(lw__arena *arena, size_t n_bytes); // zeroed, 64-byte aligned; NULL on failure
char *lw__arena_text(lw__arena *arena, const char *text);
void lw__arena_free(lw__arena *arena); // NULL is allowed

#endif
