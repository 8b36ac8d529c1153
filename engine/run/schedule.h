// Cores and tasks as frozen. A bus is a core whose tasks are frames.
//
// Cells of a core that its policy looks at stand side by side, one a task in order of rank:
// interrupt handlers, then tasks by priority (or deadline), then place of declaration.
//
// Invariants
// 1. The job that has the core (`running`) has executed done + (now - work_at) of its own work once
//    work_at is past; `done` moves only when the core is taken from it. Its next point is at
//    work_at + goal - done: derived, never queued.
// 2. `ready` holds the ranks with an unfinished job; the job at the head of a task's ring is the
//    one that executes, those behind it wait.
// 3. `waiting` holds the ranks whose job waits for a resource.
#ifndef LATEWOOD_RUN_SCHEDULE_H
#define LATEWOOD_RUN_SCHEDULE_H

#include "cpu/policy.h"
#include "run/state.h"

#include <latewood/cpu.h>

#define LW__PENDING 16 // releases under way through their jitter

// A timing at work: drawn once a job number.
typedef struct lw__use {
    const lw_timing *timing; // NULL: always `constant`
    double scale;            // of the timing, to ticks
    lw_tick constant, least, most;
    int n_streams, n_state;
    const uint32_t *streams;
    int memory; // double cells
} lw__use;

typedef enum lw__point_kind { // in the order of points at one place
    LW__POINT_WRITE,
    LW__POINT_UNLOCK,
    LW__POINT_UNMASK,
    LW__POINT_YIELD,
    LW__POINT_LOCK,
    LW__POINT_MASK,
    LW__POINT_READ,
    LW__POINT_FINISH
} lw__point_kind;

typedef struct lw__job_point {
    lw__point_kind kind;
    double share; // of the work; NAN: after `ticks` of it
    lw_tick ticks;
    int resource;
} lw__job_point;

typedef enum lw__release {
    LW__RELEASE_CLOCK,
    LW__RELEASE_ARRIVALS,
    LW__RELEASE_EVENT,
    LW__RELEASE_SLOT
} lw__release;

// Cells of a task that stand side by side, from `jobs` on.
typedef enum lw__own {
    LW__OWN_JOBS,
    LW__OWN_NOMINAL,
    LW__OWN_BASE,
    LW__OWN_BASE_JOB,
    LW__OWN_HEAD,
    LW__OWN_COUNT,
    LW__OWN_START,
    LW__OWN_PREEMPTIONS
} lw__own;

typedef struct lw__task {
    const lw__task_item *item;
    const char *name;
    int index, core, rank, level;
    int is_handler;
    // releases
    lw__release release;
    lw_period period; // real time; of the clock behind, where it is released by an event
    lw_tick offset;
    lw__event trigger;
    lw__use arrives, jitter, takes;
    int has_jitter;
    lw_overrun overrun;
    int queue, mask; // mask: of the ring
    int relative;    // the next release one period after the finish
    lw_tick deadline, least_between;
    double lost;
    uint32_t lost_stream;
    // within a job
    int n_points;
    const lw__job_point *points;
    int n_sections;
    const lw_section_view *sections;
    int reads_at_release;
    lw_tick logical; // LW_NEVER: none
    int logical_is_period;
    // what it computes
    int has_law;
    lw__loop law;
    lw__set after; // operations that its finish makes due
    int observed;  // a metric wants its jobs
    int log;
    // integer cells
    int jobs, nominal;  // number and nominal instant of the next release
    int base, base_job; // where the clock began, after a rephasing
    int deferred;       // a release waits for the finish
    int head, count;    // ring of jobs
    int ring_nominal, ring_ready, ring_work, ring_job, ring_sample, ring_read; // mask + 1 each
    int start, preemptions, written;          // of the job at the head; -1: not yet
    int pending, pending_head, pending_count; // nominal instants under way through their jitter
    int logical_job, finished;                // job whose logical write is due; last finished one
    int outs;                                 // doubles: outputs of each job of the ring
    int logical_timer;
    int release_op, read_op, logical_op; // -1: none
} lw__task;

typedef struct lw__core {
    const lw__core_item *item;
    const char *name;
    int index, n_tasks;
    const lw__policy *policy;
    lw__task **tasks;      // by rank
    const int *numbers;    // of the tasks in the rig, by rank
    uint64_t handlers;     // ranks of interrupt handlers
    const uint64_t *peers; // by rank: equal priority
    uint64_t quick;        // ranks that the compiled driver of cores serves (dash.h)
    int plain;             // strict order of ranks, no resources: the lowest rank runs
    lw_tick switch_cost, dispatch_cost, release_cost;
    lw_period timer_tick;
    double cycle; // ticks of one cycle of its clock
    double rate;  // its time to real time
    // resources: most urgent level and shortest deadline among the users
    lw_locking locking;
    int n_resources;
    const int *ceiling_level;
    const lw_tick *floor;
    // the table: where a slot begins (rank) or the core is left idle (-1)
    int n_turns;
    const struct lw__turn {
        lw_tick at;
        int rank;
    } * turns;
    lw_period table_cycle;
    int n_stalls;
    const struct lw__stalled {
        lw_tick at, lasts;
    } * stalls;
    int log;
    // integer cells, n_tasks each
    int due, key, released, done, goal, at, waits_for;
    // integer cells; ready and waiting are sets of ranks
    int ready, waiting, running, holder, last;
    int work_at, since, held_until, masked, debt;
    int owner, lock_key, held; // n_resources each; held: how many are held
    int slot, turn, turn_due, stall, stall_due, closed;
    int point_timer, release_timer;
    int reads_op, points_op, dispatch_op, releases_op;
} lw__core;

// Put cores and tasks at time zero.
void lw__cores_start(lw__lane *s);
// Close releases at the present instant and go on until no job is left; instants handled.
int64_t lw__lane_drain(lw__lane *s);
// A job that ended, for record and metrics.
typedef struct lw__job_end {
    int64_t job;
    lw_tick nominal, ready, start, finish, executed, sample, read, written; // -1: did not happen
    int64_t preemptions;
    lw_job_outcome outcome;
} lw__job_end;
void lw__job_ended(lw__lane *s, const lw__task *t, const lw__job_end *e);
void lw__job_observed(lw__lane *s, const lw__task *t, const lw__job_end *e);
// A task that is observed has written its outputs.
void lw__task_wrote(lw__lane *s, const lw__task *t);
// A stretch of a core's time; task NULL: none.
void lw__stretch_ended(lw__lane *s, const lw__core *c, const lw__task *t, lw_tick from,
                       lw_tick until, lw_stretch_kind kind, lw_stretch_end ends);
// First draw of the release times of a task with a clock or arrivals; used at the start.
lw_tick lw__use_draw(lw__lane *s, const lw__use *u, int64_t job);
// When the release with nominal instant `nominal` and number `job` comes.
lw_tick lw__ready_at(lw__lane *s, const lw__core *c, const lw__task *t, lw_tick nominal,
                     int64_t job);

#endif
