// Double-double arithmetic: transformations without error against exact integers, results against
// constants of forty digits, and algebraic identities.

#include "suite.h"

#include "base/dd.h"

#include <latewood/draw.h>
#include <stdint.h>

__extension__ typedef __int128 wide;

// 2^-104 is what a sum or a product of double-doubles may lose at most (Hida, Li, Bailey 2001 give
// 2 and 4 units of 2^-106 for the ones used here).
#define UNIT 0x1p-104

static double random_whole(uint32_t k, int bits)
{
    double u = lw_draw_uniform((lw_address){11, 5, (uint32_t)bits, k});
    return floor((u - 0.5) * ldexp(1, bits + 1));
}

// ---- without error

START_TEST(a_sum_of_two_doubles_loses_nothing)
{
    for (uint32_t k = 0; k < 20000; k++) {
        double a = random_whole(k, 53), b = random_whole(k, (int)(k % 53)) * 0x1p40;
        lw__dd s = lw__dd_two_sum(a, b);
        ck_assert((wide)s.hi + (wide)s.lo == (wide)a + (wide)b);
        ck_assert(s.hi == a + b && fabs(s.lo) <= fabs(s.hi) * 0x1p-53);
        lw__dd q = fabs(a) >= fabs(b) ? lw__dd_quick_sum(a, b) : lw__dd_quick_sum(b, a);
        ck_assert(q.hi == s.hi && q.lo == s.lo);
    }
}
END_TEST

START_TEST(a_product_of_two_doubles_loses_nothing)
{
    for (uint32_t k = 0; k < 20000; k++) {
        double a = random_whole(k, 53), b = random_whole(k, 52);
        lw__dd p = lw__dd_two_product(a, b);
        ck_assert((wide)p.hi + (wide)p.lo == (wide)a * (wide)b);
        ck_assert(p.hi == a * b);
    }
    // (2^53 - 1)^2 = 2^106 - 2^54 + 1
    lw__dd square = lw__dd_two_product(9007199254740991.0, 9007199254740991.0);
    ck_assert(square.hi == 0x1p106 - 0x1p54 && square.lo == 1);
}
END_TEST

// ---- against constants

typedef struct constant {
    const char *digits;
    lw__dd value; // the digits cut in two doubles, in 60-digit arithmetic
} constant;

// Digits from memory, and as 60-digit arithmetic has them.
static const constant pi = {"3.14159265358979323846264338327950288419717",
                            {3.141592653589793, 1.2246467991473532e-16}};
static const constant e = {"2.71828182845904523536028747135266249775725",
                           {2.718281828459045, 1.4456468917292502e-16}};
static const constant pi_times_e = {"8.53973422267356706546355086954657449503489",
                                    {8.539734222673568, -6.773815290502424e-16}};
static const constant pi_over_e = {"1.15572734979092171791009318331269629912085",
                                   {1.1557273497909217, -1.3998972600526045e-17}};
static const constant pi_plus_e = {"5.85987448204883847382293085463216538195442",
                                   {5.859874482048839, -1.7705984076240228e-16}};
static const constant pi_minus_e = {"0.423310825130748003102355911926840386439922",
                                    {0.423310825130748, -2.2100009258189695e-17}};
static const constant third = {"0.333333333333333333333333333333333333333333",
                               {0.3333333333333333, 1.850371707708594e-17}};
static const constant twenty_two_sevenths = {"3.14285714285714285714285714285714285714286",
                                             {3.142857142857143, 6.344131569286608e-17}};

static void same(lw__dd got, constant want, double tolerance)
{
    lw__dd d = lw__dd_sub(got, want.value);
    ck_assert_msg(fabs(d.hi) <= tolerance * fabs(want.value.hi), "%.17g + %.17g, wanted %s", got.hi,
                  got.lo, want.digits);
}

START_TEST(the_four_operations_hold_thirty_one_digits)
{
    same(lw__dd_mul(pi.value, e.value), pi_times_e, UNIT);
    same(lw__dd_div(pi.value, e.value), pi_over_e, UNIT);
    same(lw__dd_add(pi.value, e.value), pi_plus_e, UNIT);
    same(lw__dd_sub(pi.value, e.value), pi_minus_e, 8 * UNIT); // three bits cancel
    same(lw__dd_of_ratio(1, 3), third, UNIT);
    same(lw__dd_of_ratio(22, 7), twenty_two_sevenths, UNIT);
}
END_TEST

