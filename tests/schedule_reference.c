// The unit-step scheduler, random task sets, and the same sets by the engine.

#include "schedule_reference.h"

#include "loops.h"

#include <latewood/draw.h>

// ---- one unit after another

typedef struct live { // a job not yet over
    ref_job seen;
    int takes, done;
    int section[2]; // 0: before, 1: in it, 2: behind it
    int locked_at[2];
} live;

typedef struct world {
    const ref_set *set;
    ref_fault fault;
    ref_result *out;
    int now;
    int next_job[REF_TASKS], served[REF_TASKS]; // served: instant of the last release
    int n_live[REF_TASKS];
    live live[REF_TASKS][70];
    int waits[REF_TASKS]; // resource, -1
    int owner[4];
    int running, holder, last, cost, kernel, debt;
} world;

static int masked(const world *w)
{
    const ref_task *t = &w->set->task[w->running < 0 ? 0 : w->running];
    for (int k = 0; w->running >= 0 && k < t->n_sections; k++)
        if (t->section[k].resource < 0 && w->live[w->running][0].section[k] == 1)
            return 1;
    return 0;
}

static int at_work(const world *w)
{
    return w->running >= 0 && w->cost == 0 && w->kernel == 0;
}

// ---- urgency

static int own_key(const world *w, int i)
{
    const ref_task *t = &w->set->task[i];
    const live *j = &w->live[i][0];
    if (w->set->policy == LW_POLICY_EARLIEST_DEADLINE)
        return j->seen.release + t->deadline;
    return w->set->policy == LW_POLICY_COOPERATIVE ? j->seen.ready : t->priority;
}

// What holding resource r is worth to its owner, who took it at `since`.
static int ceiling(const world *w, int r, int since)
{
    int best = INT32_MAX;
    for (int i = 0; i < w->set->n; i++)
        for (int k = 0; k < w->set->task[i].n_sections; k++) {
            const ref_task *t = &w->set->task[i];
            int key = w->set->policy == LW_POLICY_EARLIEST_DEADLINE ? since + t->deadline
                      : w->set->policy == LW_POLICY_COOPERATIVE     ? INT32_MAX
                                                                    : t->priority;
            if (t->section[k].resource == r && key < best)
                best = key;
        }
    return best;
}

static void all_keys(const world *w, int *key)
{
    for (int i = 0; i < w->set->n; i++) {
        key[i] = w->n_live[i] > 0 ? own_key(w, i) : INT32_MAX;
        for (int k = 0; w->n_live[i] > 0 && w->set->locking == LW_LOCKING_CEILING &&
                        k < w->set->task[i].n_sections;
             k++) {
            int r = w->set->task[i].section[k].resource;
            if (r < 0 || w->live[i][0].section[k] != 1)
                continue;
            int c = ceiling(w, r, w->live[i][0].locked_at[k]);
            key[i] = c < key[i] ? c : key[i];
        }
    }
    for (int pass = 0; w->set->locking == LW_LOCKING_INHERITANCE && pass < REF_TASKS; pass++)
        for (int i = 0; i < w->set->n; i++)
            if (w->waits[i] >= 0) {
                int o = w->owner[w->waits[i]];
                key[o] = key[i] < key[o] ? key[i] : key[o];
            }
}

// Whether i goes before j, keys aside.
static int first_of_equals(const world *w, int i, int j, int keeps)
{
    if (i == keeps || j == keeps)
        return i == keeps;
    int a = w->live[i][0].seen.ready, b = w->live[j][0].seen.ready;
    if (a != b)
        return w->fault == REF_LATER_FIRST ? a > b : a < b;
    return i < j;
}

static int pick(const world *w)
{
    int key[REF_TASKS], best = -1, above = 0;
    all_keys(w, key);
    for (int i = 0; i < w->set->n; i++)
        above |= w->n_live[i] > 0 && w->set->task[i].handler;
    int stays = w->set->policy == LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION ||
                w->set->policy == LW_POLICY_COOPERATIVE;
    if (!above && stays && w->holder >= 0 && w->n_live[w->holder] > 0 && w->waits[w->holder] < 0)
        return w->holder;
    for (int i = 0; i < w->set->n; i++) {
        if (w->n_live[i] == 0 || w->waits[i] >= 0 || w->set->task[i].handler != above)
            continue;
        int mine = above ? w->set->task[i].priority : key[i];
        int least = best < 0 ? 0 : above ? w->set->task[best].priority : key[best];
        if (best < 0 || mine < least ||
            (mine == least && first_of_equals(w, i, best, above ? w->running : w->holder)))
            best = i;
    }
    return best;
}

