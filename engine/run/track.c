// Tracks and metrics: a signal as a piecewise polynomial, and what is read off the pieces.
//
// Between two changes of its group a plant's signal is smooth. A track keeps the state at the last
// change; when the next one comes, the stretch between is covered by pieces short enough for a
// Taylor polynomial in time, on which extremes, crossings and integrals are found exactly.
//
// Workload: one update each change of the group: the degree times a matrix-vector product, plus a
// few sums; roots are looked for only where the coefficients allow one.
//
// Invariants
// 1. A track reads the run and writes its own cells only.
// 2. Both sides of a jump are seen: the end of one stretch and the start of the next.

#include "run/track.h"

#include "run/job_metric.h"

#include "io/source.h"
#include "run/poly.h"
#include "run/series.h"

#include <math.h>
#include <string.h>

// ---- pieces

// Coefficients of a signal over the stretch that began at `began`, from tick t on.
static void signal_series(const lw__lane *s, const lw__track *track, const lw__reference *r,
                          double held, lw_tick began, lw_tick t, double length, double *c)
{
    int W = s->width, L = s->lane, degree = track->degree;
    if (r->at.kind == LW__SIGNAL_SOURCE) {
        lw__source_series(&s->z->sources[r->at.index].item->def, t, length, degree, c);
        return;
    }
    memset(c, 0, sizeof(double) * (size_t)(degree + 1));
    c[0] = held;
    if (r->at.kind != LW__SIGNAL_ROW)
        return;
    const lw__changes none = {0, NULL, NULL, NULL};
    const lw__group *g = &s->z->groups[r->at.index];
    double *x0 = s->work, *u = x0 + g->n_x, *x = u + g->n_u, *work = x + g->n_x;
    for (int k = 0; k < g->n_x; k++)
        x0[k] = LW__F(track->x + k);
    for (int k = 0; k < g->n_u; k++)
        u[k] = LW__F(track->u + k);
    lw__kernel_value(&g->kernel, began, x0, u, &none, t, x, work);
    lw__row_series(&g->kernel, &g->rows[r->at.part], x, u, length, degree, work, c);
}

// ---- what is read off a piece

LW__INLINE double *sum_of(lw__lane *s, const lw__track *t, lw__sum which)
{
    int W = s->width, L = s->lane;
    return &LW__F(t->sums + (int)which);
}

static void note_extreme(lw__lane *s, const lw__track *t, double value, double at)
{
    if (value > *sum_of(s, t, LW__SUM_MAXIMUM)) {
        *sum_of(s, t, LW__SUM_MAXIMUM) = value;
        *sum_of(s, t, LW__SUM_MAXIMUM_AT) = at;
    }
    if (value < *sum_of(s, t, LW__SUM_MINIMUM)) {
        *sum_of(s, t, LW__SUM_MINIMUM) = value;
        *sum_of(s, t, LW__SUM_MINIMUM_AT) = at;
    }
}

int lw__turning_points(int degree, const double *c, double *roots)
{
    double d[LW__POLY_MAX + 1];
    for (int k = 1; k <= degree; k++)
        d[k - 1] = k * c[k];
    return degree > 0 ? lw__poly_roots(degree - 1, d, roots) : 0;
}

static void extremes(lw__lane *s, const lw__track *t, const lw__piece *p)
{
    double swing = lw__poly_swing(p->degree, p->y), roots[LW__POLY_MAX];
    if (p->y[0] + swing <= *sum_of(s, t, LW__SUM_MAXIMUM) &&
        p->y[0] - swing >= *sum_of(s, t, LW__SUM_MINIMUM))
        return;
    note_extreme(s, t, p->y[0], p->begin);
    int n = lw__turning_points(p->degree, p->y, roots);
    for (int k = 0; k < n; k++)
        note_extreme(s, t, lw__poly_value(p->degree, p->y, roots[k]),
                     p->begin + roots[k] * p->length);
    note_extreme(s, t, lw__poly_value(p->degree, p->y, 1), p->begin + p->length);
}

static void error_peak(lw__lane *s, const lw__track *t, const lw__piece *p)
{
    double *peak = sum_of(s, t, LW__SUM_ERROR_PEAK), roots[LW__POLY_MAX];
    if (fabs(p->e[0]) + lw__poly_swing(p->degree, p->e) <= *peak)
        return;
    *peak = fmax(*peak, fmax(fabs(p->e[0]), fabs(lw__poly_value(p->degree, p->e, 1))));
    int n = lw__turning_points(p->degree, p->e, roots);
    for (int k = 0; k < n; k++)
        *peak = fmax(*peak, fabs(lw__poly_value(p->degree, p->e, roots[k])));
}

