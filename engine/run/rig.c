// The rig as it is described: copies of definitions, checked one by one.
//
// Workload: a few dozen additions, once a point of a sweep.
//
// Invariants
// 1. A failed addition leaves the rig as it was.
// 2. Nothing refers to the caller's memory after an addition, except contexts it handed over.

#include "run/rig.h"

#include "base/alloc.h"
#include "base/text.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

lw_status lw__fail_at(const char *origin, lw_error *err, lw_status status, const char *format, ...)
{
    char text[LW_ERROR_TEXT];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    lw_error_set(err, status, "%s", text);
    return lw__blame(origin, err, status);
}

lw_status lw__blame(const char *origin, lw_error *err, lw_status status)
{
    if (origin != NULL && origin[0] != 0 && status < 0)
        lw_error_prefix(err, "%s: ", origin);
    return status;
}

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
    lw__free(rig->loops);
    lw__arena_free(rig->arena);
    lw__free(rig);
}

// ---- copies

// Room for one more item of `size` bytes; the lists grow by doubling.
static void *room(void **list, int n, size_t size)
{
    if ((n & (n - 1)) == 0) {
        void *grown = lw__realloc(*list, size * (size_t)(n == 0 ? 1 : 2 * n));
        if (grown == NULL)
            return NULL;
        *list = grown;
    }
    return (char *)*list + size * (size_t)n;
}

// Copies into the rig's arena; a failure is noted once and looked at at the end.
typedef struct copier {
    lw__arena *arena;
    int failed;
} copier;

static const char *copy_text(copier *c, const char *text)
{
    if (text == NULL)
        return NULL;
    const char *copy = lw__arena_text(c->arena, text);
    c->failed |= copy == NULL;
    return copy;
}

static void *copy_bytes(copier *c, const void *from, size_t size)
{
    if (from == NULL)
        return NULL;
    void *copy = lw__arena_get(c->arena, size + 1);
    if (copy != NULL)
        memcpy(copy, from, size);
    c->failed |= copy == NULL;
    return copy;
}

static const double *copy_numbers(copier *c, int n, const double *from)
{
    return copy_bytes(c, from, sizeof(double) * (size_t)n);
}

static const char *const *copy_texts(copier *c, int n, const char *const *from)
{
    const char **copy = copy_bytes(c, from, sizeof *from * (size_t)n);
    for (int i = 0; copy != NULL && i < n; i++)
        copy[i] = copy_text(c, from[i]);
    return copy;
}

static const lw_wire *copy_wires(copier *c, int n, const lw_wire *from)
{
    lw_wire *copy = copy_bytes(c, from, sizeof *from * (size_t)n);
    for (int i = 0; copy != NULL && i < n; i++) {
        copy[i].port = copy_text(c, from[i].port);
        copy[i].signal = copy_text(c, from[i].signal);
    }
    return copy;
}

static lw_status no_memory(const char *origin, lw_error *err)
{
    return lw__fail_at(origin, err, LW_ERR_MEMORY, "no memory for a rig's definitions");
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
    return NULL;
}

static lw_status check_new_name(const lw_rig *rig, const char *origin, const char *what,
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

// ---- checks of one field

typedef struct subject {
    const char *origin, *what, *name;
    lw_error *err;
} subject;

static lw_status field_error(const subject *s, const char *field, double value, const char *range)
{
    return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT, "%s \"%s\": %s is %.12g; %s", s->what,
                       s->name, field, value, range);
}

static lw_status check_finite(const subject *s, const char *field, double value)
{
    return isfinite(value) ? LW_OK : field_error(s, field, value, "a finite number is wanted");
}

static lw_status check_at_least_0(const subject *s, const char *field, double value)
{
    return isfinite(value) && value >= 0 ? LW_OK
                                         : field_error(s, field, value, "permitted from 0 on");
}

static lw_status check_time(const subject *s, const char *field, double value)
{
    lw_tick tick;
    if (!isfinite(value) || value < 0 || lw_tick_from_seconds(value, &tick) != LW_OK)
        return field_error(s, field, value, "a time from 0 to 9e6 s is wanted");
    return LW_OK;
}

static lw_status check_period(const subject *s, const char *field, lw_period period)
{
    if (period.num <= 0 || period.den <= 0 || period.num < period.den)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "%s \"%s\": %s is missing or below one tick of 1 ps", s->what, s->name,
                           field);
    return LW_OK;
}

#define TRY(call)                                                                                  \
    do {                                                                                           \
        lw_status try_ = (call);                                                                   \
        if (try_ != LW_OK)                                                                         \
            return try_;                                                                           \
    } while (0)

// ---- plants and connections

