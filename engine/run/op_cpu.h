// Operations of cores and their tasks: releases, dispatch, points of jobs. Part of the driver.
//
//   release ──> ready ──dispatch──> has the core ──points──> finish
//                 ^                    │    │
//                 └──── preempted ─────┘    └─ waits for a resource (ready, but not to be chosen)
//
// Phase 1 serves points that the job at work reaches now, 5 releases, 6 chooses, 7 serves points of
// a job that has just got the core. A finish in phase 7 makes dispatch due in the next pass.
#ifndef LATEWOOD_RUN_OP_CPU_H
#define LATEWOOD_RUN_OP_CPU_H

#include "run/op_loop.h"
#include "run/schedule.h"

#define LW__BIT(rank) (UINT64_C(1) << (rank))

static inline lw__task *task_at(const lw__core *c, int64_t rank)
{
    return c->tasks[rank];
}

// ---- what the job at work has done

// Stretches of the core since the last cut, for records.
static inline void log_stretch(lw__lane *s, const lw__core *c, const lw__task *t,
                               lw_stretch_end ends, int W, int L)
{
    lw_tick since = LW__I(c->since), work_at = LW__I(c->work_at);
    if (since < work_at && since < s->now) {
        lw_tick until = work_at < s->now ? work_at : s->now;
        lw__stretch_ended(s, c, t, since, until, LW_STRETCH_SWITCH,
                          work_at < s->now ? LW_ENDS_ON : ends);
        since = until;
    }
    if (since < s->now)
        lw__stretch_ended(s, c, t, since, s->now, LW_STRETCH_WORK, ends);
}

// The job of rank r gives the core away, or a cost stands between: account for what it has done.
static inline void cut(lw__lane *s, const lw__core *c, int64_t r, lw_stretch_end ends, int W, int L)
{
    const lw__task *t = task_at(c, r);
    lw_tick work_at = LW__I(c->work_at);
    if (c->log >= 0)
        log_stretch(s, c, t, ends, W, L);
    if (LW__I(c->since) < s->now)
        LW__I(c->since) = s->now;
    if (s->now < work_at)
        return;
    LW__I(c->done + r) += s->now - work_at;
    LW__I(c->work_at) = s->now;
    LW__I(c->last) = r;
    if (LW__I(t->start) < 0)
        LW__I(t->start) = work_at;
}

// Work of the present job at which point k lies.
static inline lw_tick place_of(lw__lane *s, const lw__task *t, int64_t k, int W, int L)
{
    const lw__job_point *p = &t->points[k];
    lw_tick work = LW__I(t->ring_work + LW__I(t->head));
    if (p->share == 1)
        return work;
    lw_tick at = isnan(p->share) ? p->ticks : (lw_tick)floor(p->share * (double)work + 0.5);
    return at < work ? at : work;
}

// The next point of the job at work decides the timer.
static inline void set_point_timer(lw__lane *s, const lw__core *c, int64_t r, int W, int L)
{
    LW__I(s->z->due + c->point_timer) = LW__I(c->work_at) + LW__I(c->goal + r) - LW__I(c->done + r);
}

// Kernel work or a stall takes the core from now on for `length`.
static inline void steal(lw__lane *s, const lw__core *c, lw_tick length, lw_stretch_kind kind,
                         int W, int L)
{
    int64_t r = LW__I(c->running);
    lw_tick from = LW__I(c->held_until) > s->now ? LW__I(c->held_until) : s->now;
    lw_tick until = from + length;
    if (length <= 0)
        return;
    if (r >= 0)
        cut(s, c, r, LW_ENDS_PREEMPTED, W, L);
    if (c->log >= 0)
        lw__stretch_ended(s, c, NULL, from, until, kind, LW_ENDS_ON);
    LW__I(c->held_until) = until;
    if (r < 0)
        return;
    if (LW__I(c->work_at) <= s->now)
        LW__I(c->work_at) = until;
    else
        LW__I(c->work_at) += length;
    LW__I(c->since) = until;
    set_point_timer(s, c, r, W, L);
}

// Costs that a masked section has put off.
static inline void pay_debt(lw__lane *s, const lw__core *c, int W, int L)
{
    lw_tick debt = LW__I(c->debt);
    LW__I(c->debt) = 0;
    steal(s, c, debt, LW_STRETCH_RELEASE_COST, W, L);
}

