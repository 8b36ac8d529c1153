// The total order of operations, the timers that make them due, and the sets between them.
//
// An operation's number is its place in the order: phase, kind, place of declaration, part. A set
// of operations is a row of bits, so that the next operation due is the lowest bit.

#include "run/dash.h"
#include "run/edges.h"
#include "run/event.h"
#include "run/freezer.h"
#include "run/pwm.h"

#include "io/source.h"
#include "run/comparator.h"
#include "run/schedule.h"
#include "run/sprint.h"
#include "run/track.h"
#include "run/white.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

// ---- streams

typedef struct stream_of {
    uint32_t stream;
    const char *owner, *origin;
} stream_of;

static int by_stream(const void *a, const void *b)
{
    uint32_t x = ((const stream_of *)a)->stream, y = ((const stream_of *)b)->stream;
    return (x > y) - (x < y);
}

// Two draws must not share an address: a collision of hashed names is refused.
lw_status lw__freeze_streams(lw__freezer *w)
{
    const lw_frozen *z = w->z;
    int n = 0, room = z->n_sources + z->n_adcs + 3;
    for (int i = 0; i < z->n_loops; i++)
        room += 2 + z->loops[i].latency.n_streams;
    for (int i = 0; i < z->n_tasks; i++) {
        const lw__task *t = &z->tasks[i];
        room += 1 + t->takes.n_streams + t->arrives.n_streams + t->jitter.n_streams;
    }
    for (int g = 0; g < z->n_groups; g++)
        room += z->groups[g].n_white * z->groups[g].n_plant_states;
    stream_of *all = lw__freezer_get(w, sizeof *all * (size_t)room);
    if (all == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < z->n_sources; i++)
        all[n++] = (stream_of){z->sources[i].stream, z->sources[i].item->def.name,
                               z->sources[i].item->def.origin};
    for (int i = 0; i < z->n_adcs; i++)
        all[n++] = (stream_of){z->adcs[i].noise_stream, z->adcs[i].item->def.name,
                               z->adcs[i].item->def.origin};
    for (int i = 0; i < z->n_loops; i++) {
        const lw__loop *l = &z->loops[i];
        const char *name = l->item->def.name, *origin = l->item->def.origin;
        all[n++] = (stream_of){l->latency.lost_stream, name, origin};
        all[n++] = (stream_of){l->latency.missed_stream, name, origin};
        for (int k = 0; k < l->latency.n_streams; k++)
            all[n++] = (stream_of){l->latency.streams[k], name, origin};
    }
    for (int i = 0; i < z->n_tasks; i++) {
        const lw__task *t = &z->tasks[i];
        const lw__use *uses[] = {&t->takes, &t->arrives, &t->jitter};
        all[n++] = (stream_of){t->lost_stream, t->name, t->item->def.origin};
        for (int u = 0; u < 3; u++)
            for (int k = 0; k < uses[u]->n_streams; k++)
                all[n++] = (stream_of){uses[u]->streams[k], t->name, t->item->def.origin};
    }
    for (int g = 0; g < z->n_groups; g++)
        for (int k = 0; k < z->groups[g].n_white; k++) {
            const lw__white *white = &z->groups[g].white[k];
            for (int i = 0; i < white->n; i++)
                all[n++] =
                    (stream_of){white->streams[i], white->item->def.name, white->item->def.origin};
        }
    qsort(all, (size_t)n, sizeof *all, by_stream);
    for (int i = 1; i < n; i++)
        if (all[i].stream == all[i - 1].stream)
            return lw__fail_at(
                all[i].origin, w->err, LW_ERR_DUPLICATE,
                "\"%s\" and \"%s\" have names whose draw streams collide; rename one",
                all[i - 1].owner, all[i].owner);
    return LW_OK;
}

// ---- the list of operations

typedef struct ordered {
    lw__op op;
    int place;
} ordered;

typedef struct order {
    int n, room;
    ordered *list;
} order;

static void add_op(order *o, lw__op_kind kind, int phase, int place, int index, int part)
{
    if (o->n < o->room)
        o->list[o->n] = (ordered){{kind, index, part, phase, NULL}, place};
    o->n++;
}

