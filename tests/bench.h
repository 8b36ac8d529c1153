// What measurements share: a clock, interleaved rounds, medians, one line a result.
#ifndef LATEWOOD_TESTS_BENCH_H
#define LATEWOOD_TESTS_BENCH_H

#include <stdio.h>
#include <stdlib.h>
#include <time.h>

#define BENCH_ROUNDS 9

static inline double bench_now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return 1e9 * (double)t.tv_sec + (double)t.tv_nsec;
}

static inline int bench_by_size(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static inline double bench_median(double *times)
{
    qsort(times, BENCH_ROUNDS, sizeof *times, bench_by_size);
    return times[BENCH_ROUNDS / 2];
}

// Both in turn, round by round, so that a disturbance meets both; each returns a number that
// depends on its work. Prints the ratio of the medians and the nanoseconds a step.
static inline void bench_pair(const char *name, long n, double (*ours)(long), double (*plain)(long))
{
    double a[BENCH_ROUNDS], b[BENCH_ROUNDS], x = 0, y = 0;
    for (int round = 0; round < BENCH_ROUNDS; round++) {
        double t0 = bench_now();
        x = ours(n);
        double t1 = bench_now();
        y = plain(n);
        double t2 = bench_now();
        a[round] = (t1 - t0) / (double)n;
        b[round] = (t2 - t1) / (double)n;
    }
    double own = bench_median(a), base = bench_median(b);
    printf(
        "bench %s ratio %.2f   (%.2f ns against %.2f ns a period; they end at %.12g and %.12g)\n",
        name, own / base, own, base, x, y);
    fflush(stdout);
}

#endif
