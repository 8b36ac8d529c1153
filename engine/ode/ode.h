// Integration of x' = f(t, x) from one instant exactly to another, with dense output and switchings
// found.
//
// Methods
//   explicit  J. Dormand, P. Prince, J. Comp. Appl. Math. 6 (1980) 19-26: order 5(4), seven stages,
//             the last of which is the first of the next step. Dense output of order 4 after
//             E. Hairer, S. Norsett, G. Wanner, Solving Ordinary Differential Equations I (1993)
//             II.6, raised to order 5 by two further flows where there is a sink
//   stiff     Radau IIA of order 5 (E. Hairer, G. Wanner, Solving Ordinary Differential Equations
//             II (1996) IV.8): three stages by simplified Newton iteration, error estimate of
//             order 3, dense output by its collocation polynomial
// The explicit method notes stiffness where the step is bounded by stability (ibid. IV.2) and hands
// over; the stiff one hands back where its steps have become small against the Jacobian.
//
// Switchings are found on the dense output, to a few roundings of t, the earliest first; the step
// is taken again to just before one and carried across it along the flow. A step refused because
// the flow jumps within it is taken again in the same way. Motion along a border which the flows of
// both sides drive towards (A. Filippov, Differential Equations with Discontinuous Righthand
// Sides, 1988) is left to the plant: it states a mode of its own for it; without one the
// integration ends with LW_ERR_CHATTER.
//
// Workload: two to four calls a period of a loop, each a step or two; up to 64 states.
//
// Invariants
// 1. No step passes t1. What is carried between calls (the natural step size, the method, the flow
//    at the end) is in `memory` alone, and a step shortened by t1 does not shorten it.
// 2. Whether there is a sink changes no bit of x or memory.
// 3. Nothing is allocated; nothing of the C library's elementary functions is called.
#ifndef LATEWOOD_ODE_ODE_H
#define LATEWOOD_ODE_ODE_H

#include <latewood/status.h>

#define LW__ODE_MOST 160 // states

typedef struct lw__ode_system {
    int n, n_switches;
    // Each returns 0; anything else ends the integration with LW_ERR_LAW. Values that are not
    // finite make a step fail and be tried smaller.
    int (*flow)(void *context, double t, const double *x, double *dx);
    // g: n_switches numbers. Where one changes its sign a step ends, and a new one begins.
    int (*switches)(void *context, double t, const double *x, double *g);
    // j: n x n, row-major; NULL: by differences.
    int (*jacobian)(void *context, double t, const double *x, double *j);
    // A switching went through zero just before t, rising (1) or falling (0): may change x and what
    // the flow depends on. NULL: nothing happens by itself.
    int (*happened)(void *context, double t, double *x, int which, int rising);
    void *context;
} lw__ode_system;

// An accepted step from t to t + h: x(t + s h) = sum over k of c[k n + state] s^k.
typedef struct lw__ode_piece {
    double t, h;
    int n, degree;
    const double *c;
} lw__ode_piece;

typedef void (*lw__ode_sink)(void *context, const lw__ode_piece *piece);

// Doubles of memory to be kept between calls, zero at first, and of scratch.
int lw__ode_memory_size(int n);
// The flow at the end of the last call, kept for the next one, no longer holds: an input or the
// state has changed.
void lw__ode_disturb(double *memory);
int lw__ode_work_size(int n, int n_switches);

// All states at s in [0, 1]; the coefficients of one state, and their degree.
void lw__ode_piece_value(const lw__ode_piece *p, double s, double *x);
int lw__ode_piece_series(const lw__ode_piece *p, int state, double *c);

// Integrate from t0 to t1 >= t0; x is replaced. Each accepted step goes to `sink` (may be NULL).
//   rtol      relative tolerance, atol (n) absolute ones: the error of a step is at most
//             atol + rtol |x|, state by state
//   returns   LW_OK
//             LW_ERR_LAW         a function failed
//             LW_ERR_NOT_FINITE  values overflow
//             LW_ERR_STEP        the step size collapsed, or switchings follow one another without
//                                end
//             LW_ERR_CHATTER     a switching is driven back to its border from both sides
//                                *t_failed and *text say where and why; x stands at the last
//                                accepted step
lw_status lw__ode_advance(const lw__ode_system *s, double rtol, const double *atol, double *memory,
                          double t0, double t1, double *x, lw__ode_sink sink, void *context,
                          double *work, double *t_failed, const char **text);

#endif
