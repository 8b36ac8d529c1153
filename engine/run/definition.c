// What adding a definition to a rig takes: checks of one field with the message that names it, and
// copies into the rig's arena.

#include "run/definition.h"

#include "base/alloc.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

lw_status lw__fail_at(const char *origin, lw_error *err, lw_status status, const char *format, ...)
{
    char text[LW_ERROR_TEXT];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    lw_error_set(err, status, "%s", text);
    return lw__blame(origin, err, status);
}

lw_status lw__blame(const char *origin, lw_error *err, lw_status status)
{
    if (origin != NULL && origin[0] != 0 && status < 0)
        lw_error_prefix(err, "%s: ", origin);
    return status;
}

// ---- copies

// Room for one more item of `size` bytes; the lists grow by doubling.
void *lw__room(void **list, int n, size_t size)
{
    if ((n & (n - 1)) == 0) {
        void *grown = lw__realloc(*list, size * (size_t)(n == 0 ? 1 : 2 * n));
        if (grown == NULL)
            return NULL;
        *list = grown;
    }
    return (char *)*list + size * (size_t)n;
}

const char *lw__copy_text(lw__copier *c, const char *text)
{
    if (text == NULL)
        return NULL;
    const char *copy = lw__arena_text(c->arena, text);
    c->failed |= copy == NULL;
    return copy;
}

void *lw__copy_bytes(lw__copier *c, const void *from, size_t size)
{
    if (from == NULL)
        return NULL;
    void *copy = lw__arena_get(c->arena, size + 1);
    if (copy != NULL)
        memcpy(copy, from, size);
    c->failed |= copy == NULL;
    return copy;
}

const double *lw__copy_numbers(lw__copier *c, int n, const double *from)
{
    return lw__copy_bytes(c, from, sizeof(double) * (size_t)n);
}

const char *const *lw__copy_texts(lw__copier *c, int n, const char *const *from)
{
    const char **copy = lw__copy_bytes(c, from, sizeof *from * (size_t)n);
    for (int i = 0; copy != NULL && i < n; i++)
        copy[i] = lw__copy_text(c, from[i]);
    return copy;
}

const lw_wire *lw__copy_wires(lw__copier *c, int n, const lw_wire *from)
{
    lw_wire *copy = lw__copy_bytes(c, from, sizeof *from * (size_t)n);
    for (int i = 0; copy != NULL && i < n; i++) {
        copy[i].port = lw__copy_text(c, from[i].port);
        copy[i].signal = lw__copy_text(c, from[i].signal);
    }
    return copy;
}

lw_status lw__no_room(const char *origin, lw_error *err)
{
    return lw__fail_at(origin, err, LW_ERR_MEMORY, "no memory for a rig's definitions");
}

// ---- checks of one field

lw_status lw__bad_field(const lw__subject *s, const char *field, double value, const char *range)
{
    return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT, "%s \"%s\": %s is %.12g; %s", s->what,
                       s->name, field, value, range);
}

lw_status lw__check_finite(const lw__subject *s, const char *field, double value)
{
    return isfinite(value) ? LW_OK : lw__bad_field(s, field, value, "a finite number is wanted");
}

lw_status lw__check_at_least_0(const lw__subject *s, const char *field, double value)
{
    return isfinite(value) && value >= 0 ? LW_OK
                                         : lw__bad_field(s, field, value, "permitted from 0 on");
}

lw_status lw__check_time(const lw__subject *s, const char *field, double value)
{
    lw_tick tick;
    if (!isfinite(value) || value < 0 || lw_tick_from_seconds(value, &tick) != LW_OK)
        return lw__bad_field(s, field, value, "a time from 0 to 9e6 s is wanted");
    return LW_OK;
}

lw_status lw__check_period(const lw__subject *s, const char *field, lw_period period)
{
    if (period.num <= 0 || period.den <= 0 || period.num < period.den)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "%s \"%s\": %s is missing or below one tick of 1 ps", s->what, s->name,
                           field);
    return LW_OK;
}
