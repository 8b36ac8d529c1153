// Flows in a rig: published ends and closed forms, linear twins, mixed groups, and the promises of
// every group: observing changes nothing, lanes and chunks change nothing, a failure has an
// instant.

#include "flows.h"

#include "base/alloc.h"
#include "run/freeze.h"

#include <latewood/timing.h>

// ---- ends that are known

// CHECKS E2, S: DETEST, Hull and others, SIAM J. Numer. Anal. 9 (1972) 603-637, as recomputed
// there.
START_TEST(van_der_pol_ends_where_published)
{
    const double start[] = {2, 0};
    double rtol = _i ? 1e-12 : 1e-8, tolerance = _i ? 1e-10 : 1e-6; // global over 20 s
    lw_flow_def def = flow_def(2, 0, start, van_der_pol);
    ck_near(end_of(flow_plant(def, rtol), 20, "p.x"), 2.008149762174948, tolerance, 1);
    ck_near(end_of(flow_plant(def, rtol), 20, "p.v"), -0.04250887527320057, tolerance, 1);
}
END_TEST

static int changed_van_der_pol(void *context, double t, const double *x, const double *u,
                               double *dx)
{
    van_der_pol(context, t, x, u, dx);
    dx[1] += 1e-9 * x[0];
    return 0;
}

// The comparison must be able to fail.
START_TEST(a_slightly_other_oscillator_ends_elsewhere)
{
    const double start[] = {2, 0};
    double x = end_of(flow_plant(flow_def(2, 0, start, changed_van_der_pol), 1e-12), 20, "p.v");
    ck_assert(fabs(x + 0.04250887527320057) > 1e-10);
}
END_TEST

// Energy of the pendulum without damping: v^2 / 2 - cos x.
START_TEST(a_free_pendulum_keeps_its_energy)
{
    static double none = 0;
    const double start[] = {2.5, 0};
    lw_flow_def def = flow_def(2, 1, start, pendulum);
    def.context = &none;
    double x = end_of(flow_plant(def, 1e-12), 30, "p.x"),
           v = end_of(flow_plant(def, 1e-12), 30, "p.v");
    ck_near(v * v / 2 - lw_cos(x), -lw_cos(2.5), 1e-10, 1); // 30 s at 1e-12 a step
}
END_TEST

static int logistic(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    (void)u;
    dx[0] = x[0] / 4 * (1 - x[0] / 20);
    return 0;
}

// CHECKS A4, S (DETEST).
START_TEST(logistic_growth_ends_where_published)
{
    const double start[] = {1};
    ck_near(end_of(flow_plant(flow_def(1, 0, start, logistic), 1e-12), 20, "p.x"),
            17.73016648131483, 1e-11, 1);
}
END_TEST

static int kinked(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)u;
    dx[0] = x[1];
    dx[1] = 0.01 * x[1] * (1 - x[0] * x[0]) - x[0] - fabs(lw_sin(3.14159265358979323846 * t));
    return 0;
}

static int kinks(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)x;
    (void)u;
    g[0] = lw_sin(3.14159265358979323846 * t);
    return 0;
}

// CHECKS F3, S: Enright and Pryce, ACM TOMS 13 (1987) 1-27: a kink every second.
START_TEST(kinks_are_located)
{
    const double start[] = {0, 0};
    lw_flow_def def = flow_def(2, 0, start, kinked);
    def.n_switches = 1;
    def.switches = kinks;
    ck_near(end_of(flow_plant(def, 1e-12), 20, "p.x"), -0.3726957553088175, 1e-10, 1);
    ck_near(end_of(flow_plant(def, 1e-12), 20, "p.v"), -0.6230137949234190, 1e-10, 1);
}
END_TEST

// ---- driven by sources

static int lag(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = u[0] - x[0];
    return 0;
}

static lw_frozen *driven(lw_source_def source, double delay, double seconds, const lw_watch *watch)
{
    lw_rig *rig = NULL;
    lw_plant *plant = flow_plant(flow_def(1, 1, NULL, lag), 1e-12), *late = NULL;
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_plant_delayed(plant, "in", delay, &late, e));
    OK(lw_rig_add_plant(rig, NULL, "p", late, e));
    lw_plant_free(plant);
    lw_plant_free(late);
    source.name = "s";
    OK(lw_rig_add_source(rig, &source, e));
    OK(lw_rig_connect(rig, NULL, "s", "p.in", e));
    lw_tick lasts;
    lw_tick_from_seconds(seconds, &lasts);
    return freeze_rig(rig, watch, lasts);
}

static double read_at_end(lw_frozen *z, const char *signal)
{
    lw_run *run = NULL;
    lw_signal at;
    OK(lw_frozen_signal(z, signal, &at, e));
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    lw_run_advance(run, lw_frozen_lasts(z));
    OK(lw_run_status(run, 0, e));
    double value = lw_run_read(run, 0, at);
    lw_run_free(run);
    lw_frozen_free(z);
    return value;
}