static int by_order(const void *a, const void *b)
{
    const ordered *x = a, *y = b;
    const int keys[][2] = {{x->op.phase, y->op.phase},
                           {(int)x->op.kind, (int)y->op.kind},
                           {x->place, y->place},
                           {x->op.index, y->op.index},
                           {x->op.part, y->op.part}};
    for (size_t i = 0; i < sizeof keys / sizeof keys[0]; i++)
        if (keys[i][0] != keys[i][1])
            return keys[i][0] < keys[i][1] ? -1 : 1;
    return 0;
}

// A core's operations stand at the place of the core, a task's at that of the task.
static void list_cpu_ops(const lw_frozen *z, order *o)
{
    for (int i = 0; i < z->n_cores; i++) {
        int place = z->cores[i].item->place;
        add_op(o, LW__OP_WRITES, 1, place, i, 0);
        add_op(o, LW__OP_READS, 1, place, i, 0);
        add_op(o, LW__OP_RELEASES, 5, place, i, 0);
        add_op(o, LW__OP_DISPATCH, 6, place, i, 0);
        add_op(o, LW__OP_POINTS, 7, place, i, 0);
    }
    for (int i = 0; i < z->n_tasks; i++) {
        int place = z->tasks[i].item->place;
        if (z->tasks[i].release == LW__RELEASE_EVENT)
            add_op(o, LW__OP_RELEASE, 5, place, i, 0);
        if (z->tasks[i].has_law && z->tasks[i].reads_at_release)
            add_op(o, LW__OP_READ, 7, place, i, 0);
        if (z->tasks[i].logical != LW_NEVER)
            add_op(o, LW__OP_LOGICAL, 1, place, i, 0);
    }
}

static void list_event_ops(const lw_frozen *z, order *o)
{
    for (int i = 0; i < z->n_comparators; i++) {
        int place = z->comparators[i].item->place;
        add_op(o, LW__OP_CROSS, 0, place, i, 0);
        if (z->comparators[i].delay > 0)
            add_op(o, LW__OP_EDGE, 0, place, i, 0);
        add_op(o, LW__OP_SEARCH, 8, place, i, 0);
    }
    for (int i = 0; i < z->n_edges; i++) {
        add_op(o, LW__OP_COUNT, 0, z->edges[i].item->place, i, 0);
        add_op(o, LW__OP_COUNT_SEARCH, 8, z->edges[i].item->place, i, 0);
    }
    for (int i = 0; i < z->n_trips; i++) {
        int place = z->trips[i].item->place;
        add_op(o, LW__OP_TRIP, 1, place, i, 0);
        add_op(o, LW__OP_RELEASE_TRIP, 1, place, i, 0);
        add_op(o, LW__OP_LATCH_TRIP, 2, place, i, 0);
    }
}

static void list_ops(const lw_frozen *z, order *o)
{
    for (int g = 0; g < z->n_groups; g++) {
        add_op(o, LW__OP_ANCHOR, 0, g, g, 0);
        for (int i = 0; i < z->groups[g].n_generators; i++)
            add_op(o, LW__OP_TURN, 0, g, g, i);
        for (int c = 0; c < z->groups[g].n_u; c++)
            if (z->groups[g].channels[c].delay > 0)
                add_op(o, LW__OP_DELAYED, 1, g, g, c);
    }
    for (int i = 0; i < z->n_sources; i++)
        if (z->sources[i].timer >= 0)
            add_op(o, LW__OP_SOURCE, 0, z->sources[i].item->place, i, 0);
    for (int i = 0; i < z->n_adcs; i++) {
        int place = z->adcs[i].item->place;
        add_op(o, LW__OP_SAMPLE, 3, place, i, 0);
        add_op(o, LW__OP_CONVERT, z->adcs[i].takes > 0 ? 1 : 4, place, i, 0);
    }
    for (int i = 0; i < z->n_dacs; i++)
        if (z->dacs[i].n_phases > 0)
            add_op(o, LW__OP_LATCH, 2, z->dacs[i].item->place, i, 0);
    for (int i = 0; i < z->n_pwms; i++) {
        int place = z->pwms[i].item->place;
        add_op(o, LW__OP_PWM_STRETCH, 2, place, i, 0);
        add_op(o, LW__OP_PWM_EDGE, 1, place, i, 0);
        add_op(o, LW__OP_PWM_WRITTEN, 1, place, i, 0);
        if (z->pwms[i].by_peak)
            add_op(o, LW__OP_PWM_SEARCH, 8, place, i, 0);
    }
    for (int i = 0; i < z->n_loops; i++) {
        int place = z->loops[i].item->place;
        add_op(o, LW__OP_ARRIVE, 1, place, i, 0);
        add_op(o, LW__OP_STEP, z->loops[i].in_phase_1 ? 1 : 7, place, i, 0);
    }
    list_cpu_ops(z, o);
    list_event_ops(z, o);
    for (int i = 0; i < z->n_tracks; i++)
        add_op(o, LW__OP_TRACK, 8, i, i, 0);
    for (int i = 0; i < z->n_records; i++)
        if (z->records[i].is_signal)
            add_op(o, LW__OP_RECORD, 8, i, i, 0);
}

