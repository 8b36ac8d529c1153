// Freezing loops: inputs and outputs resolved, latency lowered to ticks, cells reserved.

#include "run/freezer.h"
#include "run/schedule.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static int same(const char *a, const char *b)
{
    return strcmp(a, b) == 0;
}

// ---- inputs and outputs

static lw_status loop_inputs(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    lw__reference *inputs = lw__freezer_get(w, sizeof *inputs * (size_t)(l->law->n_in + 1));
    if (inputs == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < l->law->n_in; i++)
        for (int j = 0; j < def->n_inputs; j++) {
            const lw_wire *wire = &def->inputs[j];
            if (!same(wire->port, l->law->in_names[i]))
                continue;
            if (wire->signal == NULL) {
                inputs[i].at.kind = LW__SIGNAL_CONSTANT;
                inputs[i].constant = wire->constant;
                continue;
            }
            LW__TRY(lw__freezer_signal(w, def->origin, l->what, def->name, wire->port, wire->signal,
                                       &inputs[i]));
            if (inputs[i].at.kind != LW__SIGNAL_ADC)
                continue;
            const lw__adc *a = &w->z->adcs[inputs[i].at.index];
            l->adc = l->adc == NULL ? a : l->adc;
            if (!a->watches_reads) // then a read is of the cell
                inputs[i].at = (lw_signal){LW__SIGNAL_CELL, a->value + inputs[i].at.part, 0};
        }
    l->inputs = inputs;
    return LW_OK;
}

// The adc whose end of conversion steps the law.
static lw_status loop_trigger(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    const char *names[256];
    int n = 0;
    const lw__adc *found = def->on == NULL ? l->adc : NULL;
    for (int i = 0; def->on != NULL && i < w->z->n_adcs; i++) {
        const char *name = w->z->adcs[i].item->def.name;
        if (n < 256)
            names[n++] = name;
        if (same(name, def->on))
            found = &w->z->adcs[i];
    }
    l->adc = found;
    if (found != NULL)
        return LW_OK;
    if (def->on == NULL)
        return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                           "loop \"%s\": no input is an adc; state which adc it steps on",
                           def->name);
    const char *near = lw_nearest_name(def->on, names, n);
    return lw__fail_at(def->origin, w->err, LW_ERR_NAME, "loop \"%s\": on: no adc \"%s\"%s%s%s",
                       def->name, def->on, near ? "; nearest \"" : "", near ? near : "",
                       near ? "\"" : "");
}

static int writes(const lw__loop *l, lw__target target)
{
    for (int j = 0; j < l->n_targets; j++)
        if (l->targets[j].dac == target.dac && l->targets[j].value == target.value)
            return 1;
    return 0;
}

static int already_written(const lw_frozen *z, lw__target target)
{
    for (int i = 0; i < z->n_loops; i++)
        if (writes(&z->loops[i], target))
            return 1;
    for (int i = 0; i < z->n_tasks; i++)
        if (writes(&z->tasks[i].law, target))
            return 1;
    return 0;
}