// ---- urgency and resources

static inline int64_t own_key(lw__lane *s, const lw__core *c, int64_t r, int W, int L)
{
    const lw__task *t = task_at(c, r);
    lw_tick nominal = LW__I(t->ring_nominal + LW__I(t->head));
    return c->policy->key(t->level, LW__I(c->released + r),
                          t->deadline == LW_NEVER ? LW_NEVER : nominal + t->deadline);
}

// Who waits lends its urgency to the owner, along chains.
static inline void inherit(lw__lane *s, const lw__core *c, int W, int L)
{
    for (int changed = 1; changed;) {
        changed = 0;
        for (uint64_t rest = (uint64_t)LW__I(c->waiting); rest != 0; rest &= rest - 1) {
            int r = __builtin_ctzll(rest);
            int64_t owner = LW__I(c->owner + LW__I(c->waits_for + r));
            if (owner >= 0 && LW__I(c->key + r) < LW__I(c->key + owner)) {
                LW__I(c->key + owner) = LW__I(c->key + r);
                changed = 1;
            }
        }
    }
}

// Keys of all jobs, after a lock, an unlock or a wait.
static inline void set_keys(lw__lane *s, const lw__core *c, int W, int L)
{
    for (uint64_t rest = (uint64_t)LW__I(c->ready); rest != 0; rest &= rest - 1) {
        int r = __builtin_ctzll(rest);
        LW__I(c->key + r) = own_key(s, c, r, W, L);
    }
    for (int k = 0; c->locking == LW_LOCKING_CEILING && k < c->n_resources; k++) {
        int64_t owner = LW__I(c->owner + k);
        if (owner >= 0 && LW__I(c->lock_key + k) < LW__I(c->key + owner))
            LW__I(c->key + owner) = LW__I(c->lock_key + k);
    }
    if (c->locking == LW_LOCKING_INHERITANCE)
        inherit(s, c, W, L);
}

static inline void unlock(LW__CONTEXT, const lw__core *c, int resource)
{
    LW__I(c->owner + resource) = -1;
    LW__I(c->held) -= 1;
    uint64_t waiting = (uint64_t)LW__I(c->waiting);
    for (uint64_t rest = waiting; rest != 0; rest &= rest - 1) {
        int r = __builtin_ctzll(rest);
        if (LW__I(c->waits_for + r) == resource)
            waiting &= ~LW__BIT(r);
    }
    LW__I(c->waiting) = (int64_t)waiting;
    set_keys(s, c, W, L);
    lw__make_due(p, c->dispatch_op, N);
}

// 0: the job waits and has lost the core.
static inline int lock(LW__CONTEXT, const lw__core *c, int64_t r, int resource)
{
    int64_t owner = LW__I(c->owner + resource);
    if (owner < 0) {
        LW__I(c->owner + resource) = r;
        LW__I(c->held) += 1;
        LW__I(c->lock_key + resource) =
            c->policy->ceiling(c->ceiling_level[resource], s->now, c->floor[resource]);
    }
    if (owner < 0 || owner == r) {
        set_keys(s, c, W, L);
        return 1;
    }
    if (LW__I(c->masked) > 0)
        lw__end_lane(s, LW_ERR_CAPACITY, task_at(c, r)->name,
                     "it would wait for a resource within a masked section, for ever");
    LW__I(c->waiting) |= (int64_t)LW__BIT(r);
    LW__I(c->waits_for + r) = resource;
    cut(s, c, r, LW_ENDS_WAITING, W, L);
    LW__I(c->running) = LW__I(c->holder) = -1;
    LW__I(s->z->due + c->point_timer) = LW_NEVER;
    set_keys(s, c, W, L);
    lw__make_due(p, c->dispatch_op, N);
    return 0;
}

// A job that ends before its sections do gives everything back.
static inline void give_back(LW__CONTEXT, const lw__core *c, int64_t r)
{
    for (int k = 0; k < c->n_resources; k++)
        if (LW__I(c->owner + k) == r)
            unlock(LW__HERE, c, k);
    if (((uint64_t)LW__I(c->waiting) & LW__BIT(r)) != 0) {
        LW__I(c->waiting) &= ~(int64_t)LW__BIT(r);
        set_keys(s, c, W, L); // nobody inherits from it any more
    }
    if (LW__I(c->running) == r)
        LW__I(c->masked) = 0;
}

