// The next instant at which a condition on a group comes true, on the exact continuous solution.
//
// A condition compares a signal of one group with another of the same group, a held value, a moving
// source or a number. Signals go on as they would if no input changed from now on: whoever asks
// does so again after each change of the group or of what it is compared with.
#ifndef LATEWOOD_RUN_CROSSING_H
#define LATEWOOD_RUN_CROSSING_H

#include "run/freezer.h"
#include "run/motion.h"

typedef struct lw__condition {
    const lw__group *group;
    lw__row row;         // within the group, coefficients of states and inputs
    int of, less;        // rows of the group whose difference that is, -1: none
    int sign;            // +1, or -1: what is compared is level - row
    lw__reference level; // the other side; a constant 0 where both are rows
    lw_tick piece;       // longest stretch one polynomial serves
    int degree;
    double tolerance; // share of the size of its terms below which a difference is rounding
} lw__condition;

// Form the condition `of` - `less` at freeze, when groups and converters are. Either names a row;
// where both do, they must be of one group. The other may be a cell, a source or a constant. `sign`
// of the condition is +1, or -1 where the row is in `less`. LW_ERR_ARGUMENT where neither is a row,
// or two groups; the caller says whose it is.
lw_status lw__condition_make(lw__freezer *w, const lw__reference *of, const lw__reference *less,
                             lw__condition *out);

// What is asked: the first instant at which side * (sign * (row - level) - offset - slope t) is at
// or above zero, t being the time since now [s].
typedef struct lw__question {
    int side; // +1: rises to it, -1: falls to it
    double offset, slope;
    lw_tick from, until; // now < from; both ends count
} lw__question;

typedef struct lw__crossing {
    lw_tick tick;     // first tick at or after the instant, LW_NEVER: not up to `until`
    double since;     // the instant itself [s since now]
    lw_status status; // a group with a motion could not be followed: its failure, `tick` LW_NEVER
} lw__crossing;

// A condition true before `from` counts from `from` on. Changes no cell. Not to be called while
// `s->work` is in use.
lw__crossing lw__crossing_next(const lw__lane *s, const lw__condition *q, const lw__question *ask);
// sign * (row - level) at the present tick (right limit as of the pass).
double lw__condition_value(const lw__lane *s, const lw__condition *q);
// The next instant of the group's grid after now: how far it is worth looking.
lw_tick lw__group_next(const lw__lane *s, const lw__group *g);

#endif
