// White noise on groups: covariance over each step of the anchor grid, its square root, the draws.
//
// Method: C. F. Van Loan, IEEE Trans. Automatic Control 23 (1978) 395-404, over a length of norm at
// most 1 in double-double, then doubled: Q(2h) = Q(h) + Phi Q(h) Phi'.
//
// Invariants
// 1. What is drawn depends on the seed, the run, the noise's name and the number of the anchor.
// 2. A component without variance takes its draw all the same.

#include "run/white.h"

#include "run/comparator.h"
#include "run/edges.h"
#include "run/schedule.h"

#include "base/alloc.h"
#include "base/dense.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>
#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>
#include <string.h>

// ---- covariance

// out = a b, or a b' with `turned`, n x n.
static void multiply(int n, const lw__dd *a, const lw__dd *b, int turned, lw__dd *out)
{
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            lw__dd sum = {0, 0};
            for (int k = 0; k < n; k++)
                sum = lw__dd_add(sum, lw__dd_mul(a[i * n + k], b[turned ? j * n + k : k * n + j]));
            out[i * n + j] = sum;
        }
}

// Phi and Q over h from the exponential of (-A, b b'; 0, A') h.
static lw_status van_loan(int n, const lw__dd *a, const double *b, double density, double h,
                          lw__dd *work, lw__dd *phi, lw__dd *q)
{
    int m = 2 * n;
    lw__dd *block = work, *e = work + m * m;
    memset(block, 0, sizeof *block * (size_t)(m * m));
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            block[i * m + j] = lw__dd_neg(a[i * n + j]);
            block[(n + i) * m + n + j] = a[j * n + i];
            block[i * m + n + j] = lw__dd_mul_double(lw__dd_two_product(b[i], b[j]), density);
        }
    lw_status status = lw__dense_exp_dd(m, block, lw__dd_from_double(h), e);
    if (status != LW_OK)
        return status;
    lw__dd *top = work; // the block is done with
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            phi[i * n + j] = e[(n + j) * m + n + i];
            top[i * n + j] = e[i * m + n + j];
        }
    multiply(n, phi, top, 0, q);
    return LW_OK;
}

static void double_length(int n, lw__dd *work, lw__dd *phi, lw__dd *q)
{
    lw__dd *moved = work, *both = work + n * n;
    multiply(n, phi, q, 0, moved);
    multiply(n, moved, phi, 1, both);
    for (int i = 0; i < n * n; i++)
        q[i] = lw__dd_add(q[i], both[i]);
    multiply(n, phi, phi, 0, moved);
    memcpy(phi, moved, sizeof *phi * (size_t)(n * n));
}

// Lower root of q, by correlations, so that each state counts on its own scale; a pivot that is
// rounding is none.
static void root(int n, const lw__dd *q, double *factor)
{
    for (int j = 0; j < n; j++) {
        double own = sqrt(fmax(0, lw__dd_to_double(q[j * n + j])));
        double rest = own > 0 ? 1 : 0;
        for (int k = 0; k < j && own > 0; k++)
            rest -= factor[j * n + k] * factor[j * n + k];
        int counts = rest > 1e-13;
        factor[j * n + j] = counts ? sqrt(rest) : 0;
        for (int i = j + 1; i < n; i++) {
            double other = sqrt(fmax(0, lw__dd_to_double(q[i * n + i])));
            double sum = counts && other > 0 ? lw__dd_to_double(q[i * n + j]) / (own * other) : 0;
            for (int k = 0; k < j && counts; k++)
                sum -= factor[i * n + k] * factor[j * n + k];
            factor[i * n + j] = counts && other > 0 ? sum / factor[j * n + j] : 0;
        }
    }
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            factor[i * n + j] =
                j <= i ? factor[i * n + j] * sqrt(fmax(0, lw__dd_to_double(q[i * n + i]))) : 0;
}

