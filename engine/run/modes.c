// Groups that are linear between switchings: carried along exactly from own event to own event.
//
// Workload: an advance each sample, input change and grid instant: a piece or two, and one more for
// each switching between.
//
// Invariants
// 1. Only `advance` writes cells. `row` and `look` do the same arithmetic on a copy.
// 2. What changes of inputs make true switches when time goes on or somebody looks, so that all
//    changes of one tick count together.
// 3. Instants of switchings are seconds since the anchor; they keep their digits in long runs.

#include "run/modes.h"

#include "run/op_group.h"

#include <math.h>
#include <stdint.h>
#include <stdio.h>

// ---- a copy of what moves

typedef struct copy_of {
    const lw__modes_group *m;
    lw__switched_state state;
    double *u, *work;
} copy_of;

static void open_copy(const lw__lane *s, const lw__group *g, copy_of *c)
{
    const lw__modes_group *m = g->moves;
    int W = s->width, L = s->lane;
    double *work = s->motion_work;
    c->m = m;
    c->state = (lw__switched_state){.x = work,
                                    .noise = work + m->system.n,
                                    .mode = (int)LW__I(m->mode),
                                    .anchor = LW__I(g->anchor),
                                    .switched_at = LW__I(m->switched_at),
                                    .in_a_row = LW__I(m->in_a_row),
                                    .n_switchings = LW__I(m->n_so_far)};
    c->u = c->state.noise + m->system.n_conditions;
    c->work = c->u + m->system.m;
    for (int k = 0; k < m->system.n; k++)
        c->state.x[k] = LW__F(g->x + k);
    for (int k = 0; k < m->system.n_conditions; k++)
        c->state.noise[k] = LW__F(m->noise + k);
    for (int k = 0; k < m->system.m; k++)
        c->u[k] = LW__F(g->u_now + k);
}

static void close_copy(lw__lane *s, const lw__group *g, const copy_of *c)
{
    const lw__modes_group *m = c->m;
    int W = s->width, L = s->lane;
    for (int k = 0; k < m->system.n; k++)
        LW__F(g->x + k) = c->state.x[k];
    for (int k = 0; k < m->system.n_conditions; k++)
        LW__F(m->noise + k) = c->state.noise[k];
    LW__I(m->mode) = c->state.mode;
    LW__I(m->switched_at) = c->state.switched_at;
    LW__I(m->in_a_row) = c->state.in_a_row;
    LW__I(m->n_so_far) = c->state.n_switchings;
    LW__I(g->anchor) = s->now;
}

int lw__modes_work(const lw__switched *q)
{
    return q->n + q->n_conditions + q->m + lw__switched_work(q);
}

// ---- stretches

typedef struct giver {
    const lw__group *g;
    lw_tick anchor;
    lw__take_stretch take;
    void *context;
} giver;

static int row_of_stretch(const lw__stretch *stretch, int row, double *c)
{
    return lw__switched_series(stretch->context, row, c);
}

static void give(void *context, const lw__switched_piece *piece)
{
    const giver *v = context;
    lw__stretch stretch = {.group = v->g,
                           .anchor = v->anchor,
                           .begin = piece->begin,
                           .end = piece->end,
                           .row = row_of_stretch,
                           .context = piece};
    v->take(v->context, &stretch);
}

// ---- the motion

static const char *words_of(lw_status status)
{
    return status == LW_ERR_CHATTER
               ? "it switches 1000 times in a row, each within 1 ns of the one before"
               : "its state is not finite";
}

// Move the copy to the present tick.
static lw_status move(const lw__lane *s, const lw__group *g, copy_of *c, lw__take_stretch take,
                      void *context, lw_tick *at)
{
    giver v = {g, c->state.anchor, take, context};
    double failed = 0;
    lw_status status = lw__switched_advance(&c->m->system, &c->state, c->u, 0,
                                            lw__seconds(s->now - c->state.anchor),
                                            take != NULL ? give : NULL, &v, c->work, &failed);
    *at = c->state.anchor + (lw_tick)floor(failed * 1e12);
    return status;
}

static void observe(void *context, const lw__stretch *stretch)
{
    lw__lane *s = context;
    lw__observe(s, stretch, s->now);
}

static void advance(lw__lane *s, const lw__group *g)
{
    int W = s->width, L = s->lane;
    if (s->status != LW_OK)
        return;
    if (LW__I(g->anchor) != s->now) {
        copy_of c;
        lw_tick at;
        open_copy(s, g, &c);
        lw_status status = move(s, g, &c, g->n_watchers > 0 ? observe : NULL, s, &at);
        if (status != LW_OK) {
            lw__end_lane_at(s, at, status, g->name, words_of(status));
            return;
        }
        close_copy(s, g, &c);
        if (g->n_watchers > 0)
            lw__observed(s, g, s->now);
    }
    if (g->n_generators > 0)
        reset_generators(s, g, W, L);
}

static void start(lw__lane *s, const lw__group *g)
{
    (void)s;
    (void)g;
}

static void changed(lw__lane *s, const lw__group *g)
{
    (void)s;
    (void)g;
}

static lw_status look(const lw__lane *s, const lw__group *g, lw__take_stretch take, void *context,
                      lw_tick *at, const char **text)
{
    copy_of c;
    open_copy(s, g, &c);
    lw_status status = move(s, g, &c, take, context, at);
    *text = words_of(status);
    return status;
}

static double row(const lw__lane *s, const lw__group *g, int number)
{
    copy_of c;
    lw_tick at;
    open_copy(s, g, &c);
    double since = lw__seconds(s->now - c.state.anchor);
    if (move(s, g, &c, NULL, NULL, &at) != LW_OK ||
        lw__switched_settle(&c.m->system, &c.state, c.u, since, c.work) != LW_OK)
        return (double)NAN;
    return lw__switched_row(&c.m->system, c.state.mode, number, c.state.x, c.u);
}

static void describe(const lw__group *g, void (*say)(void *context, const char *text),
                     void *context)
{
    const lw__modes_group *m = g->moves;
    char text[400];
    snprintf(text, sizeof text,
             "group of \"%s\": %d states, %d mode%s with %d switchings, linear between them: "
             "carried along exactly, switchings at their real instants; starts in \"%.100s\"",
             g->name, g->n_plant_states, m->system.n_modes, m->system.n_modes == 1 ? "" : "s",
             m->n_switchings, m->names[0]);
    say(context, text);
}

const struct lw__motion lw__modes_motion = {.name = "modes",
                                            .tolerance = 1e-12,
                                            .start = start,
                                            .advance = advance,
                                            .changed = changed,
                                            .row = row,
                                            .look = look,
                                            .describe = describe};
