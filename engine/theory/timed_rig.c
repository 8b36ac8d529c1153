// The task set of a core or bus of a frozen rig, and in plain words what of it is not covered.
//
// A task without a least distance of releases leaves those more urgent analysable: what it can do
// to them is one section (or one whole job, without preemption).

#include "run/schedule.h"
#include "theory/timed.h"

#include <stdarg.h>
#include <stdio.h>
#include <string.h>

typedef struct gatherer {
    const lw_frozen *frozen;
    const lw__core *core;
    lw_timed_core *out;
    lw_timed_set set;
    lw_timed_task tasks[LW_TIMED_MAX_TASKS];
    int first_open; // urgency of the most urgent task that is not covered
} gatherer;

LW_PRINTF(2, 3)
static void say(gatherer *g, const char *format, ...)
{
    char *text = g->out->why;
    size_t used = strlen(text);
    va_list args;
    if (used + 200 > sizeof g->out->why)
        return;
    if (used > 0)
        text[used++] = '\n';
    va_start(args, format);
    vsnprintf(text + used, sizeof g->out->why - used, format, args);
    va_end(args);
}

static const lw__task *task_at(const gatherer *g, int rank)
{
    return g->core->tasks[rank];
}

static int has_sections(const gatherer *g, int masked)
{
    for (int r = 0; r < g->core->n_tasks; r++)
        for (int s = 0; s < task_at(g, r)->n_sections; s++)
            if ((task_at(g, r)->sections[s].resource < 0) == masked)
                return 1;
    return 0;
}

// ---- what is not covered at all

static int policy_covered(gatherer *g)
{
    const lw__core *c = g->core;
    lw_policy policy = g->set.policy;
    if (policy == LW_POLICY_COOPERATIVE || policy == LW_POLICY_TABLE)
        say(g, "response times under the policy \"%s\" are not analysed", lw_policy_words(policy));
    else if (policy != LW_POLICY_FIXED_PRIORITY && c->handlers != 0)
        say(g, "interrupt handlers are analysed under fixed priority with preemption only");
    else if (policy != LW_POLICY_FIXED_PRIORITY && c->release_cost > 0)
        say(g, "costs of releases are analysed under fixed priority with preemption only");
    else if (policy == LW_POLICY_EARLIEST_DEADLINE && (has_sections(g, 0) || has_sections(g, 1)))
        say(g, "resources and masked sections under earliest deadline first are not analysed");
    else
        return 1;
    return 0;
}

static int core_covered(gatherer *g)
{
    const lw__core *c = g->core;
    if (c->n_tasks == 0)
        say(g, "it has no tasks");
    else if (c->n_stalls > 0)
        say(g, "it stands still at stated instants, which the analysis does not know");
    else if (g->set.policy == LW_POLICY_FIXED_PRIORITY && c->locking == LW_LOCKING_NONE &&
             has_sections(g, 0))
        say(g, "its resources leave priorities as they are, so that no bound on waiting for one "
               "is given");
    else
        return policy_covered(g);
    return 0;
}

// Why the releases of a task have no known least distance; NULL: they have.
static const char *open_release(const gatherer *g, const lw__task *t)
{
    lw__event cause = t->trigger;
    while (cause.kind == LW__EVENT_ADC)
        cause = g->frozen->adcs[cause.index].trigger;
    if (cause.kind == LW__EVENT_TASK)
        return "is released by a task, whose finishes come at uneven distances";
    if (cause.kind == LW__EVENT_COMPARATOR)
        return "is released by a comparator, whose edges have no least distance";
    if (t->least_between < 1)
        return "has no least time between two releases";
    return NULL;
}

static void look_for_open(gatherer *g)
{
    g->first_open = INT32_MAX;
    for (int r = 0; r < g->core->n_tasks; r++) {
        const lw__task *t = task_at(g, r);
        const char *why = open_release(g, t);
        if (why == NULL)
            continue;
        int all = g->set.policy == LW_POLICY_EARLIEST_DEADLINE || g->core->release_cost > 0;
        say(g, "\"%s\" %s; it and %s are not analysed", t->name, why,
            all ? "what shares its core" : "what is not more urgent");
        int level = all ? -1 : t->level;
        g->first_open = level < g->first_open ? level : g->first_open;
    }
}

// ---- what less urgent tasks do

static lw_tick longest_masked(const gatherer *g, int level)
{
    lw_tick most = 0;
    for (int r = 0; r < g->core->n_tasks; r++) {
        const lw__task *t = task_at(g, r);
        for (int s = 0; s < t->n_sections && t->level > level; s++)
            if (t->sections[s].resource < 0 && t->sections[s].longest > most)
                most = t->sections[s].longest;
    }
    return most;
}

// Blocking by resources of every rank; tasks of equal urgency are more urgent to one another.
static void resource_blocking(const gatherer *g, lw_tick *blocking)
{
    lw_tick longest[LW_CORE_MAX_TASKS * LW_CORE_MAX_RESOURCES] = {0};
    int n = g->core->n_tasks, m = g->core->n_resources;
    for (int r = 0; r < n; r++)
        for (int s = 0; s < task_at(g, r)->n_sections; s++) {
            const lw_section_view *v = &task_at(g, r)->sections[s];
            if (v->resource >= 0 && v->longest > longest[r * m + v->resource])
                longest[r * m + v->resource] = v->longest;
        }
    lw_timed_blocking(n, m, longest, g->core->locking, blocking);
}

