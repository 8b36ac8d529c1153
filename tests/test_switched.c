// Linear systems with switchings against closed forms: instants to rounding, chatter to a status.
//
// Workload: circuits and bodies of a few states, some thousand switchings.

#include "suite.h"

#include "run/switched.h"

#include <stdlib.h>
#include <string.h>

#define MOST 8

// A system put together by hand: matrices row-major here, turned on the way.
typedef struct built {
    lw__switched q;
    lw__mode modes[MOST];
    double a[MOST][16], b[MOST][16], k[MOST][4], c[MOST * 4], zero[MOST * 16];
    double e[MOST][MOST];
    lw__switching switchings[MOST][MOST];
    int condition_row[MOST];
    lw__switched_state s;
    double x[4], noise[MOST], u[4];
    double *work;
} built;

// n states, m inputs, conditions of which each is `c` x + `e`.
static void begin(built *t, int n, int n_modes, int n_conditions)
{
    memset(t, 0, sizeof *t);
    t->q = (lw__switched){n, 0, n_conditions, n_modes, n_conditions, t->condition_row, t->modes};
    for (int i = 0; i < n_conditions; i++)
        t->condition_row[i] = i;
    for (int i = 0; i < n_modes; i++)
        t->modes[i] =
            (lw__mode){t->a[i], t->zero, t->k[i], t->c, t->zero, t->e[i], 0, 0, t->switchings[i]};
    t->s = (lw__switched_state){.x = t->x, .noise = t->noise};
    t->work = malloc(sizeof(double) * (size_t)lw__switched_work(&t->q));
}

static void set_mode(built *t, int mode, const double *a, const double *k, double norm)
{
    int n = t->q.n;
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            t->a[mode][j * n + i] = a[i * n + j];
        t->k[mode][i] = k != NULL ? k[i] : 0;
    }
    t->modes[mode].piece = norm > 0 ? LW__SWITCHED_REACH / norm : 1e3;
}

static void set_condition(built *t, int condition, const double *c, double e)
{
    memcpy(t->c + condition * t->q.n, c, sizeof(double) * (size_t)t->q.n);
    for (int m = 0; m < t->q.n_modes; m++)
        t->e[m][condition] = e;
}

static lw__switching *add(built *t, int from, int to, int condition)
{
    lw__mode *m = &t->modes[from];
    lw__switching *w = &t->switchings[from][m->n_switchings++];
    *w = (lw__switching){.row = condition, .only_if = -1, .to = to};
    return w;
}

typedef struct list {
    int n;
    double at[4096];
    int mode[4096];
} list;

// Where the mode changes: begins of pieces in another mode than the one before.
static void note(void *context, const lw__switched_piece *p)
{
    list *l = context;
    if (l->n == 0 || l->mode[l->n - 1] != p->mode) {
        l->at[l->n] = p->begin;
        l->mode[l->n++] = p->mode;
    }
}

static lw_status go(built *t, double from, double to, list *l)
{
    double failed = 0;
    return lw__switched_advance(&t->q, &t->s, t->u, from, to, l != NULL ? note : NULL, l, t->work,
                                &failed);
}

// ---- a mass that bounces

#define G 9.81
#define HEIGHT 1.0
#define E 0.8

static const double fall[] = {0, 1, 0, 0}, gravity[] = {0, -G};
static const double mirror[] = {1, 0, 0, -E}, nothing[] = {0, 0}, zeros[] = {0, 0, 0, 0};

static void bouncing(built *t)
{
    begin(t, 2, 1, 1);
    set_mode(t, 0, fall, gravity, 1);
    set_condition(t, 0, (double[]){-1, 0}, 0);
    *add(t, 0, 0, 0) = (lw__switching){0, -1, 0, 0, 2, mirror, nothing};
    t->x[0] = HEIGHT;
}

// Height after n bounces, `since` the last of them: closed form of the parabola.
START_TEST(a_mass_bounces_as_the_closed_form_says)
{
    built t;
    bouncing(&t);
    // common practice: first impact sqrt(2 h / g), each flight e times the one before
    double impact = sqrt(2 * HEIGHT / G), flight = 2 * impact * E, speed = G * impact * E;
    double from = 0, at = impact;
    for (int n = 1; n <= 20; n++) {
        double look = at + flight / 3;
        ck_assert_int_eq(go(&t, from, look, NULL), LW_OK);
        ck_assert_int_eq((int)t.s.n_switchings, n);
        double tau = flight / 3;
        // rounding of the instant (some eps of the time so far) times the speed
        double slack = 1e-14 * speed * at + 1e-14;
        ck_assert_double_eq_tol(t.x[0], speed * tau - G * tau * tau / 2, slack);
        ck_assert_double_eq_tol(t.x[1], speed - G * tau, 1e-14 * G * at);
        from = look;
        at += flight;
        flight *= E;
        speed *= E;
    }
    free(t.work);
}
END_TEST