// ---- reading and writing

static inline void task_read(LW__CONTEXT, const lw__task *t, int64_t slot)
{
    const lw__loop *l = &t->law;
    lw_tick sampled = l->adc != NULL ? LW__I(l->adc->result) : s->now;
    step_law(s, l, LW__I(t->ring_job + slot), sampled, W, L);
    if (s->status != LW_OK)
        return;
    LW__I(l->stepped_at) = sampled;
    LW__I(l->missed) = 0;
    LW__I(t->ring_sample + slot) = sampled;
    LW__I(t->ring_read + slot) = s->now;
    for (int k = 0; k < l->n_out; k++)
        LW__F(t->outs + slot * l->n_out + k) = LW__F(l->outs + k);
    lw__tell(p, &l->observers, N);
}

// `out`: cell of the first output. 0: nothing was written.
static inline int task_write(LW__CONTEXT, const lw__task *t, int64_t out, int64_t job)
{
    const lw__loop *l = &t->law;
    if (LW__I(l->stepped_at) < 0)
        return 0;
    if (t->lost > 0 &&
        lw_draw_uniform((lw_address){s->seed, s->run, t->lost_stream, (uint32_t)job}) < t->lost) {
        LW__I(l->n_lost) += 1;
        return 0;
    }
    if (t->observed)
        lw__task_wrote(s, t);
    write_outputs(LW__HERE, l, out, job, LW__I(l->stepped_at));
    return 1;
}

static inline void op_logical(LW__CONTEXT, const lw__task *t)
{
    int64_t job = LW__I(t->logical_job);
    LW__I(s->z->due + t->logical_timer) = LW_NEVER;
    if (LW__I(t->finished) >= job)
        task_write(LW__HERE, t, t->law.outs, job);
    else
        miss(LW__HERE, &t->law, job);
}

// A task reads at its release: the newest job of its ring.
static inline void op_read(LW__CONTEXT, const lw__task *t)
{
    int64_t count = LW__I(t->count), slot = (LW__I(t->head) + count - 1) & t->mask;
    if (count == 0)
        return;
    task_read(LW__HERE, t, slot);
    if (t->logical == LW_NEVER)
        return;
    if (LW__I(s->z->due + t->logical_timer) != LW_NEVER)
        lw__end_lane(s, LW_ERR_CAPACITY, t->name,
                     "it is released before its logical execution time has passed");
    LW__I(t->logical_job) = LW__I(t->ring_job + slot);
    LW__I(s->z->due + t->logical_timer) = t->logical_is_period
                                              ? LW__I(t->nominal) // of the next release
                                              : LW__I(t->ring_nominal + slot) + t->logical;
}

// ---- jobs

static inline void begin_job(lw__lane *s, const lw__core *c, const lw__task *t, int W, int L)
{
    int r = t->rank;
    LW__I(c->released + r) = LW__I(t->ring_ready + LW__I(t->head));
    LW__I(c->key + r) = own_key(s, c, r, W, L);
    LW__I(c->done + r) = 0;
    LW__I(c->at + r) = 0;
    LW__I(c->goal + r) = place_of(s, t, 0, W, L);
    LW__I(t->start) = -1;
    LW__I(t->preemptions) = 0;
    if (t->has_law)
        LW__I(t->written) = -1;
}

static inline void tell_job(lw__lane *s, const lw__core *c, const lw__task *t, lw_job_outcome how,
                            int W, int L)
{
    int64_t slot = LW__I(t->head);
    const lw__job_end e = {.job = LW__I(t->ring_job + slot),
                           .nominal = LW__I(t->ring_nominal + slot),
                           .ready = LW__I(t->ring_ready + slot),
                           .start = LW__I(t->start),
                           .finish = s->now,
                           .executed = LW__I(c->done + t->rank),
                           .sample = LW__I(t->ring_sample + slot),
                           .read = LW__I(t->ring_read + slot),
                           .written = LW__I(t->written),
                           .preemptions = LW__I(t->preemptions),
                           .outcome = how};
    lw__job_ended(s, t, &e);
}

