// Integration of x' = f(t, x) from own event to own event: accepted steps, each with a polynomial,
// switchings located, jumps made.
//
// Dormand-Prince 5(4) with its interpolant of order 4 (J. Dormand, P. Prince, J. Comp. Appl. Math.
// 6 (1980) 19-26; E. Hairer, S. Norsett, G. Wanner, "Solving Ordinary Differential Equations I",
// 1993, II.4 to II.6: step control, first step, dense output).
#ifndef LATEWOOD_RUN_STEPS_H
#define LATEWOOD_RUN_STEPS_H

#include <latewood/status.h>

// Functions return 0; anything else ends the integration with LW_ERR_LAW.
typedef struct lw__system {
    int n, n_switches;
    int (*flow)(void *context, double t, const double *x, double *dx);
    int (*switches)(void *context, double t, const double *x, double *g);
    // switching `which` has passed through zero; may change x and what the context holds
    int (*happened)(void *context, double t, double *x, int which, int rising);
    void *context;
    double rtol;
    const double *atol; // n
} lw__system;

// A step as polynomials in s = (time - t) / h.
#define LW__STEP_DEGREE 4
typedef struct lw__step {
    double t, h;
    int n;
    const double *c; // [power][n]
} lw__step;

// What is carried from one call to the next, in doubles: all 0 at the start of a run. The head is
// what lw__steps_disturb touches.
#define LW__STEPS_HEAD 3
int lw__steps_memory(const lw__system *s);
// Doubles of scratch.
int lw__steps_scratch(const lw__system *s);
// The sides on which the switchings stand, within the memory: -1, 1, 0 before they are known. They
// change at the ends of steps only: a flow that takes its side from here is smooth within a step.
const double *lw__steps_sides(const lw__system *s, const double *memory);
// The flow has another value at the point reached: an input changed. Switchings that passed through
// zero by that happen at the start of the next call.
void lw__steps_disturb(double *memory);

typedef struct lw__steps_end {
    lw_status status; // LW_OK, LW_ERR_LAW, LW_ERR_NOT_FINITE, LW_ERR_STEP,
                      // LW_ERR_CHATTER
    double t;         // where a failure stands
    const char *text; // of a failure, in words
} lw__steps_end;

// Integrate from t0 to t1 >= t0 in steps that never pass t1; each accepted one goes to `take` (may
// be NULL). After a failure x is the last state accepted.
lw__steps_end lw__steps_advance(const lw__system *s, double *memory, double t0, double t1,
                                double *x, void (*take)(void *context, const lw__step *step),
                                void *context, double *scratch);

void lw__step_value(const lw__step *step, double at, double *x);

#endif
