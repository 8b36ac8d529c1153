// Dense algebra to its last digits: exponentials in double-double, balancing, equations,
// eigenvalues, what overflows, and lack of memory.

#include "suite.h"

#include "base/alloc.h"
#include "base/dense.h"

#include <gsl/gsl_errno.h>
#include <latewood/draw.h>
#include <latewood/elementary.h>
#include <stdlib.h>
#include <string.h>

enum { MOST = 6 };

// ---- digits of exponentials

// Double-double holds 1e-32; a norm of A h of 1e3 to 1e6 is squared back 12 to 22 times, each of
// which may add that much again and twice what came before where nothing decays.
#define TOLERANCE 1e-28

// exp(A h), cut in two doubles, from Taylor's series in 120-digit arithmetic (derived, no published
// numbers).
static const struct {
    const char *what;
    int n;
    double a[16], h;
    lw__dd e[16];
} rows[] = {
    {"a resonance of 1000 rad/s, damping 0.001",
     2,
     {0, 1, -1e6, -2},
     1,
     {{0.20734385912812664, 1.2914391423721871e-17},
      {0.0003040886534356537, -1.2104138418788244e-20},
      {-304.0886534356537, 1.435580949060614e-14},
      {0.20673568182125535, -8.30767890006459e-19}}},
    {"four poles at -10 in companion form",
     4,
     {0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, -1e4, -4e3, -600, -40},
     0.5,
     {{0.2650259152973617, 1.4176117900472187e-17},
      {0.062326009741540574, -3.0170616091854023e-18},
      {0.005053460249314101, -3.6183766263508714e-19},
      {0.00014037389581428056, 1.995644621086518e-21},
      {-1.4037389581428057, 4.76977693522303e-17},
      {-0.29646966795976054, -1.1153695343641953e-17},
      {-0.021898327747027768, 1.22360308104705e-19},
      {-0.0005614955832571223, -7.982578484346071e-21},
      {5.614955832571223, -1.907910774089212e-16},
      {0.8422433748856833, 3.799471986617121e-17},
      {0.040427681994512805, -2.894701301080697e-18},
      {0.0005614955832571223, 7.982578484346071e-21},
      {-5.614955832571223, 1.907910774089212e-16},
      {3.3689734995427334, 1.5197887946468484e-16},
      {0.50534602493141, 2.2796831919702728e-17},
      {0.017967858664227912, 2.554425114990743e-19}}},
    {"poles at 100 and -100",
     2,
     {0, 1, 1e4, 0},
     3,
     {{9.712131976206279e+129, 5.5715726850878496e+113},
      {9.71213197620628e+127, -5.971983817762096e+111},
      {9.71213197620628e+131, 2.6164222203582637e+115},
      {9.712131976206279e+129, 5.5715726850878496e+113}}},
    {"a Jordan block at -3 with couplings of 1000",
     3,
     {-3, 1000, 0, 0, -3, 1000, 0, 0, -3},
     1,
     {{0.049787068367863944, -1.4831389691394365e-18},
      {49.787068367863945, -2.204783935145788e-15},
      {24893.53418393197, 1.5976704283154865e-12},
      {0.0, 0.0},
      {0.049787068367863944, -1.4831389691394365e-18},
      {49.787068367863945, -2.204783935145788e-15},
      {0.0, 0.0},
      {0.0, 0.0},
      {0.049787068367863944, -1.4831389691394365e-18}}},
    {"poles at -1 and -1e6",
     2,
     {0, 1, -1e6, -1000001},
     1,
     {{0.3678798090512514, -2.1233953715044195e-17},
      {3.6787980905125135e-07, 2.5081807840820948e-23},
      {-0.3678798090512514, 2.1233953715044195e-17},
      {-3.6787980905125135e-07, -2.5081807840820948e-23}}},
    {"poles at -1 and twice at -1e6",
     3,
     {0, 1, 0, 0, 0, 1, -1e12, -1000002000000, -2000001},
     1,
     {{0.3678801769314283, -2.226143187461542e-17},
      {7.357603538628566e-07, 5.149001488793861e-23},
      {3.678801769314283e-13, 1.084685432232168e-30},
      {-0.3678801769314283, 2.226143187461542e-17},
      {-7.357603538628566e-07, -5.149001488793861e-23},
      {-3.678801769314283e-13, -1.084685432232168e-30},
      {0.3678801769314283, -2.226143187461542e-17},
      {7.357603538628566e-07, 5.149001488793861e-23},
      {3.678801769314283e-13, 1.084685432232168e-30}}},
};
enum { N_ROWS = sizeof rows / sizeof rows[0] };

