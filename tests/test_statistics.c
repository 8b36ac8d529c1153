// Statistics of batches: published tables, certified data sets, and coverage by simulation.

#include "suite.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>
#include <latewood/statistics.h>
#include <string.h>

// ---- proportions

// R. Newcombe, Statistics in Medicine 17 (1998) 857-872, Table I, methods 3 and 5 (read in a copy
// of the table; the same with two functions of a statistics language).
START_TEST(proportions_match_a_published_table)
{
    static const struct {
        int64_t hits, n;
        double wilson[2], exact[2];
    } rows[] = {{81, 263, {.2553, .3662}, {.2527, .3676}},
                {15, 148, {.0624, .1605}, {.0578, .1617}},
                {0, 20, {0, .1611}, {0, .1684}},
                {1, 29, {.0061, .1718}, {.0009, .1776}}};
    for (size_t k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        lw_interval w, e;
        ck_assert(lw_proportion_wilson(rows[k].hits, rows[k].n, 0.95, LW_SIDE_BOTH, &w, NULL) == 0);
        ck_assert(lw_proportion_exact(rows[k].hits, rows[k].n, 0.95, LW_SIDE_BOTH, &e, NULL) == 0);
        // half a unit of the last printed digit
        ck_near(w.lo, rows[k].wilson[0], 5e-5, 1);
        ck_near(w.hi, rows[k].wilson[1], 5e-5, 1);
        ck_near(e.lo, rows[k].exact[0], 5e-5, 1);
        ck_near(e.hi, rows[k].exact[1], 5e-5, 1);
    }
}
END_TEST

// Worked examples of exact binomial intervals (read; printed to three digits).
START_TEST(exact_proportions_match_worked_examples)
{
    static const struct {
        int64_t hits, n;
        double lo, hi;
    } rows[] = {{57, 60, .861, .990}, {5, 5, .478, 1}, {4, 5, .284, .995}, {90, 100, .824, .951}};
    for (size_t k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        lw_interval e;
        ck_assert(lw_proportion_exact(rows[k].hits, rows[k].n, 0.95, LW_SIDE_BOTH, &e, NULL) == 0);
        ck_near(e.lo, rows[k].lo, 5.1e-4, 1);
        ck_near(e.hi, rows[k].hi, 5.1e-4, 1);
    }
    lw_interval one;
    // from memory: no failure in 100, one-sided 95 %
    ck_assert(lw_proportion_exact(0, 100, 0.95, LW_SIDE_UPPER, &one, NULL) == 0);
    ck_near(one.hi, .0295, 5e-5, 1);
    ck_assert(one.lo == 0);
}
END_TEST

// P(no hit) = (1 - p)^n and P(all hit) = p^n have closed inverses.
START_TEST(the_ends_have_closed_forms_up_to_a_hundred_million)
{
    for (double n = 10; n <= 1e8; n *= 10) {
        lw_interval none, all;
        ck_assert(lw_proportion_exact(0, (int64_t)n, 0.95, LW_SIDE_BOTH, &none, NULL) == 0);
        ck_assert(lw_proportion_exact((int64_t)n, (int64_t)n, 0.95, LW_SIDE_BOTH, &all, NULL) == 0);
        ck_near(none.hi, -lw_expm1(lw_log(0.025) / n), 1e-9, 0);    // as the header says
        ck_near(1 - all.lo, -lw_expm1(lw_log(0.025) / n), 1e-7, 0); // 1 - lo is rounded
        ck_assert(none.lo == 0 && all.hi == 1);
    }
}
END_TEST

static double tail_by_sum(int hits, int n, double p)
{
    double sum = 0, term = pow(1 - p, n);
    for (int k = 0; k <= n; k++) {
        if (k >= hits)
            sum += term;
        term *= (double)(n - k) / (k + 1) * p / (1 - p);
    }
    return sum;
}

START_TEST(tails_are_the_sums_of_their_terms)
{
    for (int n = 1; n <= 60; n += 7)
        for (int hits = 0; hits <= n + 1; hits++)
            for (double p = 0.02; p < 1; p += 0.13)
                ck_near(lw_binomial_at_least(hits, n, p), tail_by_sum(hits, n, p), 1e-12, 1e-6);
}
END_TEST

