// Processors against what is known: published response times, exact in whole units; a unit-step
// scheduler over random task sets; loops whose latency is stated directly.

#include "loops.h"
#include "schedule_reference.h"

#include <latewood/timing.h>

static ref_result engine, reference;

// ---- published sets

typedef struct known {
    int n, takes[5], period[5], worst[5];
} known;

// Tasks released together at zero, the first the most urgent, over one hyperperiod and more.
static ref_set published(lw_policy policy, int n, const int *takes, const int *period, int horizon)
{
    ref_set set = {.policy = policy, .n = n, .horizon = horizon};
    for (int i = 0; i < n; i++)
        set.task[i] = (ref_task){.priority = i,
                                 .period = period[i],
                                 .deadline = period[i],
                                 .n_takes = 1,
                                 .takes = {takes[i]},
                                 .queue = 8};
    return set;
}

static int worst_response(const ref_result *r, int task)
{
    int worst = 0;
    for (int k = 0; k < r->n[task]; k++) {
        int response = r->job[task][k].finish - r->job[task][k].release;
        worst = response > worst ? response : worst;
    }
    return worst;
}

static const known fixed_priority[] = {
    // CHECKS S-10, S-11: A. Burns, A. Wellings, Real-Time Systems and Programming Languages, 4th
    // ed.
    // 2009, ch. 11 (from memory)
    {3, {3, 3, 5}, {7, 12, 20}, {3, 6, 20}},
    {3, {5, 10, 40}, {20, 40, 80}, {5, 15, 80}},
    // S-12: same, deadlines below periods (from memory)
    {4, {3, 3, 4, 3}, {20, 15, 10, 20}, {3, 6, 10, 20}},
    // S-13: same, the third misses its deadline of 50 (from memory)
    {3, {10, 10, 12}, {30, 40, 50}, {10, 20, 52}},
    // S-15: worked example shared by open libraries of schedulability analysis
    {4, {1, 1, 3, 3}, {4, 5, 9, 18}, {1, 2, 7, 18}},
    // S-16, S-17: J. Lehoczky, Fixed priority scheduling of periodic task sets with arbitrary
    // deadlines, RTSS 1990, examples 2 and 3
    {2, {52, 52}, {100, 140}, {52, 156}},
    {2, {52, 52}, {140, 100}, {52, 108}},
    {2, {26, 62}, {70, 100}, {26, 118}},
    // S-18, S-19: worked examples of open libraries
    {3, {1, 5, 1}, {2, 20, 20}, {1, 10, 12}},
    {3, {1, 1, 2}, {3, 4, 8}, {1, 2, 6}},
    // S-43: G. Buttazzo, Hard Real-Time Computing Systems, exercises 4.2, 4.3 (inputs read)
    {3, {3, 1, 1}, {5, 8, 10}, {3, 4, 5}},
    {3, {1, 2, 3}, {4, 6, 10}, {1, 3, 10}},
};

START_TEST(published_response_times_under_fixed_priority_are_met_exactly)
{
    const known *k = &fixed_priority[_i];
    ref_set set = published(LW_POLICY_FIXED_PRIORITY, k->n, k->takes, k->period, 1500);
    ref_engine(&set, &engine);
    for (int i = 0; i < k->n; i++)
        ck_assert_int_eq(worst_response(&engine, i), k->worst[i]);
}
END_TEST

START_TEST(each_job_of_lehoczkys_third_example_responds_as_published)
{
    // CHECKS S-17j: example 3, second task, job by job (sequence from memory)
    static const int wanted[] = {114, 102, 116, 104, 118, 106, 94};
    static const int takes[] = {26, 62}, period[] = {70, 100};
    ref_set set = published(LW_POLICY_FIXED_PRIORITY, 2, takes, period, 700);
    ref_engine(&set, &engine);
    ck_assert_int_ge(engine.n[1], 7);
    for (int k = 0; k < 7; k++)
        ck_assert_int_eq(engine.job[1][k].finish - engine.job[1][k].release, wanted[k]);
}
END_TEST

START_TEST(a_set_that_fixed_priority_misses_is_met_by_earliest_deadline)
{
    // CHECKS S-42: G. Buttazzo, exercises 4.6, 4.7: C = 2, 2, 4, D = 5, 4, 8, T = 6, 8, 12: by
    // deadline feasible; in deadline-monotonic order the third task responds in 12 > 8
    static const int takes[] = {2, 2, 4}, period[] = {8, 6, 12}, deadline[] = {4, 5, 8};
    ref_set set = published(LW_POLICY_FIXED_PRIORITY, 3, takes, period, 240);
    for (int i = 0; i < 3; i++)
        set.task[i].deadline = deadline[i];
    ref_engine(&set, &engine);
    ck_assert_int_eq(worst_response(&engine, 2), 12);
    set.policy = LW_POLICY_EARLIEST_DEADLINE;
    ref_engine(&set, &engine);
    for (int i = 0; i < 3; i++)
        for (int k = 0; k < engine.n[i]; k++)
            ck_assert_int_le(engine.job[i][k].finish - engine.job[i][k].release, deadline[i]);
}
END_TEST