static void exponential(int n, const double *a, double h, lw__dd *e)
{
    lw__dd m[MOST * MOST] = {{0, 0}};
    for (int i = 0; i < n * n; i++)
        m[i] = lw__dd_from_double(a[i]);
    ck_assert_int_eq(lw__dense_exp_dd(n, m, lw__dd_from_double(h), e), LW_OK);
}

// Largest error of an element in balanced coordinates, over the largest element there or 1: what
// has decayed is measured by the state it decayed from.
static double error_on_own_scale(int n, const double *a, const lw__dd *got, const lw__dd *want)
{
    double scale[MOST], error = 0, size = 1;
    lw__dense_balance(n, a, scale);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            double d = fabs(lw__dd_sub(got[i * n + j], want[i * n + j]).hi);
            error = fmax(error, d * scale[j] / scale[i]);
            size = fmax(size, fabs(want[i * n + j].hi) * scale[j] / scale[i]);
        }
    return error / size;
}

START_TEST(exponentials_hold_double_double_digits)
{
    lw__dd e[16];
    exponential(rows[_i].n, rows[_i].a, rows[_i].h, e);
    double error = error_on_own_scale(rows[_i].n, rows[_i].a, e, rows[_i].e);
    ck_assert_msg(error <= TOLERANCE, "%s: off by %g", rows[_i].what, error);
}
END_TEST

// The comparison sees what a double would lose.
START_TEST(an_exponential_rounded_to_doubles_is_told_apart)
{
    lw__dd e[16];
    exponential(rows[_i].n, rows[_i].a, rows[_i].h, e);
    for (int i = 0; i < rows[_i].n * rows[_i].n; i++)
        e[i].lo = 0;
    ck_assert(error_on_own_scale(rows[_i].n, rows[_i].a, e, rows[_i].e) > 100 * TOLERANCE);
}
END_TEST

static void multiply(int n, const lw__dd *a, const lw__dd *b, lw__dd *out)
{
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            lw__dd sum = {0, 0};
            for (int k = 0; k < n; k++)
                sum = lw__dd_add(sum, lw__dd_mul(a[i * n + k], b[k * n + j]));
            out[i * n + j] = sum;
        }
}

static void random_matrix(int n, uint32_t stream, double size, double *a)
{
    for (uint32_t k = 0; k < (uint32_t)(n * n); k++)
        a[k] = size * (2 * lw_draw_uniform((lw_address){31, 4, stream, k}) - 1);
}

// exp(A (s + t)) = exp(A s) exp(A t), exp(A) exp(-A) = 1, det exp(A) = exp(trace A).
START_TEST(exponentials_of_random_matrices_obey_their_laws)
{
    for (uint32_t trial = 0; trial < 40; trial++) {
        int n = 1 + (int)(trial % MOST);
        double a[MOST * MOST], back[MOST * MOST], trace = 0;
        lw__dd s[MOST * MOST], t[MOST * MOST], whole[MOST * MOST], product[MOST * MOST];
        lw__dd one[MOST * MOST] = {{0, 0}};
        random_matrix(n, trial, 3, a);
        for (int i = 0; i < n * n; i++)
            back[i] = -a[i];
        for (int i = 0; i < n; i++) {
            one[i * n + i].hi = 1;
            trace += a[i * n + i];
        }
        exponential(n, a, 0.375, s);
        exponential(n, a, 0.625, t);
        exponential(n, a, 1, whole);
        multiply(n, s, t, product);
        ck_assert(error_on_own_scale(n, a, product, whole) < 1e-29);
        exponential(n, back, 1, t);
        multiply(n, whole, t, product);
        // the norms of exp(A) and exp(-A) multiply the error: up to e^18 each
        ck_assert(error_on_own_scale(n, a, product, one) < 1e-31 * lw_exp(36));
        if (n == 2) {
            lw__dd det = lw__dd_sub(lw__dd_mul(whole[0], whole[3]), lw__dd_mul(whole[1], whole[2]));
            ck_near(lw__dd_to_double(det), lw_exp(trace), 1e-14, 0); // the sum's own rounding
        }
    }
}
END_TEST