START_TEST(misuse_is_named)
{
    lw_interval out = {7, 7};
    lw_error err;
    ck_assert(lw_proportion_exact(5, 4, 0.95, LW_SIDE_BOTH, &out, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "the count is 5; permitted 0 to 4");
    ck_assert(lw_proportion_wilson(1, 4, 1, LW_SIDE_BOTH, &out, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "confidence is 1; permitted between 0 and 1");
    ck_assert(lw_rate_exact(1, 0, 0.95, LW_SIDE_BOTH, &out, &err) == LW_ERR_ARGUMENT);
    ck_assert(out.lo == 7 && out.hi == 7);
}
END_TEST

// ---- rates

// Exact bounds of a Poisson mean, 95 % (from memory of the usual tables: 0 0-3.689, 1 0.0253-5.572,
// 3 0.619-8.767, 10 4.795-18.39, 100 81.36-121.6).
START_TEST(rates_match_the_usual_table)
{
    static const struct {
        int64_t count;
        double lo, hi, last;
    } rows[] = {{0, 0, 3.689, 5e-4},
                {1, .0253, 5.572, 5e-4},
                {3, .619, 8.767, 5e-4},
                {10, 4.795, 18.39, 5e-3},
                {100, 81.36, 121.6, 5e-2}};
    for (size_t k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        lw_interval r;
        ck_assert(lw_rate_exact(rows[k].count, 2, 0.95, LW_SIDE_BOTH, &r, NULL) == 0);
        ck_near(r.lo * 2, rows[k].lo, rows[k].last, 1);
        ck_near(r.hi * 2, rows[k].hi, rows[k].last, 1);
    }
    lw_interval none;
    ck_assert(lw_rate_exact(0, 1, 0.95, LW_SIDE_UPPER, &none, NULL) == 0);
    ck_near(none.hi, -lw_log(0.05), 1e-12, 0); // exp(-x) = 0.05: the rule of three
}
END_TEST

// ---- order statistics

// S. S. Wilks, Ann. Math. Stat. 12 (1941) 91-96, as tabulated for nuclear safety (read: the rows of
// 95/95, 95/99, 95/98, 95/90 and 99.9/90; from memory: 99/95, 99/99).
START_TEST(sample_sizes_match_the_published_ones)
{
    static const struct {
        double share, confidence;
        int64_t order, n;
    } rows[] = {{.95, .95, 1, 59},  {.95, .95, 2, 93},   {.95, .95, 3, 124}, {.95, .95, 4, 153},
                {.95, .95, 5, 181}, {.95, .95, 6, 208},  {.99, .95, 1, 299}, {.99, .95, 2, 473},
                {.99, .95, 3, 628}, {.98, .95, 1, 149},  {.98, .95, 2, 236}, {.98, .95, 3, 313},
                {.98, .95, 6, 523}, {.99, .95, 6, 1049}, {.9, .95, 1, 29},   {.9, .999, 1, 66},
                {.95, .99, 1, 90},  {.99, .99, 1, 459},  {.9, .95, 2, 46},   {.99, .99, 2, 662}};
    for (size_t k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        int64_t n = 0;
        ck_assert(lw_tolerance_runs(rows[k].share, rows[k].confidence, rows[k].order, &n, NULL) ==
                  0);
        ck_assert_int_eq(n, rows[k].n);
    }
}
END_TEST

// From memory: ranks and coverage of 95 % intervals of the median, in textbooks of nonparametric
// statistics.
START_TEST(intervals_of_the_median_have_the_known_ranks)
{
    static const struct {
        int64_t n, lo, hi;
        double coverage;
    } rows[] = {{10, 2, 9, .9785}, {15, 4, 12, .9648}, {20, 6, 15, .9586}, {25, 8, 18, .9567}};
    for (size_t k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        int64_t lo, hi;
        ck_assert(lw_quantile_ranks(rows[k].n, 0.5, 0.95, LW_SIDE_BOTH, &lo, &hi, NULL) == 0);
        ck_assert_int_eq(lo, rows[k].lo);
        ck_assert_int_eq(hi, rows[k].hi);
        ck_near(lw_quantile_coverage(rows[k].n, 0.5, lo, hi), rows[k].coverage, 5e-5, 1);
    }
    ck_near(lw_quantile_coverage(100, 0.9, 85, 97), .952273, 5e-7, 1); // derived elsewhere
    int64_t lo, hi;
    ck_assert(lw_quantile_ranks(20, 0.99, 0.95, LW_SIDE_BOTH, &lo, &hi, NULL) == 0);
    ck_assert_int_eq(hi, 21); // 20 values cannot bound a 99 % quantile from above
}
END_TEST

// ---- moments

static lw_moments gathered(int n, const double *x)
{
    lw_moments m = lw_moments_none();
    for (int k = 0; k < n; k++)
        lw_moments_add(&m, x[k]);
    return m;
}

static lw_moments alternating(double first, double a, double b)
{
    lw_moments m = lw_moments_none();
    lw_moments_add(&m, first);
    for (int k = 0; k < 1000; k++)
        lw_moments_add(&m, k % 2 == 0 ? a : b);
    return m;
}

// NIST Statistical Reference Datasets, univariate: NumAcc1 to NumAcc4, certified values. The
// tolerances of 3 and 4 are those of data that are not representable, rounded to 53 bits.
START_TEST(certified_sets_are_met)
{
    lw_moments m = gathered(3, (double[]){10000001, 10000003, 10000002});
    ck_near(lw_moments_mean(&m), 10000002, 1e-15, 0);
    ck_near(lw_moments_deviation(&m), 1, 1e-15, 0);
    ck_near(lw_moments_neighbours(&m), -0.5, 1e-15, 0);
    m = alternating(1.2, 1.1, 1.3);
    ck_near(lw_moments_mean(&m), 1.2, 1e-15, 0);
    ck_near(lw_moments_deviation(&m), 0.1, 1e-15, 0);
    ck_near(lw_moments_neighbours(&m), -0.999, 1e-10, 0);
    m = alternating(1000000.2, 1000000.1, 1000000.3);
    ck_near(lw_moments_deviation(&m), 0.1, 1e-9, 0);
    ck_near(lw_moments_neighbours(&m), -0.999, 1e-9, 0);
    m = alternating(10000000.2, 10000000.1, 10000000.3);
    ck_near(lw_moments_mean(&m), 10000000.2, 1e-15, 0);
    ck_near(lw_moments_deviation(&m), 0.1, 1e-7, 0);
    ck_near(lw_moments_neighbours(&m), -0.999, 1e-7, 0);
}
END_TEST

// The hundred measured speeds of light of NIST's set Michelson, less 299 km/s, in thousandths.
static const int speeds[100] = {
    850,  740, 900, 1070, 930, 850, 950, 980, 980, 880, 1000, 980, 930, 650, 760, 810, 1000,
    1000, 960, 960, 960,  940, 960, 940, 880, 800, 850, 880,  900, 840, 830, 790, 810, 880,
    880,  830, 800, 790,  760, 800, 880, 880, 880, 860, 720,  720, 620, 860, 970, 950, 880,
    910,  850, 870, 840,  840, 850, 840, 840, 840, 890, 810,  810, 820, 800, 770, 760, 740,
    750,  760, 910, 920,  890, 860, 880, 720, 840, 850, 850,  780, 890, 840, 780, 810, 760,
    810,  790, 810, 820,  850, 870, 870, 810, 740, 810, 940,  950, 800, 810, 870};

START_TEST(measured_data_have_their_certified_moments)
{
    lw_moments m = lw_moments_none();
    for (int k = 0; k < 100; k++)
        lw_moments_add(&m, 299 + speeds[k] / 1000.0);
    ck_near(lw_moments_mean(&m), 299.8524, 1e-13, 0);
    ck_near(lw_moments_deviation(&m), .0790105478190518, 1e-13, 0);
    ck_near(lw_moments_neighbours(&m), .535199668621283, 1e-12, 0);
    ck_assert(m.lowest_at == 46 && m.highest_at == 3);
}
END_TEST

// Student's t of 0.975: 12.706 at 1, 2.262 at 9, 1.984 at 99 degrees of freedom (from memory).
START_TEST(intervals_of_means_use_the_t_distribution)
{
    lw_interval r;
    lw_moments m = gathered(2, (double[]){-1, 1}); // deviation sqrt 2, half width t
    ck_assert(lw_mean_interval(&m, 0.95, LW_SIDE_BOTH, &r, NULL) == 0);
    ck_near(r.hi, 12.706, 5e-4, 1);
    ck_assert(r.lo == -r.hi);
    double x[10];
    for (int k = 0; k < 10; k++)
        x[k] = k;
    m = gathered(10, x);
    ck_assert(lw_mean_interval(&m, 0.95, LW_SIDE_UPPER, &r, NULL) == 0);
    ck_near((r.hi - 4.5) / lw_moments_deviation(&m) * sqrt(10), 1.833, 5e-4, 1);
    ck_assert(isinf(r.lo));
}
END_TEST

// ---- coverage by simulation

#define TRIALS 4000

static double uniform(uint32_t stream, uint32_t k)
{
    return lw_draw_uniform((lw_address){2024, 1, stream, k});
}

static int hits_of(uint32_t trial, int n, double p)
{
    int hits = 0;
    for (int k = 0; k < n; k++)
        hits += uniform(1, trial * (uint32_t)n + (uint32_t)k) < p;
    return hits;
}

// Least coverage permitted at nominal 0.95: three standard errors of TRIALS trials below.
static double permitted(void)
{
    return 0.95 - 3 * sqrt(0.95 * 0.05 / TRIALS);
}

static double coverage_of_proportions(int n, double p, int wrong)
{
    int covered = 0;
    for (uint32_t t = 0; t < TRIALS; t++) {
        lw_interval r;
        int hits = hits_of(t, n, p);
        ck_assert(lw_proportion_exact(hits, n, 0.95, LW_SIDE_BOTH, &r, NULL) == LW_OK);
        if (wrong) { // the usual approximation by a normal distribution, known to cover too little
            double q = (double)hits / n, half = 1.96 * sqrt(q * (1 - q) / n);
            r = (lw_interval){q - half, q + half};
        }
        covered += r.lo <= p && p <= r.hi;
    }
    return (double)covered / TRIALS;
}

START_TEST(exact_intervals_cover_what_they_say)
{
    ck_assert(coverage_of_proportions(30, 0.05, 0) >= permitted());
    ck_assert(coverage_of_proportions(50, 0.3, 0) >= permitted());
    ck_assert(coverage_of_proportions(30, 0.05, 1) < permitted()); // the twin fails
}
END_TEST

static double coverage_of_quantiles(int shift)
{
    int64_t lo, hi;
    ck_assert(lw_quantile_ranks(60, 0.8, 0.95, LW_SIDE_BOTH, &lo, &hi, NULL) == LW_OK);
    int covered = 0;
    for (uint32_t t = 0; t < TRIALS; t++) {
        int below = 0; // of 60 uniform values, those below the quantile 0.8
        for (uint32_t k = 0; k < 60; k++)
            below += uniform(2, t * 60 + k) < 0.8;
        covered += below >= lo + shift && below < hi - shift;
    }
    return (double)covered / TRIALS;
}

START_TEST(intervals_of_quantiles_cover_what_they_say)
{
    ck_assert(coverage_of_quantiles(0) >= permitted());
    ck_assert(coverage_of_quantiles(1) < permitted()); // ranks one too near fail
}
END_TEST

static double coverage_of_rates(int side)
{
    int covered = 0;
    for (uint32_t t = 0; t < TRIALS; t++) {
        double sum = 0;
        int64_t count = -1;
        for (uint32_t k = 0; sum < 4; k++, count++) // exponential gaps: Poisson of mean 4
            sum -= lw_log(uniform(3, t * 64 + k));
        lw_interval r;
        ck_assert(lw_rate_exact(count + side, 1, 0.95, LW_SIDE_BOTH, &r, NULL) == LW_OK);
        covered += r.lo <= 4 && 4 <= r.hi;
    }
    return (double)covered / TRIALS;
}

START_TEST(intervals_of_rates_cover_what_they_say)
{
    ck_assert(coverage_of_rates(0) >= permitted());
    ck_assert(coverage_of_rates(3) < permitted()); // counts wrong by three fail
}
END_TEST

static double coverage_of_means(double shrink)
{
    int covered = 0;
    for (uint32_t t = 0; t < TRIALS; t++) {
        lw_moments m = lw_moments_none();
        for (uint32_t k = 0; k < 8; k++)
            lw_moments_add(&m, lw_normal_quantile(uniform(4, t * 8 + k)));
        lw_interval r;
        ck_assert(lw_mean_interval(&m, 0.95, LW_SIDE_BOTH, &r, NULL) == LW_OK);
        double middle = 0.5 * (r.lo + r.hi), half = 0.5 * (r.hi - r.lo) * shrink;
        covered += fabs(middle) <= half;
    }
    return (double)covered / TRIALS;
}

START_TEST(intervals_of_means_cover_what_they_say)
{
    ck_assert(coverage_of_means(1) >= permitted());
    ck_assert(coverage_of_means(1.96 / 2.365) < permitted()); // the normal quantile for Student's
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("statistics");
    TCase *tables = tcase_create("tables"), *simulated = tcase_create("coverage");
    tcase_add_test(tables, proportions_match_a_published_table);
    tcase_add_test(tables, exact_proportions_match_worked_examples);
    tcase_add_test(tables, the_ends_have_closed_forms_up_to_a_hundred_million);
    tcase_add_test(tables, tails_are_the_sums_of_their_terms);
    tcase_add_test(tables, misuse_is_named);
    tcase_add_test(tables, rates_match_the_usual_table);
    tcase_add_test(tables, sample_sizes_match_the_published_ones);
    tcase_add_test(tables, intervals_of_the_median_have_the_known_ranks);
    tcase_add_test(tables, certified_sets_are_met);
    tcase_add_test(tables, measured_data_have_their_certified_moments);
    tcase_add_test(tables, intervals_of_means_use_the_t_distribution);
    tcase_add_test(simulated, exact_intervals_cover_what_they_say);
    tcase_add_test(simulated, intervals_of_quantiles_cover_what_they_say);
    tcase_add_test(simulated, intervals_of_rates_cover_what_they_say);
    tcase_add_test(simulated, intervals_of_means_cover_what_they_say);
    tcase_set_timeout(simulated, 60);
    suite_add_tcase(suite, tables);
    suite_add_tcase(suite, simulated);
    return run_suite(suite);
}