START_TEST(bounces_without_end_are_a_status)
{
    built t;
    bouncing(&t);
    double failed = 0, last = sqrt(2 * HEIGHT / G) * (1 + E) / (1 - E);
    lw_status status =
        lw__switched_advance(&t.q, &t.s, t.u, 0, 2 * last, NULL, NULL, t.work, &failed);
    ck_assert_int_eq(status, LW_ERR_CHATTER);
    // flights shorter than 1 ns are all within 1 ns / (1 - e) of the end of the series
    ck_assert_double_eq_tol(failed, last, 1e-8);
    free(t.work);
}
END_TEST

// The same with rest below a rebound of 0.1 m/s: it lies still.
START_TEST(a_mass_comes_to_rest_and_stays)
{
    built t;
    begin(&t, 2, 2, 3);
    set_mode(&t, 0, fall, gravity, 1);
    set_mode(&t, 1, (double[]){0, 0, 0, 0}, NULL, 0);
    set_condition(&t, 0, (double[]){-1, 0}, 0);
    set_condition(&t, 1, (double[]){0, -E}, -0.1); // rebound of 0.1 and more
    set_condition(&t, 2, (double[]){0, E}, 0.1);
    *add(&t, 0, 0, 0) = (lw__switching){0, 1, 0, 0, 2, mirror, nothing};
    *add(&t, 0, 1, 0) = (lw__switching){0, 2, 1, 0, 2, zeros, nothing};
    t.x[0] = HEIGHT;
    ck_assert_int_eq(go(&t, 0, 10, NULL), LW_OK);
    // speeds 4.43 e^n: the last rebound of at least 0.1 is n = floor(ln(0.1 / 4.43) / ln e) = 16
    int n = (int)floor(log(0.1 / sqrt(2 * G * HEIGHT)) / log(E));
    ck_assert_int_eq((int)t.s.n_switchings, n + 1);
    ck_assert(t.s.mode == 1 && t.x[0] == 0 && t.x[1] == 0);
    free(t.work);
}
END_TEST

// ---- a relay with hysteresis about a lag

START_TEST(a_relay_with_hysteresis_keeps_the_period_of_the_closed_form)
{
    const double lag = 2e-3, gain = 3, width = 0.7;
    built t;
    begin(&t, 1, 2, 2);
    set_mode(&t, 0, (double[]){-1 / lag}, (double[]){gain / lag}, 1 / lag);
    set_mode(&t, 1, (double[]){-1 / lag}, (double[]){-gain / lag}, 1 / lag);
    set_condition(&t, 0, (double[]){1}, -width);
    set_condition(&t, 1, (double[]){-1}, -width);
    add(&t, 0, 1, 0);
    add(&t, 1, 0, 1);
    list *l = calloc(1, sizeof *l);
    ck_assert_int_eq(go(&t, 0, 0.5, l), LW_OK);
    // common practice: T = 2 tau ln((k + h) / (k - h))
    double half = lag * log((gain + width) / (gain - width));
    ck_assert_int_gt(l->n, 400);
    for (int k = 2; k < l->n; k++) // a difference of instants up to 0.5 s: 2 eps of that
        ck_assert_double_eq_tol(l->at[k] - l->at[k - 1], half, 1e-15 + 1e-13 * half);
    // and they do not drift: the whole is one closed form
    double first = lag * log(gain / (gain - width));
    ck_near(l->at[l->n - 1], first + (l->n - 2) * half, 1e-12, 0);
    // a deliberate fault: a width one part in a million million larger
    double off = lag * log((gain + width * (1 + 1e-10)) / (gain - width * (1 + 1e-10)));
    ck_assert(fabs(off - half) > 1e-15 + 1e-13 * half);
    free(l);
    free(t.work);
}
END_TEST

START_TEST(a_relay_without_hysteresis_is_a_status)
{
    built t;
    begin(&t, 1, 2, 2);
    set_mode(&t, 0, (double[]){0}, (double[]){1}, 0);
    set_mode(&t, 1, (double[]){0}, (double[]){-1}, 0);
    set_condition(&t, 0, (double[]){1}, -0.25);
    set_condition(&t, 1, (double[]){-1}, 0.25);
    add(&t, 0, 1, 0);
    add(&t, 1, 0, 1);
    double failed = 0;
    ck_assert_int_eq(lw__switched_advance(&t.q, &t.s, t.u, 0, 1, NULL, NULL, t.work, &failed),
                     LW_ERR_CHATTER);
    ck_assert_double_eq_tol(failed, 0.25, 1e-15);
    free(t.work);
}
END_TEST

// ---- half-wave rectifier with a winding as its load

