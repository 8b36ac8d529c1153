// The promises later work stands on: observing changes nothing, runs side by side are runs alone,
// a copied block is a copied run, draws are addressed, the compiled driver is the queue driver.

#include "loops.h"

#include "base/alloc.h"
#include "run/freeze.h"

#include <latewood/timing.h>

// ---- a rig with everything: two loops, a cascade, noise, jitter, drops, quantisers, a ramp

typedef struct extras {
    int records, metrics, lonely_loop, another_timing;
} extras;

static void add_axis(lw_rig *rig)
{
    lw_plant *plant = NULL;
    lw_two_mass_drive drive = {0.8, 2e-3, 0.05, (double)NAN, 4e-4, 0.021, 90, 0.02, 1e-5, 1e-4};
    OK(lw_plant_two_mass_drive(&drive, &plant, e));
    OK(lw_rig_add_plant(rig, NULL, "axis", plant, e));
    lw_plant_free(plant);
    lw_source_def wanted = lw_source_default(LW_SOURCE_STEP);
    wanted.name = "speed wanted";
    wanted.at = 1e-3;
    wanted.level = 2;
    OK(lw_rig_add_source(rig, &wanted, e));
    lw_source_def gust = lw_source_default(LW_SOURCE_RAMP);
    gust.name = "gust";
    gust.at = 2e-3;
    gust.slope = 3;
    gust.level = 0.02;
    OK(lw_rig_add_source(rig, &gust, e));
    OK(lw_rig_connect(rig, NULL, "gust", "axis.load_torque", e));
    OK(lw_rig_add_value(rig, NULL, "current wanted", 0, e));
}

static void add_adc(lw_rig *rig, const char *name, const char *of, lw_tick every, double takes)
{
    lw_adc_def adc = lw_adc_default();
    adc.name = name;
    adc.of = &of;
    adc.every = lw_period_of_ticks(every);
    adc.takes = takes;
    adc.noise = 1e-3;
    adc.quantiser = (lw_quantiser){12, -20, 20, LW_ROUND_NEAREST};
    OK(lw_rig_add_adc(rig, &adc, e));
}

static lw_law *pi_law(double kp, double ki, double limit)
{
    lw_law *law = NULL;
    lw_pid pid = lw_pid_default();
    pid.kp = kp;
    pid.ki = ki;
    pid.lo = -limit;
    pid.hi = limit;
    pid.anti_windup = LW_WINDUP_PAUSE;
    OK(lw_law_pid("pi", &pid, &law, e));
    return law;
}

static void add_loop(lw_rig *rig, const char *name, lw_law *law, const char *wanted,
                     const char *measured, const char *output, lw_latency latency)
{
    lw_wire in[2] = {{"wanted", wanted, 0}, {"measured", measured, 0}}, out = {"out", output, 0};
    lw_loop_def loop = lw_loop_default();
    loop.name = name;
    loop.law = law;
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency = latency;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_law_free(law);
}

static void add_dac(lw_rig *rig, const char *name, const char *to)
{
    lw_dac_def dac = lw_dac_default();
    dac.name = name;
    dac.to = to;
    dac.quantiser = (lw_quantiser){11, -24, 24, LW_ROUND_NEAREST};
    OK(lw_rig_add_dac(rig, &dac, e));
}

static lw_latency jitter(double lo, double hi, lw_timing **timing)
{
    OK(lw_timing_uniform(lo, hi, timing, e));
    return (lw_latency){.timing = *timing, .lost = 0.02, .missed = 0.01};
}

static void add_lonely_loop(lw_rig *rig)
{
    lw_plant *plant = NULL;
    OK(lw_plant_first_order(1, 1e-3, &plant, e));
    OK(lw_rig_add_plant(rig, NULL, "lonely", plant, e));
    lw_plant_free(plant);
    lw_timing *timing = NULL;
    lw_latency latency = jitter(3e-6, 9e-6, &timing);
    add_adc(rig, "lonely adc", "lonely.out", 35 * US, 0);
    add_dac(rig, "lonely dac", "lonely.in");
    add_loop(rig, "lonely loop", pi_law(1, 10, 5), "speed wanted", "lonely adc", "lonely dac",
             latency);
    lw_timing_free(timing);
}

