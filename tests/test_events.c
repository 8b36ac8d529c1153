// Comparators and trips in blocks of several runs, in rigs of many operations, and their memory.

#include "loops.h"

#include "base/alloc.h"

#include <latewood/event.h>
#include <latewood/modes.h>

// A relay about an integrator, `n` times over.
static lw_rig *relays(int n)
{
    lw_rig *rig = NULL;
    OK(lw_rig_new("relays", &rig, e));
    for (int i = 0; i < n; i++) {
        char plant[40], out[50], in[50], dac[40], comparator[40], trip[40];
        lw_plant *p = NULL;
        snprintf(plant, sizeof plant, "x%d", i);
        snprintf(out, sizeof out, "x%d.out", i);
        snprintf(in, sizeof in, "x%d.in", i);
        snprintf(dac, sizeof dac, "push %d", i);
        snprintf(comparator, sizeof comparator, "high %d", i);
        snprintf(trip, sizeof trip, "turn %d", i);
        OK(lw_plant_first_order(3 + i, 1e-3, &p, e));
        OK(lw_rig_add_plant(rig, NULL, plant, p, e));
        lw_plant_free(p);
        lw_dac_def d = lw_dac_default();
        d.name = dac;
        d.to = in;
        d.start = 1;
        OK(lw_rig_add_dac(rig, &d, e));
        lw_comparator_def c = lw_comparator_default();
        c.name = comparator;
        c.of = out;
        c.level = 1;
        c.hysteresis = 0.5 + i;
        c.delay = i * 1e-6;
        OK(lw_rig_add_comparator(rig, &c, e));
        lw_trip_def t = lw_trip_default();
        t.name = trip;
        t.by = comparator;
        t.output = dac;
        t.to = -1;
        t.until = LW_TRIP_CLEAR;
        OK(lw_rig_add_trip(rig, &t, e));
    }
    return rig;
}

static lw_run *run_of(int n, int width)
{
    lw_rig *rig = relays(n);
    lw_frozen *z = NULL;
    lw_run *run = NULL;
    OK(lw_rig_freeze(rig, NULL, 20 * MS, &z, e));
    OK(lw_run_new(z, width, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, 20 * MS), LW_OK);
    lw_frozen_free(z);
    lw_rig_free(rig);
    return run;
}

static void same_for_any_width(int n)
{
    lw_run *one = run_of(n, 1), *three = run_of(n, 3);
    size_t size = lw_run_lane_size(one);
    char *a = malloc(size), *b = malloc(size);
    lw_run_lane(one, 0, a);
    for (int lane = 0; lane < 3; lane++) {
        lw_run_lane(three, lane, b);
        ck_assert_int_eq(memcmp(a, b, size), 0);
    }
    ck_assert_int_gt(lw_run_n_instants(one, 0), 20);
    free(a);
    free(b);
    lw_run_free(one);
    lw_run_free(three);
}

START_TEST(runs_side_by_side_are_the_bytes_of_one)
{
    same_for_any_width(1);
}
END_TEST

START_TEST(so_are_rigs_of_more_than_64_operations)
{
    same_for_any_width(11);
}
END_TEST

// x' = -x / T + k u / T between the two levels: the time from 0.5 up to 1 and back down again.
START_TEST(limit_cycle_has_the_period_of_the_closed_form)
{
    lw_rig *rig = relays(1);
    lw_frozen *z = NULL;
    lw_run *run = NULL;
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    OK(lw_watch_events(watch, NULL, "high 0", 0, e));
    OK(lw_rig_freeze(rig, watch, 20 * MS, &z, e));
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, 20 * MS), LW_OK);
    // from k u = 3: ln((3 - 0.5) / (3 - 1)); back with k u = -3: ln((1 + 3) / (0.5 + 3))
    double period = 1e-3 * (log(2.5 / 2) + log(4 / 3.5));
    int64_t n = lw_run_record_rows(run, 0, 0);
    ck_assert_int_gt(n, 40);
    for (int64_t k = 2; k < n; k++) {
        double step = lw_run_record_cell(run, 0, 0, k, 2) - lw_run_record_cell(run, 0, 0, k - 2, 2);
        // each of the two turns is up to a tick late: 1 ps at a slope of 4000 against 2000
        ck_assert_double_eq_tol(step, period, 4e-12);
    }
    // the twin: a hysteresis a thousandth wider is seen
    ck_assert(fabs(1e-3 * (log(2.5005 / 2) + log(4 / 3.4995)) - period) > 4e-12);
    lw_run_free(run);
    lw_watch_free(watch);
    lw_frozen_free(z);
    lw_rig_free(rig);
}
END_TEST

