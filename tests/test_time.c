// Ticks and periods: rounding, range, and instants of periods that are no whole number of ticks.

#include "suite.h"

#include <latewood/draw.h>
#include <latewood/time.h>

#define TICK(seconds, want)                                                                        \
    do {                                                                                           \
        lw_tick tick_ = -1;                                                                        \
        ck_assert_int_eq(lw_tick_from_seconds(seconds, &tick_), LW_OK);                            \
        ck_assert_int_eq(tick_, want);                                                             \
    } while (0)

// ---- ticks

START_TEST(seconds_become_the_nearest_tick_halves_up)
{
    TICK(0, 0);
    TICK(50e-6, 50000000);
    TICK(1.1e-6, 1100000);
    TICK(0.4999e-12, 0);
    TICK(0.5e-12, 1);
    TICK(2.5e-12, 3);
    TICK(-0.5e-12, 0);
    TICK(-2.5e-12, -2);
    TICK(-2.6e-12, -3);
    TICK(1, LW_TICKS_PER_SECOND);
}
END_TEST

START_TEST(seconds_beyond_the_range_are_refused_and_leave_the_tick_alone)
{
    const double bad[] = {9000001,          -9000001,          1e300,
                          (double)INFINITY, -(double)INFINITY, (double)NAN};
    TICK(9e6, LW_TICK_MAX);
    TICK(-9e6, -LW_TICK_MAX);
    for (int i = 0; i < 6; i++) {
        lw_tick tick = 77;
        ck_assert_int_eq(lw_tick_from_seconds(bad[i], &tick), LW_ERR_TIME);
        ck_assert_int_eq(tick, 77);
    }
}
END_TEST

// Up to 2^51 ticks the two roundings, of the quotient and of the product, come to less than half.
START_TEST(ticks_come_back_from_their_seconds)
{
    for (uint32_t k = 0; k < 100000; k++) {
        double u = lw_draw_uniform((lw_address){3, 1, 4, k});
        lw_tick t = (lw_tick)((u - 0.5) * 0x1p52);
        TICK(lw_tick_seconds(t), t);
    }
    ck_assert(lw_tick_seconds(50000000) == 50e-6);
    ck_assert(lw_tick_seconds(LW_TICK_MAX) == 9e6);
}
END_TEST

// ---- instants

static const lw_period periods[] = {
    {50000000, 1},                // 50 us
    {100000000, 3},               // 30 kHz
    {1000000000, 7},              // 7 kHz
    {33333333333333333, 1000000}, // near 33 ms
    {1, 1},
    {4, 3},
    {5, 2},
    {LW_TICK_MAX, 1},
    {INT64_MAX, INT64_MAX - 1},
};
enum { N_PERIODS = sizeof periods / sizeof periods[0] };

// Reference: whole ticks and rest of k * num / den, one period added at a time.
START_TEST(instants_are_the_rounded_multiples_halves_up)
{
    lw_period p = periods[_i];
    const lw_tick offset = -1234567;
    uint64_t whole = 0, rest = 0, den = (uint64_t)p.den;
    for (int64_t k = 0; k < 20000; k++) {
        uint64_t rounded = whole + (rest >= den - rest);
        if (rounded > (uint64_t)LW_TICK_MAX + 1234567)
            break;
        ck_assert_int_eq(lw_period_at(p, offset, k), (lw_tick)rounded + offset);
        whole += (uint64_t)(p.num / p.den);
        rest += (uint64_t)(p.num % p.den);
        whole += rest >= den;
        rest -= rest >= den ? den : 0;
    }
}
END_TEST

START_TEST(a_rational_period_does_not_drift)
{
    const lw_period thirty_khz = {100000000, 3};
    // 30 kHz for 100 days: 259.2e9 periods end at 8.64e18 ticks
    ck_assert_int_eq(lw_period_at(thirty_khz, 0, INT64_C(259200000000)),
                     INT64_C(8640000000000000000));
    ck_assert_int_eq(lw_period_at(thirty_khz, 0, 1), 33333333);
    ck_assert_int_eq(lw_period_at(thirty_khz, 0, 2), 66666667);
    ck_assert_int_eq(lw_period_at(thirty_khz, 5, -1), -33333328);
    // a period rounded to whole ticks is 86 ms off by then
    ck_assert_int_ne(33333333 * INT64_C(259200000000), INT64_C(8640000000000000000));
}
END_TEST

