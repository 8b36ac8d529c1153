// Plants against tables of sampled systems, against GSL, and against their own equations.
//
// A plant is sampled with a zero-order hold by the exponential of [A B; 0 0]; coefficients of its
// pulse transfer function follow from characteristic polynomial and adjoint (D. K. Faddeev and
// V. N. Faddeeva, 1963), all in double-double, so that what is compared is the plant that was
// built. Every row is built twice: from polynomials and from zeros, poles and gain.
//
// [A&W] K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed., Prentice Hall 1997.
// [FPW] G. F. Franklin, J. D. Powell, M. L. Workman, Digital Control of Dynamic Systems, 2nd ed.,
//       1990.
// [Jury] E. I. Jury, Theory and Application of the z-Transform Method, 1964.
// "from memory" marks values that were recalled, not read, and recomputed by an independent
// program before they were used here.

#include "plants.h"

#include <gsl/gsl_errno.h>
#include <gsl/gsl_linalg.h>
#include <gsl/gsl_odeiv2.h>
#include <gsl/gsl_poly.h>

// ---- pulse transfer functions

#define N_ORDER 8

// (b[0] z^(n-1) + ... + b[n-1]) / (z^n + a[0] z^(n-1) + ... + a[n-1])
typedef struct pulse {
    int n;
    double b[N_ORDER], a[N_ORDER];
} pulse;

// to = f m + c I, and its trace with f from the left again
static lw__dd next_adjoint(const sampled *s, const lw__dd *m, lw__dd c, lw__dd *to)
{
    int n = s->n;
    lw__dd trace = lw__dd_from_double(0);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            to[i * n + j] = i == j ? c : lw__dd_from_double(0);
            for (int k = 0; k < n; k++)
                to[i * n + j] =
                    lw__dd_add(to[i * n + j], lw__dd_mul(s->f[i * n + k], m[k * n + j]));
        }
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n; k++)
            trace = lw__dd_add(trace, lw__dd_mul(s->f[i * n + k], to[k * n + i]));
    return trace;
}

static pulse pulse_of(const lw_plant *plant, double h)
{
    static sampled s;
    lw_plant_view v = lw_plant_look(plant);
    lw__dd m[N_ORDER * N_ORDER] = {{0, 0}}, to[N_ORDER * N_ORDER], c = lw__dd_from_double(1);
    pulse p = {.n = v.n_x};
    sample(plant, h, &s);
    for (int k = 0; k < p.n; k++) {
        lw__dd trace = next_adjoint(&s, m, c, to), b = lw__dd_from_double(0);
        memcpy(m, to, sizeof m);
        for (int i = 0; i < p.n; i++)
            for (int j = 0; j < p.n; j++)
                b = lw__dd_add(b, lw__dd_mul_double(lw__dd_mul(m[i * p.n + j], s.g[j]), v.c[i]));
        c = lw__dd_neg(lw__dd_div(trace, lw__dd_from_double(k + 1)));
        p.b[k] = lw__dd_to_double(b);
        p.a[k] = lw__dd_to_double(c);
    }
    return p;
}

// ---- the table

// Zeros, poles and gain come first; num and den are highest power first.
typedef struct row {
    const char *id;
    int n_zeros, n_poles;
    double zeros[2][2], poles[3][2], gain;
    double num[3], den[4];
    double b[3], a[3];
    double tolerance;
} row;

#define N_ROWS 14

static const double h = 0.3, a = 1.7, b = 0.6, c = 0.9, w0 = 2, zeta = 0.35;

