// Freezing what tasks do: execution time, points of a job, resources, law; cells of tasks and
// cores.

#include "run/event.h"
#include "run/freezer.h"
#include "run/schedule.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const char *kind_of(const lw__task *t)
{
    return t->item->is_frame ? "frame" : "task";
}

static lw_status fail(lw__freezer *w, const lw__task *t, lw_status status, const char *text)
{
    return lw__fail_at(t->item->def.origin, w->err, status, "%s \"%s\": %s", kind_of(t), t->name,
                       text);
}

// ---- timings

static lw_tick ticks(double t)
{
    return t < (double)LW_TICK_MAX ? (lw_tick)floor(t + 0.5) : LW_TICK_MAX;
}

static lw_status streams_of(lw__freezer *w, const lw__task *t, const char *what, lw__use *u)
{
    u->n_streams = lw_timing_n_streams(u->timing);
    uint32_t *streams = lw__freezer_get(w, sizeof *streams * (size_t)(u->n_streams + 1));
    if (streams == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < u->n_streams; i++) {
        char name[280];
        if (i == 0)
            snprintf(name, sizeof name, "%s.%s", t->name, what);
        else
            snprintf(name, sizeof name, "%s.%s#%d", t->name, what, i);
        streams[i] = lw_stream(name);
    }
    u->streams = streams;
    return LW_OK;
}

// `unit`: ticks of one unit of the timing.
static lw_status use_timing(lw__freezer *w, const lw__task *t, const char *what,
                            const lw_timing *timing, double unit, lw__use *u)
{
    double lo, hi;
    *u = (lw__use){.timing = timing, .scale = unit};
    if (timing == NULL)
        return LW_OK;
    lw_timing_support(timing, &lo, &hi);
    u->least = ticks(lo * unit);
    u->most = ticks(hi * unit);
    u->constant = u->least;
    if (u->most >= LW_TICK_MAX / 4)
        return lw__fail_at(t->item->def.origin, w->err, LW_ERR_TIME,
                           "%s \"%s\": %s may be as long as %.12g s; a duration stays below 2e6 s",
                           kind_of(t), t->name, what, hi * unit * 1e-12);
    if (lo == hi && !isnan(lw_timing_as_constant(timing))) {
        u->timing = NULL;
        return LW_OK;
    }
    u->n_state = lw_timing_n_state(timing);
    u->memory = lw__freezer_double(w, t->name, "state of a timing", LW_SLICE_SCHEDULE, u->n_state);
    return u->memory >= 0 ? streams_of(w, t, what, u) : LW_ERR_MEMORY;
}

static lw_status timings(lw__freezer *w, lw__task *t)
{
    const lw__core *c = &w->z->cores[t->core];
    const lw_task_def *def = &t->item->def;
    char name[280];
    if (def->takes_in_cycles && isnan(c->item->def.clock))
        return fail(w, t, LW_ERR_ARGUMENT, "takes is stated in cycles, but its core has no clock");
    LW__TRY(use_timing(w, t, "takes", t->item->takes, def->takes_in_cycles ? c->cycle : 1e12,
                       &t->takes));
    LW__TRY(use_timing(w, t, "arrives", t->item->arrives, 1e12, &t->arrives));
    LW__TRY(use_timing(w, t, "jitter", t->item->jitter, 1e12, &t->jitter));
    t->has_jitter = t->jitter.most > 0;
    t->lost = def->lost;
    snprintf(name, sizeof name, "%s.lost", t->name);
    t->lost_stream = lw_stream(name);
    return LW_OK;
}

// ---- periods and deadlines

