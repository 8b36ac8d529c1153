// The promises of runs, for rigs with processors: runs side by side are runs alone, observing and
// adding change no other byte, a copied block goes on as the run, draws are addressed, a failed
// allocation leaves nothing behind.

#include "loops.h"

#include "base/alloc.h"
#include "run/freeze.h"

#include <latewood/cpu.h>
#include <latewood/timing.h>

// ---- a rig with two cores and a bus, and something of everything on them

typedef struct extras {
    int records, metrics, idle_tasks; // idle: of a third core, released by the first's finishes
} extras;

typedef struct builder {
    lw_rig *rig;
    lw_task_def task;
    lw_timing *own[3]; // takes, arrives, jitter
} builder;

static lw_timing *uniform(double lo, double hi)
{
    lw_timing *t = NULL;
    OK(lw_timing_uniform(lo, hi, &t, e));
    return t;
}

static lw_timing *bursts(double quiet, double burst)
{
    lw_timing *a = uniform(quiet, 1.5 * quiet), *b = uniform(burst, 1.5 * burst), *t = NULL;
    OK(lw_timing_modes(a, b, 0.2, 0.3, &t, e));
    lw_timing_free(a);
    lw_timing_free(b);
    return t;
}

static builder begin_task(lw_rig *rig, const char *name, const char *on, int priority,
                          lw_timing *takes)
{
    builder b = {rig, lw_task_default(), {takes, NULL, NULL}};
    b.task.name = name;
    b.task.on = on;
    b.task.priority = priority;
    b.task.is_priority = 1;
    b.task.takes = takes;
    return b;
}

static void add(builder *b)
{
    OK(lw_rig_add_task(b->rig, &b->task, e));
    for (int i = 0; i < 3; i++)
        lw_timing_free(b->own[i]);
}

static void add_controlled(lw_rig *rig)
{
    lw_plant *plant = integrator(40);
    const char *of = "plant.out";
    OK(lw_rig_add_plant(rig, NULL, "plant", plant, e));
    lw_plant_free(plant);
    lw_adc_def adc = lw_adc_default();
    adc.name = "adc";
    adc.of = &of;
    adc.every = lw_period_of_ticks(100 * US);
    adc.takes = 2e-6;
    adc.noise = 1e-3;
    OK(lw_rig_add_adc(rig, &adc, e));
    lw_dac_def dac = lw_dac_default();
    dac.name = "dac";
    dac.to = "plant.in";
    dac.on_missed = 1;
    dac.missed = 0.25;
    OK(lw_rig_add_dac(rig, &dac, e));
    OK(lw_rig_add_value(rig, NULL, "wanted", 1, e));
    OK(lw_rig_add_value(rig, NULL, "asked", 0, e));
}

static void add_cores(lw_rig *rig)
{
    static const char *const resources[] = {"spi"};
    lw_core_def a = lw_core_default(), b = lw_core_default();
    a.name = "first";
    a.urgent = LW_URGENT_LARGER;
    a.locking = LW_LOCKING_INHERITANCE;
    a.n_resources = 1;
    a.resources = resources;
    a.context_switch = (lw_span){0.7e-6, 0};
    a.release_cost = (lw_span){0.2e-6, 0};
    OK(lw_rig_add_core(rig, &a, e));
    b.name = "second";
    b.clock = 80e6;
    b.drift = 40e-6;
    b.policy = LW_POLICY_EARLIEST_DEADLINE;
    b.dispatch_cost = (lw_span){25, 1};
    b.timer_tick = lw_period_of_ticks(10 * US);
    OK(lw_rig_add_core(rig, &b, e));
    lw_bus_def bus = lw_bus_default();
    bus.name = "bus";
    bus.rate = 2e6;
    OK(lw_rig_add_bus(rig, &bus, e));
}

// A law on an input and an output; the rig holds it.
static void compute(builder *b, const char *wanted, const char *measured, const char *output)
{
    lw_wire in[2] = {{"wanted", wanted, 0}, {"measured", measured, 0}}, out = {"out", output, 0};
    lw_law *law = p_law(0.8);
    b->task.law = law;
    b->task.n_inputs = 2;
    b->task.inputs = in;
    b->task.n_outputs = 1;
    b->task.outputs = &out;
    add(b);
    lw_law_free(law);
}

