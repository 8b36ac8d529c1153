// Freezing sources, values, adcs and dacs: names resolved, constants formed, cells reserved.

#include "run/comparator.h"
#include "run/event.h"
#include "run/freezer.h"

#include "io/source.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static lw_tick ticks(double seconds)
{
    lw_tick t = 0;
    return lw_tick_from_seconds(seconds, &t) == LW_OK ? t : LW_NEVER;
}

void lw__ladder_make(const lw_quantiser *q, lw__ladder *out)
{
    *out = (lw__ladder){.lo = isnan(q->lo) ? -(double)INFINITY : q->lo,
                        .hi = isnan(q->hi) ? (double)INFINITY : q->hi,
                        .bits = q->bits,
                        .floors = q->rounding == LW_ROUND_FLOOR};
    if (q->bits == 0)
        return;
    int exponent;
    out->lsb = ldexp(q->hi - q->lo, -q->bits);
    out->lowest = q->lo / out->lsb;
    out->highest = q->hi / out->lsb - 1;
    if (frexp(out->lsb, &exponent) == 0.5)
        out->per_lsb = 1 / out->lsb;
}

static lw__drive feed_drive(const lw__freezer *w, const lw__feed *f)
{
    const lw__group *g = &w->z->groups[f->group];
    return (lw__drive){g, f->channel, g->channels[f->channel].delay};
}

lw_status lw__find_drives(lw__freezer *w, lw__driver_kind kind, int index, lw__drives *out)
{
    lw__drive *list = lw__freezer_get(w, sizeof *list * (size_t)(w->n_feeds + 1));
    if (list == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < w->n_feeds; i++)
        if (w->feeds[i].driver.kind == kind && w->feeds[i].driver.index == index)
            list[out->n++] = feed_drive(w, &w->feeds[i]);
    out->list = list;
    return LW_OK;
}

