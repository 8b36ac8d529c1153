// Memory. The counter of the test hook is the library's only global; outside tests it stays off.

#include "base/alloc.h"

#include <stdlib.h>

static long remaining = -1;

void lw__alloc_fail_after(long n)
{
    remaining = n;
}

static int refused(void)
{
    if (remaining > 0)
        remaining--;
    return remaining == 0;
}

void *lw__alloc(size_t n_bytes)
{
    return refused() ? NULL : calloc(1, n_bytes > 0 ? n_bytes : 1);
}

void *lw__realloc(void *p, size_t n_bytes)
{
    return refused() ? NULL : realloc(p, n_bytes > 0 ? n_bytes : 1);
}

void lw__free(void *p)
{
    free(p);
}
