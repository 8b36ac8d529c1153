// The compiled driver of a core whose jobs only take time.
//
// The same cells in the same way as the operations of the queue driver (op_cpu.h), with everything
// constant taken out of the way: strict ranks, jobs without points but their finish, nothing that
// a release or a finish makes due elsewhere. A test runs both and compares blocks.
//
// Workload: the background of a rig: most releases and finishes are of tasks that compute nothing,
// and one call covers all of them up to the next instant of anything else.
//
// Invariants
// 1. On return every cell is what the queue driver would have left.
// 2. An instant is served here only if all that falls on it is of quick tasks of this core.

#include "run/dash.h"

#include "run/op_cpu.h"

#include <math.h>

enum { W = 1, L = 0 };

#define LINEAR 12 // releases looked through in a row; a tree of winners above

// What changes within a call. Its address stays within inlined functions, so that it can live in
// registers.
typedef struct dash {
    const lw__core *c;
    int64_t *i;
    uint64_t ready, quick;
    int64_t running, last, holder;
    lw_tick now, work_at, since, point, release, limit;
    int next; // rank of the next release
} dash;

typedef struct calendar {
    int n_tree;                         // leaves, 0: no tree
    lw_tick due[2 * LW_CORE_MAX_TASKS]; // winners: least due of each subtree
    int16_t rank[2 * LW_CORE_MAX_TASKS];
} calendar;

// ---- whether a task and a core are quick

static int is_quick(const lw__task *t)
{
    return !t->has_law && t->n_points == 1 && t->takes.least > 0 && t->takes.n_state == 0 &&
           !t->has_jitter && t->log < 0 && !t->observed && t->after.words == NULL && !t->relative &&
           (t->release == LW__RELEASE_CLOCK ||
            (t->release == LW__RELEASE_ARRIVALS && t->arrives.n_state == 0)) &&
           (t->overrun == LW_OVERRUN_SKIP ||
            (t->overrun == LW_OVERRUN_QUEUE && !t->item->def.full_is_end));
}

uint64_t lw__dash_tasks(const lw__core *c)
{
    uint64_t quick = 0;
    if (!c->plain || c->release_cost > 0 || c->timer_tick.num > 0 || c->n_stalls > 0 ||
        c->n_turns > 0 || c->log >= 0)
        return 0;
    for (int r = 0; r < c->n_tasks; r++)
        quick |= (uint64_t)is_quick(c->tasks[r]) << r;
    return quick;
}

// ---- the calendar

static inline void winner(calendar *k, int node)
{
    int best = k->due[2 * node] <= k->due[2 * node + 1] ? 2 * node : 2 * node + 1;
    k->due[node] = k->due[best];
    k->rank[node] = k->rank[best];
}

static void plant_tree(calendar *k, int n_tasks, const int64_t *due, uint64_t quick)
{
    int n = 1;
    while (n < n_tasks)
        n *= 2;
    k->n_tree = n;
    for (int r = 0; r < n; r++) {
        int here = r < n_tasks && (quick >> r & 1) != 0;
        k->due[n + r] = here ? due[r] : LW_NEVER;
        k->rank[n + r] = (int16_t)r;
    }
    for (int node = n - 1; node > 0; node--)
        winner(k, node);
}

// The next release of a quick task.
LW__INLINE void find_next(dash *d, const calendar *k)
{
    if (k->n_tree > 0) {
        d->release = k->due[1];
        d->next = k->rank[1];
        return;
    }
    const int64_t *due = &d->i[d->c->due];
    lw_tick least = LW_NEVER;
    int best = 0;
    for (int r = 0, n = d->c->n_tasks; r < n; r++) {
        lw_tick t = (d->quick >> r & 1) != 0 ? due[r] : LW_NEVER;
        best = t < least ? r : best;
        least = t < least ? t : least;
    }
    d->release = least;
    d->next = best;
}

LW__INLINE void move_release(dash *d, calendar *k, int r, lw_tick due)
{
    d->i[d->c->due + r] = due;
    if (k->n_tree == 0)
        return;
    int node = k->n_tree + r;
    k->due[node] = due;
    for (node /= 2; node > 0; node /= 2)
        winner(k, node);
}

