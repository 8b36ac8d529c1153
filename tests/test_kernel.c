// Propagation of linear groups against transitions formed in double-double for the very interval,
// and against closed forms.

#include "suite.h"

#include "base/alloc.h"
#include "base/dd.h"
#include "base/dense.h"
#include "run/kernel.h"

#include <string.h>

#define MAX_N 6

typedef struct system {
    const char *name;
    int n;
    double a[MAX_N * MAX_N], b[MAX_N];
    double reach; // [s]
    double tolerance;
} system_of;

// The last two: far apart poles need the ladder; 1e-9 is the contract there.
static const system_of systems[] = {
    {"integrator", 1, {0}, {250}, 1e-4, 1e-14},
    {"lag", 1, {-300}, {300}, 1e-3, 1e-14},
    {"unstable", 1, {40}, {2}, 5e-3, 1e-14},
    {"double integrator", 2, {0, 1, 0, 0}, {0, 1}, 1e-3, 1e-14},
    {"underdamped", 2, {0, 1, -1e6, -20}, {0, 1e6}, 2e-3, 1e-13},
    {"defective, four equal poles",
     4,
     {-50, 1, 0, 0, 0, -50, 1, 0, 0, 0, -50, 1, 0, 0, 0, -50},
     {0, 0, 0, 1},
     1e-2,
     1e-14},
    {"flexible",
     6,
     {-667, -61, 0,      0,   0,    0, 786, -88, -1.14e6, 86, 0, 0,  0, 1, 0, -1, 0,   0,
      0,    13,  1.78e5, -14, -9e4, 1, 0,   0,   0,       1,  0, -1, 0, 0, 0, 2,  8e4, -3},
     {555, 0, 0, 0, 0, 0},
     5e-5,
     1e-13},
    {"far apart, diagonal", 2, {-1, 0, 0, -1e6}, {1, 1e6}, 1e-3, 1e-12},
    {"far apart, companion", 2, {-1000001, -1e6, 1, 0}, {1, 0}, 1e-3, 1e-9},
};
enum { N_SYSTEMS = sizeof systems / sizeof systems[0] };

static lw__dd seconds(lw_tick t)
{
    return lw__dd_of_ratio((double)t, 1e12);
}

// exp([A B; 0 0] h) in double-double, applied to [x; u].
static void reference(const system_of *s, lw_tick h, const double *x, double u, double *out)
{
    int n = s->n, size = n + 1;
    lw__dd m[(MAX_N + 1) * (MAX_N + 1)] = {{0, 0}}, e[(MAX_N + 1) * (MAX_N + 1)];
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            m[i * size + j] = lw__dd_from_double(s->a[i * n + j]);
        m[i * size + n] = lw__dd_from_double(s->b[i]);
    }
    ck_assert_int_eq(lw__dense_exp_dd(size, m, seconds(h), e), LW_OK);
    for (int i = 0; i < n; i++) {
        lw__dd sum = lw__dd_mul_double(e[i * size + n], u);
        for (int j = 0; j < n; j++)
            sum = lw__dd_add(sum, lw__dd_mul_double(e[i * size + j], x[j]));
        out[i] = lw__dd_to_double(sum);
    }
}

typedef struct built {
    lw__arena *arena;
    lw__kernel kernel;
    lw_tick reach;
} built;

static built build(const system_of *s)
{
    built k = {lw__arena_new(), {0}, (lw_tick)(s->reach * 1e12 + 0.5)};
    lw_error err;
    lw_status status =
        lw__kernel_build(k.arena, s->n, 1, s->a, s->b, k.reach, 1, &k.reach, &k.kernel, &err);
    ck_assert_msg(status == LW_OK, "%s", err.text);
    return k;
}

static double worst_ratio(const system_of *s, const double *got, const double *want,
                          const double *scale)
{
    double worst = 0;
    for (int i = 0; i < s->n; i++)
        worst = fmax(worst, fabs(got[i] - want[i]) / scale[i]);
    return worst;
}

