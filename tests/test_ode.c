// Integration of flows against published end values, closed forms and its own orders.

#include "odes.h"
#include "suite.h"

#include "ode/ode.h"

#include <stdio.h>
#include <string.h>

typedef struct result {
    double x[ODE_MOST];
    lw_status status;
    double at;
    const char *text;
    long n_evals;
    double memory[64];
} result;

typedef struct counted {
    const problem *p;
    long n;
} counted;

static int count_flow(void *context, double t, const double *x, double *dx)
{
    counted *c = context;
    c->n++;
    return c->p->flow(NULL, t, x, dx);
}

static int pass_switches(void *context, double t, const double *x, double *g)
{
    return ((counted *)context)->p->switches(NULL, t, x, g);
}

// From `from` to the end, in `pieces` calls; absolute tolerances are rtol times atol.
static result integrate(const problem *p, double rtol, double atol, int pieces, lw__ode_sink sink,
                        void *context)
{
    result r = {.text = ""};
    counted c = {p, 0};
    lw__ode_system s = {.n = p->n, .flow = count_flow, .context = &c};
    if (p->switches != NULL) {
        s.n_switches = 1;
        s.switches = pass_switches;
    }
    double absolute[ODE_MOST];
    for (int i = 0; i < p->n; i++)
        absolute[i] = rtol * atol;
    memcpy(r.x, p->start, sizeof r.x);
    double *work = calloc((size_t)lw__ode_work_size(s.n, s.n_switches), sizeof(double));
    ck_assert_int_le(lw__ode_memory_size(s.n), 64);
    for (int k = 0; k < pieces && r.status == LW_OK; k++)
        r.status =
            lw__ode_advance(&s, rtol, absolute, r.memory, p->end * k / pieces,
                            p->end * (k + 1) / pieces, r.x, sink, context, work, &r.at, &r.text);
    free(work);
    r.n_evals = c.n;
    return r;
}

static double error_of(const problem *p, const double *x)
{
    double worst = 0;
    for (int i = 0; i < p->n_want; i++) {
        double scale = fmax(p->scale, fabs(p->want[i]));
        worst = fmax(worst, fabs(x[i] - p->want[i]) / scale);
    }
    return worst;
}

// ---- published values

// At 1e-12 a step the end is off by at most what the problem itself makes of such errors: a few
// hundred times in D5 and the Brusselator.
START_TEST(end_values_are_the_published_ones)
{
    const problem *p = &smooth[_i];
    result r = integrate(p, 1e-12, 1, 1, NULL, NULL);
    ck_assert_msg(r.status == LW_OK, "%s: %s", p->name, r.text);
    double error = error_of(p, r.x);
    ck_assert_msg(error < 1e-9, "%s: error %g", p->name, error);
    result loose = integrate(p, 1e-4, 1, 1, NULL, NULL); // the comparison can fail
    ck_assert_msg(error_of(p, loose.x) > error, "%s: %g at 1e-4", p->name, error_of(p, loose.x));
}
END_TEST

// Tolerances as published for the references (1e-8, 1e-7, 2e-6, 1e-7, 1e-6).
START_TEST(stiff_end_values_are_the_published_ones)
{
    static const double tolerance[N_STIFF] = {1e-8, 1e-7, 2e-6, 1e-7, 1e-6};
    const problem *p = &stiff[_i];
    result r = integrate(p, 1e-9, 1e-8, 1, NULL, NULL);
    ck_assert_msg(r.status == LW_OK, "%s: %s", p->name, r.text);
    ck_assert_msg(r.n_evals < 400000, "%s: %ld evaluations", p->name, r.n_evals);
    double error = error_of(p, r.x);
    ck_assert_msg(error < tolerance[_i], "%s: error %g", p->name, error);
}
END_TEST

// As printed by a demonstration program of SUNDIALS (read) at a relative tolerance of 1e-4.
START_TEST(robertsons_problem_passes_through_the_printed_values)
{
    static const double end[] = {.4, 4, 40}, want[] = {.9851641, .9055097, .7158017};
    for (int k = 0; k < 3; k++) {
        problem p = stiff[1];
        p.end = end[k];
        ck_near(integrate(&p, 1e-9, 1e-8, 1, NULL, NULL).x[0], want[k], 3e-4, 0);
    }
}
END_TEST