// Fills `to` with the table; its formulas hold the sampled coefficients.
static void read_table(row *to)
{
    const double e = exp(-a * h), f = exp(-b * h), ah = a * h, w = w0 * sqrt(1 - zeta * zeta),
                 A = exp(-zeta * w0 * h), B = cos(w * h), C = sin(w * h), zw = zeta * w0;
    // clang-format off
    const row table[N_ROWS] = {
        // [A&W] table 2.1, 1/s: from memory
        {"Z-01", 0, 1, {{0}}, {{0, 0}}, 1, {1}, {1, 0}, {h}, {-1}, 1e-14},
        // [A&W] table 2.1, 1/s^2: from memory
        {"Z-02", 0, 2, {{0}}, {{0}}, 1, {1}, {1, 0, 0}, {h * h / 2, h * h / 2}, {-2, 1}, 1e-14},
        // [A&W] table 2.1, 1/s^3: from memory
        {"Z-03", 0, 3, {{0}}, {{0}}, 1, {1}, {1, 0, 0, 0}, {h * h * h / 6, 4 * h * h * h / 6,
         h * h * h / 6}, {-3, 3, -1}, 1e-13},
        // [A&W] table 2.1, a / (s + a): from memory
        {"Z-04", 0, 1, {{0}}, {{-a, 0}}, a, {a}, {1, a}, {1 - e}, {-e}, 1e-14},
        // [A&W] table 2.1, a / (s (s + a)): from memory
        {"Z-05", 0, 2, {{0}}, {{0, 0}, {-a, 0}}, a, {a}, {1, a, 0}, {(ah - 1 + e) / a,
         (1 - e - ah * e) / a}, {-(1 + e), e}, 1e-13},
        // [A&W] table 2.1, a^2 / (s + a)^2: from memory
        {"Z-06", 0, 2, {{0}}, {{-a, 0}, {-a, 0}}, a * a, {a * a}, {1, 2 * a, a * a},
         {1 - e * (1 + ah), e * (e + ah - 1)}, {-2 * e, e * e}, 1e-13},
        // [A&W] table 2.1, s / (s + a)^2: from memory
        {"Z-07", 1, 2, {{0, 0}}, {{-a, 0}, {-a, 0}}, 1, {1, 0}, {1, 2 * a, a * a}, {h * e,
         -h * e}, {-2 * e, e * e}, 1e-13},
        // [A&W] table 2.1, a b / ((s + a)(s + b)): from memory
        {"Z-08", 0, 2, {{0}}, {{-a, 0}, {-b, 0}}, a * b, {a * b}, {1, a + b, a * b},
         {(b * (1 - e) - a * (1 - f)) / (b - a), (a * (1 - f) * e - b * (1 - e) * f) / (b - a)},
         {-(e + f), e * f}, 1e-13},
        // [A&W] table 2.1, (s + c) / ((s + a)(s + b)): from memory
        {"Z-09", 1, 2, {{-c, 0}}, {{-a, 0}, {-b, 0}}, 1, {1, c}, {1, a + b, a * b},
         {(f - e + (1 - f) * c / b - (1 - e) * c / a) / (a - b),
         c / (a * b) * e * f + (b - c) / (b * (a - b)) * e + (c - a) / (a * (a - b)) * f},
         {-(e + f), e * f}, 1e-13},
        // [A&W] table 2.1, w0^2 / (s^2 + 2 zeta w0 s + w0^2): from memory
        {"Z-10", 0, 2, {{0}}, {{-zw, w}, {-zw, -w}}, w0 * w0, {w0 * w0}, {1, 2 * zw, w0 * w0},
         {1 - A * (B + zw / w * C), A * A + A * (zw / w * C - B)}, {-2 * A * B, A * A}, 1e-13},
        // [A&W] table 2.1, s / (s^2 + 2 zeta w0 s + w0^2): from memory
        {"Z-11", 1, 2, {{0, 0}}, {{-zw, w}, {-zw, -w}}, 1, {1, 0}, {1, 2 * zw, w0 * w0},
         {A * C / w, -A * C / w}, {-2 * A * B, A * A}, 1e-13},
        // [A&W] table 2.1, a^2 / (s^2 + a^2): from memory
        {"Z-12", 0, 2, {{0}}, {{0, a}, {0, -a}}, a * a, {a * a}, {1, 0, a * a}, {1 - cos(ah),
         1 - cos(ah)}, {-2 * cos(ah), 1}, 1e-13},
        // [A&W] table 2.1, s / (s^2 + a^2): from memory
        {"Z-13", 1, 2, {{0, 0}}, {{0, a}, {0, -a}}, 1, {1, 0}, {1, 0, a * a}, {sin(ah) / a,
         -sin(ah) / a}, {-2 * cos(ah), 1}, 1e-13},
        // [A&W] table 2.1, a / (s^2 (s + a)): from memory
        {"Z-14", 0, 3, {{0}}, {{0, 0}, {0, 0}, {-a, 0}}, a, {a}, {1, a, 0, 0},
         {(1 - e - ah + ah * ah / 2) / (a * a),
         (ah - 2 + ah * ah / 2 + e * (2 + ah - ah * ah / 2)) / (a * a),
         (1 - e * (1 + ah + ah * ah / 2)) / (a * a)}, {-(2 + e), 1 + 2 * e, -e}, 1e-12},
    };
    // clang-format on
    memcpy(to, table, sizeof table);
}

// Built by polynomials (way 0), or by zeros, poles and gain (way 1).
static lw_plant *plant_of(const row *r, int way)
{
    lw_plant *plant;
    const lw_poly num = {r->n_zeros + 1, r->num}, den = {r->n_poles + 1, r->den};
    if (way == 0)
        MADE(plant, lw_plant_transfer(1, 1, &num, &den, NULL, NULL, out, err));
    else
        MADE(plant,
             lw_plant_zeros_poles(r->n_zeros, r->zeros, r->n_poles, r->poles, r->gain, out, err));
    return plant;
}

static double worst(const pulse *p, const row *r)
{
    double most = 0;
    for (int k = 0; k < p->n; k++)
        most = fmax(most, fmax(fabs(p->b[k] - r->b[k]), fabs(p->a[k] - r->a[k])));
    return most;
}

// Tolerances are those the table's formulas hold in double: their terms are of size 1 and cancel.
START_TEST(a_sampled_plant_has_the_pulse_transfer_function_of_the_table)
{
    row table[N_ROWS];
    read_table(table);
    const row *r = &table[_i % N_ROWS];
    lw_plant *plant = plant_of(r, _i / N_ROWS);
    pulse p = pulse_of(plant, h);
    ck_assert_int_eq(p.n, r->n_poles);
    ck_assert_msg(worst(&p, r) <= r->tolerance, "%s is off by %g", r->id, worst(&p, r));
    lw_plant_free(plant);
}
END_TEST

// The same with a plant that is wrong by a millionth: each row would show it.
START_TEST(a_planted_fault_differs_from_the_table)
{
    row table[N_ROWS];
    read_table(table);
    row wrong = table[_i];
    wrong.poles[0][0] -= 1e-6;
    if (wrong.poles[0][1] != 0)
        wrong.poles[1][0] -= 1e-6;
    lw_plant *plant = plant_of(&wrong, 1);
    pulse p = pulse_of(plant, h);
    ck_assert(worst(&p, &table[_i]) > 1e-8);
    lw_plant_free(plant);
}
END_TEST