static lw_status factor_over(const lw__group *g, int n, const double *b, double density,
                             lw_tick length, double *factor)
{
    size_t nn = (size_t)n * (size_t)n;
    lw__dd *a = lw__alloc(sizeof *a * (nn * 11));
    if (a == NULL)
        return LW_ERR_MEMORY;
    lw__dd *phi = a + nn, *q = phi + nn, *work = q + nn;
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            a[i * n + j] = lw__dd_from_double(g->kernel.a[j * g->n_x + i]);
    double h = lw_tick_seconds(length);
    int doublings = 0;
    for (; g->kernel.norm * h > 1 && doublings < 60; doublings++)
        h /= 2;
    lw_status status = van_loan(n, a, b, density, h, work, phi, q);
    for (int k = 0; k < doublings && status == LW_OK; k++)
        double_length(n, work, phi, q);
    if (status == LW_OK)
        root(n, q, factor);
    for (size_t i = 0; i < nn && status == LW_OK; i++)
        if (!isfinite(factor[i]))
            status = LW_ERR_NOT_FINITE;
    lw__free(a);
    return status;
}

// ---- who may look at such a group

static int same_grid(const lw__group *g, const lw__adc *a)
{
    lw_period p = a->period;
    if (!a->has_clock || a->n_steps != 1 || a->steps[0].at != 0)
        return 0;
    int whole = g->grid.den == 1 && p.den == 1 && p.num % g->grid.num == 0 &&
                (a->offset - g->grid_offset) % g->grid.num == 0;
    return whole || (p.num == g->grid.num && p.den == g->grid.den && a->offset == g->grid_offset);
}

static lw_status off_grid(lw__freezer *w, const lw_noise_def *d, const lw__group *g,
                          const char *what, const char *name)
{
    char grid[48];
    lw_tick_format(g->grid.num / g->grid.den, grid);
    return lw__fail_at(d->origin, w->err, LW_ERR_ARGUMENT,
                       "noise \"%s\": %s \"%s\" looks at the plant away from its anchors, every %s "
                       "(%s); white noise is known at anchors only: take held noise, rig:source "
                       "with lw.source.noise",
                       d->name, what, name, grid, g->grid_of);
}

static int reads_group(const lw_frozen *z, const lw__loop *l, const lw__group *g)
{
    for (int k = 0; k < l->n_in; k++)
        if (l->inputs[k].at.kind == LW__SIGNAL_ROW && &z->groups[l->inputs[k].at.index] == g)
            return 1;
    return 0;
}

static lw_status check_readers(lw__freezer *w, const lw_noise_def *d, const lw__group *g)
{
    const lw_frozen *z = w->z;
    for (int i = 0; i < z->n_adcs; i++)
        for (int c = 0; c < z->adcs[i].n_channels; c++) {
            lw_signal at = z->adcs[i].of[c].at;
            if (at.kind == LW__SIGNAL_ROW && &z->groups[at.index] == g &&
                !same_grid(g, &z->adcs[i]))
                return off_grid(w, d, g, "adc", z->adcs[i].item->def.name);
        }
    for (int i = 0; i < z->n_loops; i++)
        if (reads_group(z, &z->loops[i], g) &&
            (!same_grid(g, z->loops[i].adc) || z->loops[i].adc->takes > 0))
            return off_grid(w, d, g, "loop", z->loops[i].item->def.name);
    for (int i = 0; i < z->n_tasks; i++)
        if (z->tasks[i].has_law && reads_group(z, &z->tasks[i].law, g))
            return off_grid(w, d, g, "task", z->tasks[i].name);
    for (int i = 0; i < z->n_comparators; i++)
        if (z->comparators[i].condition.group == g)
            return off_grid(w, d, g, "comparator", z->comparators[i].name);
    for (int i = 0; i < z->n_edges; i++)
        if (z->edges[i].condition.group == g)
            return off_grid(w, d, g, "encoder", z->edges[i].name);
    return LW_OK;
}

// ---- freezing

