// Freezing cores and the releases of their tasks: who runs on which core, in what rank, released
// by what, in real time.

#include "run/event.h"
#include "run/freezer.h"
#include "run/schedule.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

__extension__ typedef __int128 wide;

static int same(const char *a, const char *b)
{
    return strcmp(a, b) == 0;
}

static lw_status fail(lw__freezer *w, const lw__task *t, lw_status status, const char *text)
{
    return lw__fail_at(t->item->def.origin, w->err, status, "%s \"%s\": %s",
                       t->item->is_frame ? "frame" : "task", t->name, text);
}

// ---- cores

// Ticks of real time of a duration that the core's own clock measures.
static lw_tick own_ticks(const lw__core *c, lw_span span)
{
    lw_tick t = 0;
    double seconds = span.in_cycles ? span.value * c->cycle * 1e-12 : span.value;
    return lw_tick_from_seconds(seconds, &t) == LW_OK ? t : LW_NEVER;
}

// A period of the core's clock in real time: drift is taken to a thousand millionth.
static lw_period real_period(const lw__core *c, lw_period p)
{
    int64_t parts = INT64_C(1000000000);
    int64_t fast = parts + (int64_t)floor(c->item->def.drift * 1e9 + 0.5);
    if (fast == parts || p.num == 0)
        return p;
    wide num = (wide)p.num * parts, den = (wide)p.den * fast, a = num, b = den;
    while (b != 0) {
        wide rest = a % b;
        a = b;
        b = rest;
    }
    num /= a;
    den /= a;
    while (num > INT64_MAX || den > INT64_MAX) {
        num /= 2;
        den /= 2;
    }
    return (lw_period){(int64_t)num, (int64_t)den};
}

static lw_status freeze_core(lw__freezer *w, int index)
{
    lw__core *c = &w->z->cores[index];
    c->item = &w->rig->cores[index];
    const lw_core_def *def = &c->item->def;
    c->name = def->name;
    c->index = index;
    c->policy = lw__policy_at((int)def->policy);
    c->rate = 1 / (1 + def->drift);
    c->cycle = 1e12 / def->clock * c->rate;
    c->switch_cost = own_ticks(c, def->context_switch);
    c->dispatch_cost = own_ticks(c, def->dispatch_cost);
    c->release_cost = own_ticks(c, def->release_cost);
    c->timer_tick = real_period(c, def->timer_tick);
    c->table_cycle = real_period(c, def->cycle);
    c->locking = def->locking;
    c->n_resources = def->n_resources;
    c->log = -1;
    c->tasks = lw__freezer_get(w, sizeof *c->tasks * LW_CORE_MAX_TASKS);
    return c->tasks != NULL ? LW_OK : LW_ERR_MEMORY;
}

// ---- tasks

static lw_status find_core(lw__freezer *w, lw__task *t)
{
    const char *names[256], *kind = t->item->is_frame ? "bus" : "core";
    int n = 0;
    t->core = -1;
    for (int i = 0; i < w->z->n_cores; i++) {
        const lw__core *c = &w->z->cores[i];
        if (c->item->is_bus != t->item->is_frame)
            continue;
        if (n < 256)
            names[n++] = c->name;
        if (same(c->name, t->item->def.on))
            t->core = i;
    }
    if (t->core >= 0)
        return LW_OK;
    const char *near = lw_nearest_name(t->item->def.on, names, n);
    return lw__fail_at(t->item->def.origin, w->err, LW_ERR_NAME,
                       "%s \"%s\": on: no %s \"%s\"%s%s%s", t->item->is_frame ? "frame" : "task",
                       t->name, kind, t->item->def.on, near ? "; nearest \"" : "", near ? near : "",
                       near ? "\"" : "");
}