// Augmented [A B; 0 0] h of a plant, for GSL.
static gsl_matrix *augmented(const lw_plant *plant, double period)
{
    lw_plant_view v = lw_plant_look(plant);
    size_t n = (size_t)v.n_x, m = (size_t)v.n_u;
    gsl_matrix *matrix = gsl_matrix_calloc(n + m, n + m);
    for (size_t i = 0; i < n; i++) {
        for (size_t j = 0; j < n; j++)
            gsl_matrix_set(matrix, i, j, v.a[i * n + j] * period);
        for (size_t j = 0; j < m; j++)
            gsl_matrix_set(matrix, i, n + j, v.b[i * m + j] * period);
    }
    return matrix;
}

// GSL's exponential of [A B; 0 0] h against ours, largest difference over largest element.
static double off_gsl(const lw_plant *plant, double period)
{
    static sampled s;
    gsl_matrix *m = augmented(plant, period), *e = gsl_matrix_alloc(m->size1, m->size1);
    gsl_linalg_exponential_ss(m, e, GSL_PREC_DOUBLE);
    sample(plant, period, &s);
    double most = 0, size = 1;
    for (int i = 0; i < s.n; i++)
        for (int j = 0; j < s.n + s.m; j++) {
            double want = gsl_matrix_get(e, (size_t)i, (size_t)j);
            double got = lw__dd_to_double(j < s.n ? s.f[i * s.n + j] : s.g[i * s.m + j - s.n]);
            most = fmax(most, fabs(got - want));
            size = fmax(size, fabs(want));
        }
    gsl_matrix_free(m);
    gsl_matrix_free(e);
    return most / size;
}

// Tolerance: GSL scales and squares in double; a few units in the last place of the largest
// element a squaring.
START_TEST(gsl_samples_the_plants_of_the_table_alike)
{
    row table[N_ROWS];
    read_table(table);
    lw_plant *plant = plant_of(&table[_i % N_ROWS], _i / N_ROWS);
    ck_assert_msg(off_gsl(plant, h) < 1e-14, "%s is off by %g", table[_i % N_ROWS].id,
                  off_gsl(plant, h));
    lw_plant_free(plant);
}
END_TEST

// ---- fractions of a period

// x(k+1) = phi x(k) + g0 u(k - whole) + g1 u(k - whole - 1) for an input delay of whole h + rest.
typedef struct split {
    int whole;
    double phi[4], g0[2], g1[2];
} split;

static split split_of(const lw_plant *plant, double period)
{
    static sampled all, late, early;
    lw_plant_view v = lw_plant_look(plant);
    split s = {.whole = (int)floor(v.delay[0] / period)};
    double rest = v.delay[0] - s.whole * period;
    sample(plant, period, &all);
    sample(plant, period - rest, &late);
    sample(plant, rest, &early);
    for (int i = 0; i < v.n_x; i++) {
        lw__dd g1 = lw__dd_from_double(0);
        for (int k = 0; k < v.n_x; k++) {
            s.phi[i * v.n_x + k] = lw__dd_to_double(all.f[i * v.n_x + k]);
            g1 = lw__dd_add(g1, lw__dd_mul(late.f[i * v.n_x + k], early.g[k]));
        }
        s.g0[i] = lw__dd_to_double(late.g[i]);
        s.g1[i] = lw__dd_to_double(g1);
    }
    return s;
}

static lw_plant *delayed(lw_plant *plant, double seconds)
{
    lw_plant *late;
    MADE(late, lw_plant_delayed(plant, "in", seconds, out, err));
    lw_plant_free(plant);
    return late;
}

START_TEST(a_delay_of_whole_periods_and_a_fraction_splits_the_input)
{
    lw_plant *paper;
    MADE(paper, lw_plant_first_order(1, 1, out, err));
    paper = delayed(paper, 2.6);
    split s = split_of(paper, 1);
    ck_assert_int_eq(s.whole, 2);
    // Z-20, [A&W] example of a paper machine, x' = -x + u(t - 2.6), h = 1: from memory
    const double printed[] = {0.37, 0.33, 0.30};
    // half a unit of the last printed digit
    ck_assert(fabs(s.phi[0] - printed[0]) < 0.005);
    ck_assert(fabs(s.g0[0] - printed[1]) < 0.005);
    ck_assert(fabs(s.g1[0] - printed[2]) < 0.005);
    // Z-20, the same exactly: e^-1, 1 - e^-0.4, e^-0.4 - e^-1
    const double exact[] = {exp(-1), 1 - exp(-0.4), exp(-0.4) - exp(-1)};
    // 2.6 - 2 is off by 1e-16, which the exponential passes on
    ck_near(s.phi[0], exact[0], 1e-14, 1);
    ck_near(s.g0[0], exact[1], 1e-14, 1);
    ck_near(s.g1[0], exact[2], 1e-14, 1);
    lw_plant_free(paper);
}
END_TEST

