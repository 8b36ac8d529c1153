// Plants fitted to step responses: known plants come back, exactly from exact data and within the
// standard errors from noisy ones. Responses are computed here from partial fractions with complex
// numbers, not from the fit's own formulas.

#include "plants.h"

#include <complex.h>
#include <latewood/draw.h>
#include <latewood/elementary.h>
#include <latewood/fit.h>

#define N 400

typedef struct known {
    lw_fit_kind kind;
    double gain, constant, frequency, damping, delay;
} known;

static const known plants[] = {
    {LW_FIT_FIRST_ORDER, 2.5, 4e-3, 0, 0, 0},
    {LW_FIT_FIRST_ORDER_DELAY, -0.8, 6e-3, 0, 0, 2.5e-3},
    {LW_FIT_SECOND_ORDER, 1.2, 0, 400, 0.15, 0},
    {LW_FIT_SECOND_ORDER, 1.2, 0, 400, 0.75, 0},
    {LW_FIT_SECOND_ORDER, 30, 0, 700, 2.2, 0},
    {LW_FIT_SECOND_ORDER_DELAY, 1, 0, 500, 0.4, 3e-3},
    {LW_FIT_SECOND_ORDER_DELAY, 1, 0, 900, 1.6, 1e-3},
    {LW_FIT_INTEGRATOR, 120, 0, 0, 0, 0},
    {LW_FIT_INTEGRATOR_DELAY, 120, 0, 0, 0, 4e-3},
    {LW_FIT_INTEGRATOR_LAG, -7, 5e-3, 0, 0, 0},
    {LW_FIT_INTEGRATOR_LAG_DELAY, 7, 5e-3, 0, 0, 2e-3},
};
#define N_PLANTS ((int)(sizeof plants / sizeof *plants))

// ---- data

static double unit_response(const known *k, double t)
{
    if (t <= 0)
        return 0;
    switch (k->kind) {
    case LW_FIT_FIRST_ORDER:
    case LW_FIT_FIRST_ORDER_DELAY:
        return -expm1(-t / k->constant);
    case LW_FIT_INTEGRATOR:
    case LW_FIT_INTEGRATOR_DELAY:
        return t;
    case LW_FIT_INTEGRATOR_LAG:
    case LW_FIT_INTEGRATOR_LAG_DELAY:
        return t + k->constant * expm1(-t / k->constant);
    default:
        break;
    }
    double complex root = csqrt(k->damping * k->damping - 1);
    double complex a = k->frequency * (-k->damping + root), b = k->frequency * (-k->damping - root);
    return creal(1 + (b * cexp(a * t) - a * cexp(b * t)) / (a - b));
}

typedef struct rows {
    double time[N], value[N];
} rows;

static const double at = 0.01, input = 2, offset = 0.3;

// Rows each 0.1 ms from 0 on, with normal noise of a deviation.
static rows response_of(const known *k, double deviation, uint64_t seed)
{
    rows r;
    for (int i = 0; i < N; i++) {
        lw_address where = {seed, 0, lw_stream("noise of a measurement"), (uint32_t)i};
        r.time[i] = 1e-4 * i;
        r.value[i] = offset + k->gain * input * unit_response(k, r.time[i] - at - k->delay) +
                     deviation * lw_normal_quantile(lw_draw_uniform(where));
    }
    return r;
}

static double truth(const known *k, int which)
{
    const double values[] = {offset, k->gain, k->constant, k->frequency, k->damping, k->delay};
    return values[which];
}

// Peak of the noiseless response, for the size of noise.
static double size_of(const known *k)
{
    rows r = response_of(k, 0, 0);
    double most = 0;
    for (int i = 0; i < N; i++)
        most = fmax(most, fabs(r.value[i] - offset));
    return most;
}

// ---- what comes back

START_TEST(exact_responses_give_the_plant_back)
{
    const known *k = &plants[_i];
    rows r = response_of(k, 0, 0);
    lw_fit fit;
    lw_error err = {LW_OK, ""};
    ck_assert_msg(lw_fit_step(k->kind, N, r.time, r.value, input, at, &fit, &err) == LW_OK, "%s",
                  err.text);
    for (int w = 0; w < LW_N_FIT_PARAMETERS; w++)
        if (!isnan(fit.value[w]))
            ck_near(fit.value[w], truth(k, w), 1e-6, 1e-9); // six digits are kept
    ck_near(fit.fit, 1, 1e-6, 0);
    double model[N];
    lw_fit_response(&fit, input, at, N, r.time, model);
    for (int i = 0; i < N; i++)
        ck_assert(fabs(model[i] - r.value[i]) < 2e-5 * size_of(k)); // of six digits
}
END_TEST

