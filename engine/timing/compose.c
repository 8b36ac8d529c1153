// Timings made of timings: quiet and burst modes, stalls, sums, maxima, scaling.
//
// A node draws its own uniforms first, then lets its children draw theirs, always all of them, so
// that every part has the same streams whatever happens.

#include "timing/family.h"

#include "timing/quadrature.h"

#include <float.h>
#include <math.h>
#include <stdio.h>

static double no_quantile_density(const lw_timing *t, double x, double h)
{
    double lo = x - h < t->lo ? t->lo : x - h, hi = x + h > t->hi ? t->hi : x + h;
    return hi > lo ? (lw_timing_cdf(t, hi) - lw_timing_cdf(t, lo)) / (hi - lo) : 0;
}

static double factorial_ratio(int n, int k)
{
    static const int rows[5][5] = {
        {1, 0, 0, 0, 0}, {1, 1, 0, 0, 0}, {1, 2, 1, 0, 0}, {1, 3, 3, 1, 0}, {1, 4, 6, 4, 1}};
    return n <= 4 && k <= n ? rows[n][k] : (double)NAN;
}

static void name_of(const lw_timing *t, char *text, size_t size)
{
    lw_timing_describe(t, text, (int)size);
}

// Moment of a mixture, b with weight w.
static double mixed(double w, double of_a, double of_b)
{
    return (1 - w) * of_a + w * of_b;
}

// ---- modes: p[0] enter, p[1] leave, p[2] long-run share of bursts; one state: 1 in a burst

static double modes_draw(const lw_timing *t, lw__draw_at *at)
{
    double u = lw__timing_uniform_of(at), *burst = at->state++;
    double quiet_value = t->a->family->draw(t->a, at), burst_value = t->b->family->draw(t->b, at);
    if (at->job > 0) // a run begins quiet
        *burst = *burst != 0 ? u >= t->p[1] : u < t->p[0];
    return *burst != 0 ? burst_value : quiet_value;
}

static double mixture_cdf(const lw_timing *t, double x)
{
    return mixed(t->p[2], lw_timing_cdf(t->a, x), lw_timing_cdf(t->b, x));
}

static double mixture_density(const lw_timing *t, double x)
{
    return mixed(t->p[2], lw_timing_density(t->a, x), lw_timing_density(t->b, x));
}

static double mixture_moment(const lw_timing *t, int order)
{
    return mixed(t->p[2], lw_timing_moment(t->a, order), lw_timing_moment(t->b, order));
}

static void modes_describe(const lw_timing *t, char *text, int size)
{
    char quiet[120], burst[120];
    name_of(t->a, quiet, sizeof quiet);
    name_of(t->b, burst, sizeof burst);
    snprintf(text, (size_t)size,
             "quiet (%s) and burst (%s), entered with %.4g, left with %.4g a job", quiet, burst,
             t->p[0], t->p[1]);
}

static const lw__family modes_family = {"modes",         modes_draw,     NULL,          mixture_cdf,
                                        mixture_density, mixture_moment, modes_describe};

static lw_status check_chance(const char *name, double value, lw_error *err)
{
    return value >= 0 && value <= 1
               ? LW_OK
               : lw__timing_bad(err, name, value, "a chance from 0 to 1 is wanted");
}

lw_status lw_timing_modes(const lw_timing *quiet, const lw_timing *burst, double enter,
                          double leave, lw_timing **out, lw_error *err)
{
    lw_status status = check_chance("enter", enter, err);
    if (status == LW_OK)
        status = check_chance("leave", leave, err);
    if (status != LW_OK)
        return status;
    lw_timing *t = lw__timing_node(&modes_family, quiet, burst);
    if (t != NULL) {
        t->p[0] = enter;
        t->p[1] = leave;
        t->p[2] = enter + leave > 0 ? enter / (enter + leave) : 0;
        t->n_streams += 1;
        t->n_state += 1;
        t->lo = quiet->lo < burst->lo || enter == 0 ? quiet->lo : burst->lo;
        t->hi = quiet->hi > burst->hi || enter == 0 ? quiet->hi : burst->hi;
    }
    return lw__timing_give(t, out, err);
}

// ---- affine: p[0] factor, p[1] shift

static double affine_draw(const lw_timing *t, lw__draw_at *at)
{
    return t->p[0] * t->a->family->draw(t->a, at) + t->p[1];
}

static double affine_quantile(const lw_timing *t, const double **u)
{
    return t->p[0] * t->a->family->quantile(t->a, u) + t->p[1];
}

// Going back to y rounds; the few last places more or less keep an atom of `a` on its own side.
static double affine_cdf(const lw_timing *t, double x)
{
    double y = (x - t->p[1]) / t->p[0];
    double slack = 2 * DBL_EPSILON * (fabs(x) + fabs(t->p[1])) / fabs(t->p[0]);
    return t->p[0] > 0 ? lw_timing_cdf(t->a, y + slack) : 1 - lw_timing_cdf(t->a, y - slack);
}