static const void *thing_of(const lw_frozen *z, const lw__op *op)
{
    switch (op->kind) {
    case LW__OP_ANCHOR:
    case LW__OP_TURN:
    case LW__OP_DELAYED:
        return &z->groups[op->index];
    case LW__OP_SOURCE:
        return &z->sources[op->index];
    case LW__OP_SAMPLE:
    case LW__OP_CONVERT:
        return &z->adcs[op->index];
    case LW__OP_LATCH:
        return &z->dacs[op->index];
    case LW__OP_PWM_STRETCH:
    case LW__OP_PWM_EDGE:
    case LW__OP_PWM_WRITTEN:
    case LW__OP_PWM_SEARCH:
        return &z->pwms[op->index];
    case LW__OP_ARRIVE:
    case LW__OP_STEP:
        return &z->loops[op->index];
    case LW__OP_WRITES:
    case LW__OP_READS:
    case LW__OP_RELEASES:
    case LW__OP_DISPATCH:
    case LW__OP_POINTS:
        return &z->cores[op->index];
    case LW__OP_RELEASE:
    case LW__OP_READ:
    case LW__OP_LOGICAL:
        return &z->tasks[op->index];
    case LW__OP_CROSS:
    case LW__OP_EDGE:
    case LW__OP_SEARCH:
        return &z->comparators[op->index];
    case LW__OP_COUNT:
    case LW__OP_COUNT_SEARCH:
        return &z->edges[op->index];
    case LW__OP_TRIP:
    case LW__OP_RELEASE_TRIP:
    case LW__OP_LATCH_TRIP:
        return &z->trips[op->index];
    default:
        return NULL;
    }
}

static lw_status number_ops(lw__freezer *w)
{
    lw_frozen *z = w->z;
    order o = {0};
    list_ops(z, &o);
    o.room = o.n;
    o.n = 0;
    o.list = lw__freezer_get(w, sizeof *o.list * (size_t)(o.room + 1));
    z->ops = lw__freezer_get(w, sizeof *z->ops * (size_t)(o.room + 1));
    if (o.list == NULL || z->ops == NULL)
        return LW_ERR_MEMORY;
    list_ops(z, &o);
    qsort(o.list, (size_t)o.n, sizeof *o.list, by_order);
    z->n_ops = o.n;
    z->n_words = (o.n + 63) / 64;
    z->n_words = z->n_words > 0 ? z->n_words : 1;
    for (int i = 0; i < o.n; i++) {
        z->ops[i] = o.list[i].op;
        z->ops[i].thing = thing_of(z, &z->ops[i]);
    }
    return LW_OK;
}

static int op_number(const lw_frozen *z, lw__op_kind kind, int index, int part)
{
    for (int i = 0; i < z->n_ops; i++)
        if (z->ops[i].kind == kind && z->ops[i].index == index && z->ops[i].part == part)
            return i;
    return -1;
}

// ---- sets

static lw_status make_due(lw__freezer *w, int timer, lw__op_kind kind, int index, int part)
{
    if (timer < 0)
        return LW_OK;
    return lw__set_put(w, &w->z->timer_ops[timer], op_number(w->z, kind, index, part));
}

static lw_status timers_of_plants(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int g = 0; g < z->n_groups; g++) {
        const lw__group *group = &z->groups[g];
        int timer = group->timer >= 0 ? group->timer : z->adcs[group->grid_adc].timer;
        LW__TRY(make_due(w, timer, LW__OP_ANCHOR, g, 0));
        for (int i = 0; i < group->n_generators; i++) {
            LW__TRY(make_due(w, group->generators[i].timer, LW__OP_ANCHOR, g, 0));
            LW__TRY(make_due(w, group->generators[i].timer, LW__OP_TURN, g, i));
        }
        for (int c = 0; c < group->n_u; c++)
            if (group->channels[c].delay > 0)
                LW__TRY(make_due(w, group->channels[c].timer, LW__OP_DELAYED, g, c));
    }
    return LW_OK;
}

