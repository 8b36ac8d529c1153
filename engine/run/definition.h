// What adding a definition to a rig takes: checks of one field, copies into the rig's arena.
#ifndef LATEWOOD_RUN_DEFINITION_H
#define LATEWOOD_RUN_DEFINITION_H

#include "run/rig.h"

#define LW__TRY(call)                                                                              \
    do {                                                                                           \
        lw_status try_ = (call);                                                                   \
        if (try_ != LW_OK)                                                                         \
            return try_;                                                                           \
    } while (0)

// ---- checks; each failure names origin, thing, field, value and range

typedef struct lw__subject {
    const char *origin, *what, *name;
    lw_error *err;
} lw__subject;

lw_status lw__bad_field(const lw__subject *s, const char *field, double value, const char *range);
lw_status lw__check_finite(const lw__subject *s, const char *field, double value);
lw_status lw__check_at_least_0(const lw__subject *s, const char *field, double value);
lw_status lw__check_time(const lw__subject *s, const char *field, double value);
lw_status lw__check_period(const lw__subject *s, const char *field, lw_period period);
// A name that nothing in the rig has yet.
lw_status lw__check_new_name(const lw_rig *rig, const char *origin, const char *what,
                             const char *name, lw_error *err);

// Wires of a law: its ports, each input wired once.
lw_status lw__check_law_wires(const lw__subject *s, const lw_law *of, int n_in, const lw_wire *in,
                              int n_out, const lw_wire *out);

// ---- copies

// Copies into the rig's arena; a failure is noted once and looked at at the end.
typedef struct lw__copier {
    lw__arena *arena;
    int failed;
} lw__copier;

const char *lw__copy_text(lw__copier *c, const char *text);
void *lw__copy_bytes(lw__copier *c, const void *from, size_t size);
const double *lw__copy_numbers(lw__copier *c, int n, const double *from);
const char *const *lw__copy_texts(lw__copier *c, int n, const char *const *from);
const lw_wire *lw__copy_wires(lw__copier *c, int n, const lw_wire *from);
// Room for one more item of `size` bytes; lists grow by doubling. NULL: no memory.
void *lw__room(void **list, int n, size_t size);
lw_status lw__no_room(const char *origin, lw_error *err);

#endif