static lw_status clock_of_task(lw__freezer *w, lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    if (t->release == LW__RELEASE_EVENT &&
        lw__event_period(w, (lw__event){LW__EVENT_TASK, t->index}, &t->period) != LW_OK)
        return fail(w, t, LW_ERR_LOOP, "released_by: tasks release one another in a ring");
    lw_tick shortest = 0, longest = 0;
    if (t->period.num > 0)
        lw__grid_steps(t->period, &shortest, &longest);
    t->least_between = t->release == LW__RELEASE_ARRIVALS ? t->arrives.least : shortest;
    t->deadline = LW_NEVER;
    if (!isnan(def->deadline))
        t->deadline = ticks(def->deadline * 1e12);
    else if (t->period.num > 0 && !t->relative)
        t->deadline = lw_period_at(t->period, 0, 1);
    const lw__core *c = &w->z->cores[t->core];
    if (c->policy->by_deadline && !t->is_handler && t->deadline == LW_NEVER)
        return fail(w, t, LW_ERR_ARGUMENT, "deadline is missing; its core runs by deadlines");
    return LW_OK;
}

// Logical execution time is measured by the core's own clock; a whole period ends with the next
// release, wherever that is rounded to.
static lw_status logical_time(lw__freezer *w, lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    t->logical = LW_NEVER;
    if (isnan(def->logical))
        return LW_OK;
    double every = def->every.num > 0 ? lw_period_seconds(def->every) : 0;
    t->logical = ticks(def->logical * w->z->cores[t->core].rate * 1e12);
    t->logical_is_period = !t->relative && t->overrun != LW_OVERRUN_REPHASE && every > 0 &&
                           fabs(def->logical - every) < 1e-13;
    if (t->logical_is_period || t->least_between == 0 || t->logical <= t->least_between)
        return LW_OK;
    return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT,
                       "task \"%s\": logical is %.12g s; at most the least time between two "
                       "releases, %.12g s, is permitted",
                       t->name, def->logical, lw_tick_seconds(t->least_between));
}

// ---- points

typedef struct placed {
    lw__job_point point;
    lw_tick at; // at the longest execution
} placed;

typedef struct point_list {
    lw__freezer *w;
    const lw__task *t;
    int n;
    placed list[2 * LW_TASK_MAX_SECTIONS + 64];
} point_list;

static void put_point(point_list *l, lw__point_kind kind, lw_place place, int resource)
{
    const lw__core *c = &l->w->z->cores[l->t->core];
    lw__job_point p = {kind, (double)NAN, 0, resource};
    lw_tick at;
    if (place.kind == LW_PLACE_SHARE) {
        p.share = place.value.value;
        at = (lw_tick)floor(p.share * (double)l->t->takes.most + 0.5);
    } else {
        p.ticks =
            ticks(place.value.in_cycles ? place.value.value * c->cycle : place.value.value * 1e12);
        at = p.ticks < l->t->takes.most ? p.ticks : l->t->takes.most;
    }
    if (l->n < (int)(sizeof l->list / sizeof *l->list))
        l->list[l->n++] = (placed){p, at};
}

static int by_place(const void *a, const void *b)
{
    const placed *x = a, *y = b;
    if (x->at != y->at)
        return x->at < y->at ? -1 : 1;
    if (x->point.kind != y->point.kind)
        return x->point.kind < y->point.kind ? -1 : 1;
    return x->point.resource - y->point.resource;
}

static lw_status find_resource(lw__freezer *w, const lw__task *t, const char *name, int *out)
{
    const lw_core_def *core = &w->z->cores[t->core].item->def;
    for (int i = 0; i < core->n_resources; i++)
        if (strcmp(core->resources[i], name) == 0) {
            *out = i;
            return LW_OK;
        }
    const char *near = lw_nearest_name(name, core->resources, core->n_resources);
    return lw__fail_at(t->item->def.origin, w->err, LW_ERR_NAME,
                       "task \"%s\": sections: core \"%s\" has no resource \"%s\"%s%s%s", t->name,
                       core->name, name, near ? "; nearest \"" : "", near ? near : "",
                       near ? "\"" : "");
}

// What a section lasts at the longest.
static lw_tick longest_of(const lw__core *c, const lw__task *t, const lw_section *s)
{
    double from = s->from.value.value, to = s->to.value.value;
    double unit = s->from.kind == LW_PLACE_SHARE ? (double)t->takes.most
                  : s->from.value.in_cycles      ? c->cycle
                                                 : 1e12;
    lw_tick longest = ticks((to - from) * unit);
    return longest < t->takes.most ? longest : t->takes.most;
}

