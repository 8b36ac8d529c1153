// Quantities, periods and ticks: units, exact fractions, rounding, refusals in words.

#include "suite.h"

#include <latewood/quantity.h>
#include <locale.h>
#include <string.h>

static const struct {
    const char *text;
    double value;
} plain[] = {
    {"50 us", 50e-6},
    {"50us", 50e-6},
    {"50 \xC2\xB5s", 50e-6}, // micro sign
    {"50 \xCE\xBCs", 50e-6}, // Greek mu
    {"-3.5e-2 ms", -3.5e-5},
    {"20 kHz", 20e3},
    {"2 mH", 2e-3},
    {"0.8 ohm", 0.8},
    {"5 k\xCE\xA9", 5e3},
    {"0.05 N m/A", 0.05},
    {"0.02 kg m^2", 0.02},
    {"3 rad/s^2", 3},
    {"12 1/s", 12},
    {"2 min", 120},
    {"1.5 h", 5400},
    {"7 g", 7e-3},
    {"37 %", 0.37},
    {"1.5 samples", 1.5},
    {"340 cycles", 340},
    {"180 deg", 3.14159265358979323846},
    {"60 rpm", 6.28318530717958647692},
    {"0.1 ns", 1e-10},
    {"123456789.123456789 s", 123456789.123456789},
};

START_TEST(units_and_prefixes_are_read)
{
    for (size_t i = 0; i < sizeof plain / sizeof plain[0]; i++) {
        lw_quantity q;
        lw_error err = {0};
        ck_assert_msg(lw_quantity_parse(plain[i].text, &q, &err) == LW_OK, "%s", err.text);
        // SI: each is the double nearest to the decimal, but for units of angle
        ck_assert_msg(fabs(q.value - plain[i].value) <= 2e-16 * fabs(plain[i].value), "%s is %.17g",
                      plain[i].text, q.value);
    }
}
END_TEST

START_TEST(values_are_exact_fractions_where_they_fit)
{
    lw_quantity q;
    lw_error err;
    ck_assert_int_eq(lw_quantity_parse("1.1 us", &q, &err), LW_OK);
    ck_assert(q.num == 11 && q.den == 10000000);
    ck_assert_int_eq(lw_quantity_parse("1e-30 s", &q, &err), LW_OK);
    ck_assert(q.den == 0 && q.value == 1e-30);
}
END_TEST

static const struct {
    const char *text, *unit, *message;
} wrong[] = {
    {"5 V", "s", "\"5 V\" is a voltage; a time is wanted, such as \"5 ms\""},
    {"5 ms", "H", "\"5 ms\" is a time; an inductance is wanted, such as \"2 mH\""},
    {"5 ms", "1", "\"5 ms\" is a time; a plain number is wanted, such as \"0.5\""},
};

START_TEST(a_wrong_unit_is_told_in_words)
{
    for (size_t i = 0; i < sizeof wrong / sizeof wrong[0]; i++) {
        double value = 42;
        lw_error err;
        ck_assert_int_eq(lw_quantity_parse_as(wrong[i].text, wrong[i].unit, &value, &err),
                         LW_ERR_UNIT);
        ck_assert_str_eq(err.text, wrong[i].message);
        ck_assert(value == 42); // untouched
    }
}
END_TEST

START_TEST(what_is_no_quantity_is_refused)
{
    static const char *const texts[] = {"",       "us",      "5 uss", "5 s/s/s", "5 m^",
                                        "5 kmin", "1e999 s", "--3 s", "5 % s"};
    for (size_t i = 0; i < sizeof texts / sizeof texts[0]; i++) {
        lw_quantity q;
        lw_error err;
        ck_assert_msg(lw_quantity_parse(texts[i], &q, &err) < 0, "%s", texts[i]);
        ck_assert(strlen(err.text) > 10);
    }
}
END_TEST

