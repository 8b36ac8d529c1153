// Recurrences of the ready laws: against a second computation, against closed forms.
//
// The second computation follows the text of law.h line by line, with its limits asked for one by
// one. Where law.h states the order of arithmetic, bits are compared. Planted faults show that the
// comparison can fail.

#include "laws.h"
#include "suite.h"

#include <complex.h>
#include <latewood/law.h>
#include <string.h>

#define PI 3.14159265358979323846
#define STEPS 120

// A law with its state, stepped at a period of T.
typedef struct bench {
    lw_law *law;
    const lw_law_def *def;
    double state[LW_LAW_MAX_STATES], out[LW_LAW_MAX_PORTS];
    lw_law_time time;
} bench;

static bench set_up(lw_law *law, double period)
{
    bench b = {.law = law, .def = lw_law_look(law), .time = {.nominal = period, .dt = period}};
    memcpy(b.state, b.def->start, sizeof(double) * (size_t)b.def->n_state);
    return b;
}

// Takes the law made by `call` to the bench.
#define SET_UP(b, period, call)                                                                    \
    do {                                                                                           \
        lw_law *made_ = NULL;                                                                      \
        lw_error err_ = {LW_OK, ""}, *err = &err_;                                                 \
        lw_law **out = &made_;                                                                     \
        ck_assert_msg((call) == LW_OK, "%s", err_.text);                                           \
        (b) = set_up(made_, (period));                                                             \
    } while (0)

static double step(bench *b, double wanted, double measured)
{
    const double in[2] = {wanted, measured};
    if (b->def->step(b->def->param, &b->time, in, b->state, b->out) != 0)
        ck_abort_msg("a step failed");
    return b->out[0];
}

// ---- P, PI, PD, PID against a second computation

typedef enum fault {
    NO_FAULT,
    ORDER_SWAPPED,
    DERIVATIVE_KICK,
    FIRST_MEAN_WITH_ZERO,
    PAUSE_ALSO_INWARDS,
    BACK_CALCULATION_OF_NEW_U,
    CLAMP_OF_OUTPUT_ONLY,
    DT_MIXED_UP,
    DERIVATIVE_OF_THE_OTHER,
    N_FAULTS
} fault;

typedef struct reference {
    const lw_pid *p;
    int has_i, has_d, n_steps;
    double sum, e_prev, d, x_prev;
    fault fault;
} reference;

static double held(double u, double lo, double hi)
{
    if (!isnan(hi) && u > hi)
        return hi;
    if (!isnan(lo) && u < lo)
        return lo;
    return u;
}

static double reference_u(const reference *r, double e)
{
    double u = r->p->kp * e;
    if (r->has_i)
        u = u + r->sum;
    if (r->has_d)
        u = u + r->p->kd * r->d;
    return u;
}

static void reference_integrate(reference *r, double T, double e, double u)
{
    const lw_pid *p = r->p;
    double e_prev = r->n_steps > 0 || r->fault == FIRST_MEAN_WITH_ZERO ? r->e_prev : e;
    int trapezoidal = p->integration == LW_TRAPEZOIDAL;
    double change = trapezoidal ? p->ki * T * (e + e_prev) / 2 : p->ki * T * e;
    if (p->anti_windup == LW_WINDUP_BACK_CALCULATION) {
        double drive = trapezoidal ? p->ki * (e + e_prev) / 2 : p->ki * e;
        if (r->fault == BACK_CALCULATION_OF_NEW_U)
            u = u + change;
        r->sum = r->sum + T * (drive + p->kb * (held(u, p->lo, p->hi) - u));
        return;
    }
    int above = !isnan(p->hi) && u > p->hi, below = !isnan(p->lo) && u < p->lo;
    if (p->anti_windup == LW_WINDUP_PAUSE) {
        if ((above && change > 0) || (below && change < 0))
            return;
        if (r->fault == PAUSE_ALSO_INWARDS && (above || below))
            return;
    }
    r->sum = r->sum + change;
    if (p->anti_windup == LW_WINDUP_CLAMP && r->fault != CLAMP_OF_OUTPUT_ONLY)
        r->sum = held(r->sum, p->lo, p->hi);
}

