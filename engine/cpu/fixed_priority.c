// Fixed priority, preemptive: the most urgent job that can run has the core.
// Method: C. Liu, J. Layland, "Scheduling algorithms for multiprogramming in a hard-real-time
// environment", JACM 20 (1973).

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
    return jobs->keys_moved ? lw__most_urgent(jobs) : lw__lowest_rank(jobs);
}

const lw__policy lw__fixed_priority = {.rule = "the most urgent job runs, at once",
                                       .by_priority = 1,
                                       .may_be_replaced = 1,
                                       .key = key,
                                       .ceiling = ceiling,
                                       .pick = pick};
