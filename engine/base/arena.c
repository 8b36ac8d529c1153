// Arena: a chain of blocks, each at least twice the one before.
//
// Invariants
// 1. Pieces are aligned to 64 bytes and zeroed; they never move.

#include "base/arena.h"

#include "base/alloc.h"

#include <stdint.h>
#include <string.h>

#define ALIGNMENT 64
#define FIRST_BLOCK 4096

typedef struct block {
    struct block *before;
    size_t used, room;   // bytes of `data`
    unsigned char *data; // aligned
} block;

struct lw__arena {
    block *last;
};

lw__arena *lw__arena_new(void)
{
    return lw__alloc(sizeof(lw__arena));
}

static block *grow(lw__arena *arena, size_t n_bytes)
{
    size_t room = arena->last != NULL ? 2 * arena->last->room : FIRST_BLOCK;
    room = room < n_bytes ? n_bytes : room;
    block *b = lw__alloc(sizeof *b + room + ALIGNMENT);
    if (b == NULL)
        return NULL;
    uintptr_t at = (uintptr_t)(b + 1);
    *b = (block){arena->last, 0, room, (unsigned char *)(b + 1) + (ALIGNMENT - at % ALIGNMENT)};
    arena->last = b;
    return b;
}

void *lw__arena_get(lw__arena *arena, size_t n_bytes)
{
    if (n_bytes > SIZE_MAX / 4)
        return NULL;
    n_bytes = (n_bytes + ALIGNMENT - 1) / ALIGNMENT * ALIGNMENT;
    n_bytes = n_bytes > 0 ? n_bytes : ALIGNMENT;
    block *b = arena->last;
    if (b == NULL || b->room - b->used < n_bytes)
        b = grow(arena, n_bytes);
    if (b == NULL)
        return NULL;
    void *piece = b->data + b->used;
    b->used += n_bytes;
    return piece;
}

char *lw__arena_text(lw__arena *arena, const char *text)
{
    size_t size = strlen(text) + 1;
    char *copy = lw__arena_get(arena, size);
    if (copy != NULL)
        memcpy(copy, text, size);
    return copy;
}

void lw__arena_free(lw__arena *arena)
{
    if (arena == NULL)
        return;
    for (block *b = arena->last; b != NULL;) {
        block *before = b->before;
        lw__free(b);
        b = before;
    }
    lw__free(arena);
}