static void reference_step(reference *r, const lw_law_time *time, double wanted, double measured,
                           double *out)
{
    const lw_pid *p = r->p;
    double e = wanted - measured;
    double T = !p->use_measured_dt == (r->fault == DT_MIXED_UP) ? time->dt : time->nominal;
    double x = !p->derivative_on_measured == (r->fault == DERIVATIVE_OF_THE_OTHER) ? -measured : e;
    if (r->has_d) {
        double x_prev = r->n_steps > 0 || r->fault == DERIVATIVE_KICK ? r->x_prev : x;
        r->d = (p->filter * r->d + (x - x_prev)) / (p->filter + T);
    }
    double u = reference_u(r, e);
    if (r->has_i)
        reference_integrate(r, T, e, u);
    if (!p->update_first == (r->fault == ORDER_SWAPPED))
        u = reference_u(r, e);
    r->e_prev = e;
    r->x_prev = x;
    r->n_steps++;
    out[0] = held(u, p->lo, p->hi);
    out[1] = u;
}

static double reference_state(const reference *r, const char *name)
{
    if (strcmp(name, "integral") == 0)
        return r->sum;
    if (strcmp(name, "previous_error") == 0)
        return r->e_prev;
    if (strcmp(name, "derivative") == 0)
        return r->d;
    if (strcmp(name, "previous_input") == 0)
        return r->x_prev;
    return strcmp(name, "started") == 0 ? r->n_steps > 0 : NAN;
}

// Steps at which outputs or states differ from the reference in any bit; counts limited ones.
static int differences(const char *kind, const lw_pid *p, fault f, int *n_limited)
{
    bench b;
    SET_UP(b, 0.001, lw_law_pid(kind, p, out, err));
    reference r = {.p = p,
                   .has_i = strchr(kind, 'i') != NULL,
                   .has_d = strchr(kind, 'd') != NULL,
                   .sum = p->start,
                   .fault = f};
    uint64_t seed = 7;
    int n = 0;
    for (int k = 0; k < STEPS; k++) {
        // slow enough that limits hold for a while, in both directions
        double wanted = (k / 20 % 2 ? -1 : 1) + 0.5 * uniform(&seed), measured = uniform(&seed);
        b.time.dt = 0.001 + 0.0004 * uniform(&seed);
        double want[2];
        step(&b, wanted, measured);
        reference_step(&r, &b.time, wanted, measured, want);
        int differs = !same_bits(b.out[0], want[0]) || !same_bits(b.out[1], want[1]);
        for (int i = 0; i < b.def->n_state; i++)
            differs |= !same_bits(b.state[i], reference_state(&r, b.def->state_names[i]));
        n += differs;
        *n_limited += b.out[0] != b.out[1];
    }
    lw_law_free(b.law);
    return n;
}

static int variants_that_differ(fault f, int *n_variants, int *n_limited)
{
    int n = 0;
    *n_variants = *n_limited = 0;
    for (int v = 0; v < N_VARIANTS; v++) {
        const char *kind;
        lw_pid p;
        if (!variant(v, &kind, &p))
            continue;
        n += differences(kind, &p, f, n_limited) > 0;
        ++*n_variants;
    }
    return n;
}

START_TEST(every_variant_of_pid_equals_the_stated_recurrence_bit_for_bit)
{
    int n_variants, n_limited;
    ck_assert_int_eq(variants_that_differ(NO_FAULT, &n_variants, &n_limited), 0);
    // p and pd with 4 choices of limits; pi and pid with 4, and 3 for each of 3 anti-windups
    ck_assert_int_eq(n_variants, 8 + 32 + (8 + 32) * 13);
    ck_assert_int_gt(n_limited, STEPS * n_variants / 10);
}
END_TEST

START_TEST(the_comparison_notices_each_planted_fault)
{
    int n_variants, n_limited;
    ck_assert_int_gt(variants_that_differ((fault)_i, &n_variants, &n_limited), 0);
}
END_TEST

// ---- PI and PID in closed form

static lw_pid gains(double kp, double ki, double kd)
{
    lw_pid p = lw_pid_default();
    p.kp = kp;
    p.ki = ki;
    p.kd = kd;
    return p;
}

