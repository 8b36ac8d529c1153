// Elementary functions at the ends of their ranges, and those of two arguments: special values,
// accuracy, and bits that do not change.

#include "suite.h"

#include <latewood/elementary.h>

#include <float.h>
#include <stdint.h>
#include <string.h>

#define INF ((double)INFINITY)
#define NONE ((double)NAN)

// ---- special values

typedef double (*one_argument)(double);

static const struct {
    const char *name;
    one_argument f;
    // at 0, infinity, minus infinity, as C17 annex F has them; NAN where undefined
    double at_zero, at_infinity, at_minus_infinity;
    int odd; // keeps the sign of zero
} ends[] = {
    {"exp", lw_exp, 1, INF, 0, 0},
    {"expm1", lw_expm1, 0, INF, -1, 1},
    {"exp2", lw_exp2, 1, INF, 0, 0},
    {"log", lw_log, -INF, INF, NONE, 0},
    {"log1p", lw_log1p, 0, INF, NONE, 1},
    {"log2", lw_log2, -INF, INF, NONE, 0},
    {"log10", lw_log10, -INF, INF, NONE, 0},
    {"sin", lw_sin, 0, NONE, NONE, 1},
    {"cos", lw_cos, 1, NONE, NONE, 0},
    {"tan", lw_tan, 0, NONE, NONE, 1},
    {"asin", lw_asin, 0, NONE, NONE, 1},
    {"acos", lw_acos, 1.57079632679489661923, NONE, NONE, 0},
    {"atan", lw_atan, 0, 1.57079632679489661923, -1.57079632679489661923, 1},
    {"sinh", lw_sinh, 0, INF, -INF, 1},
    {"cosh", lw_cosh, 1, INF, INF, 0},
    {"tanh", lw_tanh, 0, 1, -1, 1},
    {"asinh", lw_asinh, 0, INF, -INF, 1},
    {"acosh", lw_acosh, NONE, INF, NONE, 0},
    {"atanh", lw_atanh, 0, NONE, NONE, 1},
    {"cbrt", lw_cbrt, 0, INF, -INF, 1},
    {"erf", lw_erf, 0, 1, -1, 1},
    {"erfc", lw_erfc, 1, 0, 2, 0},
};
enum { N_ENDS = sizeof ends / sizeof ends[0] };

static int alike(double a, double b)
{
    return a == b || (isnan(a) && isnan(b));
}

START_TEST(special_arguments_give_what_the_c_standard_says)
{
    const one_argument f = ends[_i].f;
    ck_assert_msg(alike(f(0), ends[_i].at_zero), "%s(0) is %g", ends[_i].name, f(0));
    ck_assert_msg(alike(f(INF), ends[_i].at_infinity), "%s(inf) is %g", ends[_i].name, f(INF));
    ck_assert_msg(alike(f(-INF), ends[_i].at_minus_infinity), "%s(-inf) is %g", ends[_i].name,
                  f(-INF));
    ck_assert(isnan(f(NONE)));
    if (ends[_i].odd)
        ck_assert(f(0) == 0 && !signbit(f(0)) && signbit(f(-0.0)));
}
END_TEST

START_TEST(the_least_numbers_are_not_lost)
{
    const one_argument same[] = {lw_expm1, lw_log1p, lw_sin,  lw_tan,   lw_asin,
                                 lw_atan,  lw_sinh,  lw_tanh, lw_asinh, lw_atanh};
    for (size_t i = 0; i < sizeof same / sizeof same[0]; i++)
        for (double x = 5e-324; x < 1e-290; x = x * 3.7 + 5e-324) {
            ck_assert_msg(same[i](x) == x, "function %zu of %g is %g", i, x, same[i](x));
            ck_assert(same[i](-x) == -x);
        }
}
END_TEST

// ---- values near the ends

