// Response times and schedulability of task sets, computed and not simulated.
//
// All times are ticks, all sums exact integers; a bound that would leave the range of time, or take
// more work than permitted, is not given, and the outcome says so. A task whose first job is not
// its worst is covered: every job of its busy period is looked at.
//
// Methods
//   fixed priority      M. Joseph, P. Pandya 1986; N. Audsley and others 1993 (blocking, jitter);
//                       J. Lehoczky 1990 (deadlines beyond the period, by busy periods)
//   not preemptive      L. George, N. Rivierre, M. Spuri 1996; R. Davis, A. Burns, R. Bril,
//                       J. Lukkien 2007 (frames of a bus)
//   earliest deadline   F. Zhang, A. Burns 2009 (demand up to the busy period, QPA); M. Spuri 1996
//                       (worst responses)
//   utilisation bounds  C. Liu, J. Layland 1973; E. Bini, G. Buttazzo, G. Buttazzo 2001
//   blocking            L. Sha, R. Rajkumar, J. Lehoczky 1990
#ifndef LATEWOOD_TIMED_H
#define LATEWOOD_TIMED_H

#include <latewood/cpu.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_TIMED_MAX_TASKS LW_CORE_MAX_TASKS
#define LW_TIMED_MAX_RESOURCES LW_CORE_MAX_RESOURCES
#define LW_TIMED_TEXT 2400

typedef struct lw_timed_task {
    lw_tick takes;    // > 0, longest execution
    lw_tick between;  // > 0, least time between two nominal releases
    lw_tick deadline; // > 0, after the nominal release; LW_NEVER: none
    lw_tick jitter;   // >= 0, a release comes at most this much after its nominal instant
    lw_tick blocking; // >= 0, by less urgent tasks; not under earliest deadline
    int urgency;      // 0 the most urgent; equal ones are counted as more urgent (an upper bound).
                      // Not looked at under earliest deadline
} lw_timed_task;

typedef struct lw_timed_set {
    lw_policy policy; // fixed priority with or without preemption, earliest deadline
    int n;            // 1 to LW_TIMED_MAX_TASKS
    const lw_timed_task *tasks;
    lw_tick switch_cost;  // >= 0, before each start and each resumption
    lw_tick release_cost; // >= 0, at each release of any task, above all; with preemption only
    lw_tick granularity;  // without preemption: what cannot start in between two multiples of it
                          // (a bit of a bus); at least 1
} lw_timed_set;

typedef enum lw_timed_outcome {
    LW_TIMED_BOUND,     // `response` holds
    LW_TIMED_OVERLOAD,  // it and what goes before it ask for more than the whole core: no bound
    LW_TIMED_TOO_LONG,  // the busy period is longer than was looked at: no bound is given
    LW_TIMED_NOT_GIVEN, // earliest deadline with jitter, or not feasible: no response is computed
    LW_TIMED_N_OUTCOMES
} lw_timed_outcome;
LW_API const char *lw_timed_outcome_words(lw_timed_outcome outcome);

typedef struct lw_timed_row {
    lw_timed_outcome outcome;
    lw_tick response; // [ticks] worst, from the nominal release; LW_NEVER without a bound
    int64_t job;      // which job of the busy period, from 0, is the worst
    int meets;        // its deadline, where it has one; without one: that it has a bound
    lw_tick slack;    // largest growth of `takes` of this task alone that keeps every deadline of
                      // the set; -1: not even as it is; LW_NEVER: not computed
} lw_timed_row;

typedef struct lw_timed_result {
    int schedulable;    // every task meets its deadline
    int overload;       // utilisation over one
    double utilisation; // with switch costs
    double bound;       // Liu and Layland's for n tasks
    double hyperbolic;  // product of (utilisation + 1): at most 2 is enough, rate-monotonic
    lw_timed_row rows[LW_TIMED_MAX_TASKS];
} lw_timed_result;

// Analyse a set.
//   returns LW_OK, also where it is not schedulable; LW_ERR_ARGUMENT names the task (from 1), the
//           field and what is permitted; `out` is untouched then
LW_API lw_status lw_timed_analyse(const lw_timed_set *set, lw_timed_result *out, lw_error *err);
// Only whether every deadline is met; 0 also where that could not be decided.
LW_API int lw_timed_schedulable(const lw_timed_set *set);
// Response of job `job` of the busy period of task `task` under fixed priority; LW_NEVER where the
// busy period ends before it, or no bound is known.
LW_API lw_tick lw_timed_job(const lw_timed_set *set, int task, int64_t job);
// Demand of all jobs with release and deadline in an interval of length t; LW_NEVER out of range.
LW_API lw_tick lw_timed_demand(const lw_timed_set *set, lw_tick t);

// n (2^(1/n) - 1), n >= 1.
LW_API double lw_timed_bound(int n);

// Longest blocking of each of n tasks, the most urgent first, by sections of less urgent ones.
// longest[i * n_resources + r]: longest section of task i on resource r, 0: none.
//   inheritance  each less urgent task once, each resource once: the smaller of the two sums
//   ceiling      one section
LW_API void lw_timed_blocking(int n, int n_resources, const lw_tick *longest, lw_locking locking,
                              lw_tick *blocking);

// ---- a core of a frozen rig

typedef struct lw_timed_core {
    int analysed;            // 0: `why` says what is not covered; the rest is not set
    char why[LW_TIMED_TEXT]; // plain sentences, one a line: what was not, or only partly,
                             // covered; may be empty
    int n;
    int tasks[LW_TIMED_MAX_TASKS]; // place in lw_frozen_task of each row
    lw_timed_result result;
} lw_timed_core;

// Task set of a core or bus from the rig: longest executions, least times between releases,
// jitter; every phase of the releases is allowed for, so offsets are ignored.
LW_API lw_status lw_timed_rig(const lw_frozen *frozen, int core, lw_timed_core *out, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