START_TEST(pi_on_a_constant_error_climbs_in_equal_steps)
{
    // binary fractions: every product and sum is exact
    lw_pid p = gains(0.5, 3, 0);
    p.start = 0.25;
    bench b;
    SET_UP(b, 0x1p-10, lw_law_pid("pi", &p, out, err));
    for (int k = 0; k < 1000; k++)
        ck_assert_double_eq(step(&b, 2.5, 0.5), 0.5 * 2 + 0.25 + 3 * 0x1p-10 * 2 * k);
    lw_law_free(b.law);
}
END_TEST

START_TEST(pi_on_a_ramp_has_the_sum_of_its_rule)
{
    // e_k = k, in binary fractions: sums of k or of k - 1/2, before or after this step
    for (int way = 0; way < 4; way++) {
        lw_pid p = gains(0, 1, 0);
        p.integration = way & 1 ? LW_TRAPEZOIDAL : LW_FORWARD_EULER;
        p.update_first = way >> 1;
        bench b;
        SET_UP(b, 0x1p-10, lw_law_pid("pi", &p, out, err));
        for (int k = 0; k < 500; k++) {
            double m = k + p.update_first; // steps within the sum
            double sum = way & 1 ? (m - 1) * (m - 1) / 2 : m * (m - 1) / 2;
            ck_assert_double_eq(step(&b, k, 0), m == 0 ? 0 : sum * 0x1p-10);
        }
        lw_law_free(b.law);
    }
}
END_TEST

START_TEST(derivative_of_a_ramp_approaches_its_slope_geometrically)
{
    lw_pid p = gains(0, 0, 1);
    p.filter = 0.003;
    bench b;
    SET_UP(b, 0.001, lw_law_pid("pd", &p, out, err));
    for (int k = 0; k < 60; k++)
        // rounding of 60 differences of terms up to 1 over 0.001; far below the 1 of the slope
        ck_near(step(&b, 5 * 0.001 * k, 0), 5 * (1 - pow(0.75, k)), 1e-12, 5);
    lw_law_free(b.law);
}
END_TEST

START_TEST(first_step_gives_no_derivative_kick)
{
    lw_pid p = gains(2, 0, 10);
    bench b;
    SET_UP(b, 0.001, lw_law_pid("pd", &p, out, err));
    ck_assert_double_eq(step(&b, 3, 0), 6);
    ck_assert_double_eq(step(&b, 3, 0), 6);
    lw_law_free(b.law);
}
END_TEST

START_TEST(derivative_on_measured_does_not_see_a_step_of_wanted)
{
    lw_pid p = gains(0, 0, 0.01);
    p.derivative_on_measured = 1;
    bench b;
    SET_UP(b, 0.5, lw_law_pid("pd", &p, out, err));
    step(&b, 0, 1);
    ck_assert_double_eq(step(&b, 50, 1), 0);
    ck_assert_double_eq(step(&b, 50, 2), -0.02);
    lw_law_free(b.law);
}
END_TEST

START_TEST(measured_dt_scales_the_integral_of_that_step)
{
    lw_pid p = gains(0, 2, 0);
    p.use_measured_dt = p.update_first = 1;
    bench b;
    SET_UP(b, 0.5, lw_law_pid("pi", &p, out, err));
    ck_assert_double_eq(step(&b, 1, 0), 1);
    b.time.dt = 0.75;
    ck_assert_double_eq(step(&b, 1, 0), 2.5);
    lw_law_free(b.law);
}
END_TEST

// Transfer function of a PID at z, from its text by hand.
static double complex pid_response(const lw_pid *p, double T, double complex z)
{
    double complex per_step = p->integration == LW_TRAPEZOIDAL ? (1 + 1 / z) / 2 : 1;
    double complex integral = p->ki * T * per_step / (z - 1) * (p->update_first ? z : 1);
    return p->kp + integral + p->kd * (1 - 1 / z) / (p->filter + T - p->filter / z);
}

