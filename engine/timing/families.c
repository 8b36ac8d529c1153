// Families with one uniform a draw: constant, uniform, triangular, and the truncated normal,
// log-normal, exponential and Gumbel. A truncated family maps u onto [F(lo), F(hi)] and then
// through the inverse of F.

#include "timing/family.h"

#include "base/philox.h"

#include <latewood/elementary.h>

#include <math.h>
#include <stdio.h>

#define TAIL 1e-6
// The least probability a cut may leave: below it the quantiles of an upper tail, where F is next
// to 1, come in steps that show.
#define LEAST_SHARE 1e-9

static double draw_by_quantile(const lw_timing *t, lw__draw_at *at)
{
    double u = lw__timing_uniform_of(at);
    const double *p = &u;
    return t->family->quantile(t, &p);
}

static double hold(const lw_timing *t, double x)
{
    return x < t->lo ? t->lo : x > t->hi ? t->hi : x;
}

// ---- constant

static double constant_draw(const lw_timing *t, lw__draw_at *at)
{
    (void)at;
    return t->lo;
}

static double constant_quantile(const lw_timing *t, const double **u)
{
    (void)u;
    return t->lo;
}

static double constant_cdf(const lw_timing *t, double x)
{
    return x >= t->lo;
}

static double no_density(const lw_timing *t, double x)
{
    (void)t;
    (void)x;
    return 0;
}

static double power_of(double x, int n)
{
    double p = 1;
    while (n-- > 0)
        p *= x;
    return p;
}

static double constant_moment(const lw_timing *t, int order)
{
    return power_of(t->lo, order);
}

static void constant_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "constant %s", lw__timing_words(t->lo).text);
}

static void constant_cuts(const lw_timing *t, lw__points *out)
{
    lw__points_add(out, t->lo, 0, 1);
}

static void constant_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    (void)how;
    lw__points_add(out, t->lo, 1, 1);
}

static const lw__family constant_family = {"constant",        constant_draw, constant_quantile,
                                           constant_cdf,      no_density,    constant_moment,
                                           constant_describe, constant_cuts, constant_points};

lw_status lw_timing_constant(double value, lw_timing **out, lw_error *err)
{
    if (!isfinite(value))
        return lw__timing_bad(err, "the constant", value, "a finite number is wanted");
    lw_timing *t = lw__timing_node(&constant_family, NULL, NULL);
    if (t != NULL) {
        t->lo = t->hi = value;
        t->has_atoms = 1;
    }
    return lw__timing_give(t, out, err);
}

// Make a family of one uniform over [lo, hi].
static lw_status give(const lw__family *family, double lo, double hi, const double p[4],
                      lw_timing **out, lw_error *err)
{
    if (lo == hi)
        return lw_timing_constant(lo, out, err);
    lw_timing *t = lw__timing_node(family, NULL, NULL);
    if (t != NULL) {
        t->lo = lo;
        t->hi = hi;
        t->n_streams = 1;
        t->has_density = 1;
        for (int i = 0; i < 4; i++)
            t->p[i] = p[i];
    }
    return lw__timing_give(t, out, err);
}

static lw_status check_range(double lo, double hi, lw_error *err)
{
    if (!isfinite(lo))
        return lw__timing_bad(err, "lo", lo, "a finite number is wanted");
    if (!isfinite(hi) || hi < lo)
        return lw__timing_bad(err, "hi", hi, "a finite number, not below lo, is wanted");
    return LW_OK;
}

// ---- uniform

static double uniform_quantile(const lw_timing *t, const double **u)
{
    return t->lo + (t->hi - t->lo) * *(*u)++;
}

static double uniform_draw(const lw_timing *t, lw__draw_at *at)
{
    double u = lw__draw_uniform(at->seed, at->run, *at->stream++, at->job);
    return t->lo + (t->hi - t->lo) * u;
}

static double uniform_cdf(const lw_timing *t, double x)
{
    return (x - t->lo) / (t->hi - t->lo);
}

static double uniform_density(const lw_timing *t, double x)
{
    (void)x;
    return 1 / (t->hi - t->lo);
}

