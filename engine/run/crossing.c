// Crossings: where a row of a group, less a level, comes to zero.
//
// The window is covered by pieces on which the difference is a polynomial: Taylor series from the
// exact state at the start of a piece (linear groups), stretches of a trial (groups with a motion).
// Roots as in poly.c.
//
// Workload: once each change of a group with a comparator. Far from the level, a piece costs its
// series and one bound.
//
// Invariants
// 1. Looks only: no cell changes; the same arithmetic for any number of lanes.
// 2. An instant within a thousandth of a tick after a tick counts as on it.
// 3. A difference within rounding of zero at the start counts as zero: the sign of what follows
//    decides. So a comparator that has just switched does not take its own instant for a crossing
//    back.

#include "run/crossing.h"

#include "io/source.h"
#include "run/op_signal.h"
#include "run/series.h"

#include <math.h>
#include <string.h>

#define SNAP 1e-3 // ticks
#define NOT_HERE (-1.0)

// ---- one piece

// First s in [0, 1] at which p is at or above zero. At s = 0 a value within `zero` is taken as zero
// and the next coefficient decides, on and on.
static double first_reach(int degree, const double *c, double zero, int at_start)
{
    double roots[LW__POLY_MAX];
    int first = 0;
    while (at_start && first <= degree && fabs(c[first]) <= zero)
        first++;
    if (first > degree) // rests at the level
        return NOT_HERE;
    if (c[first] >= 0)
        return 0;
    int n = lw__poly_roots(degree - first, c + first, roots);
    return n > 0 ? roots[0] : NOT_HERE;
}

typedef struct look {
    const lw__lane *s;
    const lw__condition *q;
    const lw__question *ask;
    lw_tick begin; // the search begins here: now, or `from` where that is later
    double zero;
    int started;
    lw__crossing found;
} look;

// A difference over `length` seconds that begin `since` seconds after now: look for its root.
static void look_at_piece(look *l, int degree, double *c, double since, double length)
{
    double most = 0;
    const lw__question *a = l->ask;
    for (int k = 0; k <= degree && l->q->sign < 0; k++)
        c[k] = -c[k];
    c[0] -= a->offset + a->slope * since;
    c[1] -= a->slope * length;
    degree = degree < 1 ? 1 : degree;
    for (int k = 0; k <= degree; k++)
        c[k] *= a->side;
    for (int k = 1; k <= degree; k++)
        most += c[k] > 0 ? c[k] : 0;
    int at_start = !l->started;
    l->started = 1;
    if (c[0] + most < -l->zero)
        return;
    double s = first_reach(degree, c, l->zero, at_start);
    if (s == NOT_HERE)
        return;
    l->found.since = since + s * length;
    double ticks = ceil(l->found.since * 1e12 - SNAP);
    lw_tick at = l->s->now + (lw_tick)ticks;
    at = at < a->from ? a->from : at;
    l->found.tick = at <= a->until ? at : LW_NEVER;
    l->found.status = LW_STOPPED; // found: no need to go on
}

// Subtract the level over a piece that begins at tick t.
static void less_level(const lw__lane *s, const lw__reference *level, lw_tick t, double length,
                       int degree, double *c)
{
    if (level->at.kind != LW__SIGNAL_SOURCE) {
        c[0] -= lw__signal_value(s, level);
        return;
    }
    double r[LW__POLY_MAX + 1];
    lw__source_series(&s->z->sources[level->at.index].item->def, t, length, degree, r);
    for (int k = 0; k <= degree; k++)
        c[k] -= r[k];
}

// ---- linear groups

// Size of the terms that the difference is made of.
static double size_of_terms(const look *l, const double *x, const double *u)
{
    const lw__condition *q = l->q;
    double size = fabs(l->ask->offset) + fabs(lw__signal_value(l->s, &q->level));
    for (int k = 0; k < q->group->n_x; k++)
        size += fabs(q->row.c[k] * x[k]);
    for (int k = 0; k < q->group->n_u; k++)
        size += fabs(q->row.d[k] * u[k]);
    return size;
}

static void look_along(look *l)
{
    const lw__lane *s = l->s;
    const lw__condition *q = l->q;
    const lw__group *g = q->group;
    const lw__changes none = {0, NULL, NULL, NULL};
    double *x0 = s->work + LW__WORK_BEHIND(s->z), *u = x0 + g->n_x, *x = u + g->n_u,
           *work = x + g->n_x;
    lw__group_state(s, (int)(g - s->z->groups), x0, u);
    for (lw_tick t = l->begin; t <= l->ask->until && l->found.status == LW_OK;) {
        lw_tick left = l->ask->until - t, piece = left < q->piece ? left : q->piece;
        double c[LW__POLY_MAX + 1] = {0}, length = lw_tick_seconds(piece);
        lw__kernel_value(&g->kernel, s->now, x0, u, &none, t, x, work);
        lw__row_series(&g->kernel, &q->row, x, u, length, q->degree, work, c);
        if (!l->started)
            l->zero = q->tolerance * size_of_terms(l, x, u);
        less_level(s, &q->level, t, length, q->degree, c);
        look_at_piece(l, q->degree, c, lw_tick_seconds(t - s->now), length);
        if (piece == left)
            return;
        t += piece;
    }
}

// ---- groups with a motion