START_TEST(pid_answers_a_sine_with_its_frequency_response)
{
    const double T = 1e-4, at[] = {3, 40, 333, 1000, 4000};
    for (int way = 0; way < 4; way++)
        for (int i = 0; i < 5; i++) {
            lw_pid p = gains(1.5, 200, 0.002);
            p.filter = 4e-4;
            p.integration = way & 1 ? LW_TRAPEZOIDAL : LW_FORWARD_EULER;
            p.update_first = way >> 1;
            double complex z = cexp(I * 2 * PI * at[i] * T), h = pid_response(&p, T, z);
            // begin where the integral of a sine that has always been there would be
            double complex sum = p.ki * T / (z - 1) * (way & 1 ? (1 + 1 / z) / 2 : 1);
            // the first mean takes e_0 for e_-1
            double first = way & 1 ? p.ki * T * (1 - creal(1 / z)) / 2 : 0;
            p.start = creal(sum) - first;
            bench b;
            SET_UP(b, T, lw_law_pid("pid", &p, out, err));
            for (int k = 0; k < 400; k++) {
                double complex turn = cexp(I * 2 * PI * at[i] * T * k);
                double u = step(&b, creal(turn), 0);
                // the derivative's start decays by 0.8 a step: below 1e-17 after 200; what is left
                // is rounding of 400 sums and differences over 5e-4
                if (k > 200)
                    ck_near(u, creal(h * turn), 1e-12, cabs(h));
            }
            lw_law_free(b.law);
        }
}
END_TEST

// ---- anti-windup

static bench limited_pi(lw_anti_windup how, double kb)
{
    lw_pid p = gains(0.5, 4, 0);
    p.lo = -2;
    p.hi = 3;
    p.anti_windup = how;
    p.kb = kb;
    bench b;
    SET_UP(b, 0x1p-6, lw_law_pid("pi", &p, out, err));
    return b;
}

START_TEST(without_anti_windup_the_integral_runs_away)
{
    bench b = limited_pi(LW_WINDUP_NONE, 0);
    for (int k = 0; k < 1000; k++)
        step(&b, 1, 0);
    ck_assert_double_eq(b.state[0], 1000 * 4 * 0x1p-6);
    ck_assert_double_eq(b.out[0], 3);
    lw_law_free(b.law);
}
END_TEST

START_TEST(clamp_holds_the_integral_within_the_limits_and_reaches_them)
{
    bench b = limited_pi(LW_WINDUP_CLAMP, 0);
    uint64_t seed = 3;
    double least = 0, most = 0;
    for (int k = 0; k < 4000; k++) {
        step(&b, (k / 400 % 2 ? -2 : 2) + uniform(&seed), uniform(&seed));
        least = fmin(least, b.state[0]);
        most = fmax(most, b.state[0]);
    }
    ck_assert_double_eq(least, -2);
    ck_assert_double_eq(most, 3);
    lw_law_free(b.law);
}
END_TEST

START_TEST(pause_stops_at_the_first_sum_beyond_the_limit_and_lets_go_at_once)
{
    bench b = limited_pi(LW_WINDUP_PAUSE, 0);
    for (int k = 0; k < 1000; k++)
        step(&b, 1, 0);
    // 0.5 + k / 16 > 3 first at k = 41
    ck_assert_double_eq(b.state[0], 41 / 16.0);
    ck_assert_double_eq(b.out[1], 0.5 + 41 / 16.0);
    step(&b, -1, 0);
    ck_assert_double_eq(b.state[0], 40 / 16.0);
    lw_law_free(b.law);
}
END_TEST

START_TEST(pause_judges_by_the_change_also_with_a_negative_gain)
{
    lw_pid p = gains(-0.5, -4, 0);
    p.hi = 3;
    p.anti_windup = LW_WINDUP_PAUSE;
    bench b;
    SET_UP(b, 0x1p-6, lw_law_pid("pi", &p, out, err));
    for (int k = 0; k < 1000; k++)
        step(&b, -1, 0);
    ck_assert_double_eq(b.state[0], 41 / 16.0);
    lw_law_free(b.law);
}
END_TEST