// ---- jobs

static void give_up(world *w, int i)
{
    for (int r = 0; r < 4; r++)
        if (w->owner[r] == i) {
            w->owner[r] = -1;
            for (int j = 0; j < w->set->n; j++)
                w->waits[j] = w->waits[j] == r ? -1 : w->waits[j];
        }
    w->waits[i] = -1;
}

static void over(world *w, int i, int outcome)
{
    live *j = &w->live[i][0];
    j->seen.finish = w->now;
    j->seen.outcome = outcome;
    if (w->out->n[i] < REF_JOBS)
        w->out->job[i][w->out->n[i]++] = j->seen;
    w->n_live[i]--;
    memmove(j, j + 1, sizeof *j * (size_t)w->n_live[i]);
    w->running = w->running == i ? -1 : w->running;
    w->holder = w->holder == i ? -1 : w->holder;
    w->last = w->last == i ? -1 : w->last;
}

static void abort_first(world *w, int i)
{
    int paid = w->running == i && masked(w);
    give_up(w, i);
    over(w, i, LW_JOB_ABORTED);
    if (paid) {
        w->kernel += w->debt;
        w->debt = 0;
    }
}

static void release(world *w, int i, int k, int nominal)
{
    const ref_task *t = &w->set->task[i];
    live j = {.seen = {k, nominal, w->now, -1, -1, 0, 0}, .takes = t->takes[k % t->n_takes]};
    int skip = w->n_live[i] > 0 && (t->overrun == LW_OVERRUN_SKIP ||
                                    (t->overrun == LW_OVERRUN_QUEUE && w->n_live[i] > t->queue));
    if (w->n_live[i] > 0 && t->overrun == LW_OVERRUN_ABORT)
        abort_first(w, i);
    if (skip) {
        j.seen.finish = w->now;
        j.seen.outcome = LW_JOB_SKIPPED;
        if (w->out->n[i] < REF_JOBS)
            w->out->job[i][w->out->n[i]++] = j.seen;
        return;
    }
    if (w->fault == REF_FORGETS_QUEUE && w->n_live[i] > 0)
        return;
    w->live[i][w->n_live[i]++] = j;
    if (masked(w))
        w->debt += w->set->release_cost;
    else
        w->kernel += w->set->release_cost;
}

static void releases(world *w)
{
    if (w->set->stall_for > 0 && w->set->stall_at == w->now)
        w->kernel += w->set->stall_for;
    for (int i = 0; i < w->set->n; i++) {
        const ref_task *t = &w->set->task[i];
        for (;;) {
            int k = w->next_job[i], nominal = t->offset + k * t->period;
            int ready = nominal + (t->n_jitter > 0 ? t->jitter[k % t->n_jitter] : 0);
            int tick = w->set->timer_tick;
            if (tick > 0)
                ready = (ready + tick - 1) / tick * tick;
            ready = ready < w->served[i] ? w->served[i] : ready;
            if (ready != w->now)
                break;
            w->served[i] = w->now;
            w->next_job[i]++;
            release(w, i, k, nominal);
        }
    }
}

// ---- places within the job at work

static int take(world *w, int i, int k)
{
    int r = w->set->task[i].section[k].resource;
    if (r >= 0 && w->owner[r] >= 0 && w->fault != REF_NO_BLOCKING) {
        w->waits[i] = r;
        w->running = w->holder = -1;
        return 0;
    }
    if (r >= 0)
        w->owner[r] = i;
    w->live[i][0].section[k] = 1;
    w->live[i][0].locked_at[k] = w->now;
    return 1;
}