static void look_at_stretch(void *context, const lw__stretch *st)
{
    look *l = context;
    const lw__condition *q = l->q;
    double c[LW__POLY_MAX + 1] = {0}, b[LW__POLY_MAX + 1] = {0};
    double begin = lw_tick_seconds(l->begin - st->anchor), length = st->end - st->begin;
    if (l->found.status != LW_OK || st->end <= begin)
        return;
    int degree = q->of >= 0 ? st->row(st, q->of, c) : 0;
    int degree_less = q->less >= 0 ? st->row(st, q->less, b) : 0;
    degree = degree > degree_less ? degree : degree_less;
    for (int k = 0; k <= degree; k++)
        c[k] -= b[k];
    double from = st->begin;
    if (from < begin) {
        lw__poly_part(degree, c, (begin - from) / length, 1);
        from = begin;
        length = st->end - begin;
    }
    const lw__reference *level = &q->level;
    lw_tick t = st->anchor + (lw_tick)floor(from * 1e12);
    int with_level = level->at.kind == LW__SIGNAL_SOURCE ? LW__POLY_MAX : degree;
    if (!l->started)
        l->zero = q->tolerance * (fabs(c[0]) + fabs(lw__signal_value(l->s, level)) +
                                  fabs(l->ask->offset) + lw__poly_swing(degree, c));
    less_level(l->s, level, t, length, with_level, c);
    double since = from - lw_tick_seconds(l->s->now - st->anchor);
    look_at_piece(l, with_level, c, since > 0 ? since : 0, length);
}

static void look_by_trial(look *l)
{
    const lw__group *g = l->q->group;
    lw__lane ahead = *l->s;
    lw_tick at;
    const char *text;
    ahead.now = l->ask->until;
    lw_status status = g->motion->look(&ahead, g, look_at_stretch, l, &at, &text);
    if (l->found.status == LW_OK)
        l->found.status = status;
}

// ---- forming a condition

static void add_row(lw__condition *q, double *c, double *d, int row, double sign)
{
    const lw__group *g = q->group;
    if (g->motion != NULL) // its rows come by stretches
        return;
    for (int k = 0; k < g->n_x; k++)
        c[k] += sign * g->rows[row].c[k];
    for (int k = 0; k < g->n_u; k++)
        d[k] += sign * g->rows[row].d[k];
}

// Pieces short enough for the group and for a sine that is its level; fewer terms may do within
// one step of the grid.
static void plan_pieces(const lw__freezer *w, lw__condition *q)
{
    const lw__kernel *k = &q->group->kernel;
    double norm = k->norm, term = 1;
    q->tolerance = q->group->motion != NULL  ? q->group->motion->tolerance
                   : k->method == LW__LADDER ? 1e-9
                                             : 1e-12;
    if (q->level.at.kind == LW__SIGNAL_SOURCE) {
        const lw_source_def *def = &w->z->sources[q->level.at.index].item->def;
        double turn = def->kind == LW_SOURCE_SINE ? lw__source_turn(def) : 0;
        norm = turn > norm ? turn : norm;
    }
    q->piece = lw__piece_length(norm);
    double reach = fmin(lw_tick_seconds(k->reach) * norm, LW__PIECE_NORM);
    for (q->degree = 1; q->degree < LW__PIECE_DEGREE; q->degree++)
        if ((term *= reach / q->degree) <= 0x1p-60)
            break;
}

lw_status lw__condition_make(lw__freezer *w, const lw__reference *of, const lw__reference *less,
                             lw__condition *out)
{
    int rows = of->at.kind == LW__SIGNAL_ROW, rows_less = less->at.kind == LW__SIGNAL_ROW;
    if ((!rows && !rows_less) || (rows && rows_less && of->at.index != less->at.index))
        return LW_ERR_ARGUMENT;
    *out = (lw__condition){.of = -1, .less = -1, .sign = rows ? 1 : -1};
    out->group = &w->z->groups[rows ? of->at.index : less->at.index];
    out->level.at.kind = LW__SIGNAL_CONSTANT;
    const lw__group *g = out->group;
    double *c = lw__freezer_get(w, sizeof(double) * (size_t)(g->n_x + g->n_u + 1));
    if (c == NULL)
        return LW_ERR_MEMORY;
    double *d = c + g->n_x;
    if (rows)
        add_row(out, c, d, out->of = of->at.part, 1);
    if (rows && rows_less)
        add_row(out, c, d, out->less = less->at.part, -1);
    else if (rows)
        out->level = *less;
    else
        add_row(out, c, d, out->of = less->at.part, 1);
    if (!rows)
        out->level = *of;
    out->row = (lw__row){c, d, -1, 1};
    plan_pieces(w, out);
    return LW_OK;
}

// ---- all of it

lw__crossing lw__crossing_next(const lw__lane *s, const lw__condition *q, const lw__question *ask)
{
    look l = {.s = s, .q = q, .ask = ask, .found = {LW_NEVER, 0, LW_OK}};
    l.begin = ask->from > s->now + 1 ? ask->from : s->now;
    if (ask->until > s->now && ask->from <= ask->until) {
        if (q->group->motion != NULL)
            look_by_trial(&l);
        else
            look_along(&l);
    }
    if (l.found.status == LW_STOPPED)
        l.found.status = LW_OK;
    return l.found;
}

double lw__condition_value(const lw__lane *s, const lw__condition *q)
{
    lw_signal of = {LW__SIGNAL_ROW, (int)(q->group - s->z->groups), q->of};
    lw_signal less = {LW__SIGNAL_ROW, of.index, q->less};
    double value = q->of >= 0 ? lw__signal_value(s, &(lw__reference){of, 0}) : 0;
    if (q->less >= 0)
        value -= lw__signal_value(s, &(lw__reference){less, 0});
    return q->sign * (value - lw__signal_value(s, &q->level));
}

lw_tick lw__group_next(const lw__lane *s, const lw__group *g)
{
    int W = s->width, L = s->lane;
    int timer = g->timer >= 0 ? g->timer : s->z->adcs[g->grid_adc].timer;
    return LW__I(s->z->due + timer);
}
