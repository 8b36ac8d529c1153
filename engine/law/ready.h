// What the ready laws share: limits, names of ports, the way from a parameter to a law.
#ifndef LATEWOOD_LAW_READY_H
#define LATEWOOD_LAW_READY_H

#include <latewood/law.h>

#include <stddef.h>

// One body serves a step, its lanes and the steps specialised by constant arguments.
#if defined(__GNUC__)
#define LW__LAW_BODY static inline __attribute__((always_inline))
#else
#define LW__LAW_BODY static inline
#endif

// Where there is no limit: -infinity and infinity, so that a step has nothing to ask.
typedef struct lw__limits {
    double lo, hi;
} lw__limits;

// u within the limits; not a number stays so and ends the run.
LW__LAW_BODY double lw__limited(lw__limits limits, double u)
{
    double above = u < limits.lo ? limits.lo : u;
    return above > limits.hi ? limits.hi : above;
}

LW__LAW_BODY int lw__beyond(lw__limits limits, double u)
{
    return u < limits.lo || u > limits.hi;
}

// Messages name the field; whoever has a name for the law puts it before them.
lw_status lw__law_limits(double lo, double hi, lw__limits *out, lw_error *err);
lw_status lw__law_field(const char *field, double value, lw_error *err);
lw_status lw__law_bad(const char *field, double value, const char *permitted, lw_error *err);

// Names built one after the other.
typedef struct lw__ports {
    int n;
    const char *name[LW_LAW_MAX_STATES];
    char text[LW_LAW_MAX_STATES][24];
} lw__ports;

// Add `count` names: stem1, stem2, ...; a single one has no number unless `numbered`.
void lw__ports_add(lw__ports *ports, const char *stem, int count, int numbered);

// A cleared parameter block, or NULL with the message set.
void *lw__law_param(size_t n_bytes, lw_error *err);
// Make the law that `def` describes; `param` is from lw__law_param and is the law's from now on,
// or freed.
lw_status lw__law_finish(lw_law_def *def, void *param, lw_law **out, lw_error *err);

#endif