// ---- plants with modes

// A converter whose gate is closed by its own latch and opened by its own current.
static lw_status add_converter(lw_rig *rig, lw_error *err)
{
    lw_plant *p = NULL;
    lw_switched_converter k = lw_switched_converter_default();
    k.inductance = 100e-6;
    k.capacitance = 100e-6;
    k.load_resistance = 20;
    lw_status status = lw_plant_buck_switched(&k, &p, err);
    if (status == LW_OK)
        status = lw_rig_add_plant(rig, NULL, "buck", p, err);
    lw_plant_free(p);
    lw_source_def supply = lw_source_default(LW_SOURCE_RAMP);
    supply.name = "supply";
    supply.before = 24;
    supply.slope = 100;
    if (status == LW_OK)
        status = lw_rig_add_source(rig, &supply, err);
    return status == LW_OK ? lw_rig_connect(rig, NULL, "supply", "buck.supply", err) : status;
}

static lw_status add_limit(lw_rig *rig, lw_error *err)
{
    lw_dac_def gate = lw_dac_default();
    gate.name = "gate";
    gate.to = "buck.gate";
    gate.latch = lw_period_of_ticks(20 * US);
    gate.start = 1;
    lw_status status = lw_rig_add_dac(rig, &gate, err);
    lw_comparator_def c = lw_comparator_default();
    c.name = "peak";
    c.of = "buck.current";
    c.level = 0.5;
    if (status == LW_OK)
        status = lw_rig_add_comparator(rig, &c, err);
    lw_trip_def t = lw_trip_default();
    t.name = "off";
    t.by = "peak";
    t.output = "gate";
    t.until = LW_TRIP_LATCH;
    return status == LW_OK ? lw_rig_add_trip(rig, &t, err) : status;
}

static lw_status converter(int width, lw_run **run, lw_error *err)
{
    lw_rig *rig = NULL;
    lw_frozen *z = NULL;
    lw_status status = lw_rig_new("converter", &rig, err);
    if (status == LW_OK)
        status = add_converter(rig, err);
    if (status == LW_OK)
        status = add_limit(rig, err);
    if (status == LW_OK)
        status = lw_rig_freeze(rig, NULL, 5 * MS, &z, err);
    if (status == LW_OK)
        status = lw_run_new(z, width, 1, 0, run, err);
    lw_frozen_free(z);
    lw_rig_free(rig);
    return status;
}

START_TEST(plants_with_modes_run_side_by_side_as_alone)
{
    lw_run *one = NULL, *three = NULL;
    OK(converter(1, &one, e));
    OK(converter(3, &three, e));
    ck_assert_int_eq(lw_run_advance(one, 5 * MS), LW_OK);
    ck_assert_int_eq(lw_run_advance(three, 5 * MS), LW_OK);
    size_t size = lw_run_lane_size(one);
    char *a = malloc(size), *b = malloc(size);
    lw_run_lane(one, 0, a);
    for (int lane = 0; lane < 3; lane++) {
        lw_run_lane(three, lane, b);
        ck_assert_int_eq(memcmp(a, b, size), 0);
    }
    ck_assert_int_gt(lw_run_n_instants(one, 0), 500);
    free(a);
    free(b);
    lw_run_free(one);
    lw_run_free(three);
}
END_TEST

START_TEST(lack_of_memory_is_said_and_leaves_nothing_behind)
{
    long n = 1;
    for (; n < 3000; n++) {
        lw_run *run = NULL;
        lw_error err = {LW_OK, ""};
        lw__alloc_fail_after(n);
        lw_status status = converter(1, &run, &err);
        lw__alloc_fail_after(-1);
        lw_run_free(run);
        if (status == LW_OK)
            break;
        ck_assert_int_eq(status, LW_ERR_MEMORY);
    }
    ck_assert(n > 20 && n < 3000);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("events");
    TCase *events = tcase_create("events");
    tcase_add_test(events, runs_side_by_side_are_the_bytes_of_one);
    tcase_add_test(events, so_are_rigs_of_more_than_64_operations);
    tcase_add_test(events, limit_cycle_has_the_period_of_the_closed_form);
    tcase_add_test(events, plants_with_modes_run_side_by_side_as_alone);
    tcase_add_test(events, lack_of_memory_is_said_and_leaves_nothing_behind);
    suite_add_tcase(suite, events);
    return run_suite(suite);
}
