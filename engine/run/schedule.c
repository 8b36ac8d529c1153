// The schedule's state at the start of a run, the instants of releases, and what records of jobs
// and stretches take.

#include "run/schedule.h"

#include "run/driver.h"
#include "run/record.h"

#include <math.h>

// ---- draws

lw_tick lw__use_draw(lw__lane *s, const lw__use *u, int64_t job)
{
    int W = s->width, L = s->lane;
    if (u->timing == NULL)
        return u->constant;
    for (int k = 0; k < u->n_state; k++)
        s->work[k] = LW__F(u->memory + k);
    double value = lw_timing_draw(u->timing, s->seed, s->run, (uint32_t)job, u->streams, s->work);
    for (int k = 0; k < u->n_state; k++)
        LW__F(u->memory + k) = s->work[k];
    return (lw_tick)floor(value * u->scale + 0.5);
}

// With the first tick of the core's timer at or after; never before a release already served.
lw_tick lw__ready_at(lw__lane *s, const lw__core *c, const lw__task *t, lw_tick nominal,
                     int64_t job)
{
    lw_tick ready = nominal == LW_NEVER ? LW_NEVER : nominal + lw__use_draw(s, &t->jitter, job);
    if (ready != LW_NEVER && c->timer_tick.num > 0)
        ready = lw_period_at(c->timer_tick, 0, lw_period_index(c->timer_tick, 0, ready));
    return ready < s->now ? s->now : ready;
}

// ---- time zero

static void start_task(lw__lane *s, const lw__core *c, const lw__task *t)
{
    int W = s->width, L = s->lane;
    LW__I(t->finished) = LW__I(t->start) = LW__I(t->written) = -1;
    LW__I(t->base) = t->offset;
    for (int k = 0; k <= t->mask; k++)
        LW__I(t->ring_sample + k) = LW__I(t->ring_read + k) = -1;
    if (t->has_law) {
        const lw__loop *l = &t->law;
        for (int k = 0; k < l->law->n_state; k++)
            LW__F(l->state + k) = l->law->start != NULL ? l->law->start[k] : 0;
        LW__I(l->stepped_at) = -1;
    }
    lw_tick first = t->offset, *due = &LW__I(c->due + t->rank);
    *due = LW_NEVER;
    if (t->release == LW__RELEASE_ARRIVALS)
        first += lw__use_draw(s, &t->arrives, 0);
    if (t->release != LW__RELEASE_CLOCK && t->release != LW__RELEASE_ARRIVALS)
        return;
    LW__I(t->nominal) = first;
    *due = lw__ready_at(s, c, t, first, 0);
}

static void start_core(lw__lane *s, const lw__core *c)
{
    int W = s->width, L = s->lane;
    LW__I(c->running) = LW__I(c->holder) = LW__I(c->last) = LW__I(c->slot) = -1;
    for (int k = 0; k < c->n_resources; k++)
        LW__I(c->owner + k) = -1;
    LW__I(c->closed) = LW_NEVER;
    LW__I(c->turn_due) = c->n_turns > 0 ? c->turns[0].at : LW_NEVER;
    LW__I(c->stall_due) = c->n_stalls > 0 ? c->stalls[0].at : LW_NEVER;
    lw_tick least =
        LW__I(c->turn_due) < LW__I(c->stall_due) ? LW__I(c->turn_due) : LW__I(c->stall_due);
    for (int r = 0; r < c->n_tasks; r++) {
        if (c->policy->by_priority)
            LW__I(c->key + r) = c->policy->key(c->tasks[r]->level, 0, 0);
        start_task(s, c, c->tasks[r]);
        least = LW__I(c->due + r) < least ? LW__I(c->due + r) : least;
    }
    LW__I(s->z->due + c->release_timer) = least;
}

void lw__cores_start(lw__lane *s)
{
    for (int i = 0; i < s->z->n_cores; i++)
        start_core(s, &s->z->cores[i]);
}

// ---- draining

static void close_core(lw__lane *s, const lw__core *c)
{
    int W = s->width, L = s->lane;
    LW__I(c->closed) = s->now;
    for (int r = 0; r < c->n_tasks; r++) {
        const lw__task *t = c->tasks[r];
        int by_time = t->release == LW__RELEASE_CLOCK || t->release == LW__RELEASE_ARRIVALS;
        if (by_time && LW__I(t->nominal) > s->now)
            LW__I(c->due + r) = LW_NEVER;
    }
}

// The next instant at which this core can go on with a job; LW_NEVER: it has none to do.
static lw_tick core_goes_on(const lw__lane *s, const lw__core *c)
{
    int W = s->width, L = s->lane;
    lw_tick next = LW__I(s->z->due + c->point_timer);
    int pending = LW__I(c->ready) != 0;
    for (int r = 0; r < c->n_tasks; r++) {
        next = LW__I(c->due + r) < next ? LW__I(c->due + r) : next;
        pending |= LW__I(c->due + r) != LW_NEVER;
    }
    if (pending && LW__I(c->turn_due) < next)
        next = LW__I(c->turn_due); // a job may wait for its next slot
    return pending ? next : LW_NEVER;
}