static double affine_density(const lw_timing *t, double x)
{
    return lw_timing_density(t->a, (x - t->p[1]) / t->p[0]) / fabs(t->p[0]);
}

static double affine_moment(const lw_timing *t, int order)
{
    double sum = 0, factor = 1;
    for (int k = 0; k <= order; k++) {
        double shift = 1;
        for (int i = 0; i < order - k; i++)
            shift *= t->p[1];
        sum += factorial_ratio(order, k) * factor * lw_timing_moment(t->a, k) * shift;
        factor *= t->p[0];
    }
    return sum;
}

static void affine_describe(const lw_timing *t, char *text, int size)
{
    char inner[160];
    name_of(t->a, inner, sizeof inner);
    snprintf(text, (size_t)size, "%.6g times (%s), shifted by %.6g s", t->p[0], inner, t->p[1]);
}

static const lw__family affine_family = {"affine",       affine_draw,   affine_quantile, affine_cdf,
                                         affine_density, affine_moment, affine_describe};
// the same over a timing that has no quantile of its own
static const lw__family affine_drawn_family = {
    "affine", affine_draw, NULL, affine_cdf, affine_density, affine_moment, affine_describe};

lw_status lw_timing_affine(const lw_timing *of, double factor, double shift, lw_timing **out,
                           lw_error *err)
{
    if (!isfinite(factor))
        return lw__timing_bad(err, "factor", factor, "a finite number is wanted");
    if (!isfinite(shift))
        return lw__timing_bad(err, "shift", shift, "a finite number is wanted");
    if (factor == 0 || of->lo == of->hi)
        return lw_timing_constant(factor * of->lo + shift, out, err);
    int has_quantile = of->family->quantile != NULL;
    lw_timing *t = lw__timing_node(has_quantile ? &affine_family : &affine_drawn_family, of, NULL);
    if (t != NULL) {
        t->p[0] = factor;
        t->p[1] = shift;
        t->lo = factor * (factor > 0 ? of->lo : of->hi) + shift;
        t->hi = factor * (factor > 0 ? of->hi : of->lo) + shift;
    }
    return lw__timing_give(t, out, err);
}

// ---- sum and maximum of independent timings

static double sum_draw(const lw_timing *t, lw__draw_at *at)
{
    double a = t->a->family->draw(t->a, at), b = t->b->family->draw(t->b, at);
    return a + b;
}

static double sum_quantile(const lw_timing *t, const double **u)
{
    double a = t->a->family->quantile(t->a, u), b = t->b->family->quantile(t->b, u);
    return a + b;
}

typedef struct convolution {
    const lw_timing *t;
    double x;
} convolution;

// Over the probability of a: F(x) = integral over u of F_b(x - Q_a(u)).
static double sum_term(const void *context, double u)
{
    const convolution *c = context;
    return lw_timing_cdf(c->t->b, c->x - lw__timing_invert(c->t->a, u));
}

static double sum_cdf(const lw_timing *t, double x)
{
    convolution c = {t, x};
    return lw__timing_integral(sum_term, &c, 0, 1, 64);
}

static double by_difference(const lw_timing *t, double x)
{
    return no_quantile_density(t, x, 1e-5 * (t->hi - t->lo));
}

static double sum_moment(const lw_timing *t, int order)
{
    double sum = 0;
    for (int k = 0; k <= order; k++)
        sum += factorial_ratio(order, k) * lw_timing_moment(t->a, k) *
               lw_timing_moment(t->b, order - k);
    return sum;
}

static void sum_describe(const lw_timing *t, char *text, int size)
{
    char a[120], b[120];
    name_of(t->a, a, sizeof a);
    name_of(t->b, b, sizeof b);
    snprintf(text, (size_t)size, "the sum of (%s) and (%s)", a, b);
}

static const lw__family sum_family = {"sum",         sum_draw,   sum_quantile, sum_cdf,
                                      by_difference, sum_moment, sum_describe};
static const lw__family sum_drawn_family = {"sum",         sum_draw,   NULL,        sum_cdf,
                                            by_difference, sum_moment, sum_describe};

static double maximum_draw(const lw_timing *t, lw__draw_at *at)
{
    double a = t->a->family->draw(t->a, at), b = t->b->family->draw(t->b, at);
    return a > b ? a : b;
}

static double maximum_quantile(const lw_timing *t, const double **u)
{
    double a = t->a->family->quantile(t->a, u), b = t->b->family->quantile(t->b, u);
    return a > b ? a : b;
}

static double maximum_cdf(const lw_timing *t, double x)
{
    return lw_timing_cdf(t->a, x) * lw_timing_cdf(t->b, x);
}