static lw_rig *cascade(extras x)
{
    lw_rig *rig = NULL;
    lw_timing *fast = NULL, *slow = NULL;
    OK(lw_rig_new("cascade", &rig, e));
    add_axis(rig);
    if (x.another_timing)
        add_lonely_loop(rig);
    add_adc(rig, "current", "axis.current", 50 * US, 1.1e-6);
    add_adc(rig, "speed", "axis.motor_speed", 500 * US, 0);
    add_dac(rig, "bridge", "axis.voltage");
    lw_latency current = jitter(2e-6, 61e-6, &fast), speed = jitter(38e-6, 610e-6, &slow);
    add_loop(rig, "current loop", pi_law(1.2, 300, 24), "current wanted", "current", "bridge",
             current);
    add_loop(rig, "speed loop", pi_law(0.25, 2, 6), "speed wanted", "speed", "current wanted",
             speed);
    if (x.lonely_loop)
        add_lonely_loop(rig);
    lw_timing_free(fast);
    lw_timing_free(slow);
    return rig;
}

static lw_watch *observe(extras x)
{
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    if (x.records) {
        static const lw_tick at[] = {0, 12345678, 12345678, 50 * US, 777 * US};
        lw_record_def odd = {.signal = "axis.load_speed", .n = 5, .at = at};
        lw_record_def fine = {.signal = "axis.current", .every = {777777, 1}, .until = LW_NEVER};
        OK(lw_watch_record(watch, &odd, e));
        OK(lw_watch_record(watch, &fine, e));
        OK(lw_watch_events(watch, NULL, "current", 0, e));
        OK(lw_watch_events(watch, NULL, "bridge", 0, e));
        OK(lw_watch_events(watch, NULL, "speed loop", 0, e));
    }
    for (int kind = 0; x.metrics && kind <= LW_METRIC_MISSED; kind++) {
        lw_metric_def m = lw_metric_default((lw_metric_kind)kind);
        int of_loop = strstr(lw_metric_words(m.kind), "latency") != NULL ||
                      m.kind == LW_METRIC_LOST || m.kind == LW_METRIC_MISSED;
        m.name = lw_metric_words(m.kind);
        int of_task = kind >= LW_METRIC_LATENESS_MEAN && kind != LW_METRIC_GAP &&
                      kind != LW_METRIC_GAP_MEAN; // the rig has none
        if (of_task)
            continue;
        m.of = of_loop ? "current loop" : "axis.load_speed";
        int of_dac = m.kind == LW_METRIC_SATURATION_TIME || strstr(m.name, "gap") != NULL ||
                     strstr(m.name, "output age") != NULL;
        if (of_dac)
            m.of = "bridge";
        static const double corners[] = {0, 1e-3}, low[] = {-1, 0}, high[] = {1, 0};
        if (strstr(m.name, "mask") != NULL) {
            m.n_mask = 2;
            m.mask_time = corners;
            m.mask_low = low;
            m.mask_high = high;
        }
        m.against = of_loop ? NULL : "speed wanted";
        m.from = 123 * US;
        OK(lw_watch_metric(watch, &m, e));
    }
    return watch;
}

static lw_frozen *frozen_cascade(extras x, int general)
{
    lw_rig *rig = cascade(x);
    lw_watch *watch = observe(x);
    lw_frozen *frozen = NULL;
    OK(lw__freeze(rig, watch, 8 * MS, general, &frozen, e));
    lw_rig_free(rig);
    lw_watch_free(watch);
    return frozen;
}

static lw_run *run_of(lw_frozen *frozen, int width, uint64_t first, lw_tick until)
{
    lw_run *run = NULL;
    OK(lw_run_new(frozen, width, 77, first, &run, e));
    ck_assert_int_eq(lw_run_advance(run, until), LW_OK);
    return run;
}

// ---- comparing slices by name

static const unsigned char *cells_of(const lw_run *run, const lw_frozen *z, const lw_slice *s)
{
    int64_t n_f = 0;
    for (int i = 0; i < lw_frozen_n_slices(z); i++) {
        lw_slice t = lw_frozen_slice(z, i);
        n_f += t.is_integer ? 0 : t.count;
    }
    return (const unsigned char *)lw_run_block(run) + 8 * (s->offset + (s->is_integer ? n_f : 0));
}

// Every slice of `a` that `b` has too, metrics apart, holds the same bytes; the number compared.
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

