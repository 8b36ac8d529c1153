// Processors and their tasks, buses and their frames: definitions, and the rows of a schedule.
//
// A core runs the jobs of its tasks, one at a time, under a policy. A job is one release of a
// task; it executes for `takes` and passes its points on the way: reads, writes, ends of sections.
// A bus is a core whose jobs are frames: never interrupted once begun.
//
// Rulings
//   order      Jobs of equal priority (or equal absolute deadline): the one that has the core keeps
//              it, then earlier release, then place of declaration.
//   costs      release_cost is taken at each release, above every task; the job at work waits.
//              dispatch_cost is taken before each start and resumption, context_switch also where
//              the core last ran another job or none yet. A job interrupted while it is switched
//              in pays again.
//   deadline   Deadline, response and release lateness count from the nominal release (before
//              jitter and before rounding to a timer tick). A deadline at t is met by a finish at
//              t.
//   points     At one place within a job: writes, unlocks, locks, reads. The law steps when it
//              reads. A write at the start writes what the job before computed.
//   clocks     A core whose clock is fast by `drift` has shorter clock periods, offsets, timer
//              ticks, logical execution times and cycles; durations in seconds are real seconds.
//
// Methods: C. Liu, J. Layland 1973 (fixed priority, earliest deadline); L. Sha, R. Rajkumar,
// J. Lehoczky 1990 (inheritance, ceilings); A. Burns, M. Gutierrez, M. Aldea, M. Gonzalez 2015
// (under earliest deadline the immediate ceiling is a deadline floor).
#ifndef LATEWOOD_CPU_H
#define LATEWOOD_CPU_H

#include <latewood/rig.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_CORE_MAX_TASKS 64
#define LW_CORE_MAX_RESOURCES 16
#define LW_TASK_MAX_QUEUE 64
#define LW_TASK_MAX_SECTIONS 16

// A duration, in seconds or in cycles of the core's clock.
typedef struct lw_span {
    double value;
    int in_cycles;
} lw_span;

// ---- cores

// X(name, in words)
#define LW_POLICY_LIST(X)                                                                          \
    X(FIXED_PRIORITY, "fixed priority")                                                            \
    X(FIXED_PRIORITY_WITHOUT_PREEMPTION, "fixed priority without preemption")                      \
    X(EARLIEST_DEADLINE, "earliest deadline first")                                                \
    X(COOPERATIVE, "cooperative") /* in order of release, each to its end or next yield */         \
    X(TABLE, "time-triggered table")

typedef enum lw_policy {
#define LW_POLICY_ENUM(name, words) LW_POLICY_##name,
    LW_POLICY_LIST(LW_POLICY_ENUM)
#undef LW_POLICY_ENUM
} lw_policy;
LW_API const char *lw_policy_words(lw_policy policy);
LW_API int lw_policy_count(void);

// Which priority numbers are urgent. There is no default: practice differs.
typedef enum lw_urgent { LW_URGENT_UNSTATED, LW_URGENT_LARGER, LW_URGENT_SMALLER } lw_urgent;

typedef enum lw_locking {
    LW_LOCKING_NONE,        // the holder keeps its own priority
    LW_LOCKING_INHERITANCE, // the holder has that of the most urgent job it keeps waiting
    LW_LOCKING_CEILING      // immediate ceiling: that of the most urgent task using the resource
} lw_locking;

// One slot of a time-triggered table: releases a job of the task, which has the core for `lasts`.
// A job not finished by then goes on in its task's next slot.
typedef struct lw_slot {
    const char *task;
    double at, lasts; // [s] within the cycle
} lw_slot;

// The core executes nothing from `at` on for `lasts` (a flash erase).
typedef struct lw_stall {
    double at, lasts; // [s]
} lw_stall;

typedef struct lw_core_def {
    const char *origin, *name;
    double clock; // [Hz]; NAN: none, then nothing is stated in cycles
    double drift; // [1] the core's clock is fast by this share
    lw_policy policy;
    lw_urgent urgent; // wanted where a task states a priority
    lw_span context_switch, dispatch_cost, release_cost;
    lw_period timer_tick; // releases by clock come with the first tick at or after; num 0: at once
    lw_locking locking;
    int n_resources;
    const char *const *resources; // names that tasks lock; unique on the core
    int n_slots;                  // of a table
    const lw_slot *slots;
    lw_period cycle; // of a table
    int n_stalls;
    const lw_stall *stalls; // instants rise
} lw_core_def;

LW_API lw_core_def lw_core_default(void);
LW_API lw_status lw_rig_add_core(lw_rig *rig, const lw_core_def *def, lw_error *err);

// ---- tasks

typedef enum lw_overrun {
    LW_OVERRUN_QUEUE,  // the new job waits; `queue` deep, further ones are skipped
    LW_OVERRUN_SKIP,   // the new job is skipped
    LW_OVERRUN_ABORT,  // the unfinished job is ended without writing; the new one begins
    LW_OVERRUN_REPHASE // the new job is released when the unfinished one finishes, and the clock
                       // goes on from there
} lw_overrun;