// ---- jobs

// The ring of a task's jobs: nominal instants, releases, execution times, numbers.
typedef struct ring {
    int64_t *at;
    int64_t n;
} ring;

LW__INLINE ring ring_of(const dash *d, const lw__task *t)
{
    return (ring){&d->i[t->ring_nominal], t->mask + 1};
}

LW__INLINE void first_of_ring(dash *d, const lw__task *t, int64_t *own)
{
    ring g = ring_of(d, t);
    int64_t head = own[LW__OWN_HEAD];
    const lw__core *c = d->c;
    int r = t->rank;
    d->i[c->released + r] = g.at[g.n + head];
    d->i[c->goal + r] = g.at[2 * g.n + head];
    d->i[c->done + r] = 0;
    own[LW__OWN_START] = -1;
    own[LW__OWN_PREEMPTIONS] = 0;
}

// The job that has the core gives it away.
LW__INLINE void leave(dash *d, const lw__task *t, int64_t *own)
{
    if (d->since < d->now)
        d->since = d->now;
    if (d->now < d->work_at)
        return;
    d->i[d->c->done + t->rank] += d->now - d->work_at;
    if (own[LW__OWN_START] < 0)
        own[LW__OWN_START] = d->work_at;
    d->work_at = d->now;
    d->last = t->rank;
}

LW__INLINE void finish(dash *d)
{
    const lw__task *t = d->c->tasks[d->running];
    int64_t *own = &d->i[t->jobs], count = own[LW__OWN_COUNT] - 1;
    leave(d, t, own);
    d->running = -1;
    d->point = LW_NEVER;
    d->holder = d->holder == t->rank ? -1 : d->holder;
    d->last = -1;
    own[LW__OWN_HEAD] = (own[LW__OWN_HEAD] + 1) & t->mask;
    own[LW__OWN_COUNT] = count;
    if (count > 0)
        first_of_ring(d, t, own);
    else
        d->ready &= ~LW__BIT(t->rank);
}

LW__INLINE lw_tick drawn(const lw__lane *s, const lw__use *u, int64_t job)
{
    if (u->timing == NULL)
        return u->constant;
    double value = lw_timing_draw(u->timing, s->seed, s->run, (uint32_t)job, u->streams, NULL);
    return (lw_tick)floor(value * u->scale + 0.5);
}

// Instant of the release with number `job`, the one after that at `nominal`.
LW__INLINE lw_tick release_after(const lw__lane *s, dash *d, const lw__task *t, int64_t *own,
                                 int64_t job)
{
    lw_tick nominal = own[LW__OWN_NOMINAL];
    if (t->release != LW__RELEASE_CLOCK)
        nominal += drawn(s, &t->arrives, job);
    else if (t->period.den == 1 && nominal < LW_TICK_MAX - t->period.num)
        nominal += t->period.num;
    else
        nominal = lw__grid_at(t->period, own[LW__OWN_BASE], job - own[LW__OWN_BASE_JOB]);
    own[LW__OWN_NOMINAL] = nominal;
    return nominal > d->i[d->c->closed] ? LW_NEVER : nominal;
}

LW__INLINE void release(const lw__lane *s, dash *d, calendar *k, const lw__task *t)
{
    int64_t *own = &d->i[t->jobs], job = own[LW__OWN_JOBS], count = own[LW__OWN_COUNT];
    own[LW__OWN_JOBS] = job + 1;
    if (count == 0 || (t->overrun == LW_OVERRUN_QUEUE && count <= t->queue)) {
        ring g = ring_of(d, t);
        int64_t slot = (own[LW__OWN_HEAD] + count) & t->mask;
        g.at[slot] = own[LW__OWN_NOMINAL];
        g.at[g.n + slot] = d->now;
        g.at[2 * g.n + slot] = drawn(s, &t->takes, job);
        g.at[3 * g.n + slot] = job;
        own[LW__OWN_COUNT] = count + 1;
        if (count == 0) {
            first_of_ring(d, t, own);
            d->ready |= LW__BIT(t->rank);
        }
    }
    move_release(d, k, t->rank, release_after(s, d, t, own, job + 1));
}