static const struct {
    const char *name;
    one_argument f;
    double x, want; // in 60-digit arithmetic (derived)
    double tolerance;
} values[] = {
    {"exp", lw_exp, 709.7827, 1.7976699566638014e+308, 2 * DBL_EPSILON},
    {"exp", lw_exp, 709.7827128, 1.797692966986577e+308, 2 * DBL_EPSILON},
    {"expm1", lw_expm1, 709.7827128, 1.797692966986577e+308, 2 * DBL_EPSILON},
    {"sinh", lw_sinh, 709.9, 1.010701028059782e+308, 2 * DBL_EPSILON},
    {"sinh", lw_sinh, 710.3, 1.507788755590971e+308, 2 * DBL_EPSILON},
    {"sinh", lw_sinh, -710.4758, -1.7975851435895588e+308, 2 * DBL_EPSILON},
    {"cosh", lw_cosh, 709.9, 1.010701028059782e+308, 2 * DBL_EPSILON},
    {"cosh", lw_cosh, 710.3, 1.507788755590971e+308, 2 * DBL_EPSILON},
    {"cosh", lw_cosh, -710.4758, 1.7975851435895588e+308, 2 * DBL_EPSILON},
    {"asinh", lw_asinh, 1e+155, 357.593836594637, 1.5 * DBL_EPSILON},
    {"asinh", lw_asinh, 1e+200, 461.2101657793691, 1.5 * DBL_EPSILON},
    {"asinh", lw_asinh, -1e+308, -709.889355822726, 1.5 * DBL_EPSILON},
    {"asinh", lw_asinh, 1.7976931348623157e+308, 710.475860073944, 1.5 * DBL_EPSILON},
    {"acosh", lw_acosh, 1e+155, 357.593836594637, 1.5 * DBL_EPSILON},
    {"acosh", lw_acosh, 1e+200, 461.2101657793691, 1.5 * DBL_EPSILON},
    {"acosh", lw_acosh, 1.5e+308, 710.2948209308341, 1.5 * DBL_EPSILON},
    {"log1p", lw_log1p, 1e+305, 702.288453363184, 1.5 * DBL_EPSILON},
    {"log1p", lw_log1p, 1e+308, 709.1962086421661, 1.5 * DBL_EPSILON},
    {"log1p", lw_log1p, 1.7976931348623157e+308, 709.782712893384, 1.5 * DBL_EPSILON},
    {"log1p", lw_log1p, -0.9999999999999999, -36.7368005696771, 1.5 * DBL_EPSILON},
    {"log", lw_log, 5e-324, -744.4400719213812, 1.5 * DBL_EPSILON},
    {"log2", lw_log2, 5e-324, -1074.0, 1.5 * DBL_EPSILON},
    {"log10", lw_log10, 1.7976931348623157e+308, 308.25471555991675, 1.5 * DBL_EPSILON},
    {"sin", lw_sin, 1e+22, -0.8522008497671888, 1.5 * DBL_EPSILON},
    {"cos", lw_cos, 1e+22, 0.523214785395139, 1.5 * DBL_EPSILON},
    {"tan", lw_tan, 1e+22, -1.6287782256068988, 1.5 * DBL_EPSILON},
    {"sin", lw_sin, 1e+300, -0.8178819121159085, 1.5 * DBL_EPSILON},
    {"cos", lw_cos, 1.7976931348623157e+308, -0.9999876894265599, 1.5 * DBL_EPSILON},
    {"cbrt", lw_cbrt, 5e-324, 1.7031839360032603e-108, 1.5 * DBL_EPSILON},
    {"cbrt", lw_cbrt, -1.7976931348623157e+308, -5.643803094122362e+102, 1.5 * DBL_EPSILON},
    {"exp", lw_exp, -708.0, 3.307553003638408e-308, 1.5 * DBL_EPSILON},
    {"erfc", lw_erfc, 26.0, 5.663192408856143e-296, 1.5 * DBL_EPSILON},
    {"tanh", lw_tanh, 19.0, 0.9999999999999999, 1.5 * DBL_EPSILON},
};

START_TEST(values_near_the_ends_are_met)
{
    for (size_t i = 0; i < sizeof values / sizeof values[0]; i++)
        ck_near(values[i].f(values[i].x), values[i].want, values[i].tolerance, 0);
}
END_TEST

// The largest argument with a finite result: e^x = DBL_MAX (1 - 2^-54 or so).
START_TEST(results_overflow_only_beyond_the_largest_number)
{
    ck_assert(isfinite(lw_exp(709.78271289338397)) && isinf(lw_exp(709.782712893385)));
    ck_assert(isfinite(lw_sinh(710.47586007394386)) && isinf(lw_sinh(710.475860073945)));
    ck_assert(isfinite(lw_cosh(-710.47586007394386)) && isinf(lw_cosh(-710.475860073945)));
    ck_assert(isinf(lw_sinh(-800)) && lw_sinh(-800) < 0);
    ck_assert(isfinite(lw_exp2(1023.9999999999999)) && isinf(lw_exp2(1024)));
    ck_assert(lw_exp(-745) > 0 && lw_exp(-746) == 0);
}
END_TEST

