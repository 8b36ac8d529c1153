// Flows at their limits: runs that end by a status with instant and name, stiff flows, metrics
// against flows, what is refused and how it is said, memory that fails.

#include "flows.h"

#include "base/alloc.h"

// ---- runs that end

typedef int flow_of(void *context, double t, const double *x, const double *u, double *dx);

static int lost_after(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)u;
    dx[0] = t > 0.3 ? (double)NAN : -x[0];
    return 0;
}

static int escapes(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    (void)u;
    dx[0] = x[0] * x[0];
    return 0;
}

static int fails_after(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)u;
    dx[0] = -x[0];
    return t > 0.6;
}

static int driven_to_border(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)u;
    (void)t;
    dx[0] = x[0] > 0 ? -1 : 1;
    return 0;
}

static int border(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)t;
    (void)u;
    g[0] = x[0];
    return 0;
}

static const struct end_case {
    flow_of *flow;
    int switches;
    lw_status status, or_status;
    double at;
} ends[] = {{lost_after, 0, LW_ERR_NOT_FINITE, LW_ERR_STEP, 0.3},
            {escapes, 0, LW_ERR_NOT_FINITE, LW_ERR_STEP, 1}, // x = 1 / (1 - t)
            {fails_after, 0, LW_ERR_LAW, LW_ERR_LAW, 0.6},
            {driven_to_border, 1, LW_ERR_CHATTER, LW_ERR_STEP, 1}};

static lw_frozen *alone(lw_plant *plant, const lw_watch *watch, lw_tick lasts)
{
    lw_rig *rig = NULL;
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", plant, e));
    lw_plant_free(plant);
    return freeze_rig(rig, watch, lasts);
}

START_TEST(a_flow_that_cannot_go_on_ends_its_run_there)
{
    const struct end_case *c = &ends[_i];
    const double start[] = {1};
    lw_flow_def def = flow_def(1, 0, start, c->flow);
    def.n_switches = c->switches;
    def.switches = border;
    lw_frozen *z = alone(flow_plant(def, 1e-8), NULL, 2 * LW_TICKS_PER_SECOND);
    lw_run *run = NULL;
    lw_error err = {LW_OK, ""};
    OK(lw_run_new(z, 2, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, 2 * LW_TICKS_PER_SECOND), LW_STOPPED);
    for (int lane = 0; lane < 2; lane++) {
        lw_status status = lw_run_status(run, lane, &err);
        ck_assert_msg(status == c->status || status == c->or_status, "%s", err.text);
        ck_assert_msg(strstr(err.text, "\"p\"") != NULL, "%s", err.text);
        // no later than the step that met it, and that one is short
        ck_near(lw_tick_seconds(lw_run_now(run, lane)), c->at, 0.01, 1);
    }
    lw_run_finish(run);
    lw_run_free(run);
    lw_frozen_free(z);
}
END_TEST

// ---- stiff flows

static int stiff_van_der_pol(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    (void)u;
    dx[0] = x[1];
    dx[1] = 1000 * (1 - x[0] * x[0]) * x[1] - x[0];
    return 0;
}

static int counted(void *context, double t, const double *x, const double *u, double *dx)
{
    ++*(long *)context;
    return stiff_van_der_pol(context, t, x, u, dx);
}

// CHECKS VDP, S: F. Mazzia, C. Magherini, Test Set for IVP Solvers, Bari 2008.
START_TEST(a_stiff_flow_ends_where_published)
{
    static long n;
    const double start[] = {2, 0};
    lw_flow_def def = flow_def(2, 0, start, counted);
    def.context = &n;
    double x = end_of(flow_plant(def, 1e-9), 2000, "p.x");
    ck_near(x, 1.706167732170469, 1e-5, 1); // the relaxation lets errors of steps add up
    ck_assert_int_lt(n, 1000000);           // an explicit method would need millions of steps
}
END_TEST

// ---- against a flow

static int lag(void *context, double t, const double *x, const double *u, double *dx)
{
    (void)context;
    (void)t;
    dx[0] = u[0] - x[0];
    return 0;
}

#define SPAN 3.0

// A lag driven by 1 beside its linear twin, a ramp, and a held value that nothing moves.
static lw_rig *lag_rig(void)
{
    static const char *const y[] = {"x"};
    lw_rig *rig = NULL;
    lw_plant *own = flow_plant(flow_def(1, 1, NULL, lag), 1e-10), *twin = NULL, *renamed = NULL;
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "p", own, e));
    OK(lw_plant_first_order(1, 1, &twin, e));
    OK(lw_plant_renamed(twin, NULL, flow_in, y, &renamed, e));
    OK(lw_rig_add_plant(rig, NULL, "twin", renamed, e));
    lw_plant_free(own);
    lw_plant_free(twin);
    lw_plant_free(renamed);
    lw_source_def ramp = lw_source_default(LW_SOURCE_RAMP),
                  one = lw_source_default(LW_SOURCE_CONSTANT);
    ramp.name = "ramp";
    ramp.slope = 1;
    ramp.level = (double)NAN;
    one.name = "one";
    one.level = 1;
    OK(lw_rig_add_source(rig, &ramp, e));
    OK(lw_rig_add_source(rig, &one, e));
    OK(lw_rig_connect(rig, NULL, "one", "p.in", e));
    OK(lw_rig_connect(rig, NULL, "one", "twin.in", e));
    return rig;
}