LW__INLINE void dispatch(dash *d)
{
    const lw__core *c = d->c;
    int64_t next = d->ready != 0 ? __builtin_ctzll(d->ready) : -1;
    if (next == d->running) {
        if (next >= 0 && (c->handlers & LW__BIT(next)) == 0)
            d->holder = next;
        return;
    }
    if (d->running >= 0) {
        const lw__task *t = c->tasks[d->running];
        int64_t *own = &d->i[t->jobs];
        leave(d, t, own);
        own[LW__OWN_PREEMPTIONS] += own[LW__OWN_START] >= 0;
    }
    d->running = next;
    d->point = LW_NEVER;
    if (next < 0) {
        d->holder = -1;
        return;
    }
    if ((c->handlers & LW__BIT(next)) == 0)
        d->holder = next;
    d->since = d->now;
    d->work_at = d->now + c->dispatch_cost + (d->last == next ? 0 : c->switch_cost);
    d->point = d->work_at + d->i[c->goal + next] - d->i[c->done + next];
}

// ---- the run of instants

// The least of what is not ours: other timers, releases of tasks that are not quick, the point of
// a job that is not.
LW__INLINE lw_tick others(const lw__lane *s, const dash *d)
{
    const lw__core *c = d->c;
    lw_tick least = LW_NEVER;
    for (int t = 0; t < s->z->n_timers; t++)
        if (t != c->point_timer && t != c->release_timer && d->i[s->z->due + t] < least)
            least = d->i[s->z->due + t];
    for (int r = 0; r < c->n_tasks; r++)
        if ((d->quick >> r & 1) == 0 && d->i[c->due + r] < least)
            least = d->i[c->due + r];
    return least;
}

LW__INLINE void begin(const lw__lane *s, dash *d, calendar *k)
{
    const lw__core *c = d->c;
    int64_t *i = d->i;
    d->ready = (uint64_t)i[c->ready];
    d->running = i[c->running];
    d->last = i[c->last];
    d->holder = i[c->holder];
    d->work_at = i[c->work_at];
    d->since = i[c->since];
    d->point = i[s->z->due + c->point_timer];
    d->now = s->now;
    k->n_tree = 0;
    if (c->n_tasks > LINEAR)
        plant_tree(k, c->n_tasks, &i[c->due], d->quick);
}

LW__INLINE void end(lw__lane *s, const dash *d)
{
    const lw__core *c = d->c;
    int64_t *i = d->i;
    i[c->ready] = (int64_t)d->ready;
    i[c->running] = d->running;
    i[c->last] = d->last;
    i[c->holder] = d->holder;
    i[c->work_at] = d->work_at;
    i[c->since] = d->since;
    i[s->z->due + c->point_timer] = d->point;
    lw_tick least = LW_NEVER;
    for (int r = 0; r < c->n_tasks; r++)
        least = i[c->due + r] < least ? i[c->due + r] : least;
    i[s->z->due + c->release_timer] = least;
    s->now = d->now;
}

int64_t lw__dash_run(lw__lane *s, const lw__core *c, lw_tick until)
{
    calendar own, *k = &own;
    dash here = {.c = c, .i = s->i, .quick = c->quick}, *d = &here;
    int64_t handled = 0;
    d->limit = others(s, d);
    lw_tick first = d->i[s->z->due + c->point_timer], next = d->i[s->z->due + c->release_timer];
    first = next < first ? next : first;
    if (first >= d->limit || first > until || d->i[c->held_until] > s->now || d->i[c->masked] > 0)
        return 0;
    begin(s, d, k);
    find_next(d, k);
    for (;;) {
        lw_tick t = d->point < d->release ? d->point : d->release;
        if (t > until || t >= d->limit)
            break;
        if (t == d->point) {
            if ((d->quick >> d->running & 1) == 0)
                break;
            d->now = t;
            finish(d);
        }
        d->now = t;
        while (d->release == t && t < d->limit) {
            const lw__task *task = c->tasks[d->next];
            if (d->i[task->jobs] > UINT32_MAX) { // the queue driver says so
                d->limit = t;
                break;
            }
            release(s, d, k, task);
            find_next(d, k);
        }
        dispatch(d);
        handled++;
    }
    if (handled > 0)
        end(s, d);
    return handled;
}