static lw_status find_target(lw__freezer *w, const char *what, const lw_loop_def *def,
                             const char *name, lw__target *out)
{
    const char *names[512];
    int n = 0;
    for (int i = 0; i < w->z->n_dacs; i++) {
        if (same(w->z->dacs[i].item->def.name, name)) {
            *out = (lw__target){0, &w->z->dacs[i], NULL};
            return LW_OK;
        }
        if (n < 512)
            names[n++] = w->z->dacs[i].item->def.name;
    }
    for (int i = 0; i < w->z->n_values; i++) {
        if (same(w->z->values[i].name, name)) {
            *out = (lw__target){0, NULL, &w->z->values[i]};
            return LW_OK;
        }
        if (n < 512)
            names[n++] = w->z->values[i].name;
    }
    const char *near = lw_nearest_name(name, names, n);
    return lw__fail_at(def->origin, w->err, LW_ERR_NAME,
                       "%s \"%s\": output: no dac or value \"%s\"%s%s%s", what, def->name, name,
                       near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

static lw_status loop_outputs(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    lw__target *targets = lw__freezer_get(w, sizeof *targets * (size_t)(def->n_outputs + 1));
    if (targets == NULL)
        return LW_ERR_MEMORY;
    l->targets = targets;
    for (int j = 0; j < def->n_outputs; j++) {
        const char *name = def->outputs[j].signal;
        if (name == NULL)
            return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                               "%s \"%s\": output \"%s\" names no dac or value", l->what, def->name,
                               def->outputs[j].port);
        lw__target t;
        LW__TRY(find_target(w, l->what, def, name, &t));
        for (int p = 0; p < l->law->n_out; p++)
            if (same(l->law->out_names[p], def->outputs[j].port))
                t.output = p;
        if (already_written(w->z, t))
            return lw__fail_at(def->origin, w->err, LW_ERR_DUPLICATE,
                               "%s \"%s\": output: \"%s\" is already written by a loop or task",
                               l->what, def->name, name);
        targets[l->n_targets++] = t;
    }
    for (int j = 0; j < l->n_targets; j++)
        if (targets[j].dac != NULL && def->latency.arrival == LW_ARRIVAL_NEWEST)
            w->z->dacs[targets[j].dac - w->z->dacs].newest = 1;
    l->newest = def->latency.arrival == LW_ARRIVAL_NEWEST;
    return LW_OK;
}

// ---- latency

static lw_status bad_latency(lw__freezer *w, const lw_loop_def *def, double value, double least)
{
    return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                       "loop \"%s\": latency is %.12g s; it includes the conversion and is at "
                       "least %.12g s",
                       def->name, value, least);
}

static lw_status latency_list(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    const lw_latency *from = &def->latency;
    lw__latency *to = &l->latency;
    lw_tick takes = l->adc->takes;
    struct lw__latency_step *list =
        lw__freezer_get(w, sizeof *list * (size_t)(from->n_list > 0 ? from->n_list : 1));
    if (list == NULL)
        return LW_ERR_MEMORY;
    to->list = list;
    to->n_list = from->n_list;
    to->lowest = LW_NEVER;
    for (int i = 0; i < from->n_list; i++) {
        double value = from->list[i].value;
        list[i] = (struct lw__latency_step){0, -1, from->list[i].fate};
        if (list[i].fate != LW_FATE_WRITTEN)
            continue;
        double seconds = from->list[i].in_samples ? value * l->nominal : value;
        lw_tick_from_seconds(seconds, &list[i].ticks);
        const lw__adc *a = l->adc;
        if (from->list[i].in_samples && value == floor(value) && a->has_clock && a->period.den > 1)
            list[i].whole = (int64_t)value;
        if (list[i].ticks < takes)
            return bad_latency(w, def, seconds, lw_tick_seconds(takes));
        to->lowest = list[i].ticks < to->lowest ? list[i].ticks : to->lowest;
        to->highest = list[i].ticks > to->highest ? list[i].ticks : to->highest;
    }
    if (from->n_list == 0) {
        list[0] = (struct lw__latency_step){takes, -1, LW_FATE_WRITTEN};
        to->n_list = 1;
        to->lowest = to->highest = takes;
    }
    return LW_OK;
}

static lw_status latency_timing(lw__freezer *w, lw__loop *l, const lw_loop_def *def,
                                const lw_timing *timing)
{
    lw__latency *to = &l->latency;
    double lo, hi, unit = def->latency.timing_in_samples ? l->nominal : 1;
    lw_timing_support(timing, &lo, &hi);
    to->timing = timing;
    to->scale = unit * (double)LW_TICKS_PER_SECOND;
    to->n_streams = lw_timing_n_streams(timing);
    to->n_state = lw_timing_n_state(timing);
    lw_tick takes = l->adc->takes;
    lw_tick_from_seconds(lo * unit, &to->lowest);
    lw_tick_from_seconds(hi * unit, &to->highest);
    if (to->lowest < takes)
        return bad_latency(w, def, lo * unit, lw_tick_seconds(takes));
    uint32_t *streams = lw__freezer_get(w, sizeof *streams * (size_t)(to->n_streams + 1));
    if (streams == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < to->n_streams; i++) {
        char name[280];
        if (i == 0)
            snprintf(name, sizeof name, "%s.latency", def->name);
        else
            snprintf(name, sizeof name, "%s.latency#%d", def->name, i);
        streams[i] = lw_stream(name);
    }
    to->streams = streams;
    return LW_OK;
}

