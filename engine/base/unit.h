// Units as text: what they scale by, exactly, and how quantities are called.
#ifndef LATEWOOD_BASE_UNIT_H
#define LATEWOOD_BASE_UNIT_H

#include <latewood/quantity.h>

// One of it is factor / divisor * 10^power * pi^turns in SI base units.
typedef struct lw__unit {
    lw_dimension d;
    int power, turns;
    uint64_t factor, divisor;
    int n_hertz, n_angles; // powers of Hz, and of rad, deg and rpm together
} lw__unit;

extern const lw__unit lw__unit_none;

// Parse the text of a unit, at most 79 bytes. LW_ERR_UNIT names what is not known or ill-formed.
lw_status lw__unit_parse(const char *text, lw__unit *out, lw_error *err);

// Nonzero if a quantity in `given` may stand where one in `wanted` is wanted: same dimension, and
// neither is a number of turns where the other is an angle.
int lw__unit_fits(const lw__unit *given, const lw__unit *wanted);

// What a quantity in that unit is ("a time", "an angular frequency", "a quantity in m^3/s").
#define LW__UNIT_WORDS 80
const char *lw__unit_words(const lw__unit *unit, char buffer[LW__UNIT_WORDS]);
// An example of it ("5 ms"), or NULL.
const char *lw__unit_example(const lw__unit *unit);

#endif