START_TEST(a_scaled_state_scales_its_row_and_column_exactly)
{
    const double a[] = {-3, 20, 0.5, -7, -1, 2, 4, 0.25, -9};
    const double d[] = {1, 0x1p40, 0x1p-30};
    double scaled[9];
    lw__dd e[9], f[9];
    for (int i = 0; i < 9; i++)
        scaled[i] = a[i] * d[i % 3] / d[i / 3];
    exponential(3, a, 1, e);
    exponential(3, scaled, 1, f);
    for (int i = 0; i < 9; i++) {
        lw__dd want = lw__dd_scale(e[i], d[i % 3] / d[i / 3]);
        ck_near(lw__dd_sub(f[i], want).hi, 0, 1, 1e-28 * fabs(want.hi));
    }
}
END_TEST

// Couplings of 2^700 one way and 2^-700 the other: scaled as they stand, the small one would sink
// below the least number long before the large one is small enough.
START_TEST(states_of_the_most_different_scales_are_balanced)
{
    const double a[] = {-1, 2, -3, -1}, far[] = {-1, 0x1p701, -0x1.8p-699, -1};
    lw__dd e[4], f[4];
    exponential(2, a, 1, e);
    exponential(2, far, 1, f);
    const double scale[] = {1, 0x1p700, 0x1p-700, 1};
    for (int i = 0; i < 4; i++) {
        lw__dd want = lw__dd_scale(e[i], scale[i]);
        ck_assert(fabs(lw__dd_sub(f[i], want).hi) <= 1e-29 * fabs(want.hi));
    }
}
END_TEST

START_TEST(the_result_may_take_the_place_of_the_matrix)
{
    lw__dd m[4] = {{0, 0}, {1, 0}, {-4, 0}, {-0.5, 0}}, e[4];
    ck_assert_int_eq(lw__dense_exp_dd(2, m, lw__dd_of_ratio(1, 3), e), LW_OK);
    ck_assert_int_eq(lw__dense_exp_dd(2, m, lw__dd_of_ratio(1, 3), m), LW_OK);
    for (int i = 0; i < 4; i++)
        ck_assert(m[i].hi == e[i].hi && m[i].lo == e[i].lo);
}
END_TEST

// cos and sin of 0.7 to 16 digits, from memory: 0.7648421872844885, 0.6442176872376911
START_TEST(a_turn_is_made_of_cosine_and_sine)
{
    const double a[] = {0, 0.7, -0.7, 0};
    const double want[] = {0.7648421872844885, 0.6442176872376911, -0.6442176872376911,
                           0.7648421872844885};
    lw__dd e[4];
    exponential(2, a, 1, e);
    for (int i = 0; i < 4; i++)
        ck_near(lw__dd_to_double(e[i]), want[i], 2e-16, 1);
    lw__dd unit = lw__dd_add(lw__dd_mul(e[0], e[0]), lw__dd_mul(e[1], e[1]));
    ck_near(lw__dd_sub(unit, lw__dd_from_double(1)).hi, 0, 1, 1e-31);
}
END_TEST

// ---- what overflows