// Peak-current control is told of changes of the current's group and of what is wanted.
static lw_status order_of_peak(lw__freezer *w, int index)
{
    lw__pwm *m = &w->z->pwms[index];
    const char *wanted = m->item->def.peak.wanted_of;
    if (!m->by_peak)
        return LW_OK;
    m->search_op = op_number(w->z, LW__OP_PWM_SEARCH, index, 0);
    LW__TRY(lw__set_put(w, &w->z->groups[m->measured.at.index].observers, m->search_op));
    lw__set *set = wanted != NULL ? lw__signal_observers(w->z, wanted) : NULL;
    return set != NULL ? lw__set_put(w, set, m->search_op) : LW_OK;
}

static lw_status timers_of_parts(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_sources; i++)
        LW__TRY(make_due(w, z->sources[i].timer, LW__OP_SOURCE, i, 0));
    for (int i = 0; i < z->n_adcs; i++) {
        LW__TRY(make_due(w, z->adcs[i].timer, LW__OP_SAMPLE, i, 0));
        LW__TRY(make_due(w, z->adcs[i].done_timer, LW__OP_CONVERT, i, 0));
        z->adcs[i].sample_op = op_number(z, LW__OP_SAMPLE, i, 0);
        z->adcs[i].convert_op = op_number(z, LW__OP_CONVERT, i, 0);
    }
    for (int i = 0; i < z->n_dacs; i++)
        LW__TRY(make_due(w, z->dacs[i].timer, LW__OP_LATCH, i, 0));
    for (int i = 0; i < z->n_pwms; i++) {
        const lw__pwm *m = &z->pwms[i];
        lw__dac *dac = &z->dacs[m->item->dac];
        LW__TRY(make_due(w, m->timer, LW__OP_PWM_STRETCH, i, 0));
        for (int k = 0; k < m->n_legs; k++)
            LW__TRY(make_due(w, m->edge[k], LW__OP_PWM_EDGE, i, 0));
        dac->acts_at_once = m->item->def.reload == LW_PWM_AT_ONCE;
        LW__TRY(lw__set_put(w, &dac->written, op_number(z, LW__OP_PWM_WRITTEN, i, 0)));
        LW__TRY(order_of_peak(w, i));
    }
    for (int i = 0; i < z->n_loops; i++)
        LW__TRY(make_due(w, z->loops[i].timer, LW__OP_ARRIVE, i, 0));
    for (int i = 0; i < z->n_records; i++)
        LW__TRY(make_due(w, z->records[i].timer, LW__OP_RECORD, i, 0));
    for (int i = 0; i < z->n_tracks; i++)
        LW__TRY(make_due(w, z->tracks[i].timer, LW__OP_TRACK, i, 0));
    return LW_OK;
}

// Laws that step on the end of a conversion; adcs that something triggers.
static lw_status conversions(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_adcs; i++) {
        lw__adc *a = &z->adcs[i];
        for (int l = 0; l < z->n_loops; l++)
            if (z->loops[l].adc == a)
                LW__TRY(lw__set_put(w, &a->after, op_number(z, LW__OP_STEP, l, 0)));
    }
    for (int i = 0; i < z->n_adcs; i++)
        if (!z->adcs[i].has_clock)
            LW__TRY(lw__set_put(w, lw__event_set(z, z->adcs[i].trigger), z->adcs[i].sample_op));
    return LW_OK;
}

// Operations of cores and tasks: their numbers, timers, and what triggers a task.
static lw_status order_of_cpus(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_cores; i++) {
        lw__core *c = &z->cores[i];
        c->reads_op = op_number(z, LW__OP_READS, i, 0);
        c->points_op = op_number(z, LW__OP_POINTS, i, 0);
        c->dispatch_op = op_number(z, LW__OP_DISPATCH, i, 0);
        c->releases_op = op_number(z, LW__OP_RELEASES, i, 0);
        LW__TRY(make_due(w, c->point_timer, LW__OP_WRITES, i, 0));
        LW__TRY(make_due(w, c->release_timer, LW__OP_RELEASES, i, 0));
    }
    for (int i = 0; i < z->n_tasks; i++) {
        lw__task *t = &z->tasks[i];
        t->release_op = op_number(z, LW__OP_RELEASE, i, 0);
        t->read_op = op_number(z, LW__OP_READ, i, 0);
        LW__TRY(make_due(w, t->logical_timer, LW__OP_LOGICAL, i, 0));
        if (t->release_op >= 0)
            LW__TRY(lw__set_put(w, lw__event_set(z, t->trigger), t->release_op));
    }
    return LW_OK;
}

