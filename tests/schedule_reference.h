// A second scheduler that knows only one thing: what happens in the next unit of time. Task sets
// in whole units are run by it and by the engine, and every job compared.
//
// Written apart from the engine, from the rulings in cpu.h: no timers, no derived finishes, no
// sets. A fault can be planted in it, to prove that a comparison notices.
#ifndef LATEWOOD_TESTS_SCHEDULE_REFERENCE_H
#define LATEWOOD_TESTS_SCHEDULE_REFERENCE_H

#include <latewood/cpu.h>
#include <stdint.h>

#define REF_TASKS 8
#define REF_JOBS 1600 // of one task

typedef struct ref_section {
    int resource; // -1: masked
    int from, to; // units of execution
} ref_section;

typedef struct ref_task {
    int priority; // smaller is more urgent
    int handler;
    int period, offset, deadline;
    int n_takes, takes[4]; // in turn
    int n_jitter, jitter[4];
    int queue;
    lw_overrun overrun;
    int n_sections;
    ref_section section[2];
} ref_task;

typedef struct ref_set {
    lw_policy policy;
    lw_locking locking;
    int context_switch, dispatch_cost, release_cost, timer_tick;
    int stall_at, stall_for; // for 0: none
    int n, horizon;
    ref_task task[REF_TASKS];
} ref_set;

typedef struct ref_job {
    int job, release, ready, start, finish, preemptions, outcome; // -1: did not happen
} ref_job;

typedef struct ref_result {
    int n[REF_TASKS];
    ref_job job[REF_TASKS][REF_JOBS];
} ref_result;

typedef enum ref_fault {
    REF_RIGHT,
    REF_LATER_FIRST,  // among equals the later release goes first
    REF_FREE_SWITCH,  // a resumption costs no switch
    REF_NO_BLOCKING,  // locks never block
    REF_FORGETS_QUEUE // a queued job is lost
} ref_fault;

// Run a set to its horizon; jobs are listed as they end.
void ref_run(const ref_set *set, ref_fault fault, ref_result *out);
// A random set, the k-th of its kind.
ref_set ref_random(uint32_t k);
// The same set by the engine, recorded.
void ref_engine(const ref_set *set, ref_result *out);
// 0 where both have the same jobs; otherwise `text` tells the first that differs.
int ref_differs(const ref_set *set, const ref_result *a, const ref_result *b, char *text, int size);

#endif