START_TEST(instants_beyond_the_range_are_never)
{
    const lw_period second = {LW_TICKS_PER_SECOND, 1};
    ck_assert_int_eq(lw_period_at(second, 0, 9000000), LW_TICK_MAX);
    ck_assert_int_eq(lw_period_at(second, 1, 9000000), LW_NEVER);
    ck_assert_int_eq(lw_period_at(second, 0, INT64_MAX), LW_NEVER);
    ck_assert_int_eq(lw_period_at(second, 0, -9000001), LW_NEVER);
    ck_assert_int_eq(lw_period_at((lw_period){INT64_MAX, 1}, LW_TICK_MAX, INT64_MAX), LW_NEVER);
}
END_TEST

// ---- indices

// Nonzero if k is the least index >= 0 whose instant is at or after t.
static int is_least(lw_period p, lw_tick offset, lw_tick t, int64_t k)
{
    return k >= 0 && lw_period_at(p, offset, k) >= t &&
           (k == 0 || lw_period_at(p, offset, k - 1) < t);
}

START_TEST(the_index_is_the_least_whose_instant_is_not_before)
{
    lw_period p = periods[_i];
    const lw_tick offsets[] = {0, 17, -5000000000000, LW_TICK_MAX - 100};
    for (uint32_t n = 0; n < 5000; n++) {
        double u[2];
        lw_draw_pair((lw_address){5, 9, 2, n}, u);
        lw_tick offset = offsets[n % 4];
        lw_tick t = (lw_tick)(u[0] * (n % 3 == 0 ? 8.9e18 : 1e11 * u[1]));
        int64_t k = lw_period_index(p, offset, t);
        ck_assert_msg(is_least(p, offset, t, k),
                      "period %lld/%lld, offset %lld, t %lld: index %lld", (long long)p.num,
                      (long long)p.den, (long long)offset, (long long)t, (long long)k);
        lw_tick at = lw_period_at(p, offset, k);
        ck_assert_int_eq(lw_period_index(p, offset, at), k); // an instant is its own
    }
}
END_TEST

START_TEST(an_index_off_by_one_is_told_apart)
{
    const lw_period p = {100000000, 3};
    int64_t k = lw_period_index(p, 0, 1000000);
    ck_assert(is_least(p, 0, 1000000, k));
    ck_assert(!is_least(p, 0, 1000000, k + 1) && !is_least(p, 0, 1000000, k - 1));
}
END_TEST

// Instants beyond the range are all LW_NEVER, so their least index is where LW_NEVER begins.
START_TEST(beyond_the_range_the_index_is_where_never_begins)
{
    for (int i = 0; i < N_PERIODS; i++) {
        int64_t k = lw_period_index(periods[i], 0, LW_NEVER);
        ck_assert_int_eq(lw_period_at(periods[i], 0, k), LW_NEVER);
        ck_assert_int_ne(lw_period_at(periods[i], 0, k - 1), LW_NEVER);
        ck_assert_int_eq(lw_period_index(periods[i], 0, LW_TICK_MAX + 1), k);
    }
}
END_TEST

START_TEST(before_the_offset_the_index_is_0)
{
    for (int i = 0; i < N_PERIODS; i++) {
        ck_assert_int_eq(lw_period_index(periods[i], 100, 100), 0);
        ck_assert_int_eq(lw_period_index(periods[i], 100, -LW_TICK_MAX), 0);
        ck_assert_int_eq(lw_period_index(periods[i], 100, 101), 1);
    }
}
END_TEST

START_TEST(a_period_of_whole_ticks_is_itself)
{
    lw_period p = lw_period_of_ticks(50000000);
    ck_assert(p.num == 50000000 && p.den == 1);
    ck_assert(lw_period_seconds(p) == 50e-6);
    // a quotient and a division by 1e12: two roundings
    ck_near(lw_period_seconds((lw_period){100000000, 3}), 1 / 30000.0, 2.3e-16, 0);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("time");
    TCase *tests = tcase_create("time");
    tcase_add_test(tests, seconds_become_the_nearest_tick_halves_up);
    tcase_add_test(tests, seconds_beyond_the_range_are_refused_and_leave_the_tick_alone);
    tcase_add_test(tests, ticks_come_back_from_their_seconds);
    tcase_add_loop_test(tests, instants_are_the_rounded_multiples_halves_up, 0, N_PERIODS);
    tcase_add_test(tests, a_rational_period_does_not_drift);
    tcase_add_test(tests, instants_beyond_the_range_are_never);
    tcase_add_loop_test(tests, the_index_is_the_least_whose_instant_is_not_before, 0, N_PERIODS);
    tcase_add_test(tests, an_index_off_by_one_is_told_apart);
    tcase_add_test(tests, beyond_the_range_the_index_is_where_never_begins);
    tcase_add_test(tests, before_the_offset_the_index_is_0);
    tcase_add_test(tests, a_period_of_whole_ticks_is_itself);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