// Noise of 1 %: over 40 draws each parameter lies within two standard errors about 38 times
// (binomial: fewer than 32 has odds below 1e-3), and never beyond five.
START_TEST(noisy_responses_give_it_within_the_standard_errors)
{
    const known *k = &plants[_i];
    double noise = 0.01 * size_of(k);
    int within[LW_N_FIT_PARAMETERS] = {0}, n = 40;
    for (int seed = 1; seed <= n; seed++) {
        rows r = response_of(k, noise, (uint64_t)seed);
        lw_fit fit;
        lw_error err = {LW_OK, ""};
        ck_assert_msg(lw_fit_step(k->kind, N, r.time, r.value, input, at, &fit, &err) == LW_OK,
                      "%s", err.text);
        for (int w = 0; w < LW_N_FIT_PARAMETERS; w++) {
            if (isnan(fit.value[w]))
                continue;
            double off = fabs(fit.value[w] - truth(k, w));
            within[w] += off <= 2 * fit.error[w];
            ck_assert_msg(off <= 5 * fit.error[w], "%s: %g, error %g",
                          lw_fit_parameter_words((lw_fit_parameter)w), off, fit.error[w]);
        }
        ck_near(fit.residual_rms, noise, 0.2, 0); // sqrt(1 / (2 N)) is 3.5 %: six of them
    }
    for (int w = 0; w < LW_N_FIT_PARAMETERS; w++)
        ck_assert_msg(within[w] == 0 || within[w] >= 32, "parameter %d: %d", w, within[w]);
}
END_TEST

// The twin: a plant of another kind is not found, and the fit tells.
START_TEST(a_wrong_kind_fits_worse)
{
    static const known late = {LW_FIT_FIRST_ORDER_DELAY, 1, 5e-3, 0, 0, 4e-3};
    rows r = response_of(&late, 0.002, 7);
    lw_fit right, wrong;
    lw_error err = {LW_OK, ""};
    ck_assert(lw_fit_step(late.kind, N, r.time, r.value, input, at, &right, &err) == LW_OK);
    ck_assert(lw_fit_step(LW_FIT_FIRST_ORDER, N, r.time, r.value, input, at, &wrong, &err) ==
              LW_OK);
    ck_assert(right.fit > 0.99 && wrong.fit < 0.9);
    int t = LW_FIT_TIME_CONSTANT;
    ck_assert(fabs(wrong.value[t] - late.constant) > 5 * wrong.error[t]);
}
END_TEST

START_TEST(fits_are_rounded_and_repeat)
{
    rows r = response_of(&plants[3], 0.01, 3);
    lw_fit one, other;
    lw_error err = {LW_OK, ""};
    ck_assert(lw_fit_step(plants[3].kind, N, r.time, r.value, input, at, &one, &err) == LW_OK);
    ck_assert(lw_fit_step(plants[3].kind, N, r.time, r.value, input, at, &other, &err) == LW_OK);
    for (int w = 0; w < LW_N_FIT_PARAMETERS; w++) {
        char text[40];
        if (isnan(one.value[w]))
            continue;
        ck_assert(one.value[w] == other.value[w] && one.error[w] == other.error[w]);
        snprintf(text, sizeof text, "%.6g", one.value[w]);
        ck_assert(strtod(text, NULL) == one.value[w]);
    }
}
END_TEST

// Fit and R squared, by their formulas, on rows that the model does not reach.
START_TEST(measures_of_fit_are_as_stated)
{
    rows r = response_of(&plants[0], 0.3, 5);
    double model[N], mean = 0, square = 0, rest = 0;
    lw_fit fit;
    lw_error err = {LW_OK, ""};
    ck_assert(lw_fit_step(plants[0].kind, N, r.time, r.value, input, at, &fit, &err) == LW_OK);
    lw_fit_response(&fit, input, at, N, r.time, model);
    for (int i = 0; i < N; i++)
        mean += r.value[i] / N;
    for (int i = 0; i < N; i++) {
        square += (r.value[i] - mean) * (r.value[i] - mean);
        rest += (r.value[i] - model[i]) * (r.value[i] - model[i]);
    }
    ck_near(fit.fit, 1 - sqrt(rest / square), 1e-5, 0); // six digits each
    ck_near(fit.r_squared, 1 - rest / square, 1e-5, 0);
    ck_near(fit.residual_rms, sqrt(rest / N), 1e-5, 0);
}
END_TEST

