// Worst responses under fixed priority, with preemption and without.
//
// Every job of the busy period is looked at: the first need not be the worst.
// Invariant: a recurrence only grows, so each step but the last adds at least one job.

#include "theory/timed.h"

// ---- load and busy periods

int lw__timed_load(const lw_timed_set *set, int urgency)
{
    const lw__wide one = (lw__wide)1 << 62;
    lw__wide sum = 0;
    int n = 0;
    for (int j = 0; j < set->n; j++) {
        lw__wide takes = set->release_cost;
        if (urgency < 0 || set->tasks[j].urgency <= urgency)
            takes += lw__timed_cost(set, j);
        lw__wide whole = takes / set->tasks[j].between, rest = takes % set->tasks[j].between;
        if (whole > 1)
            return 1;
        sum += whole * one + rest * one / set->tasks[j].between;
        n += rest != 0;
    }
    return sum > one ? 1 : sum + n <= one ? (sum + n == one ? 0 : -1) : 0;
}

// Releases at their worst within [0, t], the last excluded, or with `closed` included.
static lw__wide releases(const lw_timed_task *task, lw__wide t, lw__wide step)
{
    return lw__wide_ceil(t + task->jitter + step, task->between);
}

lw__wide lw__timed_busy(const lw_timed_set *set, int urgency, lw__wide first)
{
    lw__wide t = first > 0 ? first : 1;
    for (int step = 0; step < LW__TIMED_STEPS; step++) {
        lw__wide next = first;
        for (int j = 0; j < set->n; j++)
            if (urgency < 0 || set->tasks[j].urgency <= urgency)
                next += releases(&set->tasks[j], t, 0) * lw__timed_cost(set, j);
        if (next == t)
            return t;
        if (next > LW_TICK_MAX)
            return -1;
        t = next;
    }
    return -1;
}

// ---- with preemption

static lw__wide above(const lw_timed_set *set, int task, lw__wide w)
{
    lw__wide sum = 0;
    for (int j = 0; j < set->n; j++) {
        const lw_timed_task *other = &set->tasks[j];
        if (j != task && other->urgency <= set->tasks[task].urgency)
            sum += releases(other, w, 0) * lw__timed_cost(set, j);
        sum += releases(other, w, 0) * set->release_cost;
    }
    return sum;
}

// When job q of the busy period finishes, from its begin; -1: not found. `w` is where to begin.
static lw__wide finish(const lw_timed_set *set, int task, int64_t q, lw__wide w, int *steps)
{
    lw__wide own = set->tasks[task].blocking + (q + 1) * lw__timed_cost(set, task);
    w = w > own ? w : own;
    while ((*steps)++ < LW__TIMED_STEPS) {
        lw__wide next = own + above(set, task, w);
        if (next <= w)
            return w;
        if (next > LW_TICK_MAX)
            return -1;
        w = next;
    }
    return -1;
}

// ---- without preemption

// Longest job of a less urgent task that may just have begun.
static lw__wide in_the_way(const lw_timed_set *set, int task)
{
    lw__wide longest = 0;
    for (int j = 0; j < set->n; j++)
        if (set->tasks[j].urgency > set->tasks[task].urgency && lw__timed_cost(set, j) > longest)
            longest = lw__timed_cost(set, j);
    return longest;
}

// When job q starts; its finish follows without interruption.
static lw__wide start(const lw_timed_set *set, int task, int64_t q, lw__wide w, int *steps)
{
    const lw_timed_task *self = &set->tasks[task];
    lw__wide own = in_the_way(set, task) + self->blocking + q * lw__timed_cost(set, task);
    w = w > own ? w : own;
    while ((*steps)++ < LW__TIMED_STEPS) {
        lw__wide next = own;
        for (int j = 0; j < set->n; j++)
            if (j != task && set->tasks[j].urgency <= self->urgency)
                next += releases(&set->tasks[j], w, set->granularity) * lw__timed_cost(set, j);
        if (next <= w)
            return w;
        if (next > LW_TICK_MAX)
            return -1;
        w = next;
    }
    return -1;
}

// ---- the worst of all jobs

static lw__wide job_finish(const lw_timed_set *set, int task, int64_t q, lw__wide *w, int *steps)
{
    if (set->policy == LW_POLICY_FIXED_PRIORITY) {
        *w = finish(set, task, q, *w, steps);
        return *w;
    }
    *w = start(set, task, q, *w, steps);
    return *w < 0 ? -1 : *w + lw__timed_cost(set, task);
}

// Jobs of the task in its busy period without preemption, which its own last job may outlast;
// -1: not found. With preemption the finishes themselves tell.
static lw__wide jobs_in_busy(const lw_timed_set *set, int task)
{
    const lw_timed_task *self = &set->tasks[task];
    lw__wide t = lw__timed_busy(set, self->urgency, in_the_way(set, task) + self->blocking);
    return t < 0 ? -1 : releases(self, t, 0);
}

static void worst_job(const lw_timed_set *set, int task, int64_t last, lw_timed_row *row)
{
    const lw_timed_task *self = &set->tasks[task];
    lw__wide w = 0, worst = -1;
    int steps = 0;
    for (int64_t q = 0; q <= last; q++) {
        lw__wide end = job_finish(set, task, q, &w, &steps);
        if (end < 0)
            return;
        lw__wide response = end - (lw__wide)q * self->between + self->jitter;
        if (response > worst)
            row->job = q;
        worst = response > worst ? response : worst;
        if (last == INT64_MAX && end + self->jitter <= (lw__wide)(q + 1) * self->between)
            break;
    }
    if (worst > LW_TICK_MAX)
        return;
    row->outcome = LW_TIMED_BOUND;
    row->response = (lw_tick)worst;
    row->meets = worst <= self->deadline;
}

void lw__timed_fixed(const lw_timed_set *set, int task, lw_timed_row *row)
{
    *row = (lw_timed_row){.outcome = LW_TIMED_TOO_LONG, .response = LW_NEVER, .slack = LW_NEVER};
    if (lw__timed_load(set, set->tasks[task].urgency) > 0)
        row->outcome = LW_TIMED_OVERLOAD;
    else
        worst_job(set, task, INT64_MAX, row);
}

void lw__timed_whole(const lw_timed_set *set, int task, lw_timed_row *row)
{
    *row = (lw_timed_row){.outcome = LW_TIMED_TOO_LONG, .response = LW_NEVER, .slack = LW_NEVER};
    if (lw__timed_load(set, set->tasks[task].urgency) > 0) {
        row->outcome = LW_TIMED_OVERLOAD;
        return;
    }
    lw__wide jobs = jobs_in_busy(set, task);
    if (jobs > 0 && jobs <= LW__TIMED_STEPS)
        worst_job(set, task, (int64_t)jobs - 1, row);
}

lw_tick lw_timed_job(const lw_timed_set *set, int task, int64_t job)
{
    const lw_timed_task *self = &set->tasks[task];
    lw__wide w = 0;
    int steps = 0, whole = set->policy == LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION;
    if (lw__timed_load(set, self->urgency) > 0)
        return LW_NEVER;
    lw__wide jobs = whole ? jobs_in_busy(set, task) : INT64_MAX;
    for (int64_t q = 0; q < jobs; q++) {
        lw__wide end = job_finish(set, task, q, &w, &steps);
        if (end < 0)
            return LW_NEVER;
        if (q == job)
            return (lw_tick)(end - (lw__wide)q * self->between + self->jitter);
        if (!whole && end + self->jitter <= (lw__wide)(q + 1) * self->between)
            break;
    }
    return LW_NEVER;
}
