// The compiled driver of a plain loop.
//
// The same arithmetic on the same cells as the operations of the queue driver (op_*.h), in the
// same order, with everything constant about the loop taken out of the way: which timers there
// are, which cells things use, how many inputs and writes. A test runs both and compares blocks.
//
// Workload: the inner loop of most small studies; one call covers all periods up to the next
// change of a source, so that a period costs its arithmetic and little else.
//
// Invariants
// 1. On return every cell is what the queue driver would have left.
// 2. At most one write is in flight, and it arrives no later than the next sample.

#include "run/sprint.h"

#include "run/op_dac.h"
#include "run/op_signal.h"

#include <math.h>

enum { W = 1, L = 0 };

typedef struct dash {
    const lw__sprint *c;
    double *x, *u_anchor, *u_now;
    double *outs, *flight_out;
    int64_t *flight_tick, *flight_job, *flight_sampled;
    int64_t mask, head, count; // writes in flight
    lw_tick sample, arrive;    // due
    lw_tick limit;             // first tick that is not ours
    lw_tick whole;             // the period where it is a whole number of ticks, else 0
    lw_tick scalar_step;       // length that lw__kernel_scalar serves, 0: none
    int64_t k, job;            // sample and job numbers
    lw_tick stepped_at, anchor;
    int n_in, n_out;
    int other_inputs; // some input of the group but ours may have changed since the anchor
} dash;

// The least of the timers that are not the loop's own.
static lw_tick others(const lw__lane *s, const lw__sprint *c)
{
    lw_tick least = LW_NEVER;
    for (int t = 0; t < s->z->n_timers; t++)
        if (t != c->adc->timer && t != c->loop->timer && LW__I(s->z->due + t) < least)
            least = LW__I(s->z->due + t);
    return least;
}

LW__INLINE dash begin_dash(const lw__lane *s, const lw__sprint *c, lw_tick until)
{
    const lw__group *g = c->group;
    const lw__loop *l = c->loop;
    lw_tick other = others(s, c);
    lw_period period = c->adc->period;
    dash d = {.c = c,
              .x = &s->f[g->x],
              .u_anchor = &s->f[g->u_anchor],
              .u_now = &s->f[g->u_now],
              .outs = &s->f[l->outs],
              .flight_out = &s->f[l->flight_out],
              .flight_tick = &s->i[l->flight_tick],
              .flight_job = &s->i[l->flight_job],
              .flight_sampled = &s->i[l->flight_sampled],
              .mask = l->capacity - 1,
              .head = LW__I(l->head),
              .count = LW__I(l->count),
              .sample = LW__I(s->z->due + c->adc->timer),
              .arrive = LW__I(s->z->due + l->timer),
              .limit = other <= until ? other : until + 1,
              .k = LW__I(c->adc->sample),
              .job = LW__I(l->jobs),
              .stepped_at = LW__I(l->stepped_at),
              .anchor = LW__I(g->anchor),
              .scalar_step = g->n_x == 1 && g->kernel.n_grid > 0 ? g->kernel.grid[0].length : 0,
              .n_in = l->n_in,
              .n_out = l->n_out,
              .other_inputs = g->n_u > 1,
              .whole = period.den == 1 && until < LW_TICK_MAX - period.num ? period.num : 0};
    return d;
}

LW__INLINE void end_dash(lw__lane *s, const dash *d)
{
    const lw__loop *l = d->c->loop;
    LW__I(l->head) = d->head;
    LW__I(l->count) = d->count;
    LW__I(s->z->due + d->c->adc->timer) = d->sample;
    LW__I(s->z->due + l->timer) = d->arrive;
    LW__I(d->c->adc->sample) = d->k;
    LW__I(l->jobs) = d->job;
    LW__I(l->stepped_at) = d->stepped_at;
}

LW__INLINE void dash_anchor(lw__lane *s, dash *d)
{
    const lw__group *g = d->c->group;
    if (d->anchor == s->now)
        return;
    int64_t n_changes = LW__I(g->list_n);
    if (n_changes == 0 && s->now - d->anchor == d->scalar_step) {
        d->x[0] = lw__kernel_scalar(&g->kernel, d->x[0], d->u_anchor);
    } else {
        lw__changes c = {n_changes, &s->i[g->list_tick], &s->i[g->list_channel], &s->f[g->list_du]};
        lw__kernel_advance(&g->kernel, d->anchor, d->x, d->u_anchor, &c, s->now, s->work);
    }
    d->u_anchor[d->c->channel] = d->u_now[d->c->channel];
    for (int k = 0; d->other_inputs && k < g->n_u; k++)
        d->u_anchor[k] = d->u_now[k];
    d->other_inputs = 0; // they stand still while only our timers are due
    d->anchor = LW__I(g->anchor) = s->now;
    LW__I(g->list_n) = 0;
}

