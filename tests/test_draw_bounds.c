// Draws at their bounds and over their addresses: the open interval, every word of an address,
// moments and bits, no memory of what was drawn before.

#include "suite.h"

#include <latewood/draw.h>
#include <string.h>

// ---- the open interval

// Addresses whose block is all ones and all zeros, found by undoing the ten rounds.
static const lw_address all_ones = {0, UINT64_C(0x97e2d350ba2ca899), 0x4f07c005, 0x2c4aee5d};
static const lw_address all_zeros = {0, UINT64_C(0xd9f19ce4d942a9da), 0x58dd724a, 0x86d9ccce};

static void block(lw_address at, uint32_t out[4])
{
    const uint32_t counter[4] = {at.job, at.stream, (uint32_t)at.run, (uint32_t)(at.run >> 32)};
    const uint32_t key[2] = {(uint32_t)at.seed, (uint32_t)(at.seed >> 32)};
    lw_philox4x32_10(counter, key, out);
}

START_TEST(the_highest_uniform_is_just_below_1)
{
    uint32_t out[4];
    double u[2];
    block(all_ones, out);
    for (int k = 0; k < 4; k++)
        ck_assert_uint_eq(out[k], UINT32_MAX);
    lw_draw_pair(all_ones, u);
    ck_assert(u[0] == 1 - 0x1p-53 && u[1] == 1 - 0x1p-53);
    ck_assert(lw_draw_uniform(all_ones) < 1);
}
END_TEST

START_TEST(the_lowest_uniform_is_above_0)
{
    uint32_t out[4];
    double u[2];
    block(all_zeros, out);
    for (int k = 0; k < 4; k++)
        ck_assert_uint_eq(out[k], 0);
    lw_draw_pair(all_zeros, u);
    ck_assert(u[0] == 0x1p-54 && u[1] == 0x1p-54);
    ck_assert(lw_draw_uniform(all_zeros) > 0);
}
END_TEST

// ---- addresses

START_TEST(every_bit_of_an_address_changes_the_draw)
{
    const lw_address base = {UINT64_C(0x0123456789abcdef), 77, 5, 9};
    double u = lw_draw_uniform(base);
    for (int bit = 0; bit < 64; bit++) {
        lw_address a = base, b = base;
        a.seed ^= UINT64_C(1) << bit;
        b.run ^= UINT64_C(1) << bit;
        ck_assert(lw_draw_uniform(a) != u && lw_draw_uniform(b) != u);
        ck_assert(lw_draw_uniform(a) != lw_draw_uniform(b));
    }
    for (int bit = 0; bit < 32; bit++) {
        lw_address a = base, b = base;
        a.stream ^= UINT32_C(1) << bit;
        b.job ^= UINT32_C(1) << bit;
        ck_assert(lw_draw_uniform(a) != u && lw_draw_uniform(b) != u);
        ck_assert(lw_draw_uniform(a) != lw_draw_uniform(b));
    }
}
END_TEST

START_TEST(a_draw_does_not_depend_on_draws_before_it)
{
    enum { N = 1000 };
    double forward[N];
    for (uint32_t k = 0; k < N; k++)
        forward[k] = lw_draw_uniform((lw_address){4, 2, 1, k});
    for (uint32_t k = N; k-- > 0;)
        if (k % 3 != 1) // every third is left out
            ck_assert(lw_draw_uniform((lw_address){4, 2, 1, k}) == forward[k]);
}
END_TEST

// ---- distribution at a fixed seed

enum { N_DRAWS = 400000 };