// One change of the input on the way, at many places; each state on the scale it reaches.
START_TEST(value_agrees_with_extended_precision)
{
    const system_of *s = &systems[_i];
    built k = build(s);
    double x[MAX_N], scale[MAX_N], work[200], got[MAX_N], want[MAX_N], middle[MAX_N];
    for (int i = 0; i < s->n; i++)
        x[i] = 0.3 - 0.11 * i;
    for (int i = 0; i < s->n; i++)
        scale[i] = fabs(x[i]);
    double u0 = 0.7, u1 = -1.9, worst = 0;
    for (int pass = 0; pass < 2; pass++) // the first pass finds the scales
        for (int part = 0; part <= 40; part++) {
            lw_tick now = k.reach * (part + 1) / 41, at = now * ((part * 7) % 41) / 41;
            const int64_t tick = at, channel = 0;
            const double du = u1 - u0, u = u0;
            lw__changes c = {1, &tick, &channel, &du};
            reference(s, at, x, u0, middle);
            reference(s, now - at, middle, u1, want);
            lw__kernel_value(&k.kernel, 0, x, &u, &c, now, got, work);
            for (int i = 0; i < s->n; i++)
                scale[i] = fmax(scale[i], fabs(want[i]));
            if (pass == 1)
                worst = fmax(worst, worst_ratio(s, got, want, scale));
        }
    ck_assert_msg(worst <= s->tolerance, "%s: %.3g", s->name, worst);
    lw__arena_free(k.arena);
}
END_TEST

START_TEST(advance_gives_the_bytes_of_value)
{
    const system_of *s = &systems[_i];
    built k = build(s);
    double work[200], got[MAX_N];
    for (int part = 1; part <= 16; part++) {
        double x[MAX_N] = {1, 2, 3, 4, 5, 6}, u = 0.5;
        lw_tick now = k.reach * part / 16;
        const int64_t tick[2] = {now / 3, now / 2}, channel[2] = {0, 0};
        const double du[2] = {0.25, -2};
        lw__changes c = {2, tick, channel, du};
        lw__kernel_value(&k.kernel, 0, x, &u, &c, now, got, work);
        lw__kernel_advance(&k.kernel, 0, x, &u, &c, now, work);
        ck_assert(memcmp(x, got, sizeof(double) * (size_t)s->n) == 0);
    }
    lw__arena_free(k.arena);
}
END_TEST

START_TEST(lag_follows_its_closed_form)
{
    built k = build(&systems[1]);
    double x = 0.2, u = 1.5, work[64], got;
    lw__changes none = {0, NULL, NULL, NULL};
    for (int part = 1; part <= 100; part++) {
        lw_tick now = k.reach * part / 100;
        lw__kernel_value(&k.kernel, 0, &x, &u, &none, now, &got, work);
        double decay = exp(-300 * (double)now * 1e-12);
        ck_near(got, decay * x + (1 - decay) * u, 4e-16, 1); // two roundings of numbers near 1
    }
    lw__arena_free(k.arena);
}
END_TEST

// The comparison above must be able to fail: one unit in the ninth digit of A is seen.
START_TEST(a_slightly_wrong_plant_is_told_apart)
{
    system_of wrong = systems[4];
    built k = build(&systems[4]);
    double x[2] = {1, 0}, u = 0, work[64], got[2], want[2];
    lw__changes none = {0, NULL, NULL, NULL};
    wrong.a[2] *= 1 + 1e-9;
    lw__kernel_value(&k.kernel, 0, x, &u, &none, k.reach, got, work);
    reference(&wrong, k.reach, x, u, want);
    ck_assert(fabs(got[0] - want[0]) > 1e-12);
    lw__arena_free(k.arena);
}
END_TEST

START_TEST(failed_allocations_leave_nothing_behind)
{
    lw_error err;
    lw_tick reach = 1000000;
    int failures = 0;
    for (long n = 1;; n++) {
        lw__kernel kernel;
        lw__alloc_fail_after(n);
        lw__arena *arena = lw__arena_new();
        lw_status status = LW_ERR_MEMORY;
        if (arena != NULL)
            status = lw__kernel_build(arena, 4, 1, systems[5].a, systems[5].b, reach, 1, &reach,
                                      &kernel, &err);
        lw__alloc_fail_after(-1);
        lw__arena_free(arena);
        if (status == LW_OK)
            break;
        ck_assert_int_eq(status, LW_ERR_MEMORY);
        failures++;
    }
    ck_assert_int_gt(failures, 5);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("kernel");
    TCase *tests = tcase_create("propagation");
    tcase_add_loop_test(tests, value_agrees_with_extended_precision, 0, N_SYSTEMS);
    tcase_add_loop_test(tests, advance_gives_the_bytes_of_value, 0, N_SYSTEMS);
    tcase_add_test(tests, lag_follows_its_closed_form);
    tcase_add_test(tests, a_slightly_wrong_plant_is_told_apart);
    tcase_add_test(tests, failed_allocations_leave_nothing_behind);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
