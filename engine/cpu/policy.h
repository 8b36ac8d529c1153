// Which of its jobs a core runs: one small interface, one file a policy.
//
// A task has a rank on its core: interrupt handlers first, then tasks in the order the policy
// gives them, then place of declaration. What a policy sees at an instant is the set of ranks
// whose job can run, and of each job a key: the smaller, the more urgent. Resources only change
// keys, so that each protocol works under each policy.
//
// A new policy: a file with its three functions and its lw__policy, a line in LW_POLICY_LIST
// (cpu.h) and in policy.c, and the brute-force scheduler of tests/test_schedule.c told its rule.
#ifndef LATEWOOD_CPU_POLICY_H
#define LATEWOOD_CPU_POLICY_H

#include <latewood/time.h>

// The jobs of one core at an instant. Cells of rank r stand at [r * stride].
typedef struct lw__jobs {
    uint64_t can_run;        // bit r: the task of rank r has a job that waits for nothing
    int holder;              // rank of the task's job that has the core, or had it when an
                             // interrupt came; -1: none
    int slot;                // rank of the task whose slot of the table it is, -1: none
    int keys_moved;          // some key is not its job's own: a resource is held
    const uint64_t *peers;   // by rank: the ranks that state the same priority, itself included
    const int64_t *key;      // of each job, as it is now
    const int64_t *released; // instant of its release
    int64_t stride;
} lw__jobs;

typedef struct lw__policy {
    const char *rule;    // one line for describe
    int by_priority;     // tasks state priorities
    int by_deadline;     // each task has a deadline
    int by_table;        // tasks are released by the slots of a table
    int may_be_replaced; // whether a job that has the core can lose it to another task's
    // Key of a job without resources; `level` counts distinct priorities from the most urgent on.
    int64_t (*key)(int level, lw_tick released, lw_tick deadline);
    // Key that a job has at least from `now` on while it holds a resource under the immediate
    // ceiling; `level` and `relative` are the most urgent of its users'.
    int64_t (*ceiling)(int level, lw_tick now, lw_tick relative);
    // Rank of the job to run, -1: none; can_run holds no interrupt handlers.
    int (*pick)(const lw__jobs *jobs);
} lw__policy;

extern const lw__policy lw__fixed_priority, lw__fixed_priority_without_preemption,
    lw__earliest_deadline, lw__cooperative, lw__time_table;

// Policy of the enumeration in cpu.h, by its number; NULL for others.
const lw__policy *lw__policy_at(int number);

// Least key; among equals the holder, then the earlier release, then the lower rank. -1: none.
int lw__most_urgent(const lw__jobs *jobs);
// The same where keys stand in the order of ranks: the lowest rank and its peers.
int lw__lowest_rank(const lw__jobs *jobs);

#endif