static lw_status put_sections(point_list *l, lw_section_view *views)
{
    lw__freezer *w = l->w;
    const lw_task_def *def = &l->t->item->def;
    for (int i = 0; i < def->n_sections; i++) {
        const lw_section *s = &def->sections[i];
        int resource = -1;
        if (s->resource != NULL)
            LW__TRY(find_resource(w, l->t, s->resource, &resource));
        put_point(l, resource < 0 ? LW__POINT_MASK : LW__POINT_LOCK, s->from, resource);
        put_point(l, resource < 0 ? LW__POINT_UNMASK : LW__POINT_UNLOCK, s->to, resource);
        views[i] = (lw_section_view){resource, longest_of(&w->z->cores[l->t->core], l->t, s)};
    }
    return LW_OK;
}

static lw_status points_of(lw__freezer *w, lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    point_list l = {.w = w, .t = t};
    lw_section_view *views = lw__freezer_get(w, sizeof *views * (size_t)(def->n_sections + 1));
    if (views == NULL)
        return LW_ERR_MEMORY;
    t->n_sections = def->n_sections;
    t->sections = views;
    LW__TRY(put_sections(&l, views));
    for (int i = 0; i < def->n_yields && i < 60; i++)
        put_point(&l, LW__POINT_YIELD, def->yields[i], -1);
    t->reads_at_release = def->reads.kind == LW_PLACE_RELEASE || t->logical != LW_NEVER;
    if (t->has_law && !t->reads_at_release)
        put_point(&l, LW__POINT_READ, def->reads, -1);
    if (t->has_law && t->logical == LW_NEVER)
        put_point(&l, LW__POINT_WRITE, def->writes, -1);
    put_point(&l, LW__POINT_FINISH, (lw_place){LW_PLACE_SHARE, {1, 0}}, -1);
    qsort(l.list, (size_t)l.n, sizeof *l.list, by_place);
    lw__job_point *points = lw__freezer_get(w, sizeof *points * (size_t)l.n);
    if (points == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < l.n; i++)
        points[i] = l.list[i].point;
    t->points = points;
    t->n_points = l.n;
    return LW_OK;
}

// ---- resources

static lw_status ceilings(lw__freezer *w, lw__core *c)
{
    int *level = lw__freezer_get(w, sizeof *level * LW_CORE_MAX_RESOURCES);
    lw_tick *floors = lw__freezer_get(w, sizeof *floors * LW_CORE_MAX_RESOURCES);
    if (level == NULL || floors == NULL)
        return LW_ERR_MEMORY;
    for (int k = 0; k < c->n_resources; k++) {
        level[k] = INT32_MAX;
        floors[k] = LW_TICK_MAX / 4;
        for (int r = 0; r < c->n_tasks; r++)
            for (int i = 0; i < c->tasks[r]->n_sections; i++) {
                const lw__task *t = c->tasks[r];
                if (t->sections[i].resource != k)
                    continue;
                level[k] = t->level < level[k] ? t->level : level[k];
                floors[k] = t->deadline < floors[k] ? t->deadline : floors[k];
            }
    }
    c->ceiling_level = level;
    c->floor = floors;
    return LW_OK;
}

// ---- the law

static lw_status law_of_task(lw__freezer *w, lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    lw__loop *l = &t->law;
    l->what = kind_of(t);
    if (t->item->law == NULL)
        return LW_OK;
    lw__loop_item *item = lw__freezer_get(w, sizeof *item);
    if (item == NULL)
        return LW_ERR_MEMORY;
    item->def.origin = def->origin;
    item->def.name = def->name;
    item->def.law = t->item->law;
    item->def.n_inputs = def->n_inputs;
    item->def.inputs = def->inputs;
    item->def.n_outputs = def->n_outputs;
    item->def.outputs = def->outputs;
    item->law = t->item->law;
    t->has_law = 1;
    l->item = item;
    l->law = lw_law_look(t->item->law);
    l->step = l->law->step;
    l->param = l->law->param;
    l->n_in = l->law->n_in;
    l->n_out = l->law->n_out;
    l->log = -1;
    LW__TRY(lw__freeze_wires(w, l, &item->def));
    if (l->adc == NULL && t->trigger.kind == LW__EVENT_ADC)
        l->adc = &w->z->adcs[t->trigger.index];
    return LW_OK;
}

