// Flows that several tests use, each with the solution or equation it is checked by.
#ifndef LATEWOOD_TESTS_FLOWS_H
#define LATEWOOD_TESTS_FLOWS_H

#include "loops.h"

#include <latewood/elementary.h>

static const char *const flow_xy[] = {"x", "v"}, *const flow_in[] = {"in"};

// A flow of n_x states named x, v and at most one input.
static inline lw_flow_def flow_def(int n_x, int n_u, const double *start,
                                   int (*flow)(void *, double, const double *, const double *,
                                               double *))
{
    lw_flow_def def = lw_flow_default();
    def.n_x = n_x;
    def.n_u = n_u;
    def.state_names = flow_xy;
    def.input_names = flow_in;
    def.start = start;
    def.flow = flow;
    return def;
}

static inline lw_plant *flow_plant(lw_flow_def def, double rtol)
{
    lw_plant *plant = NULL;
    def.rtol = rtol;
    OK(lw_plant_flow(&def, &plant, e));
    return plant;
}

// One plant named "p" and nothing else, at the end of a run.
static inline double end_of(lw_plant *plant, double seconds, const char *signal)
{
    lw_rig *rig = NULL;
    lw_run *run = NULL;
    lw_signal at;
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", plant, e));
    lw_plant_free(plant);
    lw_tick lasts;
    lw_tick_from_seconds(seconds, &lasts);
    lw_frozen *z = freeze_rig(rig, NULL, lasts);
    OK(lw_frozen_signal(z, signal, &at, e));
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    lw_run_advance(run, lasts);
    OK(lw_run_status(run, 0, e));
    double value = lw_run_read(run, 0, at);
    lw_run_free(run);
    lw_frozen_free(z);
    return value;
}

static inline int van_der_pol(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    (void)u;
    dx[0] = x[1];
    dx[1] = (1 - x[0] * x[0]) * x[1] - x[0];
    return 0;
}

static inline int pendulum(void *context, double t, const double *x, const double *u, double *dx)
{
    const double *damping = context;
    (void)t;
    dx[0] = x[1];
    dx[1] = u[0] - lw_sin(x[0]) - *damping * x[1];
    return 0;
}

#endif