static void add_tasks(lw_rig *rig)
{
    const lw_section spi = {"spi", {LW_PLACE_SHARE, {0.2, 0}}, {LW_PLACE_SHARE, {0.8, 0}}};
    const lw_section masked = {NULL, {LW_PLACE_SHARE, {0, 0}}, {LW_PLACE_SHARE, {0.1, 0}}};
    builder b = begin_task(rig, "control", "first", 5, bursts(15e-6, 70e-6));
    b.task.released_by = "adc";
    b.task.overrun = LW_OVERRUN_SKIP;
    b.task.n_sections = 1;
    b.task.sections = &spi;
    compute(&b, "asked", "adc", "dac");
    b = begin_task(rig, "link", "first", 9, uniform(2e-6, 30e-6));
    b.task.arrives = b.own[1] = bursts(60e-6, 8e-6);
    add(&b);
    b = begin_task(rig, "store", "first", 1, uniform(10e-6, 60e-6));
    b.task.every = lw_period_of_ticks(170 * US);
    b.task.jitter = b.own[2] = uniform(0, 40e-6);
    b.task.overrun = LW_OVERRUN_ABORT;
    b.task.n_sections = 1;
    b.task.sections = &spi;
    add(&b);
    b = begin_task(rig, "after", "second", 0, uniform(5e-6, 20e-6));
    b.task.released_by = "control";
    b.task.jitter = b.own[2] = uniform(0, 90e-6);
    b.task.deadline = 1e-4;
    b.task.queue = 3;
    b.task.n_sections = 1;
    b.task.sections = &masked;
    add(&b);
    b = begin_task(rig, "plan", "second", 0, uniform(20e-6, 150e-6));
    b.task.every = lw_period_of_ticks(300 * US);
    b.task.logical = 300e-6;
    compute(&b, "wanted", "plant.out", "asked");
}

static void add_frames(lw_rig *rig)
{
    lw_frame_def f = lw_frame_default();
    f.name = "status";
    f.on = "bus";
    f.priority = 4;
    f.bytes = 8;
    f.stuffing = LW_STUFFING_RANDOM;
    f.released_by = "control";
    f.lost = 0.2;
    OK(lw_rig_add_value(rig, NULL, "seen", 0, e));
    f.carries = "plant.out";
    f.to = "seen";
    OK(lw_rig_add_frame(rig, &f, e));
}

static void add_idle(lw_rig *rig, int n)
{
    static char name[80][16];
    lw_core_def c = lw_core_default();
    c.name = "third";
    c.urgent = LW_URGENT_LARGER;
    OK(lw_rig_add_core(rig, &c, e));
    c.name = "fourth";
    OK(lw_rig_add_core(rig, &c, e));
    for (int i = 0; i < n; i++) {
        snprintf(name[i], sizeof name[i], "idle %d", i);
        builder b =
            begin_task(rig, name[i], i % 2 ? "third" : "fourth", i % 7, uniform(0.1e-6, 0.4e-6));
        b.task.released_by = "control";
        add(&b);
    }
}

static lw_rig *everything(extras x)
{
    lw_rig *rig = NULL;
    OK(lw_rig_new("everything", &rig, e));
    add_controlled(rig);
    add_cores(rig);
    add_tasks(rig);
    add_frames(rig);
    if (x.idle_tasks > 0)
        add_idle(rig, x.idle_tasks);
    return rig;
}

static lw_watch *observe(extras x)
{
    static const char *const names[] = {"first", "second", "bus",  "control", "link",
                                        "store", "after",  "plan", "status"};
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    for (int i = 0; x.records && i < 9; i++)
        OK(lw_watch_events(watch, NULL, names[i], 0, e));
    for (int kind = (int)LW_METRIC_LATENCY_PERCENTILE; x.metrics && kind < lw_metric_count();
         kind++) {
        lw_metric_def m = lw_metric_default((lw_metric_kind)kind);
        m.name = lw_metric_words(m.kind);
        m.of = names[3 + kind % 6];
        OK(lw_watch_metric(watch, &m, e));
    }
    return watch;
}

static lw_frozen *freeze(extras x)
{
    lw_watch *watch = observe(x);
    lw_frozen *z = freeze_rig(everything(x), watch, 20 * MS);
    lw_watch_free(watch);
    return z;
}