static void uniform_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "uniform %s to %s", lw__timing_words(t->lo).text,
             lw__timing_words(t->hi).text);
}

static const lw__family uniform_family = {"uniform",        uniform_draw,    uniform_quantile,
                                          uniform_cdf,      uniform_density, lw__points_moment,
                                          uniform_describe, lw__smooth_cuts, lw__smooth_points};

lw_status lw_timing_uniform(double lo, double hi, lw_timing **out, lw_error *err)
{
    const double none[4] = {0};
    lw_status status = check_range(lo, hi, err);
    return status != LW_OK ? status : give(&uniform_family, lo, hi, none, out, err);
}

// ---- triangular; p[0]: mode, p[1]: its share of the probability

static double triangular_quantile(const lw_timing *t, const double **u)
{
    double v = *(*u)++, span = t->hi - t->lo;
    if (v < t->p[1])
        return t->lo + sqrt(v * span * (t->p[0] - t->lo));
    return t->hi - sqrt((1 - v) * span * (t->hi - t->p[0]));
}

static double triangular_cdf(const lw_timing *t, double x)
{
    double span = t->hi - t->lo;
    if (x < t->p[0])
        return (x - t->lo) * (x - t->lo) / (span * (t->p[0] - t->lo));
    if (x >= t->hi)
        return 1;
    return 1 - (t->hi - x) * (t->hi - x) / (span * (t->hi - t->p[0]));
}

static double triangular_density(const lw_timing *t, double x)
{
    double span = t->hi - t->lo;
    if (x < t->p[0])
        return 2 * (x - t->lo) / (span * (t->p[0] - t->lo));
    return t->hi > t->p[0] ? 2 * (t->hi - x) / (span * (t->hi - t->p[0])) : 2 / span;
}

static void triangular_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "triangular %s, %s, %s", lw__timing_words(t->lo).text,
             lw__timing_words(t->p[0]).text, lw__timing_words(t->hi).text);
}

static void triangular_cuts(const lw_timing *t, lw__points *out)
{
    lw__smooth_cuts(t, out);
    lw__points_add(out, t->p[0], 0, 1);
}

static const lw__family triangular_family = {
    "triangular",        draw_by_quantile,   triangular_quantile,
    triangular_cdf,      triangular_density, lw__points_moment,
    triangular_describe, triangular_cuts,    lw__smooth_points};

lw_status lw_timing_triangular(double lo, double mode, double hi, lw_timing **out, lw_error *err)
{
    lw_status status = check_range(lo, hi, err);
    if (status == LW_OK && !(mode >= lo && mode <= hi))
        status = lw__timing_bad(err, "mode", mode, "permitted from lo to hi");
    const double p[4] = {mode, hi > lo ? (mode - lo) / (hi - lo) : 0, 0, 0};
    return status != LW_OK ? status : give(&triangular_family, lo, hi, p, out, err);
}

// ---- truncated families: p[0], p[1] parameters, p[2] = F(lo), p[3] = F(hi)

static double inside(const lw_timing *t, double u)
{
    return t->p[2] + (t->p[3] - t->p[2]) * u;
}

static double share(const lw_timing *t, double f)
{
    return (f - t->p[2]) / (t->p[3] - t->p[2]);
}

static double normal_quantile(const lw_timing *t, const double **u)
{
    return hold(t, t->p[0] + t->p[1] * lw_normal_quantile(inside(t, *(*u)++)));
}

static double normal_cdf(const lw_timing *t, double x)
{
    return share(t, lw_normal_cdf((x - t->p[0]) / t->p[1]));
}

static double gauss(double z)
{
    return 0.39894228040143267794 * lw_exp(-0.5 * z * z);
}

static double normal_density(const lw_timing *t, double x)
{
    return gauss((x - t->p[0]) / t->p[1]) / t->p[1] / (t->p[3] - t->p[2]);
}

static void normal_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "normal, mean %s, deviation %s, cut to %s .. %s",
             lw__timing_words(t->p[0]).text, lw__timing_words(t->p[1]).text,
             lw__timing_words(t->lo).text, lw__timing_words(t->hi).text);
}

