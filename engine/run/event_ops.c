// Operations of comparators and trips, compiled once for any width.
//
//   search   phase 8, after any change of the group or of the level: where is the next crossing?
//   cross    phase 0: it is here; the anchor moves, the output changes or is on its way
//   arrive   phase 0: a delayed change reaches the output
//   trip     phase 1: forces an output; release gives it back

#include "run/comparator.h"
#include "run/op_dac.h"
#include "run/pwm.h"

void lw__event_search(LW__CONTEXT, const lw__comparator *c)
{
    (void)p;
    (void)N;
    int beyond = LW__I(c->beyond) != 0, sign = beyond ? -c->side : c->side;
    lw_tick blind = LW__I(c->blind_until);
    lw__question ask = {.side = sign,
                        .offset = beyond ? -c->side * c->hysteresis : 0,
                        .from = blind > s->now ? blind : s->now + 1,
                        .until = lw__group_next(s, c->condition.group)};
    lw__crossing next = lw__crossing_next(s, &c->condition, &ask);
    // a trial that fails ahead of time says nothing: the group fails itself when it gets there
    LW__I(s->z->due + c->timer) = next.tick;
    LW__F(c->found) = lw__seconds(s->now) + next.since;
}

static void log_edge(lw__lane *s, const lw__comparator *c, double value, double crossed)
{
    if (c->log >= 0)
        lw__table_add(s, c->log, (double[]){lw__seconds(s->now), value, crossed});
}

static void comparator_output(LW__CONTEXT, const lw__comparator *c, int value, double crossed)
{
    lw_edge edge = c->item->def.edge;
    LW__F(c->out) = value;
    log_edge(s, c, value, crossed);
    lw__tell(p, &c->observers, N);
    lw__make_all_due(p, value ? &c->rises : &c->falls, N);
    if (edge == LW_EDGE_BOTH || (edge == LW_EDGE_RISES) == value)
        lw__make_all_due(p, &c->after, N);
}

// The first instant of a run: what stands beyond the level from the start is no crossing.
static void comparator_begins(lw__lane *s, const lw__comparator *c, int W, int L)
{
    int beyond = c->item->def.start;
    if (beyond < 0)
        beyond = c->side * lw__condition_value(s, &c->condition) >= 0;
    LW__I(c->known) = 1;
    LW__I(c->beyond) = beyond;
    LW__F(c->out) = beyond;
}

// More edges than a circuit would make while hardly any time passes.
static void count_edge(lw__lane *s, const lw__comparator *c, int W, int L)
{
    int quick = LW__I(c->n_events) > 0 && s->now - LW__I(c->crossed_at) <= LW__CHATTER_TIME;
    LW__I(c->in_a_row) = quick ? LW__I(c->in_a_row) + 1 : 0;
    LW__I(c->crossed_at) = s->now;
    LW__I(c->n_events) += 1;
    if (LW__I(c->in_a_row) >= LW__CHATTER_EDGES)
        lw__end_lane(s, LW_ERR_CHATTER, c->name,
                     "crosses its level 1000 times in a row, each within 1 ns of the one before; "
                     "give it a hysteresis, a delay or a blanking time");
}

static void queue_edge(lw__lane *s, const lw__comparator *c, int W, int L)
{
    int64_t n = LW__I(c->count), slot = (LW__I(c->head) + n) % LW__EDGES_IN_FLIGHT;
    if (n == LW__EDGES_IN_FLIGHT) {
        lw__end_lane(s, LW_ERR_CAPACITY, c->name, "more than 64 crossings within its delay");
        return;
    }
    LW__I(c->queue + slot) = s->now + c->delay;
    LW__F(c->queue_at + slot) = LW__F(c->found);
    LW__I(c->count) = n + 1;
    if (n == 0)
        LW__I(s->z->due + c->delay_timer) = s->now + c->delay;
}

void lw__event_cross(LW__CONTEXT, const lw__comparator *c)
{
    LW__I(s->z->due + c->timer) = LW_NEVER;
    lw__make_due(p, c->search_op, N);
    if (!LW__I(c->known)) {
        comparator_begins(s, c, W, L);
        return;
    }
    move_anchor(s, c->condition.group, W, L);
    lw__tell(p, &c->condition.group->observers, N);
    LW__I(c->beyond) = !LW__I(c->beyond);
    LW__I(c->blind_until) = s->now + c->blanking;
    count_edge(s, c, W, L);
    if (c->delay > 0)
        queue_edge(s, c, W, L);
    else
        comparator_output(LW__HERE, c, (int)LW__I(c->beyond), LW__F(c->found));
}