START_TEST(elements_beyond_the_largest_number_are_infinite_and_others_finite)
{
    lw__dd e[9];
    exponential(1, (const double[]){1000}, 1, e);
    ck_assert(isinf(e[0].hi) && e[0].hi > 0);
    // two states that grow past the range with either sign, and one apart
    const double a[] = {1000, -1, 0, 0, -1, 0, 0, 0, -2};
    exponential(3, a, 1, e);
    ck_assert(isinf(e[0].hi) && e[0].hi > 0 && isinf(e[1].hi) && e[1].hi < 0);
    ck_assert(e[2].hi == 0 && e[3].hi == 0 && e[6].hi == 0);
    ck_near(e[4].hi, 0.36787944117144232, 2e-16, 0); // 1/e, from memory
    ck_near(e[8].hi, 0.1353352832366127, 2e-16, 0);  // 1/e^2, from memory
}
END_TEST

// e^709.75 is 3 % below the largest number, where the parts of a product overflow early.
START_TEST(elements_near_the_largest_number_are_finite)
{
    lw__dd e[1], half[1];
    exponential(1, (const double[]){709.75}, 1, e);
    exponential(1, (const double[]){709.75}, 0.5, half);
    ck_near(e[0].hi, half[0].hi * half[0].hi, 4e-16, 0);
}
END_TEST

START_TEST(nothing_left_after_a_long_decay_is_0)
{
    lw__dd e[1];
    exponential(1, (const double[]){-1e9}, 1, e);
    ck_assert(fabs(e[0].hi) < 1e-30);
}
END_TEST

// ---- balancing

START_TEST(balancing_evens_rows_and_columns_by_powers_of_two)
{
    for (uint32_t trial = 0; trial < 60; trial++) {
        int n = 2 + (int)(trial % 5), exponent;
        double a[MOST * MOST], scale[MOST];
        random_matrix(n, 100 + trial, 1, a);
        for (int i = 0; i < n * n; i++)
            a[i] *= ldexp(1, 9 * (i / n - i % n));
        lw__dense_balance(n, a, scale);
        for (int i = 0; i < n; i++) {
            double row = 0, column = 0;
            ck_assert(frexp(scale[i], &exponent) == 0.5);
            for (int j = 0; j < n; j++) {
                row += i == j ? 0 : fabs(a[i * n + j]) * scale[j] / scale[i];
                column += i == j ? 0 : fabs(a[j * n + i]) * scale[i] / scale[j];
            }
            // no power of two is left that would lower their sum by a twentieth
            ck_assert(2 * row + column / 2 > 0.949 * (row + column));
            ck_assert(row / 2 + 2 * column > 0.949 * (row + column));
        }
    }
}
END_TEST

START_TEST(rows_and_columns_without_elements_keep_their_scale)
{
    const double a[] = {5, 0, 0, 1e9, -1, 1e-9, 0, 1e9, 0}; // nothing enters the first state
    double scale[3], none[4] = {0}, one[2];
    lw__dense_balance(3, a, scale);
    for (int i = 0; i < 3; i++)
        ck_assert(scale[i] > 0 && isfinite(scale[i]));
    ck_assert(scale[0] == 1);
    lw__dense_balance(2, none, one);
    ck_assert(one[0] == 1 && one[1] == 1);
    lw__dense_balance(0, none, one);
}
END_TEST

START_TEST(the_norm_is_the_largest_sum_of_a_row)
{
    const double a[] = {1, -2, 3, -4, 0, 0.5, 0, 0, -6.5};
    ck_assert(lw__dense_norm_inf(3, a) == 6.5);
    ck_assert(lw__dense_norm_inf(2, a) == 7); // rows {1, -2} and {3, -4}
    ck_assert(lw__dense_norm_inf(0, a) == 0);
}
END_TEST

// ---- equations

