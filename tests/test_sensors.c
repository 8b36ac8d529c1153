// Sensors and white noise keep the promises of runs: runs side by side are runs alone, observing
// changes nothing, failed allocations leave nothing behind; weights of the decimation filter.

#include "loops.h"

#include "base/alloc.h"

#include <latewood/sensor.h>

// A wheel pushed about by held noise; the speed of its encoder is taken by time.
static lw_status add_wheel(lw_rig *rig, lw_error *err)
{
    lw_plant *wheel = NULL;
    lw_status status = lw_plant_integrator(1, &wheel, err);
    if (status == LW_OK)
        status = lw_rig_add_plant(rig, NULL, "wheel", wheel, err);
    lw_plant_free(wheel);
    lw_source_def push = lw_source_default(LW_SOURCE_NOISE);
    push.name = "push";
    push.level = 40;
    push.every = lw_period_of_ticks(50 * US);
    if (status == LW_OK)
        status = lw_rig_add_source(rig, &push, err);
    if (status == LW_OK)
        status = lw_rig_connect(rig, NULL, "push", "wheel.in", err);
    lw_encoder_def turn = lw_encoder_default();
    turn.name = "turn";
    turn.of = "wheel.out";
    turn.counts = 20000;
    turn.every = lw_period_of_ticks(100 * US);
    turn.speed_edges = 2;
    turn.edge_clock = lw_period_of_ticks(100 * 1000);
    return status == LW_OK ? lw_rig_add_encoder(rig, &turn, err) : status;
}

// A noisy mass with an encoder on its angle, a decimated and filtered adc on its speed.
static lw_status build(lw_rig *rig, lw_error *err)
{
    static const double a[] = {-50, 0, 1, 0}, b[] = {1, 0}, c[] = {1, 0, 0, 1};
    static const char *const inputs[] = {"force"}, *const outputs[] = {"speed", "angle"};
    lw_plant *plant = NULL;
    lw_status status =
        lw_plant_state_space(2, 1, 2, a, b, c, NULL, NULL, NULL, inputs, outputs, &plant, err);
    if (status == LW_OK)
        status = lw_rig_add_plant(rig, NULL, "mass", plant, err);
    lw_plant_free(plant);
    lw_encoder_def encoder = lw_encoder_default();
    encoder.name = "place";
    encoder.of = "mass.angle";
    encoder.counts = 4096;
    encoder.every = lw_period_of_ticks(100 * US);
    encoder.speed_over = 3;
    if (status == LW_OK)
        status = lw_rig_add_encoder(rig, &encoder, err);
    const char *of = "mass.speed";
    lw_adc_def adc = lw_adc_default();
    adc.name = "speed";
    adc.of = &of;
    const lw_adc_front front = {LW_ANALOG_BUTTERWORTH, 3, 2e4, 2, 8, lw_period_of_ticks(10 * US)};
    if (status == LW_OK)
        status = lw_rig_add_adc_behind(rig, &adc, &front, err);
    if (status == LW_OK)
        status = add_wheel(rig, err);
    const lw_noise_def noise = {NULL, "gusts", "mass.force", 1e-2};
    if (status == LW_OK)
        status = lw_rig_add_noise(rig, &noise, err);
    return status;
}

static lw_watch *observer(void)
{
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    lw_metric_def m = lw_metric_default(LW_METRIC_MAXIMUM);
    m.name = "most";
    m.of = "mass.speed";
    OK(lw_watch_metric(watch, &m, e));
    return watch;
}

static lw_frozen *frozen_rig(const lw_watch *watch)
{
    lw_rig *rig = NULL;
    lw_frozen *z = NULL;
    OK(lw_rig_new("sensors", &rig, e));
    OK(build(rig, e));
    OK(lw_rig_freeze(rig, watch, 8 * MS, &z, e));
    lw_rig_free(rig);
    return z;
}

static double value_of(const lw_run *run, const lw_frozen *z, int lane, const char *name)
{
    lw_signal at;
    OK(lw_frozen_signal(z, name, &at, e));
    return lw_run_read(run, lane, at);
}

static const char *const signals[] = {"mass.speed", "mass.angle", "place",    "place speed",
                                      "speed",      "turn speed", "turn.last"};
enum { N_SIGNALS = sizeof signals / sizeof *signals };