typedef enum lw_delay {
    LW_DELAY_ABSOLUTE, // releases on a fixed grid
    LW_DELAY_RELATIVE  // the next release one period after the job has finished
} lw_delay;

// A place within a job.
typedef enum lw_place_kind {
    LW_PLACE_SHARE,  // `value` of the job's execution time: 0 start, 1 finish
    LW_PLACE_AFTER,  // `value` [s] or cycles of execution after the start, at most the finish
    LW_PLACE_RELEASE // at the release itself (of reads)
} lw_place_kind;
typedef struct lw_place {
    lw_place_kind kind;
    lw_span value;
} lw_place;

// A stretch of a job that holds a resource, or (resource NULL) that nothing interrupts.
typedef struct lw_section {
    const char *resource;
    lw_place from, to;
} lw_section;

typedef struct lw_task_def {
    const char *origin, *name;
    const char *on;  // core
    int priority;    // direction as the core states
    int interrupt;   // nonzero: an interrupt handler, above all tasks of any policy; its level is
                     // `priority`
    int is_priority; // nonzero: a priority is stated
    // released by exactly one of these; under a table by its slots
    lw_period every;          // clock; num 0: none
    double offset;            // [s] first release, or earliest instant of the first arrival
    const char *released_by;  // adc (end of conversion), task (finish), ...
    const lw_timing *arrives; // [s] time between two arrivals; stream "name.arrives"
    const lw_timing *jitter;  // [s] delay of each release; stream "name.jitter"; may be NULL
    double deadline;          // [s] after the nominal release; NAN: one period where there is one
    double nominal;           // [s] nominal period for the law; NAN: that of the clock behind
    // execution
    const lw_timing *takes; // stream "name.takes"
    int takes_in_cycles;    // the timing is in cycles
    lw_place reads, writes; // defaults: start, finish
    double logical;         // [s] logical execution time: reads at the release, writes this long
                            // after it; NAN: none
    int n_sections;
    const lw_section *sections;
    int n_yields; // places where a cooperative job lets others go first
    const lw_place *yields;
    lw_overrun overrun;
    int queue;       // 1 to 64, default 1
    int full_is_end; // a queue that is full ends the run with LW_ERR_CAPACITY
    lw_delay delay;
    double lost; // chance a job that its writes are lost; stream "name.lost"
    // what it computes: a law with inputs and outputs, or nothing
    const lw_law *law;
    int n_inputs;
    const lw_wire *inputs;
    int n_outputs;
    const lw_wire *outputs;
} lw_task_def;

LW_API lw_task_def lw_task_default(void);
LW_API lw_status lw_rig_add_task(lw_rig *rig, const lw_task_def *def, lw_error *err);

// ---- buses

// Frames are sent whole, the most urgent first; a smaller number is more urgent unless stated.
typedef struct lw_bus_def {
    const char *origin, *name;
    double rate; // [bit/s]
    lw_urgent urgent;
} lw_bus_def;

typedef enum lw_stuffing {
    LW_STUFFING_WORST, // as many stuff bits as the frame can need
    LW_STUFFING_NONE,
    LW_STUFFING_RANDOM // each number up to the worst equally likely; stream "name.takes"
} lw_stuffing;

// A frame carries one signal to one value: read when it is handed over (its release), written at
// the end of transmission. Bits of a frame with s bytes (ISO 11898-1; R. Davis and others 2007):
// g + 8 s + 13 + stuff bits, at most floor((g + 8 s - 1) / 4), g = 34 or 54.
typedef struct lw_frame_def {
    const char *origin, *name;
    const char *on; // bus
    int priority;   // identifier: decides who goes first
    int bytes;      // 0 to 8
    int identifier; // 11 or 29 bits
    int bits;       // 0: from bytes; otherwise the whole length on the wire
    lw_stuffing stuffing;
    const char *carries, *to; // signal, value; both may be NULL (load only)
    lw_period every;
    double offset;
    const char *released_by;
    const lw_timing *arrives, *jitter;
    double deadline;
    lw_overrun overrun;
    int queue;
    double lost; // chance a frame
} lw_frame_def;

LW_API lw_bus_def lw_bus_default(void);
LW_API lw_frame_def lw_frame_default(void);
LW_API lw_status lw_rig_add_bus(lw_rig *rig, const lw_bus_def *def, lw_error *err);
LW_API lw_status lw_rig_add_frame(lw_rig *rig, const lw_frame_def *def, lw_error *err);
// Bits of a frame on the wire, interframe space included, `stuffing` WORST or NONE; -1 for other
// sizes than 0..8 bytes, 11 or 29 bits.
LW_API int lw_frame_bits(int bytes, int identifier, lw_stuffing stuffing);