// The job at the head of the ring is over; the one behind it begins.
static inline void end_job(LW__CONTEXT, const lw__core *c, const lw__task *t, lw_job_outcome how)
{
    int r = t->rank;
    if (LW__I(c->running) == r) {
        cut(s, c, r, how == LW_JOB_FINISHED ? LW_ENDS_FINISHED : LW_ENDS_ABORTED, W, L);
        LW__I(c->running) = -1;
        LW__I(s->z->due + c->point_timer) = LW_NEVER;
    }
    if (LW__I(c->holder) == r)
        LW__I(c->holder) = -1;
    if (LW__I(c->last) == r)
        LW__I(c->last) = -1;
    if (t->log >= 0 || t->observed)
        tell_job(s, c, t, how, W, L);
    LW__I(t->head) = (LW__I(t->head) + 1) & t->mask;
    int64_t count = LW__I(t->count) - 1;
    LW__I(t->count) = count;
    if (count > 0)
        begin_job(s, c, t, W, L);
    else
        LW__I(c->ready) &= ~(int64_t)LW__BIT(r);
    lw__make_due(p, c->dispatch_op, N);
}

// ---- releases

static inline lw_tick use_draw(lw__lane *s, const lw__use *u, int64_t job)
{
    return u->timing == NULL ? u->constant : lw__use_draw(s, u, job);
}

// A job that is not stepped: outputs do what they state for it.
static inline void missed_job(LW__CONTEXT, const lw__task *t, int64_t job)
{
    if (t->has_law)
        miss(LW__HERE, &t->law, job);
}

static inline void skip_job(LW__CONTEXT, const lw__task *t, lw_tick nominal)
{
    int64_t job = LW__I(t->jobs);
    LW__I(t->jobs) = job + 1;
    if (t->takes.n_state > 0)
        use_draw(s, &t->takes, job);
    missed_job(LW__HERE, t, job);
    if (t->log < 0 && !t->observed)
        return;
    const lw__job_end e = {job, nominal, s->now, -1, s->now, 0, -1, -1, -1, 0, LW_JOB_SKIPPED};
    lw__job_ended(s, t, &e);
}

static inline void abort_job(LW__CONTEXT, const lw__core *c, const lw__task *t)
{
    int64_t slot = LW__I(t->head), job = LW__I(t->ring_job + slot);
    give_back(LW__HERE, c, t->rank);
    if (LW__I(t->ring_read + slot) < 0)
        missed_job(LW__HERE, t, job);
    end_job(LW__HERE, c, t, LW_JOB_ABORTED);
    if (LW__I(c->masked) == 0)
        pay_debt(s, c, W, L);
}

// What becomes of a release that finds the job before unfinished; 1: it is released all the same.
static inline int overrun(LW__CONTEXT, const lw__core *c, const lw__task *t, lw_tick nominal)
{
    switch (t->overrun) {
    case LW_OVERRUN_REPHASE:
        LW__I(t->deferred) = 1;
        return 0;
    case LW_OVERRUN_ABORT:
        abort_job(LW__HERE, c, t);
        return 1;
    case LW_OVERRUN_QUEUE:
        if (LW__I(t->count) <= t->queue)
            return 1;
        if (t->item->def.full_is_end) {
            lw__end_lane(s, LW_ERR_CAPACITY, t->name, "its queue of jobs is full");
            return 0;
        }
        break;
    case LW_OVERRUN_SKIP:
        break;
    }
    skip_job(LW__HERE, t, nominal);
    return 0;
}