// Start values: rows x, y, x', y' of the seven bodies; the 14 positions at t = 3 (test set, read).
START_TEST(seven_bodies_end_where_they_should)
{
    problem p = {"Pleiades",
                 28,
                 14,
                 3,
                 {3, 3, -1, -3, 2, -2,   2,    3, -3, 2, 0,     0, -4, 4,
                  0, 0, 0,  0,  0, 1.75, -1.5, 0, 0,  0, -1.25, 1, 0,  0},
                 {.3706139143970502, 3.237284092057233, -3.222559032418324, .6597091455775310,
                  .3425581707156584, 1.562172101400631, -.7003092922212495, -3.943437585517392,
                  -3.271380973972550, 5.225081843456543, -2.590612434977470, 1.198213693392275,
                  -.2429682344935824, 1.091449240428980},
                 pleiades,
                 NULL,
                 1};
    ck_assert(error_of(&p, integrate(&p, 1e-12, 1, 1, NULL, NULL).x) < 1e-8);
}
END_TEST

// The orbit returns to its start after one period (several copies cite Hairer, Norsett, Wanner).
START_TEST(a_closed_orbit_closes)
{
    problem p = {"Arenstorf",
                 4,
                 2,
                 17.0652165601579625588917206249,
                 {.994, 0, 0, -2.00158510637908252240537862224},
                 {.994, 0},
                 arenstorf,
                 NULL,
                 1};
    ck_assert(error_of(&p, integrate(&p, 1e-13, 1, 1, NULL, NULL).x) < 1e-5);
}
END_TEST

// ---- tolerance and orders

// Slope of the error over the tolerance, both as powers of ten: from 1e-4 to 1e-9 by least squares
// over half powers. Problems whose error at 1e-4 is already as small as rounding have no slope.
START_TEST(errors_follow_the_tolerance)
{
    double sum = 0;
    int counted_ = 0;
    for (int k = 0; k < N_SMOOTH; k++) {
        const problem *p = &smooth[k];
        double n = 0, sx = 0, sy = 0, sxx = 0, sxy = 0;
        for (double power = -4; power >= -9; power -= 0.5) {
            double rtol = lw_pow(10, power);
            double y = log10(error_of(p, integrate(p, rtol, 1, 1, NULL, NULL).x) + 1e-16);
            n++;
            sx += power;
            sy += y;
            sxx += power * power;
            sxy += power * y;
        }
        double slope = (n * sxy - sx * sy) / (n * sxx - sx * sx);
        ck_assert_msg(slope > 0.6 && slope < 1.5, "%s: slope %g", p->name, slope);
        sum += slope;
        counted_++;
    }
    ck_assert_msg(sum / counted_ > 0.8 && sum / counted_ < 1.2, "mean slope %g", sum / counted_);
}
END_TEST

typedef struct inside {
    const problem *p;
    double worst;
    int n, disordered;
    double last;
} inside;

// In the middle of each step the dense output of A3 against its closed form exp(sin t).
static void look_inside(void *context, const lw__ode_piece *piece)
{
    inside *in = context;
    for (int k = 0; k <= 8; k++) {
        double x[ODE_MOST], s = k / 8.0;
        lw__ode_piece_value(piece, s, x);
        double want = lw_exp(lw_sin(piece->t + s * piece->h));
        in->worst = fmax(in->worst, fabs(x[0] - want) / want);
    }
    in->disordered |= piece->t != in->last || !(piece->h > 0);
    in->last = piece->t + piece->h;
    in->n++;
}

START_TEST(dense_output_is_as_good_as_the_steps)
{
    for (double rtol = 1e-6; rtol > 1e-11; rtol *= 1e-1) {
        inside in = {.p = &smooth[2]};
        result r = integrate(&smooth[2], rtol, 1, 1, look_inside, &in);
        ck_assert(r.status == LW_OK && in.n > 10 && !in.disordered);
        ck_near(in.last, 20, 1e-15, 0);
        ck_assert_msg(in.worst < 10 * rtol, "%g at %g", in.worst, rtol);
    }
}
END_TEST

START_TEST(a_sink_changes_no_bit)
{
    for (int k = 0; k < N_SMOOTH; k++) {
        inside in = {.p = &smooth[k]};
        result a = integrate(&smooth[k], 1e-6, 1, 3, NULL, NULL);
        result b = integrate(&smooth[k], 1e-6, 1, 3, look_inside, &in);
        ck_assert(memcmp(a.x, b.x, sizeof a.x) == 0);
        ck_assert(memcmp(a.memory, b.memory, sizeof a.memory) == 0);
    }
}
END_TEST

