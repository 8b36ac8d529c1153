// Operations of loops: steps of the law, writes in flight and their arrival. Part of the driver.
#ifndef LATEWOOD_RUN_OP_LOOP_H
#define LATEWOOD_RUN_OP_LOOP_H

#include "run/op_dac.h"
#include "run/op_signal.h"
#include "run/track.h"

#include <latewood/draw.h>

#include <math.h>

// ---- writes

LW__INLINE void value_write(LW__CONTEXT, const lw__loop *l, const lw__value *v, double value,
                            int64_t job)
{
    if (l->newest && job < LW__I(v->job))
        return;
    LW__I(v->job) = job;
    LW__F(v->held) = value;
    lw__tell(p, &v->observers, N);
    drive(LW__HERE, &v->drives, value);
}

// `out`: cell of the first output.
LW__INLINE void write_outputs(LW__CONTEXT, const lw__loop *l, int64_t out, int64_t job,
                              lw_tick sampled)
{
    for (const lw__target *to = l->targets, *end = to + l->n_targets; to < end; to++) {
        double value = LW__F(out + to->output);
        if (to->dac != NULL)
            dac_write(LW__HERE, to->dac, value, job, sampled);
        else
            value_write(LW__HERE, l, to->value, value, job);
    }
}

LW__INLINE void op_arrive(LW__CONTEXT, const lw__loop *l)
{
    int64_t head = LW__I(l->head), count = LW__I(l->count);
    do {
        write_outputs(LW__HERE, l, l->flight_out + head * l->n_out, LW__I(l->flight_job + head),
                      LW__I(l->flight_sampled + head));
        head = (head + 1) & (l->capacity - 1);
        count--;
    } while (count > 0 && LW__I(l->flight_tick + head) == s->now);
    LW__I(l->head) = head;
    LW__I(l->count) = count;
    LW__I(s->z->due + l->timer) = count > 0 ? LW__I(l->flight_tick + head) : LW_NEVER;
}

LW__INLINE void copy_flight(lw__lane *s, const lw__loop *l, int64_t to, int64_t from, int W, int L)
{
    LW__I(l->flight_tick + to) = LW__I(l->flight_tick + from);
    LW__I(l->flight_job + to) = LW__I(l->flight_job + from);
    LW__I(l->flight_sampled + to) = LW__I(l->flight_sampled + from);
    for (int o = 0; o < l->n_out; o++)
        LW__F(l->flight_out + to * l->n_out + o) = LW__F(l->flight_out + from * l->n_out + o);
}

// Put a write in flight, in order of instant, then job.
LW__INLINE void send(lw__lane *s, const lw__loop *l, lw_tick at, int64_t job, lw_tick sampled,
                     int W, int L)
{
    int64_t head = LW__I(l->head), count = LW__I(l->count), k = count, mask = l->capacity - 1;
    if (count == l->capacity) {
        lw__end_lane(s, LW_ERR_CAPACITY, l->item->def.name, "too many writes in flight");
        return;
    }
    for (; k > 0 && LW__I(l->flight_tick + ((head + k - 1) & mask)) > at; k--)
        copy_flight(s, l, (head + k) & mask, (head + k - 1) & mask, W, L);
    int64_t slot = (head + k) & mask;
    LW__I(l->flight_tick + slot) = at;
    LW__I(l->flight_job + slot) = job;
    LW__I(l->flight_sampled + slot) = sampled;
    int o = 0;
    do
        LW__F(l->flight_out + slot * l->n_out + o) = LW__F(l->outs + o);
    while (++o < l->n_out);
    LW__I(l->count) = count + 1;
    if (k == 0)
        LW__I(s->z->due + l->timer) = at;
}

// ---- latency and fate

typedef struct outcome {
    lw_tick at; // of the write
    lw_fate fate;
} outcome;

LW__INLINE double draw_latency(lw__lane *s, const lw__loop *l, int64_t job, int W, int L)
{
    const lw__latency *y = &l->latency;
    double *memory = &s->f[l->memory];
    if (W == 1 || y->n_state == 0)
        return lw_timing_draw(y->timing, s->seed, s->run, (uint32_t)job, y->streams, memory);
    for (int k = 0; k < y->n_state; k++)
        s->work[k] = LW__F(l->memory + k);
    double value = lw_timing_draw(y->timing, s->seed, s->run, (uint32_t)job, y->streams, s->work);
    for (int k = 0; k < y->n_state; k++)
        LW__F(l->memory + k) = s->work[k];
    return value;
}

static inline lw_fate draw_fate(lw__lane *s, const lw__latency *y, lw_fate fate, uint32_t job)
{
    if (y->missed > 0 &&
        lw_draw_uniform((lw_address){s->seed, s->run, y->missed_stream, job}) < y->missed)
        return LW_FATE_MISSED;
    if (y->lost > 0 && fate == LW_FATE_WRITTEN &&
        lw_draw_uniform((lw_address){s->seed, s->run, y->lost_stream, job}) < y->lost)
        return LW_FATE_LOST;
    return fate;
}

