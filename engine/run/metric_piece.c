// Metrics that read each piece of their track by themselves. Cells of each, from `own` on:
//   settling   last instant outside the band, whether it is outside at the end
//   rise       instants of the low and the high level
//   itse, mean error   the integral
//   variation  the way so far, the last value, whether there is one
//   reversals  their count, the extreme since the last, the direction (0: none yet), whether there
//              is a value
//   mask       farthest outside, time outside, first instant outside

#include "run/track.h"

#include "run/poly.h"

#include <math.h>
#include <string.h>

// Roots of y - level on the piece.
static int crossings(const lw__piece *p, double level, double *roots)
{
    double c[LW__POLY_MAX + 1];
    memcpy(c, p->y, sizeof(double) * (size_t)(p->degree + 1));
    c[0] -= level;
    return lw__poly_roots(p->degree, c, roots);
}

static void settling(lw__lane *s, const lw__metric *m, const lw__track *t, const lw__piece *p)
{
    int W = s->width, L = s->lane;
    double band = isnan(m->def.band_value)
                      ? m->def.band * fabs(t->level - LW__F(t->sums + LW__SUM_BASE))
                      : m->def.band_value;
    double off = fabs(p->y[0] - t->level), swing = lw__poly_swing(p->degree, p->y);
    double *last = &LW__F(m->own), *outside = &LW__F(m->own + 1);
    *outside = 0;
    if (off + swing <= band)
        return;
    if (fabs(lw__poly_value(p->degree, p->y, 1) - t->level) > band) {
        *outside = 1;
        *last = p->begin + p->length;
        return;
    }
    double roots[LW__POLY_MAX], latest = off > band ? 0 : LW__NOT_YET;
    for (int side = -1; side <= 1; side += 2) {
        int n = crossings(p, t->level + side * band, roots);
        latest = n > 0 && roots[n - 1] > latest ? roots[n - 1] : latest;
    }
    if (latest >= 0)
        *last = p->begin + latest * p->length;
}

static void rising(lw__lane *s, const lw__metric *m, const lw__track *t, const lw__piece *p)
{
    int W = s->width, L = s->lane;
    double base = LW__F(t->sums + LW__SUM_BASE), span = t->level - base;
    int stated = !isnan(m->def.low_value);
    if (stated)
        span = m->def.high_value - m->def.low_value;
    for (int k = 0; k < 2; k++) {
        double *at = &LW__F(m->own + k), roots[LW__POLY_MAX];
        double share = k == 0 ? m->def.low : m->def.high;
        double level = !stated  ? base + share * span
                       : k == 0 ? m->def.low_value
                                : m->def.high_value;
        if (*at != LW__NOT_YET)
            continue;
        if ((p->y[0] - level) * span >= 0)
            *at = p->begin;
        else if (fabs(p->y[0] - level) <= lw__poly_swing(p->degree, p->y) &&
                 crossings(p, level, roots) > 0)
            *at = p->begin + roots[0] * p->length;
    }
}

// ---- turns

static void variation(lw__lane *s, const lw__metric *m, double value)
{
    int W = s->width, L = s->lane;
    if (LW__F(m->own + 2) != 0)
        LW__F(m->own) += fabs(value - LW__F(m->own + 1));
    LW__F(m->own + 1) = value;
    LW__F(m->own + 2) = 1;
}

static void reversals(lw__lane *s, const lw__metric *m, double value)
{
    int W = s->width, L = s->lane;
    double *extreme = &LW__F(m->own + 1), *way = &LW__F(m->own + 2);
    double ahead = value - *extreme;
    if (LW__F(m->own + 3) == 0) {
        LW__F(m->own + 3) = 1;
        *extreme = value;
    } else if (*way == 0) {
        if (fabs(ahead) > m->def.step) {
            *way = ahead > 0 ? 1 : -1;
            *extreme = value;
        }
    } else if (ahead * *way >= 0) {
        *extreme = value;
    } else if (fabs(ahead) > m->def.step) {
        LW__F(m->own) += 1;
        *way = -*way;
        *extreme = value;
    }
}

// The values between which the signal goes one way only.
static void turns(lw__lane *s, const lw__metric *m, const lw__piece *p)
{
    void (*take)(lw__lane *, const lw__metric *, double) =
        m->def.kind == LW_METRIC_VARIATION ? variation : reversals;
    double roots[LW__POLY_MAX];
    take(s, m, p->y[0]);
    if (p->degree == 0)
        return;
    int n = lw__turning_points(p->degree, p->y, roots);
    for (int k = 0; k < n; k++)
        take(s, m, lw__poly_value(p->degree, p->y, roots[k]));
    take(s, m, lw__poly_value(p->degree, p->y, 1));
}

// ---- masks

