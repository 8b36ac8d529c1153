// Freezing comparators and trips, their cells at time zero, and what `describe` says of them.

#include "run/comparator.h"

#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>
#include <string.h>

static lw_tick ticks(double seconds)
{
    lw_tick t = 0;
    return lw_tick_from_seconds(seconds, &t) == LW_OK ? t : LW_NEVER;
}

static int find_name(const char *const *names, int n, const char *name)
{
    for (int i = 0; i < n; i++)
        if (strcmp(names[i], name) == 0)
            return i;
    return -1;
}

// ---- comparators

static lw_status comparator_cells(lw__freezer *w, lw__comparator *c)
{
    const char *name = c->name;
    int queue = c->delay > 0 ? LW__EDGES_IN_FLIGHT : 0;
    c->out = lw__freezer_double(w, name, "output", LW_SLICE_HELD, 1);
    c->found = lw__freezer_double(w, name, "instant of the next crossing", LW_SLICE_SCHEDULE, 1);
    c->queue_at = lw__freezer_double(w, name, "crossings in flight", LW_SLICE_IN_FLIGHT, queue);
    c->beyond = lw__freezer_integer(w, name, "beyond the level", LW_SLICE_HELD, 1);
    c->known = lw__freezer_integer(w, name, "has begun", LW_SLICE_SCHEDULE, 1);
    c->blind_until = lw__freezer_integer(w, name, "end of blanking", LW_SLICE_SCHEDULE, 1);
    c->crossed_at = lw__freezer_integer(w, name, "last crossing", LW_SLICE_SCHEDULE, 1);
    c->in_a_row = lw__freezer_integer(w, name, "quick crossings in a row", LW_SLICE_SCHEDULE, 1);
    c->queue = lw__freezer_integer(w, name, "instants in flight", LW_SLICE_IN_FLIGHT, queue);
    c->head = lw__freezer_integer(w, name, "first in flight", LW_SLICE_IN_FLIGHT, 1);
    c->count = lw__freezer_integer(w, name, "number in flight", LW_SLICE_IN_FLIGHT, 1);
    c->n_events = lw__freezer_integer(w, name, "crossings", LW_SLICE_SCHEDULE, 1);
    return c->n_events >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status comparator_condition(lw__freezer *w, lw__comparator *c)
{
    const lw_comparator_def *def = &c->item->def;
    const char *level = def->below ? "below" : "above";
    LW__TRY(lw__freezer_signal(w, def->origin, "comparator", def->name, "of", def->of, &c->of));
    if (def->against != NULL)
        LW__TRY(lw__freezer_signal(w, def->origin, "comparator", def->name, level, def->against,
                                   &c->against));
    else
        c->against = (lw__reference){{LW__SIGNAL_CONSTANT, 0, 0}, def->level};
    if (c->of.at.kind != LW__SIGNAL_ROW && c->against.at.kind != LW__SIGNAL_ROW)
        return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                           "comparator \"%s\": neither of nor %s is a signal of a plant; it "
                           "watches one",
                           def->name, level);
    return lw__condition_make(w, &c->of, &c->against, &c->condition);
}

static lw_status freeze_comparator(lw__freezer *w, int index)
{
    lw__comparator *c = &w->z->comparators[index];
    const lw_comparator_def *def = &c->item->def;
    c->side = def->below ? -1 : 1;
    c->hysteresis = def->hysteresis;
    c->delay = ticks(def->delay);
    c->blanking = ticks(def->blanking);
    c->log = c->delay_timer = -1;
    c->timer = lw__freezer_timer(w);
    if (c->delay > 0)
        c->delay_timer = lw__freezer_timer(w);
    return comparator_condition(w, c);
}

// ---- trips