START_TEST(a_fitted_plant_is_that_plant)
{
    for (int k = 0; k < N_PLANTS; k++) {
        rows r = response_of(&plants[k], 0, 0);
        lw_fit fit;
        lw_plant *plant = NULL;
        lw_error err = {LW_OK, ""};
        ck_assert(lw_fit_step(plants[k].kind, N, r.time, r.value, input, at, &fit, &err) == LW_OK);
        ck_assert(lw_fit_plant(&fit, &plant, &err) == LW_OK);
        lw_plant_view view = lw_plant_look(plant);
        ck_assert_int_eq(view.n_u, 1);
        ck_assert_int_eq(view.n_y, 1);
        int order = plants[k].frequency > 0 ? 2 : plants[k].constant > 0 ? 1 : 0;
        ck_assert_int_eq(view.n_x, order + (plants[k].kind >= LW_FIT_INTEGRATOR));
        lw_plant_free(plant);
    }
}
END_TEST

// ---- what cannot be fitted

static lw_status fit_of(lw_fit_kind kind, int n, const double *time, const double *value,
                        double height, lw_error *err)
{
    lw_fit fit;
    return lw_fit_step(kind, n, time, value, height, 0, &fit, err);
}

START_TEST(data_that_do_not_determine_a_plant_are_refused)
{
    lw_error err = {LW_OK, ""};
    double time[8], flat[8], same[8], early[8];
    for (int i = 0; i < 8; i++) {
        time[i] = i - 2;
        flat[i] = 3;
        same[i] = i < 5 ? i : 5;
        early[i] = i < 2 ? 0 : 1 - exp(-i);
    }
    lw_fit_kind first = LW_FIT_FIRST_ORDER;
    ck_assert(fit_of(first, 8, time, flat, 1, &err) == LW_ERR_FIT);
    ck_assert_str_eq(err.text, "fit of a plant \"first order\": all values are the same");
    ck_assert(fit_of(first, 8, time, early, 0, &err) == LW_ERR_ARGUMENT);
    ck_assert(fit_of(first, 4, time, early, 1, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "1 rows after the step at 0 s; at least 4 are wanted");
    ck_assert(fit_of((lw_fit_kind)99, 8, time, early, 1, &err) == LW_ERR_ARGUMENT);
    ck_assert(fit_of(first, 8, same, early, 1, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "row 7: times rise from row to row");
    early[3] = NAN;
    ck_assert(fit_of(first, 8, time, early, 1, &err) == LW_ERR_NOT_FINITE);
}
END_TEST

// A straight line has no time constant: it is not made up.
START_TEST(a_line_is_no_first_order)
{
    lw_error err = {LW_OK, ""};
    double time[50], value[50];
    for (int i = 0; i < 50; i++) {
        time[i] = 0.01 * i;
        value[i] = 2 * time[i];
    }
    ck_assert(fit_of(LW_FIT_FIRST_ORDER, 50, time, value, 1, &err) == LW_ERR_FIT);
    ck_assert(fit_of(LW_FIT_INTEGRATOR, 50, time, value, 1, &err) == LW_OK);
}
END_TEST

START_TEST(a_response_before_its_step_is_refused)
{
    lw_error err = {LW_OK, ""};
    lw_fit fit;
    rows r = response_of(&plants[1], 0, 0);
    ck_assert(lw_fit_step(LW_FIT_FIRST_ORDER_DELAY, N, r.time, r.value, input, at + 8e-3, &fit,
                          &err) == LW_ERR_FIT);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("fit");
    TCase *c = tcase_create("fit");
    tcase_set_timeout(c, 60);
    tcase_add_loop_test(c, exact_responses_give_the_plant_back, 0, N_PLANTS);
    tcase_add_loop_test(c, noisy_responses_give_it_within_the_standard_errors, 0, N_PLANTS);
    tcase_add_test(c, a_wrong_kind_fits_worse);
    tcase_add_test(c, fits_are_rounded_and_repeat);
    tcase_add_test(c, measures_of_fit_are_as_stated);
    tcase_add_test(c, a_fitted_plant_is_that_plant);
    tcase_add_test(c, data_that_do_not_determine_a_plant_are_refused);
    tcase_add_test(c, a_line_is_no_first_order);
    tcase_add_test(c, a_response_before_its_step_is_refused);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
