// Exact motion between switchings, and the switchings. See switched.h.
//
// Workload: a piece costs the degree times a matrix-vector product, and a dot product and a bound
// for each condition of the mode; roots are looked for only where the bound allows one.
//
// Invariants
// 1. Instants are real numbers: nothing is rounded to a tick.
// 2. A condition within rounding of zero counts as zero, and what it does next decides; so a switch
//    does not take the instant it came from for the next one.
// 3. Every loop ends: switchings without time between them are counted.

#include "run/switched.h"

#include "run/poly.h"

#include <math.h>
#include <string.h>

#define ROUNDING 4e-15    // share of the terms of a condition that rounding may leave
#define CHATTER 1000      // switchings
#define CHATTER_TIME 1e-9 // [s]
#define NOT_HERE (-1.0)

// ---- rows

static double row_of_state(const lw__switched *q, const lw__mode *m, int row, const double *x)
{
    const double *c = m->c + (size_t)row * (size_t)q->n;
    double y = 0;
    for (int k = 0; k < q->n; k++)
        y += c[k] * x[k];
    return y;
}

// Share of inputs and constant, and the size of the terms of the whole.
static double row_of_inputs(const lw__switched *q, const lw__mode *m, int row, const double *u)
{
    const double *d = m->d + (size_t)row * (size_t)q->m;
    double y = m->e[row];
    for (int k = 0; k < q->m; k++)
        y += d[k] * u[k];
    return y;
}

static double size_of_row(const lw__switched *q, const lw__mode *m, int row, const double *x,
                          const double *u)
{
    const double *c = m->c + (size_t)row * (size_t)q->n, *d = m->d + (size_t)row * (size_t)q->m;
    double size = fabs(m->e[row]);
    for (int k = 0; k < q->n; k++)
        size += fabs(c[k] * x[k]);
    for (int k = 0; k < q->m; k++)
        size += fabs(d[k] * u[k]);
    return size;
}

double lw__switched_row(const lw__switched *q, int mode, int row, const double *x, const double *u)
{
    const lw__mode *m = &q->modes[mode];
    return row_of_state(q, m, row, x) + row_of_inputs(q, m, row, u);
}

int lw__switched_series(const lw__switched_piece *p, int row, double *c)
{
    const lw__switched *q = p->system;
    const lw__mode *m = &q->modes[p->mode];
    for (int k = 0; k <= LW__SWITCHED_DEGREE; k++)
        c[k] = row_of_state(q, m, row, p->v + k * q->n);
    c[0] += row_of_inputs(q, m, row, p->u);
    return LW__SWITCHED_DEGREE;
}

// ---- the polynomial of a piece

static void add_product(int n, int columns, const double *matrix, const double *v, double *out)
{
    for (int j = 0; j < columns; j++)
        for (int i = 0; i < n; i++)
            out[i] += matrix[j * n + i] * v[j];
}

static void form_series(const lw__switched *q, const lw__mode *m, const double *x, const double *u,
                        double length, double *v)
{
    int n = q->n;
    size_t size = sizeof(double) * (size_t)n;
    memcpy(v, x, size);
    memcpy(v + n, m->k, size);
    add_product(n, n, m->a, x, v + n);
    add_product(n, q->m, m->b, u, v + n);
    for (int i = 0; i < n; i++)
        v[n + i] *= length;
    for (int k = 2; k <= LW__SWITCHED_DEGREE; k++) {
        memset(v + k * n, 0, size);
        add_product(n, n, m->a, v + (k - 1) * n, v + k * n);
        for (int i = 0; i < n; i++)
            v[k * n + i] *= length / k;
    }
}

// Cut a piece at s: what is left is again a polynomial on [0, 1].
static void cut_series(int n, double s, double *v)
{
    double factor = 1;
    for (int k = 1; k <= LW__SWITCHED_DEGREE; k++) {
        factor *= s;
        for (int i = 0; i < n; i++)
            v[k * n + i] *= factor;
    }
}

static void end_of_series(int n, const double *v, double *x)
{
    memcpy(x, v + LW__SWITCHED_DEGREE * n, sizeof(double) * (size_t)n);
    for (int k = LW__SWITCHED_DEGREE - 1; k >= 0; k--)
        for (int i = 0; i < n; i++)
            x[i] += v[k * n + i];
}

// ---- conditions

// First s at which p comes to zero from below. Values within `zero` at the start count as zero, and
// the next coefficient decides.
static double first_reach(const double *c, double zero)
{
    double roots[LW__POLY_MAX];
    int first = 0, degree = LW__SWITCHED_DEGREE;
    while (first <= degree && fabs(c[first]) <= zero)
        first++;
    if (first > degree)
        return NOT_HERE;
    if (c[first] > 0)
        return 0;
    double rise = 0;
    for (int k = first + 1; k <= degree; k++)
        rise += c[k] > 0 ? c[k] : 0;
    if (c[first] + rise < 0)
        return NOT_HERE;
    int n = lw__poly_roots(degree - first, c + first, roots);
    return n > 0 ? roots[0] : NOT_HERE;
}

static int condition_of(const lw__switched *q, int row)
{
    int k = 0;
    while (q->condition_row[k] != row)
        k++;
    return k;
}

static double noise_of(const lw__switched *q, const lw__switched_state *s, int row, const double *u)
{
    double own = ROUNDING * size_of_row(q, &q->modes[s->mode], row, s->x, u);
    double left = s->noise[condition_of(q, row)];
    return own > left ? own : left;
}

