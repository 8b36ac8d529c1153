// Cooperative: jobs in the order of their release, each to its end or to its next yield, where it
// goes behind those that are waiting.

#include "cpu/policy.h"

static int64_t key(int level, lw_tick released, lw_tick deadline)
{
    (void)level;
    (void)deadline;
    return released;
}

// Nothing comes between two yields, so a resource asks for no more.
static int64_t ceiling(int level, lw_tick now, lw_tick relative)
{
    (void)level;
    (void)now;
    (void)relative;
    return INT64_MAX;
}

static int pick(const lw__jobs *jobs)
{
    if (jobs->holder >= 0 && (jobs->can_run >> jobs->holder & 1) != 0)
        return jobs->holder;
    return lw__most_urgent(jobs);
}

const lw__policy lw__cooperative = {.rule =
                                        "jobs run in the order of their release, each to its end "
                                        "or its next yield",
                                    .key = key,
                                    .ceiling = ceiling,
                                    .pick = pick};
