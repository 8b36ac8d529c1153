// The rig as it is described: copies of definitions, checked one by one.
//
// Workload: a few dozen additions, once a point of a sweep.
//
// Invariants
// 1. A failed addition leaves the rig as it was.
// 2. Nothing refers to the caller's memory after an addition, except contexts it handed over.

#include "run/definition.h"

#include "base/alloc.h"
#include "base/text.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

lw_status lw_rig_new(const char *name, lw_rig **out, lw_error *err)
{
    lw_status status = lw__name_check("rig", name, 1, err);
    if (status != LW_OK)
        return status;
    lw_rig *rig = lw__alloc(sizeof *rig);
    lw__arena *arena = rig != NULL ? lw__arena_new() : NULL;
    const char *copy = arena != NULL ? lw__arena_text(arena, name) : NULL;
    if (copy == NULL) {
        lw__arena_free(arena);
        lw__free(rig);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a rig");
    }
    rig->references = 1;
    rig->arena = arena;
    rig->name = copy;
    *out = rig;
    return LW_OK;
}

lw_rig *lw_rig_hold(lw_rig *rig)
{
    rig->references++;
    return rig;
}

void lw_rig_free(lw_rig *rig)
{
    if (rig == NULL || --rig->references > 0)
        return;
    for (int i = 0; i < rig->n_plants; i++)
        lw_plant_free(rig->plants[i].plant);
    for (int i = 0; i < rig->n_sources; i++)
        if (rig->sources[i].def.free_context != NULL)
            rig->sources[i].def.free_context(rig->sources[i].def.context);
    for (int i = 0; i < rig->n_loops; i++) {
        lw_law_free(rig->loops[i].law);
        lw_timing_free(rig->loops[i].timing);
    }
    lw__free(rig->plants);
    lw__free(rig->connections);
    lw__free(rig->sources);
    lw__free(rig->values);
    lw__free(rig->adcs);
    lw__free(rig->dacs);
    lw__free(rig->pwms);
    lw__free(rig->loops);
    lw__rig_free_cpu(rig);
    lw__rig_free_events(rig);
    lw__free(rig->noises);
    lw__free(rig->edges);
    lw__arena_free(rig->arena);
    lw__free(rig);
}

// ---- names

static int same(const char *a, const char *b)
{
    return strcmp(a, b) == 0;
}

static const char *what_has(const lw_rig *rig, const char *name)
{
    for (int i = 0; i < rig->n_plants; i++)
        if (same(rig->plants[i].name, name))
            return "plant";
    for (int i = 0; i < rig->n_sources; i++)
        if (same(rig->sources[i].def.name, name))
            return "source";
    for (int i = 0; i < rig->n_values; i++)
        if (same(rig->values[i].name, name))
            return "value";
    for (int i = 0; i < rig->n_adcs; i++)
        if (same(rig->adcs[i].def.name, name))
            return "adc";
    for (int i = 0; i < rig->n_dacs; i++)
        if (same(rig->dacs[i].def.name, name))
            return "dac";
    for (int i = 0; i < rig->n_loops; i++)
        if (same(rig->loops[i].def.name, name))
            return "loop";
    for (int i = 0; i < rig->n_cores; i++)
        if (same(rig->cores[i].def.name, name))
            return rig->cores[i].is_bus ? "bus" : "core";
    for (int i = 0; i < rig->n_tasks; i++)
        if (same(rig->tasks[i].def.name, name))
            return rig->tasks[i].is_frame ? "frame" : "task";
    for (int i = 0; i < rig->n_noises; i++)
        if (same(rig->noises[i].def.name, name))
            return "noise";
    return lw__rig_event_thing(rig, name);
}

lw_status lw__check_new_name(const lw_rig *rig, const char *origin, const char *what,
                             const char *name, lw_error *err)
{
    lw_status status = lw__name_check(what, name, 0, err);
    if (status != LW_OK)
        return lw__blame(origin, err, status);
    const char *other = what_has(rig, name);
    if (other != NULL)
        return lw__fail_at(origin, err, LW_ERR_DUPLICATE,
                           "%s \"%s\": the name is taken by a %s of this rig", what, name, other);
    return LW_OK;
}