static inline void release_job(LW__CONTEXT, const lw__core *c, const lw__task *t, lw_tick nominal)
{
    if (LW__I(t->count) > 0 && !overrun(LW__HERE, c, t, nominal))
        return;
    int64_t job = LW__I(t->jobs), count = LW__I(t->count);
    int64_t slot = (LW__I(t->head) + count) & t->mask;
    if (job > UINT32_MAX) {
        lw__end_lane(s, LW_ERR_CAPACITY, t->name, "more than 2^32 jobs in a run");
        return;
    }
    LW__I(t->jobs) = job + 1;
    LW__I(t->ring_nominal + slot) = nominal;
    LW__I(t->ring_ready + slot) = s->now;
    LW__I(t->ring_work + slot) = use_draw(s, &t->takes, job);
    LW__I(t->ring_job + slot) = job;
    if (t->has_law)
        LW__I(t->ring_sample + slot) = LW__I(t->ring_read + slot) = -1;
    LW__I(t->count) = count + 1;
    if (count == 0) {
        begin_job(s, c, t, W, L);
        LW__I(c->ready) |= (int64_t)LW__BIT(t->rank);
    }
    if (c->release_cost > 0 && LW__I(c->masked) > 0)
        LW__I(c->debt) += c->release_cost;
    else if (c->release_cost > 0)
        steal(s, c, c->release_cost, LW_STRETCH_RELEASE_COST, W, L);
    if (t->reads_at_release && t->has_law)
        lw__make_due(p, t->read_op, N);
    lw__make_due(p, c->dispatch_op, N);
}

// The release after the one just served, by the task's clock or arrivals.
static inline void next_release(lw__lane *s, const lw__core *c, const lw__task *t, int W, int L)
{
    lw_tick nominal, *due = &LW__I(c->due + t->rank);
    int64_t job = LW__I(t->jobs);
    *due = LW_NEVER;
    if (LW__I(t->deferred) || (t->relative && LW__I(t->count) > 0))
        return;
    if (t->release == LW__RELEASE_ARRIVALS)
        nominal = LW__I(t->nominal) + use_draw(s, &t->arrives, job);
    else if (t->relative)
        nominal = s->now + lw__grid_at(t->period, 0, 1);
    else
        nominal = lw__grid_at(t->period, LW__I(t->base), job - LW__I(t->base_job));
    LW__I(t->nominal) = nominal;
    if (nominal > LW__I(c->closed))
        return;
    *due = t->has_jitter || c->timer_tick.num > 0 ? lw__ready_at(s, c, t, nominal, job) : nominal;
}

// A finish lets go what waited for it: a rephased clock, a relative delay.
static inline void after_finish(LW__CONTEXT, const lw__core *c, const lw__task *t)
{
    if (LW__I(t->deferred)) {
        LW__I(t->deferred) = 0;
        LW__I(t->base) = s->now;
        LW__I(t->base_job) = LW__I(t->jobs);
        LW__I(t->nominal) = s->now;
        LW__I(c->due + t->rank) = s->now <= LW__I(c->closed) ? s->now : LW_NEVER;
        lw__make_due(p, c->releases_op, N);
    } else if (t->relative) {
        next_release(s, c, t, W, L);
        lw__make_due(p, c->releases_op, N);
    }
}

// The next of the releases under way through their jitter.
static inline void next_pending(lw__lane *s, const lw__core *c, const lw__task *t, int W, int L)
{
    int64_t head = LW__I(t->pending_head), n = LW__I(t->pending_count);
    LW__I(c->due + t->rank) =
        n > 0 ? lw__ready_at(s, c, t, LW__I(t->pending + head), LW__I(t->jobs)) : LW_NEVER;
}

static inline void serve_release(LW__CONTEXT, const lw__core *c, const lw__task *t)
{
    if (t->release != LW__RELEASE_EVENT) {
        release_job(LW__HERE, c, t, LW__I(t->nominal));
        next_release(s, c, t, W, L);
        return;
    }
    int64_t head = LW__I(t->pending_head);
    LW__I(t->pending_head) = (head + 1) % LW__PENDING;
    LW__I(t->pending_count) -= 1;
    release_job(LW__HERE, c, t, LW__I(t->pending + head));
    next_pending(s, c, t, W, L);
}

// Release of a task by an event.
static inline void op_release(LW__CONTEXT, const lw__task *t)
{
    const lw__core *c = &s->z->cores[t->core];
    if (t->trigger.kind != LW__EVENT_TASK && s->now > LW__I(c->closed))
        return;
    if (!t->has_jitter) {
        release_job(LW__HERE, c, t, s->now);
        return;
    }
    int64_t n = LW__I(t->pending_count);
    if (n == LW__PENDING) {
        lw__end_lane(s, LW_ERR_CAPACITY, t->name, "more than 16 releases wait for their jitter");
        return;
    }
    LW__I(t->pending + (LW__I(t->pending_head) + n) % LW__PENDING) = s->now;
    LW__I(t->pending_count) = n + 1;
    if (n > 0)
        return;
    next_pending(s, c, t, W, L);
    lw__make_due(p, c->releases_op, N);
}

