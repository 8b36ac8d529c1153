// Speed of the integrator alone, on the five-state drive from event to event: ours against GSL's
// rkf45, which a user would take, and against the pair written out for this one plant. All call the
// same flow, with the engine's own elementary functions.

#include "bench.h"

#include <latewood/elementary.h>

#define W4_TANH lw_tanh
#define W4_SIN lw_sin
#include "w4.h"

#include "ode/ode.h"

#include <gsl/gsl_errno.h>
#include <gsl/gsl_odeiv2.h>

static int flow(void *context, double t, const double *x, double *dx)
{
    (void)t;
    W4_FLOW(x, *(const double *)context, dx, W4_TANH, W4_SIN);
    return 0;
}

static double wanted_at(long k)
{
    return k / W4_HALF % 2 ? -W4_REF : W4_REF;
}

static double ours(long n)
{
    const double atol[5] = {W4_ATOL, W4_ATOL, W4_ATOL, W4_ATOL, W4_ATOL};
    double x[5] = {0}, state[2] = {0}, held = 0, memory[16] = {0}, work[600], failed;
    const char *text;
    lw__ode_system s = {.n = 5, .flow = flow, .context = &held};
    if (lw__ode_memory_size(5) > 16 || lw__ode_work_size(5, 0) > 600)
        exit(1);
    for (long k = 0; k < n; k++) {
        double u = w4_control(state, wanted_at(k), w4_adc(x[1]));
        if (lw__ode_advance(&s, W4_RTOL, atol, memory, 0, W4_T * W4_LATENCY, x, NULL, NULL, work,
                            &failed, &text) != LW_OK)
            exit(1);
        held = u;
        lw__ode_disturb(memory);
        if (lw__ode_advance(&s, W4_RTOL, atol, memory, 0, W4_T * (1 - W4_LATENCY), x, NULL, NULL,
                            work, &failed, &text) != LW_OK)
            exit(1);
    }
    return x[1];
}

static int flow_for_gsl(double t, const double *x, double *dx, void *held)
{
    return flow(held, t, x, dx);
}

// The natural step size is carried by hand, as a careful user would.
static double rkf45(long n)
{
    double x[5] = {0}, state[2] = {0}, held = 0, h = W4_T;
    gsl_odeiv2_system system = {flow_for_gsl, NULL, 5, &held};
    gsl_odeiv2_step *step = gsl_odeiv2_step_alloc(gsl_odeiv2_step_rkf45, 5);
    gsl_odeiv2_control *control = gsl_odeiv2_control_y_new(W4_ATOL, W4_RTOL);
    gsl_odeiv2_evolve *evolve = gsl_odeiv2_evolve_alloc(5);
    for (long k = 0; k < n; k++) {
        double u = w4_control(state, wanted_at(k), w4_adc(x[1]));
        for (int part = 0; part < 2; part++) {
            double t = 0, end = W4_T * (part ? 1 - W4_LATENCY : W4_LATENCY);
            gsl_odeiv2_evolve_reset(evolve);
            gsl_odeiv2_step_reset(step);
            while (t < end)
                if (gsl_odeiv2_evolve_apply(evolve, control, step, &system, &t, end, &h, x))
                    exit(1);
            held = u;
        }
    }
    gsl_odeiv2_evolve_free(evolve);
    gsl_odeiv2_control_free(control);
    gsl_odeiv2_step_free(step);
    return x[1];
}

int main(void)
{
    bench_pair("ode.against_rkf45", 20000, ours, rkf45);
    bench_pair("ode.against_plain_c", 20000, ours, w4_plain);
    return 0;
}
