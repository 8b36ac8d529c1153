// Shared by the analyses of task sets: sums in 128 bits, limits on work.
#ifndef LATEWOOD_THEORY_TIMED_H
#define LATEWOOD_THEORY_TIMED_H

#include <latewood/timed.h>

__extension__ typedef __int128 lw__wide;

#define LW__TIMED_STEPS 20000 // of recurrences, a task

// Ceiling of a / b, a >= 0, b > 0.
static inline lw__wide lw__wide_ceil(lw__wide a, lw__wide b)
{
    return (a + b - 1) / b;
}

// Execution of one job with what switching to it and back costs.
static inline lw__wide lw__timed_cost(const lw_timed_set *set, int task)
{
    lw__wide each = set->policy == LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION ? 1 : 2;
    return set->tasks[task].takes + each * set->switch_cost;
}

// Least t > 0 at which all tasks chosen by urgency (at most `urgency`; -1: all) together have
// worked off what was released from `first` on; -1: none was found.
lw__wide lw__timed_busy(const lw_timed_set *set, int urgency, lw__wide first);
// Sign of utilisation - 1 of tasks with at most `urgency` (-1: all); 0 where it is one, or nearer
// to one than 2^-56.
int lw__timed_load(const lw_timed_set *set, int urgency);

// The row of one task, without slack.
void lw__timed_fixed(const lw_timed_set *set, int task, lw_timed_row *row);
void lw__timed_whole(const lw_timed_set *set, int task, lw_timed_row *row);
// 1 feasible, 0 not, -1 could not be decided.
int lw__timed_edf_feasible(const lw_timed_set *set);
void lw__timed_edf(const lw_timed_set *set, int task, lw_timed_row *row);

#endif
