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

#define LOOK_AHEAD 16 // instants after which draws are made ahead
#define LINEAR 12     // releases looked through in a row; a tree of winners above

typedef struct dash {
    const lw__core *c;
    int64_t *i;
    uint64_t ready;
    int64_t running, last, holder;
    lw_tick now, work_at, since, point, release, limit;
    // the next draw of each task, made ahead so that nothing waits for it; -1: not made
    int64_t ahead_job[LW_CORE_MAX_TASKS];
    lw_tick ahead[LW_CORE_MAX_TASKS];
    int looks_ahead;
    int n_tree;                         // leaves, 0: no tree
    lw_tick due[2 * LW_CORE_MAX_TASKS]; // winners: least due of each subtree
    int16_t rank[2 * LW_CORE_MAX_TASKS];
} dash;

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

static inline void winner(dash *d, int node)
{
    int best = d->due[2 * node] <= d->due[2 * node + 1] ? 2 * node : 2 * node + 1;
    d->due[node] = d->due[best];
    d->rank[node] = d->rank[best];
}

static void plant_tree(dash *d, uint64_t quick)
{
    int n = 1;
    while (n < d->c->n_tasks)
        n *= 2;
    d->n_tree = n;
    for (int r = 0; r < n; r++) {
        int here = r < d->c->n_tasks && (quick >> r & 1) != 0;
        d->due[n + r] = here ? d->i[d->c->due + r] : LW_NEVER;
        d->rank[n + r] = (int16_t)r;
    }
    for (int node = n - 1; node > 0; node--)
        winner(d, node);
}

// The rank of the next release of a quick task; d->release is its instant.
static inline int next_rank(dash *d, uint64_t quick)
{
    if (d->n_tree > 0) {
        d->release = d->due[1];
        return d->rank[1];
    }
    const int64_t *due = &d->i[d->c->due];
    lw_tick least = LW_NEVER;
    int best = -1;
    for (int r = 0; r < d->c->n_tasks; r++)
        if (due[r] < least && (quick >> r & 1) != 0) {
            least = due[r];
            best = r;
        }
    d->release = least;
    return best;
}

static inline void move_release(dash *d, int r, lw_tick due)
{
    d->i[d->c->due + r] = due;
    if (d->n_tree == 0)
        return;
    int node = d->n_tree + r;
    d->due[node] = due;
    for (node /= 2; node > 0; node /= 2)
        winner(d, node);
}

// ---- jobs

static inline void first_of_ring(dash *d, const lw__task *t)
{
    int64_t *i = d->i, head = i[t->head];
    const lw__core *c = d->c;
    int r = t->rank;
    i[c->released + r] = i[t->ring_ready + head];
    i[c->key + r] = t->level;
    i[c->done + r] = 0;
    i[c->at + r] = 0;
    i[c->goal + r] = i[t->ring_work + head];
    i[t->start] = -1;
    i[t->preemptions] = 0;
    i[t->written] = -1;
}

// The job that has the core gives it away.
static inline void leave(dash *d, const lw__task *t)
{
    if (d->since < d->now)
        d->since = d->now;
    if (d->now < d->work_at)
        return;
    d->i[d->c->done + t->rank] += d->now - d->work_at;
    if (d->i[t->start] < 0)
        d->i[t->start] = d->work_at;
    d->work_at = d->now;
    d->last = t->rank;
}

static inline void finish(dash *d)
{
    const lw__task *t = d->c->tasks[d->running];
    int64_t *i = d->i, head = i[t->head], count = i[t->count] - 1;
    leave(d, t);
    i[t->finished] = i[t->ring_job + head];
    d->running = -1;
    d->point = LW_NEVER;
    d->holder = d->holder == t->rank ? -1 : d->holder;
    d->last = -1;
    i[t->head] = (head + 1) & t->mask;
    i[t->count] = count;
    if (count > 0)
        first_of_ring(d, t);
    else
        d->ready &= ~LW__BIT(t->rank);
}

static inline lw_tick drawn(const lw__lane *s, const lw__use *u, int64_t job)
{
    if (u->timing == NULL)
        return u->constant;
    double value = lw_timing_draw(u->timing, s->seed, s->run, (uint32_t)job, u->streams, NULL);
    return (lw_tick)floor(value * u->scale + 0.5);
}