static int users_below(const gatherer *g, int rank)
{
    int n = 0;
    for (int r = rank + 1; r < g->core->n_tasks; r++)
        n += task_at(g, r)->n_sections > 0;
    return n;
}

static lw_tick blocking_of(const gatherer *g, int rank, lw_tick resource)
{
    lw_tick masked = longest_masked(g, task_at(g, rank)->level);
    lw_tick sum = resource + masked;
    if (g->core->locking == LW_LOCKING_CEILING)
        sum = resource > masked ? resource : masked;
    return sum > 0 ? sum + 2 * g->set.switch_cost * users_below(g, rank) : 0;
}

// Without preemption: by how much the longest job left out exceeds those of the set.
static lw_tick left_out(const gatherer *g, int level)
{
    lw_tick in = 0, out = 0;
    for (int r = 0; r < g->core->n_tasks; r++) {
        const lw__task *t = task_at(g, r);
        lw_tick takes = t->takes.most + g->set.switch_cost;
        if (t->level >= g->first_open)
            out = takes > out ? takes : out;
        else if (t->level > level)
            in = takes > in ? takes : in;
    }
    return out > in ? out - in : 0;
}

// ---- the set

// Each wait for a resource may switch to its holder and back.
static lw_tick takes_of(const gatherer *g, const lw__task *t)
{
    lw_tick takes = t->takes.most > 0 ? t->takes.most : 1;
    for (int s = 0; s < t->n_sections; s++)
        if (t->sections[s].resource >= 0 && g->core->locking == LW_LOCKING_INHERITANCE)
            takes += 2 * g->set.switch_cost;
    return takes;
}

static void add_task(gatherer *g, int rank, lw_tick resource)
{
    const lw__task *t = task_at(g, rank);
    lw_timed_task *to = &g->tasks[g->set.n];
    lw_period tick = g->core->timer_tick;
    *to = (lw_timed_task){.takes = takes_of(g, t),
                          .between = t->least_between,
                          .deadline = t->deadline,
                          .jitter = t->jitter.most,
                          .urgency = t->level};
    if (tick.num > 0 && t->release == LW__RELEASE_CLOCK)
        to->jitter += lw_period_at(tick, 0, 1) + 1;
    if (g->set.policy == LW_POLICY_FIXED_PRIORITY)
        to->blocking = blocking_of(g, rank, resource);
    else if (g->set.policy == LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION)
        to->blocking = left_out(g, t->level);
    g->out->tasks[g->set.n++] = t->index;
}

static void say_assumptions(gatherer *g)
{
    int offsets = 0, relative = 0, arrivals = 0;
    for (int r = 0; r < g->core->n_tasks; r++) {
        const lw__task *t = task_at(g, r);
        offsets |= t->offset != 0;
        relative |= t->relative;
        arrivals |= t->release == LW__RELEASE_ARRIVALS;
    }
    if (offsets)
        say(g, "offsets are ignored: the bounds hold for every phase, and may be above what the "
               "stated phases can show");
    if (relative)
        say(g, "relative delays are taken as periods, which is not less than they ask for");
    if (arrivals)
        say(g, "arrivals are taken at their least distance, again and again");
}

static void gather(gatherer *g)
{
    lw_tick resource[LW_CORE_MAX_TASKS] = {0};
    double bit = g->core->item->is_bus ? g->core->cycle : 1;
    g->set.switch_cost = g->core->switch_cost + g->core->dispatch_cost;
    g->set.release_cost = g->core->release_cost;
    // A release that takes time makes whoever is interrupted pay for its resumption.
    if (g->set.release_cost > 0)
        g->set.release_cost += g->set.switch_cost;
    g->set.granularity = bit > 1 ? (lw_tick)bit : 1;
    g->set.tasks = g->tasks;
    if (g->set.policy == LW_POLICY_FIXED_PRIORITY)
        resource_blocking(g, resource);
    for (int r = 0; r < g->core->n_tasks; r++)
        if (task_at(g, r)->level < g->first_open)
            add_task(g, r, resource[r]);
    say_assumptions(g);
}

lw_status lw_timed_rig(const lw_frozen *frozen, int core, lw_timed_core *out, lw_error *err)
{
    gatherer g = {.frozen = frozen, .out = out};
    if (core < 0 || core >= frozen->n_cores)
        return lw_error_set(err, LW_ERR_ARGUMENT, "core %d is not there; the rig has %d", core,
                            frozen->n_cores);
    memset(out, 0, sizeof *out);
    g.core = &frozen->cores[core];
    g.set.policy = g.core->item->is_bus ? LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION
                                        : g.core->item->def.policy;
    if (!core_covered(&g))
        return LW_OK;
    look_for_open(&g);
    gather(&g);
    out->n = g.set.n;
    out->analysed = out->n > 0;
    return out->analysed ? lw_timed_analyse(&g.set, &out->result, err) : LW_OK;
}