// A value reaches the plant through the dac.
LW__INLINE void dash_output(lw__lane *s, dash *d, double asked, int64_t job, lw_tick sampled)
{
    const lw__dac *dac = d->c->dac;
    const lw__group *g = d->c->group;
    double limited = clamp(asked, dac->ladder.lo, dac->ladder.hi), code;
    double v = quantise(&dac->ladder, limited, &code), du = v - d->u_now[d->c->channel];
    LW__F(dac->asked) = asked;
    LW__F(dac->limited) = limited;
    LW__F(dac->held) = v;
    LW__F(dac->code) = code;
    LW__F(dac->saturated) = limited != asked;
    LW__I(dac->changed_at) = s->now;
    LW__I(dac->job) = job;
    LW__I(dac->sampled) = sampled;
    if (du == 0)
        return;
    d->u_now[d->c->channel] = v;
    if (d->anchor == s->now) {
        d->u_anchor[d->c->channel] = v;
        return;
    }
    int64_t n = LW__I(g->list_n);
    LW__I(g->list_tick + n) = s->now;
    LW__I(g->list_channel + n) = d->c->channel;
    LW__F(g->list_du + n) = du;
    LW__I(g->list_n) = n + 1;
}

LW__INLINE void dash_arrive(lw__lane *s, dash *d)
{
    int64_t slot = d->head;
    d->head = (slot + 1) & d->mask;
    d->count = 0;
    d->arrive = LW_NEVER;
    dash_output(s, d, d->flight_out[slot * d->n_out + d->c->output], d->flight_job[slot],
                d->flight_sampled[slot]);
}

LW__INLINE void dash_convert(lw__lane *s, dash *d)
{
    const lw__adc *a = d->c->adc;
    double y = row_value(s, d->c->group, d->c->row, W, L) * a->gain + a->bias, code;
    if (!(fabs(y) <= 1.79e308))
        lw__end_lane(s, LW_ERR_NOT_FINITE, a->item->def.of[0], "the sampled value is not finite");
    LW__I(a->sampled_at) = s->now;
    LW__F(a->taken) = y;
    d->k++;
    d->sample = d->whole > 0 ? s->now + d->whole : lw__grid_at(a->period, a->offset, d->k);
    if (s->status != LW_OK)
        return;
    LW__F(a->input) = y;
    LW__F(a->value) = quantise(&a->ladder, y, &code);
    LW__F(a->code) = code;
    LW__I(a->reads) = 0;
    LW__I(a->result) = s->now;
}

LW__INLINE lw_tick dash_latency(lw__lane *s, const lw__loop *l, int64_t job)
{
    const lw__latency *y = &l->latency;
    if (y->timing == NULL)
        return y->list[0].ticks;
    double value =
        lw_timing_draw(y->timing, s->seed, s->run, (uint32_t)job, y->streams, &s->f[l->memory]);
    return (lw_tick)floor(value * y->scale + 0.5);
}

LW__INLINE void dash_step(lw__lane *s, dash *d, const double *const *from)
{
    const lw__loop *l = d->c->loop;
    double in[LW_LAW_MAX_PORTS];
    int64_t job = d->job++;
    lw_tick at = s->now + dash_latency(s, l, job);
    for (int k = 0; k < d->n_in; k++)
        in[k] = *from[k];
    lw_law_time time = {.now = lw__seconds(s->now),
                        .nominal = l->nominal,
                        .dt = d->stepped_at < 0 ? l->nominal : lw__seconds(s->now - d->stepped_at),
                        .job = job,
                        .missed = LW__I(l->missed)};
    double sum = 0;
    int failed = l->step(l->param, &time, in, &s->f[l->state], d->outs);
    int64_t slot = d->head;
    int o = 0;
    do
        sum += d->outs[o] - d->outs[o];
    while (++o < d->n_out);
    if (failed || sum != 0) {
        lw__end_lane(s, failed ? LW_ERR_LAW : LW_ERR_NOT_FINITE, l->item->def.name,
                     failed ? "its law failed" : "the law's output is not finite");
        return;
    }
    d->stepped_at = s->now;
    LW__I(l->missed) = 0;
    if (at <= s->now) {
        dash_output(s, d, d->outs[d->c->output], job, s->now);
        return;
    }
    d->flight_tick[slot] = d->arrive = at;
    d->flight_job[slot] = job;
    d->flight_sampled[slot] = s->now;
    d->count = 1;
    double *flight = d->flight_out + slot * d->n_out;
    o = 0;
    do
        flight[o] = d->outs[o];
    while (++o < d->n_out);
}

int64_t lw__sprint_run(lw__lane *s, const lw__sprint *sprint, lw_tick until)
{
    dash own = begin_dash(s, sprint, until), *d = &own;
    const double *from[LW_LAW_MAX_PORTS]; // where the law's inputs stand
    const lw__loop *l = sprint->loop;
    for (int k = 0; k < l->n_in; k++)
        from[k] = l->inputs[k].at.kind == LW__SIGNAL_CELL ? &LW__F(l->inputs[k].at.index)
                                                          : &l->inputs[k].constant;
    int64_t handled = 0;
    if (d->count > 1 || (d->count == 1 && d->arrive > d->sample))
        return 0;
    while (s->status == LW_OK) {
        lw_tick next = d->arrive < d->sample ? d->arrive : d->sample;
        if (next >= d->limit)
            break;
        s->now = next;
        handled++;
        if (next < d->sample) {
            dash_arrive(s, d);
            continue;
        }
        dash_anchor(s, d);
        if (d->arrive == next)
            dash_arrive(s, d);
        dash_convert(s, d);
        if (s->status == LW_OK)
            dash_step(s, d, from);
    }
    end_dash(s, d);
    return handled;
}