START_TEST(plain_doubles_would_be_told_apart)
{
    lw__dd plain = lw__dd_from_double(pi.value.hi * e.value.hi);
    lw__dd d = lw__dd_sub(plain, pi_times_e.value);
    ck_assert(fabs(d.hi) > 1e10 * UNIT * pi_times_e.value.hi);
    lw__dd no_cross = lw__dd_two_product(pi.value.hi, e.value.hi); // without hi times lo
    d = lw__dd_sub(no_cross, pi_times_e.value);
    ck_assert(fabs(d.hi) > 1e10 * UNIT * pi_times_e.value.hi);
}
END_TEST

// ---- identities

static lw__dd random_value(uint32_t k, uint32_t stream)
{
    double u[2];
    lw_draw_pair((lw_address){7, 1, stream, k}, u);
    double hi = (u[0] - 0.5) * ldexp(1, (int)(k % 61) - 30);
    return lw__dd_two_sum(hi, hi * 0x1p-54 * (u[1] - 0.5));
}

static int near(lw__dd a, lw__dd b, double scale)
{
    return fabs(lw__dd_sub(a, b).hi) <= UNIT * scale;
}

START_TEST(operations_undo_each_other)
{
    for (uint32_t k = 0; k < 20000; k++) {
        lw__dd a = random_value(k, 1), b = random_value(k, 2);
        double sum = fabs(a.hi) + fabs(b.hi);
        ck_assert(near(lw__dd_sub(lw__dd_add(a, b), b), a, 2 * sum));
        ck_assert(near(lw__dd_div(lw__dd_mul(a, b), b), a, 2 * fabs(a.hi)));
        ck_assert(near(lw__dd_mul(lw__dd_div(a, b), b), a, 2 * fabs(a.hi)));
        ck_assert(near(lw__dd_mul_double(a, b.hi), lw__dd_mul(a, lw__dd_from_double(b.hi)),
                       fabs(a.hi * b.hi)));
    }
}
END_TEST

// a - q b, which two exact products leave to a last rounding of their own small rest.
START_TEST(quotients_of_doubles_are_good_to_half_a_unit)
{
    for (uint32_t k = 0; k < 20000; k++) {
        double a = 1 + fabs(random_whole(k, 52)) * 0x1p-52,
               b = 1 + fabs(random_whole(k, 51)) * 0x1p-51;
        lw__dd q = lw__dd_of_ratio(a, b);
        lw__dd p = lw__dd_two_product(q.hi, b), r = lw__dd_two_product(q.lo, b);
        double rest = (((a - p.hi) - p.lo) - r.hi) - r.lo;
        ck_assert(fabs(rest) <= 0x1.02p-107 * a); // half of 2^-106
    }
}
END_TEST

START_TEST(results_are_normalised)
{
    for (uint32_t k = 0; k < 20000; k++) {
        lw__dd a = random_value(k, 3), b = random_value(k, 4);
        const lw__dd r[] = {lw__dd_add(a, b), lw__dd_sub(a, b), lw__dd_mul(a, b), lw__dd_div(a, b)};
        for (int i = 0; i < 4; i++) {
            ck_assert(r[i].hi + r[i].lo == r[i].hi);
            ck_assert(lw__dd_to_double(r[i]) == r[i].hi);
        }
    }
}
END_TEST

START_TEST(signs_sizes_and_order_look_at_both_halves)
{
    lw__dd a = {1, 0x1p-60}, b = {1, -0x1p-60}, n = lw__dd_neg(a);
    ck_assert(lw__dd_less(b, a) && !lw__dd_less(a, b) && !lw__dd_less(a, a));
    ck_assert(lw__dd_less(n, b) && n.hi == -1 && n.lo == -0x1p-60);
    ck_assert(lw__dd_abs(n).hi == 1 && lw__dd_abs(n).lo == 0x1p-60);
    ck_assert(lw__dd_abs(a).hi == 1 && lw__dd_abs(a).lo == 0x1p-60);
    lw__dd scaled = lw__dd_scale(a, 0x1p-20);
    ck_assert(scaled.hi == 0x1p-20 && scaled.lo == 0x1p-80);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("dd");
    TCase *tests = tcase_create("dd");
    tcase_add_test(tests, a_sum_of_two_doubles_loses_nothing);
    tcase_add_test(tests, a_product_of_two_doubles_loses_nothing);
    tcase_add_test(tests, the_four_operations_hold_thirty_one_digits);
    tcase_add_test(tests, plain_doubles_would_be_told_apart);
    tcase_add_test(tests, operations_undo_each_other);
    tcase_add_test(tests, quotients_of_doubles_are_good_to_half_a_unit);
    tcase_add_test(tests, results_are_normalised);
    tcase_add_test(tests, signs_sizes_and_order_look_at_both_halves);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
