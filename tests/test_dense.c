// The double-double exponential and its neighbours against published matrices and GSL.

#include "suite.h"

#include "base/alloc.h"
#include "base/dense.h"

#include <gsl/gsl_linalg.h>
#include <string.h>

typedef struct published {
    const char *source;
    int n;
    double a[16], e[16];
    double tolerance;
    int relative;
} published;

static const published rows[] = {
    // X-01, C. Moler, C. Van Loan, SIAM Review 20 (1978) and 45 (2003), section 3
    {"X-01", 2, {-49, 24, -64, 31}, {-0.735759, 0.551819, -1.471518, 1.103638}, 5.1e-7, 0},
    // X-02, Burkardt's set of test matrices, test 5
    {"X-02",
     4,
     {0, 6, 0, 0, 0, 0, 6, 0, 0, 0, 0, 6},
     {1, 6, 18, 36, 0, 1, 6, 18, 0, 0, 1, 6, 0, 0, 0, 1},
     1e-15,
     1},
    // X-03, the same set, test 6
    {"X-03",
     2,
     {1, 1, 0, 1},
     {2.718281828459046, 2.718281828459046, 0, 2.718281828459046},
     2e-15,
     0},
    // X-04, the same set, test 7: nearly confluent
    {"X-04", 2, {1 + 1e-5, 1, 0, 1 - 1e-5}, {2.718309, 2.718282, 0, 2.718255}, 5.1e-7, 0},
    // X-06, the same set, test 9
    {"X-06",
     4,
     {1, 2, 2, 2, 3, 1, 1, 2, 3, 2, 1, 2, 3, 3, 3, 1},
     {740.7038, 610.8500, 542.2743, 549.1753, 731.2510, 603.5524, 535.0884, 542.2743, 823.7630,
      679.4257, 603.5524, 610.8500, 998.4355, 823.7630, 731.2510, 740.7038},
     5.1e-5,
     0},
    // X-07, R. C. Ward, SIAM J. Numer. Anal. 14 (1977) 600-610, test 1
    {"X-07",
     3,
     {4, 2, 0, 1, 4, 1, 1, 1, 4},
     {147.8666224463699, 183.7651386463682, 71.79703239999647, 127.7810855231823, 183.7651386463682,
      91.88256932318415, 127.7810855231824, 163.6796017231806, 111.9681062463718},
     3e-13,
     1},
    // X-08, Ward, test 2
    {"X-08",
     3,
     {29.87942128909879, .7815750847907159, -2.289519314033932, .7815750847907159,
      25.72656945571064, 8.680737820540137, -2.289519314033932, 8.680737820540137,
      34.39400925519054},
     {5.496313853692378e15, -1.823188097200898e16, -3.047577080858001e16, -1.823188097200899e16,
      6.060522870222108e16, 1.012918429302482e17, -3.047577080858001e16, 1.012918429302482e17,
      1.692944112408493e17},
     2e-13,
     1},
    // X-09, Ward, test 3; the printed digits are off by 3e-12
    {"X-09",
     3,
     {-131, 19, 18, -390, 56, 54, -387, 57, 52},
     {-1.509644158793135, .3678794391096522, .1353352811751005, -5.632570799891469,
      1.471517758499875, .4060058435250609, -4.934938326088363, 1.103638317328798,
      .5413411267617766},
     1e-10,
     1},
    // X-11, SLICOT, MB05MD example
    {"X-11",
     4,
     {.5, 0, 2.3, -2.6, 0, .5, -1.4, -.7, 2.3, -1.4, .5, 0, -2.6, -.7, 0, .5},
     {26.8551, -3.2824, 18.7409, -19.4430, -3.2824, 4.3474, -5.1848, .2700, 18.7409, -5.1848,
      15.6012, -11.7228, -19.4430, .2700, -11.7228, 15.6012},
     5.1e-5,
     0},
    // X-12, SLICOT, MB05OD example
    {"X-12",
     3,
     {2, 1, 1, 0, 3, 2, 1, 0, 4},
     {22.5984, 17.2073, 53.8144, 24.4047, 27.6033, 83.2241, 29.4097, 12.2024, 81.4177},
     5.1e-5,
     0},
};

static void exponential(int n, const double *a, double h, double *out)
{
    lw__dd m[36] = {{0, 0}}, e[36];
    for (int i = 0; i < n * n; i++)
        m[i] = lw__dd_from_double(a[i]);
    ck_assert_int_eq(lw__dense_exp_dd(n, m, lw__dd_from_double(h), e), LW_OK);
    for (int i = 0; i < n * n; i++)
        out[i] = lw__dd_to_double(e[i]);
}