// Integrals of |e| and of time times |e|: between the roots of e the sign is one.
static void absolute(lw__lane *s, const lw__track *t, const lw__piece *p)
{
    double edges[LW__POLY_MAX + 2], timed[LW__POLY_MAX + 2];
    int n = lw__poly_roots(p->degree, p->e, edges), degree = p->degree;
    edges[n] = 1;
    timed[0] = p->begin * p->e[0];
    for (int k = 1; k <= degree; k++)
        timed[k] = p->begin * p->e[k] + p->length * p->e[k - 1];
    timed[degree + 1] = p->length * p->e[degree];
    double from = 0;
    for (int k = 0; k <= n; k++) {
        double part = lw__poly_integral(degree, p->e, from, edges[k]);
        *sum_of(s, t, LW__SUM_ABSOLUTE) += fabs(part) * p->length;
        if (t->needs & LW__NEED_TIMED)
            *sum_of(s, t, LW__SUM_TIMED) +=
                fabs(lw__poly_integral(degree + 1, timed, from, edges[k])) * p->length;
        from = edges[k];
    }
}

static void take_piece(lw__lane *s, int track, const lw__piece *p)
{
    const lw__track *t = &s->z->tracks[track];
    int needs = t->needs;
    if (needs & LW__NEED_EXTREMES)
        extremes(s, t, p);
    if (needs & LW__NEED_MEAN)
        *sum_of(s, t, LW__SUM_VALUE) += lw__poly_integral(p->degree, p->y, 0, 1) * p->length;
    if (needs & LW__NEED_SQUARE)
        *sum_of(s, t, LW__SUM_SQUARE) +=
            lw__poly_product_integral(p->degree, p->y, p->degree, p->y) * p->length;
    if (needs & LW__NEED_ERROR_SQUARE)
        *sum_of(s, t, LW__SUM_ERROR_SQUARE) +=
            lw__poly_product_integral(p->degree, p->e, p->degree, p->e) * p->length;
    if (needs & (LW__NEED_ABSOLUTE | LW__NEED_TIMED))
        absolute(s, t, p);
    if (needs & LW__NEED_ERROR_PEAK)
        error_peak(s, t, p);
    for (int k = 0; (needs & LW__NEED_OWN) && k < s->z->n_metrics; k++)
        if (s->z->metrics[k].track == track)
            lw__metric_piece(s, &s->z->metrics[k], t, p);
    *sum_of(s, t, LW__SUM_SECONDS) += p->length;
    *sum_of(s, t, LW__SUM_FINAL) = lw__poly_value(p->degree, p->y, 1);
    *sum_of(s, t, LW__SUM_WANTED) =
        *sum_of(s, t, LW__SUM_FINAL) - lw__poly_value(p->degree, p->e, 1);
}

// ---- stretches

// One signal over [lo, hi] seconds after the anchor of a stretch.
static void part_series(const lw__lane *s, const lw__track *t, const lw__reference *r, double held,
                        const lw__stretch *st, double lo, double hi, double *c)
{
    int W = s->width, L = s->lane;
    memset(c, 0, sizeof(double) * (LW__POLY_MAX + 1));
    if (r->at.kind == LW__SIGNAL_ROW && &s->z->groups[r->at.index] == st->group) {
        int degree = st->row(st, r->at.part, c);
        double length = st->end - st->begin;
        lw__poly_part(degree, c, (lo - st->begin) / length, (hi - st->begin) / length);
        return;
    }
    lw_tick from = st->anchor + (lw_tick)floor(lo * 1e12); // whole ticks, not after lo
    double first = lw_tick_seconds(from - st->anchor), length = hi - first;
    signal_series(s, t, r, held, LW__I(t->began), from, length, c);
    if (lo > first)
        lw__poly_part(t->degree, c, (lo - first) / length, 1);
}

// Pieces short enough for the other signal too.
void lw__track_stretch(lw__lane *s, int track, const lw__stretch *st)
{
    const lw__track *t = &s->z->tracks[track];
    int W = s->width, L = s->lane;
    if (LW__I(t->open) != 1)
        return;
    double lo = fmax(st->begin, lw_tick_seconds(LW__I(t->done) - st->anchor));
    double most = lw_tick_seconds(t->piece), offset = lw_tick_seconds(st->anchor - t->from);
    while (lo < st->end) {
        double hi = st->end - lo > most ? lo + most : st->end, r[LW__POLY_MAX + 1];
        lw__piece p = {.begin = offset + lo, .length = hi - lo};
        part_series(s, t, &t->of, LW__F(t->held), st, lo, hi, p.y);
        part_series(s, t, &t->against, LW__F(t->wanted), st, lo, hi, r);
        for (int k = 0; k <= LW__POLY_MAX; k++) {
            p.e[k] = p.y[k] - r[k];
            p.degree = p.y[k] != 0 || r[k] != 0 ? k : p.degree;
        }
        take_piece(s, track, &p);
        lo = hi;
    }
}

