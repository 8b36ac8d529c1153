// Freezing pulse-width modulated outputs: carriers as grids, legs, cells; their words.

#include "run/pwm.h"

#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>
#include <string.h>

// Half of a period as a fraction; the instants of halves 0, 2, ... are those of the whole.
static lw_period half_of(lw_period p)
{
    if (p.num % 2 == 0)
        return (lw_period){p.num / 2, p.den};
    return (lw_period){p.num, 2 * p.den};
}

static void carrier(lw__pwm *m)
{
    const lw_pwm_def *d = &m->item->def;
    int centre = d->shape == LW_PWM_CENTRE;
    m->per_period = centre ? 2 : 1;
    m->stretch = centre ? half_of(d->carrier) : d->carrier;
    lw_tick_from_seconds(d->offset, &m->offset);
    m->seconds = lw_period_seconds(d->carrier);
}

// Under peak-current control nobody else says when to switch.
static lw_status refuse_writers(lw__freezer *w, const lw__pwm *m, const char *writer, int n,
                                const lw_wire *outputs)
{
    for (int k = 0; k < n; k++)
        if (outputs[k].signal != NULL && strcmp(outputs[k].signal, m->name) == 0)
            return lw__fail_at(m->item->def.origin, w->err, LW_ERR_ARGUMENT,
                               "pwm \"%s\": \"%s\" writes to it; its peak current is what "
                               "switches it: write to a value, and state that as peak.wanted",
                               m->name, writer);
    return LW_OK;
}

static lw_status peak_of(lw__freezer *w, lw__pwm *m)
{
    const lw_pwm_peak *peak = &m->item->def.peak;
    const char *origin = m->item->def.origin;
    if (peak->current == NULL)
        return LW_OK;
    m->by_peak = 1;
    lw_tick_from_seconds(peak->blanking, &m->blanking);
    LW__TRY(
        lw__freezer_signal(w, origin, "pwm", m->name, "peak.current", peak->current, &m->measured));
    m->wanted_current = (lw__reference){{LW__SIGNAL_CONSTANT, 0, 0}, peak->wanted};
    if (peak->wanted_of != NULL)
        LW__TRY(lw__freezer_signal(w, origin, "pwm", m->name, "peak.wanted", peak->wanted_of,
                                   &m->wanted_current));
    if (m->measured.at.kind != LW__SIGNAL_ROW || m->wanted_current.at.kind == LW__SIGNAL_ROW)
        return lw__fail_at(origin, w->err, LW_ERR_ARGUMENT,
                           "pwm \"%s\": peak.current is to be a signal of a plant, peak.wanted "
                           "none",
                           m->name);
    for (int i = 0; i < w->rig->n_loops; i++) {
        const lw_loop_def *l = &w->rig->loops[i].def;
        LW__TRY(refuse_writers(w, m, l->name, l->n_outputs, l->outputs));
    }
    for (int i = 0; i < w->rig->n_tasks; i++) {
        const lw_task_def *t = &w->rig->tasks[i].def;
        LW__TRY(refuse_writers(w, m, t->name, t->n_outputs, t->outputs));
    }
    return lw__condition_make(w, &m->measured, &m->wanted_current, &m->condition);
}

static lw_status signals(lw__freezer *w, lw__pwm *m)
{
    const lw_pwm_def *d = &m->item->def;
    m->supply.at.kind = m->current.at.kind = LW__SIGNAL_CONSTANT;
    m->supply.constant = d->supply;
    if (d->supply_of != NULL)
        LW__TRY(
            lw__freezer_signal(w, d->origin, "pwm", d->name, "supply", d->supply_of, &m->supply));
    if (d->current != NULL)
        LW__TRY(
            lw__freezer_signal(w, d->origin, "pwm", d->name, "current", d->current, &m->current));
    return LW_OK;
}

static lw_status cells(lw__freezer *w, lw__pwm *m)
{
    const char *name = m->name;
    int legs = m->n_legs;
    m->level = lw__freezer_double(w, name, "level", LW_SLICE_HELD, 1);
    m->duty = lw__freezer_double(w, name, "share", LW_SLICE_HELD, 1);
    m->count = lw__freezer_integer(w, name, "stretches so far", LW_SLICE_SCHEDULE, 1);
    m->state = lw__freezer_integer(w, name, "legs that are high", LW_SLICE_HELD, legs);
    m->wanted = lw__freezer_integer(w, name, "what legs go to", LW_SLICE_IN_FLIGHT, legs);
    m->moved = lw__freezer_integer(w, name, "legs that have switched", LW_SLICE_HELD, legs);
    if (m->moved < 0)
        return LW_ERR_MEMORY;
    m->timer = lw__freezer_timer(w);
    for (int k = 0; k < legs; k++)
        m->edge[k] = m->item->def.averaged ? -1 : lw__freezer_timer(w);
    return LW_OK;
}