static void same_with(extras x)
{
    lw_frozen *plain = frozen_cascade((extras){0}, 0), *more = frozen_cascade(x, 0);
    lw_run *a = run_of(plain, 1, 5, 8 * MS), *b = run_of(more, 1, 5, 8 * MS);
    ck_assert_int_gt(compare_common(a, plain, b, more), 50);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(plain);
    lw_frozen_free(more);
}

START_TEST(records_change_no_other_byte)
{
    same_with((extras){.records = 1});
}
END_TEST

START_TEST(metrics_change_no_other_byte)
{
    same_with((extras){.metrics = 1});
}
END_TEST

START_TEST(an_unconnected_loop_changes_no_other_byte)
{
    same_with((extras){.lonely_loop = 1});
    same_with((extras){.another_timing = 1}); // declared first, with a timing of its own
    same_with((extras){1, 1, 1, 0});
}
END_TEST

// The comparison must be able to fail: another run number gives other bytes.
START_TEST(another_run_has_other_bytes)
{
    lw_frozen *z = frozen_cascade((extras){0}, 0);
    lw_run *a = run_of(z, 1, 5, 8 * MS), *b = run_of(z, 1, 6, 8 * MS);
    ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) != 0);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(z);
}
END_TEST

// ---- widths, copies, drivers

// A lane taken out of a wide block against a run alone; names the first slice that differs.
static void same_lane(const unsigned char *lane, const lw_run *alone, const lw_frozen *z, int k)
{
    const unsigned char *block = lw_run_block(alone);
    for (int i = 0; i < lw_frozen_n_slices(z); i++) {
        lw_slice s = lw_frozen_slice(z, i);
        const unsigned char *own = cells_of(alone, z, &s);
        ck_assert_msg(memcmp(own, lane + (own - block), (size_t)(8 * s.count)) == 0,
                      "lane %d: %s of %s differs", k, s.name, s.owner);
    }
    ck_assert(memcmp(lane, block, lw_run_block_size(alone)) == 0);
}

START_TEST(sixteen_runs_side_by_side_are_sixteen_runs_alone)
{
    lw_frozen *z = frozen_cascade((extras){1, 1, 1, 0}, 0);
    lw_run *wide = run_of(z, 16, 100, 8 * MS);
    lw_run_finish(wide);
    unsigned char *lane = malloc(lw_run_lane_size(wide));
    for (int k = 0; k < 16; k++) {
        lw_run *alone = run_of(z, 1, 100 + (uint64_t)k, 8 * MS);
        lw_run_finish(alone);
        lw_run_lane(wide, k, lane);
        same_lane(lane, alone, z, k);
        for (int m = 0; m < lw_frozen_n_metrics(z); m++) {
            double x = lw_run_metric(wide, k, m), y = lw_run_metric(alone, 0, m);
            ck_assert_msg(memcmp(&x, &y, sizeof x) == 0, "%s", lw_frozen_metric_name(z, m));
        }
        for (int r = 0; r < lw_frozen_n_records(z); r++) {
            int64_t rows = lw_run_record_rows(alone, 0, r);
            ck_assert_int_eq(lw_run_record_rows(wide, k, r), rows);
            for (int64_t i = 0; i < rows; i++)
                for (int c = 0; c < lw_frozen_record_n_columns(z, r); c++) {
                    double x = lw_run_record_cell(wide, k, r, i, c),
                           y = lw_run_record_cell(alone, 0, r, i, c);
                    ck_assert(memcmp(&x, &y, sizeof x) == 0);
                }
        }
        lw_run_free(alone);
    }
    free(lane);
    lw_run_free(wide);
    lw_frozen_free(z);
}
END_TEST

START_TEST(copying_the_block_copies_the_run)
{
    lw_frozen *z = frozen_cascade((extras){.metrics = 1}, 0);
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

START_TEST(stopping_on_the_way_changes_nothing)
{
    lw_frozen *z = frozen_cascade((extras){.metrics = 1}, 0);
    lw_run *a = run_of(z, 1, 3, 8 * MS), *b = run_of(z, 1, 3, 0);
    for (lw_tick t = 0; t <= 8 * MS; t += 33333333)
        ck_assert_int_eq(lw_run_advance(b, t), LW_OK);
    ck_assert_int_eq(lw_run_advance(b, 8 * MS), LW_OK);
    ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) == 0);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(z);
}
END_TEST

