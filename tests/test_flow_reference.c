// Flows of the trade at rtol 1e-12 against a second computation: extrapolation of the modified
// midpoint rule (W. Gragg, SIAM J. Numer. Anal. 2 (1965) 384-403; R. Bulirsch, J. Stoer, Numer.
// Math. 8 (1966) 1-13) between the edges of the same square wave, and closed forms where there is
// dry friction. All parameters are invented.
//
// Tolerance: 1e-10 of each state's scale, a hundred times the tolerance of a step.

#include "flows.h"

#define HALF 4e-3 // of the square wave [s]
#define EDGES 10
#define FINE 64 // steps of the reference between two edges

typedef int flow_of(void *context, double t, const double *x, const double *u, double *dx);

// ---- the plants

// Smooth friction and drag, the wave as torque.
static int rubbed_pendulum(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = x[1];
    dx[1] = (0.08 * u[0] - 0.015 * lw_tanh(x[1] / 0.4) - 0.05 * lw_sin(x[0] + 0.3)) / 0.0012;
    return 0;
}

static int driven_van_der_pol(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = 400 * x[1];
    dx[1] = 400 * ((1 - x[0] * x[0]) * x[1] - x[0] + u[0]);
    return 0;
}

// Permanent-magnet machine in dq: currents, electrical speed; the wave is the q voltage.
static int magnet_machine(void *context, double t, const double *x, const double *u, double *dx)
{
    const double r = 0.4, ld = 1.1e-3, lq = 1.6e-3, flux = 0.012, poles = 4, inertia = 3e-5;
    (void)context;
    (void)t;
    dx[0] = (-r * x[0] + x[2] * lq * x[1]) / ld;
    dx[1] = (6 * u[0] - r * x[1] - x[2] * (ld * x[0] + flux)) / lq;
    double torque = 1.5 * poles * (flux * x[1] + (ld - lq) * x[0] * x[1]);
    dx[2] = poles * (torque - 1e-4 * x[2] / poles) / inertia;
    return 0;
}

// Averaged buck stage that feeds a load of constant power; the wave moves the duty ratio.
static int buck_with_power_load(void *context, double t, const double *x, const double *u,
                                double *dx)
{
    (void)context;
    (void)t;
    dx[0] = ((0.5 + 0.02 * u[0]) * 24 - x[1] - 0.15 * x[0]) / 100e-6;
    dx[1] = (x[0] - 10 / x[1] - x[1] / 6) / 220e-6;
    return 0;
}

// Averaged boost stage: bilinear in the duty ratio.
static int boost(void *context, double t, const double *x, const double *u, double *dx)
{
    double off = 1 - (0.4 + 0.1 * u[0]);
    (void)context;
    (void)t;
    dx[0] = (12 - off * x[1] - 0.05 * x[0]) / 150e-6;
    dx[1] = (off * x[0] - x[1] / 20) / 100e-6;
    return 0;
}

static const struct plant_case {
    const char *name;
    int n;
    flow_of *flow;
    double start[3], scale[3];
} cases[] = {{"pendulum", 2, rubbed_pendulum, {0.2, 0, 0}, {1, 1, 1}},
             {"van der pol", 2, driven_van_der_pol, {2, 0, 0}, {1, 1, 1}},
             {"magnet machine", 3, magnet_machine, {0, 0, 0}, {1, 1, 100}},
             {"buck", 2, buck_with_power_load, {1.8, 12, 0}, {1, 1, 1}},
             {"boost", 2, boost, {1, 15, 0}, {1, 1, 1}}};

// ---- the second computation

static void midpoints(const struct plant_case *c, const double *x, const double *u, double length,
                      int n, double *out)
{
    double h = length / n, a[3], b[3], d[3];
    memcpy(a, x, sizeof a);
    c->flow(NULL, 0, a, u, d);
    for (int i = 0; i < c->n; i++)
        b[i] = a[i] + h * d[i];
    for (int k = 1; k < n; k++) {
        c->flow(NULL, 0, b, u, d);
        for (int i = 0; i < c->n; i++) {
            double next = a[i] + 2 * h * d[i];
            a[i] = b[i];
            b[i] = next;
        }
    }
    c->flow(NULL, 0, b, u, d);
    for (int i = 0; i < c->n; i++)
        out[i] = 0.5 * (a[i] + b[i] + h * d[i]);
}

