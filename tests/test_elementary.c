// Elementary functions: accuracy against the C library, and the very bits over a million arguments
// each, which must not change with compiler, optimisation or processor.

#include "suite.h"

#include <gsl/gsl_cdf.h>
#include <latewood/elementary.h>

#include <stdint.h>
#include <string.h>

typedef struct function {
    const char *name;
    double (*ours)(double);
    double (*libm)(double);
    double lo, hi;
    uint64_t hash; // of the results over a million arguments
} function;

static const function functions[] = {
#define ROW(name, lo, hi, hash)                                                                    \
    {                                                                                              \
#name, lw_##name, name, lo, hi, UINT64_C(hash)                                             \
    }
#include "elementary_hashes.inc"
};
enum { N_FUNCTIONS = sizeof functions / sizeof functions[0], N_ARGUMENTS = 1000000 };

// A fixed spread of arguments over (lo, hi): a Weyl sequence.
static double argument(const function *f, int k)
{
    uint64_t w = (uint64_t)(k + 1) * UINT64_C(0x9E3779B97F4A7C15);
    return f->lo + (f->hi - f->lo) * (double)(w >> 11) * 0x1p-53;
}

static uint64_t mix(uint64_t hash, double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    hash ^= bits;
    hash *= UINT64_C(0x100000001B3);
    return hash ^ hash >> 29;
}

START_TEST(bits_are_what_they_always_were)
{
    const function *f = &functions[_i];
    uint64_t hash = UINT64_C(0xCBF29CE484222325);
    for (int k = 0; k < N_ARGUMENTS; k++)
        hash = mix(hash, f->ours(argument(f, k)));
    ck_assert_msg(hash == f->hash, "ROW(%s, %g, %g, 0x%016llx)", f->name, f->lo, f->hi,
                  (unsigned long long)hash);
}
END_TEST

static const struct {
    const char *name;
    double (*ours)(double, double);
    double lo, hi; // of both arguments
    uint64_t hash;
} functions_of_two[] = {
    {"pow", lw_pow, 0.01, 60, UINT64_C(0x7ef65f1a15aee57b)},
    {"atan2", lw_atan2, -50, 50, UINT64_C(0xdd319c90715f986a)},
    {"hypot", lw_hypot, -1e6, 1e6, UINT64_C(0x06794e15f1d3dd77)},
};

START_TEST(bits_of_functions_of_two_arguments)
{
    function f = {.lo = functions_of_two[_i].lo, .hi = functions_of_two[_i].hi};
    uint64_t hash = UINT64_C(0xCBF29CE484222325);
    for (int k = 0; k < N_ARGUMENTS; k++)
        hash = mix(hash, functions_of_two[_i].ours(argument(&f, k), argument(&f, k + 7777)));
    ck_assert_msg(hash == functions_of_two[_i].hash, "%s 0x%016llx", functions_of_two[_i].name,
                  (unsigned long long)hash);
}
END_TEST

// One unit of ours; the C library's own cbrt is off by three.
START_TEST(results_are_within_four_units_of_the_last_place)
{
    const function *f = &functions[_i];
    for (int k = 0; k < 20000; k++) {
        double x = argument(f, k), want = f->libm(x);
        double unit = nextafter(fabs(want), (double)INFINITY) - fabs(want);
        ck_assert_msg(fabs(f->ours(x) - want) <= 4 * unit,
                      "%s(%.17g) is %.17g, the C library %.17g", f->name, x, f->ours(x), want);
    }
}
END_TEST

START_TEST(edges_are_as_the_c_standard_has_them)
{
    ck_assert(lw_exp(-(double)INFINITY) == 0 && isinf(lw_exp(1e4)));
    ck_assert(isinf(lw_log(0)) && isnan(lw_log(-1)));
    ck_assert(lw_pow(2, 10) == 1024 && lw_pow(-2, 3) == -8 && isnan(lw_pow(-2, 0.5)));
    ck_assert(lw_atan2(0, 1) == 0 && fabs(lw_atan2(1, 0) - M_PI_2) < 1e-15);
    ck_assert(lw_hypot(3, 4) == 5);
    ck_assert(isnan(lw_sin((double)NAN)) && isnan(lw_exp((double)NAN)));
}
END_TEST

START_TEST(normal_quantiles_are_met)
{
    // N: normal quantiles as tabled to 16 digits (from memory): 0.975 and 0.995
    ck_near(lw_normal_quantile(0.975), 1.959963984540054, 4e-16, 0);
    ck_near(lw_normal_quantile(0.995), 2.5758293035489004, 4e-16, 0);
    ck_assert(lw_normal_quantile(0.5) == 0);
    for (double p = 1e-300; p < 1; p = p < 1e-3 ? p * 7 : p + 0.0007) {
        double x = lw_normal_quantile(p);
        // GSL as reference library, good to about 1e-14 here
        ck_near(x, gsl_cdf_ugaussian_Pinv(p), 1e-13, 1);
        ck_near(lw_normal_cdf(x), p, 1e-13 * (1 + x * x), 0); // the condition of the cdf
    }
    ck_assert(lw_normal_quantile(0x1p-54) < -8 && lw_normal_quantile(1 - 0x1p-53) > 8);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("elementary");
    TCase *tests = tcase_create("elementary");
    tcase_set_timeout(tests, 60);
    tcase_add_loop_test(tests, bits_are_what_they_always_were, 0, N_FUNCTIONS);
    tcase_add_loop_test(tests, results_are_within_four_units_of_the_last_place, 0, N_FUNCTIONS);
    tcase_add_loop_test(tests, bits_of_functions_of_two_arguments, 0, 3);
    tcase_add_test(tests, edges_are_as_the_c_standard_has_them);
    tcase_add_test(tests, normal_quantiles_are_met);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
