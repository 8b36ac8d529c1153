// Quantities: SI numbers or text with a unit ("50 us", "20 kHz", "2 mH", "0.05 N m/A", "37 %").
//
// Text is: a decimal number, an optional space, a unit. A unit is a product of unit names, each
// with an optional SI prefix (f p n u m c k M G T, and the two signs for micro) and an optional
// ^integer from -6 to 6, joined by a space, `*` or a middle dot, with at most one `/` followed by
// the divisor (a product); nothing before the `/` stands for 1 ("5 /s", "1/s"). Names: s min h m g
// A K Hz N Pa J W V ohm (and the Greek letter) H F C T Wb S rad deg rpm; degC is not one; 1 stands
// for no unit; min, h, deg and rpm take no prefix. Timing units of their own: "cycles" (of a core's
// clock), "%" (of a period, or a share), "sample"/"samples" (of an adc's period). These take no
// prefix and stand alone.
// Angles count as dimensionless radians; deg and rpm scale. But Hz and an angle never stand for
// each other: where Hz is wanted "40 rad/s" is refused, and "50 Hz" where rad/s is.
#ifndef LATEWOOD_QUANTITY_H
#define LATEWOOD_QUANTITY_H

#include <latewood/status.h>
#include <latewood/time.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef enum lw_unit_kind {
    LW_UNIT_SI,      // value is in SI base units, dimension says which
    LW_UNIT_CYCLES,  // value counts cycles
    LW_UNIT_PERCENT, // value is the fraction: "37 %" gives 0.37
    LW_UNIT_SAMPLES  // value counts samples
} lw_unit_kind;

// Exponents of m, kg, s, A, K.
typedef struct lw_dimension {
    signed char m, kg, s, a, k;
} lw_dimension;

typedef struct lw_quantity {
    double value; // nearest double to the exact decimal in SI
    lw_unit_kind kind;
    lw_dimension dimension;
    // The same value as an exact fraction num/den when it fits 63 bits each (den > 0), else den =
    // 0.
    int64_t num, den;
} lw_quantity;

// Parse `text`. LW_ERR_UNIT names the unit that is not known; LW_ERR_ARGUMENT an ill-formed number.
LW_API lw_status lw_quantity_parse(const char *text, lw_quantity *out, lw_error *err);

// Parse and require the dimension of `unit` (such as "H" or "N m/A"; "1" for a plain number).
// A percentage is accepted where unit is "1". LW_ERR_UNIT: `"5 V" is a voltage; a time is wanted,
// such as "5 ms"` - both dimensions are named in words where they have a common name.
LW_API lw_status lw_quantity_parse_as(const char *text, const char *unit, double *value,
                                      lw_error *err);

// Parse a duration in seconds and ticks ("50 us"); `exact` (may be NULL) is the real-valued number
// of seconds before rounding.
LW_API lw_status lw_duration_parse(const char *text, lw_tick *tick, double *exact, lw_error *err);

// Parse a period: a time ("50 us") or a frequency ("30 kHz", no angular one), kept as an exact
// fraction of ticks; the last of its continued fraction that fits where 63 bits are short.
// Must be >= 1 tick and <= LW_TICK_MAX.
LW_API lw_status lw_period_parse(const char *text, lw_period *out, lw_error *err);
// The same from plain seconds: the exact fraction of the shortest decimal that gives this double.
LW_API lw_status lw_period_from_seconds(double seconds, lw_period *out, lw_error *err);

// Write a time with a fitting unit and no more digits than needed: "50 us", "1.000003 ms".
// Returns `buffer`, which holds at least 40 characters.
LW_API char *lw_tick_format(lw_tick tick, char *buffer);
// Shortest decimal that reads back as the same double ("0.1", "1e-05", "nan", "inf").
// Returns `buffer`, at least 32 characters. Does not depend on the locale.
LW_API char *lw_double_format(double value, char *buffer);

#ifdef __cplusplus
}
#endif
#endif