START_TEST(back_calculation_settles_where_drive_and_excess_cancel)
{
    bench b = limited_pi(LW_WINDUP_BACK_CALCULATION, 10);
    // 0 = ki e + kb (hi - kp e - I) at e = 2
    double rest = 3 - 0.5 * 2 + 4 * 2 / 10.0, before = -INFINITY;
    for (int k = 0; k < 2000; k++) {
        step(&b, 2, 0);
        double gap = rest - b.state[0];
        ck_assert_double_ge(gap, -1e-14); // never past it: 1 - kb T = 0.84 is above 0
        if (before < 0.8 && before > 1e-3)
            // u is beyond its limit: the gap shrinks by 1 - kb T a step; rounding against 1e-3
            ck_near(gap / before, 1 - 10 * 0x1p-6, 1e-11, 1);
        before = gap;
    }
    // a geometric end: what is left is rounding of numbers near 3
    ck_near(b.state[0], rest, 1e-15, 3);
    lw_law_free(b.law);
}
END_TEST

START_TEST(output_stays_within_limits_and_passes_what_is_not_a_number)
{
    bench b = limited_pi(LW_WINDUP_CLAMP, 0);
    ck_assert_double_eq(step(&b, 1e9, 0), 3);
    ck_assert_double_eq(b.out[1], 0.5e9);
    ck_assert_double_eq(step(&b, -1e9, 0), -2);
    ck_assert(isnan(step(&b, NAN, 0)));
    lw_law_free(b.law);
}
END_TEST

// ---- lead

START_TEST(lead_equals_the_stated_recurrence_bit_for_bit)
{
    const double T = 0.002, z = 30, p = 400, g = 1.7;
    bench b;
    SET_UP(b, T, lw_law_lead(g, z, p, -2, 2, out, err));
    uint64_t seed = 11;
    double e_prev = 0, u_prev = 0;
    for (int k = 0; k < STEPS; k++) {
        double wanted = 3 * uniform(&seed), measured = uniform(&seed), e = wanted - measured;
        double a = 2 / T;
        double u = ((a - p) * u_prev + g * ((a + z) * e + (z - a) * e_prev)) / (a + p);
        step(&b, wanted, measured);
        ck_assert_double_eq(b.out[1], u);
        ck_assert_double_eq(b.out[0], held(u, -2, 2));
        e_prev = e;
        u_prev = u;
    }
    lw_law_free(b.law);
}
END_TEST

START_TEST(lead_has_its_gain_at_rest_at_half_the_rate_and_between)
{
    const double T = 0.002, zero = 30, pole = 400, g = 1.7;
    for (int i = 0; i <= 4; i++) {
        double angle = PI * i / 4; // per sample; at half the rate s is infinite
        // Tustin: s = 2/T (z - 1)/(z + 1) = j 2/T tan(angle / 2)
        double complex s = I * 2 / T * tan(angle / 2);
        double complex h = i < 4 ? g * (s + zero) / (s + pole) : g;
        bench b;
        SET_UP(b, T, lw_law_lead(g, zero, pole, NAN, NAN, out, err));
        for (int k = 0; k < 200; k++) {
            double u = step(&b, creal(cexp(I * angle * k)), 0);
            // the start decays by 3/7 a step: below 1e-36 after 100; the rest is rounding, at rest
            // against terms up to 13 times the gain
            if (k > 100)
                ck_near(u, creal(h * cexp(I * angle * k)), 1e-13, g);
        }
        lw_law_free(b.law);
    }
}
END_TEST

// ---- z-transfer function

START_TEST(z_transfer_without_poles_answers_an_impulse_with_its_coefficients)
{
    const double b0[] = {3, -1, 0.5, 7}, a0[] = {2};
    bench b;
    SET_UP(b, 1, lw_law_z_transfer(4, b0, 1, a0, NAN, NAN, out, err));
    for (int k = 0; k < 8; k++)
        ck_assert_double_eq(step(&b, k == 0, 0), k < 4 ? b0[k] / 2 : 0);
    lw_law_free(b.law);
}
END_TEST