lw_status lw_rig_add_plant(lw_rig *rig, const char *origin, const char *name, const lw_plant *plant,
                           lw_error *err)
{
    TRY(check_new_name(rig, origin, "plant", name, err));
    lw_plant *own = NULL;
    TRY(lw__blame(origin, err, lw_plant_renamed(plant, NULL, NULL, NULL, &own, err)));
    copier c = {rig->arena, 0};
    lw__plant_item item = {copy_text(&c, origin), copy_text(&c, name), own, rig->n_places};
    lw__plant_item *at = room((void **)&rig->plants, rig->n_plants, sizeof item);
    if (at == NULL || c.failed) {
        lw_plant_free(own);
        return no_memory(origin, err);
    }
    *at = item;
    rig->n_plants++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_connect(lw_rig *rig, const char *origin, const char *from, const char *to,
                         lw_error *err)
{
    TRY(lw__blame(origin, err, lw__name_check("connection from", from, 1, err)));
    TRY(lw__blame(origin, err, lw__name_check("connection to", to, 1, err)));
    copier c = {rig->arena, 0};
    lw__connection_item item = {copy_text(&c, origin), copy_text(&c, from), copy_text(&c, to),
                                rig->n_places};
    lw__connection_item *at = room((void **)&rig->connections, rig->n_connections, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(origin, err);
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

static lw_status check_table(const subject *s, const lw_source_def *def)
{
    if (def->n < 1 || def->time == NULL || def->value == NULL)
        return field_error(s, "number of points", def->n, "at least 1 is wanted");
    for (int i = 0; i < def->n; i++) {
        TRY(check_time(s, "time", def->time[i]));
        TRY(check_finite(s, "value", def->value[i]));
        if (i > 0 && !(def->time[i] > def->time[i - 1]))
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "source \"%s\": time %d is %.12g after %.12g; times must rise",
                               s->name, i + 1, def->time[i], def->time[i - 1]);
    }
    return LW_OK;
}

static lw_status check_source_kind(const subject *s, const lw_source_def *def)
{
    switch (def->kind) {
    case LW_SOURCE_CONSTANT:
    case LW_SOURCE_STEP:
        return LW_OK;
    case LW_SOURCE_RAMP:
        TRY(check_finite(s, "slope", def->slope));
        if (!isnan(def->level) && (def->level - def->before) * def->slope < 0)
            return field_error(s, "to", def->level, "the slope leads away from it");
        return LW_OK;
    case LW_SOURCE_SINE:
        return check_at_least_0(s, "frequency", def->frequency);
    case LW_SOURCE_CHIRP:
        TRY(check_at_least_0(s, "from", def->frequency));
        TRY(check_at_least_0(s, "to", def->frequency_end));
        if (!(def->sweep > 0))
            return field_error(s, "over", def->sweep, "a time above 0 is wanted");
        return check_period(s, "every", def->every);
    case LW_SOURCE_PULSES:
        TRY(check_period(s, "every", def->period));
        if (!(def->width > 0) || !(def->width < lw_period_seconds(def->period)))
            return field_error(s, "width", def->width, "above 0 and below the period is wanted");
        return LW_OK;
    case LW_SOURCE_TABLE:
        return check_table(s, def);
    case LW_SOURCE_NOISE:
        TRY(check_at_least_0(s, "deviation", def->level));
        return check_period(s, "every", def->every);
    case LW_SOURCE_FUNCTION:
        return check_period(s, "every", def->every);
    }
    return field_error(s, "kind", (double)def->kind, "not a kind of source");
}

static lw_status check_source(const subject *s, const lw_source_def *def)
{
    TRY(check_finite(s, "level before", def->before));
    if (!(def->kind == LW_SOURCE_RAMP && isnan(def->level)))
        TRY(check_finite(s, "level", def->level));
    TRY(check_finite(s, "phase", def->phase));
    TRY(check_time(s, "at", def->at));
    return check_source_kind(s, def);
}

lw_status lw_rig_add_source(lw_rig *rig, const lw_source_def *def, lw_error *err)
{
    TRY(check_new_name(rig, def->origin, "source", def->name, err));
    subject s = {def->origin, "source", def->name, err};
    TRY(check_source(&s, def));
    copier c = {rig->arena, 0};
    lw__source_item item = {*def, rig->n_places};
    item.def.origin = copy_text(&c, def->origin);
    item.def.name = copy_text(&c, def->name);
    item.def.time = copy_numbers(&c, def->n, def->n > 0 ? def->time : NULL);
    item.def.value = copy_numbers(&c, def->n, def->n > 0 ? def->value : NULL);
    lw__source_item *at = room((void **)&rig->sources, rig->n_sources, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(def->origin, err);
    *at = item;
    rig->n_sources++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_add_value(lw_rig *rig, const char *origin, const char *name, double start,
                           lw_error *err)
{
    TRY(check_new_name(rig, origin, "value", name, err));
    subject s = {origin, "value", name, err};
    TRY(check_finite(&s, "start", start));
    copier c = {rig->arena, 0};
    lw__value_item item = {copy_text(&c, origin), copy_text(&c, name), start, rig->n_places};
    lw__value_item *at = room((void **)&rig->values, rig->n_values, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(origin, err);
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

static lw_status check_adc_clock(const subject *s, const lw_adc_def *def)
{
    if (def->after != NULL && def->every.num > 0)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": both every and after are stated; one trigger is wanted",
                           s->name);
    if (def->after == NULL)
        TRY(check_period(s, "every", def->every));
    TRY(check_time(s, "offset", def->offset));
    TRY(check_time(s, "takes", def->takes));
    TRY(check_time(s, "average_every", def->average_every));
    if (def->takes < last_sample(def))
        return field_error(s, "takes", def->takes,
                           "a conversion lasts at least until its last sample");
    if (def->after == NULL && def->takes > lw_period_seconds(def->every))
        return field_error(s, "takes", def->takes, "a conversion lasts at most one period");
    return LW_OK;
}

static lw_status check_adc(const subject *s, const lw_adc_def *def)
{
    if (def->n_channels < 1 || def->n_channels > LW_ADC_MAX_CHANNELS)
        return field_error(s, "number of channels", def->n_channels, "permitted 1 to 16");
    for (int i = 0; i < def->n_channels; i++) {
        TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->of[i], 1, s->err)));
        if (def->skew != NULL)
            TRY(check_time(s, "skew", def->skew[i]));
    }
    if (def->average < 1 || def->average > 1024)
        return field_error(s, "average", def->average, "permitted 1 to 1024");
    TRY(check_adc_clock(s, def));
    lw_status status = lw_quantiser_check(&def->quantiser, s->err);
    if (status != LW_OK) {
        lw_error_prefix(s->err, "adc \"%s\": ", s->name);
        return lw__blame(s->origin, s->err, status);
    }
    TRY(check_finite(s, "gain", def->gain));
    TRY(check_finite(s, "bias", def->bias));
    TRY(check_at_least_0(s, "noise", def->noise));
    TRY(check_finite(s, "start", def->start));
    return LW_OK;
}

lw_status lw_rig_add_adc(lw_rig *rig, const lw_adc_def *def, lw_error *err)
{
    TRY(check_new_name(rig, def->origin, "adc", def->name, err));
    subject s = {def->origin, "adc", def->name, err};
    TRY(check_adc(&s, def));
    copier c = {rig->arena, 0};
    lw__adc_item item = {*def, rig->n_places};
    item.def.origin = copy_text(&c, def->origin);
    item.def.name = copy_text(&c, def->name);
    item.def.of = copy_texts(&c, def->n_channels, def->of);
    item.def.skew = copy_numbers(&c, def->n_channels, def->skew);
    item.def.after = copy_text(&c, def->after);
    lw__adc_item *at = room((void **)&rig->adcs, rig->n_adcs, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(def->origin, err);
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

static lw_status check_dac_latch(const subject *s, const lw_dac_def *def)
{
    if (def->latch.num > 0 && def->latched_by != NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "dac \"%s\": latch is stated twice, as a period and as an adc", s->name);
    if (def->n_phases < 1 || def->n_phases > 4)
        return field_error(s, "number of phases", def->n_phases, "permitted 1 to 4");
    for (int i = 0; i < def->n_phases; i++) {
        TRY(check_time(s, "phase", def->phase[i]));
        if (i > 0 && !(def->phase[i] > def->phase[i - 1]))
            return field_error(s, "phase", def->phase[i], "phases must rise");
        if (def->latch.num > 0 && def->phase[i] >= lw_period_seconds(def->latch))
            return field_error(s, "phase", def->phase[i], "below one latch period is wanted");
    }
    return check_time(s, "set_up", def->set_up);
}

static lw_status check_dac(const subject *s, const lw_dac_def *def)
{
    if (def->to != NULL)
        TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->to, 1, s->err)));
    TRY(check_dac_latch(s, def));
    lw_status status = lw_quantiser_check(&def->quantiser, s->err);
    if (status != LW_OK) {
        lw_error_prefix(s->err, "dac \"%s\": ", s->name);
        return lw__blame(s->origin, s->err, status);
    }
    if (!isnan(def->slew) && !(def->slew > 0))
        return field_error(s, "slew", def->slew, "above 0 is wanted");
    TRY(check_at_least_0(s, "dead_band", def->dead_band));
    TRY(check_finite(s, "start", def->start));
    if (def->on_missed)
        TRY(check_finite(s, "missed", def->missed));
    return LW_OK;
}

lw_status lw_rig_add_dac(lw_rig *rig, const lw_dac_def *def, lw_error *err)
{
    TRY(check_new_name(rig, def->origin, "dac", def->name, err));
    subject s = {def->origin, "dac", def->name, err};
    TRY(check_dac(&s, def));
    copier c = {rig->arena, 0};
    lw__dac_item item = {*def, rig->n_places};
    item.def.origin = copy_text(&c, def->origin);
    item.def.name = copy_text(&c, def->name);
    item.def.to = copy_text(&c, def->to);
    item.def.latched_by = copy_text(&c, def->latched_by);
    lw__dac_item *at = room((void **)&rig->dacs, rig->n_dacs, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(def->origin, err);
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

static lw_status check_latency(const subject *s, const lw_latency *latency)
{
    if (latency->n_list > 0 && latency->timing != NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "loop \"%s\": latency is both a list and a timing", s->name);
    if (latency->n_list < 0 || latency->capacity < 0 || latency->capacity > 4096)
        return field_error(s, "in_flight", latency->capacity, "permitted 1 to 4096");
    for (int i = 0; i < latency->n_list; i++) {
        const lw_latency_entry *e = &latency->list[i];
        if (e->fate == LW_FATE_WRITTEN)
            TRY(e->in_samples ? check_at_least_0(s, "latency", e->value)
                              : check_time(s, "latency", e->value));
    }
    if (!(latency->lost >= 0 && latency->lost <= 1))
        return field_error(s, "lost", latency->lost, "a chance from 0 to 1 is wanted");
    if (!(latency->missed >= 0 && latency->missed <= 1))
        return field_error(s, "missed", latency->missed, "a chance from 0 to 1 is wanted");
    return LW_OK;
}

static lw_status check_wires(const subject *s, const char *side, int n, const lw_wire *wires,
                             int n_ports, const char *const *ports)
{
    for (int i = 0; i < n; i++) {
        int found = 0;
        for (int p = 0; p < n_ports; p++)
            found |= same(ports[p], wires[i].port);
        if (!found) {
            const char *near = lw_nearest_name(wires[i].port, ports, n_ports);
            return lw__fail_at(s->origin, s->err, LW_ERR_NAME,
                               "loop \"%s\": the law has no %s \"%s\"%s%s%s", s->name, side,
                               wires[i].port, near ? "; nearest \"" : "", near ? near : "",
                               near ? "\"" : "");
        }
        for (int j = 0; j < i; j++)
            if (same(wires[j].port, wires[i].port))
                return lw__fail_at(s->origin, s->err, LW_ERR_DUPLICATE,
                                   "loop \"%s\": %s \"%s\" is stated twice", s->name, side,
                                   wires[i].port);
        if (wires[i].signal == NULL)
            TRY(check_finite(s, wires[i].port, wires[i].constant));
    }
    return LW_OK;
}

static lw_status check_loop(const subject *s, const lw_loop_def *def)
{
    if (def->law == NULL)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT, "loop \"%s\": law is missing",
                           s->name);
    const lw_law_def *law = lw_law_look(def->law);
    TRY(check_wires(s, "input", def->n_inputs, def->inputs, law->n_in, law->in_names));
    TRY(check_wires(s, "output", def->n_outputs, def->outputs, law->n_out, law->out_names));
    for (int i = 0; i < law->n_in; i++) {
        int wired = 0;
        for (int j = 0; j < def->n_inputs; j++)
            wired |= same(def->inputs[j].port, law->in_names[i]);
        if (!wired)
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "loop \"%s\": %s is missing; the law reads it", s->name,
                               law->in_names[i]);
    }
    return check_latency(s, &def->latency);
}

lw_status lw_rig_add_loop(lw_rig *rig, const lw_loop_def *def, lw_error *err)
{
    TRY(check_new_name(rig, def->origin, "loop", def->name, err));
    subject s = {def->origin, "loop", def->name, err};
    TRY(check_loop(&s, def));
    copier c = {rig->arena, 0};
    lw__loop_item item = {.def = *def, .place = rig->n_places};
    item.def.origin = copy_text(&c, def->origin);
    item.def.name = copy_text(&c, def->name);
    item.def.on = copy_text(&c, def->on);
    item.def.inputs = copy_wires(&c, def->n_inputs, def->inputs);
    item.def.outputs = copy_wires(&c, def->n_outputs, def->outputs);
    item.def.latency.list =
        copy_bytes(&c, def->latency.list, sizeof *def->latency.list * (size_t)def->latency.n_list);
    lw__loop_item *at = room((void **)&rig->loops, rig->n_loops, sizeof item);
    if (at == NULL || c.failed)
        return no_memory(def->origin, err);
    item.law = lw_law_hold(def->law);
    item.timing = def->latency.timing != NULL ? lw_timing_hold(def->latency.timing) : NULL;
    *at = item;
    rig->n_loops++;
    rig->n_places++;
    return LW_OK;
}