static lw_status nominal_of_law(lw__freezer *w, lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    if (!t->has_law)
        return LW_OK;
    t->law.nominal = !isnan(def->nominal) ? def->nominal
                     : def->every.num > 0 ? lw_period_seconds(def->every)
                     : t->period.num > 0  ? lw_period_seconds(t->period)
                                          : 0;
    if (t->law.nominal > 0)
        return LW_OK;
    return fail(w, t, LW_ERR_ARGUMENT,
                "its releases have no period; its law wants a nominal period: nominal = \"1 ms\"");
}

// ---- cells

static lw_status law_cells(lw__freezer *w, lw__task *t)
{
    lw__loop *l = &t->law;
    if (!t->has_law)
        return LW_OK;
    l->state = lw__freezer_double(w, t->name, "law state", LW_SLICE_LAW, l->law->n_state);
    l->outs = lw__freezer_double(w, t->name, "law outputs", LW_SLICE_LAW, l->n_out);
    t->outs = lw__freezer_double(w, t->name, "outputs of jobs", LW_SLICE_IN_FLIGHT,
                                 (t->mask + 1) * l->n_out);
    l->stepped_at = lw__freezer_integer(w, t->name, "sample of the last step", LW_SLICE_LAW, 1);
    l->missed = lw__freezer_integer(w, t->name, "missed since the last step", LW_SLICE_LAW, 1);
    l->n_lost = lw__freezer_integer(w, t->name, "lost so far", LW_SLICE_LAW, 1);
    l->n_missed = lw__freezer_integer(w, t->name, "missed so far", LW_SLICE_LAW, 1);
    return l->n_missed >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static int schedule(lw__freezer *w, const char *owner, const char *name, int count)
{
    return lw__freezer_integer(w, owner, name, LW_SLICE_SCHEDULE, count);
}

static lw_status task_cells(lw__freezer *w, lw__task *t)
{
    int n = 2;
    while (n < t->queue + 1)
        n *= 2;
    t->mask = n - 1;
    // side by side, in the order of lw__own (schedule.h)
    t->jobs = schedule(w, t->name, "releases so far", 1);
    t->nominal = schedule(w, t->name, "next nominal release", 1);
    t->base = schedule(w, t->name, "where its clock began", 1);
    t->base_job = schedule(w, t->name, "job at which its clock began", 1);
    t->head = schedule(w, t->name, "first job", 1);
    t->count = schedule(w, t->name, "unfinished jobs", 1);
    t->start = schedule(w, t->name, "start of the job", 1);
    t->preemptions = schedule(w, t->name, "preemptions of the job", 1);
    t->deferred = schedule(w, t->name, "a release waits for the finish", 1);
    t->ring_nominal = schedule(w, t->name, "nominal releases of jobs", n);
    t->ring_ready = schedule(w, t->name, "releases of jobs", n);
    t->ring_work = schedule(w, t->name, "execution times of jobs", n);
    t->ring_job = schedule(w, t->name, "numbers of jobs", n);
    t->ring_sample = schedule(w, t->name, "samples that jobs read", n);
    t->ring_read = schedule(w, t->name, "instants at which jobs read", n);
    t->written = schedule(w, t->name, "instant at which the job wrote", 1);
    int pending = t->release == LW__RELEASE_EVENT && t->has_jitter ? LW__PENDING : 0;
    t->pending = schedule(w, t->name, "releases on their way", pending);
    t->pending_head = schedule(w, t->name, "first release on its way", pending > 0);
    t->pending_count = schedule(w, t->name, "number of releases on their way", pending > 0);
    t->logical_job = schedule(w, t->name, "job whose write is due", 1);
    t->finished = schedule(w, t->name, "last finished job", 1);
    t->logical_timer = t->logical != LW_NEVER ? lw__freezer_timer(w) : -1;
    if (t->finished < 0)
        return LW_ERR_MEMORY;
    return law_cells(w, t);
}

static lw_status core_cells(lw__freezer *w, lw__core *c)
{
    int n = c->n_tasks;
    c->due = schedule(w, c->name, "next releases", n);
    c->key = schedule(w, c->name, "urgencies of jobs", n);
    c->released = schedule(w, c->name, "releases of jobs", n);
    c->done = schedule(w, c->name, "work done of jobs", n);
    c->goal = schedule(w, c->name, "work at the next points of jobs", n);
    c->at = schedule(w, c->name, "next points of jobs", n);
    c->waits_for = schedule(w, c->name, "resources that jobs wait for", n);
    c->ready = schedule(w, c->name, "tasks with a job", 1);
    c->waiting = schedule(w, c->name, "tasks whose job waits", 1);
    c->running = schedule(w, c->name, "task that has the core", 1);
    c->holder = schedule(w, c->name, "task below interrupts that has the core", 1);
    c->last = schedule(w, c->name, "task of the job that ran last", 1);
    c->work_at = schedule(w, c->name, "instant at which work goes on", 1);
    c->since = schedule(w, c->name, "beginning of this stretch", 1);
    c->held_until = schedule(w, c->name, "end of costs and stalls", 1);
    c->masked = schedule(w, c->name, "masked sections open", 1);
    c->debt = schedule(w, c->name, "costs put off by masking", 1);
    c->owner = schedule(w, c->name, "owners of resources", c->n_resources);
    c->lock_key = schedule(w, c->name, "ceilings in force", c->n_resources);
    c->held = schedule(w, c->name, "resources held", 1);
    c->slot = schedule(w, c->name, "task of this slot", 1);
    c->turn = schedule(w, c->name, "turns of the table so far", 1);
    c->turn_due = schedule(w, c->name, "next turn of the table", 1);
    c->stall = schedule(w, c->name, "stalls so far", 1);
    c->stall_due = schedule(w, c->name, "next stall", 1);
    c->closed = schedule(w, c->name, "last instant of releases", 1);
    c->point_timer = lw__freezer_timer(w);
    c->release_timer = lw__freezer_timer(w);
    return c->closed >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status stalls_of(lw__freezer *w, lw__core *c)
{
    const lw_core_def *def = &c->item->def;
    struct lw__stalled *list = lw__freezer_get(w, sizeof *list * (size_t)(def->n_stalls + 1));
    if (list == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < def->n_stalls; i++)
        list[i] = (struct lw__stalled){ticks(def->stalls[i].at * 1e12),
                                       ticks(def->stalls[i].lasts * 1e12)};
    c->stalls = list;
    c->n_stalls = def->n_stalls;
    return LW_OK;
}

// Strict ranks: no two tasks of one level, no resource, one rule.
static int is_plain(const lw__core *c)
{
    for (int r = 0; r < c->n_tasks; r++)
        if (c->peers[r] != UINT64_C(1) << r)
            return 0;
    return c->n_resources == 0 && c->policy == &lw__fixed_priority;
}

lw_status lw__freeze_cores(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_tasks; i++) {
        lw__task *t = &z->tasks[i];
        if (t->item->def.n_yields > 0 && z->cores[t->core].policy != &lw__cooperative)
            return fail(w, t, LW_ERR_ARGUMENT, "yields: only a cooperative core has yields");
        LW__TRY(timings(w, t));
        LW__TRY(clock_of_task(w, t));
        LW__TRY(law_of_task(w, t));
        LW__TRY(nominal_of_law(w, t));
        LW__TRY(logical_time(w, t));
        LW__TRY(points_of(w, t));
        LW__TRY(task_cells(w, t));
    }
    for (int i = 0; i < z->n_cores; i++) {
        lw__core *c = &z->cores[i];
        LW__TRY(ceilings(w, c));
        LW__TRY(stalls_of(w, c));
        LW__TRY(core_cells(w, c));
        c->plain = is_plain(c);
    }
    return LW_OK;
}