static const lw__family normal_family = {"normal",        draw_by_quantile, normal_quantile,
                                         normal_cdf,      normal_density,   lw__points_moment,
                                         normal_describe, lw__smooth_cuts,  lw__smooth_points};

lw_status lw_timing_normal(double mean, double deviation, double lo, double hi, lw_timing **out,
                           lw_error *err)
{
    if (!isfinite(mean))
        return lw__timing_bad(err, "mean", mean, "a finite number is wanted");
    if (!isfinite(deviation) || deviation < 0)
        return lw__timing_bad(err, "deviation", deviation, "permitted from 0 on");
    lo = isnan(lo) ? mean - 4 * deviation : lo;
    hi = isnan(hi) ? mean + 4 * deviation : hi;
    lw_status status = check_range(lo, hi, err);
    if (status != LW_OK)
        return status;
    if (deviation == 0)
        return lw_timing_constant(mean < lo ? lo : mean > hi ? hi : mean, out, err);
    const double p[4] = {mean, deviation, lw_normal_cdf((lo - mean) / deviation),
                         lw_normal_cdf((hi - mean) / deviation)};
    if (!(p[3] - p[2] >= LEAST_SHARE))
        return lw__timing_bad(err, "lo", lo, "the range holds next to no probability");
    return give(&normal_family, lo, hi, p, out, err);
}

// ---- log-normal: p[0] log of the median, p[1] sigma, p[4] shift

static double log_normal_quantile(const lw_timing *t, const double **u)
{
    double z = lw_normal_quantile(inside(t, *(*u)++));
    return hold(t, t->p[4] + lw_exp(t->p[0] + t->p[1] * z));
}

static double log_normal_cdf(const lw_timing *t, double x)
{
    if (x <= t->p[4])
        return 0;
    return share(t, lw_normal_cdf((lw_log(x - t->p[4]) - t->p[0]) / t->p[1]));
}

static double log_normal_density(const lw_timing *t, double x)
{
    double y = x - t->p[4];
    if (y <= 0)
        return 0;
    return gauss((lw_log(y) - t->p[0]) / t->p[1]) / (t->p[1] * y) / (t->p[3] - t->p[2]);
}

static void log_normal_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "log-normal, median %s, sigma %.6g, shifted by %s, at most %s",
             lw__timing_words(lw_exp(t->p[0])).text, t->p[1], lw__timing_words(t->p[4]).text,
             lw__timing_words(t->hi).text);
}

static const lw__family log_normal_family = {
    "log-normal",        draw_by_quantile,   log_normal_quantile,
    log_normal_cdf,      log_normal_density, lw__points_moment,
    log_normal_describe, lw__smooth_cuts,    lw__smooth_points};

lw_status lw_timing_log_normal(double median, double sigma, double shift, double hi,
                               lw_timing **out, lw_error *err)
{
    if (!isfinite(median) || median <= 0)
        return lw__timing_bad(err, "median", median, "permitted above 0");
    if (!isfinite(sigma) || sigma <= 0)
        return lw__timing_bad(err, "sigma", sigma, "permitted above 0");
    if (!isfinite(shift))
        return lw__timing_bad(err, "shift", shift, "a finite number is wanted");
    double mu = lw_log(median);
    if (isnan(hi))
        hi = shift + lw_exp(mu + sigma * lw_normal_quantile(1 - TAIL));
    if (!isfinite(hi) || hi <= shift)
        return lw__timing_bad(err, "hi", hi, "permitted above the shift");
    const double p[4] = {mu, sigma, 0, lw_normal_cdf((lw_log(hi - shift) - mu) / sigma)};
    if (!(p[3] >= LEAST_SHARE))
        return lw__timing_bad(err, "hi", hi, "the range holds next to no probability");
    lw_status status = give(&log_normal_family, shift, hi, p, out, err);
    if (status == LW_OK)
        (*out)->p[4] = shift;
    return status;
}