static const char *port_name(lw__freezer *w, const char *plant, const char *port)
{
    size_t size = strlen(plant) + strlen(port) + 2;
    char *text = lw__freezer_get(w, size);
    if (text != NULL)
        snprintf(text, size, "%s.%s", plant, port);
    return text;
}

// The plant and the place of the input "plant.input".
static lw_status find_input(lw__freezer *w, const lw_noise_def *d, int *plant, int *input)
{
    const lw_frozen *z = w->z;
    const char *names[128];
    int n = 0;
    for (int p = 0; p < z->n_plants; p++)
        for (int i = 0; i < z->plants[p].view.n_u; i++) {
            const char *text = port_name(w, z->plants[p].name, z->plants[p].view.input_names[i]);
            if (text == NULL)
                return LW_ERR_MEMORY;
            *plant = p;
            *input = i;
            if (strcmp(text, d->on) == 0)
                return LW_OK;
            if (n < 128)
                names[n++] = text;
        }
    const char *near = lw_nearest_name(d->on, names, n);
    return lw__fail_at(d->origin, w->err, LW_ERR_NAME,
                       "noise \"%s\": on: no plant input \"%s\"%s%s%s", d->name, d->on,
                       near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

// Column of the input over the states of the group.
static lw_status column_of(lw__freezer *w, const lw_noise_def *d, int plant, int input, double *b)
{
    const lw_plant_view *v = &w->z->plants[plant].view;
    const lw__group *g = &w->z->groups[w->z->plants[plant].group];
    int first = w->z->plants[plant].first_state - (g->n_rows - g->n_plant_states);
    for (int r = 0; r < v->n_y; r++)
        if (v->d[r * v->n_u + input] != 0)
            return lw__fail_at(
                d->origin, w->err, LW_ERR_ARGUMENT,
                "noise \"%s\": on: \"%s\" acts on output \"%s\" at once; white noise "
                "on it has no finite value: take held noise",
                d->name, d->on, v->output_names[r]);
    if (v->delay[input] > 0)
        return lw__fail_at(d->origin, w->err, LW_ERR_ARGUMENT,
                           "noise \"%s\": on: \"%s\" has a delay; white noise is for inputs "
                           "without one",
                           d->name, d->on);
    for (int i = 0; i < v->n_x; i++)
        b[first + i] = v->b[i * v->n_u + input];
    return LW_OK;
}

static lw_status factors(lw__freezer *w, lw__white *white, const lw__group *g, const double *b)
{
    const lw_noise_def *d = &white->item->def;
    lw_tick steps[2];
    lw__grid_steps(g->grid, &steps[0], &steps[1]);
    lw_tick lengths[3] = {steps[0], steps[1], lw_period_at(g->grid, g->grid_offset, g->first)};
    for (int k = 0; k < 3; k++) {
        if (lengths[k] <= 0 || (k == 1 && lengths[1] == lengths[0]))
            continue;
        double *factor = lw__freezer_get(w, sizeof *factor * (size_t)white->n * (size_t)white->n);
        if (factor == NULL)
            return LW_ERR_MEMORY;
        lw_status status = factor_over(g, white->n, b, d->density, lengths[k], factor);
        if (status == LW_ERR_MEMORY)
            return lw__freezer_no_memory(w);
        if (status != LW_OK)
            return lw__fail_at(d->origin, w->err, status,
                               "noise \"%s\": its covariance over a step is not finite", d->name);
        white->step[white->n_steps++] = (struct lw__white_step){lengths[k], factor};
    }
    return LW_OK;
}

static lw_status freeze_noise(lw__freezer *w, const lw__noise_item *item)
{
    const lw_noise_def *d = &item->def;
    int plant = -1, input = -1;
    LW__TRY(find_input(w, d, &plant, &input));
    lw__group *g = &w->z->groups[w->z->plants[plant].group];
    if (g->motion != NULL)
        return lw__fail_at(d->origin, w->err, LW_ERR_ARGUMENT,
                           "noise \"%s\": on: \"%s\" is of a plant that is not linear; white noise "
                           "is for linear ones: take held noise",
                           d->name, d->on);
    LW__TRY(check_readers(w, d, g));
    int n = g->n_plant_states;
    lw__white *all = lw__freezer_get(w, sizeof *all * (size_t)(g->n_white + 1));
    double *b = lw__freezer_get(w, sizeof *b * (size_t)(n + 1));
    uint32_t *streams = lw__freezer_get(w, sizeof *streams * (size_t)(n + 1));
    if (all == NULL || b == NULL || streams == NULL)
        return LW_ERR_MEMORY;
    LW__TRY(column_of(w, d, plant, input, b));
    for (int i = 0; i < n; i++) {
        char name[260];
        snprintf(name, sizeof name, "%s#%d", d->name, i + 1);
        streams[i] = lw_stream(name);
    }
    if (g->n_white > 0)
        memcpy(all, g->white, sizeof *all * (size_t)g->n_white);
    lw__white *own = &all[g->n_white];
    *own = (lw__white){.item = item, .n = n, .streams = streams};
    LW__TRY(factors(w, own, g, b));
    g->white = all;
    g->n_white++;
    return LW_OK;
}

lw_status lw__freeze_white(lw__freezer *w)
{
    for (int i = 0; i < w->rig->n_noises; i++)
        LW__TRY(freeze_noise(w, &w->rig->noises[i]));
    return LW_OK;
}

// ---- runs

static const double *factor_of(const lw__white *white, lw_tick length)
{
    for (int k = 0; k < white->n_steps; k++)
        if (white->step[k].length == length)
            return white->step[k].factor;
    return NULL;
}

static void kick(lw__lane *s, const lw__group *g, const lw__white *white, lw_tick length,
                 int64_t number)
{
    int W = s->width, L = s->lane, n = white->n;
    const double *factor = factor_of(white, length);
    double *z = s->work;
    if (factor == NULL)
        return;
    for (int i = 0; i < n; i++)
        z[i] = lw_normal_quantile(
            lw_draw_uniform((lw_address){s->seed, s->run, white->streams[i], (uint32_t)number}));
    for (int i = 0; i < n; i++) {
        double sum = 0;
        for (int j = 0; j <= i; j++)
            sum += factor[i * n + j] * z[j];
        LW__F(g->x + i) += sum;
    }
}

void lw__white_kick(lw__lane *s, const lw__group *g)
{
    int W = s->width, L = s->lane;
    const lw__adc *a = g->timer < 0 ? &s->z->adcs[g->grid_adc] : NULL;
    if (LW__I(s->z->due + (a != NULL ? a->timer : g->timer)) != s->now)
        return;
    int64_t k = a != NULL ? LW__I(a->sample) : LW__I(g->count);
    lw_tick before = k > g->first ? lw__grid_at(g->grid, g->grid_offset, k - 1) : 0;
    for (int i = 0; i < g->n_white; i++)
        kick(s, g, &g->white[i], s->now - before, k - g->first);
}

// ---- in words

void lw__white_describe(const lw_frozen *z, void (*say)(void *context, const char *text),
                        void *context)
{
    for (int i = 0; i < z->n_groups; i++)
        for (int k = 0; k < z->groups[i].n_white; k++) {
            const lw_noise_def *d = &z->groups[i].white[k].item->def;
            char text[400], density[40];
            lw_double_format(d->density, density);
            snprintf(text, sizeof text,
                     "noise \"%.80s\": white, density %s (unit of \"%.100s\" squared, times s, "
                     "two-sided), drawn at each anchor",
                     d->name, density, d->on);
            say(context, text);
            snprintf(text, sizeof text,
                     "  metrics and records of the group of \"%.80s\" are at anchors: between them "
                     "the state goes on without noise",
                     z->groups[i].name);
            say(context, text);
        }
}