START_TEST(a_double_integrator_with_a_delay_splits_by_its_closed_form)
{
    const double taus[] = {0, 0.1, 0.25, 0.2999}, tau = taus[_i];
    const double poles[2][2] = {{0, 0}, {0, 0}};
    lw_plant *plant;
    MADE(plant, lw_plant_zeros_poles(0, NULL, 2, poles, 1, out, err));
    plant = delayed(plant, tau);
    split s = split_of(plant, h);
    // Z-21, [A&W] double integrator with a delay, in states with the input at the first: from
    // memory
    const double g0[] = {h - tau, (h - tau) * (h - tau) / 2}, g1[] = {tau, tau * (h - tau / 2)};
    // the same operations in another order
    for (int i = 0; i < 2; i++) {
        ck_near(s.g0[i], g0[i], 1e-14, 1);
        ck_near(s.g1[i], g1[i], 1e-14, 1);
    }
    ck_near(s.phi[0], 1, 0, 0);
    ck_near(s.phi[1], 0, 0, 0);
    ck_near(s.phi[2], h, 1e-14, 1);
    ck_near(s.phi[3], 1, 0, 0);
    lw_plant_free(plant);
}
END_TEST

START_TEST(a_first_order_plant_with_a_delay_splits_by_its_closed_form)
{
    const double tau = 0.12;
    lw_plant *plant;
    MADE(plant, lw_plant_first_order(1, 1 / a, out, err));
    plant = delayed(plant, tau);
    split s = split_of(plant, h);
    // Z-22, a / (s + a) e^(-s tau), [A&W]: from memory
    const double g0 = 1 - exp(-a * (h - tau)), g1 = exp(-a * (h - tau)) - exp(-a * h);
    ck_near(s.g0[0], g0, 1e-14, 1); // 1 / (1 / a) is off by one rounding
    ck_near(s.g1[0], g1, 1e-14, 1);
    lw_plant_free(plant);
}
END_TEST

typedef struct driven {
    lw_plant_view v;
    double u;
} driven;

static int rate(double t, const double *x, double *to, void *context)
{
    const driven *d = context;
    (void)t;
    for (int i = 0; i < d->v.n_x; i++) {
        to[i] = d->v.b[i] * d->u;
        for (int k = 0; k < d->v.n_x; k++)
            to[i] += d->v.a[i * d->v.n_x + k] * x[k];
    }
    return GSL_SUCCESS;
}

static void integrate(driven *d, double u, double lasts, double *x)
{
    gsl_odeiv2_system system = {rate, NULL, (size_t)d->v.n_x, d};
    gsl_odeiv2_driver *driver =
        gsl_odeiv2_driver_alloc_y_new(&system, gsl_odeiv2_step_rk8pd, 1e-3, 1e-13, 1e-13);
    double t = 0;
    d->u = u;
    ck_assert_int_eq(gsl_odeiv2_driver_apply(driver, &t, lasts, x), GSL_SUCCESS);
    gsl_odeiv2_driver_free(driver);
}

// Z-23: derived; no published number.
START_TEST(a_split_input_gives_the_state_that_integration_gives)
{
    const double tau = 0.2, period = 0.5, before = -1.1, after = 0.8;
    double x[] = {0.3, -0.7};
    const double x0[] = {x[0], x[1]};
    lw_plant *plant;
    MADE(plant, lw_plant_second_order(1, 2, 0.35, out, err));
    plant = delayed(plant, tau);
    split s = split_of(plant, period);
    driven d = {.v = lw_plant_look(plant)};
    integrate(&d, before, tau, x);
    integrate(&d, after, period - tau, x);
    for (int i = 0; i < 2; i++) {
        double got =
            s.phi[i * 2] * x0[0] + s.phi[i * 2 + 1] * x0[1] + s.g0[i] * after + s.g1[i] * before;
        ck_near(got, x[i], 1e-10, 1); // the integrator's own error
    }
    lw_plant_free(plant);
}
END_TEST

// ---- printed examples

// Zeros or poles of a polynomial of degree n, leading coefficient first, smallest real part first.
static void roots_of(int n, const double *p, number *roots)
{
    double up[N_ORDER + 1], z[2 * N_ORDER];
    for (int k = 0; k <= n; k++)
        up[k] = p[n - k];
    gsl_poly_complex_workspace *w = gsl_poly_complex_workspace_alloc((size_t)n + 1);
    ck_assert_int_eq(gsl_poly_complex_solve(up, (size_t)n + 1, w, z), GSL_SUCCESS);
    gsl_poly_complex_workspace_free(w);
    for (int k = 0; k < n; k++) {
        int at = k;
        number r = z[2 * k] + I * z[2 * k + 1];
        for (; at > 0 && creal(roots[at - 1]) > creal(r); at--)
            roots[at] = roots[at - 1];
        roots[at] = r;
    }
}

static pulse antenna(double period)
{
    const double one = 1, ten[] = {10, 1, 0};
    const lw_poly num = {1, &one}, den = {3, ten};
    lw_plant *plant;
    MADE(plant, lw_plant_transfer(1, 1, &num, &den, NULL, NULL, out, err));
    pulse p = pulse_of(plant, period);
    lw_plant_free(plant);
    return p;
}

// Compare with gain (z + zero) / ((z - 1)(z - pole)), printed to four digits.
static void compare_antenna(double period, double gain, double zero, double pole)
{
    pulse p = antenna(period);
    ck_assert(fabs(p.b[0] - gain) < 5e-5); // half a unit of the last digit
    ck_assert(fabs(p.b[1] / p.b[0] - zero) < 5e-5);
    ck_assert(fabs(p.a[1] - pole) < 5e-5);
    ck_assert(fabs(p.a[0] + 1 + pole) < 5e-5);
}