// Hilbert's matrix of order 6, whose inverse is of integers: its condition of 1.5e7 costs 7 of 31
// digits. First row of the inverse: 36 -630 3360 -7560 7560 -2772 (from memory; the product below
// proves them).
START_TEST(an_ill_conditioned_system_keeps_its_digits)
{
    const double inverse[] = {36, -630, 3360, -7560, 7560, -2772};
    lw__dd a[36], b[6] = {{1, 0}};
    for (int i = 0; i < 36; i++)
        a[i] = lw__dd_of_ratio(1, i / 6 + i % 6 + 1);
    for (int i = 0; i < 6; i++) {
        lw__dd sum = {0, 0};
        for (int k = 0; k < 6; k++)
            sum = lw__dd_add(sum, lw__dd_mul_double(a[i * 6 + k], inverse[k]));
        ck_near(sum.hi, i == 0, 1e-27, 1);
    }
    ck_assert_int_eq(lw__dense_solve_dd(6, 1, a, b), 1);
    for (int i = 0; i < 6; i++)
        ck_near(lw__dd_sub(b[i], lw__dd_from_double(inverse[i])).hi, 0, 1, 1e-21);
}
END_TEST

START_TEST(a_zero_on_the_diagonal_is_pivoted_and_every_right_side_solved)
{
    lw__dd a[9] = {{0, 0}, {2, 0}, {0, 0}, {0, 0}, {0, 0}, {4, 0}, {8, 0}, {0, 0}, {0, 0}};
    lw__dd b[6] = {{6, 0}, {-2, 0}, {4, 0}, {8, 0}, {16, 0}, {24, 0}};
    ck_assert_int_eq(lw__dense_solve_dd(3, 2, a, b), 1);
    const double want[] = {2, 3, 3, -1, 1, 2}; // by substitution
    for (int i = 0; i < 6; i++)
        ck_assert(b[i].hi == want[i] && b[i].lo == 0);
}
END_TEST

START_TEST(singular_systems_and_those_without_numbers_are_refused)
{
    lw__dd zero[4] = {{0, 0}}, none[4] = {{(double)NAN, 0}, {1, 0}, {(double)NAN, 0}, {1, 0}};
    lw__dd b[2] = {{1, 0}, {1, 0}};
    ck_assert_int_eq(lw__dense_solve_dd(2, 1, zero, b), 0);
    ck_assert_int_eq(lw__dense_solve_dd(2, 1, none, b), 0);
}
END_TEST

// ---- eigenvalues