// Plain loops of several shapes: the compiled driver leaves the bytes of the queue driver.
static lw_rig *plain_loop(int shape)
{
    static const lw_latency_entry entries[] = {
        {0, 0, LW_FATE_WRITTEN}, {0.37, 1, LW_FATE_WRITTEN}, {1, 1, LW_FATE_WRITTEN}};
    simple_loop s = simple_default();
    lw_timing *timing = NULL;
    s.plant = integrator(250);
    s.law = pi_law(9, 500, 15);
    s.adc = (lw_quantiser){12, -4, 4, shape % 2 ? LW_ROUND_FLOOR : LW_ROUND_NEAREST};
    s.dac = (lw_quantiser){shape > 2 ? 10 : 0, -15, 15, LW_ROUND_NEAREST};
    if (shape < 3) {
        s.latency.n_list = 1;
        s.latency.list = &entries[shape];
    } else {
        OK(lw_timing_uniform(0, 1e-4, &timing, e));
        s.latency.timing = timing;
    }
    lw_rig *rig = simple_rig(&s);
    lw_timing_free(timing);
    return rig;
}

START_TEST(the_compiled_driver_leaves_the_bytes_of_the_queue_driver)
{
    lw_rig *rig = plain_loop(_i);
    lw_frozen *fast = NULL, *slow = NULL;
    OK(lw__freeze(rig, NULL, 50 * MS, 0, &fast, e));
    OK(lw__freeze(rig, NULL, 50 * MS, 1, &slow, e));
    ck_assert(fast->sprint != NULL && slow->sprint == NULL); // otherwise nothing is compared
    for (lw_tick until = 333 * US; until < 50 * MS; until *= 3) {
        lw_run *a = run_of(fast, 1, 8, until), *b = run_of(slow, 1, 8, until);
        ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) == 0);
        ck_assert_int_eq(lw_run_n_instants(a, 0), lw_run_n_instants(b, 0));
        lw_run_free(a);
        lw_run_free(b);
    }
    lw_frozen_free(fast);
    lw_frozen_free(slow);
    lw_rig_free(rig);
}
END_TEST

// ---- failures

START_TEST(failed_allocations_leave_nothing_behind)
{
    int failures = 0;
    for (long n = 1; n < 100000; n++) {
        extras x = {1, 1, 0, 0};
        lw_rig *rig = cascade(x);
        lw_watch *watch = observe(x);
        lw_frozen *frozen = NULL;
        lw_run *run = NULL;
        lw_error err;
        lw__alloc_fail_after(n);
        lw_status status = lw_rig_freeze(rig, watch, MS, &frozen, &err);
        if (status == LW_OK)
            status = lw_run_new(frozen, 2, 1, 0, &run, &err);
        if (status == LW_OK && lw_run_advance(run, MS) != LW_OK)
            status = lw_run_status(run, 0, NULL) < 0 ? lw_run_status(run, 0, NULL)
                                                     : lw_run_status(run, 1, NULL);
        lw__alloc_fail_after(-1);
        lw_run_free(run);
        lw_frozen_free(frozen);
        lw_watch_free(watch);
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

int main(void)
{
    Suite *suite = suite_create("seams");
    TCase *watch = tcase_create("observing");
    tcase_add_test(watch, records_change_no_other_byte);
    tcase_add_test(watch, metrics_change_no_other_byte);
    tcase_add_test(watch, an_unconnected_loop_changes_no_other_byte);
    tcase_add_test(watch, another_run_has_other_bytes);
    suite_add_tcase(suite, watch);
    TCase *block = tcase_create("block");
    tcase_add_test(block, sixteen_runs_side_by_side_are_sixteen_runs_alone);
    tcase_add_test(block, copying_the_block_copies_the_run);
    tcase_add_test(block, stopping_on_the_way_changes_nothing);
    tcase_add_loop_test(block, the_compiled_driver_leaves_the_bytes_of_the_queue_driver, 0, 4);
    suite_add_tcase(suite, block);
    TCase *failures = tcase_create("failures");
    tcase_set_timeout(failures, 60);
    tcase_add_test(failures, failed_allocations_leave_nothing_behind);
    suite_add_tcase(suite, failures);
    return run_suite(suite);
}