START_TEST(z_transfer_with_one_pole_answers_an_impulse_with_a_geometric_series)
{
    const double b0[] = {1}, a0[] = {1, -0.5};
    bench b;
    SET_UP(b, 1, lw_law_z_transfer(1, b0, 2, a0, NAN, NAN, out, err));
    for (int k = 0; k < 60; k++)
        ck_assert_double_eq(step(&b, k == 0, 0), ldexp(1, -k));
    lw_law_free(b.law);
}
END_TEST

START_TEST(biquad_with_complex_poles_answers_an_impulse_with_a_decaying_sine)
{
    const double r = 0.9, turn = 0.7, b0[] = {1}, a0[] = {1, -2 * r * cos(turn), r * r};
    bench b;
    SET_UP(b, 1, lw_law_z_transfer(1, b0, 3, a0, NAN, NAN, out, err));
    for (int k = 0; k < 100; k++)
        // rounding of the two coefficients and of sums that decay as fast as the answer
        ck_near(step(&b, k == 0, 0), pow(r, k) * sin((k + 1) * turn) / sin(turn), 1e-13, 1);
    lw_law_free(b.law);
}
END_TEST

// Direct form I: a double sum over past inputs and outputs, straight from H(z).
static double direct_form(int n_b, const double *b, int n_a, const double *a, const double *e,
                          const double *u, int k)
{
    double sum = 0;
    for (int i = 0; i < n_b && i <= k; i++)
        sum += b[i] * e[k - i];
    for (int i = 1; i < n_a && i <= k; i++)
        sum -= a[i] * u[k - i];
    return sum / a[0];
}

START_TEST(z_transfer_of_any_order_equals_the_difference_equation)
{
    const struct {
        int n_b, n_a;
    } size[] = {{1, 1}, {2, 1}, {1, 3}, {3, 3}, {5, 2}, {65, 2}, {3, 65}};
    for (int i = 0; i < 7; i++) {
        double b0[65], a0[65], e[STEPS], u[STEPS];
        uint64_t seed = 5;
        for (int k = 0; k < 65; k++) {
            b0[k] = uniform(&seed);
            a0[k] = k == 0 ? 4 : 0.05 * uniform(&seed); // stable: the others sum to less than 4
        }
        bench b;
        SET_UP(b, 1, lw_law_z_transfer(size[i].n_b, b0, size[i].n_a, a0, -0.5, 0.5, out, err));
        for (int k = 0; k < STEPS; k++) {
            double wanted = uniform(&seed), measured = uniform(&seed);
            e[k] = wanted - measured;
            u[k] = 0;
            u[k] = direct_form(size[i].n_b, b0, size[i].n_a, a0, e, u, k);
            step(&b, wanted, measured);
            // up to 129 products below 1 in another order
            ck_near(b.out[1], u[k], 1e-14, 1);
            ck_assert_double_eq(b.out[0], held(b.out[1], -0.5, 0.5));
        }
        lw_law_free(b.law);
    }
}
END_TEST

START_TEST(biquad_equals_transposed_direct_form_two_bit_for_bit)
{
    const double b0[] = {0.3, -0.2, 0.7}, a0[] = {1.6, -0.9, 0.4};
    bench b;
    SET_UP(b, 1, lw_law_z_transfer(3, b0, 3, a0, NAN, NAN, out, err));
    double c0 = 0.3 / 1.6, c1 = -0.2 / 1.6, c2 = 0.7 / 1.6, d1 = -0.9 / 1.6, d2 = 0.4 / 1.6;
    double s1 = 0, s2 = 0;
    uint64_t seed = 2;
    for (int k = 0; k < STEPS; k++) {
        double e = uniform(&seed), u = c0 * e + s1;
        s1 = s2 + c1 * e - d1 * u;
        s2 = c2 * e - d2 * u;
        ck_assert_double_eq(step(&b, e, 0), u);
        ck_assert_double_eq(b.state[0], s1);
        ck_assert_double_eq(b.state[1], s2);
    }
    lw_law_free(b.law);
}
END_TEST

// ---- state feedback and observer

