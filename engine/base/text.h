// Checks of text: UTF-8 and names.
#ifndef LATEWOOD_BASE_TEXT_H
#define LATEWOOD_BASE_TEXT_H

#include <latewood/status.h>
#include <stddef.h>

// Length of the character at the head of the n > 0 bytes; 0 if it is not well formed (RFC 3629).
size_t lw__utf8_character(const char *s, size_t n);
// Nonzero if the n bytes are well-formed UTF-8.
int lw__utf8_valid(const char *s, size_t n);
// Largest count <= n of bytes of `s` that does not cut a character.
size_t lw__utf8_cut(const char *s, size_t n);
// A name: 1 to 200 bytes, UTF-8, no control characters, no dot unless allowed. `what` is the thing
// that bears it, for the message.
lw_status lw__name_check(const char *what, const char *name, int allow_dot, lw_error *err);

#endif