// Order 12 by six rows of Neville's scheme in the squares of the steps.
static void extrapolate(const struct plant_case *c, double *x, const double *u, double length)
{
    enum { ROWS = 6 };
    double table[ROWS][3];
    for (int r = 0; r < ROWS; r++) {
        midpoints(c, x, u, length, 2 * (r + 1), table[r]);
        for (int k = r - 1; k >= 0; k--) {
            double ratio = (double)(r + 1) / (k + 1);
            for (int i = 0; i < c->n; i++)
                table[k][i] =
                    table[k + 1][i] + (table[k + 1][i] - table[k][i]) / (ratio * ratio - 1);
        }
    }
    memcpy(x, table[0], sizeof table[0]);
}

static void reference(const struct plant_case *c, double *x)
{
    memcpy(x, c->start, sizeof c->start);
    for (int edge = 0; edge < EDGES; edge++) {
        double u = edge % 2 == 0 ? 1 : -1;
        for (int k = 0; k < FINE; k++)
            extrapolate(c, x, &u, HALF / FINE);
    }
}

// ---- the engine

static void add_wave(lw_rig *rig)
{
    lw_source_def wave = lw_source_default(LW_SOURCE_PULSES);
    wave.name = "wave";
    wave.before = -1;
    wave.level = 1;
    wave.width = HALF;
    wave.period = lw_period_of_ticks(8 * MS);
    OK(lw_rig_add_source(rig, &wave, e));
    OK(lw_rig_connect(rig, NULL, "wave", "p.in", e));
}

static void by_engine(const struct plant_case *c, double rtol, double *x)
{
    static const char *const states[] = {"a", "b", "c"};
    double atol[3];
    lw_flow_def def = flow_def(c->n, 1, c->start, c->flow);
    def.state_names = states;
    def.atol = atol;
    for (int i = 0; i < 3; i++)
        atol[i] = rtol * c->scale[i];
    lw_rig *rig = NULL;
    lw_run *run = NULL;
    lw_plant *plant = flow_plant(def, rtol);
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", plant, e));
    lw_plant_free(plant);
    add_wave(rig);
    lw_tick lasts = EDGES * 4 * MS;
    lw_frozen *z = freeze_rig(rig, NULL, lasts);
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    lw_run_advance(run, lasts);
    OK(lw_run_status(run, 0, e));
    for (int i = 0; i < c->n; i++) {
        lw_signal at;
        char name[8];
        snprintf(name, sizeof name, "p.%s", states[i]);
        OK(lw_frozen_signal(z, name, &at, e));
        x[i] = lw_run_read(run, 0, at);
    }
    lw_run_free(run);
    lw_frozen_free(z);
}

START_TEST(flows_of_the_trade_end_where_a_second_computation_does)
{
    const struct plant_case *c = &cases[_i];
    double want[3], strict[3], loose[3];
    reference(c, want);
    by_engine(c, 1e-12, strict);
    by_engine(c, 1e-8, loose);
    for (int i = 0; i < c->n; i++) {
        ck_assert_msg(fabs(strict[i] - want[i]) <= 1e-10 * fmax(c->scale[i], fabs(want[i])),
                      "%s %d: %.15g, wanted %.15g", c->name, i, strict[i], want[i]);
        ck_assert_msg(fabs(loose[i] - want[i]) <= 1e-6 * fmax(c->scale[i], fabs(want[i])),
                      "%s %d: %.15g, wanted %.15g", c->name, i, loose[i], want[i]);
    }
}
END_TEST

static int other_boost(void *context, double t, const double *x, const double *u, double *dx)
{
    boost(context, t, x, u, dx);
    dx[1] += 1e-3 * x[1];
    return 0;
}

// The comparison must be able to fail.
START_TEST(a_slightly_other_stage_is_noticed)
{
    struct plant_case other = cases[4];
    double want[3], got[3];
    reference(&other, want);
    other.flow = other_boost;
    by_engine(&other, 1e-12, got);
    ck_assert(fabs(got[1] - want[1]) > 1e-10 * fabs(want[1]));
}
END_TEST

// ---- dry friction with sticking: a mass that a sine pushes

#define PUSH 0.6
#define STICK 0.5 // breaks away above
#define SLIDE 0.45
#define TURN (2 * 3.14159265358979323846 * 10)