// ---- the rows of a schedule (records of events of a task or a core: lw_watch_events)

// One row a job that has ended. Times in seconds; NAN: did not happen.
//   X(name, column)
#define LW_JOB_COLUMNS(X)                                                                          \
    X(JOB, "job")           /* its number, skipped ones counted */                                 \
    X(RELEASE, "release")   /* nominal */                                                          \
    X(READY, "ready")       /* actual release: jitter and timer tick included */                   \
    X(START, "start")       /* first instant of its own work, after the switch */                  \
    X(FINISH, "finish")     /* or the instant at which it was skipped or aborted */                \
    X(DEADLINE, "deadline") /* NAN: none */                                                        \
    X(EXECUTED, "executed") /* own work done */                                                    \
    X(PREEMPTIONS, "preemptions")                                                                  \
    X(SAMPLE, "sample") /* instant of the sample it read, of the adc that steps its law */         \
    X(READ, "read")                                                                                \
    X(WRITTEN, "written") /* NAN: not written, or still to come */                                 \
    X(OUTCOME, "outcome") /* lw_job_outcome */

typedef enum lw_job_column {
#define LW_JOB_ENUM(name, words) LW_JOB_##name,
    LW_JOB_COLUMNS(LW_JOB_ENUM)
#undef LW_JOB_ENUM
        LW_N_JOB_COLUMNS
} lw_job_column;

typedef enum lw_job_outcome { // as a number in the column
    LW_JOB_FINISHED,
    LW_JOB_SKIPPED,
    LW_JOB_ABORTED
} lw_job_outcome;

// One row a stretch of a core's time that has ended; idle time has no row. Stretches rise and do
// not overlap.
#define LW_STRETCH_COLUMNS(X)                                                                      \
    X(FROM, "from")                                                                                \
    X(UNTIL, "until")                                                                              \
    X(TASK, "task") /* place of the task in lw_frozen_task plus 1; 0: none */                      \
    X(NUMBER, "job")                                                                               \
    X(KIND, "kind") /* lw_stretch_kind */                                                          \
    X(ENDS, "ends") /* lw_stretch_end */

typedef enum lw_stretch_column {
#define LW_STRETCH_ENUM(name, words) LW_STRETCH_##name,
    LW_STRETCH_COLUMNS(LW_STRETCH_ENUM)
#undef LW_STRETCH_ENUM
        LW_N_STRETCH_COLUMNS
} lw_stretch_column;

typedef enum lw_stretch_kind {
    LW_STRETCH_WORK,   // of a job
    LW_STRETCH_SWITCH, // before it: context switch and dispatch
    LW_STRETCH_RELEASE_COST,
    LW_STRETCH_STALL
} lw_stretch_kind;

typedef enum lw_stretch_end {
    LW_ENDS_FINISHED,  // the job finished
    LW_ENDS_PREEMPTED, // another job, a release or a stall took the core
    LW_ENDS_WAITING,   // the job waits for a resource
    LW_ENDS_ABORTED,
    LW_ENDS_ON // goes on in the next stretch: a switch into its work, a cost to whatever follows
} lw_stretch_end;

// ---- cores and tasks as frozen: for analysis, exporters and figures

typedef struct lw_frozen lw_frozen;

typedef struct lw_section_view {
    int resource;    // of the core, from 0; -1: masked
    lw_tick longest; // its longest stretch of execution
} lw_section_view;

// Ticks are real time, drift included.
typedef struct lw_task_view {
    const char *name, *origin;
    int core; // from 0
    int is_interrupt, is_frame;
    int urgency;           // on its core, 0 the most urgent, equal where priorities are equal
    lw_period period;      // num 0: its releases are not periodic
    lw_tick offset;        // of the first release by its own clock
    lw_tick least_between; // least time between two nominal releases; 0: not known
    int released_by;       // task whose finish releases it, from 0; -1: none
    lw_tick takes_least, takes_most;
    lw_tick jitter_least, jitter_most;
    lw_tick deadline; // after the nominal release; LW_NEVER: none
    int n_sections;
    const lw_section_view *sections;
} lw_task_view;

typedef struct lw_core_view {
    const char *name, *origin;
    int is_bus;
    lw_policy policy;
    lw_locking locking;
    lw_tick context_switch, dispatch_cost, release_cost;
    lw_period timer_tick; // num 0: none
    int n_tasks;
    const int *tasks; // from 0, in order of urgency, then declaration
} lw_core_view;

// Cores, and tasks and frames, in order of declaration. The number of a task in a record is its
// place here plus one.
LW_API int lw_frozen_n_cores(const lw_frozen *frozen);
LW_API lw_core_view lw_frozen_core(const lw_frozen *frozen, int core);
LW_API int lw_frozen_n_tasks(const lw_frozen *frozen);
LW_API lw_task_view lw_frozen_task(const lw_frozen *frozen, int task);

#ifdef __cplusplus
}
#endif
#endif
