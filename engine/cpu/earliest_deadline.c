// Earliest deadline first: the job whose absolute deadline is the nearest has the core.
// Methods: C. Liu, J. Layland, JACM 20 (1973); for resources the deadline floor of A. Burns,
// M. Gutierrez, M. Aldea, M. Gonzalez, IEEE Trans. Computers 64 (2015): while a job holds a
// resource its deadline is no later than that of a job of any user released now.

#include "cpu/policy.h"

static int64_t key(int level, lw_tick released, lw_tick deadline)
{
    (void)level;
    (void)released;
    return deadline;
}

static int64_t ceiling(int level, lw_tick now, lw_tick relative)
{
    (void)level;
    return now + relative;
}

const lw__policy lw__earliest_deadline = {
    .rule = "the job with the nearest absolute deadline runs, at once",
    .by_deadline = 1,
    .may_be_replaced = 1,
    .key = key,
    .ceiling = ceiling,
    .pick = lw__most_urgent};
