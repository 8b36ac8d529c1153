// Operations of pulse-width modulated outputs, compiled once for any width.
//
//   stretch  phase 2, after the latch: legs of a new stretch, their edges planned
//   edge     phase 1: a leg switches
//   written  phase 1: a value that acts at once
//   search   phase 8: where the current next comes to its peak

#include "run/pwm.h"

#include "run/op_dac.h"
#include "run/op_signal.h"

#include <math.h>

// Share of the period for which leg k is high, from what was taken over.
static double leg_share(const lw__lane *s, const lw__pwm *m, int k, int W, int L)
{
    const lw_pwm_def *d = &m->item->def;
    double v = LW__F(m->dac->held);
    if (d->writes_level)
        v /= d->supply;
    double share = d->bridge == LW_PWM_HALF ? v : 0.5 * (1 + (k == 0 ? v : -v));
    if (d->counts > 0)
        share = nearest(share * (double)d->counts) / (double)d->counts;
    share = share < m->least ? 0 : share;
    share = 1 - share < m->least ? 1 : share;
    return clamp(share, 0, 1);
}

static double level_of(lw__lane *s, const lw__pwm *m, double a, double b, int W, int L)
{
    double supply = read_signal(s, &m->supply, W, L);
    switch (m->item->def.bridge) {
    case LW_PWM_HALF:
        return supply * a;
    case LW_PWM_BIPOLAR:
        return supply * (2 * a - 1);
    default:
        return supply * (a - b);
    }
}

static void pwm_level(LW__CONTEXT, const lw__pwm *m, double level)
{
    if (!isfinite(level))
        lw__end_lane(s, LW_ERR_NOT_FINITE, m->name, "its level is not finite");
    if (m->tripped >= 0 && LW__I(m->tripped) > 0) // a trip holds it
        return;
    LW__F(m->level) = level;
    if (m->log >= 0)
        lw__table_add(s, m->log, (double[]){lw__seconds(s->now), level, LW__F(m->duty)});
    lw__tell(p, &m->dac->observers, N);
    drive(LW__HERE, &m->drives, level);
}

//   search   phase 8: where the current next comes to its peak
static void note_duty(LW__CONTEXT, const lw__pwm *m, double share)
{
    LW__F(m->duty) = share;
    lw__tell(p, &m->dac->observers, N);
}

void lw__pwm_legs(LW__CONTEXT, const lw__pwm *m)
{
    double a = (double)LW__I(m->state), b = m->n_legs > 1 ? (double)LW__I(m->state + 1) : 0;
    pwm_level(LW__HERE, m, level_of(s, m, a, b, W, L));
}

// The mean of the pulses. The dead time takes its share from the leg that the current flows out of.
void lw__pwm_mean(LW__CONTEXT, const lw__pwm *m)
{
    double share[LW__PWM_LEGS] = {0, 0};
    for (int k = 0; k < m->n_legs; k++) {
        share[k] = leg_share(s, m, k, W, L);
        if (m->dead > 0 && share[k] > 0 && share[k] < 1) {
            double i = read_signal(s, &m->current, W, L) * (k == 0 ? 1 : -1);
            share[k] -= (i > 0 ? 1 : i < 0 ? -1 : 0) * m->item->def.dead_time / m->seconds;
            share[k] = clamp(share[k], 0, 1);
        }
    }
    pwm_level(LW__HERE, m, level_of(s, m, share[0], share[1], W, L));
}

// Leg k goes to `high`: now, or after the dead time where the current keeps it where it is.
static int leg_moves(LW__CONTEXT, const lw__pwm *m, int k, int high)
{
    (void)p;
    (void)N;
    lw_tick *due = &LW__I(s->z->due + m->edge[k]);
    *due = LW_NEVER;
    LW__I(m->moved + k) = 1;
    if (LW__I(m->state + k) == high)
        return 0;
    if (m->dead > 0 && LW__I(m->wanted + k) != high) {
        double i = read_signal(s, &m->current, W, L) * (k == 0 ? 1 : -1);
        LW__I(m->wanted + k) = high;
        if ((i > 0) == high) {
            *due = s->now + m->dead;
            return 0;
        }
    }
    LW__I(m->wanted + k) = high;
    LW__I(m->state + k) = high;
    return 1;
}

// Plan leg k for the stretch that began at `began` and lasts `length` ticks; whether it changed at
// once. High at the start of the stretch (a falling edge ends it) or at its end.
static int plan_leg(LW__CONTEXT, const lw__pwm *m, int k, lw_tick began, lw_tick length,
                    int high_first)
{
    double high = leg_share(s, m, k, W, L) * (double)length;
    lw_tick at =
        began + (high_first ? (lw_tick)floor(high + 0.5) : length - (lw_tick)floor(high + 0.5));
    int starts = high_first ? at > began : at <= began;
    int changed = 0;
    if (began == s->now)
        LW__I(m->moved + k) = 0;
    if (LW__I(m->moved + k) != 0)
        return 0; // once a stretch
    if (began == s->now && LW__I(m->state + k) != starts) {
        changed = leg_moves(LW__HERE, m, k, starts);
        if (LW__I(s->z->due + m->edge[k]) != LW_NEVER)
            return changed; // dead time: the rest of the stretch is planned at its end
        LW__I(m->moved + k) = 0;
    }
    int ends = high_first ? 0 : 1;
    if (at >= began + length || (at <= began && began == s->now))
        LW__I(s->z->due + m->edge[k]) = LW_NEVER;
    else if (at <= s->now)
        changed |= leg_moves(LW__HERE, m, k, ends);
    else
        LW__I(s->z->due + m->edge[k]) = at;
    return changed;
}

