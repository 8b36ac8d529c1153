// Earliest deadline first: feasibility by demand, worst responses by deadline busy periods.
//
// Release jitter shortens the first deadline of the demand (Zhang and Burns 2009, section 2);
// worst responses are for sets without it.

#include "theory/timed.h"

// The deadline after the actual release of a job that was as late as it can be.
static lw__wide deadline(const lw_timed_set *set, int task)
{
    return (lw__wide)set->tasks[task].deadline - set->tasks[task].jitter;
}

static lw__wide demand(const lw_timed_set *set, lw__wide t)
{
    lw__wide sum = 0;
    for (int j = 0; j < set->n; j++)
        if (set->tasks[j].deadline != LW_NEVER && t >= deadline(set, j))
            sum += ((t - deadline(set, j)) / set->tasks[j].between + 1) * lw__timed_cost(set, j);
    return sum;
}

lw_tick lw_timed_demand(const lw_timed_set *set, lw_tick t)
{
    lw__wide d = demand(set, t);
    return d > LW_TICK_MAX ? LW_NEVER : (lw_tick)d;
}

// The last deadline before t; -1: none.
static lw__wide deadline_before(const lw_timed_set *set, lw__wide t)
{
    lw__wide last = -1;
    for (int j = 0; j < set->n; j++) {
        lw__wide d = deadline(set, j);
        if (d >= t)
            continue;
        d += (t - 1 - d) / set->tasks[j].between * set->tasks[j].between;
        last = d > last ? d : last;
    }
    return last;
}

// From here on demand cannot pass the time there is; -1: not known.
static lw__wide horizon(const lw_timed_set *set)
{
    double sum = 0, load = 0, longest = 0;
    lw__wide busy = lw__timed_busy(set, -1, 0);
    for (int j = 0; j < set->n; j++) {
        double between = (double)set->tasks[j].between;
        double share = (double)lw__timed_cost(set, j) / between;
        double late = between - (double)deadline(set, j);
        load += share;
        sum += (late > 0 ? late : 0) * share;
        longest = -late > longest ? -late : longest;
    }
    // An upper bound needs no exact sum: a millionth is far above what rounding can do.
    if (lw__timed_load(set, -1) < 0 && load < 1 - 1e-6) {
        double most = sum / (1 - load);
        most = (most > longest ? most : longest) * (1 + 1e-6) + 2;
        if (most < 9e18 && (busy < 0 || (lw__wide)most < busy))
            return (lw__wide)most;
    }
    return busy;
}

int lw__timed_edf_feasible(const lw_timed_set *set)
{
    lw__wide first = LW_NEVER;
    if (lw__timed_load(set, -1) > 0)
        return 0;
    for (int j = 0; j < set->n; j++) {
        if (deadline(set, j) < lw__timed_cost(set, j))
            return 0;
        first = deadline(set, j) < first ? deadline(set, j) : first;
    }
    lw__wide end = horizon(set);
    if (end < 0)
        return -1;
    lw__wide t = deadline_before(set, end + 1);
    for (int step = 0; step < 5 * LW__TIMED_STEPS && t >= 0; step++) {
        lw__wide h = demand(set, t);
        if (h > t)
            return 0;
        if (h <= first)
            return 1;
        t = h < t ? h : deadline_before(set, t);
    }
    return t < 0 ? 1 : -1;
}

// ---- worst responses

// Response of a job of `task` released `a` after the begin of its busy period; -1: not found.
static lw__wide response_at(const lw_timed_set *set, int task, lw__wide a, int *steps)
{
    const lw_timed_task *self = &set->tasks[task];
    lw__wide own = (a / self->between + 1) * lw__timed_cost(set, task), w = own;
    while ((*steps)++ < 5 * LW__TIMED_STEPS) {
        lw__wide next = own;
        for (int j = 0; j < set->n; j++) {
            const lw_timed_task *other = &set->tasks[j];
            lw__wide room = a + self->deadline - other->deadline;
            if (j == task || room < 0)
                continue;
            lw__wide come = lw__wide_ceil(w, other->between), urgent = room / other->between + 1;
            next += (come < urgent ? come : urgent) * lw__timed_cost(set, j);
        }
        if (next <= w)
            return w > a ? w - a : 0;
        w = next;
    }
    return -1;
}

// The worst over releases whose deadline is that of a job of task `other`.
static int worst_beside(const lw_timed_set *set, int task, int other, lw__wide busy, int *steps,
                        lw_timed_row *row)
{
    const lw_timed_task *self = &set->tasks[task], *o = &set->tasks[other];
    lw__wide a = (lw__wide)o->deadline - self->deadline;
    if (a < 0)
        a += lw__wide_ceil(-a, o->between) * o->between;
    for (; a < busy; a += o->between) {
        lw__wide r = response_at(set, task, a, steps);
        if (r < 0 || r > LW_TICK_MAX)
            return 0;
        if (r > row->response) {
            row->response = (lw_tick)r;
            row->job = (int64_t)(a / self->between);
        }
    }
    return 1;
}

void lw__timed_edf(const lw_timed_set *set, int task, lw_timed_row *row)
{
    int steps = 0, load = lw__timed_load(set, -1);
    *row = (lw_timed_row){.outcome = load > 0 ? LW_TIMED_OVERLOAD : LW_TIMED_TOO_LONG,
                          .response = LW_NEVER,
                          .slack = LW_NEVER};
    if (load > 0)
        return;
    for (int j = 0; j < set->n; j++)
        if (set->tasks[j].jitter > 0) {
            row->outcome = LW_TIMED_NOT_GIVEN;
            return;
        }
    lw__wide busy = lw__timed_busy(set, -1, 0);
    lw_timed_row worst = *row;
    worst.response = (lw_tick)lw__timed_cost(set, task);
    for (int j = 0; j < set->n && busy >= 0; j++)
        if (!worst_beside(set, task, j, busy, &steps, &worst))
            busy = -1;
    if (busy < 0)
        return;
    *row = worst;
    row->outcome = LW_TIMED_BOUND;
    row->meets = row->response <= set->tasks[task].deadline;
}