START_TEST(the_antenna_drive_has_the_printed_coefficients)
{
    // Z-24, [FPW] antenna 1 / (s (10 s + 1)), T = 1: from memory
    compare_antenna(1, 0.0484, 0.9672, 0.9048);
    // Z-25, [FPW] the same, T = 0.2: from memory
    compare_antenna(0.2, 0.00199, 0.9934, 0.9802);
}
END_TEST

START_TEST(a_chain_of_integrators_has_the_zeros_of_its_sampling)
{
    // Z-26, Astrom, Hagander, Sternby, Zeros of sampled systems, Automatica 20 (1984) 31-38;
    // statement read, numbers from memory
    static const double zeros[4][4] = {
        {-1}, {-3.732, -0.268}, {-9.899, -1, -0.101}, {-23.20, -2.322, -0.431, -0.0431}};
    static const double poles[5][2] = {{0}};
    int n = _i + 2;
    number found[N_ORDER];
    lw_plant *plant;
    MADE(plant, lw_plant_zeros_poles(0, NULL, n, poles, 1, out, err));
    pulse p = pulse_of(plant, 1);
    roots_of(n - 1, p.b, found);
    for (int k = 0; k < n - 1; k++) {
        // half a unit of the coarsest printed digit
        ck_assert(cabs(found[k] - zeros[_i][k]) < (n == 5 ? 6e-3 : 5e-4));
        ck_assert(fabs(cimag(found[k])) < 1e-12);
    }
    lw_plant_free(plant);
}
END_TEST

START_TEST(two_equal_unstable_states_sample_as_printed)
{
    static sampled s;
    const double a2[] = {1, 0, 0, 1}, b2[] = {0.5, 0.5}, c2[] = {1, 0};
    lw_plant *plant;
    MADE(plant, lw_plant_state_space(2, 1, 1, a2, b2, c2, NULL, NULL, NULL, NULL, NULL, out, err));
    sample(plant, 0.5, &s);
    // Z-27, a numerical library's own test of its conversion to discrete time: from memory
    const double phi = 1.648721270700128, gamma = 0.324360635350064;
    // the digits printed
    ck_near(lw__dd_to_double(s.f[0]), phi, 2e-15, 1);
    ck_near(lw__dd_to_double(s.f[1]), 0, 0, 0);
    ck_near(lw__dd_to_double(s.f[2]), 0, 0, 0);
    ck_near(lw__dd_to_double(s.f[3]), phi, 2e-15, 1);
    ck_near(lw__dd_to_double(s.g[0]), gamma, 2e-15, 1);
    ck_near(lw__dd_to_double(s.g[1]), gamma, 2e-15, 1);
    lw_plant_free(plant);
}
END_TEST

START_TEST(a_plant_of_five_states_and_inputs_samples_as_printed)
{
    static sampled s;
    static const double a5[] = {5, 4, 3, 2, 1, 1, 6, 0, 4, 3, 2, 0, 7,
                                6, 5, 1, 3, 1, 8, 7, 2, 5, 7, 1, 9};
    static const double unit[] = {1, 0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0, 1,
                                  0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0, 1};
    lw_plant *plant;
    MADE(plant,
         lw_plant_state_space(5, 5, 5, a5, unit, unit, NULL, NULL, NULL, NULL, NULL, out, err));
    sample(plant, 0.1, &s);
    // Z-28, SLICOT, example of MB05ND, exp(0.1 A)
    static const double phi[] = {1.8391, .9476,  .7920,  .8216, .7811,  .3359,  2.2262,
                                 .4013,  1.0078, 1.0957, .6335, .6776,  2.6933, 1.6155,
                                 1.8502, .4804,  1.1561, .9110, 2.7461, 2.0854, .7105,
                                 1.4244, 1.8835, 1.0966, 3.4134};
    // Z-29, SLICOT, example of MB05ND, integral of exp(A s) from 0 to 0.1
    static const double gamma[] = {.1347, .0352, .0284, .0272, .0231, .0114, .1477, .0104, .0369,
                                   .0368, .0218, .0178, .1624, .0580, .0619, .0152, .0385, .0267,
                                   .1660, .0732, .0240, .0503, .0679, .0317, .1863};
    for (int i = 0; i < 25; i++) { // half a unit of the last digit
        ck_assert(fabs(lw__dd_to_double(s.f[i]) - phi[i]) <= 5.001e-5);
        ck_assert(fabs(lw__dd_to_double(s.g[i]) - gamma[i]) <= 5.001e-5);
    }
    lw_plant_free(plant);
}
END_TEST

// Largest K for which 1 + K P has all roots within the unit circle.
static double largest_gain(const pulse *p)
{
    double lo = 0, hi = 100;
    for (int step = 0; step < 60; step++) {
        double k = (lo + hi) / 2, closed[N_ORDER + 1] = {1}, most = 0;
        number roots[N_ORDER];
        for (int i = 0; i < p->n; i++)
            closed[i + 1] = p->a[i] + k * p->b[i];
        roots_of(p->n, closed, roots);
        for (int i = 0; i < p->n; i++)
            most = fmax(most, cabs(roots[i]));
        *(most < 1 ? &lo : &hi) = k;
    }
    return lo;
}

