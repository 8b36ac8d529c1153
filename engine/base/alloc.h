// The one place memory comes from, so that tests can make it run out.
#ifndef LATEWOOD_BASE_ALLOC_H
#define LATEWOOD_BASE_ALLOC_H

#include <stddef.h>

void *lw__alloc(size_t n_bytes); // zeroed; NULL on failure
void *lw__realloc(void *p, size_t n_bytes);
void lw__free(void *p);

// Test hook: the n-th allocation from now on and all later ones fail; n < 0: off.
void lw__alloc_fail_after(long n);

#endif
