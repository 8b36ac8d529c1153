// The frozen rig in words: what it is made of, defaults that were taken, roundings, who sees what
// at one tick, how each group is propagated.

#include "run/describe.h"
#include "run/pwm.h"

#include "io/source.h"
#include "run/comparator.h"
#include "run/motion.h"
#include "run/track.h"
#include "run/white.h"

#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>
#include <string.h>

// ---- parts

static void describe_plants(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_plants; i++) {
        const lw_plant_view *v = &z->plants[i].view;
        say(w, "plant \"%s\": %d state%s, %d input%s, %d output%s", z->plants[i].name, v->n_x,
            v->n_x == 1 ? "" : "s", v->n_u, v->n_u == 1 ? "" : "s", v->n_y, v->n_y == 1 ? "" : "s");
        for (int k = 0; k < v->n_u; k++)
            if (v->delay[k] > 0)
                say(w, "  input \"%s\" is delayed by %s s", v->input_names[k],
                    number_words(v->delay[k]).text);
    }
}

static void describe_groups(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_groups; i++) {
        const lw__group *g = &z->groups[i];
        if (g->motion != NULL) {
            g->motion->describe(g, say_plain, w);
            continue;
        }
        const lw__kernel *k = &g->kernel;
        double reach = k->norm * lw_tick_seconds(k->reach);
        if (k->method == LW__SUPERPOSED)
            say(w,
                "group of \"%s\": %d states, propagated exactly by superposition, %d piece%s of "
                "degree %d; norm(A) h = %.3g, 1e-12 a transition",
                g->name, g->n_x, k->n_pieces, k->n_pieces == 1 ? "" : "s", k->degree, reach);
        else
            say(w,
                "group of \"%s\": %d states, stiff (norm(A) h = %.3g): transitions of doubling "
                "length formed in extended precision, 1e-9 a transition at worst",
                g->name, g->n_x, reach);
        say(w, "  its state is carried along at the instants of %s%s%s, every %s",
            g->grid_adc >= 0 ? "adc \"" : "", g->grid_of, g->grid_adc >= 0 ? "\"" : "",
            period_words(g->grid).text);
    }
}

static const char *const source_kinds[] = {"constant", "step",  "ramp",  "sine",    "chirp",
                                           "pulses",   "table", "noise", "function"};

static void describe_sources(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_sources; i++) {
        const lw_source_def *d = &z->sources[i].item->def;
        say(w, "source \"%s\": %s%s", d->name, source_kinds[d->kind],
            z->sources[i].moving ? ", exact between its corners" : ", held between its changes");
    }
    for (int i = 0; i < z->n_values; i++)
        say(w, "value \"%s\": starts at %s", z->values[i].name,
            number_words(z->values[i].start).text);
}

static words range_words(const lw_quantiser *q)
{
    words w;
    if (isnan(q->lo))
        snprintf(w.text, sizeof w.text, "no range, not quantised");
    else if (q->bits == 0)
        snprintf(w.text, sizeof w.text, "range %.6g to %.6g, not quantised", q->lo, q->hi);
    else
        snprintf(w.text, sizeof w.text, "%d bits over %.6g to %.6g, %s", q->bits, q->lo, q->hi,
                 q->rounding == LW_ROUND_FLOOR ? "rounding down" : "rounding to nearest");
    return w;
}

// What triggers an adc, and when.
static const char *const words_of[][2] = {
    {"", ""}, {"adc", "is done"}, {"task", "finishes"}, {"comparator", "switches"}};