static double maximum_density(const lw_timing *t, double x)
{
    return lw_timing_cdf(t->a, x) * lw_timing_density(t->b, x) +
           lw_timing_cdf(t->b, x) * lw_timing_density(t->a, x);
}

static void maximum_describe(const lw_timing *t, char *text, int size)
{
    char a[120], b[120];
    name_of(t->a, a, sizeof a);
    name_of(t->b, b, sizeof b);
    snprintf(text, (size_t)size, "the larger of (%s) and (%s)", a, b);
}

static const lw__family maximum_family = {"maximum",       maximum_draw,    maximum_quantile,
                                          maximum_cdf,     maximum_density, lw__quadrature_moment,
                                          maximum_describe};
static const lw__family maximum_drawn_family = {
    "maximum",       maximum_draw, NULL, maximum_cdf, maximum_density, lw__quadrature_moment,
    maximum_describe};

static int both_have_quantiles(const lw_timing *a, const lw_timing *b)
{
    return a->family->quantile != NULL && b->family->quantile != NULL;
}

lw_status lw_timing_sum(const lw_timing *a, const lw_timing *b, lw_timing **out, lw_error *err)
{
    lw_timing *t =
        lw__timing_node(both_have_quantiles(a, b) ? &sum_family : &sum_drawn_family, a, b);
    if (t != NULL) {
        t->lo = a->lo + b->lo;
        t->hi = a->hi + b->hi;
    }
    return lw__timing_give(t, out, err);
}

lw_status lw_timing_maximum(const lw_timing *a, const lw_timing *b, lw_timing **out, lw_error *err)
{
    lw_timing *t =
        lw__timing_node(both_have_quantiles(a, b) ? &maximum_family : &maximum_drawn_family, a, b);
    if (t != NULL) {
        t->lo = a->lo > b->lo ? a->lo : b->lo;
        t->hi = a->hi > b->hi ? a->hi : b->hi;
    }
    return lw__timing_give(t, out, err);
}

// ---- stall: a usual, b usual + stall as a sum; p[2] share of stalls. The sum shares no draw with
// the usual part: both children are drawn, one is taken.

static double stall_draw(const lw_timing *t, lw__draw_at *at)
{
    const uint32_t *own = at->stream++;
    double usual = t->a->family->draw(t->a, at), stall = t->b->family->draw(t->b, at);
    int stalls;
    if (t->every > 0) {
        int64_t phase = t->phase;
        lw_address once = {at->seed, at->run, *own, LW__ONCE_A_RUN};
        if (phase < 0)
            phase = (int64_t)(lw_draw_uniform(once) * (double)t->every);
        stalls = at->job >= phase && (at->job - phase) % t->every == 0;
    } else {
        stalls = lw_draw_uniform((lw_address){at->seed, at->run, *own, at->job}) < t->p[2];
    }
    return stalls ? usual + stall : usual;
}

static double stall_cdf(const lw_timing *t, double x)
{
    return mixed(t->p[2], lw_timing_cdf(t->a, x), sum_cdf(t, x));
}

static double stall_moment(const lw_timing *t, int order)
{
    return mixed(t->p[2], lw_timing_moment(t->a, order), sum_moment(t, order));
}

static void stall_describe(const lw_timing *t, char *text, int size)
{
    char usual[120], stall[120];
    name_of(t->a, usual, sizeof usual);
    name_of(t->b, stall, sizeof stall);
    if (t->every > 0)
        snprintf(text, (size_t)size, "%s, and (%s) more at every %lldth job", usual, stall,
                 (long long)t->every);
    else
        snprintf(text, (size_t)size, "%s, and (%s) more with chance %.4g a job", usual, stall,
                 t->p[2]);
}

static const lw__family stall_family = {"stall",       stall_draw,   NULL,          stall_cdf,
                                        by_difference, stall_moment, stall_describe};

lw_status lw_timing_stall(const lw_timing *usual, const lw_timing *stall, double chance,
                          int64_t every, int64_t phase, lw_timing **out, lw_error *err)
{
    lw_status status = every > 0 ? LW_OK : check_chance("chance", chance, err);
    if (status == LW_OK && every < 0)
        status = lw__timing_bad(err, "every", (double)every, "permitted from 1 on");
    if (status == LW_OK && stall->lo < 0)
        status = lw__timing_bad(err, "stall", stall->lo, "a stall is at least 0 long");
    if (status != LW_OK)
        return status;
    lw_timing *t = lw__timing_node(&stall_family, usual, stall);
    if (t != NULL) {
        t->p[2] = every > 0 ? 1.0 / (double)every : chance;
        t->every = every;
        t->phase = phase;
        t->n_streams += 1;
        t->lo = t->p[2] == 1 ? usual->lo + stall->lo : usual->lo;
        t->hi = t->p[2] == 0 ? usual->hi : usual->hi + stall->hi;
    }
    return lw__timing_give(t, out, err);
}