void lw__track_done(lw__lane *s, int track)
{
    int W = s->width, L = s->lane;
    LW__I(s->z->tracks[track].done) = s->now;
}

typedef struct follower {
    lw__lane *s;
    int track;
} follower;

static void take_trial(void *context, const lw__stretch *stretch)
{
    const follower *f = context;
    lw__track_stretch(f->s, f->track, stretch);
}

// The group moves later: a trial gives what is wanted up to now. Where it fails, no figure is one.
static void follow(lw__lane *s, int track)
{
    const lw__track *t = &s->z->tracks[track];
    int W = s->width, L = s->lane;
    follower f = {s, track};
    lw_tick at;
    const char *text;
    if (LW__I(t->done) == s->now)
        return;
    if (t->moving->motion->look(s, t->moving, take_trial, &f, &at, &text) != LW_OK)
        for (int k = 0; k < LW__N_SUMS; k++)
            *sum_of(s, t, (lw__sum)k) = (double)NAN;
    LW__I(t->done) = s->now;
}

// From the last change up to the present tick.
static void close_stretch(lw__lane *s, int track)
{
    const lw__track *t = &s->z->tracks[track];
    int W = s->width, L = s->lane;
    if (t->moving != NULL) {
        follow(s, track);
        return;
    }
    lw_tick began = LW__I(t->began), at = began;
    double held = LW__F(t->held), wanted = LW__F(t->wanted);
    while (at < s->now) {
        lw_tick end = at + t->piece < s->now ? at + t->piece : s->now;
        double r[LW__POLY_MAX + 1];
        lw__piece p = {.degree = t->degree,
                       .begin = lw_tick_seconds(at - t->from),
                       .length = lw_tick_seconds(end - at)};
        signal_series(s, t, &t->of, held, began, at, p.length, p.y);
        signal_series(s, t, &t->against, wanted, began, at, p.length, r);
        for (int k = 0; k <= p.degree; k++)
            p.e[k] = p.y[k] - r[k];
        take_piece(s, track, &p);
        at = end;
    }
}

static void begin_stretch(lw__lane *s, const lw__track *t)
{
    int W = s->width, L = s->lane;
    LW__I(t->began) = s->now;
    if (t->moving != NULL)
        LW__I(t->done) = s->now;
    LW__F(t->held) = t->of.at.kind == LW__SIGNAL_ROW ? 0 : lw__signal_value(s, &t->of);
    LW__F(t->wanted) = t->against.at.kind == LW__SIGNAL_ROW ? 0 : lw__signal_value(s, &t->against);
    if (t->of.at.kind != LW__SIGNAL_ROW || s->z->groups[t->of.at.index].motion != NULL)
        return;
    const lw__group *g = &s->z->groups[t->of.at.index];
    double *x = s->work + LW__WORK_BEHIND(s->z), *u = x + g->n_x;
    lw__group_state(s, t->of.at.index, x, u);
    for (int k = 0; k < g->n_x; k++)
        LW__F(t->x + k) = x[k];
    for (int k = 0; k < g->n_u; k++)
        LW__F(t->u + k) = u[k];
}

static void open_window(lw__lane *s, const lw__track *t)
{
    int W = s->width, L = s->lane;
    LW__I(t->open) = 1;
    double wanted = lw__signal_value(s, &t->against), value = lw__signal_value(s, &t->of);
    double base = !isnan(t->base)                                 ? t->base
                  : t->against_name != NULL && wanted != t->level ? wanted
                                                                  : value;
    *sum_of(s, t, LW__SUM_BASE) = base;
    *sum_of(s, t, LW__SUM_MAXIMUM) = *sum_of(s, t, LW__SUM_MINIMUM) = value;
    *sum_of(s, t, LW__SUM_FINAL) = value;
    *sum_of(s, t, LW__SUM_WANTED) = wanted;
}