int64_t lw__lane_drain(lw__lane *s)
{
    int64_t handled = 0;
    for (int i = 0; i < s->z->n_cores; i++)
        close_core(s, &s->z->cores[i]);
    while (s->status == LW_OK) {
        lw_tick next = LW_NEVER;
        for (int i = 0; i < s->z->n_cores; i++) {
            lw_tick t = core_goes_on(s, &s->z->cores[i]);
            next = t < next ? t : next;
        }
        if (next == LW_NEVER)
            break;
        handled += lw__drive_lane(s, next);
    }
    return handled;
}

// ---- rows

static double seconds_or_none(lw_tick t)
{
    return t < 0 || t == LW_NEVER ? (double)NAN : lw_tick_seconds(t);
}

static void log_job(lw__lane *s, const lw__task *t, const lw__job_end *e)
{
    double row[LW_N_JOB_COLUMNS];
    row[LW_JOB_JOB] = (double)e->job;
    row[LW_JOB_RELEASE] = seconds_or_none(e->nominal);
    row[LW_JOB_READY] = seconds_or_none(e->ready);
    row[LW_JOB_START] = seconds_or_none(e->start);
    row[LW_JOB_FINISH] = seconds_or_none(e->finish);
    row[LW_JOB_DEADLINE] =
        t->deadline == LW_NEVER ? (double)NAN : seconds_or_none(e->nominal + t->deadline);
    row[LW_JOB_EXECUTED] = lw_tick_seconds(e->executed);
    row[LW_JOB_PREEMPTIONS] = (double)e->preemptions;
    row[LW_JOB_SAMPLE] = seconds_or_none(e->sample);
    row[LW_JOB_READ] = seconds_or_none(e->read);
    row[LW_JOB_WRITTEN] = seconds_or_none(e->written);
    row[LW_JOB_OUTCOME] = (double)e->outcome;
    lw__table_add(s, t->log, row);
}

void lw__job_ended(lw__lane *s, const lw__task *t, const lw__job_end *e)
{
    if (t->log >= 0)
        log_job(s, t, e);
    if (t->observed)
        lw__job_observed(s, t, e);
}

void lw__stretch_ended(lw__lane *s, const lw__core *c, const lw__task *t, lw_tick from,
                       lw_tick until, lw_stretch_kind kind, lw_stretch_end ends)
{
    int W = s->width, L = s->lane;
    double row[LW_N_STRETCH_COLUMNS];
    row[LW_STRETCH_FROM] = lw_tick_seconds(from);
    row[LW_STRETCH_UNTIL] = lw_tick_seconds(until);
    row[LW_STRETCH_TASK] = t != NULL ? t->index + 1 : 0;
    row[LW_STRETCH_NUMBER] = t != NULL ? (double)LW__I(t->ring_job + LW__I(t->head)) : -1;
    row[LW_STRETCH_KIND] = (double)kind;
    row[LW_STRETCH_ENDS] = (double)ends;
    lw__table_add(s, c->log, row);
}

// ---- as frozen

int lw_frozen_n_cores(const lw_frozen *frozen)
{
    return frozen->n_cores;
}

lw_core_view lw_frozen_core(const lw_frozen *frozen, int core)
{
    const lw__core *c = &frozen->cores[core];
    return (lw_core_view){.name = c->name,
                          .origin = c->item->def.origin,
                          .is_bus = c->item->is_bus,
                          .policy = c->item->def.policy,
                          .locking = c->locking,
                          .context_switch = c->switch_cost,
                          .dispatch_cost = c->dispatch_cost,
                          .release_cost = c->release_cost,
                          .timer_tick = c->timer_tick,
                          .n_tasks = c->n_tasks,
                          .tasks = c->numbers};
}

int lw_frozen_n_tasks(const lw_frozen *frozen)
{
    return frozen->n_tasks;
}

lw_task_view lw_frozen_task(const lw_frozen *frozen, int task)
{
    const lw__task *t = &frozen->tasks[task];
    int by_task = t->trigger.kind == LW__EVENT_TASK;
    return (lw_task_view){.name = t->name,
                          .origin = t->item->def.origin,
                          .core = t->core,
                          .is_interrupt = t->is_handler,
                          .is_frame = t->item->is_frame,
                          .urgency = t->level,
                          .period = t->period,
                          .offset = t->offset,
                          .least_between = t->least_between,
                          .released_by = by_task ? t->trigger.index : -1,
                          .takes_least = t->takes.least,
                          .takes_most = t->takes.most,
                          .jitter_least = t->jitter.least,
                          .jitter_most = t->jitter.most,
                          .deadline = t->deadline,
                          .n_sections = t->n_sections,
                          .sections = t->sections};
}