static lw_run *run_of(lw_frozen *z, int width, uint64_t first, lw_tick until)
{
    lw_run *run = NULL;
    OK(lw_run_new(z, width, 99, first, &run, e));
    if (lw_run_advance(run, until) != LW_OK)
        for (int k = 0; k < width; k++)
            OK(lw_run_status(run, k, e));
    return run;
}

// ---- tests

START_TEST(runs_side_by_side_are_runs_alone)
{
    extras x = {1, 1, _i};
    lw_frozen *z = freeze(x);
    lw_run *wide = run_of(z, 5, 3, 20 * MS);
    unsigned char *lane = malloc(lw_run_lane_size(wide));
    for (int k = 0; k < 5; k++) {
        lw_run *alone = run_of(z, 1, 3 + (uint64_t)k, 20 * MS);
        lw_run_lane(wide, k, lane);
        ck_assert(memcmp(lane, lw_run_block(alone), lw_run_block_size(alone)) == 0);
        for (int r = 0; r < lw_frozen_n_records(z); r++) {
            ck_assert_int_gt(lw_run_record_rows(alone, 0, r), 10);
            ck_assert_int_eq(lw_run_record_rows(wide, k, r), lw_run_record_rows(alone, 0, r));
        }
        lw_run_free(alone);
    }
    free(lane);
    lw_run_free(wide);
    lw_frozen_free(z);
}
END_TEST

// Cells of the slice of that owner and name, the n-th of them; NULL where there is none.
static const void *cells(const lw_run *run, const lw_frozen *z, const lw_slice *like, int nth)
{
    for (int i = 0; i < lw_frozen_n_slices(z); i++) {
        lw_slice s = lw_frozen_slice(z, i);
        if (strcmp(s.owner, like->owner) != 0 || strcmp(s.name, like->name) != 0 || nth-- > 0)
            continue;
        int64_t doubles = 0;
        for (int j = 0; j < lw_frozen_n_slices(z); j++)
            doubles += lw_frozen_slice(z, j).is_integer ? 0 : lw_frozen_slice(z, j).count;
        return (const int64_t *)lw_run_block(run) + s.offset + (s.is_integer ? doubles : 0);
    }
    return NULL;
}

// Every slice of `a` but metrics and the timers of the whole rig stands in `b` with the same bytes.
static void same_model(const lw_run *a, const lw_frozen *za, const lw_run *b, const lw_frozen *zb)
{
    for (int i = 0; i < lw_frozen_n_slices(za); i++) {
        lw_slice s = lw_frozen_slice(za, i);
        int nth = 0;
        if (s.kind == LW_SLICE_METRIC || strcmp(s.owner, "everything") == 0)
            continue;
        for (int j = 0; j < i; j++)
            nth += strcmp(lw_frozen_slice(za, j).owner, s.owner) == 0 &&
                   strcmp(lw_frozen_slice(za, j).name, s.name) == 0;
        const void *mine = cells(a, za, &s, nth), *other = cells(b, zb, &s, nth);
        ck_assert_ptr_nonnull(other);
        ck_assert_msg(memcmp(mine, other, (size_t)(8 * s.count)) == 0, "%s of %s differs", s.name,
                      s.owner);
    }
}

// Records, metrics, and two more cores whose 70 tasks bring the rig beyond 64 operations.
static const extras more[] = {{1, 0, 0}, {0, 1, 0}, {0, 0, 70}, {1, 1, 70}};

START_TEST(observing_and_adding_change_no_other_byte)
{
    lw_frozen *plain = freeze((extras){0, 0, 0}), *other = freeze(more[_i]);
    lw_run *a = run_of(plain, 1, 5, 17 * MS), *b = run_of(other, 1, 5, 17 * MS);
    same_model(a, plain, b, other);
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(plain);
    lw_frozen_free(other);
}
END_TEST

