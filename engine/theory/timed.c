// The analysis of a task set as a whole: what is permitted, verdict, slack, bounds.

#include "theory/timed.h"

#include <latewood/elementary.h>
#include <stddef.h>

#define LN_2 0.69314718055994531

const char *lw_timed_outcome_words(lw_timed_outcome outcome)
{
    static const char *const words[] = {
        "bound", "no bound: more is asked for than the core has",
        "no bound given: the busy period is longer than was looked at",
        "not given: under earliest deadline first with release jitter only the verdict is known"};
    return (unsigned)outcome < LW_TIMED_N_OUTCOMES ? words[outcome] : "?";
}

static lw_status permitted(const lw_timed_set *set, lw_error *err)
{
    int edf = set->policy == LW_POLICY_EARLIEST_DEADLINE;
    int whole = set->policy == LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION;
    if (!edf && !whole && set->policy != LW_POLICY_FIXED_PRIORITY)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "task set: policy is \"%s\"; fixed priority with or without "
                            "preemption and earliest deadline first are analysed",
                            lw_policy_words(set->policy));
    if (set->n < 1 || set->n > LW_TIMED_MAX_TASKS)
        return lw_error_set(err, LW_ERR_ARGUMENT, "task set: n is %d; permitted 1 to %d", set->n,
                            LW_TIMED_MAX_TASKS);
    if (set->switch_cost < 0 || set->release_cost < 0 || set->granularity < (whole ? 1 : 0))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "task set: costs are at least 0, the granularity at least 1 tick");
    if (set->release_cost > 0 && set->policy != LW_POLICY_FIXED_PRIORITY)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "task set: release_cost is analysed under fixed priority only");
    for (int i = 0; i < set->n; i++) {
        const lw_timed_task *t = &set->tasks[i];
        if (t->takes < 1 || t->between < 1 || t->deadline < 1 || t->jitter < 0 || t->blocking < 0 ||
            t->takes > LW_TICK_MAX || t->between > LW_TICK_MAX || t->jitter > LW_TICK_MAX ||
            t->blocking > LW_TICK_MAX)
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "task set: task %d: takes, between and deadline are at least 1 "
                                "tick, jitter and blocking at least 0",
                                i + 1);
        if (edf && (t->blocking > 0 || t->deadline == LW_NEVER))
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "task set: task %d: under earliest deadline first a deadline is "
                                "wanted, and no blocking",
                                i + 1);
    }
    return LW_OK;
}

static void row_of(const lw_timed_set *set, int task, lw_timed_row *row)
{
    if (set->policy == LW_POLICY_EARLIEST_DEADLINE)
        lw__timed_edf(set, task, row);
    else if (set->policy == LW_POLICY_FIXED_PRIORITY)
        lw__timed_fixed(set, task, row);
    else
        lw__timed_whole(set, task, row);
}

int lw_timed_schedulable(const lw_timed_set *set)
{
    lw_timed_row row;
    if (permitted(set, NULL) != LW_OK)
        return 0;
    if (set->policy == LW_POLICY_EARLIEST_DEADLINE)
        return lw__timed_edf_feasible(set) == 1;
    for (int i = 0; i < set->n; i++) {
        row_of(set, i, &row);
        if (!row.meets)
            return 0;
    }
    return 1;
}

// Whether the set holds with `more` added to the execution of one task.
static int holds(const lw_timed_set *set, int task, lw_tick more)
{
    lw_timed_task tasks[LW_TIMED_MAX_TASKS];
    lw_timed_set grown = *set;
    for (int i = 0; i < set->n; i++)
        tasks[i] = set->tasks[i];
    tasks[task].takes += more;
    grown.tasks = tasks;
    return lw_timed_schedulable(&grown);
}

// Bisection between what holds and what does not: the whole period is too much for any set.
static lw_tick slack_of(const lw_timed_set *set, int task)
{
    lw_tick good = 0, bad = set->tasks[task].between;
    if (set->tasks[task].takes > LW_TICK_MAX - bad)
        return LW_NEVER;
    while (bad - good > 1) {
        lw_tick half = good + (bad - good) / 2;
        if (holds(set, task, half))
            good = half;
        else
            bad = half;
    }
    return good;
}

double lw_timed_bound(int n)
{
    return n < 1 ? 0 : n * lw_expm1(LN_2 / n);
}

lw_status lw_timed_analyse(const lw_timed_set *set, lw_timed_result *out, lw_error *err)
{
    lw_status status = permitted(set, err);
    if (status != LW_OK)
        return status;
    *out = (lw_timed_result){.bound = lw_timed_bound(set->n), .hyperbolic = 1};
    out->overload = lw__timed_load(set, -1) > 0;
    out->schedulable = lw_timed_schedulable(set);
    for (int i = 0; i < set->n; i++) {
        lw__wide takes = lw__timed_cost(set, i) + set->release_cost;
        double share = (double)takes / (double)set->tasks[i].between;
        out->utilisation += share;
        out->hyperbolic *= 1 + share;
        row_of(set, i, &out->rows[i]);
        if (out->rows[i].outcome == LW_TIMED_NOT_GIVEN)
            out->rows[i].meets = out->schedulable;
        out->rows[i].slack = out->schedulable ? slack_of(set, i) : -1;
    }
    return LW_OK;
}

// ---- blocking by resources

// The most urgent task that uses resource r; n: none.
static int ceiling_of(int n, int n_resources, const lw_tick *longest, int r)
{
    int i = 0;
    while (i < n && longest[i * n_resources + r] == 0)
        i++;
    return i;
}

// Longest section of the less urgent task j that can keep task i waiting.
static lw_tick section_against(int n, int m, const lw_tick *longest, int i, int j)
{
    lw_tick most = 0;
    for (int r = 0; r < m; r++)
        if (ceiling_of(n, m, longest, r) <= i && longest[j * m + r] > most)
            most = longest[j * m + r];
    return most;
}

static lw_tick longest_below(int n, int m, const lw_tick *longest, int i, int r)
{
    lw_tick most = 0;
    for (int j = i + 1; j < n; j++)
        most = longest[j * m + r] > most ? longest[j * m + r] : most;
    return most;
}

void lw_timed_blocking(int n, int n_resources, const lw_tick *longest, lw_locking locking,
                       lw_tick *blocking)
{
    for (int i = 0; i < n; i++) {
        lw_tick by_task = 0, by_resource = 0, one = 0;
        for (int j = i + 1; j < n; j++) {
            lw_tick section = section_against(n, n_resources, longest, i, j);
            by_task += section;
            one = section > one ? section : one;
        }
        for (int r = 0; r < n_resources; r++)
            if (ceiling_of(n, n_resources, longest, r) <= i)
                by_resource += longest_below(n, n_resources, longest, i, r);
        blocking[i] = locking == LW_LOCKING_CEILING ? one
                      : by_task < by_resource       ? by_task
                                                    : by_resource;
    }
}