// Events every 1/1000 of the way cost steps of their own, but not the natural size: between two of
// them there is one step.
START_TEST(the_natural_step_is_carried_over_events)
{
    result r = integrate(&smooth[2], 1e-8, 1, 1000, NULL, NULL);
    ck_assert(r.status == LW_OK);
    ck_assert_int_lt(r.n_evals, 1000 * 7 + 100);
    ck_assert(r.memory[0] > 0.02); // an event comes every 0.02
    ck_assert(error_of(&smooth[2], r.x) < 1e-9);
}
END_TEST

// ---- stiffness comes and goes

// x' = -rate(t) (x - cos t) - sin t, x = cos t: stiff from t = 2 to 4 only.
FLOW(stretch_of_stiffness)
{
    (void)z;
    double rate = t > 2 && t < 4 ? 1e6 : 1;
    d[0] = -rate * (y[0] - lw_cos(t)) - lw_sin(t);
    return 0;
}
FLOW(its_borders)
{
    (void)z, (void)y;
    d[0] = (t - 2) * (4 - t);
    return 0;
}

START_TEST(stiff_stretches_are_handed_over_and_back)
{
    problem p = {"", 1, 1, 3.9, {1}, {lw_cos(3.9)}, stretch_of_stiffness, its_borders, 1};
    result r = integrate(&p, 1e-8, 1, 1, NULL, NULL);
    ck_assert(r.status == LW_OK && r.memory[1] == 1);
    ck_assert(error_of(&p, r.x) < 1e-6);
    ck_assert_int_lt(r.n_evals, 20000);
    p.end = 20;
    p.want[0] = lw_cos(20);
    r = integrate(&p, 1e-8, 1, 1, NULL, NULL);
    ck_assert(r.status == LW_OK && r.memory[1] == 0);
    ck_assert(error_of(&p, r.x) < 1e-6);
}
END_TEST

// ---- switchings

typedef struct bouncing {
    int n;
    double at[64];
} bouncing;

FLOW(falling)
{
    (void)z, (void)t;
    d[0] = y[1];
    d[1] = -9.81;
    return 0;
}
FLOW(floor_below)
{
    (void)z, (void)t;
    d[0] = y[0];
    return 0;
}

static int bounce(void *context, double t, double *x, int which, int rising)
{
    bouncing *b = context;
    (void)which;
    if (rising)
        return 0;
    if (b->n < 64)
        b->at[b->n++] = t;
    x[0] = fabs(x[0]);
    x[1] = -0.8 * x[1];
    return 0;
}

// A mass falls from 1 m and keeps 0.8 of its speed: impacts at t0, t0 + 2 e t0, + 2 e^2 t0, ...
START_TEST(impacts_come_at_their_instants)
{
    bouncing b = {0};
    lw__ode_system s = {.n = 2,
                        .n_switches = 1,
                        .flow = falling,
                        .switches = floor_below,
                        .happened = bounce,
                        .context = &b};
    double x[2] = {1, 0}, memory[64] = {0}, atol[2] = {1e-14, 1e-14}, work[400], failed;
    const char *text;
    ck_assert_int_le(lw__ode_work_size(2, 1), 400);
    ck_assert(lw__ode_advance(&s, 1e-12, atol, memory, 0, 3.5, x, NULL, NULL, work, &failed,
                              &text) == LW_OK);
    double t0 = sqrt(2 / 9.81), at = t0, gap = 2 * t0;
    ck_assert_int_ge(b.n, 8);
    for (int k = 0; k < 8; k++) {
        ck_near(b.at[k], at, 1e-11, 1); // tolerance times the number of steps so far
        gap *= 0.8;
        at += gap;
    }
}
END_TEST

// The same without end: the impacts crowd towards t0 (1 + e) / (1 - e) = 4.06 s.
START_TEST(impacts_without_end_are_said)
{
    bouncing b = {0};
    lw__ode_system s = {.n = 2,
                        .n_switches = 1,
                        .flow = falling,
                        .switches = floor_below,
                        .happened = bounce,
                        .context = &b};
    double x[2] = {1, 0}, memory[64] = {0}, atol[2] = {1e-14, 1e-14}, work[400], failed = 0;
    const char *text = "";
    lw_status status =
        lw__ode_advance(&s, 1e-12, atol, memory, 0, 10, x, NULL, NULL, work, &failed, &text);
    ck_assert_msg(status == LW_ERR_STEP || status == LW_ERR_CHATTER, "%d %s", status, text);
    ck_near(failed, 9 * sqrt(2 / 9.81), 1e-3, 1);
}
END_TEST

// Dry friction of 1 against a pull of 0.3: at rest after 1 / 0.7, and there it chatters.
FLOW(dry)
{
    (void)z, (void)t;
    d[0] = 0.3 - (y[0] > 0 ? 1 : -1);
    return 0;
}