// Tasks that only take time, with handlers, overload, costs and random arrivals; in odd sets a law
// on the same core; above 12 tasks releases stand in a tree.
static lw_rig *background(int set)
{
    static char name[20][16];
    lw_rig *rig = NULL;
    OK(lw_rig_new("background", &rig, e));
    add_controlled(rig);
    lw_core_def c = lw_core_default();
    c.name = "core";
    c.urgent = LW_URGENT_SMALLER;
    c.context_switch = (lw_span){set % 3 * 0.4e-6, 0};
    c.dispatch_cost = (lw_span){set % 2 * 0.1e-6, 0};
    OK(lw_rig_add_core(rig, &c, e));
    int n = set < 3 ? 3 + set : 15;
    for (int i = 0; i < n; i++) {
        snprintf(name[i], sizeof name[i], "task %d", i);
        double between = (20 + 13 * i) * 1e-6;
        builder b =
            begin_task(rig, name[i], "core", i, uniform(0.2 * between / n, 2.2 * between / n));
        b.task.interrupt = i == 2;
        b.task.overrun = i % 2 ? LW_OVERRUN_SKIP : LW_OVERRUN_QUEUE;
        b.task.queue = 1 + i % 3;
        if (i % 3 == 1)
            b.task.arrives = b.own[1] = uniform(0.5 * between, 1.5 * between);
        else
            b.task.every = (lw_period){(int64_t)(between * 1e12) * 7 + 3, 7};
        add(&b);
    }
    builder b = begin_task(rig, "control", "core", 100, uniform(3e-6, 20e-6));
    b.task.released_by = "adc";
    if (set % 2 == 1)
        compute(&b, "asked", "adc", "dac");
    else
        lw_timing_free(b.own[0]);
    return rig;
}

START_TEST(the_compiled_driver_of_cores_leaves_the_bytes_of_the_queue_driver)
{
    lw_rig *rig = background(_i);
    lw_frozen *quick = NULL, *queue = NULL;
    OK(lw__freeze(rig, NULL, 20 * MS, 0, &quick, e));
    OK(lw__freeze(rig, NULL, 20 * MS, 1, &queue, e));
    lw_run *a = run_of(quick, 1, 4, 0), *b = run_of(queue, 1, 4, 0);
    for (int k = 1; k <= 40; k++) {
        lw_tick until = k * 500 * US + k % 7 * 3 * US;
        ck_assert_int_eq(lw_run_advance(a, until), LW_OK);
        ck_assert_int_eq(lw_run_advance(b, until), LW_OK);
        for (int i = 0; i < lw_frozen_n_slices(quick); i++) {
            lw_slice s = lw_frozen_slice(quick, i);
            const void *mine = cells(a, quick, &s, 0), *other = cells(b, queue, &s, 0);
            ck_assert_msg(memcmp(mine, other, (size_t)(8 * s.count)) == 0, "%s of %s differs at %d",
                          s.name, s.owner, k);
        }
        ck_assert(memcmp(lw_run_block(a), lw_run_block(b), lw_run_block_size(a)) == 0);
        ck_assert_int_eq(lw_run_n_instants(a, 0), lw_run_n_instants(b, 0));
    }
    lw_run_free(a);
    lw_run_free(b);
    lw_frozen_free(quick);
    lw_frozen_free(queue);
    lw_rig_free(rig);
}
END_TEST

START_TEST(a_copied_block_goes_on_as_the_run)
{
    lw_frozen *z = freeze((extras){0, 1, 0});
    lw_run *run = run_of(z, 2, 8, 9 * MS + 37 * US), *copy = NULL;
    OK(lw_run_new(z, 2, 1, 1, &copy, e));
    ck_assert_int_eq(lw_run_copy(copy, run), LW_OK);
    ck_assert_int_eq(lw_run_advance(run, 20 * MS), LW_OK);
    ck_assert_int_eq(lw_run_advance(copy, 20 * MS), LW_OK);
    ck_assert(memcmp(lw_run_block(run), lw_run_block(copy), lw_run_block_size(run)) == 0);
    lw_run_free(run);
    lw_run_free(copy);
    lw_frozen_free(z);
}
END_TEST

START_TEST(reading_in_between_changes_nothing)
{
    lw_frozen *z = freeze((extras){0, 0, 0});
    lw_run *whole = run_of(z, 1, 2, 5 * MS), *parts = run_of(z, 1, 2, 0);
    for (int k = 1; k <= 1000; k++)
        ck_assert_int_eq(lw_run_advance(parts, k * 5 * US), LW_OK);
    ck_assert(memcmp(lw_run_block(whole), lw_run_block(parts), lw_run_block_size(whole)) == 0);
    lw_run_free(whole);
    lw_run_free(parts);
    lw_frozen_free(z);
}
END_TEST

