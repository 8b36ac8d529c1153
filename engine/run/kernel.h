// Propagation of one linear group over any length of time: x' = A x + B u.
//
// Two methods, chosen at freeze from the group alone:
//   superposed  balanced norm(A) times the grid length is moderate: Gamma(tau) of each channel is
//               a piecewise Taylor polynomial in tau; the state at t is
//               Phi(t - a) x + Gamma(t - a) u + sum Gamma(t - t_j) du_j
//   ladder      large norms (stiff groups): transitions over q, 2 q, 4 q, ... formed in
//               double-double and a Taylor action of the exponential for the rest; input changes
//               are walked through in order of the list
// Lengths of the anchor grid have transitions of their own in both.
#ifndef LATEWOOD_RUN_KERNEL_H
#define LATEWOOD_RUN_KERNEL_H

#include "base/arena.h"

#include <latewood/status.h>
#include <latewood/time.h>

#define LW__KERNEL_MAX 160 // states of a group, generators included

// Transition over a fixed length. Matrices are column-major.
typedef struct lw__transition {
    lw_tick length;
    const double *phi;   // n x n
    const double *gamma; // n x m
} lw__transition;

typedef enum lw__method { LW__SUPERPOSED, LW__LADDER } lw__method;

typedef struct lw__kernel {
    int n, m;
    lw__method method;
    const double *a, *b; // column-major
    double norm;         // balanced norm(A) [1/s]
    lw_tick reach;       // longest time the kernel is asked for
    lw__transition grid[2];
    int n_grid;
    // Taylor pieces over (0, reach], or one piece over [0, q) of the ladder
    int n_pieces, degree;
    lw_tick piece;                // length
    double per_half;              // 2 / piece
    const lw__transition *centre; // n_pieces: to the middle of each
    const double *polynomial;     // [piece][channel][power][n] in s = (tau - centre) / (piece/2)
    // ladder
    int n_rungs;
    const lw__transition *rung; // lengths q 2^k
} lw__kernel;

// Input changes since the anchor, in list order.
typedef struct lw__changes {
    int64_t n;
    const int64_t *tick, *channel;
    const double *du;
} lw__changes;

// Build for lengths up to `reach`, with transitions for n_grid lengths of the grid. a, b row-major.
lw_status lw__kernel_build(lw__arena *arena, int n, int m, const double *a, const double *b,
                           lw_tick reach, int n_grid, const lw_tick *grid, lw__kernel *out,
                           lw_error *err);

// Infinity norm of A (row-major) after diagonal balancing [1/s].
lw_status lw__kernel_norm(int n, const double *a, double *norm, lw_error *err);

// State at `now` from the state x and inputs u at `anchor` and the changes since; none is later
// than now. `out` (n) must not overlap x; `work` holds 4 n + m doubles.
void lw__kernel_value(const lw__kernel *k, lw_tick anchor, const double *x, const double *u,
                      const lw__changes *changes, lw_tick now, double *out, double *work);
// The same, put in the place of x. `work` holds 5 n + m doubles.
void lw__kernel_advance(const lw__kernel *k, lw_tick anchor, double *x, const double *u,
                        const lw__changes *changes, lw_tick now, double *work);

// The same for one state over the first length of the grid without changes: too little for a call.
static inline double lw__kernel_scalar(const lw__kernel *k, double x, const double *u)
{
    double moved = k->grid[0].phi[0] * x;
    for (int j = 0; j < k->m; j++)
        moved += k->grid[0].gamma[j] * u[j];
    return moved;
}

#endif
