// Timings: the object and what holds for every family. See timing.h; families.c, lists.c and
// compose.c hold the families.
//
// Invariants
// 1. A timing never changes after it is made.
// 2. A draw uses + - * / sqrt and the library's elementary functions only: the same bits
//    everywhere.

#include "timing/family.h"

#include "base/alloc.h"
#include "base/philox.h"

#include <math.h>
#include <stdio.h>

lw_timing *lw__timing_node(const lw__family *family, const lw_timing *a, const lw_timing *b)
{
    lw_timing *t = lw__alloc(sizeof *t);
    if (t == NULL)
        return NULL;
    t->family = family;
    t->references = 1;
    t->a = a != NULL ? lw_timing_hold(a) : NULL;
    t->b = b != NULL ? lw_timing_hold(b) : NULL;
    t->n_streams = (a != NULL ? a->n_streams : 0) + (b != NULL ? b->n_streams : 0);
    t->n_state = (a != NULL ? a->n_state : 0) + (b != NULL ? b->n_state : 0);
    return t;
}

lw_status lw__timing_give(lw_timing *t, lw_timing **out, lw_error *err)
{
    if (t == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a timing");
    if (!isfinite(t->hi - t->lo)) {
        lw_error_set(err, LW_ERR_NOT_FINITE,
                     "the timing reaches from %.6g to %.6g s; a finite range is wanted", t->lo,
                     t->hi);
        lw_timing_free(t);
        return LW_ERR_NOT_FINITE;
    }
    *out = t;
    return LW_OK;
}

lw_status lw__timing_bad(lw_error *err, const char *name, double value, const char *range)
{
    return lw_error_set(err, LW_ERR_ARGUMENT, "%s is %.12g; %s", name, value, range);
}

lw__words_of_time lw__timing_words(double seconds)
{
    static const char *const names[] = {"s", "ms", "us", "ns", "ps"};
    lw__words_of_time w;
    double size = fabs(seconds), shown = seconds;
    int k = 0;
    for (; k < 4 && size > 0 && size < 1; k++, size *= 1000)
        shown *= 1000;
    snprintf(w.text, sizeof w.text, "%.6g %s", shown, names[size > 0 ? k : 0]);
    return w;
}

lw_timing *lw_timing_hold(const lw_timing *timing)
{
    lw_timing *t = (lw_timing *)(uintptr_t)timing; // only its count changes
    t->references++;
    return t;
}

void lw_timing_free(lw_timing *timing)
{
    if (timing == NULL || --timing->references > 0)
        return;
    lw_timing_free(timing->a);
    lw_timing_free(timing->b);
    lw__free(timing->value);
    lw__free(timing->weight);
    lw__free(timing);
}

double lw__timing_uniform_of(lw__draw_at *at)
{
    return lw__draw_uniform(at->seed, at->run, *at->stream++, at->job);
}

int lw_timing_n_streams(const lw_timing *t)
{
    return t->n_streams;
}

int lw_timing_n_state(const lw_timing *t)
{
    return t->n_state;
}

double lw_timing_draw(const lw_timing *t, uint64_t seed, uint64_t run, uint32_t job,
                      const uint32_t *stream, double *state)
{
    lw__draw_at at = {seed, run, job, stream, state};
    return t->family->draw(t, &at);
}

double lw_timing_quantile(const lw_timing *t, const double *u)
{
    return t->family->quantile != NULL ? t->family->quantile(t, &u) : (double)NAN;
}

void lw_timing_support(const lw_timing *t, double *lo, double *hi)
{
    *lo = t->lo;
    *hi = t->hi;
}

double lw_timing_cdf(const lw_timing *t, double x)
{
    if (x < t->lo)
        return 0;
    return x >= t->hi ? 1 : t->family->cdf(t, x);
}

double lw_timing_density(const lw_timing *t, double x)
{
    return x < t->lo || x > t->hi ? 0 : t->family->density(t, x);
}

double lw__timing_invert(const lw_timing *t, double p)
{
    double lo = t->lo, hi = t->hi;
    while (lo < hi) {
        double middle = lo + 0.5 * (hi - lo);
        if (middle == lo || middle == hi)
            break;
        if (lw_timing_cdf(t, middle) >= p)
            hi = middle;
        else
            lo = middle;
    }
    return lw_timing_cdf(t, lo) >= p ? lo : hi;
}

double lw_timing_median(const lw_timing *t)
{
    if (t->family->quantile != NULL && t->n_streams == 1) {
        const double half = 0.5;
        return lw_timing_quantile(t, &half);
    }
    return lw__timing_invert(t, 0.5);
}

double lw_timing_moment(const lw_timing *t, int order)
{
    return order == 0 ? 1 : t->family->moment(t, order);
}

double lw_timing_as_constant(const lw_timing *t)
{
    return t->lo == t->hi ? t->lo : (double)NAN;
}

void lw_timing_describe(const lw_timing *t, char *text, int size)
{
    t->family->describe(t, text, size);
}