// The first s at which a switching's conditions both hold: where the later one comes true, if the
// other holds there.
static double reach_of(const lw__switched_piece *p, const lw__switched_state *s,
                       const lw__switching *w)
{
    double c[LW__POLY_MAX + 1], both[LW__POLY_MAX + 1];
    double noise = noise_of(p->system, s, w->row, p->u);
    int degree = lw__switched_series(p, w->row, c);
    double reach = first_reach(c, noise);
    if (w->only_if < 0 || reach == NOT_HERE)
        return reach;
    double noise_too = noise_of(p->system, s, w->only_if, p->u);
    lw__switched_series(p, w->only_if, both);
    double too = both[0] >= -noise_too ? 0 : first_reach(both, noise_too);
    if (too == NOT_HERE)
        return NOT_HERE;
    reach = too > reach ? too : reach;
    double slack = ROUNDING * (fabs(c[0]) + lw__poly_swing(degree, c)) + noise;
    double slack_too = ROUNDING * (fabs(both[0]) + lw__poly_swing(degree, both)) + noise_too;
    return lw__poly_value(degree, c, reach) >= -slack &&
                   lw__poly_value(degree, both, reach) >= -slack_too
               ? reach
               : NOT_HERE;
}

// The earliest switching on a piece, its place in *at; NULL: none.
static const lw__switching *find_switching(const lw__switched_piece *p, const lw__switched_state *s,
                                           double *at)
{
    const lw__mode *m = &p->system->modes[p->mode];
    const lw__switching *found = NULL;
    for (int k = 0; k < m->n_switchings; k++) {
        double reach = reach_of(p, s, &m->switchings[k]);
        if (reach == NOT_HERE || (found != NULL && reach >= *at))
            continue;
        found = &m->switchings[k];
        *at = reach;
    }
    return found;
}

// What rounding may leave in each condition by the end of a piece. A condition that is still within
// what was left before keeps that.
static void note_noise(const lw__switched_piece *p, double at, lw__switched_state *s)
{
    const lw__switched *q = p->system;
    const lw__mode *m = &q->modes[p->mode];
    for (int k = 0; k < q->n_conditions; k++) {
        double c[LW__POLY_MAX + 1];
        int degree = lw__switched_series(p, q->condition_row[k], c);
        double noise = ROUNDING * (size_of_row(q, m, q->condition_row[k], p->v, p->u) +
                                   lw__poly_swing(degree, c));
        int still = fabs(lw__poly_value(degree, c, at)) <= s->noise[k];
        s->noise[k] = still && s->noise[k] > noise ? s->noise[k] : noise;
    }
}

static lw_status switch_over(lw__switched_state *s, const lw__switching *w, double at, double *work)
{
    double *x = s->x + w->first_x;
    for (int i = 0; i < w->n_x; i++) {
        work[i] = w->r0[i];
        for (int j = 0; j < w->n_x; j++)
            work[i] += w->r[i * w->n_x + j] * x[j];
    }
    memcpy(x, work, sizeof(double) * (size_t)w->n_x);
    s->mode = w->to;
    lw_tick tick = s->anchor + (lw_tick)floor(at * 1e12);
    int quick = s->n_switchings > 0 && tick - s->switched_at <= (lw_tick)(CHATTER_TIME * 1e12);
    s->in_a_row = quick ? s->in_a_row + 1 : 0;
    s->switched_at = tick;
    s->n_switchings++;
    return s->in_a_row >= CHATTER ? LW_ERR_CHATTER : LW_OK;
}

// ---- moving on

static int all_finite(int n, const double *x)
{
    for (int i = 0; i < n; i++)
        if (!isfinite(x[i]))
            return 0;
    return 1;
}

static lw__switched_piece make_piece(const lw__switched *q, const lw__switched_state *s,
                                     const double *u, double from, double to, double *v)
{
    const lw__mode *m = &q->modes[s->mode];
    double length = to - from > m->piece ? m->piece : to - from;
    form_series(q, m, s->x, u, length, v);
    return (lw__switched_piece){q, s->mode, from, length < to - from ? from + length : to, v, u};
}

lw_status lw__switched_advance(const lw__switched *q, lw__switched_state *s, const double *u,
                               double from, double to, lw__take_piece take, void *context,
                               double *work, double *failed)
{
    double *v = work, *scratch = work + (LW__SWITCHED_DEGREE + 1) * q->n;
    while (from < to) {
        double at = 1;
        *failed = from;
        lw__switched_piece p = make_piece(q, s, u, from, to, v);
        const lw__switching *w = find_switching(&p, s, &at);
        if (at > 0)
            note_noise(&p, at, s);
        if (w != NULL && at < 1) {
            cut_series(q->n, at, v);
            p.end = p.begin + at * (p.end - p.begin);
        } else if (w != NULL) {
            w = NULL; // at the very end: the next piece begins with it
        }
        if (p.end > p.begin && take != NULL)
            take(context, &p);
        end_of_series(q->n, v, s->x);
        if (!all_finite(q->n, s->x))
            return LW_ERR_NOT_FINITE;
        from = p.end;
        lw_status status = w != NULL ? switch_over(s, w, from, scratch) : LW_OK;
        if (status != LW_OK)
            return status;
    }
    return LW_OK;
}

lw_status lw__switched_settle(const lw__switched *q, lw__switched_state *s, const double *u,
                              double at, double *work)
{
    double *v = work, *scratch = work + (LW__SWITCHED_DEGREE + 1) * q->n;
    for (;;) {
        double reach = 1;
        lw__switched_piece p = make_piece(q, s, u, at, at + q->modes[s->mode].piece, v);
        const lw__switching *w = find_switching(&p, s, &reach);
        if (w == NULL || reach > 0)
            return LW_OK;
        lw_status status = switch_over(s, w, at, scratch);
        if (status != LW_OK)
            return status;
    }
}

int lw__switched_work(const lw__switched *q)
{
    return (LW__SWITCHED_DEGREE + 2) * q->n;
}