// Execution time of a job; that of the next is drawn at once.
static inline lw_tick work_of(const lw__lane *s, dash *d, const lw__task *t, int64_t job)
{
    int r = t->rank;
    if (t->takes.timing == NULL)
        return t->takes.constant;
    lw_tick work =
        d->looks_ahead && d->ahead_job[r] == job ? d->ahead[r] : drawn(s, &t->takes, job);
    if (d->looks_ahead) {
        d->ahead_job[r] = job + 1;
        d->ahead[r] = drawn(s, &t->takes, job + 1);
    }
    return work;
}

static inline lw_tick release_after(const lw__lane *s, dash *d, const lw__task *t, int64_t job)
{
    int64_t *i = d->i;
    lw_tick nominal = t->release == LW__RELEASE_CLOCK
                          ? lw__grid_at(t->period, i[t->base], job - i[t->base_job])
                          : i[t->nominal] + drawn(s, &t->arrives, job);
    i[t->nominal] = nominal;
    return nominal > i[d->c->closed] ? LW_NEVER : nominal;
}

static inline void release(const lw__lane *s, dash *d, const lw__task *t)
{
    int64_t *i = d->i, job = i[t->jobs], count = i[t->count];
    i[t->jobs] = job + 1;
    if (count == 0 || (t->overrun == LW_OVERRUN_QUEUE && count <= t->queue)) {
        int64_t slot = (i[t->head] + count) & t->mask;
        i[t->ring_nominal + slot] = i[t->nominal];
        i[t->ring_ready + slot] = d->now;
        i[t->ring_work + slot] = work_of(s, d, t, job);
        i[t->ring_job + slot] = job;
        i[t->ring_sample + slot] = i[t->ring_read + slot] = -1;
        i[t->count] = count + 1;
        if (count == 0) {
            first_of_ring(d, t);
            d->ready |= LW__BIT(t->rank);
        }
    }
    move_release(d, t->rank, release_after(s, d, t, job + 1));
}

static inline void dispatch(dash *d)
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
        leave(d, t);
        d->i[t->preemptions] += d->i[t->start] >= 0;
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
static lw_tick others(const lw__lane *s, const dash *d, uint64_t quick)
{
    const lw__core *c = d->c;
    lw_tick least = LW_NEVER;
    for (int t = 0; t < s->z->n_timers; t++)
        if (t != c->point_timer && t != c->release_timer && d->i[s->z->due + t] < least)
            least = d->i[s->z->due + t];
    for (int r = 0; r < c->n_tasks; r++)
        if ((quick >> r & 1) == 0 && d->i[c->due + r] < least)
            least = d->i[c->due + r];
    return least;
}

static void begin(const lw__lane *s, dash *d, uint64_t quick)
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
    d->n_tree = d->looks_ahead = 0;
    if (c->n_tasks > LINEAR)
        plant_tree(d, quick);
}

static void end(lw__lane *s, const dash *d)
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

static void look_ahead(dash *d)
{
    d->looks_ahead = 1;
    for (int r = 0; r < d->c->n_tasks; r++)
        d->ahead_job[r] = -1;
}

int64_t lw__dash_run(lw__lane *s, const lw__core *c, lw_tick until)
{
    dash own, *d = &own;
    uint64_t quick = c->quick;
    int64_t handled = 0;
    d->c = c;
    d->i = s->i;
    d->limit = others(s, d, quick);
    lw_tick first = d->i[s->z->due + c->point_timer];
    lw_tick next = d->i[s->z->due + c->release_timer];
    first = next < first ? next : first;
    if (first >= d->limit || first > until || d->i[c->held_until] > s->now || d->i[c->masked] > 0)
        return 0;
    begin(s, d, quick);
    int r = next_rank(d, quick);
    for (;;) {
        lw_tick t = d->point < d->release ? d->point : d->release;
        if (t > until || t >= d->limit)
            break;
        if (t == d->point) {
            if ((quick >> d->running & 1) == 0)
                break;
            d->now = t;
            finish(d);
        }
        d->now = t;
        while (d->release == t) {
            if (d->i[c->tasks[r]->jobs] > UINT32_MAX) { // the queue driver says so
                d->limit = t;
                break;
            }
            release(s, d, c->tasks[r]);
            r = next_rank(d, quick);
        }
        dispatch(d);
        if (++handled == LOOK_AHEAD)
            look_ahead(d);
    }
    if (handled > 0)
        end(s, d);
    return handled;
}
