// Operations of groups: anchors, input changes, delayed inputs, corners of moving sources.
//
// Part of the driver (driver.c). A group's anchor moves at the group's own instants only.
#ifndef LATEWOOD_RUN_OP_GROUP_H
#define LATEWOOD_RUN_OP_GROUP_H

#include "io/source.h"
#include "run/motion.h"
#include "run/state.h"
#include "run/white.h"

// State of a group at the present tick into `out`. For one run the cells themselves are the lists
// that the kernel reads.
LW__INLINE void group_state(const lw__lane *s, const lw__group *g, int W, int L, double *out,
                            double *work)
{
    lw__changes c = {LW__I(g->list_n), &s->i[g->list_tick], &s->i[g->list_channel],
                     &s->f[g->list_du]};
    const double *x = &s->f[g->x], *u = &s->f[g->u_anchor];
    if (W != 1) {
        double *copy = work;
        work += g->n_x + g->n_u + LW__LIST_CAPACITY;
        for (int k = 0; k < g->n_x; k++)
            copy[k] = LW__F(g->x + k);
        for (int k = 0; k < g->n_u; k++)
            copy[g->n_x + k] = LW__F(g->u_anchor + k);
        for (int k = 0; k < c.n; k++) {
            copy[g->n_x + g->n_u + k] = LW__F(g->list_du + k);
            s->ticks[k] = LW__I(g->list_tick + k);
            s->ticks[LW__LIST_CAPACITY + k] = LW__I(g->list_channel + k);
        }
        x = copy;
        u = x + g->n_x;
        c.du = u + g->n_u;
        c.tick = s->ticks;
        c.channel = s->ticks + LW__LIST_CAPACITY;
    }
    lw__kernel_value(&g->kernel, LW__I(g->anchor), x, u, &c, s->now, out, work);
}

// Moving sources are put back on their closed form, so that no rounding builds up.
LW__INLINE void reset_generators(lw__lane *s, const lw__group *g, int W, int L)
{
    for (int k = 0; k < g->n_generators; k++) {
        const lw__generator *gen = &g->generators[k];
        if (gen->is_sine)
            lw__source_sine(gen->def, s->now, &LW__F(g->x + gen->state),
                            &LW__F(g->x + gen->state + 1));
        else
            LW__F(g->x + gen->state) = lw__source_value(gen->def, s->now);
    }
}

LW__INLINE void move_anchor(lw__lane *s, const lw__group *g, int W, int L)
{
    if (g->motion != NULL) {
        g->motion->advance(s, g);
        return;
    }
    if (LW__I(g->anchor) != s->now) {
        if (W == 1) {
            lw__changes c = {LW__I(g->list_n), &s->i[g->list_tick], &s->i[g->list_channel],
                             &s->f[g->list_du]};
            lw__kernel_advance(&g->kernel, LW__I(g->anchor), &s->f[g->x], &s->f[g->u_anchor], &c,
                               s->now, s->work);
        } else {
            double *out = s->work;
            group_state(s, g, W, L, out, s->work + g->n_x);
            for (int k = 0; k < g->n_x; k++)
                LW__F(g->x + k) = out[k];
        }
        LW__I(g->anchor) = s->now;
        LW__I(g->list_n) = 0;
        for (int k = 0; k < g->n_u; k++)
            LW__F(g->u_anchor + k) = LW__F(g->u_now + k);
    }
    if (g->n_generators > 0)
        reset_generators(s, g, W, L);
}

LW__INLINE void op_anchor(LW__CONTEXT, const lw__group *g)
{
    move_anchor(s, g, W, L);
    if (g->n_white > 0)
        lw__white_kick(s, g);
    if (g->timer >= 0 && LW__I(s->z->due + g->timer) == s->now) {
        int64_t k = LW__I(g->count) + 1;
        LW__I(g->count) = k;
        LW__I(s->z->due + g->timer) = lw__grid_at(g->grid, g->grid_offset, k);
    }
    lw__tell(p, &g->observers, N);
}