// Comparators are told of changes of their group and of their level.
static lw_status order_of_comparator(lw__freezer *w, int index)
{
    lw__comparator *c = &w->z->comparators[index];
    lw__group *g = &w->z->groups[c->condition.group - w->z->groups];
    const char *names[2] = {c->item->def.of, c->item->def.against};
    c->search_op = op_number(w->z, LW__OP_SEARCH, index, 0);
    LW__TRY(make_due(w, c->timer, LW__OP_CROSS, index, 0));
    LW__TRY(make_due(w, c->delay_timer, LW__OP_EDGE, index, 0));
    LW__TRY(lw__set_put(w, &g->observers, c->search_op));
    for (int k = 0; k < 2; k++) {
        lw__set *set = names[k] != NULL ? lw__signal_observers(w->z, names[k]) : NULL;
        if (set != NULL)
            LW__TRY(lw__set_put(w, set, c->search_op));
    }
    return LW_OK;
}

static lw_status order_of_edges(lw__freezer *w, int index)
{
    lw__edges *e = &w->z->edges[index];
    lw__group *g = &w->z->groups[e->condition.group - w->z->groups];
    e->search_op = op_number(w->z, LW__OP_COUNT_SEARCH, index, 0);
    LW__TRY(make_due(w, e->timer, LW__OP_COUNT, index, 0));
    return lw__set_put(w, &g->observers, e->search_op);
}

static lw_status order_of_trip(lw__freezer *w, int index)
{
    lw_frozen *z = w->z;
    const lw__trip *t = &z->trips[index];
    lw__comparator *by = &z->comparators[t->by - z->comparators];
    lw__dac *d = t->dac;
    int release = op_number(z, LW__OP_RELEASE_TRIP, index, 0);
    LW__TRY(lw__set_put(w, &by->rises, op_number(z, LW__OP_TRIP, index, 0)));
    LW__TRY(make_due(w, t->timer, LW__OP_RELEASE_TRIP, index, 0));
    if (t->item->def.until == LW_TRIP_CLEAR || t->item->def.until == LW_TRIP_TIME)
        return lw__set_put(w, &by->falls, release);
    if (t->item->def.until != LW_TRIP_LATCH)
        return LW_OK;
    int at_edge = op_number(z, LW__OP_LATCH_TRIP, index, 0);
    if (t->pwm != NULL)
        return make_due(w, t->pwm->timer, LW__OP_LATCH_TRIP, index, 0);
    if (d->timer >= 0)
        return make_due(w, d->timer, LW__OP_LATCH_TRIP, index, 0);
    return lw__set_put(w, lw__event_set(z, d->latched_by), at_edge);
}

static lw_status order_of_events(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_comparators; i++)
        LW__TRY(order_of_comparator(w, i));
    for (int i = 0; i < z->n_edges; i++)
        LW__TRY(order_of_edges(w, i));
    for (int i = 0; i < z->n_trips; i++)
        LW__TRY(order_of_trip(w, i));
    for (int i = 0; i < z->n_dacs; i++)
        if (z->dacs[i].latched_by.kind != LW__EVENT_NONE)
            LW__TRY(lw__set_put(w, lw__event_set(z, z->dacs[i].latched_by),
                                op_number(z, LW__OP_LATCH, i, 0)));
    return LW_OK;
}

// Which metrics want to know when something changes.
static lw_status watchers(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int t = 0; t < z->n_tracks; t++) {
        int op = op_number(z, LW__OP_TRACK, t, 0);
        LW__TRY(lw__track_watch(w, &z->tracks[t], op));
    }
    return LW_OK;
}

// An anchor moves with the timer of the adc that fixes its grid where that timer is only the grid.
void lw__freeze_anchors(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int g = 0; g < z->n_groups; g++) {
        lw__group *group = &z->groups[g];
        int adc = group->grid_adc;
        int merged = adc >= 0 && group->first == 0 && z->adcs[adc].n_steps == 1 &&
                     z->adcs[adc].steps[0].at == 0;
        group->timer = merged ? -1 : lw__freezer_timer(w);
    }
    z->n_model_timers = z->n_timers;
}

// ---- the compiled driver of a plain loop

