// Timings: each family's quantile, cdf, density and moments against one another, closed forms and
// GSL; draws by address; lists, files and compositions.

#include "suite.h"

#include "base/alloc.h"

#include <gsl/gsl_cdf.h>
#include <gsl/gsl_integration.h>
#include <latewood/timing.h>
#include <stdio.h>
#include <string.h>

#define OK(call)                                                                                   \
    do {                                                                                           \
        lw_error err_ = {0}, *e = &err_;                                                           \
        lw_status status_ = (call);                                                                \
        ck_assert_msg(status_ == LW_OK, "%s: %s", #call, err_.text);                               \
        (void)e;                                                                                   \
    } while (0)

enum { N_FAMILIES = 8 };

// One of each family with a single uniform a draw.
static lw_timing *family(int i)
{
    static const double edges[] = {4, 8, 20, 90}, weights[] = {5, 2, 1};
    lw_timing *t = NULL;
    const double none = (double)NAN;
    switch (i) {
    case 0:
        OK(lw_timing_uniform(3, 11, &t, e));
        break;
    case 1:
        OK(lw_timing_triangular(2, 3, 9, &t, e));
        break;
    case 2:
        OK(lw_timing_normal(30, 6, none, none, &t, e));
        break;
    case 3:
        OK(lw_timing_log_normal(12, 0.4, 4, 200, &t, e));
        break;
    case 4:
        OK(lw_timing_exponential(5, 11, none, &t, e));
        break;
    case 5:
        OK(lw_timing_gumbel(25, 3, none, none, &t, e));
        break;
    case 6:
        OK(lw_timing_histogram(3, edges, weights, &t, e));
        break;
    default:
        OK(lw_timing_normal(1, 2, 0, 1.5, &t, e)); // cut hard on both sides
    }
    return t;
}

// ---- every family

START_TEST(quantile_is_the_inverse_of_the_cdf)
{
    lw_timing *t = family(_i);
    double lo, hi, before = -1e300;
    lw_timing_support(t, &lo, &hi);
    for (int k = 1; k < 200; k++) {
        double u = k / 200.0, x = lw_timing_quantile(t, &u);
        ck_assert(x >= lo && x <= hi && x > before);
        ck_near(lw_timing_cdf(t, x), u, 1e-12, 1);
        before = x;
    }
    const double half = 0.5;
    ck_assert(lw_timing_median(t) == lw_timing_quantile(t, &half));
    ck_assert(lw_timing_cdf(t, lo - 1) == 0 && lw_timing_cdf(t, hi) == 1);
    lw_timing_free(t);
}
END_TEST

static double density(double x, void *t)
{
    return lw_timing_density(t, x);
}

typedef struct power {
    const lw_timing *t;
    int n;
} power;

static double weighted_power(double x, void *context)
{
    const power *p = context;
    return pow(x, p->n) * lw_timing_density(p->t, x);
}

static double integral(gsl_function f, double lo, double hi)
{
    gsl_integration_workspace *w = gsl_integration_workspace_alloc(2000);
    double value, error;
    gsl_integration_qag(&f, lo, hi, 0, 1e-11, 2000, GSL_INTEG_GAUSS61, w, &value, &error);
    gsl_integration_workspace_free(w);
    return value;
}

// GSL's adaptive integration as reference library.
START_TEST(density_integrates_to_the_cdf_and_moments_agree)
{
    lw_timing *t = family(_i);
    double lo, hi;
    lw_timing_support(t, &lo, &hi);
    for (double part = 0.1; part < 1; part += 0.2) {
        double x = lo + part * (hi - lo);
        ck_near(integral((gsl_function){density, t}, lo, x), lw_timing_cdf(t, x), 1e-7, 1);
    }
    for (int n = 1; n <= 4; n++) {
        power p = {t, n};
        ck_near(lw_timing_moment(t, n), integral((gsl_function){weighted_power, &p}, lo, hi), 1e-7,
                0);
    }
    lw_timing_free(t);
}
END_TEST

START_TEST(nodes_are_exact_for_polynomials)
{
    lw_timing *t = family(_i);
    double x[3], w[3], sum = 0;
    OK(lw_timing_nodes(t, 3, x, w, e));
    for (int i = 0; i < 3; i++)
        sum += w[i];
    ck_near(sum, 1, 1e-12, 0);
    for (int n = 1; n <= 4; n++) {
        double mean = 0;
        for (int i = 0; i < 3; i++)
            mean += w[i] * pow(x[i], n);
        ck_near(mean, lw_timing_moment(t, n), 1e-11, 0); // a hundred times what points.c states
    }
    lw_timing_free(t);
}
END_TEST

static double largest_distance(const lw_timing *of, const lw_timing *against, int n)
{
    const uint32_t stream = lw_stream("test.takes");
    static double x[4000];
    double worst = 0;
    for (int k = 0; k < n; k++)
        x[k] = lw_timing_draw(of, 7, 1, (uint32_t)k, &stream, NULL);
    for (int k = 0; k < n; k++) {
        int below = 0;
        for (int j = 0; j < n; j++)
            below += x[j] <= x[k];
        worst = fmax(worst, fabs((double)below / n - lw_timing_cdf(against, x[k])));
    }
    return worst;
}

START_TEST(draws_follow_the_cdf)
{
    enum { N = 4000 };
    lw_timing *t = family(_i), *other = NULL;
    // Kolmogorov-Smirnov: 1.95 / sqrt(n) is passed by chance once in a thousand (from memory)
    ck_assert(largest_distance(t, t, N) < 1.95 / sqrt(N));
    OK(lw_timing_affine(t, 1.1, 0, &other, e)); // ten percent off is seen
    ck_assert(largest_distance(t, other, N) > 1.95 / sqrt(N));
    lw_timing_free(t);
    lw_timing_free(other);
}
END_TEST

// ---- against GSL's untruncated families

START_TEST(wide_cuts_give_the_whole_family)
{
    lw_timing *t = NULL;
    OK(lw_timing_normal(2, 3, 2 - 3 * 8, 2 + 3 * 8, &t, e));
    for (double x = -10; x < 14; x += 0.5)
        ck_near(lw_timing_cdf(t, x), gsl_cdf_gaussian_P(x - 2, 3), 1e-13, 1);
    lw_timing_free(t);
    OK(lw_timing_exponential(1, 4, 200, &t, e));
    for (double x = 1; x < 50; x += 0.7)
        ck_near(lw_timing_cdf(t, x), gsl_cdf_exponential_P(x - 1, 4), 1e-13, 1);
    lw_timing_free(t);
    OK(lw_timing_log_normal(exp(0.5), 0.7, 0, 1e6, &t, e));
    for (double x = 0.05; x < 30; x *= 1.3)
        ck_near(lw_timing_cdf(t, x), gsl_cdf_lognormal_P(x, 0.5, 0.7), 1e-13, 1);
    lw_timing_free(t);
    OK(lw_timing_gumbel(2, 3, -20, 200, &t, e));
    for (double x = -8; x < 40; x += 0.9)
        ck_near(lw_timing_cdf(t, x), gsl_cdf_gumbel1_P(x, 1 / 3.0, exp(2 / 3.0)), 1e-13, 1);
    lw_timing_free(t);
}
END_TEST

// ---- addresses

START_TEST(a_draw_depends_on_its_address_alone)
{
    lw_timing *t = family(2);
    const uint32_t here = lw_stream("a.takes"), there = lw_stream("b.takes");
    double first = lw_timing_draw(t, 1, 2, 3, &here, NULL);
    for (uint32_t job = 0; job < 50; job++)
        lw_timing_draw(t, 1, 2, job, &there, NULL);
    ck_assert(lw_timing_draw(t, 1, 2, 3, &here, NULL) == first);
    ck_assert(lw_timing_draw(t, 1, 2, 4, &here, NULL) != first);
    ck_assert(lw_timing_draw(t, 1, 3, 3, &here, NULL) != first);
    ck_assert(lw_timing_draw(t, 2, 2, 3, &here, NULL) != first);
    ck_assert(lw_timing_draw(t, 1, 2, 3, &there, NULL) != first);
    lw_timing_free(t);
}
END_TEST

// FNV-1a over the bits of 200 draws.
static uint64_t hash_of(const lw_timing *t)
{
    const uint32_t stream[] = {lw_stream("golden"), lw_stream("golden#1"), lw_stream("golden#2")};
    double state[1] = {0};
    uint64_t hash = 14695981039346656037u;
    ck_assert(lw_timing_n_streams(t) <= 3 && lw_timing_n_state(t) <= 1);
    for (uint32_t job = 0; job < 200; job++) {
        double x = lw_timing_draw(t, 11, 5, job, stream, state);
        uint64_t bits;
        memcpy(&bits, &x, sizeof bits);
        for (int i = 0; i < 64; i += 8)
            hash = (hash ^ ((bits >> i) & 255)) * 1099511628211u;
    }
    return hash;
}

// Timings of timings, and lists.
enum { N_COMPOSED = 7 };

static lw_status composed(int i, const lw_timing *a, const lw_timing *b, lw_timing **t,
                          lw_error *err)
{
    static const double list[] = {3, 1, 2, 8};
    switch (i) {
    case 0:
        return lw_timing_sum(a, b, t, err);
    case 1:
        return lw_timing_maximum(a, b, t, err);
    case 2:
        return lw_timing_affine(a, -1.5, 40, t, err);
    case 3:
        return lw_timing_modes(a, b, 0.1, 0.3, t, err);
    case 4:
        return lw_timing_stall(a, b, 0.1, 0, 0, t, err);
    case 5:
        return lw_timing_discrete(4, list, list, t, err);
    default:
        return lw_timing_replay(4, list, 1, t, err);
    }
}

// What every build on every machine must draw: recorded from this library, the same with gcc and
// clang, optimised or not. Changing them breaks studies that were run before.
START_TEST(draws_have_the_same_bits_everywhere)
{
    static const uint64_t families[N_FAMILIES] = {
        0x7eded23d43d1cea6u, 0x3442127ef7174745u, 0x7d6669c853f39b90u, 0x5049b6a880d62f01u,
        0xf69741a99c10dbc0u, 0x0453e1a923f5865du, 0xd398649b7f18aeb4u, 0x0daba0faca1a4eaau};
    static const uint64_t compositions[N_COMPOSED] = {
        0xf26b29bdd7288222u, 0x2299eda97f1cf18du, 0xd0b287a56b90baa0u, 0x88712f1e819868d5u,
        0xe1e624a436752f5au, 0x2eed3f4370c76138u, 0x6d153fd225f24375u};
    lw_timing *a = family(0), *b = family(3);
    for (int i = 0; i < N_FAMILIES; i++) {
        lw_timing *t = family(i);
        uint64_t hash = hash_of(t);
        ck_assert_msg(hash == families[i], "family %d: 0x%016llx", i, (unsigned long long)hash);
        lw_timing_free(t);
    }
    for (int i = 0; i < N_COMPOSED; i++) {
        lw_timing *t = NULL;
        OK(composed(i, a, b, &t, e));
        uint64_t hash = hash_of(t);
        ck_assert_msg(hash == compositions[i], "composed %d: 0x%016llx", i,
                      (unsigned long long)hash);
        lw_timing_free(t);
    }
    lw_timing_free(a);
    lw_timing_free(b);
}
END_TEST

// ---- lists

START_TEST(replay_gives_its_list_in_order)
{
    const double list[] = {5, 1, 4};
    const uint32_t stream = 9;
    lw_timing *t = NULL;
    int seen = 0;
    OK(lw_timing_replay(3, list, 0, &t, e));
    for (uint32_t job = 0; job < 10; job++)
        ck_assert(lw_timing_draw(t, 1, 1, job, NULL, NULL) == list[job % 3]);
    ck_assert_int_eq(lw_timing_n_streams(t), 0);
    ck_near(lw_timing_moment(t, 2), (25 + 1 + 16) / 3.0, 1e-15, 0);
    lw_timing_free(t);
    OK(lw_timing_replay(3, list, 1, &t, e));
    for (uint64_t run = 0; run < 40; run++) {
        int start = 0;
        while (lw_timing_draw(t, 1, run, 0, &stream, NULL) != list[start])
            start++;
        seen |= 1 << start;
        for (uint32_t job = 0; job < 7; job++)
            ck_assert(lw_timing_draw(t, 1, run, job, &stream, NULL) ==
                      list[(start + (int)job) % 3]);
    }
    ck_assert_int_eq(seen, 7); // every start comes up in forty runs
    lw_timing_free(t);
}
END_TEST

START_TEST(what_has_no_weight_is_outside_the_support)
{
    const double values[] = {9, 1, 4, 0}, weights[] = {0, 1, 1, 0};
    const double edges[] = {0, 1, 3, 4, 8}, cells[] = {0, 2, 1, 0};
    double lo, hi;
    lw_timing *t = NULL;
    OK(lw_timing_discrete(4, values, weights, &t, e));
    lw_timing_support(t, &lo, &hi);
    ck_assert(lo == 1 && hi == 4 && lw_timing_cdf(t, 1) == 0.5);
    lw_timing_free(t);
    OK(lw_timing_histogram(4, edges, cells, &t, e));
    lw_timing_support(t, &lo, &hi);
    ck_assert(lo == 1 && hi == 4);
    ck_near(lw_timing_cdf(t, 2), 1 / 3.0, 1e-15, 1);
    ck_near(lw_timing_moment(t, 1), (2 * 2 + 3.5) / 3, 1e-15, 0);
    lw_timing_free(t);
}
END_TEST

START_TEST(narrow_cells_keep_their_moments)
{
    const double edges[] = {1, 1 + 0x1p-40, 1 + 0x1p-39}, weights[] = {1, 1};
    lw_timing *t = NULL;
    OK(lw_timing_histogram(2, edges, weights, &t, e));
    // the middle edge is the mean, to the last place
    ck_near(lw_timing_moment(t, 1), 1 + 0x1p-40, 4e-16, 0);
    lw_timing_free(t);
}
END_TEST

static lw_status from_file(const char *text, lw_timing **t, lw_error *err, char *path, size_t size)
{
    snprintf(path, size, "%s/timing_%d.txt", getenv("TMPDIR") != NULL ? getenv("TMPDIR") : "/tmp",
             (int)strlen(text));
    FILE *file = fopen(path, "wb");
    ck_assert_ptr_nonnull(file);
    fputs(text, file);
    fclose(file);
    lw_status status = lw_timing_replay_file(path, 1e-6, 0, t, err);
    remove(path);
    return status;
}

START_TEST(recordings_are_read_with_their_quirks)
{
    char path[300], want[400];
    lw_timing *t = NULL;
    lw_error err;
    ck_assert_int_eq(from_file("# us\r\n\r\n 12.5\r\n; note\n3e1\n\t7 \n8", &t, &err, path, 300),
                     LW_OK);
    ck_assert(lw_timing_draw(t, 1, 1, 1, NULL, NULL) == 3e1 * 1e-6);
    ck_assert(lw_timing_draw(t, 1, 1, 3, NULL, NULL) == 8 * 1e-6);
    lw_timing_free(t);
    ck_assert_int_eq(from_file("1\n2\nthree\n", &t, &err, path, 300), LW_ERR_INPUT);
    snprintf(want, sizeof want, "%s:3: \"three\" is no duration; one number a line is wanted",
             path);
    ck_assert_str_eq(err.text, want);
    ck_assert_int_eq(from_file("# nothing\n", &t, &err, path, 300), LW_ERR_INPUT);
    ck_assert_int_eq(from_file("1 2\n", &t, &err, path, 300), LW_ERR_INPUT);
    // lines that end with a carriage return alone would all be one line
    ck_assert_int_eq(from_file("1\r2\r3\n", &t, &err, path, 300), LW_ERR_INPUT);
    snprintf(want, sizeof want,
             "%s:1: a carriage return within the line; lines end with a line feed", path);
    ck_assert_str_eq(err.text, want);
    ck_assert_int_eq(from_file("inf\n", &t, &err, path, 300), LW_ERR_INPUT);
    ck_assert_int_eq(lw_timing_replay_file("/nonexistent", 1, 0, &t, &err), LW_ERR_INPUT);
    ck_assert_int_eq(lw_timing_replay_file("/", 1, 0, &t, &err), LW_ERR_INPUT);
}
END_TEST

// ---- compositions

START_TEST(modes_switch_as_often_as_stated)
{
    enum { N = 200000 };
    lw_timing *quiet = NULL, *burst = NULL, *t = NULL;
    const uint32_t stream = 5;
    double state = 0;
    int bursts = 0, entered = 0, before = 0;
    OK(lw_timing_constant(1, &quiet, e));
    OK(lw_timing_constant(9, &burst, e));
    OK(lw_timing_modes(quiet, burst, 0.02, 0.1, &t, e));
    for (uint32_t job = 0; job < N; job++) {
        int in_burst = lw_timing_draw(t, 3, 0, job, &stream, &state) == 9;
        bursts += in_burst;
        entered += in_burst && !before;
        before = in_burst;
    }
    // long-run share enter / (enter + leave) = 1/6, length of a burst 1 / leave = 10
    ck_assert(fabs((double)bursts / N - 1 / 6.0) < 0.01);
    ck_assert(fabs((double)bursts / entered - 10) < 0.5);
    ck_near(lw_timing_moment(t, 1), 1 + 8 / 6.0, 1e-15, 0);
    lw_timing_free(t);
    lw_timing_free(quiet);
    lw_timing_free(burst);
}
END_TEST

START_TEST(stalls_come_when_stated)
{
    lw_timing *usual = NULL, *stall = NULL, *t = NULL;
    const uint32_t stream = 5;
    OK(lw_timing_constant(1, &usual, e));
    OK(lw_timing_constant(50, &stall, e));
    OK(lw_timing_stall(usual, stall, 0, 7, 3, &t, e));
    for (uint32_t job = 0; job < 40; job++)
        ck_assert(lw_timing_draw(t, 1, 1, job, &stream, NULL) == (job % 7 == 3 ? 51 : 1));
    lw_timing_free(t);
    OK(lw_timing_stall(usual, stall, 0.01, 0, 0, &t, e));
    int stalls = 0;
    for (uint32_t job = 0; job < 100000; job++)
        stalls += lw_timing_draw(t, 1, 1, job, &stream, NULL) == 51;
    ck_assert(abs(stalls - 1000) < 130); // 4 standard deviations
    lw_timing_free(t);
    lw_timing_free(usual);
    lw_timing_free(stall);
}
END_TEST

START_TEST(a_stall_does_not_come_before_its_phase)
{
    lw_timing *usual = NULL, *stall = NULL, *t = NULL;
    const uint32_t stream = 5;
    OK(lw_timing_constant(1, &usual, e));
    OK(lw_timing_constant(50, &stall, e));
    OK(lw_timing_stall(usual, stall, 0, 7, 10, &t, e));
    for (uint32_t job = 0; job < 40; job++)
        ck_assert(lw_timing_draw(t, 1, 1, job, &stream, NULL) ==
                  (job >= 10 && job % 7 == 3 ? 51 : 1));
    lw_timing_free(t);
    lw_timing_free(usual);
    lw_timing_free(stall);
}
END_TEST

START_TEST(a_scaled_list_keeps_its_atoms)
{
    const double list[] = {1, 2, 4}, factors[] = {0.1, 1e-6, -2, -0.3}, shifts[] = {0.7, 5e-6, 10};
    lw_timing *a = NULL, *t = NULL;
    OK(lw_timing_discrete(3, list, NULL, &a, e));
    for (int f = 0; f < 4; f++)
        for (int s = 0; s < 3; s++) {
            OK(lw_timing_affine(a, factors[f], shifts[s], &t, e));
            for (int i = 0; i < 3; i++) {
                double at = factors[f] * list[i] + shifts[s];
                int below = factors[f] > 0 ? i + 1 : 3 - i;
                ck_near(lw_timing_cdf(t, at), below / 3.0, 1e-15, 0);
            }
            lw_timing_free(t);
        }
    lw_timing_free(a);
}
END_TEST

START_TEST(sums_maxima_and_scales_have_the_moments_they_must)
{
    lw_timing *a = family(0), *b = NULL, *t = NULL;
    double lo, hi;
    OK(lw_timing_uniform(1, 2, &b, e));
    OK(lw_timing_sum(a, b, &t, e));
    ck_near(lw_timing_moment(t, 1), 7 + 1.5, 1e-14, 0);
    double variance = lw_timing_moment(t, 2) - pow(lw_timing_moment(t, 1), 2);
    ck_near(variance, 64 / 12.0 + 1 / 12.0, 1e-11, 0);
    // a trapezoid: F(4.5) = (half a unit beyond the slope) / 8
    ck_near(lw_timing_cdf(t, 5.5), (5.5 - 4.5) / 8, 1e-9, 1);
    lw_timing_support(t, &lo, &hi);
    ck_assert(lo == 4 && hi == 13 && lw_timing_n_streams(t) == 2);
    lw_timing_free(t);
    OK(lw_timing_maximum(b, b, &t, e));
    ck_near(lw_timing_moment(t, 1), 1 + 2 / 3.0, 1e-12, 0); // the larger of two uniforms
    lw_timing_free(t);
    OK(lw_timing_affine(b, -2, 10, &t, e));
    lw_timing_support(t, &lo, &hi);
    ck_assert(lo == 6 && hi == 8);
    // the way back over the scale may be off by four units in the last place of the shift
    ck_near(lw_timing_cdf(t, 6.5), 0.25, 1e-14, 1);
    lw_timing_free(t);
    lw_timing_free(a);
    lw_timing_free(b);
}
END_TEST

// ---- refusals

START_TEST(bounds_far_away_change_nothing)
{
    lw_timing *t = NULL;
    double x[3], w[3];
    OK(lw_timing_normal(10, 1, 0, 1e6, &t, e));
    ck_near(lw_timing_moment(t, 1), 10, 1e-12, 0);
    ck_near(lw_timing_moment(t, 4), 1e4 + 6 * 1e2 + 3, 1e-11, 0); // closed form
    OK(lw_timing_nodes(t, 3, x, w, e));
    // Gauss-Hermite of three: the mean and sqrt(3) deviations to its sides; the support is 1e6 wide
    ck_near(x[0], 10 - sqrt(3), 1e-7, 0);
    ck_near(x[1], 10, 1e-7, 0);
    ck_near(x[2], 10 + sqrt(3), 1e-7, 0);
    lw_timing_free(t);
    OK(lw_timing_log_normal(10, 1.2, 0, 1e9, &t, e));
    for (int n = 1; n <= 4; n++) // closed form of the whole family
        ck_near(lw_timing_moment(t, n), pow(10, n) * exp(0.5 * n * n * 1.2 * 1.2), 1e-8, 0);
    lw_timing_free(t);
}
END_TEST

// Of the sum of uniforms on [0, 1] and [0, k], from the areas of triangles.
static double trapezoid(double x, double k)
{
    const double corner[] = {0, 1, k, 1 + k}, sign[] = {1, -1, -1, 1};
    double area = 0;
    for (int i = 0; i < 4; i++)
        area += x > corner[i] ? sign[i] * (x - corner[i]) * (x - corner[i]) / 2 : 0;
    return area / k;
}

START_TEST(sums_have_their_cdf_wherever_they_kink)
{
    const double k = sqrt(0.5); // no kink falls on a grid
    lw_timing *a = NULL, *b = NULL, *two = NULL, *three = NULL;
    OK(lw_timing_uniform(0, 1, &a, e));
    OK(lw_timing_uniform(0, k, &b, e));
    OK(lw_timing_sum(a, b, &two, e));
    for (double x = 0.013; x < 1.7; x += 0.0317) { // as timing.h states: 1e-9
        double h = 1e-3, from = fmax(x - h, 0);
        ck_near(lw_timing_cdf(two, x), trapezoid(x, k), 1e-9, 1);
        if (fabs(x - 1) > h && fabs(x - k) > h && x > h) // the density is linear there
            ck_near(lw_timing_density(two, x),
                    (trapezoid(x + h, k) - trapezoid(from, k)) / (x + h - from), 1e-9, 1);
    }
    OK(lw_timing_sum(two, a, &three, e));
    ck_near(lw_timing_cdf(three, 0.3), 0.3 * 0.3 * 0.3 / 6 / k, 1e-9, 1); // a corner of the cube
    ck_near(lw_timing_median(three), 1 + k / 2, 1e-9, 0);                 // by symmetry
    lw_timing_free(three);
    lw_timing_free(two);
    lw_timing_free(a);
    lw_timing_free(b);
}
END_TEST

START_TEST(atoms_go_through_sums_maxima_and_mixtures)
{
    const double list[] = {1, 2, 4};
    // of two throws of the list: values of the sum and nine times its cdf
    const double at[] = {2, 3, 4, 5, 6, 8}, ninths[] = {1, 3, 4, 6, 8, 9};
    const double scale = 1e-6; // rounds, so that atoms meet only nearly
    lw_timing *a = NULL, *b = NULL, *c = NULL, *t = NULL, *u = NULL;
    double x[3], w[3];
    OK(lw_timing_discrete(3, list, NULL, &a, e));
    OK(lw_timing_affine(a, scale, 0, &b, e));
    OK(lw_timing_sum(b, b, &t, e));
    for (int i = 0; i < 6; i++) {
        ck_near(lw_timing_cdf(t, at[i] * scale * (1 + 1e-12)), ninths[i] / 9, 1e-14, 1);
        ck_near(lw_timing_cdf(t, at[i] * scale * (1 - 1e-12)), i > 0 ? ninths[i - 1] / 9 : 0, 1e-14,
                1);
    }
    lw_timing_free(t);
    OK(lw_timing_maximum(b, b, &t, e)); // 1, 3 and 5 of nine
    OK(lw_timing_nodes(t, 3, x, w, e));
    for (int i = 0; i < 3; i++) {
        ck_near(x[i], list[i] * scale, 1e-12, 0);
        ck_near(w[i], (2 * i + 1) / 9.0, 1e-12, 0);
    }
    lw_timing_free(t);
    lw_timing_free(b);
    OK(lw_timing_uniform(0.3, 3.3, &b, e));
    OK(lw_timing_maximum(a, b, &t, e)); // each value held against the uniform
    double mean = 0;
    for (int i = 0; i < 3; i++)
        mean += list[i] < 3.3
                    ? ((list[i] - 0.3) * list[i] + (3.3 * 3.3 - list[i] * list[i]) / 2) / 9
                    : list[i] / 3;
    ck_near(lw_timing_moment(t, 1), mean, 1e-12, 0);
    lw_timing_free(t);
    OK(lw_timing_constant(1, &c, e));
    OK(lw_timing_modes(c, b, 0.1, 0.3, &t, e)); // 3/4 and 1/4
    OK(lw_timing_sum(t, t, &u, e));
    ck_near(lw_timing_density(u, 4), 2 * 0.75 * 0.25 / 3 + 0.0625 * (6.6 - 4) / 9, 1e-9, 1);
    // all but what two uniforms reach beyond 5 (one alone ends at 4.3)
    ck_near(lw_timing_cdf(u, 5), 1 - 0.0625 * 1.6 * 1.6 / 2 / 9, 1e-9, 1);
    lw_timing_free(u);
    lw_timing_free(t);
    lw_timing_free(a);
    lw_timing_free(b);
    lw_timing_free(c);
}
END_TEST

START_TEST(wrong_parameters_are_named)
{
    lw_timing *t = NULL;
    lw_error err;
    ck_assert_int_eq(lw_timing_uniform(3, 2, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "hi is 2; a finite number, not below lo, is wanted");
    ck_assert_int_eq(lw_timing_normal(0, -1, (double)NAN, (double)NAN, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "deviation is -1; permitted from 0 on");
    ck_assert_int_eq(lw_timing_triangular(0, 5, 2, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "mode is 5; permitted from lo to hi");
    const double weights[] = {1, -1};
    ck_assert_int_eq(lw_timing_discrete(2, weights, weights, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "weight 2 is -1; permitted from 0 on");
    ck_assert_int_eq(lw_timing_constant((double)INFINITY, &t, &err), LW_ERR_ARGUMENT);
    // cuts that leave nothing
    ck_assert_int_eq(lw_timing_normal(0, 1, 8.1, 9, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "lo is 8.1; the range holds next to no probability");
    ck_assert_int_eq(lw_timing_log_normal(1, 0.01, 0, 0.5, &t, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "hi is 0.5; the range holds next to no probability");
    // no timing is without bounds
    ck_assert_int_eq(lw_timing_uniform(-1e308, 1e308, &t, &err), LW_ERR_NOT_FINITE);
    ck_assert_str_eq(err.text,
                     "the timing reaches from -1e+308 to 1e+308 s; a finite range is wanted");
}
END_TEST

START_TEST(failed_allocations_are_told)
{
    const double list[] = {3, 1, 2};
    int failures = 0;
    for (long n = 1;; n++) {
        lw_timing *t = NULL;
        lw_error err;
        lw__alloc_fail_after(n);
        lw_status status = lw_timing_discrete(3, list, NULL, &t, &err);
        lw__alloc_fail_after(-1);
        lw_timing_free(t);
        if (status == LW_OK)
            break;
        ck_assert_int_eq(status, LW_ERR_MEMORY);
        failures++;
    }
    ck_assert_int_ge(failures, 3);
}
END_TEST

// Every composition made and asked with the n-th allocation failing, n rising until none fails.
START_TEST(compositions_bear_failed_allocations)
{
    lw_timing *a = family(0), *b = family(6);
    int failures = 0, ended = 0;
    for (long n = 1; !ended && n < 1000; n++) {
        lw_timing *t = NULL;
        lw_error err;
        double x[3], w[3], moment = 0, f = 0;
        lw__alloc_fail_after(n);
        lw_status status = composed(_i, a, b, &t, &err);
        if (status == LW_OK) {
            status = lw_timing_nodes(t, 3, x, w, &err);
            moment = lw_timing_moment(t, 2);
            f = lw_timing_cdf(t, 12.5);
        }
        lw__alloc_fail_after(-1);
        ended = status == LW_OK && !isnan(moment) && !isnan(f);
        ck_assert(status == LW_OK || status == LW_ERR_MEMORY);
        failures += !ended;
        if (t != NULL) // what was answered with a number is the true one
            ck_assert((isnan(moment) || moment == lw_timing_moment(t, 2)) &&
                      (isnan(f) || f == lw_timing_cdf(t, 12.5)));
        lw_timing_free(t);
    }
    ck_assert(ended && failures >= 2);
    lw_timing_free(a);
    lw_timing_free(b);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("timing");
    TCase *families = tcase_create("families");
    tcase_set_timeout(families, 60);
    tcase_add_loop_test(families, quantile_is_the_inverse_of_the_cdf, 0, N_FAMILIES);
    tcase_add_loop_test(families, density_integrates_to_the_cdf_and_moments_agree, 0, N_FAMILIES);
    tcase_add_loop_test(families, nodes_are_exact_for_polynomials, 0, N_FAMILIES);
    tcase_add_loop_test(families, draws_follow_the_cdf, 0, N_FAMILIES);
    tcase_add_test(families, wide_cuts_give_the_whole_family);
    suite_add_tcase(suite, families);
    TCase *rest = tcase_create("lists and compositions");
    tcase_set_timeout(rest, 60);
    tcase_add_test(rest, a_draw_depends_on_its_address_alone);
    tcase_add_test(rest, replay_gives_its_list_in_order);
    tcase_add_test(rest, what_has_no_weight_is_outside_the_support);
    tcase_add_test(rest, narrow_cells_keep_their_moments);
    tcase_add_test(rest, a_stall_does_not_come_before_its_phase);
    tcase_add_test(rest, a_scaled_list_keeps_its_atoms);
    tcase_add_test(rest, recordings_are_read_with_their_quirks);
    tcase_add_test(rest, modes_switch_as_often_as_stated);
    tcase_add_test(rest, stalls_come_when_stated);
    tcase_add_test(rest, sums_maxima_and_scales_have_the_moments_they_must);
    tcase_add_test(rest, bounds_far_away_change_nothing);
    tcase_add_test(rest, sums_have_their_cdf_wherever_they_kink);
    tcase_add_test(rest, atoms_go_through_sums_maxima_and_mixtures);
    tcase_add_test(rest, wrong_parameters_are_named);
    tcase_add_test(rest, failed_allocations_are_told);
    tcase_add_test(rest, draws_have_the_same_bits_everywhere);
    tcase_add_loop_test(rest, compositions_bear_failed_allocations, 0, N_COMPOSED);
    suite_add_tcase(suite, rest);
    return run_suite(suite);
}