// ---- plants and connections

lw_status lw_rig_add_plant(lw_rig *rig, const char *origin, const char *name, const lw_plant *plant,
                           lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, origin, "plant", name, err));
    lw_plant *own = NULL;
    LW__TRY(lw__blame(origin, err, lw_plant_renamed(plant, NULL, NULL, NULL, &own, err)));
    lw__copier c = {rig->arena, 0};
    lw__plant_item item = {lw__copy_text(&c, origin), lw__copy_text(&c, name), own, rig->n_places};
    lw__plant_item *at = lw__room((void **)&rig->plants, rig->n_plants, sizeof item);
    if (at == NULL || c.failed) {
        lw_plant_free(own);
        return lw__no_room(origin, err);
    }
    *at = item;
    rig->n_plants++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_connect(lw_rig *rig, const char *origin, const char *from, const char *to,
                         lw_error *err)
{
    LW__TRY(lw__blame(origin, err, lw__name_check("connection from", from, 1, err)));
    LW__TRY(lw__blame(origin, err, lw__name_check("connection to", to, 1, err)));
    lw__copier c = {rig->arena, 0};
    lw__connection_item item = {lw__copy_text(&c, origin), lw__copy_text(&c, from),
                                lw__copy_text(&c, to), rig->n_places};
    lw__connection_item *at = lw__room((void **)&rig->connections, rig->n_connections, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(origin, err);
    *at = item;
    rig->n_connections++;
    rig->n_places++;
    return LW_OK;
}

// ---- sources and values

lw_source_def lw_source_default(lw_source_kind kind)
{
    return (lw_source_def){.kind = kind,
                           .every = {0, 1},
                           .period = {0, 1},
                           .level = kind == LW_SOURCE_RAMP ? (double)NAN : 0.0};
}

static lw_status check_table(const lw__subject *s, const lw_source_def *def)
{
    if (def->n < 1 || def->time == NULL || def->value == NULL)
        return lw__bad_field(s, "number of points", def->n, "at least 1 is wanted");
    for (int i = 0; i < def->n; i++) {
        LW__TRY(lw__check_time(s, "time", def->time[i]));
        LW__TRY(lw__check_finite(s, "value", def->value[i]));
        if (i > 0 && !(def->time[i] > def->time[i - 1]))
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "source \"%s\": time %d is %.12g after %.12g; times must rise",
                               s->name, i + 1, def->time[i], def->time[i - 1]);
    }
    return LW_OK;
}

static lw_status check_source_kind(const lw__subject *s, const lw_source_def *def)
{
    switch (def->kind) {
    case LW_SOURCE_CONSTANT:
    case LW_SOURCE_STEP:
        return LW_OK;
    case LW_SOURCE_RAMP:
        LW__TRY(lw__check_finite(s, "slope", def->slope));
        if (!isnan(def->level) && (def->level - def->before) * def->slope < 0)
            return lw__bad_field(s, "to", def->level, "the slope leads away from it");
        return LW_OK;
    case LW_SOURCE_SINE:
        return lw__check_at_least_0(s, "frequency", def->frequency);
    case LW_SOURCE_CHIRP:
        LW__TRY(lw__check_at_least_0(s, "from", def->frequency));
        LW__TRY(lw__check_at_least_0(s, "to", def->frequency_end));
        if (!(def->sweep > 0))
            return lw__bad_field(s, "over", def->sweep, "a time above 0 is wanted");
        return lw__check_period(s, "every", def->every);
    case LW_SOURCE_PULSES:
        LW__TRY(lw__check_period(s, "every", def->period));
        if (!(def->width > 0) || !(def->width < lw_period_seconds(def->period)))
            return lw__bad_field(s, "width", def->width, "above 0 and below the period is wanted");
        return LW_OK;
    case LW_SOURCE_TABLE:
        return check_table(s, def);
    case LW_SOURCE_NOISE:
        LW__TRY(lw__check_at_least_0(s, "deviation", def->level));
        return lw__check_period(s, "every", def->every);
    case LW_SOURCE_FUNCTION:
        return lw__check_period(s, "every", def->every);
    }
    return lw__bad_field(s, "kind", (double)def->kind, "not a kind of source");
}