// modes: stuck, direction of sliding
static int sliding(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = x[2] > 0 ? 0 : x[1];
    dx[1] = x[2] > 0 ? 0 : u[0] - SLIDE * x[3];
    return 0;
}

static int stick_switches(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)t;
    g[0] = x[1];
    g[1] = u[0] - STICK;
    g[2] = -u[0] - STICK;
    return 0;
}

static int stick_or_slide(void *context, double t, double *x, const double *u, int which,
                          int rising)
{
    (void)context;
    (void)t;
    if (which == 0 && x[2] == 0 && fabs(u[0]) < STICK) { // comes to rest
        x[1] = 0;
        x[2] = 1;
    } else if (which == 0 && x[2] == 0) {
        x[3] = u[0] > 0 ? 1 : -1;
    } else if (which > 0 && rising && x[2] > 0) {
        x[2] = 0;
        x[3] = u[0] > 0 ? 1 : -1;
    }
    return 0;
}

static lw_plant *block(double rtol)
{
    const double modes[] = {1, 1};
    lw_flow_def def = flow_def(2, 1, NULL, sliding);
    def.n_switches = 3;
    def.switches = stick_switches;
    def.n_modes = 2;
    def.modes = modes;
    def.happened = stick_or_slide;
    return flow_plant(def, rtol);
}

// Speed, and place, a time after it broke away at t0 (sine rising there).
static double slid_speed(double t0, double t)
{
    return PUSH / TURN * (lw_cos(TURN * t0) - lw_cos(TURN * t)) - SLIDE * (t - t0);
}

static double slid_place(double t0, double t)
{
    double d = t - t0;
    return PUSH / TURN * (lw_cos(TURN * t0) * d - (lw_sin(TURN * t) - lw_sin(TURN * t0)) / TURN) -
           SLIDE * d * d / 2;
}

// It slides forth, rests, slides back as far, rests: at whole periods it is back at 0 at rest.
START_TEST(dry_friction_sticks_and_breaks_away)
{
    double t0 = lw_asin(STICK / PUSH) / TURN, lo = t0 + 0.005, hi = 0.09;
    for (int k = 0; k < 60; k++) {
        double middle = 0.5 * (lo + hi);
        *(slid_speed(t0, middle) > 0 ? &lo : &hi) = middle;
    }
    ck_assert(lo < 0.05 + t0 && PUSH * lw_sin(TURN * lo) > -STICK); // it does rest in between
    double far = slid_place(t0, lo);
    static const struct {
        double at, share;
    } looks[] = {{0.0499999, 1}, {0.1, 0}, {0.15, 1}};
    lw_rig *rig = NULL;
    lw_run *run = NULL;
    lw_signal place, speed;
    lw_plant *plant = block(1e-12);
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", plant, e));
    lw_plant_free(plant);
    lw_source_def sine = lw_source_default(LW_SOURCE_SINE);
    sine.name = "push";
    sine.frequency = 10;
    sine.level = PUSH;
    OK(lw_rig_add_source(rig, &sine, e));
    OK(lw_rig_connect(rig, NULL, "push", "p.in", e));
    lw_frozen *z = freeze_rig(rig, NULL, 150 * MS);
    OK(lw_frozen_signal(z, "p.x", &place, e));
    OK(lw_frozen_signal(z, "p.v", &speed, e));
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    for (int k = 0; k < 3; k++) {
        lw_tick at;
        lw_tick_from_seconds(looks[k].at, &at);
        lw_run_advance(run, at);
        OK(lw_run_status(run, 0, e));
        ck_near(lw_run_read(run, 0, place), looks[k].share * far, 1e-10, far);
        ck_assert(lw_run_read(run, 0, speed) == 0);
    }
    lw_run_free(run);
    lw_frozen_free(z);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("flow reference");
    TCase *trade = tcase_create("trade"), *friction = tcase_create("friction");
    tcase_add_loop_test(trade, flows_of_the_trade_end_where_a_second_computation_does, 0, 5);
    tcase_add_test(trade, a_slightly_other_stage_is_noticed);
    tcase_add_test(friction, dry_friction_sticks_and_breaks_away);
    suite_add_tcase(suite, trade);
    suite_add_tcase(suite, friction);
    return run_suite(suite);
}
