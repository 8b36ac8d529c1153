// Groups that hold flows keep the promises of every group: observing changes nothing, lanes and
// chunks change nothing, a copied block is a copied run; mixed groups are what their parts are; a
// failure has an instant and a name.

#include "flows.h"

#include "base/alloc.h"
#include "run/freeze.h"

#include <latewood/timing.h>

// ---- a rig: a motor (linear) turns a tube that hangs to one side (flow); a current loop and a
// speed loop; a gust; jitter

#define FRICTION 0.015
#define HANG 0.05
#define DRAG 0.002

static int tube(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = x[1];
    double drag = DRAG * x[1] * fabs(x[1]) + FRICTION * lw_tanh(x[1] / 0.4);
    dx[1] = (u[0] - drag - HANG * lw_sin(x[0] + 0.3) + u[1]) / 0.0012;
    return 0;
}

// The drag has a kink where the tube turns round.
static int turns_round(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)t;
    (void)u;
    g[0] = x[1];
    return 0;
}

static int tube_outputs(void *context, double t, const double *x, const double *u, double *y)
{
    (void)context;
    (void)t;
    (void)u;
    y[0] = lw_sin(x[0]);
    y[1] = 0; // bears the name of a state: that is what it is
    return 0;
}

typedef struct extras {
    int records, metrics, lonely_loop;
    double rtol;
} extras;

static lw_plant *tube_plant(double rtol)
{
    static const char *const states[] = {"angle", "speed"}, *const inputs[] = {"torque", "gust"},
                             *const outputs[] = {"height", "speed"};
    lw_flow_def def = lw_flow_default();
    def.n_x = def.n_u = def.n_y = 2;
    def.state_names = states;
    def.input_names = inputs;
    def.output_names = outputs;
    def.flow = tube;
    def.outputs = tube_outputs;
    def.n_switches = 1;
    def.switches = turns_round;
    def.direct = 0;
    return flow_plant(def, rtol > 0 ? rtol : 1e-8);
}

// Winding and torque constant of the motor: volts, speed -> torque.
static lw_plant *motor_plant(void)
{
    static const char *const inputs[] = {"volts", "speed"}, *const outputs[] = {"torque"};
    const double a = -1.2 / 0.0018, b[] = {1 / 0.0018, -0.11 / 0.0018}, c = 0.11;
    lw_plant *plant = NULL;
    OK(lw_plant_state_space(1, 2, 1, &a, b, &c, NULL, NULL, NULL, inputs, outputs, &plant, e));
    return plant;
}

static void add_gust(lw_rig *rig)
{
    lw_source_def gust = lw_source_default(LW_SOURCE_SINE);
    gust.name = "gust";
    gust.at = 2e-3;
    gust.frequency = 130;
    gust.level = 0.02;
    OK(lw_rig_add_source(rig, &gust, e));
    OK(lw_rig_connect(rig, NULL, "gust", "tube.gust", e));
}

static void add_plants(lw_rig *rig, double rtol)
{
    lw_plant *a = tube_plant(rtol), *b = motor_plant();
    OK(lw_rig_add_plant(rig, NULL, "tube", a, e));
    OK(lw_rig_add_plant(rig, NULL, "motor", b, e));
    lw_plant_free(a);
    lw_plant_free(b);
    OK(lw_rig_connect(rig, NULL, "motor.torque", "tube.torque", e));
    OK(lw_rig_connect(rig, NULL, "tube.speed", "motor.speed", e));
    add_gust(rig);
    lw_source_def wanted = lw_source_default(LW_SOURCE_STEP);
    wanted.name = "speed wanted";
    wanted.at = 1e-3;
    wanted.level = 2;
    OK(lw_rig_add_source(rig, &wanted, e));
}