lw_status lw__freeze_pwm_cells(lw__freezer *w)
{
    for (int i = 0; i < w->z->n_pwms; i++) {
        lw__pwm *m = &w->z->pwms[i];
        m->item = &w->rig->pwms[i];
        m->name = m->item->def.name;
        m->dac = &w->z->dacs[m->item->dac];
        m->n_legs = m->item->def.bridge == LW_PWM_UNIPOLAR ? 2 : 1;
        m->log = m->tripped = -1;
        LW__TRY(cells(w, m));
    }
    return LW_OK;
}

static lw_status freeze_pwm(lw__freezer *w, int index)
{
    lw__pwm *m = &w->z->pwms[index];
    lw_tick_from_seconds(m->item->def.dead_time, &m->dead);
    carrier(m);
    m->least = m->item->def.least_pulse / m->seconds;
    LW__TRY(signals(w, m));
    LW__TRY(peak_of(w, m));
    return lw__find_drives(w, LW__DRIVER_PWM, index, &m->drives);
}

double lw__pwm_first(const lw__pwm_item *item)
{
    const lw_pwm_def *d = &item->def;
    double share = d->writes_level ? d->start / d->supply : d->start;
    share = share > 1 ? 1 : share;
    if (d->averaged)
        return d->bridge == LW_PWM_HALF ? d->supply * (share > 0 ? share : 0)
                                        : d->supply * (share > -1 ? share : -1);
    return d->bridge == LW_PWM_BIPOLAR ? -d->supply : 0;
}

void lw__pwm_start(lw__lane *s, const lw__pwm *m)
{
    int W = s->width, L = s->lane;
    LW__F(m->level) = lw__pwm_first(m->item);
    LW__I(s->z->due + m->timer) = m->offset;
}

lw_status lw__freeze_pwms(lw__freezer *w)
{
    for (int i = 0; i < w->z->n_pwms; i++)
        LW__TRY(freeze_pwm(w, i));
    return LW_OK;
}

// ---- words

static void describe_peak(const lw__pwm *m, void (*say)(void *context, const char *text),
                          void *context)
{
    const lw_pwm_peak *peak = &m->item->def.peak;
    char text[700], wanted[120], blanking[96];
    if (peak->wanted_of != NULL)
        snprintf(wanted, sizeof wanted, "\"%.100s\"", peak->wanted_of);
    else
        snprintf(wanted, sizeof wanted, "%.9g", peak->wanted);
    lw_tick_format(m->blanking, blanking);
    snprintf(text, sizeof text,
             "  peak current: high at each valley until \"%.200s\" is at or above %s less %.9g a "
             "second since the valley; not before %s, at the latest at %.9g of the period",
             peak->current, wanted, peak->slope, blanking, peak->most);
    say(context, text);
}

void lw__pwms_describe(const lw_frozen *z, void (*say)(void *context, const char *text),
                       void *context)
{
    static const char *const shapes[] = {"trailing edge", "leading edge", "centre aligned"};
    static const char *const bridges[] = {"half bridge", "full bridge, bipolar",
                                          "full bridge, unipolar"};
    static const char *const reloads[] = {"at the valley", "at the peak", "at valley and peak",
                                          "at once"};
    char text[600];
    for (int i = 0; i < z->n_pwms; i++) {
        const lw_pwm_def *d = &z->pwms[i].item->def;
        snprintf(
            text, sizeof text,
            "pwm \"%.100s\": drives %.100s; %s, %s, carrier of %.9g Hz, %s; reloads %s; a %s is "
            "written",
            d->name, d->to, d->averaged ? "averaged" : "switched, edges at whole picoseconds",
            bridges[d->bridge], 1 / z->pwms[i].seconds, shapes[d->shape], reloads[d->reload],
            d->writes_level ? "level" : "share");
        say(context, text);
        if (d->supply_of != NULL)
            snprintf(text, sizeof text, "  supply: \"%.200s\", read at the start of each stretch",
                     d->supply_of);
        else
            snprintf(text, sizeof text, "  supply: %.9g", d->supply);
        say(context, text);
        if (z->pwms[i].by_peak)
            describe_peak(&z->pwms[i], say, context);
        if (d->counts > 0 || d->least_pulse > 0 || d->dead_time > 0) {
            snprintf(
                text, sizeof text,
                "  %lld steps a period (0: any width), least pulse %.6g s, dead time %.6g s%s%s",
                (long long)d->counts, d->least_pulse, d->dead_time,
                d->current != NULL ? " by the sign of " : "", d->current ? d->current : "");
            say(context, text);
        }
    }
}
