// Plants to test, and second ways to compute what they do.
#ifndef LATEWOOD_TESTS_PLANTS_H
#define LATEWOOD_TESTS_PLANTS_H

#include "suite.h"

#include "base/dense.h"

#include <complex.h>
#include <latewood/plant.h>
#include <stdint.h>
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
#define REFUSED(status, message, call)                                                             \
    do {                                                                                           \
        lw_plant *made_ = NULL, **out = &made_;                                                    \
        lw_error err_ = {LW_OK, ""}, *err = &err_;                                                 \
        ck_assert_int_eq((call), (status));                                                        \
        ck_assert_str_eq(err_.text, (message));                                                    \
        ck_assert_int_eq(err_.status, (status));                                                   \
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

// Solve m x = b (n x n, row-major) in place of b, by elimination with pivots.
static inline void solve(int n, number *m, number *b)
{
    for (int c = 0; c < n; c++) {
        int pivot = c;
        for (int i = c + 1; i < n; i++)
            pivot = cabs(m[i * n + c]) > cabs(m[pivot * n + c]) ? i : pivot;
        for (int k = 0; k < n; k++) {
            number t = m[c * n + k];
            m[c * n + k] = m[pivot * n + k];
            m[pivot * n + k] = t;
        }
        number t = b[c];
        b[c] = b[pivot];
        b[pivot] = t;
        for (int i = 0; i < n; i++) {
            if (i == c)
                continue;
            number factor = m[i * n + c] / m[c * n + c];
            for (int k = c; k < n; k++)
                m[i * n + k] -= factor * m[c * n + k];
            b[i] -= factor * b[c];
        }
    }
    for (int i = 0; i < n; i++)
        b[i] /= m[i * n + i];
}

// c (s I - a)^-1 b for a row c and a column b.
static inline number resolvent(int n, const double *a, number s, const double *b, const double *c)
{
    static number m[N_MAX * N_MAX], x[N_MAX];
    number y = 0;
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            m[i * n + j] = (i == j ? s : 0) - a[i * n + j];
        x[i] = b[i];
    }
    solve(n, m, x);
    for (int i = 0; i < n; i++)
        y += c[i] * x[i];
    return y;
}

// Transfer from input j to output i at s, delays left out.
static inline number response(const lw_plant *plant, int i, int j, number s)
{
    lw_plant_view v = lw_plant_look(plant);
    double b[N_MAX];
    for (int k = 0; k < v.n_x; k++)
        b[k] = v.b[k * v.n_u + j];
    return resolvent(v.n_x, v.a, s, b, v.c + i * v.n_x) + v.d[i * v.n_u + j];
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
