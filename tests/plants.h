// Plants to test, and second ways to compute what they do.
#ifndef LATEWOOD_TESTS_PLANTS_H
#define LATEWOOD_TESTS_PLANTS_H

#include "suite.h"

#include "base/dense.h"

#include <complex.h>
#include <latewood/plant.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>

#define N_MAX LW_PLANT_MAX_STATES

typedef double complex number;

// The plant made by a call that takes `out` and `err` last.
#define MADE(plant, call)                                                                          \
    do {                                                                                           \
        lw_plant *made_ = NULL, **out = &made_;                                                    \
        lw_error err_ = {LW_OK, ""}, *err = &err_;                                                 \
        ck_assert_msg((call) == LW_OK, "%s: %s", #call, err_.text);                                \
        (plant) = made_;                                                                           \
    } while (0)

// The call fails with this status and message, and leaves `out` alone.
#define REFUSED(code, message, call)                                                               \
    do {                                                                                           \
        lw_plant *made_ = NULL, **out = &made_;                                                    \
        lw_error err_ = {LW_OK, ""}, *err = &err_;                                                 \
        ck_assert_int_eq((call), (code));                                                          \
        ck_assert_str_eq(err_.text, (message));                                                    \
        ck_assert_int_eq(err_.status, (code));                                                     \
        ck_assert_ptr_null(made_);                                                                 \
    } while (0)

static inline void free_plants(int n, lw_plant *const *plants)
{
    for (int i = 0; i < n; i++)
        lw_plant_free(plants[i]);
}

// Uniform in [-1, 1): splitmix64 (Steele, Lea, Flood 2014).
static inline double uniform(uint64_t *seed)
{
    uint64_t z = (*seed += UINT64_C(0x9e3779b97f4a7c15));
    z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
    return (double)((z ^ (z >> 31)) >> 11) * 0x1p-52 - 1;
}

static inline int below(uint64_t *seed, int n)
{
    int k = (int)((uniform(seed) + 1) / 2 * n);
    return k < n ? k : n - 1;
}

// Complex numbers in double-double, so that what a comparison shows is the plant, not the test.
typedef struct wide {
    lw__dd re, im;
} wide;

static inline wide wide_of(number v)
{
    return (wide){lw__dd_from_double(creal(v)), lw__dd_from_double(cimag(v))};
}

static inline number narrow(wide v)
{
    return lw__dd_to_double(v.re) + I * lw__dd_to_double(v.im);
}

static inline wide wide_sub(wide a, wide b)
{
    return (wide){lw__dd_sub(a.re, b.re), lw__dd_sub(a.im, b.im)};
}

static inline wide wide_mul(wide a, wide b)
{
    return (wide){lw__dd_sub(lw__dd_mul(a.re, b.re), lw__dd_mul(a.im, b.im)),
                  lw__dd_add(lw__dd_mul(a.re, b.im), lw__dd_mul(a.im, b.re))};
}

static inline wide wide_div(wide a, wide b)
{
    lw__dd size = lw__dd_add(lw__dd_mul(b.re, b.re), lw__dd_mul(b.im, b.im));
    wide c = wide_mul(a, (wide){b.re, lw__dd_neg(b.im)});
    return (wide){lw__dd_div(c.re, size), lw__dd_div(c.im, size)};
}

static inline void swap_wide(wide *a, wide *b)
{
    wide t = *a;
    *a = *b;
    *b = t;
}

// Solve m x = b (n x n, row-major) in place of b, by elimination with pivots.
static inline void solve(int n, wide *m, wide *b)
{
    for (int c = 0; c < n; c++) {
        int pivot = c;
        for (int i = c + 1; i < n; i++)
            pivot = cabs(narrow(m[i * n + c])) > cabs(narrow(m[pivot * n + c])) ? i : pivot;
        for (int k = 0; k < n; k++)
            swap_wide(&m[c * n + k], &m[pivot * n + k]);
        swap_wide(&b[c], &b[pivot]);
        for (int i = 0; i < n; i++) {
            if (i == c)
                continue;
            wide factor = wide_div(m[i * n + c], m[c * n + c]);
            for (int k = c; k < n; k++)
                m[i * n + k] = wide_sub(m[i * n + k], wide_mul(factor, m[c * n + k]));
            b[i] = wide_sub(b[i], wide_mul(factor, b[c]));
        }
    }
    for (int i = 0; i < n; i++)
        b[i] = wide_div(b[i], m[i * n + i]);
}

// x = (s I - a)^-1 b for a column b.
static inline void resolve(int n, const double *a, number s, const double *b, wide *x)
{
    static wide m[N_MAX * N_MAX];
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            m[i * n + j] = wide_sub(wide_of(i == j ? s : 0), wide_of(a[i * n + j]));
        x[i] = wide_of(b[i]);
    }
    solve(n, m, x);
}