START_TEST(a_third_order_loop_is_stable_up_to_the_printed_gain)
{
    static const double poles[3][2] = {{-1, 0}, {-1, 0}, {-1, 0}};
    // Z-30, C. Nyack, teaching page on third-order sampled systems
    static const double period[] = {0.05, 0.2, 0.5}, limit[] = {7.5, 6.2, 4.9};
    lw_plant *plant;
    MADE(plant, lw_plant_zeros_poles(0, NULL, 3, poles, 1, out, err));
    for (int i = 0; i < 3; i++) {
        pulse p = pulse_of(plant, period[i]);
        ck_assert(fabs(largest_gain(&p) - limit[i]) < 0.05); // half a unit of the digit
    }
    lw_plant_free(plant);
}
END_TEST

// Largest real part of the eigenvalues of K / (s + 1)^3 in negative feedback.
static double closed_abscissa(double gain)
{
    static const double poles[3][2] = {{-1, 0}, {-1, 0}, {-1, 0}}, one = 1;
    double re[3], im[3];
    lw_error error;
    lw_plant *parts[3];
    MADE(parts[0], lw_plant_zeros_poles(0, NULL, 3, poles, gain, out, err));
    MADE(parts[1],
         lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &one, NULL, NULL, NULL, NULL, out, err));
    MADE(parts[2], lw_plant_feedback(parts[0], parts[1], -1, out, err));
    ck_assert_int_eq(lw__dense_eigen(3, lw_plant_look(parts[2]).a, re, im, &error), LW_OK);
    free_plants(3, parts);
    return fmax(re[0], fmax(re[1], re[2]));
}

START_TEST(a_third_order_loop_in_continuous_time_is_stable_up_to_eight)
{
    // Z-30, C. Nyack, the same page: K < 8 without sampling
    const double limit = 8;
    ck_near(closed_abscissa(limit), 0, 1e-13, 1); // rounding of eigenvalues of size 1
    ck_assert(closed_abscissa(0.999 * limit) < 0);
    ck_assert(closed_abscissa(1.001 * limit) > 0);
}
END_TEST

START_TEST(a_hold_lags_by_half_a_period_and_weakens_by_the_sinc)
{
    static const double turns[] = {0.1, 1, 2.5};
    static sampled s;
    const double wh = turns[_i], period = 0.25, w = wh / period;
    // x1 - i x2 turns with e^(i w t); a step held for h makes of it (1 - e^(-i w h)) / (i w)
    const double turn[] = {0, w, -w, 0}, input[] = {1, 0}, unit[] = {1, 0, 0, 1};
    lw_plant *plant;
    MADE(plant,
         lw_plant_state_space(2, 1, 2, turn, input, unit, NULL, NULL, NULL, NULL, NULL, out, err));
    sample(plant, period, &s);
    number held = (lw__dd_to_double(s.g[0]) + I * lw__dd_to_double(s.g[1])) / period;
    // Z-50: phase -w h / 2, gain sin(w h / 2) / (w h / 2), closed form
    const double phase = -wh / 2, gain = sin(wh / 2) / (wh / 2);
    ck_near(carg(held), phase, 1e-14, 1); // w h and h are rounded once each
    ck_near(cabs(held), gain, 1e-14, 1);
    lw_plant_free(plant);
}
END_TEST

// ---- modified z-transforms

// F(z, m) = sum over k >= 0 of f((k + m) T) z^-(k + 1) = C (z I - Phi(T))^-1 Phi(m T) B.
static number modified(const lw_plant *plant, double period, double m, number z)
{
    static sampled all, part;
    lw_plant_view v = lw_plant_look(plant);
    double phi[N_ORDER * N_ORDER], moved[N_ORDER] = {0};
    sample(plant, period, &all);
    sample(plant, m * period, &part);
    for (int i = 0; i < v.n_x; i++)
        for (int k = 0; k < v.n_x; k++) {
            phi[i * v.n_x + k] = lw__dd_to_double(all.f[i * v.n_x + k]);
            moved[i] += lw__dd_to_double(part.f[i * v.n_x + k]) * v.b[k];
        }
    return resolvent(v.n_x, phi, z, moved, v.c, 0);
}

START_TEST(impulse_responses_have_the_modified_z_transforms_of_the_table)
{
    const double T = 0.4, m = 0.35, w = w0, e = exp(-a * T), em = exp(-a * m * T);
    const number z = 1.3 + 0.4 * I, d = z - 1;
    const struct {
        int n_num, n_den;
        double num[2], den[4];
        number want;
    } table[] = {
        // [Jury] 1/s: from memory
        {1, 2, {1}, {1, 0}, 1 / d},
        // [Jury] 1/s^2: from memory
        {1, 3, {1}, {1, 0, 0}, m * T / d + T / (d * d)},
        // [Jury] 1/s^3: from memory
        {1,
         4,
         {1},
         {1, 0, 0, 0},
         T * T / 2 * (m * m / d + (2 * m + 1) / (d * d) + 2 / (d * d * d))},
        // [Jury] 1 / (s + a): from memory
        {1, 2, {1}, {1, a}, em / (z - e)},
        // [Jury] 1 / (s + a)^2: from memory
        {1, 3, {1}, {1, 2 * a, a * a}, T * em * (e + m * (z - e)) / ((z - e) * (z - e))},
        // [Jury] a / (s (s + a)): from memory
        {1, 3, {a}, {1, a, 0}, 1 / d - em / (z - e)},
        // [Jury] a / (s^2 (s + a)): from memory
        {1, 4, {a}, {1, a, 0, 0}, T / (d * d) + (m * T - 1 / a) / d + em / (a * (z - e))},
        // [Jury] w / (s^2 + w^2): from memory
        {1,
         3,
         {w},
         {1, 0, w * w},
         (z * sin(m * w * T) + sin((1 - m) * w * T)) / (z * z - 2 * z * cos(w * T) + 1)},
        // [Jury] s / (s^2 + w^2): from memory
        {2,
         3,
         {1, 0},
         {1, 0, w * w},
         (z * cos(m * w * T) - cos((1 - m) * w * T)) / (z * z - 2 * z * cos(w * T) + 1)},
    };
    ck_assert_int_eq((int)(sizeof table / sizeof *table), 9);
    const lw_poly num = {table[_i].n_num, table[_i].num}, den = {table[_i].n_den, table[_i].den};
    lw_plant *plant;
    MADE(plant, lw_plant_transfer(1, 1, &num, &den, NULL, NULL, out, err));
    // rounding of Phi against a pole at 1 half a unit away, cubed at worst
    ck_response(modified(plant, T, m, z), table[_i].want, 1e-13);
    lw_plant_free(plant);
}
END_TEST