START_TEST(periods_are_kept_as_fractions)
{
    lw_period p;
    lw_error err;
    ck_assert_int_eq(lw_period_parse("30 kHz", &p, &err), LW_OK);
    ck_assert(p.num == 100000000 && p.den == 3); // 33333333.33.. ticks
    ck_assert_int_eq(lw_period_parse("50 us", &p, &err), LW_OK);
    ck_assert(p.num == 50000000 && p.den == 1);
    ck_assert_int_eq(lw_period_from_seconds(1e-4, &p, &err), LW_OK);
    ck_assert(p.num == 100000000 && p.den == 1); // the decimal, not the double
    ck_assert_int_lt(lw_period_parse("0 s", &p, &err), 0);
    ck_assert_int_lt(lw_period_parse("-1 s", &p, &err), 0);
    ck_assert_int_lt(lw_period_parse("0.2 ps", &p, &err), 0);
}
END_TEST

START_TEST(instants_of_a_fractional_period_do_not_drift)
{
    const lw_period third = {100000000, 3};
    ck_assert_int_eq(lw_period_at(third, 7, 0), 7);
    ck_assert_int_eq(lw_period_at(third, 0, 1), 33333333);
    ck_assert_int_eq(lw_period_at(third, 0, 2), 66666667);
    ck_assert_int_eq(lw_period_at(third, 0, 3000000), INT64_C(100000000000000));
    ck_assert_int_eq(lw_period_at((lw_period){1, 2}, 0, 1), 1); // halves go up
    ck_assert_int_eq(lw_period_at((lw_period){1, 2}, 0, -1), 0);
    ck_assert_int_eq(lw_period_at(third, 0, INT64_MAX / 2), LW_NEVER);
    for (int64_t k = 0; k < 1000; k += 37)
        ck_assert_int_eq(lw_period_index(third, 5, lw_period_at(third, 5, k)), k);
}
END_TEST

START_TEST(ticks_round_half_up_and_stay_in_range)
{
    lw_tick t;
    ck_assert_int_eq(lw_tick_from_seconds(0.5e-12, &t), LW_OK);
    ck_assert_int_eq(t, 1);
    ck_assert_int_eq(lw_tick_from_seconds(-0.5e-12, &t), LW_OK);
    ck_assert_int_eq(t, 0);
    ck_assert_int_eq(lw_tick_from_seconds(9.1e6, &t), LW_ERR_TIME);
    ck_assert_int_eq(lw_tick_from_seconds((double)NAN, &t), LW_ERR_TIME);
}
END_TEST

START_TEST(numbers_and_times_are_written_short)
{
    char text[48];
    ck_assert_str_eq(lw_double_format(0.1, text), "0.1");
    ck_assert(strtod(lw_double_format(0.1 + 0.2, text), NULL) == 0.1 + 0.2);
    ck_assert_str_eq(lw_tick_format(50000000, text), "50 us");
    ck_assert_str_eq(lw_tick_format(INT64_C(1000003000), text), "1.000003 ms");
    ck_assert_str_eq(lw_tick_format(-1, text), "-1 ps");
}
END_TEST

START_TEST(a_comma_locale_changes_nothing)
{
    char text[48];
    lw_quantity q;
    lw_error err;
    if (setlocale(LC_ALL, "de_DE.UTF-8") == NULL)
        return; // not on this machine
    ck_assert_int_eq(lw_quantity_parse("1.5 ms", &q, &err), LW_OK);
    ck_assert(q.value == 1.5e-3);
    ck_assert_str_eq(lw_double_format(2.5, text), "2.5");
    setlocale(LC_ALL, "C");
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("quantity");
    TCase *tests = tcase_create("quantity");
    tcase_add_test(tests, units_and_prefixes_are_read);
    tcase_add_test(tests, values_are_exact_fractions_where_they_fit);
    tcase_add_test(tests, a_wrong_unit_is_told_in_words);
    tcase_add_test(tests, what_is_no_quantity_is_refused);
    tcase_add_test(tests, periods_are_kept_as_fractions);
    tcase_add_test(tests, instants_of_a_fractional_period_do_not_drift);
    tcase_add_test(tests, ticks_round_half_up_and_stay_in_range);
    tcase_add_test(tests, numbers_and_times_are_written_short);
    tcase_add_test(tests, a_comma_locale_changes_nothing);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