// Sections that end here (resources, then masks), then those that begin here.
static void places(world *w)
{
    while (at_work(w)) {
        int i = w->running, moved = 0;
        live *j = &w->live[i][0];
        const ref_task *t = &w->set->task[i];
        w->last = i;
        if (j->seen.start < 0)
            j->seen.start = w->now;
        for (int kind = 0; kind < 4 && !moved; kind++)
            for (int r = -1; r < 4 && !moved; r++)
                for (int k = 0; k < t->n_sections && !moved; k++) {
                    const ref_section *s = &t->section[k];
                    if (s->resource != r || (r < 0) != (kind % 2))
                        continue;
                    if (kind < 2 && j->section[k] == 1 && s->to == j->done) {
                        j->section[k] = 2;
                        moved = 1;
                        if (r >= 0) {
                            w->owner[r] = -1;
                            for (int q = 0; q < w->set->n; q++)
                                w->waits[q] = w->waits[q] == r ? -1 : w->waits[q];
                        } else if (!masked(w)) {
                            w->kernel += w->debt;
                            w->debt = 0;
                        }
                    } else if (kind >= 2 && j->section[k] == 0 && s->from == j->done) {
                        moved = 1;
                        if (!take(w, i, k))
                            return;
                    }
                }
        if (moved)
            continue;
        if (j->done == j->takes)
            over(w, i, LW_JOB_FINISHED);
        return;
    }
}

static void dispatch(world *w)
{
    for (;;) {
        int next = w->running >= 0 && masked(w) ? w->running : pick(w);
        if (next == w->running)
            return;
        if (w->running >= 0)
            w->live[w->running][0].seen.preemptions += w->live[w->running][0].seen.start >= 0;
        w->running = next;
        if (next < 0 || !w->set->task[next].handler)
            w->holder = next;
        if (next < 0)
            return;
        int free = w->fault == REF_FREE_SWITCH && w->live[next][0].seen.start >= 0;
        w->cost = w->set->dispatch_cost + (w->last == next || free ? 0 : w->set->context_switch);
        places(w);
    }
}

void ref_run(const ref_set *set, ref_fault fault, ref_result *out)
{
    static world w;
    memset(out->n, 0, sizeof out->n);
    memset(&w, 0, sizeof w);
    w.set = set;
    w.fault = fault;
    w.out = out;
    w.running = w.holder = w.last = -1;
    for (int i = 0; i < REF_TASKS; i++)
        w.waits[i] = -1;
    for (int r = 0; r < 4; r++)
        w.owner[r] = -1;
    for (; w.now <= set->horizon; w.now++) {
        places(&w); // what the last unit brought the job to
        releases(&w);
        dispatch(&w);
        if (w.kernel > 0)
            w.kernel--;
        else if (w.running >= 0 && w.cost > 0)
            w.cost--;
        else if (w.running >= 0)
            w.live[w.running][0].done++;
    }
}

// ---- random sets

static int below(uint32_t set, uint32_t *draw, int n)
{
    double u = lw_draw_uniform((lw_address){20260101, set, 77, (*draw)++});
    return (int)(u * n);
}

static void random_sections(ref_task *t, uint32_t k, uint32_t *d, int n_resources)
{
    int least = t->takes[0];
    for (int i = 1; i < t->n_takes; i++)
        least = t->takes[i] < least ? t->takes[i] : least;
    if (below(k, d, 3) == 0)
        return;
    ref_section *s = t->section;
    s[0].resource = below(k, d, 5) == 0 ? -1 : below(k, d, n_resources);
    s[0].from = below(k, d, least);
    s[0].to = s[0].from + 1 + below(k, d, least - s[0].from);
    t->n_sections = 1;
    // a second one, behind the first, or within it and of a resource that is taken later
    int inner = s[0].resource >= 0 && s[0].resource + 1 < n_resources && s[0].to - s[0].from > 1;
    if (inner && below(k, d, 2) == 0)
        s[t->n_sections++] = (ref_section){s[0].resource + 1, s[0].from, s[0].to - 1};
    else if (s[0].to < least && below(k, d, 2) == 0)
        s[t->n_sections++] = (ref_section){below(k, d, n_resources + 1) - 1, s[0].to, least};
}