static inline void turn_of_table(LW__CONTEXT, const lw__core *c)
{
    int64_t k = LW__I(c->turn), n = c->n_turns;
    int rank = c->turns[k % n].rank;
    LW__I(c->slot) = rank;
    LW__I(c->turn) = ++k;
    lw_tick cycle = lw__grid_at(c->table_cycle, 0, k / n);
    LW__I(c->turn_due) = cycle == LW_NEVER ? LW_NEVER : cycle + c->turns[k % n].at;
    if (rank >= 0 && s->now <= LW__I(c->closed))
        release_job(LW__HERE, c, task_at(c, rank), s->now);
    lw__make_due(p, c->dispatch_op, N);
}

static inline void serve_stall(lw__lane *s, const lw__core *c, int W, int L)
{
    int64_t k = LW__I(c->stall);
    steal(s, c, c->stalls[k].lasts, LW_STRETCH_STALL, W, L);
    LW__I(c->stall) = ++k;
    LW__I(c->stall_due) = k < c->n_stalls ? c->stalls[k].at : LW_NEVER;
}

static inline void op_releases(LW__CONTEXT, const lw__core *c)
{
    lw_tick least = LW_NEVER;
    while (LW__I(c->stall_due) == s->now)
        serve_stall(s, c, W, L);
    while (LW__I(c->turn_due) == s->now)
        turn_of_table(LW__HERE, c);
    for (int r = 0; r < c->n_tasks; r++) {
        while (LW__I(c->due + r) == s->now && s->status == LW_OK)
            serve_release(LW__HERE, c, task_at(c, r));
        least = LW__I(c->due + r) < least ? LW__I(c->due + r) : least;
    }
    least = LW__I(c->stall_due) < least ? LW__I(c->stall_due) : least;
    least = LW__I(c->turn_due) < least ? LW__I(c->turn_due) : least;
    LW__I(s->z->due + c->release_timer) = least;
}

// ---- dispatch

static inline int choose(lw__lane *s, const lw__core *c, int W, int L)
{
    uint64_t can = (uint64_t)(LW__I(c->ready) & ~LW__I(c->waiting)), handlers = can & c->handlers;
    if (c->plain)
        return can != 0 ? __builtin_ctzll(can) : -1;
    lw__jobs jobs = {.can_run = handlers != 0 ? handlers : can,
                     .holder = (int)LW__I(handlers != 0 ? c->running : c->holder),
                     .slot = (int)LW__I(c->slot),
                     .keys_moved = LW__I(c->held) > 0 && c->locking != LW_LOCKING_NONE,
                     .peers = c->peers,
                     .key = &LW__I(c->key),
                     .released = &LW__I(c->released),
                     .stride = W};
    if (handlers != 0)
        return lw__lowest_rank(&jobs);
    if (can == 0 && LW__I(c->ready) != 0)
        lw__end_lane(s, LW_ERR_CAPACITY, c->name,
                     "its jobs wait for one another's resources and none can go on");
    return c->policy->pick(&jobs);
}

static inline void op_dispatch(LW__CONTEXT, const lw__core *c)
{
    int64_t running = LW__I(c->running);
    if (LW__I(c->masked) > 0 && running >= 0)
        return;
    int64_t next = choose(s, c, W, L);
    if (next == running) {
        LW__I(c->holder) =
            next >= 0 && (c->handlers & LW__BIT(next)) == 0 ? next : LW__I(c->holder);
        return;
    }
    if (running >= 0) {
        cut(s, c, running, LW_ENDS_PREEMPTED, W, L);
        LW__I(task_at(c, running)->preemptions) += LW__I(task_at(c, running)->start) >= 0;
    }
    LW__I(c->running) = next;
    LW__I(s->z->due + c->point_timer) = LW_NEVER;
    if (next < 0) {
        LW__I(c->holder) = -1;
        return;
    }
    if ((c->handlers & LW__BIT(next)) == 0)
        LW__I(c->holder) = next;
    lw_tick from = LW__I(c->held_until) > s->now ? LW__I(c->held_until) : s->now;
    LW__I(c->since) = from;
    LW__I(c->work_at) = from + c->dispatch_cost + (LW__I(c->last) == next ? 0 : c->switch_cost);
    if (LW__I(c->work_at) == s->now && LW__I(c->goal + next) == LW__I(c->done + next))
        lw__make_due(p, c->points_op, N);
    else
        set_point_timer(s, c, next, W, L);
}