static void add_loop(lw_rig *rig, const char *name, const char *of, const char *to, double volts,
                     lw_tick every)
{
    char names[2][40];
    snprintf(names[0], sizeof names[0], "%s adc", name);
    snprintf(names[1], sizeof names[1], "%s dac", name);
    lw_adc_def adc = lw_adc_default();
    adc.name = names[0];
    adc.of = &of;
    adc.every = lw_period_of_ticks(every);
    adc.quantiser = (lw_quantiser){12, -20, 20, LW_ROUND_NEAREST};
    OK(lw_rig_add_adc(rig, &adc, e));
    lw_dac_def dac = lw_dac_default();
    dac.name = names[1];
    dac.to = to;
    dac.quantiser = (lw_quantiser){11, -volts, volts, LW_ROUND_NEAREST};
    OK(lw_rig_add_dac(rig, &dac, e));
    lw_pid pid = lw_pid_default();
    pid.kp = 2;
    pid.ki = 30;
    pid.lo = -volts;
    pid.hi = volts;
    lw_law *law = NULL;
    lw_timing *jitter = NULL;
    OK(lw_law_pid("pi", &pid, &law, e));
    OK(lw_timing_uniform(2e-6, 61e-6, &jitter, e));
    lw_wire in[2] = {{"wanted", "speed wanted", 0}, {"measured", names[0], 0}},
            out = {"out", names[1], 0};
    lw_loop_def loop = lw_loop_default();
    loop.name = name;
    loop.law = law;
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency.timing = jitter;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_law_free(law);
    lw_timing_free(jitter);
}

static lw_rig *axis(extras x)
{
    lw_rig *rig = NULL;
    OK(lw_rig_new("axis", &rig, e));
    add_plants(rig, x.rtol);
    add_loop(rig, "speed", "tube.speed", "motor.volts", 16, 100 * US);
    if (x.lonely_loop) {
        lw_plant *other = NULL;
        OK(lw_plant_first_order(1, 1e-3, &other, e));
        OK(lw_rig_add_plant(rig, NULL, "other", other, e));
        lw_plant_free(other);
        add_loop(rig, "lonely", "other.out", "other.in", 8, 35 * US);
    }
    return rig;
}

static void add_records(lw_watch *watch)
{
    static const lw_tick at[] = {0, 12345678, 12345678, 50 * US, 777 * US, 8 * MS};
    lw_record_def odd = {.signal = "tube.height", .n = 6, .at = at};
    lw_record_def fine = {.signal = "motor.torque", .every = {777777, 1}, .until = LW_NEVER};
    lw_record_def angle = {.signal = "tube.angle", .every = {31 * US, 1}, .until = LW_NEVER};
    OK(lw_watch_record(watch, &odd, e));
    OK(lw_watch_record(watch, &fine, e));
    OK(lw_watch_record(watch, &angle, e));
    OK(lw_watch_events(watch, NULL, "speed adc", 0, e));
}

// Metrics of signals and loops; those of tasks have nothing here.
static void add_metric(lw_watch *watch, lw_metric_kind kind)
{
    static const char *const of[] = {"tube.height", "tube.speed", "motor.torque"};
    static const double corners[] = {0, 1e-3}, low[] = {-1, 0}, high[] = {1, 0};
    lw_metric_def m = lw_metric_default(kind);
    m.name = lw_metric_words(kind);
    int of_loop =
        strstr(m.name, "latency") != NULL || kind == LW_METRIC_LOST || kind == LW_METRIC_MISSED;
    int of_dac = kind == LW_METRIC_SATURATION_TIME || strstr(m.name, "gap") != NULL ||
                 strstr(m.name, "output age") != NULL;
    if (kind >= LW_METRIC_LATENESS_MEAN && kind != LW_METRIC_GAP && kind != LW_METRIC_GAP_MEAN)
        return;
    m.of = of_loop ? "speed" : of_dac ? "speed dac" : of[kind % 3];
    if (strstr(m.name, "mask") != NULL) {
        m.n_mask = 2;
        m.mask_time = corners;
        m.mask_low = low;
        m.mask_high = high;
    }
    m.against = of_loop ? NULL : "speed wanted";
    m.from = 123 * US;
    m.step = strstr(m.name, "reversals") || strstr(m.name, "chatter") ? 1e-6 : m.step;
    OK(lw_watch_metric(watch, &m, e));
}