// Mean of (u - 1/2)^n over draws along one part of the address, in standard errors of that mean.
static double moment_in_errors(int along, int n)
{
    double sum = 0, mean = n % 2 ? 0 : 1 / (ldexp(1, n) * (n + 1));
    double square = 1 / (ldexp(1, 2 * n) * (2 * n + 1));
    for (uint32_t k = 0; k < N_DRAWS; k++) {
        lw_address at = {20, 0, 0, 0};
        if (along == 0)
            at.job = k;
        else if (along == 1)
            at.run = k;
        else if (along == 2)
            at.stream = k;
        else
            at.seed = k;
        double x = lw_draw_uniform(at) - 0.5, power = 1;
        for (int i = 0; i < n; i++)
            power *= x;
        sum += power;
    }
    return fabs(sum / N_DRAWS - mean) / sqrt((square - mean * mean) / N_DRAWS);
}

// 16 moments at 4 standard errors: one in a thousand seeds would miss, this one does not.
START_TEST(moments_are_those_of_the_uniform_distribution_along_every_part)
{
    for (int n = 1; n <= 4; n++)
        ck_assert_msg(moment_in_errors(_i, n) < 4, "moment %d: %g", n, moment_in_errors(_i, n));
}
END_TEST

START_TEST(pairs_and_neighbours_are_uncorrelated)
{
    double within = 0, next = 0, last = 0;
    for (uint32_t k = 0; k < N_DRAWS; k++) {
        double u[2];
        lw_draw_pair((lw_address){20, 1, 0, k}, u);
        within += (u[0] - 0.5) * (u[1] - 0.5);
        next += (u[0] - 0.5) * last;
        last = u[0] - 0.5;
    }
    double error = sqrt((double)N_DRAWS) / 12; // of a sum of products of variance 1/144
    ck_assert(fabs(within) < 4 * error && fabs(next) < 4 * error);
}
END_TEST

START_TEST(each_bit_is_one_half_of_the_time)
{
    long count[128] = {0};
    for (uint32_t k = 0; k < N_DRAWS; k++) {
        uint32_t out[4];
        block((lw_address){20, 2, 0, k}, out);
        for (int bit = 0; bit < 128; bit++)
            count[bit] += out[bit / 32] >> bit % 32 & 1;
    }
    for (int bit = 0; bit < 128; bit++) // 5 standard errors for 128 counts
        ck_assert(fabs((double)count[bit] - N_DRAWS / 2) < 5 * sqrt(N_DRAWS / 4.0));
}
END_TEST

// ---- streams

START_TEST(streams_of_many_names_do_not_collide_in_bulk)
{
    enum { N = 4000 };
    static uint32_t seen[N];
    int collisions = 0;
    for (int k = 0; k < N; k++) {
        char name[32] = "task .takes#1";
        name[4] = (char)('a' + k % 26);
        name[12] = (char)('a' + k / 26 % 26);
        name[13] = (char)('a' + k / 676);
        seen[k] = lw_stream(name);
        for (int j = 0; j < k; j++)
            collisions += seen[j] == seen[k];
    }
    ck_assert_int_le(collisions, 1); // 8e6 pairs over 2^32 values: 0.002 are expected
    // FNV-1a 64 of "" is cbf29ce484222325 (G. Fowler, L. Noll, K. Vo, from memory)
    ck_assert_uint_eq(lw_stream(""), UINT32_C(0xcbf29ce4) ^ UINT32_C(0x84222325));
    // bytes above 127 count as such
    ck_assert_uint_ne(lw_stream("\xC2\xB5"), lw_stream("\x42\x35"));
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("draw bounds");
    TCase *tests = tcase_create("draw bounds");
    tcase_add_test(tests, the_highest_uniform_is_just_below_1);
    tcase_add_test(tests, the_lowest_uniform_is_above_0);
    tcase_add_test(tests, every_bit_of_an_address_changes_the_draw);
    tcase_add_test(tests, a_draw_does_not_depend_on_draws_before_it);
    tcase_add_loop_test(tests, moments_are_those_of_the_uniform_distribution_along_every_part, 0,
                        4);
    tcase_add_test(tests, pairs_and_neighbours_are_uncorrelated);
    tcase_add_test(tests, each_bit_is_one_half_of_the_time);
    tcase_add_test(tests, streams_of_many_names_do_not_collide_in_bulk);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