static lw_status check_source(const lw__subject *s, const lw_source_def *def)
{
    LW__TRY(lw__check_finite(s, "level before", def->before));
    if (!(def->kind == LW_SOURCE_RAMP && isnan(def->level)))
        LW__TRY(lw__check_finite(s, "level", def->level));
    LW__TRY(lw__check_finite(s, "phase", def->phase));
    LW__TRY(lw__check_time(s, "at", def->at));
    return check_source_kind(s, def);
}

lw_status lw_rig_add_source(lw_rig *rig, const lw_source_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "source", def->name, err));
    lw__subject s = {def->origin, "source", def->name, err};
    LW__TRY(check_source(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__source_item item = {*def, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.time = lw__copy_numbers(&c, def->n, def->n > 0 ? def->time : NULL);
    item.def.value = lw__copy_numbers(&c, def->n, def->n > 0 ? def->value : NULL);
    lw__source_item *at = lw__room((void **)&rig->sources, rig->n_sources, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_sources++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_add_value(lw_rig *rig, const char *origin, const char *name, double start,
                           lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, origin, "value", name, err));
    lw__subject s = {origin, "value", name, err};
    LW__TRY(lw__check_finite(&s, "start", start));
    lw__copier c = {rig->arena, 0};
    lw__value_item item = {lw__copy_text(&c, origin), lw__copy_text(&c, name), start,
                           rig->n_places};
    lw__value_item *at = lw__room((void **)&rig->values, rig->n_values, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(origin, err);
    *at = item;
    rig->n_values++;
    rig->n_places++;
    return LW_OK;
}

// ---- adc

lw_adc_def lw_adc_default(void)
{
    return (lw_adc_def){.n_channels = 1,
                        .every = {0, 1},
                        .average = 1,
                        .quantiser = lw_quantiser_default(),
                        .gain = 1,
                        .nominal = (double)NAN,
                        .reread = (double)NAN,
                        .stale_after = (double)NAN};
}

// The last sample of a conversion, after its trigger [s].
static double last_sample(const lw_adc_def *def)
{
    double last = 0;
    for (int i = 0; def->skew != NULL && i < def->n_channels; i++)
        last = def->skew[i] > last ? def->skew[i] : last;
    return last + (def->average - 1) * def->average_every;
}

static lw_status check_adc_clock(const lw__subject *s, const lw_adc_def *def)
{
    if (def->after != NULL && def->every.num > 0)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": both every and after are stated; one trigger is wanted",
                           s->name);
    if (def->after == NULL)
        LW__TRY(lw__check_period(s, "every", def->every));
    LW__TRY(lw__check_time(s, "offset", def->offset));
    LW__TRY(lw__check_time(s, "takes", def->takes));
    if (!isnan(def->nominal) && !(def->nominal >= 1e-12 && def->nominal <= 9e6))
        return lw__bad_field(s, "nominal", def->nominal, "a period from 1 ps to 9e6 s is wanted");
    LW__TRY(lw__check_time(s, "average_every", def->average_every));
    if (def->takes < last_sample(def))
        return lw__bad_field(s, "takes", def->takes,
                             "a conversion lasts at least until its last sample");
    if (def->after == NULL && def->takes > lw_period_seconds(def->every))
        return lw__bad_field(s, "takes", def->takes, "a conversion lasts at most one period");
    return LW_OK;
}

static lw_status check_adc(const lw__subject *s, const lw_adc_def *def)
{
    if (def->n_channels < 1 || def->n_channels > LW_ADC_MAX_CHANNELS)
        return lw__bad_field(s, "number of channels", def->n_channels, "permitted 1 to 16");
    for (int i = 0; i < def->n_channels; i++) {
        LW__TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->of[i], 1, s->err)));
        if (def->skew != NULL)
            LW__TRY(lw__check_time(s, "skew", def->skew[i]));
    }
    if (def->average < 1 || def->average > 1024)
        return lw__bad_field(s, "average", def->average, "permitted 1 to 1024");
    LW__TRY(check_adc_clock(s, def));
    lw_status status = lw_quantiser_check(&def->quantiser, s->err);
    if (status != LW_OK) {
        lw_error_prefix(s->err, "adc \"%s\": ", s->name);
        return lw__blame(s->origin, s->err, status);
    }
    LW__TRY(lw__check_finite(s, "gain", def->gain));
    LW__TRY(lw__check_finite(s, "bias", def->bias));
    LW__TRY(lw__check_at_least_0(s, "noise", def->noise));
    LW__TRY(lw__check_finite(s, "start", def->start));
    return LW_OK;
}