// The functions with ways of their own near the ends go over into them without a jump.
START_TEST(results_grow_across_every_seam)
{
    static const struct {
        one_argument f;
        double at;
    } seams[] = {{lw_exp, 709.78271114955743},
                 {lw_expm1, 709.78271114955743},
                 {lw_sinh, 709.78271289338397},
                 {lw_cosh, 709.78271289338397},
                 {lw_log1p, 1e300},
                 {lw_log1p, 0x1p-1000},
                 {lw_asinh, 0x1p512},
                 {lw_asinh, 0x1p1023},
                 {lw_asinh, 0x1p-1000},
                 {lw_acosh, 0x1p512},
                 {lw_acosh, 0x1p1023},
                 {lw_tan, 0x1p-1000}};
    for (size_t i = 0; i < sizeof seams / sizeof seams[0]; i++) {
        double x = seams[i].at * (1 - 20 * DBL_EPSILON), y = seams[i].f(x);
        for (int k = 0; k < 40; k++) {
            double next = nextafter(x, INF), z = seams[i].f(next);
            ck_assert_msg(z >= y * (1 - 2 * DBL_EPSILON) && z <= y * (1 + 1e-12),
                          "seam %zu: f(%.17g) is %.17g after %.17g", i, next, z, y);
            x = next;
            y = z;
        }
    }
}
END_TEST

// ---- two arguments

static double spread(uint64_t k, double lo, double hi)
{
    uint64_t w = (k + 1) * UINT64_C(0x9E3779B97F4A7C15);
    return lo + (hi - lo) * (double)(w >> 11) * 0x1p-53;
}

static const struct {
    const char *name;
    double (*ours)(double, double);
    double (*libm)(double, double);
    double lo[2], hi[2];
    uint64_t hash; // of the results over a million pairs
} pairs[] = {
    {"pow", lw_pow, pow, {1e-6, -40}, {50, 40}, UINT64_C(0x5053815b6ce989ea)},
    {"atan2", lw_atan2, atan2, {-10, -10}, {10, 10}, UINT64_C(0x943982b8f7d47bff)},
    {"hypot", lw_hypot, hypot, {-1e6, -1e3}, {1e6, 1e3}, UINT64_C(0x5c6189d9da8557fe)},
};
enum { N_PAIRS = sizeof pairs / sizeof pairs[0] };

static void pair_at(int i, uint64_t k, double at[2])
{
    at[0] = spread(2 * k, pairs[i].lo[0], pairs[i].hi[0]);
    at[1] = spread(2 * k + 1, pairs[i].lo[1], pairs[i].hi[1]);
}

START_TEST(bits_of_two_arguments_are_what_they_always_were)
{
    uint64_t hash = UINT64_C(0xCBF29CE484222325), bits;
    for (uint64_t k = 0; k < 1000000; k++) {
        double at[2], value;
        pair_at(_i, k, at);
        value = pairs[_i].ours(at[0], at[1]);
        memcpy(&bits, &value, sizeof bits);
        hash = (hash ^ bits) * UINT64_C(0x100000001B3);
        hash ^= hash >> 29;
    }
    ck_assert_msg(hash == pairs[_i].hash, "%s: 0x%016llx", pairs[_i].name,
                  (unsigned long long)hash);
}
END_TEST

// One unit of ours and one of the C library.
START_TEST(results_of_two_arguments_are_within_two_units_of_the_last_place)
{
    for (uint64_t k = 0; k < 50000; k++) {
        double at[2];
        pair_at(_i, k, at);
        double got = pairs[_i].ours(at[0], at[1]), want = pairs[_i].libm(at[0], at[1]);
        double unit = nextafter(fabs(want), INF) - fabs(want);
        ck_assert_msg(fabs(got - want) <= 2 * unit, "%s(%.17g, %.17g) is %.17g, not %.17g",
                      pairs[_i].name, at[0], at[1], got, want);
    }
}
END_TEST