static int plain_dac(const lw__dac *d)
{
    if (d == NULL || d->drives.n != 1)
        return 0;
    const lw__group *g = d->drives.list[0].group;
    return d->n_phases == 0 && d->plain && !d->observed && !d->gaps && d->tripped < 0 &&
           d->log < 0 && !d->newest && d->observers.words == NULL && d->drives.list[0].delay == 0 &&
           g->observers.words == NULL && g->n_generators == 0 && g->motion == NULL &&
           g->n_white == 0;
}

static int plain_adc(const lw__adc *a)
{
    return a->has_clock && a->at_once && a->plain && a->n_channels == 1 && a->takes == 0 &&
           a->log < 0 && a->observers.words == NULL;
}

static int plain_loop(const lw__loop *l)
{
    const lw__latency *y = &l->latency;
    int latency = y->timing != NULL ||
                  (y->n_list == 1 && y->list[0].whole < 0 && y->list[0].fate == LW_FATE_WRITTEN);
    for (int k = 0; k < l->n_in; k++)
        if (l->inputs[k].at.kind != LW__SIGNAL_CELL && l->inputs[k].at.kind != LW__SIGNAL_CONSTANT)
            return 0;
    return latency && y->n_state == 0 && !y->by_chance && l->log < 0 && !l->observed &&
           l->n_targets == 1 && l->observers.words == NULL;
}

// Found where the rig has one loop and its instants cannot change their order.
static lw_status find_sprint(lw__freezer *w)
{
    lw_frozen *z = w->z;
    if (z->n_loops != 1 || z->n_adcs != 1 || z->n_words != 1 || z->n_cores > 0 || w->general)
        return LW_OK;
    const lw__loop *l = &z->loops[0];
    const lw__dac *d = l->targets[0].dac;
    const lw__adc *a = l->adc;
    lw_signal of = a->of[0].at;
    if (!plain_loop(l) || !plain_adc(a) || !plain_dac(d) || of.kind != LW__SIGNAL_ROW)
        return LW_OK;
    const lw__group *g = &z->groups[of.index];
    lw_tick shortest, longest;
    lw__grid_steps(a->period, &shortest, &longest);
    if (g->timer >= 0 || d->drives.list[0].group != g || l->latency.highest > shortest)
        return LW_OK;
    for (int k = 0; k < z->n_groups; k++) // no other anchor moves with this adc
        if (&z->groups[k] != g && z->groups[k].timer < 0)
            return LW_OK;
    lw__sprint *sprint = lw__freezer_get(w, sizeof *sprint);
    if (sprint == NULL)
        return LW_ERR_MEMORY;
    *sprint = (lw__sprint){.group = g,
                           .row = &g->rows[of.part],
                           .adc = a,
                           .loop = l,
                           .dac = d,
                           .channel = d->drives.list[0].channel,
                           .output = l->targets[0].output};
    z->sprint = sprint;
    return LW_OK;
}

lw_status lw__freeze_order(lw__freezer *w)
{
    lw_frozen *z = w->z;
    int observers = z->n_timers - z->n_model_timers;
    z->due = lw__freezer_integer(w, z->name, "due", LW_SLICE_SCHEDULE, z->n_model_timers);
    if (lw__freezer_integer(w, z->name, "due for observers", LW_SLICE_METRIC, observers) < 0)
        return LW_ERR_MEMORY;
    z->timer_ops = lw__freezer_get(w, sizeof *z->timer_ops * (size_t)(z->n_timers + 1));
    if (z->due < 0 || z->timer_ops == NULL)
        return LW_ERR_MEMORY;
    LW__TRY(number_ops(w));
    LW__TRY(timers_of_plants(w));
    LW__TRY(timers_of_parts(w));
    LW__TRY(conversions(w));
    LW__TRY(order_of_cpus(w));
    LW__TRY(order_of_events(w));
    LW__TRY(watchers(w));
    LW__TRY(find_sprint(w));
    for (int i = 0; i < z->n_cores && !w->general; i++)
        z->cores[i].quick = lw__dash_tasks(&z->cores[i]);
    LW__TRY(lw__set_put(w, &z->no_ops, -1));
    LW__TRY(lw__set_put(w, &z->phase_8, -1));
    for (int i = 0; i < z->n_ops; i++)
        if (z->ops[i].phase == 8)
            LW__TRY(lw__set_put(w, &z->phase_8, i));
    return LW_OK;
}