static lw_tick stretch_at(const lw__pwm *m, int64_t k)
{
    return lw__grid_at(m->stretch, m->offset, k);
}

static int high_first(const lw__pwm *m, int64_t stretch)
{
    lw_pwm_shape shape = m->item->def.shape;
    return shape == LW_PWM_TRAILING || (shape == LW_PWM_CENTRE && stretch % 2 == 0);
}

// The register is taken over where the carrier reloads: every stretch, the even or the odd ones.
static void pwm_reload(LW__CONTEXT, const lw__pwm *m, int64_t k)
{
    lw_pwm_reload reload = m->item->def.reload;
    if (reload == LW_PWM_BOTH || (reload == LW_PWM_PEAK && k % 2 == 1) ||
        (reload == LW_PWM_VALLEY && k % m->per_period == 0))
        op_latch(LW__HERE, m->dac);
}

//   search   phase 8: where the current next comes to its peak
// Peak-current control: on at the valley, off where the current comes to what is wanted of it. The
// search runs after any change of the current's group or of the wanted current, as that of a
// comparator does, and looks as far as the group's grid or the greatest share.

// A leg that is still high has been so for a whole period.
static void peak_begins(LW__CONTEXT, const lw__pwm *m, int64_t k)
{
    if (LW__I(m->state) != 0)
        note_duty(LW__HERE, m, 1);
    int changed = k == 0 || m->supply.at.kind != LW__SIGNAL_CONSTANT;
    changed |= leg_moves(LW__HERE, m, 0, 1);
    if (changed)
        lw__pwm_legs(LW__HERE, m);
    lw__make_due(p, m->search_op, N);
}

void lw__pwm_search(LW__CONTEXT, const lw__pwm *m)
{
    (void)p;
    (void)N;
    if (LW__I(m->count) == 0 || LW__I(m->state) == 0)
        return;
    const lw_pwm_peak *peak = &m->item->def.peak;
    int64_t k = LW__I(m->count) - 1;
    lw_tick began = stretch_at(m, k), next = stretch_at(m, k + 1);
    lw_tick last = began + (lw_tick)floor(peak->most * (double)(next - began) + 0.5);
    lw_tick from = began + m->blanking, grid = lw__group_next(s, m->condition.group);
    lw__question ask = {.side = 1,
                        .offset = -peak->slope * lw__seconds(s->now - began),
                        .slope = -peak->slope,
                        .from = from > s->now ? from : s->now + 1,
                        .until = grid < last ? grid : last};
    lw__crossing found = lw__crossing_next(s, &m->condition, &ask);
    lw_tick off = found.tick < last ? found.tick : last;
    LW__I(s->z->due + m->edge[0]) = off < next ? off : LW_NEVER;
}

void lw__pwm_stretch(LW__CONTEXT, const lw__pwm *m)
{
    int64_t k = LW__I(m->count);
    pwm_reload(LW__HERE, m, k);
    lw_tick began = s->now, next = stretch_at(m, k + 1);
    LW__I(m->count) = k + 1;
    LW__I(s->z->due + m->timer) = next;
    if (m->by_peak) {
        peak_begins(LW__HERE, m, k);
        return;
    }
    note_duty(LW__HERE, m, leg_share(s, m, 0, W, L));
    if (m->item->def.averaged) {
        lw__pwm_mean(LW__HERE, m);
        return;
    }
    int changed = k == 0 || m->supply.at.kind != LW__SIGNAL_CONSTANT;
    for (int leg = 0; leg < m->n_legs; leg++)
        changed |= plan_leg(LW__HERE, m, leg, began, next - began, high_first(m, k));
    if (changed)
        lw__pwm_legs(LW__HERE, m);
}

void lw__pwm_edge(LW__CONTEXT, const lw__pwm *m)
{
    int changed = 0;
    int64_t stretch = LW__I(m->count) - 1;
    lw_tick began = stretch_at(m, stretch), length = stretch_at(m, stretch + 1) - began;
    if (m->by_peak)
        note_duty(LW__HERE, m, (double)(s->now - began) / (double)length);
    for (int k = 0; k < m->n_legs; k++) {
        if (LW__I(s->z->due + m->edge[k]) != s->now)
            continue;
        int waited = LW__I(m->wanted + k) != LW__I(m->state + k);
        int high = waited ? (int)LW__I(m->wanted + k) : !high_first(m, stretch);
        changed |= leg_moves(LW__HERE, m, k, high);
        if (waited && (high == high_first(m, stretch))) { // what the dead time kept waiting
            LW__I(m->moved + k) = 0;
            changed |= plan_leg(LW__HERE, m, k, began, length, high_first(m, stretch));
        }
    }
    if (changed)
        lw__pwm_legs(LW__HERE, m);
}

void lw__pwm_written(LW__CONTEXT, const lw__pwm *m)
{
    if (LW__I(m->count) == 0)
        return; // the first stretch takes it up
    note_duty(LW__HERE, m, leg_share(s, m, 0, W, L));
    if (m->item->def.averaged) {
        lw__pwm_mean(LW__HERE, m);
        return;
    }
    int64_t stretch = LW__I(m->count) - 1;
    lw_tick began = stretch_at(m, stretch), length = stretch_at(m, stretch + 1) - began;
    int changed = 0;
    for (int k = 0; k < m->n_legs; k++)
        changed |= plan_leg(LW__HERE, m, k, began, length, high_first(m, stretch));
    if (changed)
        lw__pwm_legs(LW__HERE, m);
}