START_TEST(powers_of_special_arguments_are_as_the_c_standard_has_them)
{
    ck_assert(lw_pow(0, 0) == 1 && lw_pow(NONE, 0) == 1 && lw_pow(1, NONE) == 1);
    ck_assert(lw_pow(-1, INF) == 1 && lw_pow(0.5, INF) == 0 && lw_pow(2, INF) == INF);
    ck_assert(lw_pow(0.5, -INF) == INF && lw_pow(2, -INF) == 0);
    ck_assert(lw_pow(0, -1) == INF && lw_pow(-0.0, -1) == -INF && lw_pow(-0.0, -2) == INF);
    ck_assert(signbit(lw_pow(-0.0, 3)) && !signbit(lw_pow(-0.0, 2)));
    ck_assert(lw_pow(-INF, 3) == -INF && lw_pow(-INF, 2) == INF && lw_pow(INF, -1) == 0);
    ck_assert(lw_pow(-8, 3) == -512 && isnan(lw_pow(-8, 0.3)) && isnan(lw_pow(NONE, 2)));
    ck_assert(lw_pow(-10, 309) == -INF && lw_pow(-10, 310) == INF);
    ck_assert(lw_pow(DBL_MAX, 1) == DBL_MAX && lw_pow(-DBL_MAX, 1) == -DBL_MAX);
    ck_assert(lw_pow(2, -1074) == 5e-324 && lw_pow(2, -1076) == 0);
}
END_TEST

static const struct {
    double x, y, want; // in 60-digit arithmetic (derived)
    double tolerance;
} powers[] = {
    {1.5, 1750.0, 1.4444527745742028e+308, 2 * DBL_EPSILON},
    {1.7976931348623157e+308, 0.9999999, 1.7975655422395672e+308, 2 * DBL_EPSILON},
    {-3.0, 645.0, -5.536168426744475e+307, 2 * DBL_EPSILON},
    {3.0, 646.0, 1.6608505280233425e+308, 2 * DBL_EPSILON},
    {1.0000000000000002, 4503599627370496.0, 2.718281828459045, 2 * DBL_EPSILON},
    {1.7976931348623157e+308, 0.5, 1.3407807929942596e+154, 2 * DBL_EPSILON},
    {5e-324, -0.95, 1.3832624124338602e+307, 2 * DBL_EPSILON},
    {1e-300, 1.02, 9.999999999999877e-307, 2 * DBL_EPSILON},
    {10.0, 308.2547, 1.797628728208384e+308, 2 * DBL_EPSILON},
};

START_TEST(powers_near_the_ends_are_met)
{
    for (size_t i = 0; i < sizeof powers / sizeof powers[0]; i++)
        ck_near(lw_pow(powers[i].x, powers[i].y), powers[i].want, powers[i].tolerance, 0);
}
END_TEST

START_TEST(angles_of_special_arguments_are_as_the_c_standard_has_them)
{
    const double pi = 3.14159265358979323846;
    ck_assert(lw_atan2(0, -1) == pi && lw_atan2(-0.0, -1) == -pi);
    ck_assert(lw_atan2(0, 1) == 0 && signbit(lw_atan2(-0.0, 1)));
    ck_assert(lw_atan2(1, 0) == pi / 2 && lw_atan2(-1, 0) == -pi / 2);
    ck_assert(lw_atan2(INF, INF) == pi / 4 && lw_atan2(-INF, -INF) == -3 * pi / 4);
    ck_assert(lw_atan2(1, INF) == 0 && lw_atan2(1, -INF) == pi && lw_atan2(INF, 1) == pi / 2);
    ck_assert(isnan(lw_atan2(NONE, 1)) && isnan(lw_atan2(1, NONE)));
}
END_TEST

START_TEST(lengths_neither_overflow_nor_vanish_early)
{
    ck_assert(lw_hypot(INF, NONE) == INF && lw_hypot(NONE, -INF) == INF &&
              isnan(lw_hypot(NONE, 1)));
    ck_assert(lw_hypot(0, -7) == 7);
    ck_near(lw_hypot(3e200, 4e200), 5e200, DBL_EPSILON, 0);
    ck_near(lw_hypot(3e-320, 4e-320), 5e-320, 0, 0);
    ck_assert(lw_hypot(DBL_MAX, DBL_MAX) == INF && lw_hypot(DBL_MAX, 1) == DBL_MAX);
}
END_TEST