// One side of a mask over part of a piece: c is how far the signal is outside, in s from 0 to 1.
static void outside(lw__lane *s, const lw__metric *m, int degree, const double *c, double begin,
                    double length)
{
    int W = s->width, L = s->lane;
    double roots[LW__POLY_MAX + 1], from = 0;
    if (c[0] + lw__poly_swing(degree, c) <= 0)
        return;
    double worst = fmax(c[0], lw__poly_value(degree, c, 1));
    int n = lw__turning_points(degree, c, roots);
    for (int k = 0; k < n; k++)
        worst = fmax(worst, lw__poly_value(degree, c, roots[k]));
    LW__F(m->own) = fmax(LW__F(m->own), worst);
    n = lw__poly_roots(degree, c, roots);
    roots[n] = 1;
    for (int k = 0; k <= n; k++) {
        if (lw__poly_value(degree, c, 0.5 * (from + roots[k])) > 0) {
            LW__F(m->own + 1) += (roots[k] - from) * length;
            if (LW__F(m->own + 2) == LW__NOT_YET)
                LW__F(m->own + 2) = begin + from * length;
        }
        from = roots[k];
    }
}

// Between corners k and k + 1.
static void mask_part(lw__lane *s, const lw__metric *m, const lw__piece *p, int k)
{
    const lw_metric_def *d = &m->def;
    double t0 = d->mask_time[k], t1 = d->mask_time[k + 1];
    double lo = fmax(t0, p->begin), hi = fmin(t1, p->begin + p->length);
    if (!(lo < hi))
        return;
    for (int side = -1; side <= 1; side += 2) {
        const double *limit = side > 0 ? d->mask_high : d->mask_low;
        double slope = (limit[k + 1] - limit[k]) / (t1 - t0), c[LW__POLY_MAX + 1];
        if (isnan(slope))
            continue;
        int degree = p->degree > 0 ? p->degree : 1;
        memset(c, 0, sizeof c);
        memcpy(c, p->y, sizeof(double) * (size_t)(p->degree + 1));
        lw__poly_part(p->degree, c, (lo - p->begin) / p->length, (hi - p->begin) / p->length);
        c[0] -= limit[k] + slope * (lo - t0);
        c[1] -= slope * (hi - lo);
        for (int i = 0; i <= degree; i++)
            c[i] *= side;
        outside(s, m, degree, c, lo, hi - lo);
    }
}

// ---- all of them

static void itse(lw__lane *s, const lw__metric *m, const lw__piece *p)
{
    int W = s->width, L = s->lane, degree = p->degree;
    double timed[LW__POLY_MAX + 2];
    timed[0] = p->begin * p->e[0];
    for (int k = 1; k <= degree; k++)
        timed[k] = p->begin * p->e[k] + p->length * p->e[k - 1];
    timed[degree + 1] = p->length * p->e[degree];
    LW__F(m->own) += lw__poly_product_integral(degree, p->e, degree + 1, timed) * p->length;
}

void lw__metric_piece(lw__lane *s, const lw__metric *m, const lw__track *t, const lw__piece *p)
{
    int W = s->width, L = s->lane;
    switch (m->def.kind) {
    case LW_METRIC_SETTLING:
        settling(s, m, t, p);
        return;
    case LW_METRIC_RISE:
        rising(s, m, t, p);
        return;
    case LW_METRIC_ITSE:
        itse(s, m, p);
        return;
    case LW_METRIC_MEAN_ERROR:
    case LW_METRIC_STEADY_ERROR:
        LW__F(m->own) += lw__poly_integral(p->degree, p->e, 0, 1) * p->length;
        return;
    case LW_METRIC_VARIATION:
    case LW_METRIC_REVERSALS:
    case LW_METRIC_CHATTER:
        turns(s, m, p);
        return;
    case LW_METRIC_MASK_VIOLATION:
    case LW_METRIC_MASK_TIME:
    case LW_METRIC_MASK_FIRST:
        for (int k = 0; k + 1 < m->def.n_mask; k++)
            mask_part(s, m, p, k);
        return;
    default:
        return;
    }
}

void lw__metric_start(lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    if (m->def.kind == LW_METRIC_RISE)
        LW__F(m->own) = LW__F(m->own + 1) = LW__NOT_YET;
    if (m->def.kind == LW_METRIC_MASK_FIRST)
        LW__F(m->own + 2) = LW__NOT_YET;
}

double lw__metric_own(const lw__lane *s, const lw__metric *m, const lw__track *t, double seconds)
{
    int W = s->width, L = s->lane;
    const double own[3] = {LW__F(m->own), LW__F(m->own + 1), LW__F(m->own + 2)};
    (void)t;
    switch (m->def.kind) {
    case LW_METRIC_SETTLING:
        return own[1] != 0 ? (double)NAN : own[0];
    case LW_METRIC_RISE:
        return own[0] == LW__NOT_YET || own[1] == LW__NOT_YET ? (double)NAN : own[1] - own[0];
    case LW_METRIC_MEAN_ERROR:
    case LW_METRIC_STEADY_ERROR:
    case LW_METRIC_CHATTER:
        return own[0] / seconds;
    case LW_METRIC_MASK_TIME:
        return own[1];
    case LW_METRIC_MASK_FIRST:
        return own[2] == LW__NOT_YET ? (double)NAN : own[2];
    case LW_METRIC_ITSE:
    case LW_METRIC_VARIATION:
    case LW_METRIC_REVERSALS:
    case LW_METRIC_MASK_VIOLATION:
        return own[0];
    default:
        return (double)NAN;
    }
}