lw_status lw_rig_add_adc(lw_rig *rig, const lw_adc_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "adc", def->name, err));
    lw__subject s = {def->origin, "adc", def->name, err};
    LW__TRY(check_adc(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__adc_item item = {*def, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.of = lw__copy_texts(&c, def->n_channels, def->of);
    item.def.skew = lw__copy_numbers(&c, def->n_channels, def->skew);
    item.def.after = lw__copy_text(&c, def->after);
    item.def.note = lw__copy_text(&c, def->note);
    lw__adc_item *at = lw__room((void **)&rig->adcs, rig->n_adcs, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_adcs++;
    rig->n_places++;
    return LW_OK;
}

// ---- dac

lw_dac_def lw_dac_default(void)
{
    return (lw_dac_def){
        .latch = {0, 1}, .n_phases = 1, .quantiser = lw_quantiser_default(), .slew = (double)NAN};
}

static lw_status check_dac_latch(const lw__subject *s, const lw_dac_def *def)
{
    if (def->latch.num > 0 && def->latched_by != NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "dac \"%s\": latch is stated twice, as a period and as an adc", s->name);
    if (def->n_phases < 1 || def->n_phases > 4)
        return lw__bad_field(s, "number of phases", def->n_phases, "permitted 1 to 4");
    for (int i = 0; i < def->n_phases; i++) {
        LW__TRY(lw__check_time(s, "phase", def->phase[i]));
        if (i > 0 && !(def->phase[i] > def->phase[i - 1]))
            return lw__bad_field(s, "phase", def->phase[i], "phases must rise");
        if (def->latch.num > 0 && def->phase[i] >= lw_period_seconds(def->latch))
            return lw__bad_field(s, "phase", def->phase[i], "below one latch period is wanted");
    }
    return lw__check_time(s, "set_up", def->set_up);
}

static lw_status check_dac(const lw__subject *s, const lw_dac_def *def)
{
    if (def->to != NULL)
        LW__TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->to, 1, s->err)));
    LW__TRY(check_dac_latch(s, def));
    lw_status status = lw_quantiser_check(&def->quantiser, s->err);
    if (status != LW_OK) {
        lw_error_prefix(s->err, "dac \"%s\": ", s->name);
        return lw__blame(s->origin, s->err, status);
    }
    if (!isnan(def->slew) && !(def->slew > 0))
        return lw__bad_field(s, "slew", def->slew, "above 0 is wanted");
    LW__TRY(lw__check_at_least_0(s, "dead_band", def->dead_band));
    LW__TRY(lw__check_finite(s, "start", def->start));
    if (def->on_missed)
        LW__TRY(lw__check_finite(s, "missed", def->missed));
    return LW_OK;
}