START_TEST(state_feedback_is_feed_forward_less_gain_times_state)
{
    const double k[] = {1, 2, 3, -4, 0.5, 8}, n[] = {2, 0, 1, -1};
    bench b;
    SET_UP(b, 1, lw_law_state_feedback(2, 3, 2, k, n, -20, 20, out, err));
    const double in[] = {10, 7, 1, -2, 0.5};
    ck_assert_int_eq(b.def->step(b.def->param, &b.time, in, b.state, b.out), 0);
    const double want[] = {20, 7 - 4.0, 20 - (1 - 4 + 1.5), 10 - 7 - (-4 - 1 + 4.0)};
    ck_assert_double_eq(b.out[2], want[2]);
    ck_assert_double_eq(b.out[3], want[3]);
    ck_assert_double_eq(b.out[0], 20);
    ck_assert_double_eq(b.out[1], want[3]);
    lw_law_free(b.law);
}
END_TEST

START_TEST(state_feedback_sums_in_the_stated_order)
{
    // 1e16 + 1 is not a double: another order gives another sum
    const double k[] = {1, 1}, n[] = {1};
    bench b;
    SET_UP(b, 1, lw_law_state_feedback(1, 2, 1, k, n, NAN, NAN, out, err));
    const double in[] = {1e16, -1, 1e16}, other[] = {-1, 1e16, -1e16};
    b.def->step(b.def->param, &b.time, in, b.state, b.out);
    ck_assert_double_eq(b.out[0], 0);
    b.def->step(b.def->param, &b.time, other, b.state, b.out);
    ck_assert_double_eq(b.out[0], (-1 - 1e16) + 1e16);
    lw_law_free(b.law);
}
END_TEST

// A double integrator with a dead-beat observer: (A - L C)^2 = 0, all in whole numbers.
static bench observer(double lo, double hi)
{
    static const double a[] = {1, 1, 0, 1}, c[] = {1, 0}, l[] = {2, 1}, in[] = {0.5, 1};
    static const double k[] = {0.25, 0.5}, n[] = {0.25}, start[] = {8, -3};
    const lw_observer o = {.n_x = 2,
                           .n_u = 1,
                           .n_y = 1,
                           .n_w = 1,
                           .a = a,
                           .b = in,
                           .c = c,
                           .l = l,
                           .k = k,
                           .n = n,
                           .start = start,
                           .lo = lo,
                           .hi = hi};
    bench b;
    SET_UP(b, 1, lw_law_observer(&o, out, err));
    return b;
}

START_TEST(dead_beat_observer_knows_the_plant_after_as_many_steps_as_states)
{
    bench b = observer(-0.25, 0.25);
    double x[2] = {-6, 2};
    for (int i = 0; i < 20; i++) {
        double u = step(&b, 4, x[0]);
        // the plant gets the limited u, and so does the model
        double next = x[0] + x[1] + 0.5 * u;
        x[1] = x[1] + u;
        x[0] = next;
        if (i >= 1) {
            ck_assert_double_eq(b.state[0], x[0]);
            ck_assert_double_eq(b.state[1], x[1]);
        }
        if (i == 0)
            ck_assert_double_ne(b.out[0], b.out[1]);
    }
    lw_law_free(b.law);
}
END_TEST

