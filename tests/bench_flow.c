// Speed of a flow in C within a whole loop, W4: ours against plain C for the one loop; and GSL's
// rkf45 doing the same integration against the same plain C.

#include "bench.h"

// Outside a test a failure ends the program.
#define OK(call)                                                                                   \
    do {                                                                                           \
        lw_error err_ = {0}, *e = &err_;                                                           \
        if ((call) != LW_OK) {                                                                     \
            fprintf(stderr, "%s\n", err_.text);                                                    \
            exit(1);                                                                               \
        }                                                                                          \
        (void)e;                                                                                   \
    } while (0)

#include "loops.h"
#include "w4.h"

#include <gsl/gsl_errno.h>
#include <gsl/gsl_odeiv2.h>
#include <latewood/elementary.h>

// ---- the engine

static int axis(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    W4_FLOW(x, u[0], dx, lw_tanh, lw_sin);
    return 0;
}

static int law_step(const void *param, const lw_law_time *time, const double *in, double *state,
                    double *out)
{
    (void)param;
    (void)time;
    out[0] = w4_control(state, in[0], in[1]);
    return 0;
}

static lw_law *law(void)
{
    static const char *const in[] = {"wanted", "measured"}, *const out[] = {"out"},
                             *const states[] = {"filtered", "integral"};
    lw_law_def def = {.kind = "filtered pi",
                      .n_in = 2,
                      .n_out = 1,
                      .n_state = 2,
                      .in_names = in,
                      .out_names = out,
                      .state_names = states,
                      .step = law_step};
    lw_law *made = NULL;
    OK(lw_law_new(&def, &made, e));
    return made;
}

static void add_plant(lw_rig *rig)
{
    static const char *const states[] = {"current", "motor", "twist", "load", "angle"},
                             *const inputs[] = {"in"};
    const double atol[] = {W4_ATOL, W4_ATOL, W4_ATOL, W4_ATOL, W4_ATOL};
    lw_flow_def def = lw_flow_default();
    lw_plant *plant = NULL;
    def.n_x = 5;
    def.n_u = 1;
    def.state_names = states;
    def.input_names = inputs;
    def.flow = axis;
    def.rtol = W4_RTOL;
    def.atol = atol;
    OK(lw_plant_flow(&def, &plant, e));
    OK(lw_rig_add_plant(rig, NULL, "plant", plant, e));
    lw_plant_free(plant);
}

static lw_frozen *build(void)
{
    lw_rig *rig = NULL;
    const char *of = "plant.motor";
    OK(lw_rig_new("bench", &rig, e));
    add_plant(rig);
    lw_source_def wanted = lw_source_default(LW_SOURCE_PULSES);
    wanted.name = "wanted";
    wanted.before = -W4_REF;
    wanted.level = W4_REF;
    wanted.period = lw_period_of_ticks(2 * W4_HALF * 50 * US);
    wanted.width = W4_HALF * W4_T;
    OK(lw_rig_add_source(rig, &wanted, e));
    lw_adc_def adc = lw_adc_default();
    adc.name = "adc";
    adc.of = &of;
    adc.every = lw_period_of_ticks(50 * US);
    adc.quantiser = (lw_quantiser){12, -40, 40, LW_ROUND_NEAREST};
    OK(lw_rig_add_adc(rig, &adc, e));
    lw_dac_def dac = lw_dac_default();
    dac.name = "dac";
    dac.to = "plant.in";
    OK(lw_rig_add_dac(rig, &dac, e));
    static const lw_latency_entry part = {W4_LATENCY, 1, LW_FATE_WRITTEN};
    lw_wire in[2] = {{"wanted", "wanted", 0}, {"measured", "adc", 0}}, out = {"out", "dac", 0};
    lw_loop_def loop = lw_loop_default();
    lw_law *own = law();
    loop.name = "loop";
    loop.law = own;
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency.n_list = 1;
    loop.latency.list = &part;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_law_free(own);
    return freeze_rig(rig, NULL, LW_TICKS_PER_SECOND);
}

static lw_frozen *frozen;

static double engine(long n)
{
    lw_run *run = NULL;
    lw_signal y;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    OK(lw_frozen_signal(frozen, "plant.motor", &y, e));
    lw_run_advance(run, n * 50 * US - 1);
    lw_run_advance(run, n * 50 * US);
    OK(lw_run_status(run, 0, e));
    double end = lw_run_read(run, 0, y);
    lw_run_free(run);
    return end;
}

// ---- GSL

static int gsl_flow(double t, const double *x, double *dx, void *held)
{
    (void)t;
    W4_FLOW(x, *(double *)held, dx, lw_tanh, lw_sin);
    return GSL_SUCCESS;
}

static double gsl(long n)
{
    double x[5] = {0}, state[2] = {0}, held = 0;
    gsl_odeiv2_system system = {gsl_flow, NULL, 5, &held};
    gsl_odeiv2_driver *driver =
        gsl_odeiv2_driver_alloc_y_new(&system, gsl_odeiv2_step_rkf45, W4_T, W4_ATOL, W4_RTOL);
    for (long k = 0; k < n; k++) {
        double wanted = k / W4_HALF % 2 ? -W4_REF : W4_REF, t = 0;
        double u = w4_control(state, wanted, w4_adc(x[1]));
        gsl_odeiv2_driver_reset_hstart(driver, W4_T);
        gsl_odeiv2_driver_apply(driver, &t, W4_T * W4_LATENCY, x);
        held = u;
        t = 0;
        gsl_odeiv2_driver_reset_hstart(driver, W4_T);
        gsl_odeiv2_driver_apply(driver, &t, W4_T * (1 - W4_LATENCY), x);
    }
    gsl_odeiv2_driver_free(driver);
    return x[1];
}

int main(void)
{
    frozen = build();
    bench_pair("W4", 20000, engine, w4_plain);
    bench_pair("W4.gsl", 20000, gsl, w4_plain);
    lw_frozen_free(frozen);
    return 0;
}