static ref_task random_task(uint32_t k, uint32_t *d, const ref_set *set)
{
    static const int periods[] = {5, 6, 8, 10, 12, 15, 20, 24, 30, 40};
    ref_task t = {.priority = below(k, d, 5), .period = periods[below(k, d, 10)], .queue = 1};
    int most = t.period / (1 + below(k, d, 4));
    most = most < 1 ? 1 : most > 9 ? 9 : most;
    t.offset = below(k, d, 9);
    t.deadline = 1 + below(k, d, 2 * t.period);
    t.n_takes = 1 + below(k, d, 4);
    for (int i = 0; i < t.n_takes; i++)
        t.takes[i] = 1 + below(k, d, most);
    t.n_jitter = below(k, d, 2) * (1 + below(k, d, 4));
    for (int i = 0; i < t.n_jitter; i++)
        t.jitter[i] = below(k, d, t.period + 3);
    t.overrun = (lw_overrun)below(k, d, 3);
    t.queue = 1 + below(k, d, 3);
    t.handler = below(k, d, 7) == 0;
    if (set->locking != LW_LOCKING_NONE || below(k, d, 2) == 0)
        random_sections(&t, k, d, t.handler ? 1 : 3);
    for (int i = 0; t.handler && i < t.n_sections; i++)
        t.section[i].resource = -1;
    if (t.handler && t.n_sections == 2)
        t.n_sections = 1;
    return t;
}

ref_set ref_random(uint32_t k)
{
    uint32_t draw = 0, *d = &draw;
    ref_set set = {.policy = (lw_policy)below(k, d, 4),
                   .locking = (lw_locking)below(k, d, 3),
                   .horizon = 240,
                   .n = 1 + below(k, d, 6)};
    if (below(k, d, 2) == 0) {
        set.context_switch = below(k, d, 3);
        set.dispatch_cost = below(k, d, 2);
        set.release_cost = below(k, d, 2);
    }
    set.timer_tick = below(k, d, 4) == 0 ? 4 : 0;
    if (below(k, d, 4) == 0) {
        set.stall_at = below(k, d, 60);
        set.stall_for = 1 + below(k, d, 20);
    }
    for (int i = 0; i < set.n; i++)
        set.task[i] = random_task(k, d, &set);
    return set;
}

// ---- the same by the engine

#define UNIT US

static lw_timing *in_turn(int n, const int *units)
{
    lw_timing *timing = NULL;
    double value[4];
    for (int i = 0; i < n; i++)
        value[i] = units[i] * 1e-6;
    OK(lw_timing_replay(n, value, 0, &timing, e));
    return timing;
}

static lw_span units(int n)
{
    return (lw_span){n * 1e-6, 0};
}

static void add_ref_task(lw_rig *rig, const ref_task *t, const char *name)
{
    static const char *const resources[] = {"r0", "r1", "r2"};
    lw_section sections[2];
    lw_timing *takes = in_turn(t->n_takes, t->takes);
    lw_timing *jitter = t->n_jitter > 0 ? in_turn(t->n_jitter, t->jitter) : NULL;
    lw_task_def def = lw_task_default();
    def.name = name;
    def.on = "core";
    def.priority = t->priority;
    def.is_priority = 1;
    def.interrupt = t->handler;
    def.every = lw_period_of_ticks(t->period * UNIT);
    def.offset = t->offset * 1e-6;
    def.deadline = t->deadline * 1e-6;
    def.takes = takes;
    def.jitter = jitter;
    def.overrun = t->overrun;
    def.queue = t->queue;
    for (int i = 0; i < t->n_sections; i++) {
        const ref_section *s = &t->section[i];
        sections[i] = (lw_section){s->resource < 0 ? NULL : resources[s->resource],
                                   {LW_PLACE_AFTER, units(s->from)},
                                   {LW_PLACE_AFTER, units(s->to)}};
    }
    def.n_sections = t->n_sections;
    def.sections = sections;
    OK(lw_rig_add_task(rig, &def, e));
    lw_timing_free(takes);
    lw_timing_free(jitter);
}

static const char *const task_names[] = {"t0", "t1", "t2", "t3", "t4", "t5", "t6", "t7"};