START_TEST(chatter_is_said)
{
    problem p = {"", 1, 1, 20, {1}, {0}, dry, floor_below, 1};
    result r = integrate(&p, 1e-6, 1, 1, NULL, NULL);
    ck_assert_msg(r.status == LW_ERR_CHATTER, "%d %s", r.status, r.text);
    ck_assert_msg(r.at > 1.4 && r.at < 10, "at %g", r.at); // after a hundred turns
    ck_assert(fabs(r.x[0]) < 1e-4);
}
END_TEST

// Motion between two walls of constant force, x'' = -sign x, from x = 0, x' = 1: period 4.
FLOW(walls)
{
    (void)z, (void)t;
    d[0] = y[1];
    d[1] = y[0] > 0 ? -1 : 1;
    return 0;
}

START_TEST(jumps_of_the_flow_keep_the_tolerance)
{
    for (int declared = 0; declared < 2; declared++) {
        problem p = {"", 2, 2, 20, {0, 1}, {0, 1}, walls, declared ? floor_below : NULL, 1};
        result r = integrate(&p, 1e-9, 1, 1, NULL, NULL);
        ck_assert_msg(r.status == LW_OK, "%s", r.text);
        ck_assert_msg(error_of(&p, r.x) < 1e-5, "error %g", error_of(&p, r.x));
    }
}
END_TEST

// ---- failures

FLOW(square)
{
    (void)z, (void)t;
    d[0] = y[0] * y[0];
    return 0;
}
FLOW(not_a_number)
{
    (void)z;
    d[0] = t > 1 ? (double)NAN : y[0];
    return 0;
}
FLOW(refuses)
{
    (void)z, (void)y;
    d[0] = 1;
    return t > 0.5;
}

// x' = x^2, x(0) = 1: x = 1 / (1 - t) has no value at t = 1.
START_TEST(a_solution_that_escapes_is_said_where_it_does)
{
    problem p = {"", 1, 1, 2, {1}, {0}, square, NULL, 1};
    result r = integrate(&p, 1e-8, 1, 1, NULL, NULL);
    ck_assert_msg(r.status == LW_ERR_STEP || r.status == LW_ERR_NOT_FINITE, "%d", r.status);
    ck_near(r.at, 1, 1e-6, 0);
    p.end = 0.999;
    p.want[0] = 1000;
    r = integrate(&p, 1e-10, 1, 1, NULL, NULL);
    ck_assert(r.status == LW_OK && error_of(&p, r.x) < 1e-6);
}
END_TEST

START_TEST(values_that_are_no_numbers_end_it)
{
    problem p = {"", 1, 1, 2, {1}, {0}, not_a_number, NULL, 1};
    result r = integrate(&p, 1e-8, 1, 1, NULL, NULL);
    ck_assert(r.status == LW_ERR_STEP || r.status == LW_ERR_NOT_FINITE);
    ck_near(r.at, 1, 1e-6, 0);
}
END_TEST

START_TEST(a_function_that_fails_ends_it)
{
    problem p = {"", 1, 1, 2, {1}, {0}, refuses, NULL, 1};
    ck_assert(integrate(&p, 1e-8, 1, 1, NULL, NULL).status == LW_ERR_LAW);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("ode");
    TCase *c = tcase_create("ode");
    tcase_set_timeout(c, 120);
    tcase_add_loop_test(c, end_values_are_the_published_ones, 0, N_SMOOTH);
    tcase_add_loop_test(c, stiff_end_values_are_the_published_ones, 0, N_STIFF);
    tcase_add_test(c, robertsons_problem_passes_through_the_printed_values);
    tcase_add_test(c, seven_bodies_end_where_they_should);
    tcase_add_test(c, a_closed_orbit_closes);
    tcase_add_test(c, errors_follow_the_tolerance);
    tcase_add_test(c, dense_output_is_as_good_as_the_steps);
    tcase_add_test(c, a_sink_changes_no_bit);
    tcase_add_test(c, the_natural_step_is_carried_over_events);
    tcase_add_test(c, stiff_stretches_are_handed_over_and_back);
    tcase_add_test(c, impacts_come_at_their_instants);
    tcase_add_test(c, impacts_without_end_are_said);
    tcase_add_test(c, chatter_is_said);
    tcase_add_test(c, jumps_of_the_flow_keep_the_tolerance);
    tcase_add_test(c, a_solution_that_escapes_is_said_where_it_does);
    tcase_add_test(c, values_that_are_no_numbers_end_it);
    tcase_add_test(c, a_function_that_fails_ends_it);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