// What becomes of job k, sampled at t: when its outputs are written, or that they are not.
LW__INLINE outcome latency_of(lw__lane *s, const lw__loop *l, int64_t job, lw_tick t, int W, int L)
{
    const lw__latency *y = &l->latency;
    outcome o = {LW_NEVER, LW_FATE_WRITTEN};
    if (y->timing != NULL) {
        o.at = t + (lw_tick)floor(draw_latency(s, l, job, W, L) * y->scale + 0.5);
    } else {
        const struct lw__latency_step *e = &y->list[y->n_list == 1 ? 0 : job % y->n_list];
        o.fate = e->fate;
        o.at = t + e->ticks;
        if (e->whole >= 0)
            o.at =
                lw_period_at(l->adc->period, l->adc->offset, LW__I(l->adc->sample) - 1 + e->whole);
    }
    if (y->by_chance)
        o.fate = draw_fate(s, y, o.fate, (uint32_t)job);
    return o;
}

// ---- steps

static inline void log_step(lw__lane *s, const lw__loop *l, int64_t job, lw_tick sampled, outcome o,
                            int W, int L)
{
    double row[5 + LW_LAW_MAX_PORTS + LW_LAW_MAX_STATES], *next = row + 5;
    int written = o.fate == LW_FATE_WRITTEN;
    row[0] = lw__seconds(sampled);
    row[1] = lw__seconds(s->now);
    row[2] = written ? lw__seconds(o.at) : (double)NAN;
    row[3] = written ? lw__seconds(o.at - sampled) : (double)NAN;
    row[4] = (double)job;
    for (int k = 0; k < l->n_out; k++)
        *next++ = LW__F(l->outs + k);
    for (int k = 0; k < l->law->n_state; k++)
        *next++ = LW__F(l->state + k);
    lw__table_add(s, l->log, row);
}

LW__INLINE void miss(LW__CONTEXT, const lw__loop *l, int64_t job)
{
    LW__I(l->missed) += 1;
    LW__I(l->n_missed) += 1;
    for (int t = 0; t < l->n_targets; t++) {
        const lw__dac *d = l->targets[t].dac;
        if (d != NULL && d->item->def.on_missed)
            dac_write(LW__HERE, d, d->item->def.missed, job, -1);
    }
}

// A law over cells of a wide block: gathered, stepped, put back.
static inline int step_wide(lw__lane *s, const lw__loop *l, const lw_law_time *time,
                            const double *in, int W, int L)
{
    double *state = s->work, *outs = state + l->law->n_state;
    for (int k = 0; k < l->law->n_state; k++)
        state[k] = LW__F(l->state + k);
    int failed = l->law->step(l->law->param, time, in, state, outs);
    for (int k = 0; k < l->law->n_state; k++)
        LW__F(l->state + k) = state[k];
    for (int k = 0; k < l->n_out; k++)
        LW__F(l->outs + k) = outs[k];
    return failed;
}

// The law itself: inputs read, state advanced, outputs held.
LW__INLINE void step_law(lw__lane *s, const lw__loop *l, int64_t job, lw_tick sampled, int W, int L)
{
    double in[LW_LAW_MAX_PORTS], sum = 0; // sum: not 0 if any output is not finite
    for (int k = 0; k < l->n_in; k++)
        in[k] = read_signal(s, &l->inputs[k], W, L);
    lw_tick before = LW__I(l->stepped_at);
    lw_law_time time = {.now = lw__seconds(s->now),
                        .nominal = l->nominal,
                        .dt = before < 0 ? l->nominal : lw__seconds(sampled - before),
                        .job = job,
                        .missed = LW__I(l->missed)};
    int failed = W == 1 ? l->step(l->param, &time, in, &s->f[l->state], &s->f[l->outs])
                        : step_wide(s, l, &time, in, W, L);
    for (int k = 0; k < l->n_out; k++)
        sum += LW__F(l->outs + k) - LW__F(l->outs + k);
    if (failed)
        lw__end_lane(s, LW_ERR_LAW, l->item->def.name, "its law failed");
    else if (sum != 0)
        lw__end_lane(s, LW_ERR_NOT_FINITE, l->item->def.name, "the law's output is not finite");
}

LW__INLINE void op_step(LW__CONTEXT, const lw__loop *l)
{
    lw_tick sampled = LW__I(l->adc->result);
    int64_t job = LW__I(l->jobs);
    LW__I(l->jobs) = job + 1;
    if (job > UINT32_MAX) {
        lw__end_lane(s, LW_ERR_CAPACITY, l->item->def.name, "more than 2^32 jobs in a run");
        return;
    }
    outcome o = latency_of(s, l, job, sampled, W, L);
    if (o.fate == LW_FATE_MISSED) {
        miss(LW__HERE, l, job);
        return;
    }
    step_law(s, l, job, sampled, W, L);
    if (s->status != LW_OK)
        return;
    LW__I(l->stepped_at) = sampled;
    LW__I(l->missed) = 0;
    lw__tell(p, &l->observers, N);
    if (l->log >= 0)
        log_step(s, l, job, sampled, o, W, L);
    if (o.fate == LW_FATE_LOST) {
        LW__I(l->n_lost) += 1;
        return;
    }
    if (l->observed)
        lw__track_latency(s, l->index, o.at - sampled);
    if (o.at <= s->now)
        write_outputs(LW__HERE, l, l->outs, job, sampled);
    else
        send(s, l, o.at, job, sampled, W, L);
}

#endif
