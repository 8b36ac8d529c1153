// Draws by address: known answers of the generator, addresses, uniforms.

#include "suite.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>

#include <stdint.h>

// J. Salmon, M. Moraes, R. Dror, D. Shaw, Random123, file tests/kat_vectors: philox4x32, 10 rounds
static const struct {
    uint32_t counter[4], key[2], out[4];
} known[] = {
    {{0, 0, 0, 0}, {0, 0}, {0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8}},
    {{0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff},
     {0xffffffff, 0xffffffff},
     {0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd}},
    {{0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344},
     {0xa4093822, 0x299f31d0},
     {0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1}},
};

START_TEST(known_answers_are_met)
{
    for (int i = 0; i < 3; i++) {
        uint32_t out[4];
        lw_philox4x32_10(known[i].counter, known[i].key, out);
        for (int k = 0; k < 4; k++)
            ck_assert_uint_eq(out[k], known[i].out[k]);
    }
}
END_TEST

// C++26, std::philox4x32: default seed 20111115, the 10000th output is 1955073260. Its counter
// counts up from 0 and its key is the seed, four outputs a block.
START_TEST(the_ten_thousandth_output_of_the_standard_engine)
{
    uint32_t out[4];
    const uint32_t counter[4] = {9999 / 4, 0, 0, 0}, key[2] = {20111115, 0};
    lw_philox4x32_10(counter, key, out);
    ck_assert_uint_eq(out[9999 % 4], 1955073260);
}
END_TEST

START_TEST(an_address_is_laid_into_the_counter_low_word_first)
{
    lw_address at = {UINT64_C(0x0123456789abcdef), UINT64_C(0xfedcba9876543210), 0x11223344, 7};
    const uint32_t counter[4] = {7, 0x11223344, 0x76543210, 0xfedcba98},
                   key[2] = {0x89abcdef, 0x01234567};
    uint32_t out[4];
    double u[2];
    lw_philox4x32_10(counter, key, out);
    lw_draw_pair(at, u);
    ck_assert(u[0] == ((double)(((uint64_t)out[1] << 32 | out[0]) >> 11) + 0.5) * 0x1p-53);
    ck_assert(u[1] == ((double)(((uint64_t)out[3] << 32 | out[2]) >> 11) + 0.5) * 0x1p-53);
    ck_assert(lw_draw_uniform(at) == u[0]);
}
END_TEST

static double spread(uint32_t stream, int n, double *mean, double *least, double *most)
{
    double sum = 0, square = 0;
    *least = 1;
    *most = 0;
    for (int k = 0; k < n; k++) {
        double u = lw_draw_uniform((lw_address){12, 3, stream, (uint32_t)k});
        sum += u;
        square += u * u;
        *least = u < *least ? u : *least;
        *most = u > *most ? u : *most;
    }
    *mean = sum / n;
    return square / n - *mean * *mean;
}

START_TEST(uniforms_fill_the_open_interval)
{
    double mean, least, most;
    double variance = spread(lw_stream("link.takes"), 200000, &mean, &least, &most);
    ck_assert(least > 0 && least < 1e-4 && most < 1 && most > 1 - 1e-4);
    ck_assert(fabs(mean - 0.5) < 4 * sqrt(1 / 12.0 / 200000)); // 4 standard errors
    ck_assert(fabs(variance - 1 / 12.0) < 4 * sqrt(1 / 180.0 / 200000));
    // a generator off by a hundredth would be seen
    ck_assert(fabs(mean + 0.01 - 0.5) > 4 * sqrt(1 / 12.0 / 200000));
}
END_TEST

START_TEST(streams_are_hashes_of_whole_names)
{
    // FNV-1a 64 of "a" is af63dc4c8601ec8c (G. Fowler, L. Noll, K. Vo, from memory)
    ck_assert_uint_eq(lw_stream("a"), UINT32_C(0xaf63dc4c) ^ UINT32_C(0x8601ec8c));
    ck_assert_uint_ne(lw_stream("link.takes"), lw_stream("link.take"));
    ck_assert_uint_ne(lw_stream("ab"), lw_stream("ba"));
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("draw");
    TCase *tests = tcase_create("draw");
    tcase_add_test(tests, known_answers_are_met);
    tcase_add_test(tests, the_ten_thousandth_output_of_the_standard_engine);
    tcase_add_test(tests, an_address_is_laid_into_the_counter_low_word_first);
    tcase_add_test(tests, uniforms_fill_the_open_interval);
    tcase_add_test(tests, streams_are_hashes_of_whole_names);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