static lw_status check_priority(lw__freezer *w, const lw__core *c, const lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    int wanted = c->policy->by_priority || def->interrupt;
    if (wanted && !def->is_priority)
        return fail(w, t, LW_ERR_ARGUMENT,
                    def->interrupt ? "its interrupt level is missing" : "priority is missing");
    if (wanted && c->item->def.urgent == LW_URGENT_UNSTATED)
        return lw__fail_at(c->item->def.origin, w->err, LW_ERR_ARGUMENT,
                           "core \"%s\": urgent is missing: \"larger\" or \"smaller\" priority "
                           "numbers are the urgent ones?",
                           c->name);
    return LW_OK;
}

static lw_status check_released(lw__freezer *w, const lw__core *c, const lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    int stated = def->every.num > 0 || def->released_by != NULL || def->arrives != NULL;
    if (c->policy->by_table && !def->interrupt)
        return stated ? fail(w, t, LW_ERR_ARGUMENT,
                             "its releases are stated, but the table of its core releases it")
                      : LW_OK;
    return stated ? LW_OK
                  : fail(w, t, LW_ERR_ARGUMENT,
                         "nothing releases it: every, released_by or arrives is wanted");
}

static lw_tick real_ticks(const lw__core *c, double seconds)
{
    return own_ticks(c, (lw_span){seconds, 0}) == LW_NEVER
               ? LW_NEVER
               : own_ticks(c, (lw_span){seconds * c->rate, 0});
}

static lw_status freeze_release(lw__freezer *w, int index)
{
    lw__task *t = &w->z->tasks[index];
    t->item = &w->rig->tasks[index];
    const lw_task_def *def = &t->item->def;
    t->name = def->name;
    t->index = index;
    t->log = -1;
    t->is_handler = def->interrupt;
    LW__TRY(find_core(w, t));
    lw__core *c = &w->z->cores[t->core];
    if (c->n_tasks == LW_CORE_MAX_TASKS)
        return fail(w, t, LW_ERR_CAPACITY, "a core has at most 64 tasks");
    c->tasks[c->n_tasks++] = t;
    LW__TRY(check_priority(w, c, t));
    LW__TRY(check_released(w, c, t));
    t->release = def->every.num > 0         ? LW__RELEASE_CLOCK
                 : def->arrives != NULL     ? LW__RELEASE_ARRIVALS
                 : def->released_by != NULL ? LW__RELEASE_EVENT
                                            : LW__RELEASE_SLOT;
    t->period = real_period(c, def->every);
    t->offset = real_ticks(c, def->offset);
    t->overrun = def->overrun;
    t->queue = def->queue;
    t->relative = def->delay == LW_DELAY_RELATIVE;
    if (t->release != LW__RELEASE_EVENT)
        return LW_OK;
    return lw__event_find(w, def->origin, t->item->is_frame ? "frame" : "task", def->name,
                          "released_by", def->released_by, &t->trigger);
}

// ---- the table

static int rank_named(const lw__core *c, const char *name)
{
    for (int r = 0; r < c->n_tasks; r++)
        if (same(c->tasks[r]->name, name) && !c->tasks[r]->is_handler)
            return r;
    return -1;
}

