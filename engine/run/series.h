// Signals over a short time as polynomials: rows of linear groups, moving sources.
#ifndef LATEWOOD_RUN_SERIES_H
#define LATEWOOD_RUN_SERIES_H

#include "run/poly.h"
#include "run/state.h"

#define LW__PIECE_NORM 0.5 // norm(A) times the length of a piece: degree 13 then holds 1e-14
#define LW__PIECE_DEGREE 13

// Longest piece [ticks] for a signal that moves at `norm` [1/s].
static inline lw_tick lw__piece_length(double norm)
{
    double piece = norm > 0 ? LW__PIECE_NORM / norm * 1e12 : 1e18;
    return piece < 1 ? 1 : piece > 1e18 ? LW_TICK_MAX : (lw_tick)piece;
}

// Taylor coefficients of one output of a linear group over `length` seconds, in time over length,
// from state x and inputs u at its start. work: 2 n_x.
void lw__row_series(const lw__kernel *k, const lw__row *row, const double *x, const double *u,
                    double length, int degree, double *work, double *c);
// The same of a moving source from tick t on.
void lw__source_series(const lw_source_def *def, lw_tick t, double length, int degree, double *c);

#endif