static lw_rig *ref_rig(const ref_set *set)
{
    static const char *const resources[] = {"r0", "r1", "r2"};
    lw_rig *rig = NULL;
    lw_stall stall = {set->stall_at * 1e-6, set->stall_for * 1e-6};
    OK(lw_rig_new("reference", &rig, e));
    lw_core_def core = lw_core_default();
    core.name = "core";
    core.policy = set->policy;
    core.urgent = LW_URGENT_SMALLER;
    core.locking = set->locking;
    core.n_resources = 3;
    core.resources = resources;
    core.context_switch = units(set->context_switch);
    core.dispatch_cost = units(set->dispatch_cost);
    core.release_cost = units(set->release_cost);
    if (set->timer_tick > 0)
        core.timer_tick = lw_period_of_ticks(set->timer_tick * UNIT);
    core.n_stalls = set->stall_for > 0;
    core.stalls = &stall;
    OK(lw_rig_add_core(rig, &core, e));
    for (int i = 0; i < set->n; i++)
        add_ref_task(rig, &set->task[i], task_names[i]);
    return rig;
}

// A time of a record in whole units, exactly; -1 where there is none.
static int in_units(double seconds)
{
    lw_tick tick = 0;
    if (isnan(seconds))
        return -1;
    ck_assert_int_eq(lw_tick_from_seconds(seconds, &tick), LW_OK);
    ck_assert_int_eq(tick % UNIT, 0);
    return (int)(tick / UNIT);
}

static ref_job job_of_row(const lw_run *run, int record, int64_t row)
{
    double c[LW_N_JOB_COLUMNS];
    for (int k = 0; k < LW_N_JOB_COLUMNS; k++)
        c[k] = lw_run_record_cell(run, 0, record, row, k);
    return (ref_job){(int)c[LW_JOB_JOB],         in_units(c[LW_JOB_RELEASE]),
                     in_units(c[LW_JOB_READY]),  in_units(c[LW_JOB_START]),
                     in_units(c[LW_JOB_FINISH]), (int)c[LW_JOB_PREEMPTIONS],
                     (int)c[LW_JOB_OUTCOME]};
}

void ref_engine(const ref_set *set, ref_result *out)
{
    lw_watch *watch = NULL;
    lw_run *run = NULL;
    OK(lw_watch_new(&watch, e));
    for (int i = 0; i < set->n; i++)
        OK(lw_watch_events(watch, NULL, task_names[i], 0, e));
    lw_frozen *frozen = freeze_rig(ref_rig(set), watch, set->horizon * UNIT);
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    if (lw_run_advance(run, set->horizon * UNIT) != LW_OK)
        OK(lw_run_status(run, 0, e));
    for (int i = 0; i < set->n; i++) {
        out->n[i] = (int)lw_run_record_rows(run, 0, i);
        ck_assert_int_le(out->n[i], REF_JOBS);
        for (int k = 0; k < out->n[i]; k++)
            out->job[i][k] = job_of_row(run, i, k);
    }
    lw_run_free(run);
    lw_frozen_free(frozen);
    lw_watch_free(watch);
}

static void words(const ref_job *j, char *text, size_t size)
{
    snprintf(text, size, "job %d released %d ready %d start %d finish %d preempted %d outcome %d",
             j->job, j->release, j->ready, j->start, j->finish, j->preemptions, j->outcome);
}

int ref_differs(const ref_set *set, const ref_result *a, const ref_result *b, char *text, int size)
{
    char left[200], right[200];
    for (int i = 0; i < set->n; i++)
        for (int k = 0; k < a->n[i] || k < b->n[i]; k++) {
            if (k < a->n[i] && k < b->n[i] &&
                memcmp(&a->job[i][k], &b->job[i][k], sizeof(ref_job)) == 0)
                continue;
            strcpy(left, "no job");
            strcpy(right, "no job");
            if (k < a->n[i])
                words(&a->job[i][k], left, sizeof left);
            if (k < b->n[i])
                words(&b->job[i][k], right, sizeof right);
            snprintf(text, (size_t)size, "task %d row %d: %s / %s", i, k, left, right);
            return 1;
        }
    return 0;
}