// ---- exponential: p[0] shift, p[1] mean

static double exponential_quantile(const lw_timing *t, const double **u)
{
    return hold(t, t->p[0] - t->p[1] * lw_log1p(-inside(t, *(*u)++)));
}

static double exponential_cdf(const lw_timing *t, double x)
{
    return share(t, -lw_expm1(-(x - t->p[0]) / t->p[1]));
}

static double exponential_density(const lw_timing *t, double x)
{
    return lw_exp(-(x - t->p[0]) / t->p[1]) / t->p[1] / (t->p[3] - t->p[2]);
}

static void exponential_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "exponential, mean %s, shifted by %s, at most %s",
             lw__timing_words(t->p[1]).text, lw__timing_words(t->p[0]).text,
             lw__timing_words(t->hi).text);
}

static const lw__family exponential_family = {
    "exponential",        draw_by_quantile,    exponential_quantile,
    exponential_cdf,      exponential_density, lw__points_moment,
    exponential_describe, lw__smooth_cuts,     lw__smooth_points};

lw_status lw_timing_exponential(double shift, double mean, double hi, lw_timing **out,
                                lw_error *err)
{
    if (!isfinite(shift))
        return lw__timing_bad(err, "shift", shift, "a finite number is wanted");
    if (!isfinite(mean) || mean <= 0)
        return lw__timing_bad(err, "mean", mean, "permitted above 0");
    hi = isnan(hi) ? shift - mean * lw_log(TAIL) : hi;
    if (!isfinite(hi) || hi <= shift)
        return lw__timing_bad(err, "hi", hi, "permitted above the shift");
    const double p[4] = {shift, mean, 0, -lw_expm1(-(hi - shift) / mean)};
    return give(&exponential_family, shift, hi, p, out, err);
}

// ---- Gumbel of maxima: p[0] location, p[1] scale

static double gumbel_quantile(const lw_timing *t, const double **u)
{
    return hold(t, t->p[0] - t->p[1] * lw_log(-lw_log(inside(t, *(*u)++))));
}

static double gumbel_f(double location, double scale, double x)
{
    return lw_exp(-lw_exp(-(x - location) / scale));
}

static double gumbel_cdf(const lw_timing *t, double x)
{
    return share(t, gumbel_f(t->p[0], t->p[1], x));
}

static double gumbel_density(const lw_timing *t, double x)
{
    double z = (x - t->p[0]) / t->p[1];
    return lw_exp(-z - lw_exp(-z)) / t->p[1] / (t->p[3] - t->p[2]);
}

static void gumbel_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "Gumbel, location %s, scale %s, cut to %s .. %s",
             lw__timing_words(t->p[0]).text, lw__timing_words(t->p[1]).text,
             lw__timing_words(t->lo).text, lw__timing_words(t->hi).text);
}

static const lw__family gumbel_family = {"Gumbel",        draw_by_quantile, gumbel_quantile,
                                         gumbel_cdf,      gumbel_density,   lw__points_moment,
                                         gumbel_describe, lw__smooth_cuts,  lw__smooth_points};

lw_status lw_timing_gumbel(double location, double scale, double lo, double hi, lw_timing **out,
                           lw_error *err)
{
    if (!isfinite(location))
        return lw__timing_bad(err, "location", location, "a finite number is wanted");
    if (!isfinite(scale) || scale <= 0)
        return lw__timing_bad(err, "scale", scale, "permitted above 0");
    lo = isnan(lo) ? location - scale * lw_log(-lw_log(TAIL)) : lo;
    hi = isnan(hi) ? location - scale * lw_log(-lw_log1p(-TAIL)) : hi;
    lw_status status = check_range(lo, hi, err);
    if (status != LW_OK)
        return status;
    const double p[4] = {location, scale, gumbel_f(location, scale, lo),
                         gumbel_f(location, scale, hi)};
    if (!(p[3] - p[2] >= LEAST_SHARE))
        return lw__timing_bad(err, "lo", lo, "the range holds next to no probability");
    return give(&gumbel_family, lo, hi, p, out, err);
}