// sin(b - p) + sin(p) exp(-b / tan(p)) = 0, by halving between pi and 2 pi.
static double extinction(double phi)
{
    double lo = 3.141592653589793, hi = 2 * lo;
    for (int k = 0; k < 200; k++) {
        double b = (lo + hi) / 2;
        if (sin(b - phi) + sin(phi) * exp(-b / tan(phi)) > 0)
            lo = b;
        else
            hi = b;
    }
    return lo;
}

START_TEST(a_rectifier_stops_at_the_extinction_angle)
{
    const double r = 2, l = 10e-3, w = 2 * 3.141592653589793 * 50;
    built t;
    begin(&t, 3, 2, 2); // current, sine, cosine
    set_mode(&t, 0, (double[]){0, 0, 0, 0, 0, w, 0, -w, 0}, NULL, w);
    set_mode(&t, 1, (double[]){-r / l, 325 / l, 0, 0, 0, w, 0, -w, 0}, NULL, 325 / l);
    set_condition(&t, 0, (double[]){0, 1, 0}, 0);  // the voltage rises
    set_condition(&t, 1, (double[]){-1, 0, 0}, 0); // the current is over
    add(&t, 0, 1, 0);
    *add(&t, 1, 0, 1) =
        (lw__switching){1, -1, 0, 0, 3, (double[]){0, 0, 0, 0, 1, 0, 0, 0, 1}, (double[]){0, 0, 0}};
    t.x[2] = 1;
    list *s = calloc(1, sizeof *s);
    ck_assert_int_eq(go(&t, 0, 0.0999, s), LW_OK);
    // common practice: the extinction angle of a half-wave rectifier with R-L load
    double beta = extinction(atan(w * l / r));
    ck_assert_int_eq(s->n, 10);
    for (int k = 0; k < 5; k++) {
        ck_assert_double_eq_tol(s->at[2 * k], 0.02 * k, 2e-14);
        if (2 * k + 1 < s->n)
            ck_assert_double_eq_tol(s->at[2 * k + 1], (beta + 2 * 3.141592653589793 * k) / w,
                                    2e-14);
    }
    free(s);
    free(t.work);
}
END_TEST

// ---- discontinuous conduction

// One period of a buck into a fixed voltage: current, charge. Modes: on, diode, none.
static double charge_of_a_period(double vin, double vo, double l, double on, double period)
{
    built t;
    begin(&t, 2, 3, 1);
    set_mode(&t, 0, (double[]){0, 0, 1, 0}, (double[]){(vin - vo) / l, 0}, 0);
    set_mode(&t, 1, (double[]){0, 0, 1, 0}, (double[]){-vo / l, 0}, 0);
    set_mode(&t, 2, (double[]){0, 0, 0, 0}, NULL, 0);
    set_condition(&t, 0, (double[]){-1, 0}, 0);
    add(&t, 1, 2, 0);
    ck_assert_int_eq(go(&t, 0, on, NULL), LW_OK);
    t.s.mode = 1;
    ck_assert_int_eq(go(&t, on, period, NULL), LW_OK);
    ck_assert_int_eq(t.s.mode, 2);
    ck_assert_double_eq_tol(t.x[0], 0, 1e-14);
    double charge = t.x[1];
    free(t.work);
    return charge;
}

START_TEST(a_buck_in_discontinuous_conduction_has_the_ratio_of_the_closed_form)
{
    const double vin = 48, l = 10e-6, r = 50, period = 10e-6;
    for (double d = 0.1; d < 0.65; d += 0.1) {
        // common practice: M = 2 / (1 + sqrt(1 + 8 L / (R T D^2)))
        double m = 2 / (1 + sqrt(1 + 8 * l / (r * period * d * d)));
        double charge = charge_of_a_period(vin, m * vin, l, d * period, period);
        ck_near(charge, m * vin / r * period, 1e-13, 0);
        // deliberate fault: a ratio one part in a thousand million larger
        m *= 1 + 1e-9;
        charge = charge_of_a_period(vin, m * vin, l, d * period, period);
        ck_assert(fabs(charge - m * vin / r * period) > 1e-13 * charge);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("switched");
    TCase *facts = tcase_create("closed forms");
    tcase_add_test(facts, a_mass_bounces_as_the_closed_form_says);
    tcase_add_test(facts, bounces_without_end_are_a_status);
    tcase_add_test(facts, a_mass_comes_to_rest_and_stays);
    tcase_add_test(facts, a_relay_with_hysteresis_keeps_the_period_of_the_closed_form);
    tcase_add_test(facts, a_relay_without_hysteresis_is_a_status);
    tcase_add_test(facts, a_rectifier_stops_at_the_extinction_angle);
    tcase_add_test(facts, a_buck_in_discontinuous_conduction_has_the_ratio_of_the_closed_form);
    suite_add_tcase(suite, facts);
    return run_suite(suite);
}