// x' = sin(w t + p) - x from 0: (sin(wt + p) - w cos(wt + p) - (sin p - w cos p) e^-t) / (1 + w^2).
START_TEST(a_sine_drives_a_flow_in_closed_form)
{
    lw_source_def sine = lw_source_default(LW_SOURCE_SINE);
    sine.frequency = 0.7;
    sine.level = 1;
    sine.phase = 0.3;
    double w = 2 * 3.14159265358979323846 * 0.7, T = 5, a = w * T + 0.3;
    double want =
        (lw_sin(a) - w * lw_cos(a) - (lw_sin(0.3) - w * lw_cos(0.3)) * lw_exp(-T)) / (1 + w * w);
    ck_near(read_at_end(driven(sine, 0, T, NULL), "p.x"), want, 1e-11, 1);
}
END_TEST

// A ramp from 1 s on with slope 2, from 0 to 3, its corner inside: each part in closed form.
START_TEST(a_ramp_drives_a_flow_around_its_corners)
{
    lw_source_def ramp = lw_source_default(LW_SOURCE_RAMP);
    ramp.at = 1;
    ramp.slope = 2;
    ramp.level = 3;
    for (int late = 0; late < 2; late++) {
        double T = 4 - 0.25 * late; // a delayed input sees the same, later
        double at_corner = 2 * (1.5 - 1 + lw_exp(-1.5)),
               want = 3 + (at_corner - 3) * lw_exp(-(T - 2.5));
        ck_near(read_at_end(driven(ramp, 0.25 * late, 4, NULL), "p.x"), want, 1e-11, 1);
    }
}
END_TEST

static int two_rates(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = 55 - u[0] * x[0];
    return 0;
}

// CHECKS F2, S (Enright and Pryce): y' = 55 - 1.5 y in even seconds, 55 - 0.5 y in odd ones.
START_TEST(a_square_wave_switches_a_flow_at_its_edges)
{
    const double start[] = {110};
    lw_rig *rig = NULL;
    lw_plant *plant = flow_plant(flow_def(1, 1, start, two_rates), 1e-12);
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", plant, e));
    lw_plant_free(plant);
    lw_source_def wave = lw_source_default(LW_SOURCE_PULSES);
    wave.name = "s";
    wave.before = 0.5;
    wave.level = 1.5;
    wave.width = 1;
    wave.period = lw_period_of_ticks(2 * LW_TICKS_PER_SECOND);
    OK(lw_rig_add_source(rig, &wave, e));
    OK(lw_rig_connect(rig, NULL, "s", "p.in", e));
    lw_frozen *z = freeze_rig(rig, NULL, 20 * LW_TICKS_PER_SECOND);
    ck_near(read_at_end(z, "p.x"), 70.03731057008607, 1e-11, 1);
}
END_TEST

// ---- jumps

static int falling(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    (void)u;
    dx[0] = x[1];
    dx[1] = -10;
    return 0;
}

static int height(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)t;
    (void)u;
    g[0] = x[0];
    return 0;
}

static int bounces(void *context, double t, double *x, const double *u, int which, int rising)
{
    (void)context;
    (void)t;
    (void)u;
    (void)which;
    if (!rising && x[1] < 0) {
        x[0] = 0;
        x[1] *= -0.5;
        x[2] += 1; // a mode: bounces so far
    }
    return 0;
}

// From 5 m at 10 m/s^2: down at 1 s with 10 m/s; up with 5 m/s, down again at 2 s, up with 2.5 m/s.
START_TEST(an_end_stop_turns_a_body_round)
{
    const double start[] = {5, 0};
    lw_flow_def def = flow_def(2, 0, start, falling);
    def.n_switches = def.n_modes = 1;
    def.switches = height;
    def.happened = bounces;
    ck_near(end_of(flow_plant(def, 1e-10), 1.5, "p.x"), 5 * 0.5 - 5 * 0.25, 1e-9, 1);
    ck_near(end_of(flow_plant(def, 1e-10), 2.25, "p.v"), 2.5 - 2.5, 1e-9, 1);
    ck_near(end_of(flow_plant(def, 1e-10), 2.25, "p.x"), 2.5 * 0.25 - 5 * 0.0625, 1e-9, 1);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("flow");
    TCase *ends = tcase_create("ends");
    tcase_add_loop_test(ends, van_der_pol_ends_where_published, 0, 2);
    tcase_add_test(ends, a_slightly_other_oscillator_ends_elsewhere);
    tcase_add_test(ends, a_free_pendulum_keeps_its_energy);
    tcase_add_test(ends, logistic_growth_ends_where_published);
    tcase_add_test(ends, kinks_are_located);
    suite_add_tcase(suite, ends);
    TCase *sources = tcase_create("sources");
    tcase_add_test(sources, a_sine_drives_a_flow_in_closed_form);
    tcase_add_test(sources, a_ramp_drives_a_flow_around_its_corners);
    tcase_add_test(sources, a_square_wave_switches_a_flow_at_its_edges);
    suite_add_tcase(suite, sources);
    TCase *jumps = tcase_create("jumps");
    tcase_add_test(jumps, an_end_stop_turns_a_body_round);
    suite_add_tcase(suite, jumps);
    return run_suite(suite);
}