START_TEST(without_preemption_the_longest_task_below_blocks)
{
    // CHECKS note: set (20,70)(20,80)(35,200) of an open library, discrete time: 54, 74, 75; the
    // third is released one unit earlier for the first two
    static const int takes[] = {20, 20, 35}, period[] = {70, 80, 200};
    ref_set set = published(LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION, 3, takes, period, 5600);
    set.horizon = 600;
    ref_engine(&set, &engine);
    ck_assert_int_eq(worst_response(&engine, 2), 75);
    set.task[0].offset = set.task[1].offset = 1;
    set.horizon = 60;
    ref_engine(&set, &engine);
    ck_assert_int_eq(engine.job[0][0].finish - 1, 54);
    set.horizon = 100;
    ref_engine(&set, &engine);
    ck_assert_int_eq(engine.job[1][0].finish - 1, 74);
}
END_TEST

// ---- resources

// CHECKS S-60: A. Burns, A. Wellings, table 11.11, section 11.8 (task table read, responses from
// memory): E an ordinary unit, Q and V units that hold a resource.
static ref_set inversion(lw_locking locking)
{
    ref_set set = {.policy = LW_POLICY_FIXED_PRIORITY, .locking = locking, .n = 4, .horizon = 60};
    set.task[0] = (ref_task){
        .priority = 4, .offset = 0, .takes = {6}, .n_sections = 1, .section = {{0, 1, 5}}};
    set.task[1] = (ref_task){.priority = 3, .offset = 2, .takes = {2}};
    set.task[2] = (ref_task){
        .priority = 2, .offset = 2, .takes = {4}, .n_sections = 1, .section = {{1, 1, 3}}};
    set.task[3] = (ref_task){.priority = 1,
                             .offset = 4,
                             .takes = {5},
                             .n_sections = 2,
                             .section = {{0, 2, 3}, {1, 3, 4}}};
    for (int i = 0; i < 4; i++) {
        set.task[i].period = set.task[i].deadline = 100;
        set.task[i].n_takes = set.task[i].queue = 1;
    }
    return set;
}

START_TEST(priority_inversion_is_bounded_as_published)
{
    static const struct {
        lw_locking locking;
        int response;
    } wanted[] = {{LW_LOCKING_NONE, 12}, {LW_LOCKING_INHERITANCE, 9}, {LW_LOCKING_CEILING, 6}};
    for (int k = 0; k < 3; k++) {
        ref_set set = inversion(wanted[k].locking);
        ref_engine(&set, &engine);
        ck_assert_int_eq(engine.job[3][0].finish - 4, wanted[k].response);
    }
}
END_TEST

START_TEST(under_the_immediate_ceiling_jobs_begin_and_end_in_the_published_order)
{
    // CHECKS S-61: a.start d.start d.end c.start c.end b.start b.end a.end (same book, fig. 11.9)
    ref_set set = inversion(LW_LOCKING_CEILING);
    ref_engine(&set, &engine);
    const ref_job *a = engine.job[0], *b = engine.job[1], *c = engine.job[2], *d = engine.job[3];
    const int order[] = {a->start,  d->start, d->finish, c->start,
                         c->finish, b->start, b->finish, a->finish};
    for (int k = 1; k < 8; k++)
        ck_assert_int_le(order[k - 1], order[k]);
    ck_assert_int_lt(a->start, d->start);
    ck_assert_int_lt(b->finish, a->finish);
}
END_TEST

// ---- the unit-step scheduler

#define N_SETS 1500

START_TEST(random_sets_run_as_the_unit_step_scheduler_runs_them)
{
    char text[600];
    for (uint32_t k = 0; k < N_SETS; k++) {
        ref_set set = ref_random(k);
        ref_run(&set, REF_RIGHT, &reference);
        ref_engine(&set, &engine);
        ck_assert_msg(!ref_differs(&set, &engine, &reference, text, sizeof text), "set %u: %s", k,
                      text);
    }
}
END_TEST

START_TEST(a_fault_in_the_unit_step_scheduler_is_noticed)
{
    static const ref_fault faults[] = {REF_LATER_FIRST, REF_FREE_SWITCH, REF_NO_BLOCKING,
                                       REF_FORGETS_QUEUE};
    char text[600];
    int noticed = 0;
    for (uint32_t k = 0; k < 200 && !noticed; k++) {
        ref_set set = ref_random(k);
        ref_run(&set, faults[_i], &reference);
        ref_engine(&set, &engine);
        noticed = ref_differs(&set, &engine, &reference, text, sizeof text);
    }
    ck_assert_int_eq(noticed, 1);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("schedule");
    TCase *sets = tcase_create("published");
    tcase_add_loop_test(sets, published_response_times_under_fixed_priority_are_met_exactly, 0,
                        (int)(sizeof fixed_priority / sizeof *fixed_priority));
    tcase_add_test(sets, each_job_of_lehoczkys_third_example_responds_as_published);
    tcase_add_test(sets, a_set_that_fixed_priority_misses_is_met_by_earliest_deadline);
    tcase_add_test(sets, without_preemption_the_longest_task_below_blocks);
    tcase_add_test(sets, priority_inversion_is_bounded_as_published);
    tcase_add_test(sets, under_the_immediate_ceiling_jobs_begin_and_end_in_the_published_order);
    suite_add_tcase(suite, sets);
    TCase *random = tcase_create("unit step");
    tcase_add_test(random, random_sets_run_as_the_unit_step_scheduler_runs_them);
    tcase_add_loop_test(random, a_fault_in_the_unit_step_scheduler_is_noticed, 0, 4);
    suite_add_tcase(suite, random);
    return run_suite(suite);
}