static int by_size(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

// SLICOT's MB05MD example has the eigenvalues -3, -1, 2, 4.
START_TEST(published_eigenvalues_are_found)
{
    const double a[] = {.5, 0, 2.3, -2.6, 0, .5, -1.4, -.7, 2.3, -1.4, .5, 0, -2.6, -.7, 0, .5};
    const double want[] = {-3, -1, 2, 4};
    double re[4], im[4];
    lw_error err;
    ck_assert_int_eq(lw__dense_eigen(4, a, re, im, &err), LW_OK);
    qsort(re, 4, sizeof re[0], by_size);
    for (int i = 0; i < 4; i++) {
        ck_near(re[i], want[i], 1e-14, 1); // backward error of the QR iteration, norm 6
        ck_assert(im[i] == 0);
    }
}
END_TEST

START_TEST(complex_eigenvalues_come_in_pairs)
{
    const double a[] = {0, 1, -25, -6}; // s^2 + 6 s + 25: -3 +- 4i
    double re[2], im[2];
    lw_error err;
    ck_assert_int_eq(lw__dense_eigen(2, a, re, im, &err), LW_OK);
    for (int i = 0; i < 2; i++) {
        ck_near(re[i], -3, 1e-14, 1);
        ck_near(fabs(im[i]), 4, 1e-14, 1);
    }
    ck_assert(im[0] == -im[1]);
    ck_assert_int_eq(lw__dense_eigen(0, a, re, im, &err), LW_OK);
}
END_TEST

static void own_handler(const char *reason, const char *file, int line, int code)
{
    (void)reason, (void)file, (void)line, (void)code;
}

START_TEST(the_error_handler_of_gsl_is_put_back)
{
    const double a[] = {1, 2, 3, 4};
    double re[2], im[2];
    gsl_error_handler_t *before = gsl_set_error_handler(own_handler);
    lw__dense_eigen(2, a, re, im, NULL);
    ck_assert(gsl_set_error_handler(before) == own_handler);
}
END_TEST

START_TEST(eigenvalues_of_no_numbers_are_refused_and_outputs_untouched)
{
    const double bad[] = {1, (double)NAN, (double)INFINITY, 4};
    double re[2] = {7, 7}, im[2] = {7, 7};
    lw_error err;
    ck_assert_int_eq(lw__dense_eigen(2, bad, re, im, &err), LW_ERR_NOT_FINITE);
    ck_assert_ptr_nonnull(strstr(err.text, "2 x 2"));
    ck_assert(re[0] == 7 && re[1] == 7 && im[0] == 7 && im[1] == 7);
}
END_TEST

START_TEST(lack_of_memory_is_told_as_such)
{
    const double a[] = {1, 2, 3, 4};
    const lw__dd m[1] = {{1, 0}};
    double re[2] = {7, 7}, im[2];
    lw__dd e[1] = {{7, 0}};
    lw_error err;
    lw__alloc_fail_after(1);
    lw_status eigen = lw__dense_eigen(2, a, re, im, &err);
    lw_status exponent = lw__dense_exp_dd(1, m, m[0], e);
    lw__alloc_fail_after(-1);
    ck_assert_int_eq(eigen, LW_ERR_MEMORY);
    ck_assert_int_eq(exponent, LW_ERR_MEMORY);
    ck_assert(re[0] == 7 && e[0].hi == 7);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("dense digits");
    TCase *exponent = tcase_create("exponential"), *balance = tcase_create("balance");
    TCase *solve = tcase_create("equations"), *eigen = tcase_create("eigenvalues");
    tcase_add_loop_test(exponent, exponentials_hold_double_double_digits, 0, N_ROWS);
    tcase_add_loop_test(exponent, an_exponential_rounded_to_doubles_is_told_apart, 0, N_ROWS);
    tcase_add_test(exponent, exponentials_of_random_matrices_obey_their_laws);
    tcase_add_test(exponent, a_scaled_state_scales_its_row_and_column_exactly);
    tcase_add_test(exponent, states_of_the_most_different_scales_are_balanced);
    tcase_add_test(exponent, the_result_may_take_the_place_of_the_matrix);
    tcase_add_test(exponent, a_turn_is_made_of_cosine_and_sine);
    tcase_add_test(exponent, elements_beyond_the_largest_number_are_infinite_and_others_finite);
    tcase_add_test(exponent, elements_near_the_largest_number_are_finite);
    tcase_add_test(exponent, nothing_left_after_a_long_decay_is_0);
    tcase_add_test(balance, balancing_evens_rows_and_columns_by_powers_of_two);
    tcase_add_test(balance, rows_and_columns_without_elements_keep_their_scale);
    tcase_add_test(balance, the_norm_is_the_largest_sum_of_a_row);
    tcase_add_test(solve, an_ill_conditioned_system_keeps_its_digits);
    tcase_add_test(solve, a_zero_on_the_diagonal_is_pivoted_and_every_right_side_solved);
    tcase_add_test(solve, singular_systems_and_those_without_numbers_are_refused);
    tcase_add_test(eigen, published_eigenvalues_are_found);
    tcase_add_test(eigen, complex_eigenvalues_come_in_pairs);
    tcase_add_test(eigen, the_error_handler_of_gsl_is_put_back);
    tcase_add_test(eigen, eigenvalues_of_no_numbers_are_refused_and_outputs_untouched);
    tcase_add_test(eigen, lack_of_memory_is_told_as_such);
    suite_add_tcase(suite, exponent);
    suite_add_tcase(suite, balance);
    suite_add_tcase(suite, solve);
    suite_add_tcase(suite, eigen);
    return run_suite(suite);
}