static double metric_of(lw_metric_kind kind, const char *of, const char *against)
{
    lw_watch *watch = NULL;
    lw_run *run = NULL;
    lw_metric_def m = lw_metric_default(kind);
    OK(lw_watch_new(&watch, e));
    m.name = "m";
    m.of = of;
    m.against = against;
    OK(lw_watch_metric(watch, &m, e));
    lw_tick lasts = (lw_tick)(SPAN * 1e12);
    lw_frozen *z = freeze_rig(lag_rig(), watch, lasts);
    OK(lw_run_new(z, 1, 1, 0, &run, e));
    lw_run_advance(run, lasts);
    lw_run_finish(run);
    OK(lw_run_status(run, 0, e));
    double value = lw_run_metric(run, 0, 0);
    lw_run_free(run);
    lw_frozen_free(z);
    lw_watch_free(watch);
    return value;
}

// x = 1 - e^-t, r = t: the integral of (t - 1 + e^-t)^2.
START_TEST(errors_against_a_flow_and_of_one_are_the_same)
{
    double T = SPAN, far = lw_exp(-T);
    double want = T * T * T / 3 - T * T + T - 2 * T * far + (1 - far * far) / 2;
    ck_near(metric_of(LW_METRIC_ISE, "p.x", "ramp"), want, 1e-8, 1);
    ck_near(metric_of(LW_METRIC_ISE, "ramp", "p.x"), want, 1e-8, 1);
    ck_near(metric_of(LW_METRIC_ISE, "p.x", "one"), (1 - far * far) / 2, 1e-8, 1);
    ck_near(metric_of(LW_METRIC_ISE, "one", "p.x"), (1 - far * far) / 2, 1e-8, 1);
}
END_TEST

// The linear twin, exact, is never far from the flow.
START_TEST(a_linear_signal_against_its_flow_has_no_error)
{
    double peak = metric_of(LW_METRIC_ERROR_PEAK, "twin.x", "p.x");
    ck_assert_msg(peak < 1e-8, "%g", peak);
    ck_assert(metric_of(LW_METRIC_ERROR_PEAK, "twin.x", "ramp") > 0.5);
}
END_TEST

// ---- refusals

static int pass(void *context, double t, const double *x, const double *u, double *y)
{
    (void)context;
    (void)t;
    y[0] = x[0] + u[0];
    return 0;
}

static lw_plant *passing(uint32_t direct)
{
    static const char *const out[] = {"out"};
    lw_flow_def def = flow_def(1, 1, NULL, lag);
    def.n_y = 1;
    def.output_names = out;
    def.outputs = pass;
    def.direct = direct;
    return flow_plant(def, 1e-8);
}

static void refused_ring(lw_plant *a, lw_plant *b, lw_status status, const char *text)
{
    lw_rig *rig = NULL;
    lw_frozen *z = NULL;
    lw_error err = {LW_OK, ""};
    OK(lw_rig_new("rig", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "a", a, e));
    OK(lw_rig_add_plant(rig, NULL, "b", b, e));
    OK(lw_rig_connect(rig, "mount.lua:7", "a.out", "b.in", e));
    OK(lw_rig_connect(rig, "mount.lua:8", "b.out", "a.in", e));
    ck_assert_int_eq(lw_rig_freeze(rig, NULL, MS, &z, &err), status);
    ck_assert_msg(strstr(err.text, text) != NULL, "%s", err.text);
    lw_plant_free(a);
    lw_plant_free(b);
    lw_rig_free(rig);
}

START_TEST(rings_without_delay_and_delays_within_are_refused_by_name)
{
    lw_plant *a = passing(1), *late = NULL;
    refused_ring(passing(1), passing(1), LW_ERR_LOOP,
                 "signals depend on themselves without delay: a.out -> b.in -> b.out -> a.in");
    OK(lw_plant_delayed(a, "in", 1e-3, &late, e));
    lw_plant_free(a);
    refused_ring(late, passing(0), LW_ERR_ARGUMENT,
                 "plant \"a\": input \"in\" is delayed and another plant");
}
END_TEST