static lw_status loop_latency(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    lw__latency *to = &l->latency;
    char name[280];
    to->lost = def->latency.lost;
    to->missed = def->latency.missed;
    to->by_chance = to->lost > 0 || to->missed > 0;
    snprintf(name, sizeof name, "%s.lost", def->name);
    to->lost_stream = lw_stream(name);
    snprintf(name, sizeof name, "%s.missed", def->name);
    to->missed_stream = lw_stream(name);
    if (l->item->timing != NULL)
        return latency_timing(w, l, def, l->item->timing);
    return latency_list(w, l, def);
}

// Writes in flight: what the largest latency can hold, a power of two.
static int flight_capacity(const lw__loop *l, const lw_loop_def *def)
{
    double needed = def->latency.capacity;
    if (def->latency.capacity == 0)
        needed = floor((double)l->latency.highest * 1e-12 / l->nominal) + 2;
    int capacity = 2;
    while (capacity < needed && capacity < 4096)
        capacity *= 2;
    return capacity;
}

static lw_status loop_cells(lw__freezer *w, lw__loop *l, const char *name)
{
    l->state = lw__freezer_double(w, name, "law state", LW_SLICE_LAW, l->law->n_state);
    l->outs = lw__freezer_double(w, name, "law outputs", LW_SLICE_LAW, l->law->n_out);
    l->memory =
        lw__freezer_double(w, name, "state of the latency", LW_SLICE_SCHEDULE, l->latency.n_state);
    l->flight_out = lw__freezer_double(w, name, "outputs in flight", LW_SLICE_IN_FLIGHT,
                                       l->capacity * l->law->n_out);
    l->flight_tick = lw__freezer_integer(w, name, "instants of writes in flight",
                                         LW_SLICE_IN_FLIGHT, l->capacity);
    l->flight_job =
        lw__freezer_integer(w, name, "jobs of writes in flight", LW_SLICE_IN_FLIGHT, l->capacity);
    l->flight_sampled = lw__freezer_integer(w, name, "samples of writes in flight",
                                            LW_SLICE_IN_FLIGHT, l->capacity);
    l->head = lw__freezer_integer(w, name, "first write in flight", LW_SLICE_IN_FLIGHT, 1);
    l->count = lw__freezer_integer(w, name, "writes in flight", LW_SLICE_IN_FLIGHT, 1);
    l->stepped_at = lw__freezer_integer(w, name, "sample of the last step", LW_SLICE_LAW, 1);
    l->missed = lw__freezer_integer(w, name, "missed since the last step", LW_SLICE_LAW, 1);
    l->jobs = lw__freezer_integer(w, name, "jobs so far", LW_SLICE_LAW, 1);
    l->n_lost = lw__freezer_integer(w, name, "lost so far", LW_SLICE_LAW, 1);
    l->n_missed = lw__freezer_integer(w, name, "missed so far", LW_SLICE_LAW, 1);
    l->timer = lw__freezer_timer(w);
    return l->n_missed >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status freeze_loop(lw__freezer *w, int index)
{
    lw__loop *l = &w->z->loops[index];
    l->what = "loop";
    l->item = &w->rig->loops[index];
    const lw_loop_def *def = &l->item->def;
    l->law = lw_law_look(l->item->law);
    l->step = l->law->step;
    l->param = l->law->param;
    l->n_in = l->law->n_in;
    l->n_out = l->law->n_out;
    l->index = index;
    l->log = -1;
    LW__TRY(loop_inputs(w, l, def));
    LW__TRY(loop_trigger(w, l, def));
    LW__TRY(loop_outputs(w, l, def));
    l->nominal = lw_period_seconds(l->adc->period);
    l->in_phase_1 = l->adc->takes > 0;
    LW__TRY(loop_latency(w, l, def));
    l->capacity = flight_capacity(l, def);
    return loop_cells(w, l, def->name);
}

lw_status lw__freeze_wires(lw__freezer *w, lw__loop *l, const lw_loop_def *def)
{
    LW__TRY(loop_inputs(w, l, def));
    return loop_outputs(w, l, def);
}

lw_status lw__freeze_loops(lw__freezer *w)
{
    for (int i = 0; i < w->z->n_loops; i++)
        LW__TRY(freeze_loop(w, i));
    return LW_OK;
}