void lw__event_edge(LW__CONTEXT, const lw__comparator *c)
{
    int64_t head = LW__I(c->head);
    double crossed = LW__F(c->queue_at + head);
    LW__I(c->head) = head = (head + 1) % LW__EDGES_IN_FLIGHT;
    LW__I(c->count) -= 1;
    LW__I(s->z->due + c->delay_timer) = LW__I(c->count) > 0 ? LW__I(c->queue + head) : LW_NEVER;
    comparator_output(LW__HERE, c, LW__F(c->out) == 0, crossed);
}

// ---- trips

static void log_forced(lw__lane *s, const lw__dac *d, double to, int W, int L)
{
    if (d->log >= 0)
        lw__table_add(s, d->log,
                      (double[]){lw__seconds(s->now), LW__F(d->asked), LW__F(d->limited), to,
                                 (double)NAN, LW__F(d->saturated)});
}

static void force_dac(LW__CONTEXT, const lw__dac *d, double to)
{
    LW__F(d->held) = to;
    LW__F(d->code) = (double)NAN;
    LW__I(d->changed_at) = s->now;
    log_forced(s, d, to, W, L);
    lw__tell(p, &d->observers, N);
    drive(LW__HERE, &d->drives, to);
}

static void force_pwm(LW__CONTEXT, const lw__pwm *m, double to)
{
    LW__F(m->level) = to;
    if (m->log >= 0)
        lw__table_add(s, m->log, (double[]){lw__seconds(s->now), to, LW__F(m->duty)});
    lw__tell(p, &m->dac->observers, N);
    drive(LW__HERE, &m->drives, to);
}

void lw__event_trip(LW__CONTEXT, const lw__trip *t)
{
    int held = t->pwm != NULL ? t->pwm->tripped : t->dac->tripped;
    LW__I(t->n_trips) += 1;
    LW__I(held) += LW__I(t->active) == 0;
    LW__I(t->active) = 1;
    if (t->timer >= 0)
        LW__I(s->z->due + t->timer) = s->now + t->time;
    if (t->pwm != NULL)
        force_pwm(LW__HERE, t->pwm, t->item->def.to);
    else
        force_dac(LW__HERE, t->dac, t->item->def.to);
}

// A trip ends; with the last one on its output that takes what was asked for last, or what the
// legs of a pwm are at.
static void end_trip(LW__CONTEXT, const lw__trip *t)
{
    const lw__pwm *m = t->pwm;
    int held = m != NULL ? m->tripped : t->dac->tripped;
    LW__I(t->active) = 0;
    LW__I(held) -= 1;
    if (LW__I(held) != 0)
        return;
    if (m == NULL)
        dac_output(LW__HERE, t->dac, LW__F(t->dac->asked), LW__I(t->dac->sampled));
    else if (m->item->def.averaged)
        lw__pwm_mean(LW__HERE, m);
    else
        lw__pwm_legs(LW__HERE, m);
}

// The comparator clears, or the time is over: the later of both ends the trip.
void lw__event_release(LW__CONTEXT, const lw__trip *t)
{
    lw_trip_until until = t->item->def.until;
    if (t->timer >= 0 && LW__I(s->z->due + t->timer) == s->now) {
        LW__I(s->z->due + t->timer) = LW_NEVER;
        LW__I(t->active) = LW__I(t->active) != 0 ? 2 : 0;
    }
    int over = until == LW_TRIP_CLEAR || (until == LW_TRIP_TIME && LW__I(t->active) == 2);
    if (LW__I(t->active) != 0 && over && LW__F(t->by->out) == 0)
        end_trip(LW__HERE, t);
}

// Trips that hold until a latch edge of their output, or a period of the pwm, end with it.
void lw__event_latch(LW__CONTEXT, const lw__trip *t)
{
    if (t->pwm != NULL && LW__I(t->pwm->count) % t->pwm->per_period != 0)
        return; // the middle of a triangle
    if (LW__I(t->active) != 0 && LW__F(t->by->out) == 0)
        end_trip(LW__HERE, t);
}