START_TEST(noisy_runs_side_by_side_are_runs_alone)
{
    lw_frozen *z = frozen_rig(NULL);
    lw_run *wide = NULL;
    OK(lw_run_new(z, 8, 3, 40, &wide, e));
    ck_assert_int_eq(lw_run_advance(wide, 8 * MS), LW_OK);
    for (int k = 0; k < 8; k++) {
        lw_run *alone = NULL;
        OK(lw_run_new(z, 1, 3, 40 + (uint64_t)k, &alone, e));
        ck_assert_int_eq(lw_run_advance(alone, 8 * MS), LW_OK);
        for (int i = 0; i < N_SIGNALS; i++) {
            double x = value_of(wide, z, k, signals[i]), y = value_of(alone, z, 0, signals[i]);
            ck_assert_msg(memcmp(&x, &y, sizeof x) == 0, "lane %d: %s", k, signals[i]);
        }
        ck_assert(k == 0 ||
                  value_of(wide, z, k, "mass.speed") != value_of(wide, z, 0, "mass.speed"));
        lw_run_free(alone);
    }
    lw_run_free(wide);
    lw_frozen_free(z);
}
END_TEST

START_TEST(a_metric_of_a_noisy_plant_changes_nothing)
{
    lw_watch *watch = observer();
    lw_frozen *z[2] = {frozen_rig(NULL), frozen_rig(watch)};
    lw_run *run[2] = {NULL, NULL};
    for (int k = 0; k < 2; k++) {
        OK(lw_run_new(z[k], 1, 9, 0, &run[k], e));
        ck_assert_int_eq(lw_run_advance(run[k], 8 * MS), LW_OK);
    }
    for (int i = 0; i < N_SIGNALS; i++) {
        double x = value_of(run[0], z[0], 0, signals[i]), y = value_of(run[1], z[1], 0, signals[i]);
        ck_assert_msg(memcmp(&x, &y, sizeof x) == 0, "%s", signals[i]);
    }
    lw_run_finish(run[1]);
    ck_assert(lw_run_metric(run[1], 0, 0) >= value_of(run[1], z[1], 0, "mass.speed"));
    ck_assert(lw_run_metric(run[1], 0, 0) > 0); // the noise is seen
    for (int k = 0; k < 2; k++) {
        lw_run_free(run[k]);
        lw_frozen_free(z[k]);
    }
    lw_watch_free(watch);
}
END_TEST

START_TEST(failed_allocations_leave_nothing_behind)
{
    int failures = 0;
    for (long n = 1; n < 100000; n++) {
        lw_rig *rig = NULL;
        lw_frozen *z = NULL;
        lw_error err;
        lw__alloc_fail_after(n);
        lw_status status = lw_rig_new("sensors", &rig, &err);
        if (status == LW_OK)
            status = build(rig, &err);
        if (status == LW_OK)
            status = lw_rig_freeze(rig, NULL, MS, &z, &err);
        lw__alloc_fail_after(-1);
        lw_frozen_free(z);
        lw_rig_free(rig);
        if (status == LW_OK)
            break;
        ck_assert_int_eq(status, LW_ERR_MEMORY);
        failures++;
    }
    ck_assert_int_gt(failures, 20);
    ck_assert_int_lt(failures, 99999);
}
END_TEST

// Impulse response: one clock with a mean of 1, the rest 0, read off at each place of a window.
START_TEST(the_filter_weighs_clocks_by_boxes_convolved)
{
    lw_law *law = NULL;
    OK(lw_law_sinc(2, 4, &law, e));
    const lw_law_def *def = lw_law_look(law);
    // common practice: two boxes of 4 give a triangle, over 4^2
    static const double triangle[] = {1, 2, 3, 4, 3, 2, 1, 0};
    for (int hit = 1; hit <= 8; hit++) {
        double state[LW_LAW_MAX_STATES] = {0}, out = 0;
        lw_law_time time = {0, 1e-6, 1e-6, 0, 0};
        for (int k = 0; k <= 8; k++) {
            double in = k >= hit ? 1e-6 : 0;
            time.job = k;
            ck_assert_int_eq(def->step(def->param, &time, &in, state, &out), 0);
        }
        ck_near(out, triangle[8 - hit] / 16, 1e-14, 1); // three roundings
    }
    lw_law_free(law);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("sensors");
    TCase *all = tcase_create("sensors");
    tcase_set_timeout(all, 60);
    tcase_add_test(all, noisy_runs_side_by_side_are_runs_alone);
    tcase_add_test(all, a_metric_of_a_noisy_plant_changes_nothing);
    tcase_add_test(all, failed_allocations_leave_nothing_behind);
    tcase_add_test(all, the_filter_weighs_clocks_by_boxes_convolved);
    suite_add_tcase(suite, all);
    return run_suite(suite);
}