// ---- ready plants against their equations in s

static const number at[] = {0.7 * I, 3 + 40 * I, -2 + 5e3 * I, 1e-3, 2e4 * I};
#define N_AT ((int)(sizeof at / sizeof *at))

// Tolerance: each element is rounded; the parts of the current that turn the load cancel a
// hundredfold.
#define READY_TOLERANCE 1e-13

START_TEST(ready_plants_of_one_output_have_the_transfer_functions_of_their_equations)
{
    lw_plant *p[4];
    MADE(p[0], lw_plant_integrator(-3, out, err));
    MADE(p[1], lw_plant_first_order(2.5, 0.04, out, err));
    MADE(p[2], lw_plant_second_order(1.5, 120, 0.03, out, err));
    MADE(p[3], lw_plant_winding(0.8, 2e-3, out, err));
    for (int k = 0; k < N_AT; k++) {
        number s = at[k];
        ck_response(response(p[0], 0, 0, s), -3 / s, READY_TOLERANCE);
        ck_response(response(p[1], 0, 0, s), 2.5 / (0.04 * s + 1), READY_TOLERANCE);
        ck_response(response(p[2], 0, 0, s),
                    1.5 * 120 * 120 / (s * s + 2 * 0.03 * 120 * s + 120 * 120), READY_TOLERANCE);
        ck_response(response(p[3], 0, 0, s), 1 / (2e-3 * s + 0.8), READY_TOLERANCE);
    }
    free_plants(4, p);
}
END_TEST

START_TEST(a_dc_machine_has_the_transfer_functions_of_its_equations)
{
    const lw_dc_machine m = {0.8, 2e-3, 0.05, 0.047, 4e-4, 1e-5};
    lw_plant *p;
    MADE(p, lw_plant_dc_machine(&m, out, err));
    for (int k = 0; k < N_AT; k++) {
        number s = at[k], z = m.inductance * s + m.resistance, j = m.inertia * s + m.friction,
               den = z * j + m.torque_constant * m.back_emf_constant;
        ck_response(response(p, 0, 0, s), j / den, READY_TOLERANCE);
        ck_response(response(p, 1, 0, s), m.torque_constant / den, READY_TOLERANCE);
        ck_response(response(p, 0, 1, s), m.back_emf_constant / den, READY_TOLERANCE);
        ck_response(response(p, 1, 1, s), -z / den, READY_TOLERANCE);
    }
    lw_plant_free(p);
}
END_TEST

// Invented drive of a small telescope mount.
static const lw_two_mass_drive mount = {0.8, 2e-3, 0.05, 0.047, 4e-4, 0.021, 90, 0.02, 1e-5, 3e-4};

START_TEST(a_two_mass_drive_has_the_transfer_functions_of_its_equations)
{
    lw_plant *p;
    MADE(p, lw_plant_two_mass_drive(&mount, out, err));
    for (int k = 0; k < N_AT; k++) {
        // shaft: torque (c + k / s)(wm - wl); load and motor as impedances
        number s = at[k], z = mount.inductance * s + mount.resistance,
               shaft = mount.damping + mount.stiffness / s,
               load = mount.load_inertia * s + mount.load_friction,
               motor = mount.motor_inertia * s + mount.motor_friction,
               both = motor + shaft * load / (shaft + load), kt = mount.torque_constant,
               ke = mount.back_emf_constant, wm = kt / (z * both + kt * ke),
               wl = wm * shaft / (shaft + load);
        ck_response(response(p, 0, 0, s), wm * both / kt, READY_TOLERANCE);
        ck_response(response(p, 1, 0, s), wm, READY_TOLERANCE);
        ck_response(response(p, 2, 0, s), wm * load / (shaft + load) / s, READY_TOLERANCE);
        ck_response(response(p, 3, 0, s), wl, READY_TOLERANCE);
        ck_response(response(p, 4, 0, s), wl / s, READY_TOLERANCE);
        // a torque on the load works against the motor braked by its own winding
        number brake = motor + kt * ke / z, held = load + shaft * brake / (shaft + brake),
               wl2 = -1 / held, wm2 = wl2 * shaft / (shaft + brake);
        ck_response(response(p, 0, 1, s), -ke * wm2 / z, READY_TOLERANCE);
        ck_response(response(p, 1, 1, s), wm2, READY_TOLERANCE);
        ck_response(response(p, 3, 1, s), wl2, READY_TOLERANCE);
    }
    lw_plant_free(p);
}
END_TEST