// ---- the normal distribution

// The distribution function in 60-digit arithmetic (derived). The argument's last
// place alone moves the result by x^2 units.
static const struct {
    double x, want;
} cdf[] = {
    {-1, 0.15865525393145705},     {-2.5, 0.006209665325776135},  {-5, 2.866515718791939e-07},
    {-8, 6.220960574271784e-16},   {-12, 1.776482112077679e-33},  {-20, 2.7536241186062337e-89},
    {-30, 4.906713927148187e-198}, {-37, 5.725571222524577e-300}, {0.3, 0.6179114221889527},
    {1.96, 0.9750021048517795},    {4, 0.9999683287581669},
};

START_TEST(the_tail_of_the_normal_distribution_is_met)
{
    for (size_t i = 0; i < sizeof cdf / sizeof cdf[0]; i++)
        ck_near(lw_normal_cdf(cdf[i].x), cdf[i].want, 4 * DBL_EPSILON * (1 + cdf[i].x * cdf[i].x),
                0);
    ck_assert(lw_normal_cdf(0) == 0.5 && lw_normal_cdf(INF) == 1 && lw_normal_cdf(-INF) == 0);
}
END_TEST

// Method's stated accuracy: about 1 part in 1e16 (Wichura 1988); GSL and AS 241 share constants, so
// these are inverted in 60-digit arithmetic (derived).
static const struct {
    double p, want;
} quantiles[] = {
    {0.5000000001, 2.506628482030354e-10}, {0.4, -0.2533471031357997},
    {0.075, -1.439531470938456},           {0.0750000001, -1.4395314702320188},
    {0.0749, -1.4402382675279637},         {0.9251, 1.440238267527964},
    {0.001, -3.0902323061678136},          {0.975, 1.9599639845400538},
    {0.995, 2.5758293035489004},           {1e-10, -6.361340902404057},
    {1.4e-11, -6.656723091518184},         {1e-20, -9.262340089798407},
    {1e-100, -21.273453560965326},         {1e-300, -37.0470962993612},
    {5e-324, -38.467405617144344},         {0.9999999999999999, 8.209536151601387},
};

START_TEST(quantiles_from_the_middle_to_the_least_number_are_met)
{
    for (size_t i = 0; i < sizeof quantiles / sizeof quantiles[0]; i++)
        ck_near(lw_normal_quantile(quantiles[i].p), quantiles[i].want, 1e-15, 0);
    ck_assert(lw_normal_quantile(0) == -INF && lw_normal_quantile(1) == INF);
    ck_assert(isnan(lw_normal_quantile(-0.1)) && isnan(lw_normal_quantile(1.1)));
    ck_assert(isnan(lw_normal_quantile(NONE)));
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("elementary ends");
    TCase *one = tcase_create("one"), *two = tcase_create("two"), *normal = tcase_create("normal");
    tcase_add_loop_test(one, special_arguments_give_what_the_c_standard_says, 0, N_ENDS);
    tcase_add_test(one, the_least_numbers_are_not_lost);
    tcase_add_test(one, values_near_the_ends_are_met);
    tcase_add_test(one, results_overflow_only_beyond_the_largest_number);
    tcase_add_test(one, results_grow_across_every_seam);
    tcase_add_loop_test(two, bits_of_two_arguments_are_what_they_always_were, 0, N_PAIRS);
    tcase_add_loop_test(two, results_of_two_arguments_are_within_two_units_of_the_last_place, 0,
                        N_PAIRS);
    tcase_add_test(two, powers_of_special_arguments_are_as_the_c_standard_has_them);
    tcase_add_test(two, powers_near_the_ends_are_met);
    tcase_add_test(two, angles_of_special_arguments_are_as_the_c_standard_has_them);
    tcase_add_test(two, lengths_neither_overflow_nor_vanish_early);
    tcase_add_test(normal, the_tail_of_the_normal_distribution_is_met);
    tcase_add_test(normal, quantiles_from_the_middle_to_the_least_number_are_met);
    suite_add_tcase(suite, one);
    suite_add_tcase(suite, two);
    suite_add_tcase(suite, normal);
    return run_suite(suite);
}
