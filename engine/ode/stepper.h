// What the methods of integration share: an integration under way.
#ifndef LATEWOOD_ODE_STEPPER_H
#define LATEWOOD_ODE_STEPPER_H

#include "ode/ode.h"

#include <math.h>

#define LW__ODE_DEGREE 5

// Carried between calls.
typedef struct lw__ode_memory {
    double h;     // natural size of the next step; 0: not known
    double stiff; // 1: the stiff method is at work
    double suspicion;
    double slope_known; // 1: the flow at the end of the last call stands behind this
} lw__ode_memory;

typedef struct lw__ode_state {
    const lw__ode_system *system;
    int n;
    double rtol;
    const double *atol;
    double t, *x, *f; // f: the flow at (t, x), where f_known
    int f_known;
    double *x_new, *f_new; // trial step's end
    double *c;             // dense output: (degree + 1) x n
    double *k;             // stages and scratch of a method
    double *jacobian, *lu; // of the stiff method
    int *pivot;
    int degree; // of the method at work
    int jacobian_known;
    lw_status failed; // of a function of the system
} lw__ode_state;

typedef enum lw__ode_outcome {
    LW__ODE_ACCEPTED, // x_new, f_new hold the end
    LW__ODE_REJECTED, // *next is a smaller size
    LW__ODE_FAILED
} lw__ode_outcome;

// One trial step of size h; *next: the size wanted for the following one (or for another trial).
// `last`: h was shortened, so *next is wanted only where it may exceed `natural`.
lw__ode_outcome lw__ode_explicit(lw__ode_state *o, lw__ode_memory *m, double h, int last,
                                 double natural, double *next);
lw__ode_outcome lw__ode_stiff(lw__ode_state *o, lw__ode_memory *m, double h, double *next);
// Dense output of the step just accepted, into o->c.
void lw__ode_explicit_dense(lw__ode_state *o, double h);
void lw__ode_stiff_dense(lw__ode_state *o, double h);
// The same of order 5, from that of order 4 in o->c, for two flows more; nonzero: the flow failed.
int lw__ode_explicit_refine(lw__ode_state *o, double h);

extern const double lw__ode_pair_error[7];

int lw__ode_explicit_work(int n);
int lw__ode_stiff_work(int n);

static inline int lw__ode_flow(lw__ode_state *o, double t, const double *x, double *dx)
{
    if (o->system->flow(o->system->context, t, x, dx) == 0)
        return 0;
    o->failed = LW_ERR_LAW;
    return 1;
}

#endif