static void gsl_exponential(int n, const double *a, double *out)
{
    size_t size = (size_t)n;
    gsl_matrix *m = gsl_matrix_alloc(size, size), *e = gsl_matrix_alloc(size, size);
    for (size_t i = 0; i < size * size; i++)
        gsl_matrix_set(m, i / size, i % size, a[i]);
    gsl_linalg_exponential_ss(m, e, GSL_PREC_DOUBLE);
    for (size_t i = 0; i < size * size; i++)
        out[i] = gsl_matrix_get(e, i / size, i % size);
    gsl_matrix_free(m);
    gsl_matrix_free(e);
}

START_TEST(published_exponentials_are_met)
{
    const published *p = &rows[_i];
    double e[16];
    exponential(p->n, p->a, 1, e);
    for (int i = 0; i < p->n * p->n; i++) {
        double most = p->tolerance * (p->relative ? fmax(fabs(p->e[i]), 1e-300) : 1);
        ck_assert_msg(fabs(e[i] - p->e[i]) <= most, "%s element %d is %.17g, published %.17g",
                      p->source, i + 1, e[i], p->e[i]);
    }
}
END_TEST

START_TEST(gsl_agrees)
{
    const published *p = &rows[_i];
    double e[16], g[16], scale = 0;
    exponential(p->n, p->a, 1, e);
    gsl_exponential(p->n, p->a, g);
    for (int i = 0; i < p->n * p->n; i++)
        scale = fmax(scale, fabs(e[i]));
    for (int i = 0; i < p->n * p->n; i++)
        ck_near(g[i], e[i], 1e-9, scale); // what GSL's double arithmetic holds on Ward's third
}
END_TEST

START_TEST(closed_forms_are_met_to_the_last_digits)
{
    double e[9];
    const double moler[] = {-49, 24, -64, 31};
    exponential(2, moler, 1, e);
    double p = exp(-1), q = exp(-17);
    // [-2p+3q, 1.5(p-q); -4(p-q), 3p-2q]
    const double want[] = {-2 * p + 3 * q, 1.5 * (p - q), -4 * (p - q), 3 * p - 2 * q};
    for (int i = 0; i < 4; i++)
        ck_near(e[i], want[i], 4e-16, 1);
    const double five[] = {21, 17, 6, -5, -1, -6, 4, 4, 16};
    double u = exp(16), v = exp(4);
    // X-05, Burkardt's set, test 8
    const double w5[] = {13 * u - v,     13 * u - 5 * v, 2 * u - 2 * v, -9 * u + v, -9 * u + 5 * v,
                         -2 * u + 2 * v, 16 * u,         16 * u,        4 * u};
    exponential(3, five, 1, e);
    for (int i = 0; i < 9; i++)
        ck_near(e[i], w5[i] / 4, 1e-14, 0);
    // X-10, A. Al-Mohy, N. Higham, SIAM J. Matrix Anal. 31 (2009), the overscaling family
    for (double b = 10; b <= 1e6; b *= 10) {
        const double a[] = {1, b, 0, -1};
        exponential(2, a, 1, e);
        ck_near(e[1], b * 1.1752011936438014, 4e-16, 0);
    }
}
END_TEST

START_TEST(the_exponential_of_a_sum_of_times_is_a_product)
{
    const double a[] = {-3, 20, 0, -20, -3, 1, 0, 0, -800};
    double s[9], t[9], whole[9];
    exponential(3, a, 0.3, s);
    exponential(3, a, 0.45, t);
    exponential(3, a, 0.75, whole);
    for (int i = 0; i < 3; i++)
        for (int j = 0; j < 3; j++) {
            double sum = 0;
            for (int k = 0; k < 3; k++)
                sum += s[3 * i + k] * t[3 * k + j];
            ck_near(whole[3 * i + j], sum, 1e-13, 0.1); // three products of 0.3 and 0.45 as doubles
        }
}
END_TEST

// Poles at -1 and -1e6 in companion form, where the norm of A h is 1e6 and more.
START_TEST(far_apart_poles_keep_their_digits)
{
    const double a[] = {-1000001, -1e6, 1, 0};
    for (double h = 1e-6; h <= 1; h *= 10) {
        double e[4], slow = exp(-h), fast = exp(-1e6 * h), d = 999999;
        exponential(2, a, h, e);
        ck_near(e[3], (1e6 * slow - fast) / d, 1e-14, 0);
        ck_near(e[2], (slow - fast) / d, 1e-14, 0);
        ck_near(e[0], (1e6 * fast - slow) / d, 1e-13, 1e-6);
    }
}
END_TEST