START_TEST(a_drained_run_has_no_job_left_in_any_lane)
{
    lw_frozen *z = freeze((extras){0, 0, 0});
    lw_run *run = run_of(z, 4, 1, 7 * MS);
    ck_assert_int_eq(lw_run_drain(run), LW_OK);
    unsigned char *lane = malloc(lw_run_lane_size(run));
    for (int k = 0; k < 4; k++) {
        lw_run *alone = run_of(z, 1, 1 + (uint64_t)k, 7 * MS);
        ck_assert_int_eq(lw_run_drain(alone), LW_OK);
        const lw_slice ready = {.owner = "first", .name = "tasks with a job"};
        ck_assert_int_eq(*(const int64_t *)cells(alone, z, &ready, 0), 0);
        ck_assert_int_ge(lw_run_now(alone, 0), 7 * MS);
        lw_run_lane(run, k, lane);
        ck_assert(memcmp(lane, lw_run_block(alone), lw_run_lane_size(run)) == 0);
        lw_run_free(alone);
    }
    free(lane);
    lw_run_free(run);
    lw_frozen_free(z);
}
END_TEST

START_TEST(failed_allocations_leave_nothing_behind)
{
    int failures = 0;
    for (long n = 1; n < 100000; n++) {
        extras x = {1, 1, 0};
        lw_rig *rig = everything(x);
        lw_watch *watch = observe(x);
        lw_frozen *z = NULL;
        lw_run *run = NULL;
        lw_error err;
        lw__alloc_fail_after(n);
        lw_status status = lw_rig_freeze(rig, watch, MS, &z, &err);
        if (status == LW_OK)
            status = lw_run_new(z, 2, 1, 0, &run, &err);
        if (status == LW_OK && lw_run_advance(run, MS) != LW_OK)
            status = lw_run_status(run, 0, NULL) < 0 ? lw_run_status(run, 0, NULL)
                                                     : lw_run_status(run, 1, NULL);
        lw__alloc_fail_after(-1);
        lw_run_free(run);
        lw_frozen_free(z);
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

// Adding a core, a task or a frame while memory fails.
START_TEST(a_definition_that_finds_no_memory_leaves_the_rig_as_it_was)
{
    int failures = 0, done = 0;
    for (long n = 1; n < 200 && !done; n++) {
        lw_rig *rig = NULL;
        lw_error err;
        OK(lw_rig_new("short", &rig, e));
        OK(lw_rig_add_value(rig, NULL, "v", 0, e));
        lw_core_def core = lw_core_default();
        core.name = "core";
        core.urgent = LW_URGENT_LARGER;
        lw_bus_def bus = lw_bus_default();
        bus.name = "bus";
        bus.rate = 1e6;
        lw_frame_def f = lw_frame_default();
        f.name = "frame";
        f.on = "bus";
        f.bytes = 2;
        f.stuffing = LW_STUFFING_RANDOM;
        f.every = lw_period_of_ticks(MS);
        f.carries = f.to = "v";
        lw__alloc_fail_after(n);
        lw_status status = lw_rig_add_core(rig, &core, &err);
        if (status == LW_OK)
            status = lw_rig_add_bus(rig, &bus, &err);
        if (status == LW_OK)
            status = lw_rig_add_frame(rig, &f, &err);
        lw__alloc_fail_after(-1);
        done = status == LW_OK;
        ck_assert(done || status == LW_ERR_MEMORY);
        failures += !done;
        lw_rig_free(rig);
    }
    ck_assert_int_eq(done, 1);
    ck_assert_int_gt(failures, 3);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("schedule seams");
    TCase *t = tcase_create("seams");
    tcase_add_loop_test(t, runs_side_by_side_are_runs_alone, 0, 1);
    tcase_add_loop_test(t, runs_side_by_side_are_runs_alone, 70, 71);
    tcase_add_loop_test(t, observing_and_adding_change_no_other_byte, 0, 4);
    tcase_add_loop_test(t, the_compiled_driver_of_cores_leaves_the_bytes_of_the_queue_driver, 0, 6);
    tcase_add_test(t, a_copied_block_goes_on_as_the_run);
    tcase_add_test(t, reading_in_between_changes_nothing);
    tcase_add_test(t, a_drained_run_has_no_job_left_in_any_lane);
    tcase_add_test(t, failed_allocations_leave_nothing_behind);
    tcase_add_test(t, a_definition_that_finds_no_memory_leaves_the_rig_as_it_was);
    suite_add_tcase(suite, t);
    return run_suite(suite);
}