static void describe_adcs(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_adcs; i++) {
        const lw__adc *a = &z->adcs[i];
        const lw_adc_def *d = &a->item->def;
        if (a->has_clock)
            say(w, "adc \"%s\": samples \"%s\"%s every %s from %s on; %s", d->name, d->of[0],
                d->n_channels > 1 ? " and others" : "", period_words(a->period).text,
                time_words(a->offset).text, range_words(&d->quantiser).text);
        else
            say(w, "adc \"%s\": samples \"%s\"%s when %s \"%s\" %s; %s", d->name, d->of[0],
                d->n_channels > 1 ? " and others" : "", words_of[a->trigger.kind][0], d->after,
                words_of[a->trigger.kind][1], range_words(&d->quantiser).text);
        if (a->sporadic)
            say(w,
                "  it reckons with a nominal period of %s; a trigger that comes during a "
                "conversion is passed over",
                period_words(a->period).text);
        say(w, "  a conversion takes %s%s", time_words(a->takes).text,
            a->takes == 0 ? " (default)" : "");
        if (d->note != NULL)
            say(w, "  %s", d->note);
        if (d->average > 1)
            say(w, "  the average of %d samples, %s s apart", d->average,
                number_words(d->average_every).text);
        if (d->noise > 0)
            say(w, "  normal noise of deviation %s a sample, drawn from \"%s.noise\"",
                number_words(d->noise).text, d->name);
    }
}

static void describe_dacs(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_dacs; i++) {
        const lw__dac *d = &z->dacs[i];
        if (d->item->is_pwm)
            continue; // in its own words
        const lw_dac_def *def = &d->item->def;
        say(w, "dac \"%s\": drives %s%s%s; %s; starts at %s", def->name,
            def->to != NULL ? "\"" : "", def->to != NULL ? def->to : "nothing",
            def->to != NULL ? "\"" : "", range_words(&def->quantiser).text,
            number_words(def->start).text);
        if (d->n_phases == 0)
            say(w, "  zero-order hold, changes when written (default)");
        else if (d->latched_by.kind != LW__EVENT_NONE)
            say(w, "  zero-order hold, latched when %s \"%s\" %s", words_of[d->latched_by.kind][0],
                def->latched_by, words_of[d->latched_by.kind][1]);
        else
            say(w, "  zero-order hold, latched %d time%s a period of %s%s%s%s", d->n_phases,
                d->n_phases == 1 ? "" : "s", period_words(d->latch).text,
                def->latched_by != NULL ? ", the clock of \"" : "",
                def->latched_by != NULL ? def->latched_by : "",
                def->latched_by != NULL ? "\"" : "");
        say(w, "  after a missed sample it %s",
            def->on_missed ? "takes a stated value" : "keeps its output (default)");
    }
}

static void describe_latency(writer *w, const lw__loop *l)
{
    const lw__latency *y = &l->latency;
    char text[200];
    if (y->timing != NULL) {
        lw_timing_describe(y->timing, text, sizeof text);
        say(w, "  latency from sample to write: %s; at least %s, at most %s", text,
            time_words(y->lowest).text, time_words(y->highest).text);
    } else if (y->n_list == 1) {
        say(w, "  latency from sample to write: %s%s", time_words(y->list[0].ticks).text,
            l->item->def.latency.n_list == 0 ? " (default: the conversion)" : "");
    } else {
        say(w, "  latency from sample to write: a list of %d, taken in turn, %s to %s", y->n_list,
            time_words(y->lowest).text, time_words(y->highest).text);
    }
    if (y->lost > 0)
        say(w, "  a write is lost with probability %.6g", y->lost);
    if (y->missed > 0)
        say(w, "  a sample is missed with probability %.6g", y->missed);
    say(w, "  up to %d writes in flight; %s", l->capacity,
        l->item->def.latency.arrival == LW_ARRIVAL_NEWEST
            ? "a value older than the one standing is dropped"
            : "the last to arrive stands (default)");
}

static void describe_loops(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_loops; i++) {
        const lw__loop *l = &z->loops[i];
        const lw_loop_def *d = &l->item->def;
        say(w, "loop \"%s\": %s on each conversion of adc \"%s\", nominal period %s", d->name,
            l->law->kind, l->adc->item->def.name, period_words(l->adc->period).text);
        for (int k = 0; k < d->n_inputs; k++)
            if (d->inputs[k].signal != NULL)
                say(w, "  reads %s from \"%s\"", d->inputs[k].port, d->inputs[k].signal);
            else
                say(w, "  reads %s as the constant %s", d->inputs[k].port,
                    number_words(d->inputs[k].constant).text);
        for (int k = 0; k < d->n_outputs; k++)
            say(w, "  writes %s to \"%s\"", d->outputs[k].port, d->outputs[k].signal);
        describe_latency(w, l);
    }
}

// ---- roundings and same-tick pairs