static lw_status unknown_slot(lw__freezer *w, const lw__core *c, const char *name)
{
    const char *names[LW_CORE_MAX_TASKS];
    int n = 0;
    for (int r = 0; r < c->n_tasks; r++)
        names[n++] = c->tasks[r]->name;
    const char *near = lw_nearest_name(name, names, n);
    return lw__fail_at(c->item->def.origin, w->err, LW_ERR_NAME,
                       "core \"%s\": table: no task \"%s\" on it%s%s%s", c->name, name,
                       near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

// Where slots begin, and where the core is left idle between them.
static lw_status freeze_table(lw__freezer *w, lw__core *c)
{
    const lw_core_def *def = &c->item->def;
    int n = def->n_slots;
    struct lw__turn *turns = lw__freezer_get(w, sizeof *turns * (size_t)(2 * n + 1));
    if (turns == NULL)
        return LW_ERR_MEMORY;
    lw_tick cycle = lw_period_at(c->table_cycle, 0, 1);
    for (int i = 0; i < n; i++) {
        const lw_slot *slot = &def->slots[i];
        int rank = rank_named(c, slot->task);
        if (rank < 0)
            return unknown_slot(w, c, slot->task);
        lw_tick at = real_ticks(c, slot->at), end = real_ticks(c, slot->at + slot->lasts);
        lw_tick next =
            i + 1 < n ? real_ticks(c, slot[1].at) : cycle + real_ticks(c, def->slots[0].at);
        turns[c->n_turns++] = (struct lw__turn){at, rank};
        if (end < next && end < cycle)
            turns[c->n_turns++] = (struct lw__turn){end, -1};
    }
    c->turns = turns;
    return LW_OK;
}

// Tasks of a table need a slot; their period is the cycle where they have one slot.
static lw_status slots_of(lw__freezer *w, lw__core *c, lw__task *t)
{
    int n = 0;
    for (int i = 0; i < c->n_turns; i++)
        n += c->turns[i].rank == t->rank;
    if (n == 0)
        return fail(w, t, LW_ERR_ARGUMENT, "the table of its core has no slot for it");
    if (n == 1)
        t->period = c->table_cycle;
    return LW_OK;
}

// ---- ranks

static int64_t urgency(const lw__core *c, const lw__task *t)
{
    const lw_task_def *def = &t->item->def;
    if (t->is_handler || c->policy->by_priority)
        return c->item->def.urgent == LW_URGENT_LARGER ? -(int64_t)def->priority : def->priority;
    return 0;
}

typedef struct ranked {
    lw__task *task;
    int64_t urgency;
} ranked;

static int by_rank(const void *a, const void *b)
{
    const ranked *x = a, *y = b;
    if (x->task->is_handler != y->task->is_handler)
        return x->task->is_handler ? -1 : 1;
    if (x->urgency != y->urgency)
        return x->urgency < y->urgency ? -1 : 1;
    return x->task->index - y->task->index;
}

static lw_status rank_tasks(lw__freezer *w, lw__core *c)
{
    ranked list[LW_CORE_MAX_TASKS];
    uint64_t *peers = lw__freezer_get(w, sizeof *peers * LW_CORE_MAX_TASKS);
    int *numbers = lw__freezer_get(w, sizeof *numbers * LW_CORE_MAX_TASKS);
    if (peers == NULL || numbers == NULL)
        return LW_ERR_MEMORY;
    for (int r = 0; r < c->n_tasks; r++)
        list[r] = (ranked){c->tasks[r], urgency(c, c->tasks[r])};
    qsort(list, (size_t)c->n_tasks, sizeof *list, by_rank);
    for (int r = 0, level = 0; r < c->n_tasks; r++) {
        lw__task *t = c->tasks[r] = list[r].task;
        level += r > 0 && (list[r].urgency != list[r - 1].urgency ||
                           t->is_handler != list[r - 1].task->is_handler);
        t->rank = r;
        numbers[r] = t->index;
        t->level = level;
        c->handlers |= (uint64_t)(t->is_handler != 0) << r;
    }
    for (int r = 0; r < c->n_tasks; r++)
        for (int q = 0; q < c->n_tasks; q++)
            peers[r] |= (uint64_t)(c->tasks[q]->level == c->tasks[r]->level) << q;
    c->peers = peers;
    c->numbers = numbers;
    return LW_OK;
}

lw_status lw__freeze_clocks(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_cores; i++)
        LW__TRY(freeze_core(w, i));
    for (int i = 0; i < z->n_tasks; i++)
        LW__TRY(freeze_release(w, i));
    for (int i = 0; i < z->n_cores; i++) {
        lw__core *c = &z->cores[i];
        LW__TRY(rank_tasks(w, c));
        if (!c->policy->by_table)
            continue;
        LW__TRY(freeze_table(w, c));
        for (int r = 0; r < c->n_tasks; r++)
            if (!c->tasks[r]->is_handler)
                LW__TRY(slots_of(w, c, c->tasks[r]));
    }
    return LW_OK;
}