static lw_status find_comparator(lw__freezer *w, lw__trip *t, const lw_trip_def *def)
{
    const char *names[256];
    int n = 0;
    for (; n < w->z->n_comparators && n < 256; n++)
        names[n] = w->z->comparators[n].name;
    int found = find_name(names, n, def->by);
    if (found >= 0) {
        t->by = &w->z->comparators[found];
        return LW_OK;
    }
    const char *near = lw_nearest_name(def->by, names, n);
    return lw__fail_at(def->origin, w->err, LW_ERR_NAME,
                       "trip \"%s\": by: no comparator \"%s\"%s%s%s", def->name, def->by,
                       near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

static lw_status find_output(lw__freezer *w, lw__trip *t, const lw_trip_def *def)
{
    const char *names[256];
    int n = 0;
    for (; n < w->z->n_dacs && n < 256; n++)
        names[n] = w->z->dacs[n].item->def.name;
    int found = find_name(names, n, def->output);
    if (found >= 0) {
        t->dac = &w->z->dacs[found];
        for (int i = 0; i < w->z->n_pwms; i++)
            if (w->rig->pwms[i].dac == found)
                t->pwm = &w->z->pwms[i];
        return LW_OK;
    }
    const char *near = lw_nearest_name(def->output, names, n);
    return lw__fail_at(def->origin, w->err, LW_ERR_NAME,
                       "trip \"%s\": output: no dac or pwm \"%s\"%s%s%s", def->name, def->output,
                       near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

static lw_status freeze_trip(lw__freezer *w, int index)
{
    lw__trip *t = &w->z->trips[index];
    t->item = &w->rig->trips[index];
    const lw_trip_def *def = &t->item->def;
    t->name = def->name;
    t->timer = -1;
    LW__TRY(find_comparator(w, t, def));
    LW__TRY(find_output(w, t, def));
    if (def->until == LW_TRIP_LATCH && t->pwm == NULL && t->dac->n_phases == 0)
        return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                           "trip \"%s\": lasts is until its latch, but dac \"%s\" has no latch: it "
                           "changes when written",
                           def->name, def->output);
    if (def->until == LW_TRIP_TIME) {
        t->time = ticks(def->time);
        t->timer = lw__freezer_timer(w);
    }
    int *held = t->pwm != NULL ? &t->pwm->tripped : &t->dac->tripped;
    if (*held < 0)
        *held = lw__freezer_integer(w, def->output, "trips that hold it", LW_SLICE_HELD, 1);
    t->active = lw__freezer_integer(w, t->name, "holds the output", LW_SLICE_HELD, 1);
    t->n_trips = lw__freezer_integer(w, t->name, "trips", LW_SLICE_HELD, 1);
    return t->n_trips >= 0 && *held >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// Cells of all comparators first: one may be the level of another.
lw_status lw__freeze_events(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_comparators; i++)
        LW__TRY(freeze_comparator(w, i));
    for (int i = 0; i < z->n_trips; i++)
        LW__TRY(freeze_trip(w, i));
    return LW_OK;
}

lw_status lw__freeze_event_cells(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_comparators; i++) {
        lw__comparator *c = &z->comparators[i];
        c->item = &w->rig->comparators[i];
        c->name = c->item->def.name;
        c->delay = ticks(c->item->def.delay);
        LW__TRY(comparator_cells(w, c));
    }
    return LW_OK;
}

void lw__events_start(lw__lane *s)
{
    int W = s->width, L = s->lane;
    for (int i = 0; i < s->z->n_comparators; i++)
        LW__I(s->z->due + s->z->comparators[i].timer) = 0;
}

// ---- in words

typedef struct words {
    char text[96];
} words;

static words number(double v)
{
    words w;
    lw_double_format(v, w.text);
    return w;
}

static words time_of(lw_tick t)
{
    words w;
    lw_tick_format(t, w.text);
    return w;
}

static words level_of(const lw_comparator_def *def)
{
    words w;
    if (def->against == NULL)
        return number(def->level);
    snprintf(w.text, sizeof w.text, "\"%.90s\"", def->against);
    return w;
}

typedef struct writer {
    void (*say)(void *context, const char *text);
    void *context;
} writer;

static void say(const writer *w, const char *format, ...) LW_PRINTF(2, 3);
static void say(const writer *w, const char *format, ...)
{
    char text[700];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    w->say(w->context, text);
}

static void describe_comparator(const writer *w, const lw__comparator *c)
{
    static const char *const edges[] = {"its rise", "its fall", "each change"};
    const lw_comparator_def *d = &c->item->def;
    say(w, "comparator \"%s\": 1 while \"%s\" is at or %s %s; %s triggers what names it%s", c->name,
        d->of, d->below ? "below" : "above", level_of(d).text, edges[d->edge],
        d->edge == LW_EDGE_RISES ? " (default)" : "");
    if (d->hysteresis > 0)
        say(w, "  back to 0 once it is %s %s by %s", d->below ? "above" : "below", level_of(d).text,
            number(d->hysteresis).text);
    else
        say(w, "  no hysteresis (default)");
    if (c->delay > 0)
        say(w, "  the output follows a crossing by %s", time_of(c->delay).text);
    if (c->blanking > 0)
        say(w, "  for %s after a crossing it looks at nothing", time_of(c->blanking).text);
    say(w,
        "  at time zero it is %s; crossings are found on the exact solution, the output takes "
        "the first picosecond at or after",
        d->start < 0   ? "what the plant says (default)"
        : d->start > 0 ? "1"
                       : "0");
}

static void describe_trip(const writer *w, const lw__trip *t)
{
    const lw_trip_def *d = &t->item->def;
    static const char *const ends[] = {"until the comparator is back at 0",
                                       "until the next latch edge at which the comparator is at 0",
                                       "", "for the rest of the run"};
    char time[160];
    snprintf(time, sizeof time, "for %s and until the comparator is at 0", time_of(t->time).text);
    say(w, "trip \"%s\": when comparator \"%s\" rises, \"%s\" is forced to %s %s", t->name, d->by,
        d->output, number(d->to).text, d->until == LW_TRIP_TIME ? time : ends[d->until]);
}

void lw__events_describe(const lw_frozen *z, void (*take)(void *context, const char *text),
                         void *context)
{
    writer w = {take, context};
    for (int i = 0; i < z->n_comparators; i++)
        describe_comparator(&w, &z->comparators[i]);
    for (int i = 0; i < z->n_trips; i++)
        describe_trip(&w, &z->trips[i]);
}