// Enter a change into the group's list: one entry an input and tick.
LW__INLINE void list_change(lw__lane *s, const lw__group *g, int channel, double du, int W, int L)
{
    int64_t n = LW__I(g->list_n);
    for (int64_t k = n - 1; k >= 0 && LW__I(g->list_tick + k) == s->now; k--)
        if (LW__I(g->list_channel + k) == channel) {
            LW__F(g->list_du + k) += du;
            return;
        }
    LW__I(g->list_tick + n) = s->now;
    LW__I(g->list_channel + n) = channel;
    LW__F(g->list_du + n) = du;
    LW__I(g->list_n) = n + 1;
    if (n + 1 == LW__LIST_CAPACITY)
        move_anchor(s, g, W, L);
}

// A new level on a channel from now on.
LW__INLINE void set_channel(LW__CONTEXT, const lw__group *g, int channel, double value)
{
    double du = value - LW__F(g->u_now + channel);
    if (du == 0)
        return;
    if (g->motion != NULL)
        g->motion->advance(s, g);
    LW__F(g->u_now + channel) = value;
    lw__tell(p, &g->observers, N);
    if (g->motion != NULL)
        g->motion->changed(s, g);
    else if (LW__I(g->anchor) == s->now)
        LW__F(g->u_anchor + channel) = value;
    else
        list_change(s, g, channel, du, W, L);
}

// A change that reaches its channel after the input's delay.
LW__INLINE void queue_change(lw__lane *s, const lw__channel *c, double value, int W, int L)
{
    int head = c->queue_i + c->capacity, count = head + 1;
    int64_t n = LW__I(count);
    if (n == c->capacity) {
        lw__end_lane(s, LW_ERR_CAPACITY, c->name, "too many changes in flight for its delay");
        return;
    }
    int64_t slot = (LW__I(head) + n) % c->capacity;
    LW__F(c->queue_f + slot) = value;
    LW__I(c->queue_i + slot) = s->now + c->delay;
    LW__I(count) = n + 1;
    if (n == 0)
        LW__I(s->z->due + c->timer) = s->now + c->delay;
}

LW__INLINE void op_delayed(LW__CONTEXT, const lw__group *g, int channel)
{
    const lw__channel *c = &g->channels[channel];
    int head = c->queue_i + c->capacity, count = head + 1;
    while (LW__I(count) > 0 && LW__I(c->queue_i + LW__I(head)) == s->now) {
        set_channel(LW__HERE, g, channel, LW__F(c->queue_f + LW__I(head)));
        LW__I(head) = (LW__I(head) + 1) % c->capacity;
        LW__I(count) -= 1;
    }
    LW__I(s->z->due + c->timer) = LW__I(count) > 0 ? LW__I(c->queue_i + LW__I(head)) : LW_NEVER;
}

LW__INLINE void drive(LW__CONTEXT, const lw__drives *d, double value)
{
    for (const lw__drive *to = d->list, *end = to + d->n; to < end; to++)
        if (to->delay > 0)
            queue_change(s, &to->group->channels[to->channel], value, W, L);
        else
            set_channel(LW__HERE, to->group, to->channel, value);
}

// A corner of a moving source: the slope changes.
LW__INLINE void op_turn(LW__CONTEXT, const lw__group *g, int generator)
{
    const lw__generator *gen = &g->generators[generator];
    if (gen->slope >= 0)
        set_channel(LW__HERE, g, gen->slope, lw__source_slope(gen->def, s->now));
    if (g->motion != NULL)
        g->motion->changed(s, g);
    int64_t k = LW__I(gen->count) + 1;
    LW__I(gen->count) = k;
    LW__I(s->z->due + gen->timer) = lw__source_change(gen->def, k);
    lw__tell(p, &g->observers, N);
}

#endif
