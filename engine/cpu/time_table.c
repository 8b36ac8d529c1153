// Time-triggered table: within a slot the core runs the job of the slot's task and no other.
// Method: H. Kopetz, "Real-Time Systems", 1997.

#include "cpu/policy.h"

static int64_t key(int level, lw_tick released, lw_tick deadline)
{
    (void)level;
    (void)released;
    (void)deadline;
    return 0;
}

static int64_t ceiling(int level, lw_tick now, lw_tick relative)
{
    (void)level;
    (void)now;
    (void)relative;
    return 0;
}

static int pick(const lw__jobs *jobs)
{
    int slot = jobs->slot;
    return slot >= 0 && (jobs->can_run >> slot & 1) != 0 ? slot : -1;
}

const lw__policy lw__time_table = {.rule = "in each slot the job of its task runs, and no other",
                                   .by_table = 1,
                                   .may_be_replaced = 1,
                                   .key = key,
                                   .ceiling = ceiling,
                                   .pick = pick};