// c (s I - a)^-1 b + d for a row c and a column b.
static inline number resolvent(int n, const double *a, number s, const double *b, const double *c,
                               double d)
{
    wide x[N_MAX], minus_y = wide_of(-d);
    resolve(n, a, s, b, x);
    for (int i = 0; i < n; i++)
        minus_y = wide_sub(minus_y, wide_mul(wide_of(c[i]), x[i]));
    return -narrow(minus_y);
}

// Transfer from input j to output i at s, delays left out.
static inline number response(const lw_plant *plant, int i, int j, number s)
{
    lw_plant_view v = lw_plant_look(plant);
    double b[N_MAX] = {0};
    for (int k = 0; k < v.n_x; k++)
        b[k] = v.b[k * v.n_u + j];
    return resolvent(v.n_x, v.a, s, b, v.c + i * v.n_x, v.d[i * v.n_u + j]);
}

static inline double off(number got, number want)
{
    return cabs(got - want) / cabs(want);
}

#define ck_response(got, want, tolerance)                                                          \
    do {                                                                                           \
        number got_ = (got), want_ = (want);                                                       \
        ck_assert_msg(off(got_, want_) <= (tolerance), "%s is %.17g%+.17gi, wanted %.17g%+.17gi",  \
                      #got, creal(got_), cimag(got_), creal(want_), cimag(want_));                 \
    } while (0)

// A plant sampled with a zero-order hold: x+ = f x + g u.
typedef struct sampled {
    int n, m;
    lw__dd f[N_MAX * N_MAX], g[N_MAX * LW_PLANT_MAX_PORTS];
} sampled;

// exp of [A B; 0 0] h in double-double.
static inline void sample(const lw_plant *plant, double h, sampled *out)
{
    static lw__dd m[(N_MAX + LW_PLANT_MAX_PORTS) * (N_MAX + LW_PLANT_MAX_PORTS)],
        e[(N_MAX + LW_PLANT_MAX_PORTS) * (N_MAX + LW_PLANT_MAX_PORTS)];
    lw_plant_view v = lw_plant_look(plant);
    int n = v.n_x, size = v.n_x + v.n_u;
    memset(m, 0, sizeof m);
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            m[i * size + j] = lw__dd_from_double(v.a[i * n + j]);
        for (int j = 0; j < v.n_u; j++)
            m[i * size + n + j] = lw__dd_from_double(v.b[i * v.n_u + j]);
    }
    ck_assert_int_eq(lw__dense_exp_dd(size, m, lw__dd_from_double(h), e), LW_OK);
    out->n = n;
    out->m = v.n_u;
    for (int i = 0; i < n; i++) {
        memcpy(out->f + i * n, e + i * size, sizeof(lw__dd) * (size_t)n);
        memcpy(out->g + i * v.n_u, e + i * size + n, sizeof(lw__dd) * (size_t)v.n_u);
    }
}

// Output i of the plant at time h, from rest, for a step of input j.
static inline double step_response(const lw_plant *plant, int i, int j, double h)
{
    static sampled s;
    lw_plant_view v = lw_plant_look(plant);
    sample(plant, h, &s);
    lw__dd y = lw__dd_from_double(v.d[i * v.n_u + j]);
    for (int k = 0; k < v.n_x; k++)
        y = lw__dd_add(y, lw__dd_mul_double(s.g[k * v.n_u + j], v.c[i * v.n_x + k]));
    return lw__dd_to_double(y);
}

#endif
