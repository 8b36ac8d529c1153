// Operations of dacs: writes, latches, and the way of a value to the output. Part of the driver.
#ifndef LATEWOOD_RUN_OP_DAC_H
#define LATEWOOD_RUN_OP_DAC_H

#include "run/op_group.h"
#include "run/track.h"

#include <math.h>

// Round to the nearest whole number, ties to even, |v| < 2^51.
LW__INLINE double nearest(double v)
{
    const double magic = 6755399441055744.0;
    return (v + magic) - magic;
}

LW__INLINE double clamp(double v, double lo, double hi)
{
    v = v < lo ? lo : v;
    return v > hi ? hi : v;
}

LW__INLINE double quantise(const lw__ladder *q, double y, double *code)
{
    if (q->bits == 0) {
        *code = (double)NAN;
        return clamp(y, q->lo, q->hi);
    }
    double c = clamp(q->per_lsb > 0 ? y * q->per_lsb : y / q->lsb, q->lowest, q->highest);
    double n = nearest(c);
    if (q->floors && n > c)
        n -= 1;
    *code = n;
    return n * q->lsb;
}

// The step of the output is held within slew; small values give 0.
static inline double slew_and_band(const lw__dac *d, double v, double from, double elapsed)
{
    double most = d->slew * elapsed;
    v = clamp(v, from - most, from + most);
    return fabs(v) < d->item->def.dead_band ? 0 : v;
}

// A value reaches the output: range, slew, dead band, quantise.
LW__INLINE void dac_output(LW__CONTEXT, const lw__dac *d, double asked, lw_tick sampled)
{
    double limited = clamp(asked, d->ladder.lo, d->ladder.hi), v = limited, code;
    if (d->tripped >= 0 && LW__I(d->tripped) > 0) { // a trip holds the output
        LW__F(d->asked) = asked;
        lw__tell(p, &d->observers, N);
        return;
    }
    if (!d->plain)
        v = slew_and_band(d, v, LW__F(d->held), lw__seconds(s->now - LW__I(d->changed_at)));
    v = quantise(&d->ladder, v, &code);
    LW__F(d->asked) = asked;
    LW__F(d->limited) = limited;
    LW__F(d->held) = v;
    LW__F(d->code) = code;
    LW__F(d->saturated) = limited != asked;
    if (d->observed)
        lw__track_output(s, d, LW__I(d->changed_at), LW__I(d->sampled));
    LW__I(d->changed_at) = s->now;
    LW__I(d->sampled) = sampled;
    if (d->log >= 0)
        lw__table_add(s, d->log,
                      (double[]){lw__seconds(s->now), asked, limited, v, code, limited != asked});
    if (d->gaps)
        lw__dac_changed(s, d);
    lw__tell(p, &d->observers, N);
    if (d->acts_at_once)
        lw__make_all_due(p, &d->written, N);
    drive(LW__HERE, &d->drives, v);
}

LW__INLINE void dac_write(LW__CONTEXT, const lw__dac *d, double value, int64_t job, lw_tick sampled)
{
    if (d->newest && job < LW__I(d->job))
        return;
    LW__I(d->job) = job;
    if (d->n_phases == 0) {
        dac_output(LW__HERE, d, value, sampled);
    } else if (d->timer < 0 || s->now + d->set_up <= LW__I(s->z->due + d->timer)) {
        LW__F(d->pending) = value;
        LW__I(d->pending_sampled) = sampled;
        LW__I(d->fresh) = 1;
    } else {
        LW__F(d->late) = value;
        LW__I(d->late_sampled) = sampled;
        LW__I(d->late_fresh) = 1;
    }
}

LW__INLINE lw_tick latch_edge(const lw__dac *d, int64_t k)
{
    lw_tick period = lw__grid_at(d->latch, d->latch_offset, k / d->n_phases);
    return period == LW_NEVER ? LW_NEVER : period + d->phase[k % d->n_phases];
}

LW__INLINE void op_latch(LW__CONTEXT, const lw__dac *d)
{
    int64_t k = LW__I(d->latch_count) + 1;
    LW__I(d->latch_count) = k;
    if (d->timer >= 0)
        LW__I(s->z->due + d->timer) = latch_edge(d, k);
    if (LW__I(d->fresh)) {
        LW__I(d->fresh) = 0;
        dac_output(LW__HERE, d, LW__F(d->pending), LW__I(d->pending_sampled));
    }
    if (LW__I(d->late_fresh)) {
        LW__F(d->pending) = LW__F(d->late);
        LW__I(d->pending_sampled) = LW__I(d->late_sampled);
        LW__I(d->fresh) = 1;
        LW__I(d->late_fresh) = 0;
    }
}

#endif