lw_status lw_rig_add_dac(lw_rig *rig, const lw_dac_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "dac", def->name, err));
    lw__subject s = {def->origin, "dac", def->name, err};
    LW__TRY(check_dac(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__dac_item item = {.def = *def, .place = rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.to = lw__copy_text(&c, def->to);
    item.def.latched_by = lw__copy_text(&c, def->latched_by);
    lw__dac_item *at = lw__room((void **)&rig->dacs, rig->n_dacs, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_dacs++;
    rig->n_places++;
    return LW_OK;
}

// ---- loops

lw_loop_def lw_loop_default(void)
{
    return (lw_loop_def){.latency = {.arrival = LW_ARRIVAL_ORDER}};
}

static lw_status check_latency(const lw__subject *s, const lw_latency *latency)
{
    if (latency->n_list > 0 && latency->timing != NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "loop \"%s\": latency is both a list and a timing", s->name);
    if (latency->n_list < 0 || latency->capacity < 0 || latency->capacity > 4096)
        return lw__bad_field(s, "in_flight", latency->capacity, "permitted 1 to 4096");
    for (int i = 0; i < latency->n_list; i++) {
        const lw_latency_entry *e = &latency->list[i];
        if (e->fate == LW_FATE_WRITTEN)
            LW__TRY(e->in_samples ? lw__check_at_least_0(s, "latency", e->value)
                                  : lw__check_time(s, "latency", e->value));
    }
    if (!(latency->lost >= 0 && latency->lost <= 1))
        return lw__bad_field(s, "lost", latency->lost, "a chance from 0 to 1 is wanted");
    if (!(latency->missed >= 0 && latency->missed <= 1))
        return lw__bad_field(s, "missed", latency->missed, "a chance from 0 to 1 is wanted");
    return LW_OK;
}

static lw_status check_wires(const lw__subject *s, const char *side, int n, const lw_wire *wires,
                             int n_ports, const char *const *ports)
{
    for (int i = 0; i < n; i++) {
        int found = 0;
        for (int p = 0; p < n_ports; p++)
            found |= same(ports[p], wires[i].port);
        if (!found) {
            const char *near = lw_nearest_name(wires[i].port, ports, n_ports);
            return lw__fail_at(s->origin, s->err, LW_ERR_NAME,
                               "%s \"%s\": the law has no %s \"%s\"%s%s%s", s->what, s->name, side,
                               wires[i].port, near ? "; nearest \"" : "", near ? near : "",
                               near ? "\"" : "");
        }
        for (int j = 0; j < i; j++)
            if (same(wires[j].port, wires[i].port))
                return lw__fail_at(s->origin, s->err, LW_ERR_DUPLICATE,
                                   "%s \"%s\": %s \"%s\" is stated twice", s->what, s->name, side,
                                   wires[i].port);
        if (wires[i].signal == NULL)
            LW__TRY(lw__check_finite(s, wires[i].port, wires[i].constant));
    }
    return LW_OK;
}

lw_status lw__check_law_wires(const lw__subject *s, const lw_law *of, int n_in, const lw_wire *in,
                              int n_out, const lw_wire *out)
{
    const lw_law_def *law = lw_law_look(of);
    LW__TRY(check_wires(s, "input", n_in, in, law->n_in, law->in_names));
    LW__TRY(check_wires(s, "output", n_out, out, law->n_out, law->out_names));
    for (int i = 0; i < law->n_in; i++) {
        int wired = 0;
        for (int j = 0; j < n_in; j++)
            wired |= same(in[j].port, law->in_names[i]);
        if (!wired)
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "%s \"%s\": %s is missing; the law reads it", s->what, s->name,
                               law->in_names[i]);
    }
    return LW_OK;
}

static lw_status check_loop(const lw__subject *s, const lw_loop_def *def)
{
    if (def->law == NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT, "loop \"%s\": law is missing",
                           s->name);
    LW__TRY(
        lw__check_law_wires(s, def->law, def->n_inputs, def->inputs, def->n_outputs, def->outputs));
    return check_latency(s, &def->latency);
}

lw_status lw_rig_add_loop(lw_rig *rig, const lw_loop_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "loop", def->name, err));
    lw__subject s = {def->origin, "loop", def->name, err};
    LW__TRY(check_loop(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__loop_item item = {.def = *def, .place = rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.on = lw__copy_text(&c, def->on);
    item.def.inputs = lw__copy_wires(&c, def->n_inputs, def->inputs);
    item.def.outputs = lw__copy_wires(&c, def->n_outputs, def->outputs);
    item.def.latency.list = lw__copy_bytes(&c, def->latency.list,
                                           sizeof *def->latency.list * (size_t)def->latency.n_list);
    lw__loop_item *at = lw__room((void **)&rig->loops, rig->n_loops, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    item.law = lw_law_hold(def->law);
    item.timing = def->latency.timing != NULL ? lw_timing_hold(def->latency.timing) : NULL;
    *at = item;
    rig->n_loops++;
    rig->n_places++;
    return LW_OK;
}