START_TEST(what_needs_matrices_refuses_a_flow)
{
    lw_plant *flow = passing(0), *lin = integrator(1), *out = NULL;
    lw_error err = {LW_OK, ""};
    ck_assert_int_eq(lw_plant_series(flow, lin, &out, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "part \"a\": the plant is a flow and has no matrices; a flow is "
                               "connected within a rig");
    ck_assert_ptr_null(out);
    ck_assert(lw_plant_look(flow).flow != NULL && lw_plant_look(lin).flow == NULL);
    lw_plant_free(flow);
    lw_plant_free(lin);
}
END_TEST

static void refused(lw_flow_def def, lw_status status, const char *text)
{
    lw_plant *plant = NULL;
    lw_error err = {LW_OK, ""};
    ck_assert_int_eq(lw_plant_flow(&def, &plant, &err), status);
    ck_assert_msg(strstr(err.text, text) != NULL, "%s", err.text);
    ck_assert_ptr_null(plant);
}

START_TEST(bad_definitions_name_field_value_and_range)
{
    static const char *const other[] = {"y"};
    const double bad[] = {1e-9, -1}, lost[] = {0, (double)NAN};
    const lw_flow_def sound = flow_def(2, 0, NULL, van_der_pol);
    lw_flow_def def = sound;
    def.n_x = 65;
    refused(def, LW_ERR_SHAPE, "number of states is 65; permitted 0 to 64");
    def = sound;
    def.flow = NULL;
    refused(def, LW_ERR_ARGUMENT, "flow is missing");
    def = sound;
    def.rtol = 0;
    refused(def, LW_ERR_ARGUMENT, "rtol is 0; permitted 1e-13 to 0.1");
    def = sound;
    def.atol = bad;
    refused(def, LW_ERR_ARGUMENT, "atol of v is -1; permitted above 0");
    def = sound;
    def.start = lost;
    refused(def, LW_ERR_NOT_FINITE, "start of v is nan");
    def = sound;
    def.n_y = 1;
    def.output_names = other;
    refused(def, LW_ERR_NAME, "no state \"y\" to be an output");
    def = sound;
    def.n_switches = 1;
    refused(def, LW_ERR_ARGUMENT, "switches is missing");
}
END_TEST

// ---- memory

static int freed;

static void note_free(void *context)
{
    (void)context;
    freed++;
}

// Each allocation fails in turn; nothing is left, and the context goes with the last copy.
START_TEST(failed_allocations_leave_no_flow_behind)
{
    const double start[] = {2, 0};
    int failures = 0;
    for (long n = 1; n < 1000; n++) {
        lw_flow_def def = flow_def(2, 0, start, van_der_pol);
        lw_plant *plant = NULL;
        lw_rig *rig = NULL;
        lw_frozen *z = NULL;
        lw_run *run = NULL;
        lw_error err;
        freed = 0;
        def.free_context = note_free;
        lw__alloc_fail_after(n);
        lw_status status = lw_plant_flow(&def, &plant, &err);
        if (status == LW_OK)
            status = lw_rig_new("rig", &rig, &err);
        if (status == LW_OK)
            status = lw_rig_add_plant(rig, NULL, "p", plant, &err);
        if (status == LW_OK)
            status = lw_rig_freeze(rig, NULL, MS, &z, &err);
        if (status == LW_OK)
            status = lw_run_new(z, 1, 1, 0, &run, &err);
        lw__alloc_fail_after(-1);
        int made = plant != NULL;
        lw_plant_free(plant);
        lw_rig_free(rig);
        lw_run_free(run);
        lw_frozen_free(z);
        ck_assert_int_eq(freed, made);
        if (status == LW_OK)
            break;
        ck_assert_int_eq(status, LW_ERR_MEMORY);
        failures++;
    }
    ck_assert_int_gt(failures, 10);
    ck_assert_int_lt(failures, 999);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("flow limits");
    TCase *ending = tcase_create("ends"), *stiff = tcase_create("stiff");
    TCase *against = tcase_create("against"), *refusals = tcase_create("refusals");
    tcase_add_loop_test(ending, a_flow_that_cannot_go_on_ends_its_run_there, 0, 4);
    tcase_add_test(stiff, a_stiff_flow_ends_where_published);
    tcase_add_test(against, errors_against_a_flow_and_of_one_are_the_same);
    tcase_add_test(against, a_linear_signal_against_its_flow_has_no_error);
    tcase_add_test(refusals, rings_without_delay_and_delays_within_are_refused_by_name);
    tcase_add_test(refusals, what_needs_matrices_refuses_a_flow);
    tcase_add_test(refusals, bad_definitions_name_field_value_and_range);
    tcase_add_test(refusals, failed_allocations_leave_no_flow_behind);
    suite_add_tcase(suite, ending);
    suite_add_tcase(suite, stiff);
    suite_add_tcase(suite, against);
    suite_add_tcase(suite, refusals);
    return run_suite(suite);
}