static lw_watch *observe(extras x)
{
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    if (x.records)
        add_records(watch);
    for (int kind = 0; x.metrics && kind <= LW_METRIC_MISSED; kind++)
        add_metric(watch, (lw_metric_kind)kind);
    return watch;
}

static lw_frozen *frozen_axis(extras x)
{
    lw_rig *rig = axis(x);
    lw_watch *watch = observe(x);
    lw_frozen *frozen = NULL;
    OK(lw_rig_freeze(rig, watch, 8 * MS, &frozen, e));
    lw_rig_free(rig);
    lw_watch_free(watch);
    return frozen;
}

static lw_run *run_of(lw_frozen *frozen, int width, uint64_t first, lw_tick until)
{
    lw_run *run = NULL;
    OK(lw_run_new(frozen, width, 77, first, &run, e));
    lw_run_advance(run, until);
    for (int k = 0; k < width; k++)
        OK(lw_run_status(run, k, e));
    return run;
}

// ---- observing

static const unsigned char *cells_of(const lw_run *run, const lw_frozen *z, const lw_slice *s)
{
    int64_t n_f = 0;
    for (int i = 0; i < lw_frozen_n_slices(z); i++) {
        lw_slice t = lw_frozen_slice(z, i);
        n_f += t.is_integer ? 0 : t.count;
    }
    return (const unsigned char *)lw_run_block(run) + 8 * (s->offset + (s->is_integer ? n_f : 0));
}

static int compare_common(const lw_run *a, const lw_frozen *za, const lw_run *b,
                          const lw_frozen *zb)
{
    int compared = 0;
    for (int i = 0; i < lw_frozen_n_slices(za); i++) {
        lw_slice s = lw_frozen_slice(za, i);
        for (int j = 0; j < lw_frozen_n_slices(zb); j++) {
            lw_slice t = lw_frozen_slice(zb, j);
            if (s.kind == LW_SLICE_METRIC || strcmp(s.owner, t.owner) != 0 ||
                strcmp(s.name, t.name) != 0 || s.count != t.count)
                continue;
            ck_assert_msg(memcmp(cells_of(a, za, &s), cells_of(b, zb, &t), (size_t)(8 * s.count)) ==
                              0,
                          "%s of %s differs", s.name, s.owner);
            compared++;
        }
    }
    return compared;
}

START_TEST(observing_a_flow_changes_no_other_byte)
{
    static const extras list[] = {{1, 0, 0, 0}, {0, 1, 0, 0}, {0, 0, 1, 0}, {1, 1, 1, 0}};
    lw_frozen *plain = frozen_axis((extras){0}), *more = frozen_axis(list[_i]);
    lw_run *a = run_of(plain, 1, 5, 8 * MS), *b = run_of(more, 1, 5, 8 * MS);
    ck_assert_int_gt(compare_common(a, plain, b, more), 30);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(plain);
    lw_frozen_free(more);
}
END_TEST

// What is asked in between is a trial: asking changes nothing, and what is told is what comes.
START_TEST(reading_in_between_changes_nothing)
{
    lw_frozen *z = frozen_axis((extras){1, 1, 0, 0});
    lw_run *a = run_of(z, 1, 5, 8 * MS), *b = run_of(z, 1, 5, 0);
    lw_signal height, torque;
    OK(lw_frozen_signal(z, "tube.height", &height, e));
    OK(lw_frozen_signal(z, "motor.torque", &torque, e));
    double sum = 0;
    for (lw_tick t = 0; t <= 8 * MS; t += 33333333) {
        ck_assert_int_eq(lw_run_advance(b, t), LW_OK);
        sum += lw_run_read(b, 0, height) + lw_run_read(b, 0, torque);
    }
    ck_assert(isfinite(sum) && sum != 0);
    ck_assert_int_eq(lw_run_advance(b, 8 * MS), LW_OK);
    ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) == 0);
    lw_run_finish(a);
    lw_run_finish(b);
    for (int m = 0; m < lw_frozen_n_metrics(z); m++) {
        double x = lw_run_metric(a, 0, m), y = lw_run_metric(b, 0, m);
        ck_assert_msg(memcmp(&x, &y, sizeof x) == 0, "%s", lw_frozen_metric_name(z, m));
    }
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(z);
}
END_TEST