static lw_status freeze_source(lw__freezer *w, int index)
{
    lw__source *s = &w->z->sources[index];
    s->item = &w->rig->sources[index];
    const char *name = s->item->def.name;
    s->moving = lw__source_moves(&s->item->def);
    s->held = lw__freezer_double(w, name, "value", LW_SLICE_HELD, 1);
    s->count = lw__freezer_integer(w, name, "changes so far", LW_SLICE_SCHEDULE, 1);
    char stream[260];
    snprintf(stream, sizeof stream, "%s.noise", name);
    s->stream = lw_stream(stream);
    if (!s->moving)
        LW__TRY(lw__find_drives(w, LW__DRIVER_SOURCE, index, &s->drives));
    s->timer = lw__source_change(&s->item->def, 0) != LW_NEVER ? lw__freezer_timer(w) : -1;
    return s->count >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status freeze_value(lw__freezer *w, int index)
{
    lw__value *v = &w->z->values[index];
    const lw__value_item *item = &w->rig->values[index];
    v->name = item->name;
    v->start = item->start;
    v->held = lw__freezer_double(w, v->name, "value", LW_SLICE_HELD, 1);
    v->job = lw__freezer_integer(w, v->name, "job that wrote it", LW_SLICE_HELD, 1);
    LW__TRY(lw__find_drives(w, LW__DRIVER_VALUE, index, &v->drives));
    return v->job >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// ---- adc

static int by_instant(const void *a, const void *b)
{
    const struct lw__adc_step *x = a, *y = b;
    if (x->at != y->at)
        return x->at < y->at ? -1 : 1;
    return x->channel - y->channel;
}

// Every sampling instant of one conversion, in order of time, then channel.
static lw_status adc_steps(lw__freezer *w, lw__adc *a, const lw_adc_def *def)
{
    int n = def->n_channels * def->average, next = 0;
    struct lw__adc_step *steps = lw__freezer_get(w, sizeof *steps * (size_t)n);
    if (steps == NULL)
        return LW_ERR_MEMORY;
    for (int c = 0; c < def->n_channels; c++)
        for (int k = 0; k < def->average; k++) {
            double skew = def->skew != NULL ? def->skew[c] : 0;
            steps[next++] = (struct lw__adc_step){ticks(skew + k * def->average_every), c};
        }
    qsort(steps, (size_t)n, sizeof *steps, by_instant);
    a->steps = steps;
    a->n_steps = n;
    return LW_OK;
}

static lw_status adc_cells(lw__freezer *w, lw__adc *a, const lw_adc_def *def)
{
    const char *name = def->name;
    int n = def->n_channels;
    a->value = lw__freezer_double(w, name, "value", LW_SLICE_HELD, n);
    a->code = lw__freezer_double(w, name, "code", LW_SLICE_HELD, n);
    a->input = lw__freezer_double(w, name, "input", LW_SLICE_HELD, n);
    a->sum = lw__freezer_double(w, name, "sum of samples", LW_SLICE_IN_FLIGHT, n);
    a->taken = lw__freezer_double(w, name, "input under conversion", LW_SLICE_IN_FLIGHT, n);
    a->sample = lw__freezer_integer(w, name, "sample number", LW_SLICE_SCHEDULE, 1);
    a->sampled_at = lw__freezer_integer(w, name, "instant of the sample", LW_SLICE_IN_FLIGHT, 1);
    a->result = lw__freezer_integer(w, name, "instant of the value's sample", LW_SLICE_HELD, 1);
    a->step =
        lw__freezer_integer(w, name, "samples taken of this conversion", LW_SLICE_SCHEDULE, 1);
    a->reads = lw__freezer_integer(w, name, "reads of the value", LW_SLICE_HELD, n);
    return a->reads >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status adc_inputs(lw__freezer *w, lw__adc *a, const lw_adc_def *def)
{
    lw__reference *of = lw__freezer_get(w, sizeof *of * (size_t)def->n_channels);
    if (of == NULL)
        return LW_ERR_MEMORY;
    for (int c = 0; c < def->n_channels; c++)
        LW__TRY(lw__freezer_signal(w, def->origin, "adc", def->name, "of", def->of[c], &of[c]));
    a->of = of;
    return LW_OK;
}

static lw_status freeze_adc(lw__freezer *w, int index)
{
    lw__adc *a = &w->z->adcs[index];
    a->item = &w->rig->adcs[index];
    const lw_adc_def *def = &a->item->def;
    a->log = a->timer = a->done_timer = -1;
    a->n_channels = def->n_channels;
    a->index = index;
    a->takes = ticks(def->takes);
    a->offset = ticks(def->offset);
    a->period = def->every;
    a->has_clock = def->every.num > 0;
    a->inverse_average = 1.0 / def->average;
    a->stale_after = isnan(def->stale_after) ? LW_NEVER : ticks(def->stale_after);
    a->watches_reads = !isnan(def->reread) || a->stale_after != LW_NEVER;
    lw__ladder_make(&def->quantiser, &a->ladder);
    char stream[260];
    snprintf(stream, sizeof stream, "%s.noise", def->name);
    a->noise_stream = lw_stream(stream);
    LW__TRY(adc_steps(w, a, def));
    LW__TRY(adc_cells(w, a, def));
    if (a->has_clock || a->n_steps > 1 || a->steps[0].at > 0)
        a->timer = lw__freezer_timer(w);
    a->at_once = a->n_steps == 1 && a->steps[0].at == 0;
    a->plain = def->noise == 0 && def->average == 1;
    a->gain = def->gain;
    a->bias = def->bias;
    if (a->takes > 0)
        a->done_timer = lw__freezer_timer(w);
    return LW_OK;
}

// Adcs triggered by another: find it, take over its period; a ring of triggers has no clock.
static lw_status trigger_of_adc(lw__freezer *w, int index)
{
    lw__adc *a = &w->z->adcs[index];
    const lw_adc_def *def = &a->item->def;
    if (a->has_clock)
        return LW_OK;
    return lw__event_find(w, def->origin, "adc", def->name, "after", def->after, &a->trigger);
}

// A trigger that has no period: what is reckoned with is stated.
static lw_status nominal_of_adc(lw__freezer *w, lw__adc *a)
{
    const lw_adc_def *def = &a->item->def;
    if (a->period.num > 0)
        return LW_OK;
    if (isnan(def->nominal))
        return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": what \"%s\" triggers has no period; a nominal period is "
                           "wanted: nominal = \"100 us\"",
                           def->name, def->after);
    a->period = lw_period_of_ticks(ticks(def->nominal));
    a->sporadic = 1;
    return LW_OK;
}

static lw_status clock_of_adc(lw__freezer *w, int index)
{
    lw__adc *a = &w->z->adcs[index];
    if (!a->has_clock && lw__event_period(w, a->trigger, &a->period) != LW_OK)
        return lw__fail_at(a->item->def.origin, w->err, LW_ERR_LOOP,
                           "adc \"%s\": after: adcs trigger one another in a ring",
                           a->item->def.name);
    LW__TRY(nominal_of_adc(w, a));
    if (lw_tick_seconds(a->takes) > lw_period_seconds(a->period))
        return lw__fail_at(a->item->def.origin, w->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": takes is %.12g; at most one period of %.12g s is permitted",
                           a->item->def.name, lw_tick_seconds(a->takes),
                           lw_period_seconds(a->period));
    if (a->steps[a->n_steps - 1].at >= a->period.num / a->period.den)
        return lw__fail_at(a->item->def.origin, w->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": its last sample is %.12g s after the trigger; below one "
                           "period of %.12g s is wanted",
                           a->item->def.name, lw_tick_seconds(a->steps[a->n_steps - 1].at),
                           lw_period_seconds(a->period));
    return LW_OK;
}

// ---- dac

static lw_status dac_cells(lw__freezer *w, lw__dac *d, const char *name)
{
    d->asked = lw__freezer_double(w, name, "asked", LW_SLICE_HELD, 1);
    d->limited = lw__freezer_double(w, name, "limited", LW_SLICE_HELD, 1);
    d->held = lw__freezer_double(w, name, "output", LW_SLICE_HELD, 1);
    d->code = lw__freezer_double(w, name, "code", LW_SLICE_HELD, 1);
    d->saturated = lw__freezer_double(w, name, "saturated", LW_SLICE_HELD, 1);
    d->pending = lw__freezer_double(w, name, "register", LW_SLICE_HELD, 1);
    d->late = lw__freezer_double(w, name, "register for the edge after", LW_SLICE_HELD, 1);
    d->fresh = lw__freezer_integer(w, name, "register is fresh", LW_SLICE_HELD, 1);
    d->late_fresh =
        lw__freezer_integer(w, name, "register for the edge after is fresh", LW_SLICE_HELD, 1);
    d->job = lw__freezer_integer(w, name, "job that wrote it", LW_SLICE_HELD, 1);
    d->changed_at = lw__freezer_integer(w, name, "instant of the last output", LW_SLICE_HELD, 1);
    d->sampled = lw__freezer_integer(w, name, "sample behind the output", LW_SLICE_HELD, 1);
    d->pending_sampled =
        lw__freezer_integer(w, name, "sample behind the register", LW_SLICE_HELD, 1);
    d->late_sampled =
        lw__freezer_integer(w, name, "sample behind the register after", LW_SLICE_HELD, 1);
    d->latch_count = lw__freezer_integer(w, name, "edges so far", LW_SLICE_SCHEDULE, 1);
    return d->latch_count >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// A comparator or a task whose edge or finish latches; LW__EVENT_NONE where there is none.
static lw__event latching_event(const lw__freezer *w, const char *name)
{
    for (int i = 0; i < w->rig->n_comparators; i++)
        if (strcmp(w->rig->comparators[i].def.name, name) == 0)
            return (lw__event){LW__EVENT_COMPARATOR, i};
    for (int i = 0; i < w->rig->n_tasks; i++)
        if (strcmp(w->rig->tasks[i].def.name, name) == 0)
            return (lw__event){LW__EVENT_TASK, i};
    return (lw__event){LW__EVENT_NONE, -1};
}

// The latch clock: a period of its own or that of an adc; phases within it.
static lw_status dac_latch(lw__freezer *w, lw__dac *d, const lw_dac_def *def)
{
    d->timer = -1;
    d->latch = def->latch;
    const char *names[256];
    int n = 0;
    for (int i = 0; def->latched_by != NULL && i < w->z->n_adcs; i++) {
        const lw__adc *a = &w->z->adcs[i];
        if (n < 256)
            names[n++] = a->item->def.name;
        if (strcmp(a->item->def.name, def->latched_by) == 0 && a->has_clock) {
            d->latch = a->period;
            d->latch_offset = a->offset;
        }
    }
    if (def->latched_by != NULL && d->latch.num == 0)
        d->latched_by = latching_event(w, def->latched_by);
    if (def->latched_by != NULL && d->latch.num == 0 && d->latched_by.kind == LW__EVENT_NONE) {
        const char *near = lw_nearest_name(def->latched_by, names, n);
        return lw__fail_at(def->origin, w->err, LW_ERR_NAME,
                           "dac \"%s\": latch: no adc \"%s\" with a clock of its own, no "
                           "comparator and no task of that "
                           "name%s%s%s",
                           def->name, def->latched_by, near ? "; nearest \"" : "", near ? near : "",
                           near ? "\"" : "");
    }
    int by_event = d->latched_by.kind != LW__EVENT_NONE;
    d->n_phases = d->latch.num > 0 ? def->n_phases : by_event || d->item->is_pwm == 1;
    d->set_up = ticks(def->set_up);
    for (int i = 0; i < d->n_phases; i++)
        d->phase[i] = ticks(def->phase[i]);
    if (d->latch.num > 0)
        d->timer = lw__freezer_timer(w);
    return LW_OK;
}

static lw_status freeze_dac(lw__freezer *w, int index)
{
    lw__dac *d = &w->z->dacs[index];
    d->item = &w->rig->dacs[index];
    const lw_dac_def *def = &d->item->def;
    d->log = d->tripped = -1;
    d->slew = isnan(def->slew) ? (double)INFINITY : def->slew;
    lw__ladder_make(&def->quantiser, &d->ladder);
    d->plain = isinf(d->slew) && def->dead_band == 0;
    LW__TRY(dac_cells(w, d, def->name));
    LW__TRY(dac_latch(w, d, def));
    return lw__find_drives(w, LW__DRIVER_DAC, index, &d->drives);
}

lw_status lw__freeze_converters(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_sources; i++)
        LW__TRY(freeze_source(w, i));
    for (int i = 0; i < z->n_values; i++)
        LW__TRY(freeze_value(w, i));
    for (int i = 0; i < z->n_adcs; i++)
        LW__TRY(freeze_adc(w, i));
    for (int i = 0; i < z->n_adcs; i++)
        LW__TRY(trigger_of_adc(w, i));
    for (int i = 0; i < z->n_adcs; i++)
        LW__TRY(clock_of_adc(w, i));
    for (int i = 0; i < z->n_dacs; i++)
        LW__TRY(freeze_dac(w, i));
    for (int i = 0; i < z->n_adcs; i++)
        LW__TRY(adc_inputs(w, &z->adcs[i], &z->adcs[i].item->def));
    return LW_OK;
}