void lw__track_update(lw__lane *s, int track)
{
    const lw__track *t = &s->z->tracks[track];
    int W = s->width, L = s->lane;
    int64_t *due = &LW__I(s->z->due + t->timer);
    if (LW__I(t->open) == 2 || s->now < t->from)
        return;
    if (LW__I(t->open) == 0)
        open_window(s, t);
    else
        close_stretch(s, track);
    if (s->now >= t->until)
        LW__I(t->open) = 2;
    else
        begin_stretch(s, t);
    if (*due == s->now)
        *due = s->now < t->until && t->until != LW_NEVER ? t->until : LW_NEVER;
}

// What stands at outputs stood until the end.
void lw__outputs_finish(lw__lane *s)
{
    int W = s->width, L = s->lane;
    for (int k = 0; k < s->z->n_dacs; k++)
        if (s->z->dacs[k].observed)
            lw__track_output(s, &s->z->dacs[k], LW__I(s->z->dacs[k].changed_at),
                             LW__I(s->z->dacs[k].sampled));
}

void lw__track_finish(lw__lane *s, int track)
{
    const lw__track *t = &s->z->tracks[track];
    int W = s->width, L = s->lane;
    if (LW__I(t->open) == 1)
        close_stretch(s, track);
    LW__I(t->open) = 2;
}

// ---- latencies of a loop

void lw__track_latency(lw__lane *s, int loop, lw_tick latency)
{
    int W = s->width, L = s->lane;
    double seconds = lw_tick_seconds(latency);
    for (int k = 0; k < s->z->n_metrics; k++) {
        const lw__metric *m = &s->z->metrics[k];
        if (m->loop != loop || s->now < m->def.from || s->now > m->def.until)
            continue;
        LW__F(m->own) += seconds;
        LW__F(m->own + 1) += 1;
        LW__F(m->own + 2) = fmax(LW__F(m->own + 2), seconds);
        if (m->def.kind != LW_METRIC_LATENCY_PERCENTILE)
            continue;
        double cell = floor((seconds - m->lo) * m->per_cell);
        cell = cell < 0 ? 0 : cell > LW__CELLS - 1 ? LW__CELLS - 1 : cell;
        LW__I(m->cells + (int)cell) += 1;
    }
}

// Upper edge of the cell in which the share is reached.
static double percentile(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    double total = LW__F(m->own + 1), below = 0;
    if (total == 0)
        return (double)NAN;
    for (int k = 0; k < LW__CELLS; k++) {
        below += (double)LW__I(m->cells + k);
        if (below >= m->def.share * total)
            return m->per_cell > 0 ? m->lo + (k + 1) / m->per_cell : m->lo;
    }
    return LW__F(m->own + 2);
}

static double loop_metric(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    const lw__loop *l = &s->z->loops[m->loop];
    switch (m->def.kind) {
    case LW_METRIC_LATENCY_PERCENTILE:
        return percentile(s, m);
    case LW_METRIC_LATENCY_MEAN:
        return LW__F(m->own + 1) > 0 ? LW__F(m->own) / LW__F(m->own + 1) : (double)NAN;
    case LW_METRIC_LATENCY_MAXIMUM:
        return LW__F(m->own + 1) > 0 ? LW__F(m->own + 2) : (double)NAN;
    case LW_METRIC_LOST:
        return (double)LW__I(l->n_lost);
    default:
        return (double)LW__I(l->n_missed);
    }
}

// ---- the age of what stands at an output

// What stands at the output of a dac from `from` to `to`, sampled at `sampled`.
static void take_age(lw__lane *s, const lw__metric *m, lw_tick from, lw_tick to, lw_tick sampled)
{
    int W = s->width, L = s->lane;
    from = from < m->def.from ? m->def.from : from;
    to = to > m->def.until ? m->def.until : to;
    if (to <= from || sampled < 0)
        return;
    double length = lw_tick_seconds(to - from), oldest = lw_tick_seconds(to - sampled);
    if (m->def.kind == LW_METRIC_OUTPUT_AGE_PERCENTILE) {
        lw__time_take(s, m, to - sampled);
        return;
    }
    LW__F(m->own) += 0.5 * (lw_tick_seconds(from - sampled) + oldest) * length;
    LW__F(m->own + 1) += length;
    LW__F(m->own + 2) = fmax(LW__F(m->own + 2), oldest);
}

void lw__track_output(lw__lane *s, const lw__dac *dac, lw_tick before, lw_tick sampled)
{
    for (int k = 0; k < s->z->n_metrics; k++)
        if (s->z->metrics[k].aged == dac)
            take_age(s, &s->z->metrics[k], before, s->now, sampled);
}