// ---- lanes, copies

static void same_records(const lw_run *a, int lane_a, const lw_run *b, int lane_b,
                         const lw_frozen *z)
{
    for (int r = 0; r < lw_frozen_n_records(z); r++) {
        int64_t rows = lw_run_record_rows(a, lane_a, r);
        ck_assert_int_gt(rows, 0);
        ck_assert_int_eq(lw_run_record_rows(b, lane_b, r), rows);
        for (int64_t i = 0; i < rows; i++)
            for (int c = 0; c < lw_frozen_record_n_columns(z, r); c++) {
                double x = lw_run_record_cell(a, lane_a, r, i, c),
                       y = lw_run_record_cell(b, lane_b, r, i, c);
                ck_assert(memcmp(&x, &y, sizeof x) == 0);
            }
    }
}

START_TEST(flows_side_by_side_are_flows_alone)
{
    lw_frozen *z = frozen_axis((extras){1, 1, 1, 0});
    lw_run *wide = run_of(z, 5, 100, 8 * MS);
    lw_run_finish(wide);
    unsigned char *lane = malloc(lw_run_lane_size(wide));
    for (int k = 0; k < 5; k++) {
        lw_run *alone = run_of(z, 1, 100 + (uint64_t)k, 8 * MS);
        lw_run_finish(alone);
        lw_run_lane(wide, k, lane);
        ck_assert(memcmp(lane, lw_run_block(alone), lw_run_block_size(alone)) == 0);
        same_records(alone, 0, wide, k, z);
        lw_run_free(alone);
    }
    free(lane);
    lw_run_free(wide);
    lw_frozen_free(z);
}
END_TEST

START_TEST(a_copied_block_goes_on_as_the_run)
{
    lw_frozen *z = frozen_axis((extras){.metrics = 1});
    lw_run *a = run_of(z, 1, 3, 8 * MS / 3), *b = run_of(z, 1, 9, MS);
    ck_assert_int_eq(lw_run_copy(b, a), LW_OK);
    ck_assert_int_eq(lw_run_advance(a, 8 * MS), LW_OK);
    ck_assert_int_eq(lw_run_advance(b, 8 * MS), LW_OK);
    ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) == 0);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(z);
}
END_TEST

// ---- records and metrics

// Rows come late but complete and in order, and are what reading at their instants gives.
START_TEST(records_of_flows_are_complete_and_true)
{
    lw_frozen *z = frozen_axis((extras){1, 0, 0, 0});
    lw_run *run = run_of(z, 1, 5, 8 * MS);
    lw_run_finish(run);
    ck_assert_int_eq(lw_run_record_rows(run, 0, 0), 6);
    ck_assert_int_eq(lw_run_record_rows(run, 0, 1), 8 * MS / 777777 + 1);
    static const char *const names[] = {"tube.height", "motor.torque", "tube.angle"};
    for (int r = 0; r < 3; r++) {
        lw_run *again = run_of(z, 1, 5, 0);
        lw_signal signal;
        OK(lw_frozen_signal(z, names[r], &signal, e));
        double before = 0;
        int64_t rows = lw_run_record_rows(run, 0, r);
        for (int64_t i = 0; i < rows; i++) {
            double time = lw_run_record_cell(run, 0, r, i, 0);
            ck_assert(time >= before);
            before = time;
            if (i % 7 != 0)
                continue;
            lw_tick at;
            lw_tick_from_seconds(time, &at);
            lw_run_advance(again, at);
            // a trial has steps of its own: ten tolerances and the size of the signal
            ck_near(lw_run_record_cell(run, 0, r, i, 1), lw_run_read(again, 0, signal), 1e-7, 0.1);
        }
        lw_run_free(again);
    }
    lw_run_free(run);
    lw_frozen_free(z);
}
END_TEST