START_TEST(observer_with_several_ports_equals_a_second_computation)
{
    enum { X = 4, U = 2, Y = 3, W = 2 };
    double m[X * X + X * U + Y * X + X * Y + U * X + U * W];
    uint64_t seed = 21;
    for (size_t i = 0; i < sizeof m / sizeof *m; i++)
        m[i] = 0.4 * uniform(&seed);
    const double *a = m, *bb = a + X * X, *c = bb + X * U, *l = c + Y * X, *k = l + X * Y,
                 *n = k + U * X;
    const lw_observer o = {.n_x = X,
                           .n_u = U,
                           .n_y = Y,
                           .n_w = W,
                           .a = a,
                           .b = bb,
                           .c = c,
                           .l = l,
                           .k = k,
                           .n = n,
                           .lo = -0.2,
                           .hi = NAN};
    bench b;
    SET_UP(b, 1, lw_law_observer(&o, out, err));
    double x[X] = {0};
    for (int t = 0; t < STEPS; t++) {
        double in[W + Y], u[U], v[Y], next[X];
        for (int i = 0; i < W + Y; i++)
            in[i] = uniform(&seed);
        for (int i = 0; i < U; i++) {
            u[i] = n[i * W] * in[0] + n[i * W + 1] * in[1];
            for (int j = 0; j < X; j++)
                u[i] -= k[i * X + j] * x[j];
        }
        b.def->step(b.def->param, &b.time, in, b.state, b.out);
        for (int i = 0; i < U; i++) {
            ck_assert_double_eq(b.out[U + i], u[i]);
            u[i] = held(u[i], -0.2, NAN);
            ck_assert_double_eq(b.out[i], u[i]);
        }
        for (int i = 0; i < Y; i++) {
            v[i] = in[W + i];
            for (int j = 0; j < X; j++)
                v[i] -= c[i * X + j] * x[j];
        }
        for (int i = 0; i < X; i++) {
            next[i] = a[i * X] * x[0];
            for (int j = 1; j < X; j++)
                next[i] += a[i * X + j] * x[j];
            for (int j = 0; j < U; j++)
                next[i] += bb[i * U + j] * u[j];
            for (int j = 0; j < Y; j++)
                next[i] += l[i * Y + j] * v[j];
        }
        for (int i = 0; i < X; i++)
            ck_assert_double_eq(b.state[i], x[i] = next[i]);
    }
    lw_law_free(b.law);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("law");
    TCase *pid = tcase_create("pid"), *windup = tcase_create("anti-windup");
    TCase *filter = tcase_create("filter"), *feedback = tcase_create("feedback");
    tcase_add_test(pid, every_variant_of_pid_equals_the_stated_recurrence_bit_for_bit);
    tcase_add_loop_test(pid, the_comparison_notices_each_planted_fault, 1, N_FAULTS);
    tcase_add_test(pid, pi_on_a_constant_error_climbs_in_equal_steps);
    tcase_add_test(pid, pi_on_a_ramp_has_the_sum_of_its_rule);
    tcase_add_test(pid, derivative_of_a_ramp_approaches_its_slope_geometrically);
    tcase_add_test(pid, first_step_gives_no_derivative_kick);
    tcase_add_test(pid, derivative_on_measured_does_not_see_a_step_of_wanted);
    tcase_add_test(pid, measured_dt_scales_the_integral_of_that_step);
    tcase_add_test(pid, pid_answers_a_sine_with_its_frequency_response);
    tcase_add_test(windup, without_anti_windup_the_integral_runs_away);
    tcase_add_test(windup, clamp_holds_the_integral_within_the_limits_and_reaches_them);
    tcase_add_test(windup, pause_stops_at_the_first_sum_beyond_the_limit_and_lets_go_at_once);
    tcase_add_test(windup, pause_judges_by_the_change_also_with_a_negative_gain);
    tcase_add_test(windup, back_calculation_settles_where_drive_and_excess_cancel);
    tcase_add_test(windup, output_stays_within_limits_and_passes_what_is_not_a_number);
    tcase_add_test(filter, lead_equals_the_stated_recurrence_bit_for_bit);
    tcase_add_test(filter, lead_has_its_gain_at_rest_at_half_the_rate_and_between);
    tcase_add_test(filter, z_transfer_without_poles_answers_an_impulse_with_its_coefficients);
    tcase_add_test(filter, z_transfer_with_one_pole_answers_an_impulse_with_a_geometric_series);
    tcase_add_test(filter, biquad_with_complex_poles_answers_an_impulse_with_a_decaying_sine);
    tcase_add_test(filter, z_transfer_of_any_order_equals_the_difference_equation);
    tcase_add_test(filter, biquad_equals_transposed_direct_form_two_bit_for_bit);
    tcase_add_test(feedback, state_feedback_is_feed_forward_less_gain_times_state);
    tcase_add_test(feedback, state_feedback_sums_in_the_stated_order);
    tcase_add_test(feedback, dead_beat_observer_knows_the_plant_after_as_many_steps_as_states);
    tcase_add_test(feedback, observer_with_several_ports_equals_a_second_computation);
    suite_add_tcase(suite, pid);
    suite_add_tcase(suite, windup);
    suite_add_tcase(suite, filter);
    suite_add_tcase(suite, feedback);
    return run_suite(suite);
}