// ---- points

// Serve one point of the job of rank r; 0: it has the core no more.
static inline int serve_point(LW__CONTEXT, const lw__core *c, const lw__task *t,
                           const lw__job_point *point)
{
    int64_t slot = LW__I(t->head);
    int r = t->rank;
    switch (point->kind) {
    case LW__POINT_WRITE:
        if (task_write(LW__HERE, t,
                       t->reads_at_release ? t->outs + slot * t->law.n_out : t->law.outs,
                       LW__I(t->ring_job + slot)))
            LW__I(t->written) = s->now;
        return 1;
    case LW__POINT_UNLOCK:
        unlock(LW__HERE, c, point->resource);
        return 1;
    case LW__POINT_UNMASK:
        LW__I(c->masked) -= 1;
        if (LW__I(c->masked) == 0)
            pay_debt(s, c, W, L);
        lw__make_due(p, c->dispatch_op, N);
        return 1;
    case LW__POINT_YIELD:
        LW__I(c->released + r) = s->now;
        LW__I(c->key + r) = own_key(s, c, r, W, L);
        LW__I(c->holder) = -1;
        lw__make_due(p, c->dispatch_op, N);
        return 1;
    case LW__POINT_LOCK:
        return lock(LW__HERE, c, r, point->resource);
    case LW__POINT_MASK:
        LW__I(c->masked) += 1;
        return 1;
    case LW__POINT_READ:
        task_read(LW__HERE, t, slot);
        return 1;
    case LW__POINT_FINISH:
        if (t->logical != LW_NEVER)
            LW__I(t->finished) = LW__I(t->ring_job + slot);
        end_job(LW__HERE, c, t, LW_JOB_FINISHED);
        after_finish(LW__HERE, c, t);
        lw__make_all_due(p, &t->after, N);
        return 0;
    }
    return 0;
}

// Points that the job at work has reached. With `writes_only` those up to the first that locks or
// reads; the rest is made due.
static inline void serve_points(LW__CONTEXT, const lw__core *c, int writes_only)
{
    int64_t r = LW__I(c->running);
    const lw__task *t = task_at(c, r);
    if (LW__I(t->start) < 0)
        LW__I(t->start) = LW__I(c->work_at);
    while (s->status == LW_OK) {
        const lw__job_point *point = &t->points[LW__I(c->at + r)];
        int reads = point->kind == LW__POINT_READ || point->kind == LW__POINT_LOCK;
        if (writes_only && reads) {
            LW__I(s->z->due + c->point_timer) = LW_NEVER;
            lw__make_due(p, c->reads_op, N);
            return;
        }
        if (!serve_point(LW__HERE, c, t, point))
            return;
        int64_t next = LW__I(c->at + r) + 1;
        LW__I(c->at + r) = next;
        lw_tick goal = place_of(s, t, next, W, L), before = LW__I(c->goal + r);
        LW__I(c->goal + r) = goal > before ? goal : before;
        if (goal > before) {
            set_point_timer(s, c, r, W, L);
            return;
        }
        if (LW__I(c->work_at) > s->now) { // a cost came between
            set_point_timer(s, c, r, W, L);
            return;
        }
    }
}

static inline void op_writes(LW__CONTEXT, const lw__core *c)
{
    serve_points(LW__HERE, c, 1);
}

static inline void op_reads(LW__CONTEXT, const lw__core *c)
{
    serve_points(LW__HERE, c, 0);
}

// Points of a job that has just got the core, unless it has lost it within the instant.
static inline void op_points(LW__CONTEXT, const lw__core *c)
{
    int64_t r = LW__I(c->running);
    if (r < 0 || LW__I(c->work_at) != s->now || LW__I(c->goal + r) != LW__I(c->done + r))
        return;
    serve_points(LW__HERE, c, 0);
}

#endif