// to += p q
static void add_product(int n_p, const double *p, int n_q, const double *q, int n, double *to)
{
    for (int i = 0; i < n_p; i++)
        for (int k = 0; k < n_q; k++)
            to[n - n_p - n_q + 1 + i + k] += p[i] * q[k];
}

START_TEST(a_two_mass_drive_has_the_eigenvalues_of_its_characteristic_polynomial)
{
    const double z[] = {mount.inductance, mount.resistance},
                 motor[] = {mount.motor_inertia, mount.motor_friction},
                 shaft[] = {mount.damping, mount.stiffness},
                 load[] = {mount.load_inertia, mount.load_friction},
                 hung[] = {mount.load_inertia, mount.load_friction + mount.damping,
                           mount.stiffness},
                 coupling = mount.torque_constant * mount.back_emf_constant;
    // (L s + R) ((Jm s + fm) Q + (c s + k)(Jl s + fl)) + kt ke Q, Q = Jl s^2 + (c + fl) s + k;
    // the load angle adds s
    double mechanical[4] = {0}, p[6] = {0}, re[5], im[5];
    number roots[5];
    lw_error error;
    lw_plant *plant;
    add_product(2, motor, 3, hung, 4, mechanical);
    add_product(2, shaft, 2, load, 4, mechanical);
    add_product(2, z, 4, mechanical, 5, p);
    add_product(1, &coupling, 3, hung, 5, p);
    roots_of(5, p, roots);
    MADE(plant, lw_plant_two_mass_drive(&mount, out, err));
    ck_assert_int_eq(lw__dense_eigen(5, lw_plant_look(plant).a, re, im, &error), LW_OK);
    for (int i = 0; i < 5; i++) {
        double nearest = INFINITY;
        for (int k = 0; k < 5; k++)
            nearest = fmin(nearest, cabs(roots[i] - (re[k] + I * im[k])));
        // both are stable to rounding of the largest eigenvalue, 4e2
        ck_assert_msg(nearest < 1e-11 * 4e2, "%g%+gi is off by %g", creal(roots[i]),
                      cimag(roots[i]), nearest);
    }
    lw_plant_free(plant);
}
END_TEST

START_TEST(gsl_samples_the_ready_plants_alike)
{
    const lw_dc_machine m = {0.8, 2e-3, 0.05, NAN, 4e-4, 1e-5};
    lw_plant *p[3];
    MADE(p[0], lw_plant_second_order(1, 3, -0.1, out, err));
    MADE(p[1], lw_plant_dc_machine(&m, out, err));
    MADE(p[2], lw_plant_two_mass_drive(&mount, out, err));
    for (int i = 0; i < 3; i++)
        // GSL does not balance: with a norm of 450 it squares ten times, each doubling the error
        ck_assert_msg(off_gsl(p[i], 2e-3) < 1e-12, "plant %d is off by %g", i, off_gsl(p[i], 2e-3));
    free_plants(3, p);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("plant tables");
    TCase *table = tcase_create("table"), *ready = tcase_create("ready");
    tcase_add_loop_test(table, a_sampled_plant_has_the_pulse_transfer_function_of_the_table, 0,
                        2 * N_ROWS);
    tcase_add_loop_test(table, a_planted_fault_differs_from_the_table, 0, N_ROWS);
    tcase_add_loop_test(table, gsl_samples_the_plants_of_the_table_alike, 0, 2 * N_ROWS);
    tcase_add_test(table, a_delay_of_whole_periods_and_a_fraction_splits_the_input);
    tcase_add_loop_test(table, a_double_integrator_with_a_delay_splits_by_its_closed_form, 0, 4);
    tcase_add_test(table, a_first_order_plant_with_a_delay_splits_by_its_closed_form);
    tcase_add_test(table, a_split_input_gives_the_state_that_integration_gives);
    tcase_add_test(table, the_antenna_drive_has_the_printed_coefficients);
    tcase_add_loop_test(table, a_chain_of_integrators_has_the_zeros_of_its_sampling, 0, 4);
    tcase_add_test(table, two_equal_unstable_states_sample_as_printed);
    tcase_add_test(table, a_plant_of_five_states_and_inputs_samples_as_printed);
    tcase_add_test(table, a_third_order_loop_is_stable_up_to_the_printed_gain);
    tcase_add_test(table, a_third_order_loop_in_continuous_time_is_stable_up_to_eight);
    tcase_add_loop_test(table, a_hold_lags_by_half_a_period_and_weakens_by_the_sinc, 0, 3);
    tcase_add_loop_test(table, impulse_responses_have_the_modified_z_transforms_of_the_table, 0, 9);
    tcase_add_test(ready,
                   ready_plants_of_one_output_have_the_transfer_functions_of_their_equations);
    tcase_add_test(ready, a_dc_machine_has_the_transfer_functions_of_its_equations);
    tcase_add_test(ready, a_two_mass_drive_has_the_transfer_functions_of_its_equations);
    tcase_add_test(ready, a_two_mass_drive_has_the_eigenvalues_of_its_characteristic_polynomial);
    tcase_add_test(ready, gsl_samples_the_ready_plants_alike);
    suite_add_tcase(suite, table);
    suite_add_tcase(suite, ready);
    return run_suite(suite);
}