static void metrics_at(double rtol, double *out)
{
    lw_frozen *z = frozen_axis((extras){.metrics = 1, .rtol = rtol});
    lw_run *run = run_of(z, 1, 5, 8 * MS);
    lw_run_finish(run);
    for (int m = 0; m < lw_frozen_n_metrics(z); m++)
        out[m] = lw_run_metric(run, 0, m);
    lw_run_free(run);
    lw_frozen_free(z);
}

// Extremes, integrals, crossings of accepted steps against a run at a far stricter tolerance. The
// quantisers see the same codes, so only the steps differ.
START_TEST(metrics_of_flows_hold_ten_tolerances)
{
    double loose[64], strict[64];
    lw_frozen *z = frozen_axis((extras){.metrics = 1});
    metrics_at(1e-8, loose);
    metrics_at(1e-12, strict);
    int n_finite = 0;
    for (int m = 0; m < lw_frozen_n_metrics(z); m++) {
        if (isnan(strict[m]) && isnan(loose[m]))
            continue;
        ck_assert_msg(fabs(loose[m] - strict[m]) <= 1e-7 * fmax(1, fabs(strict[m])),
                      "%s is %.15g, at 1e-12 %.15g", lw_frozen_metric_name(z, m), loose[m],
                      strict[m]);
        n_finite++;
    }
    ck_assert_int_gt(n_finite, 15);
    lw_frozen_free(z);
}
END_TEST

// ---- mixed groups

static int whole(void *context, double t, const double *x, const double *u, double *dx)
{
    const double inner[] = {0.11 * x[2], u[1]};
    tube(context, t, x, inner, dx);
    dx[2] = (u[0] - 1.2 * x[2] - 0.11 * x[1]) / 0.0018;
    return 0;
}

static double speed_of(int mixed)
{
    static const char *const states[] = {"angle", "speed", "current"}, *const inputs[] = {"volts",
                                                                                          "gust"};
    lw_rig *rig = NULL;
    OK(lw_rig_new("axis", &rig, e));
    if (mixed) {
        add_plants(rig, 1e-12);
    } else {
        lw_flow_def def = lw_flow_default();
        def.n_x = 3;
        def.n_u = 2;
        def.state_names = states;
        def.input_names = inputs;
        def.flow = whole;
        def.n_switches = 1;
        def.switches = turns_round;
        lw_plant *plant = flow_plant(def, 1e-12);
        OK(lw_rig_add_plant(rig, NULL, "tube", plant, e));
        lw_plant_free(plant);
        add_gust(rig);
    }
    OK(lw_rig_add_value(rig, NULL, "level", 5, e));
    OK(lw_rig_connect(rig, NULL, "level", mixed ? "motor.volts" : "tube.volts", e));
    lw_frozen *z = freeze_rig(rig, NULL, 20 * MS);
    lw_run *run = run_of(z, 1, 1, 20 * MS);
    lw_signal speed;
    OK(lw_frozen_signal(z, "tube.speed", &speed, e));
    double value = lw_run_read(run, 0, speed);
    lw_run_free(run);
    lw_frozen_free(z);
    return value;
}

START_TEST(a_mixed_group_is_its_parts_as_one_flow)
{
    double alone = speed_of(0);
    ck_assert(alone > 1); // it does turn
    ck_near(speed_of(1), alone, 1e-11, 1);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("flow group");
    TCase *watch = tcase_create("observing");
    tcase_add_loop_test(watch, observing_a_flow_changes_no_other_byte, 0, 4);
    tcase_add_test(watch, reading_in_between_changes_nothing);
    suite_add_tcase(suite, watch);
    TCase *block = tcase_create("block");
    tcase_add_test(block, flows_side_by_side_are_flows_alone);
    tcase_add_test(block, a_copied_block_goes_on_as_the_run);
    suite_add_tcase(suite, block);
    TCase *figures = tcase_create("figures");
    tcase_add_test(figures, records_of_flows_are_complete_and_true);
    tcase_add_test(figures, metrics_of_flows_hold_ten_tolerances);
    tcase_add_test(figures, a_mixed_group_is_its_parts_as_one_flow);
    suite_add_tcase(suite, figures);
    return run_suite(suite);
}
