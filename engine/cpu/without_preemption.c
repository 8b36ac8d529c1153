// Fixed priority without preemption: a job that has begun keeps the core to its end; then the most
// urgent one begins. Frames of a bus are sent so.

#include "cpu/policy.h"

static int64_t key(int level, lw_tick released, lw_tick deadline)
{
    (void)released;
    (void)deadline;
    return level;
}

static int64_t ceiling(int level, lw_tick now, lw_tick relative)
{
    (void)now;
    (void)relative;
    return level;
}

static int pick(const lw__jobs *jobs)
{
    if (jobs->holder >= 0 && (jobs->can_run >> jobs->holder & 1) != 0)
        return jobs->holder;
    return jobs->keys_moved ? lw__most_urgent(jobs) : lw__lowest_rank(jobs);
}

const lw__policy lw__fixed_priority_without_preemption = {
    .rule = "the most urgent job begins and runs to its end",
    .by_priority = 1,
    .key = key,
    .ceiling = ceiling,
    .pick = pick};