static void rounding(writer *w, const char *what, const char *name, double seconds)
{
    double exact = seconds * (double)LW_TICKS_PER_SECOND, off = exact - floor(exact + 0.5);
    if (seconds > 0 && fabs(off) > 1e-3 && exact < 9e15)
        say(w, "rounded to whole picoseconds: %s of \"%s\", by %.3g ps", what, name, -off);
}

static void describe_roundings(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_adcs; i++) {
        const lw_adc_def *d = &z->adcs[i].item->def;
        rounding(w, "offset", d->name, d->offset);
        rounding(w, "conversion time", d->name, d->takes);
        if (d->every.den > 1)
            say(w,
                "the period of \"%s\" is kept as the fraction %lld/%lld ps; each instant is "
                "rounded by itself",
                d->name, (long long)d->every.num, (long long)d->every.den);
    }
    for (int i = 0; i < z->n_loops; i++) {
        const lw_loop_def *d = &z->loops[i].item->def;
        for (int k = 0; k < d->latency.n_list; k++) {
            const lw_latency_entry *e = &d->latency.list[k];
            if (e->fate == LW_FATE_WRITTEN)
                rounding(w, "latency", d->name,
                         e->in_samples ? e->value * z->loops[i].nominal : e->value);
        }
    }
}

// A law that reads what another loop writes, where both can fall on one tick.
static void describe_pairs(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_loops; i++)
        for (int t = 0; t < z->loops[i].n_targets; t++) {
            const lw__target *target = &z->loops[i].targets[t];
            if (target->dac != NULL)
                continue;
            const char *value = target->value->name;
            for (int k = 0; k < z->n_loops; k++) {
                const lw_loop_def *reader = &z->loops[k].item->def;
                for (int r = 0; r < reader->n_inputs; r++) {
                    if (reader->inputs[r].signal == NULL ||
                        strcmp(reader->inputs[r].signal, value) != 0)
                        continue;
                    int waits = z->loops[i].latency.lowest > z->loops[i].adc->takes;
                    int sees = waits || z->loops[i].in_phase_1 > z->loops[k].in_phase_1 ||
                               (z->loops[i].in_phase_1 == z->loops[k].in_phase_1 && i < k);
                    say(w,
                        "at one tick: \"%s\" is written by loop \"%s\" and read by loop \"%s\", "
                        "which sees the %s value",
                        value, z->loops[i].item->def.name, reader->name, sees ? "new" : "old");
                }
            }
        }
}

static void describe_watch(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_metrics; i++)
        say(w, "metric \"%s\": %s of \"%s\"%s%s%s", z->metrics[i].def.name,
            lw_metric_words(z->metrics[i].def.kind), z->metrics[i].def.of,
            z->metrics[i].def.against != NULL ? " against \"" : "",
            z->metrics[i].def.against != NULL ? z->metrics[i].def.against : "",
            z->metrics[i].def.against != NULL ? "\"" : "");
    for (int i = 0; i < z->n_records; i++)
        say(w, "record of \"%s\": %d columns, at most %lld rows, %.3g MB", z->records[i].name,
            z->records[i].n_columns, (long long)z->records[i].limit,
            8e-6 * (double)z->records[i].limit * z->records[i].n_columns);
}

void lw_frozen_describe(const lw_frozen *frozen, int (*line)(void *context, const char *text),
                        void *context)
{
    writer w = {line, context, 0};
    say(&w, "rig \"%s\", runs last %s", frozen->name, time_words(frozen->lasts).text);
    describe_plants(&w, frozen);
    describe_sources(&w, frozen);
    describe_adcs(&w, frozen);
    describe_dacs(&w, frozen);
    describe_loops(&w, frozen);
    lw__pwms_describe(frozen, say_plain, &w);
    lw__events_describe(frozen, say_plain, &w);
    lw__white_describe(frozen, say_plain, &w);
    lw__describe_cpu(&w, frozen);
    describe_groups(&w, frozen);
    describe_roundings(&w, frozen);
    describe_pairs(&w, frozen);
    describe_watch(&w, frozen);
    say(&w, "one run is %lld bytes of state, %d operations, %d timers",
        8LL * (frozen->n_f + frozen->n_i), frozen->n_ops, frozen->n_timers);
}
