// The policies by number, and the choices that several of them share.

#include "cpu/policy.h"

#include <latewood/cpu.h>

#include <stddef.h>

const lw__policy *lw__policy_at(int number)
{
    switch ((lw_policy)number) {
    case LW_POLICY_FIXED_PRIORITY:
        return &lw__fixed_priority;
    case LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION:
        return &lw__fixed_priority_without_preemption;
    case LW_POLICY_EARLIEST_DEADLINE:
        return &lw__earliest_deadline;
    case LW_POLICY_COOPERATIVE:
        return &lw__cooperative;
    case LW_POLICY_TABLE:
        return &lw__time_table;
    }
    return NULL;
}

static const char *const words[] = {
#define POLICY_WORDS(name, text) text,
    LW_POLICY_LIST(POLICY_WORDS)
#undef POLICY_WORDS
};

const char *lw_policy_words(lw_policy policy)
{
    int index = (int)policy;
    return index >= 0 && index < lw_policy_count() ? words[index] : "";
}

int lw_policy_count(void)
{
    return (int)(sizeof words / sizeof words[0]);
}

// Whether rank a, lower than b, comes after it.
static int later(const lw__jobs *jobs, int a, int b)
{
    return a != jobs->holder && (b == jobs->holder || jobs->released[b * jobs->stride] <
                                                          jobs->released[a * jobs->stride]);
}

int lw__most_urgent(const lw__jobs *jobs)
{
    int best = -1;
    for (uint64_t rest = jobs->can_run; rest != 0; rest &= rest - 1) {
        int r = __builtin_ctzll(rest);
        if (best < 0) {
            best = r;
            continue;
        }
        int64_t mine = jobs->key[r * jobs->stride], least = jobs->key[best * jobs->stride];
        if (mine < least || (mine == least && later(jobs, best, r)))
            best = r;
    }
    return best;
}

int lw__lowest_rank(const lw__jobs *jobs)
{
    if (jobs->can_run == 0)
        return -1;
    int best = __builtin_ctzll(jobs->can_run);
    uint64_t others = jobs->can_run & jobs->peers[best] & ~(UINT64_C(1) << best);
    for (; others != 0; others &= others - 1) {
        int r = __builtin_ctzll(others);
        if (later(jobs, best, r))
            best = r;
    }
    return best;
}