static double output_metric(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    if (LW__F(m->own + 1) == 0)
        return (double)NAN;
    if (m->def.kind == LW_METRIC_OUTPUT_AGE_PERCENTILE)
        return lw__time_percentile(s, m);
    return m->def.kind == LW_METRIC_OUTPUT_AGE ? LW__F(m->own + 2)
                                               : LW__F(m->own) / LW__F(m->own + 1);
}

// ---- metrics of a track

typedef struct reading {
    double sums[LW__N_SUMS];
    double level;
} reading;

// The extreme farther beyond the level, seen from the base.
static double peak_of(const reading *r, double *at)
{
    const double *u = r->sums;
    double up = u[LW__SUM_MAXIMUM] - r->level, down = r->level - u[LW__SUM_MINIMUM];
    int rises = r->level > u[LW__SUM_BASE] || (r->level == u[LW__SUM_BASE] && up >= down);
    *at = rises ? u[LW__SUM_MAXIMUM_AT] : u[LW__SUM_MINIMUM_AT];
    return rises ? u[LW__SUM_MAXIMUM] : u[LW__SUM_MINIMUM];
}

static double overshoot(const reading *r)
{
    double at, span = r->level - r->sums[LW__SUM_BASE], peak = peak_of(r, &at);
    if (span == 0)
        return (double)NAN;
    double beyond = (peak - r->level) / span;
    return beyond > 0 ? beyond : 0;
}

static double undershoot(const reading *r)
{
    double base = r->sums[LW__SUM_BASE], span = r->level - base;
    if (span == 0)
        return (double)NAN;
    double beyond = span > 0 ? base - r->sums[LW__SUM_MINIMUM] : r->sums[LW__SUM_MAXIMUM] - base;
    return beyond > 0 ? beyond / fabs(span) : 0;
}

static double track_metric(const lw__lane *s, const lw__metric *m)
{
    const lw__track *t = &s->z->tracks[m->track];
    int W = s->width, L = s->lane;
    reading r;
    for (int k = 0; k < LW__N_SUMS; k++)
        r.sums[k] = LW__F(t->sums + k);
    r.level = isnan(t->level) ? r.sums[LW__SUM_WANTED] : t->level;
    double at, seconds = r.sums[LW__SUM_SECONDS];
    switch (m->def.kind) {
    case LW_METRIC_MAXIMUM:
        return r.sums[LW__SUM_MAXIMUM];
    case LW_METRIC_MINIMUM:
        return r.sums[LW__SUM_MINIMUM];
    case LW_METRIC_PEAK:
        return peak_of(&r, &at);
    case LW_METRIC_PEAK_TIME:
        peak_of(&r, &at);
        return at;
    case LW_METRIC_OVERSHOOT:
        return overshoot(&r);
    case LW_METRIC_RIPPLE:
        return r.sums[LW__SUM_MAXIMUM] - r.sums[LW__SUM_MINIMUM];
    case LW_METRIC_UNDERSHOOT:
        return undershoot(&r);
    case LW_METRIC_EFFORT:
        return r.sums[LW__SUM_SQUARE];
    case LW_METRIC_MEAN:
        return r.sums[LW__SUM_VALUE] / seconds;
    case LW_METRIC_SATURATION_TIME:
        return r.sums[LW__SUM_VALUE];
    case LW_METRIC_RMS:
        return sqrt(fmax(r.sums[LW__SUM_SQUARE], 0) / seconds);
    case LW_METRIC_FINAL:
        return r.sums[LW__SUM_FINAL];
    case LW_METRIC_IAE:
        return r.sums[LW__SUM_ABSOLUTE];
    case LW_METRIC_ITAE:
        return r.sums[LW__SUM_TIMED];
    case LW_METRIC_ISE:
        return r.sums[LW__SUM_ERROR_SQUARE];
    case LW_METRIC_ERROR_RMS:
        return sqrt(fmax(r.sums[LW__SUM_ERROR_SQUARE], 0) / seconds);
    case LW_METRIC_ERROR_PEAK:
        return r.sums[LW__SUM_ERROR_PEAK];
    default:
        return lw__metric_own(s, m, t, seconds);
    }
}

double lw__metric_value(const lw__lane *s, int metric)
{
    const lw__metric *m = &s->z->metrics[metric];
    if (m->task >= 0 || m->dac >= 0)
        return lw__job_metric_value(s, m);
    if (m->aged != NULL)
        return output_metric(s, m);
    return m->track < 0 ? loop_metric(s, m) : track_metric(s, m);
}