// The comparisons can fail: a digit of the matrix changed in its ninth place is seen.
START_TEST(a_slightly_wrong_matrix_is_told_apart)
{
    double a[9], e[9];
    memcpy(a, rows[5].a, sizeof a);
    a[4] *= 1 + 1e-9;
    exponential(3, a, 1, e);
    ck_assert(fabs(e[4] - rows[5].e[4]) > 3e-13 * fabs(e[4]));
}
END_TEST

START_TEST(equations_are_solved)
{
    lw__dd a[9], b[3];
    const double m[] = {2, 1, -1, -3, -1, 2, -2, 1, 2}, right[] = {8, -11, -3};
    const double solution[] = {2, 3, -1}; // by substitution
    for (int i = 0; i < 9; i++)
        a[i] = lw__dd_from_double(m[i]);
    for (int i = 0; i < 3; i++)
        b[i] = lw__dd_from_double(right[i]);
    ck_assert_int_eq(lw__dense_solve_dd(3, 1, a, b), 1);
    for (int i = 0; i < 3; i++)
        ck_near(lw__dd_to_double(b[i]), solution[i], 1e-15, 0);
    lw__dd zero[4] = {{1, 0}, {2, 0}, {2, 0}, {4, 0}}, r[2] = {{1, 0}, {1, 0}};
    ck_assert_int_eq(lw__dense_solve_dd(2, 1, zero, r), 0);
}
END_TEST

START_TEST(eigenvalues_of_a_known_matrix)
{
    const double a[] = {0, 1, 0, 0, 0, 1, 6, -11, 6}; // roots 1, 2, 3
    double re[3], im[3], sum = 0, product = 1;
    lw_error err;
    ck_assert_int_eq(lw__dense_eigen(3, a, re, im, &err), LW_OK);
    for (int i = 0; i < 3; i++) {
        sum += re[i];
        product *= re[i];
        ck_assert(fabs(im[i]) < 1e-6);
    }
    ck_near(sum, 6, 1e-13, 0);
    ck_near(product, 6, 1e-11, 0);
}
END_TEST

START_TEST(double_double_keeps_what_double_loses)
{
    lw__dd third = lw__dd_of_ratio(1, 3), sum = lw__dd_add(lw__dd_add(third, third), third);
    ck_assert(fabs(sum.hi - 1 + sum.lo) < 1e-31);
    lw__dd big = lw__dd_add(lw__dd_from_double(1e16), lw__dd_from_double(0.5));
    ck_assert(lw__dd_sub(big, lw__dd_from_double(1e16)).hi == 0.5);
    // exact integers: (2^53 - 1)^2 = 2^106 - 2^54 + 1
    lw__dd square = lw__dd_two_product(9007199254740991.0, 9007199254740991.0);
    ck_assert(square.hi == 0x1p106 - 0x1p54 && square.lo == 1);
}
END_TEST

START_TEST(a_failed_allocation_is_told)
{
    const lw__dd m = {1, 0};
    lw__dd e;
    lw__alloc_fail_after(1);
    lw_status status = lw__dense_exp_dd(1, &m, m, &e);
    lw__alloc_fail_after(-1);
    ck_assert_int_eq(status, LW_ERR_MEMORY);
}
END_TEST

int main(void)
{
    enum { N_ROWS = sizeof rows / sizeof rows[0] };
    Suite *suite = suite_create("dense");
    TCase *tests = tcase_create("dense");
    tcase_add_loop_test(tests, published_exponentials_are_met, 0, N_ROWS);
    tcase_add_loop_test(tests, gsl_agrees, 0, N_ROWS);
    tcase_add_test(tests, closed_forms_are_met_to_the_last_digits);
    tcase_add_test(tests, the_exponential_of_a_sum_of_times_is_a_product);
    tcase_add_test(tests, far_apart_poles_keep_their_digits);
    tcase_add_test(tests, a_slightly_wrong_matrix_is_told_apart);
    tcase_add_test(tests, equations_are_solved);
    tcase_add_test(tests, eigenvalues_of_a_known_matrix);
    tcase_add_test(tests, double_double_keeps_what_double_loses);
    tcase_add_test(tests, a_failed_allocation_is_told);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
