// Pulse-width modulated outputs as they are described. Each brings a dac along, which has its
// register, its range and its signals.

#include "run/definition.h"

#include "base/alloc.h"
#include "base/text.h"

#include <math.h>
#include <string.h>

lw_pwm_def lw_pwm_default(void)
{
    return (lw_pwm_def){.carrier = {0, 1}, .supply = 1, .peak = {.most = 1}};
}

static lw_status wrong(const lw__subject *s, const char *text)
{
    return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT, "pwm \"%s\": %s", s->name, text);
}

static lw_status check_peak(const lw__subject *s, const lw_pwm_def *def)
{
    const lw_pwm_peak *peak = &def->peak;
    if (peak->current == NULL)
        return LW_OK;
    if (def->averaged || def->shape != LW_PWM_TRAILING || def->bridge == LW_PWM_UNIPOLAR)
        return wrong(s, "peak: a switched pwm of trailing shape, half or bipolar, is wanted");
    if (def->counts > 0 || def->least_pulse > 0 || def->dead_time > 0 || def->on_missed ||
        def->start != 0 || def->reload != LW_PWM_VALLEY)
        return wrong(s, "peak: counts, least_pulse, dead_time, start, missed and reload have no "
                        "place beside it");
    if (peak->wanted_of == NULL)
        LW__TRY(lw__check_finite(s, "peak.wanted", peak->wanted));
    LW__TRY(lw__check_at_least_0(s, "peak.slope", peak->slope));
    LW__TRY(lw__check_time(s, "peak.blanking", peak->blanking));
    if (!(peak->most > 0 && peak->most <= 1))
        return lw__bad_field(s, "peak.most_duty", peak->most, "above 0 and at most 1 is wanted");
    if (peak->blanking >= peak->most * lw_period_seconds(def->carrier))
        return lw__bad_field(s, "peak.blanking", peak->blanking,
                             "less than most_duty of a period is wanted");
    return LW_OK;
}

static lw_status check_pwm(const lw__subject *s, const lw_pwm_def *def)
{
    LW__TRY(lw__blame(s->origin, s->err, lw__name_check("pwm to", def->to, 1, s->err)));
    LW__TRY(lw__check_period(s, "carrier", def->carrier));
    double period = lw_period_seconds(def->carrier);
    LW__TRY(lw__check_time(s, "offset", def->offset));
    if (def->offset >= period)
        return lw__bad_field(s, "offset", def->offset, "below one period of the carrier is wanted");
    if (!(def->supply > 0) || isinf(def->supply))
        return lw__bad_field(s, "supply", def->supply, "above 0 is wanted");
    if (def->shape != LW_PWM_CENTRE && (def->reload == LW_PWM_PEAK || def->reload == LW_PWM_BOTH))
        return wrong(s, "reload: a sawtooth has no peak to reload at; \"valley\" or \"at once\"");
    if (def->writes_level && def->supply_of != NULL)
        return wrong(s, "writes: with a supply that is a signal a share is written");
    if (def->counts < 0 || def->counts == 1)
        return lw__bad_field(s, "counts", (double)def->counts, "permitted from 2 on");
    LW__TRY(lw__check_time(s, "least_pulse", def->least_pulse));
    LW__TRY(lw__check_time(s, "dead_time", def->dead_time));
    if (def->least_pulse > period / 2)
        return lw__bad_field(s, "least_pulse", def->least_pulse, "at most half a period");
    if (def->dead_time > period / 4)
        return lw__bad_field(s, "dead_time", def->dead_time, "at most a quarter of a period");
    if ((def->dead_time > 0) != (def->current != NULL))
        return wrong(s, def->current != NULL ? "current has no place without a dead_time"
                                             : "dead_time: current is missing; its sign says which "
                                               "diode conducts");
    LW__TRY(lw__check_finite(s, "start", def->start));
    LW__TRY(check_peak(s, def));
    return def->on_missed ? lw__check_finite(s, "missed", def->missed) : LW_OK;
}

// The dac that comes with it: range in what is written.
static lw_dac_def dac_of(const lw_pwm_def *def)
{
    lw_dac_def dac = lw_dac_default();
    double high = def->writes_level ? def->supply : 1;
    dac.origin = def->origin;
    dac.name = def->name;
    dac.quantiser.lo = def->bridge == LW_PWM_HALF ? 0 : -high;
    dac.quantiser.hi = high;
    dac.start = def->start;
    dac.on_missed = def->on_missed;
    dac.missed = def->missed;
    return dac;
}

lw_status lw_rig_add_pwm(lw_rig *rig, const lw_pwm_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "pwm", def->name, err));
    lw__subject s = {def->origin, "pwm", def->name, err};
    LW__TRY(check_pwm(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__pwm_item item = {*def, rig->n_dacs, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.to = lw__copy_text(&c, def->to);
    item.def.supply_of = lw__copy_text(&c, def->supply_of);
    item.def.current = lw__copy_text(&c, def->current);
    item.def.peak.current = lw__copy_text(&c, def->peak.current);
    item.def.peak.wanted_of = lw__copy_text(&c, def->peak.wanted_of);
    lw__pwm_item *at = lw__room((void **)&rig->pwms, rig->n_pwms, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    lw_dac_def dac = dac_of(def);
    LW__TRY(lw_rig_add_dac(rig, &dac, err));
    rig->dacs[rig->n_dacs - 1].is_pwm = 1 + (def->reload == LW_PWM_AT_ONCE);
    *at = item;
    rig->n_pwms++;
    return LW_OK;
}
