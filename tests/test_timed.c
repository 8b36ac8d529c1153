// Response times and schedulability against published values, and against a unit-step scheduler.

#include "suite.h"

#include "schedule_reference.h"

#include <latewood/timed.h>
#include <string.h>

#define MOST 20

typedef struct row {
    int64_t takes, between, deadline, blocking, jitter, worst;
} row;

static lw_timed_task tasks[MOST];
static lw_timed_result result;
static lw_error err;

static lw_timed_set set_of(lw_policy policy, int n, const row *rows)
{
    for (int i = 0; i < n; i++)
        tasks[i] =
            (lw_timed_task){.takes = rows[i].takes,
                            .between = rows[i].between,
                            .deadline = rows[i].deadline ? rows[i].deadline : rows[i].between,
                            .blocking = rows[i].blocking,
                            .jitter = rows[i].jitter,
                            .urgency = i};
    return (lw_timed_set){.policy = policy, .n = n, .tasks = tasks, .granularity = 1};
}

static void worst_are(lw_policy policy, int n, const row *rows)
{
    lw_timed_set set = set_of(policy, n, rows);
    ck_assert_msg(lw_timed_analyse(&set, &result, &err) == LW_OK, "%s", err.text);
    for (int i = 0; i < n; i++)
        ck_assert_msg(result.rows[i].response == rows[i].worst, "task %d: %lld, wanted %lld", i + 1,
                      (long long)result.rows[i].response, (long long)rows[i].worst);
}

// ---- fixed priority

typedef struct published {
    int n;
    row rows[MOST];
} published;

static const published fixed[] = {
    // CHECKS S-10 to S-13: A. Burns, A. Wellings, Real-Time Systems and Programming Languages, 4th
    // ed. 2009, ch. 11 (from memory)
    {3, {{3, 7, 0, 0, 0, 3}, {3, 12, 0, 0, 0, 6}, {5, 20, 0, 0, 0, 20}}},
    {3, {{5, 20, 0, 0, 0, 5}, {10, 40, 0, 0, 0, 15}, {40, 80, 0, 0, 0, 80}}},
    {4, {{3, 20, 5, 0, 0, 3}, {3, 15, 7, 0, 0, 6}, {4, 10, 10, 0, 0, 10}, {3, 20, 20, 0, 0, 20}}},
    {3, {{10, 30, 0, 0, 0, 10}, {10, 40, 0, 0, 0, 20}, {12, 50, 0, 0, 0, 52}}},
    // S-15, S-18, S-19: worked examples of open libraries of schedulability analysis
    {4, {{1, 4, 0, 0, 0, 1}, {1, 5, 0, 0, 0, 2}, {3, 9, 0, 0, 0, 7}, {3, 18, 0, 0, 0, 18}}},
    {3, {{1, 2, 0, 0, 0, 1}, {5, 20, 0, 0, 0, 10}, {1, 20, 0, 0, 0, 12}}},
    {3, {{1, 3, 0, 0, 0, 1}, {1, 4, 0, 0, 0, 2}, {2, 8, 0, 0, 0, 6}}},
    // S-16, S-17: J. Lehoczky, RTSS 1990, examples 2 (also swapped) and 3
    {2, {{52, 100, 0, 0, 0, 52}, {52, 140, 0, 0, 0, 156}}},
    {2, {{52, 140, 0, 0, 0, 52}, {52, 100, 0, 0, 0, 108}}},
    {2, {{26, 70, 0, 0, 0, 26}, {62, 100, 0, 0, 0, 118}}},
    // S-21: random sets carried by two open libraries of schedulability analysis
    {4,
     {{5995, 43000, 0, 0, 0, 5995},
      {2497, 44000, 0, 0, 0, 8492},
      {18376, 52000, 0, 0, 0, 26868},
      {7724, 55000, 0, 0, 0, 34592}}},
    {7,
     {{108, 6000, 0, 0, 0, 108},
      {1202, 13000, 0, 0, 0, 1310},
      {8280, 30000, 0, 0, 0, 9698},
      {7904, 30000, 0, 0, 0, 19020},
      {569, 28000, 0, 0, 0, 19589},
      {117, 22000, 0, 0, 0, 19706},
      {1288, 29000, 0, 0, 0, 20994}}},
    {4,
     {{17116, 50000, 0, 0, 0, 17116},
      {7200, 100000, 0, 0, 0, 24316},
      {14384, 138000, 0, 0, 0, 38700},
      {13596, 122000, 0, 0, 0, 69412}}},
    {4,
     {{36474, 66000, 0, 0, 0, 36474},
      {4921, 95000, 0, 0, 0, 41395},
      {984, 95000, 0, 0, 0, 42379},
      {18668, 113000, 0, 0, 0, 61047}}},
    // S-43: G. Buttazzo, Hard Real-Time Computing Systems, exercises 4.2, 4.3 (inputs read)
    {3, {{3, 5, 0, 0, 0, 3}, {1, 8, 0, 0, 0, 4}, {1, 10, 0, 0, 0, 5}}},
    {3, {{1, 4, 0, 0, 0, 1}, {2, 6, 0, 0, 0, 3}, {3, 10, 0, 0, 0, 10}}},
    // S-42: same, exercise 4.7: deadline-monotonic, the third settles at 12 (inputs read)
    {3, {{2, 8, 4, 0, 0, 2}, {2, 6, 5, 0, 0, 4}, {4, 12, 8, 0, 0, 12}}},
    // S-20: N. Audsley and others, Software Engineering Journal 8(5) 1993: avionics platform with
    // blocking and jitter, microseconds; the jitter of 1000 counts in the response
    {18,
     {{51, 1000, 0, 0, 0, 51},
      {3000, 2000000, 5000, 300, 0, 3504},
      {2000, 25000, 0, 600, 0, 5906},
      {5000, 25000, 0, 900, 0, 11512},
      {1000, 40000, 0, 1350, 0, 13064},
      {3000, 50000, 0, 1350, 0, 16217},
      {5000, 50000, 0, 750, 0, 20821},
      {8000, 59000, 0, 750, 0, 36637},
      {9000, 80000, 0, 1350, 0, 47798},
      {2000, 80000, 0, 450, 0, 48949},
      {5000, 100000, 0, 1050, 0, 99150},
      {1000, 200000, 0, 450, 1000, 100550},
      {3000, 200000, 0, 450, 0, 140641},
      {1000, 200000, 0, 450, 0, 141692},
      {1000, 200000, 0, 1350, 0, 143694},
      {3000, 1000000, 0, 0, 0, 145446},
      {1000, 1000000, 0, 0, 0, 146497},
      {1000, 1000000, 0, 0, 0, 147548}}},
};

START_TEST(published_response_times_under_fixed_priority_are_exact)
{
    worst_are(LW_POLICY_FIXED_PRIORITY, fixed[_i].n, fixed[_i].rows);
}
END_TEST

START_TEST(each_job_of_lehoczkys_third_example_is_as_published_and_the_first_is_not_the_worst)
{
    // CHECKS S-17j: sequence from memory
    static const int wanted[] = {114, 102, 116, 104, 118, 106, 94};
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY, 2, fixed[9].rows);
    for (int q = 0; q < 7; q++)
        ck_assert_int_eq(lw_timed_job(&set, 1, q), wanted[q]);
    ck_assert(lw_timed_job(&set, 1, 7) == LW_NEVER);
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
    ck_assert_int_eq(result.rows[1].job, 4);
}
END_TEST

START_TEST(overload_has_no_bound_and_leaves_more_urgent_tasks_theirs)
{
    static const row rows[] = {{3, 10, 0, 0, 0, 0}, {8, 11, 0, 0, 0, 0}};
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY, 2, rows);
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
    ck_assert(result.overload && !result.schedulable);
    ck_assert_int_eq(result.rows[0].response, 3);
    ck_assert_int_eq(result.rows[1].outcome, LW_TIMED_OVERLOAD);
    ck_assert(result.rows[1].response == LW_NEVER && result.rows[1].slack == -1);
}
END_TEST

// ---- without preemption, frames

START_TEST(frames_of_davis_example_respond_as_published)
{
    // CHECKS S-30: R. Davis and others 2007: three frames of 1 ms at 125 kbit/s, D = 3.25 ms for
    // the second and third (numbers from memory); microseconds, a bit is 8
    static const row rows[] = {{1000, 2500, 0, 0, 0, 2000},
                               {1000, 3500, 3250, 0, 0, 3000},
                               {1000, 3500, 3250, 0, 0, 3500}};
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION, 3, rows);
    set.granularity = 8;
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
    for (int i = 0; i < 3; i++)
        ck_assert_int_eq(result.rows[i].response, rows[i].worst);
    // its first instance passes for schedulable, the second does not
    ck_assert_int_eq(lw_timed_job(&set, 2, 0), 3000);
    ck_assert_int_eq(lw_timed_job(&set, 2, 1), 3500);
    ck_assert_int_eq(result.rows[2].meets, 0);
}
END_TEST

START_TEST(frames_of_brosters_set_respond_as_published)
{
    // CHECKS S-33: I. Broster, A. Burns, G. Rodriguez-Navas, RTSS 2002, no faults; 250 kbit/s (4 us
    // a bit); published without the frame's own gap of 3 bits
    static const int set[][3] = {{8, 10, 1028}, {3, 14, 1368},  {3, 20, 1708}, {2, 15, 2008},
                                 {5, 20, 2428}, {5, 40, 2848},  {4, 15, 3228}, {5, 50, 3648},
                                 {4, 20, 4028}, {7, 100, 4448}, {5, 50, 4708}, {1, 100, 0}};
    row rows[12];
    for (int i = 0; i < 12; i++)
        rows[i] = (row){
            4 * lw_frame_bits(set[i][0], 11, LW_STUFFING_WORST), 1000 * set[i][1], 0, 0, 0, 0};
    lw_timed_set s = set_of(LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION, 12, rows);
    s.granularity = 4;
    ck_assert_int_eq(lw_timed_analyse(&s, &result, &err), LW_OK);
    for (int i = 0; i < 11; i++)
        ck_assert_int_eq(result.rows[i].response - 12, set[i][2]);
}
END_TEST

START_TEST(without_preemption_the_continuous_supremum_is_given)
{
    // CHECKS section 4, note: (20,70)(20,80)(35,200) respond within 55, 75, 75 in continuous time
    static const row rows[] = {
        {20, 70, 0, 0, 0, 55}, {20, 80, 0, 0, 0, 75}, {35, 200, 0, 0, 0, 75}};
    worst_are(LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION, 3, rows);
}
END_TEST

// ---- earliest deadline first

static const published edf[] = {
    // CHECKS S-50, S-51, S-52: tests of two open libraries; method M. Spuri 1996
    {2, {{3, 12, 12, 0, 0, 7}, {2, 4, 4, 0, 0, 2}}},
    {3, {{2, 9, 9, 0, 0, 8}, {3, 12, 12, 0, 0, 11}, {2, 4, 4, 0, 0, 3}}},
    {3, {{1, 4, 4, 0, 0, 1}, {1, 12, 12, 0, 0, 2}, {3, 16, 16, 0, 0, 6}}},
    {2, {{2, 5, 4, 0, 0, 4}, {3, 6, 5, 0, 0, 5}}},
    {3, {{2, 4, 3, 0, 0, 3}, {3, 12, 10, 0, 0, 10}, {2, 9, 7, 0, 0, 7}}},
    {3, {{79, 120, 50, 0, 0, 79}, {11, 34, 100, 0, 0, 101}, {1, 190, 120, 0, 0, 121}}},
    {5,
     {{1, 5, 5, 0, 0, 1},
      {100, 1000, 1000, 0, 0, 694},
      {2, 10, 10, 0, 0, 3},
      {5, 20, 45, 0, 0, 22},
      {10, 50, 50, 0, 0, 27}}},
};

START_TEST(published_worst_responses_under_earliest_deadline_are_exact)
{
    worst_are(LW_POLICY_EARLIEST_DEADLINE, edf[_i].n, edf[_i].rows);
}
END_TEST

typedef struct feasible {
    int n, yes;
    row rows[9];
} feasible;

static const feasible feasibles[] = {
    // CHECKS S-40, S-42, S-45: G. Buttazzo, Table 4.4; exercise 4.6; lecture notes
    {3, 1, {{2, 6, 4, 0, 0, 0}, {2, 8, 5, 0, 0, 0}, {3, 9, 7, 0, 0, 0}}},
    {3, 1, {{2, 6, 5, 0, 0, 0}, {2, 8, 4, 0, 0, 0}, {4, 12, 8, 0, 0, 0}}},
    {3, 1, {{1, 5, 5, 0, 0, 0}, {4, 9, 8, 0, 0, 0}, {2, 6, 4, 0, 0, 0}}},
    // S-47: F. Zhang, A. Burns, IEEE Trans. Computers 58(9) 2009; with (10,15,100) not
    {8,
     1,
     {{6000, 31000, 18000, 0, 0, 0},
      {2000, 9800, 9000, 0, 0, 0},
      {1000, 17000, 12000, 0, 0, 0},
      {90, 4200, 3000, 0, 0, 0},
      {8, 96, 78, 0, 0, 0},
      {2, 12, 16, 0, 0, 0},
      {10, 280, 120, 0, 0, 0},
      {26, 660, 160, 0, 0, 0}}},
    {9,
     0,
     {{6000, 31000, 18000, 0, 0, 0},
      {2000, 9800, 9000, 0, 0, 0},
      {1000, 17000, 12000, 0, 0, 0},
      {90, 4200, 3000, 0, 0, 0},
      {8, 96, 78, 0, 0, 0},
      {2, 12, 16, 0, 0, 0},
      {10, 280, 120, 0, 0, 0},
      {26, 660, 160, 0, 0, 0},
      {10, 100, 15, 0, 0, 0}}},
    // S-48: known unschedulable sets of an open library
    {2, 0, {{331, 15000, 2688, 0, 0, 0}, {3654, 77000, 3849, 0, 0, 0}}},
    {5,
     0,
     {{331, 15000, 2688, 0, 0, 0},
      {413, 34000, 1061, 0, 0, 0},
      {3654, 77000, 3849, 0, 0, 0},
      {349, 70000, 20189, 0, 0, 0},
      {1113, 83000, 10683, 0, 0, 0}}},
};

START_TEST(published_sets_are_feasible_by_deadline_or_not)
{
    const feasible *f = &feasibles[_i];
    lw_timed_set set = set_of(LW_POLICY_EARLIEST_DEADLINE, f->n, f->rows);
    ck_assert_int_eq(lw_timed_schedulable(&set), f->yes);
}
END_TEST

START_TEST(demand_is_as_published)
{
    // CHECKS S-41 (Buttazzo Table 4.4), S-45, S-46 (lecture notes; halves doubled)
    static const int at[] = {4, 5, 7, 10, 13, 16, 21, 22}, want[] = {2, 4, 7, 9, 11, 16, 18, 20};
    static const int at2[] = {4, 10, 11, 12, 16}, want2[] = {1, 2, 4, 6, 7};
    static const row third[] = {{1, 6, 4, 0, 0, 0}, {2, 14, 11, 0, 0, 0}, {2, 20, 12, 0, 0, 0}};
    lw_timed_set set = set_of(LW_POLICY_EARLIEST_DEADLINE, 3, feasibles[0].rows);
    for (int i = 0; i < 8; i++)
        ck_assert_int_eq(lw_timed_demand(&set, at[i]), want[i]);
    set = set_of(LW_POLICY_EARLIEST_DEADLINE, 3, feasibles[2].rows);
    ck_assert_int_eq(lw_timed_demand(&set, 50), 46);
    set = set_of(LW_POLICY_EARLIEST_DEADLINE, 3, third);
    for (int i = 0; i < 5; i++)
        ck_assert_int_eq(lw_timed_demand(&set, at2[i]), want2[i]);
}
END_TEST

// ---- bounds, blocking

START_TEST(utilisation_bounds_are_as_published)
{
    // CHECKS S-01: C. Liu, J. Layland 1973, to 12 digits; half a unit of the last one
    static const int n[] = {1, 2, 3, 4, 5, 10};
    static const double want[] = {
        1, .828427124746, .779763149685, .756828460011, .743491774985, .717734625363};
    for (int i = 0; i < 6; i++)
        ck_near(lw_timed_bound(n[i]), want[i], 5.1e-13, 1);
    // S-02: the hyperbolic bound is reached where Liu and Layland's is (arithmetic)
    row rows[3];
    int64_t share = llrint((cbrt(2) - 1) * 1e12);
    for (int i = 0; i < 3; i++)
        rows[i] = (row){share, 1000000000000, 0, 0, 0, 0};
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY, 3, rows);
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
    ck_near(result.hyperbolic, 2, 1e-11, 1); // shares are rounded to 1e-12 each
}
END_TEST

START_TEST(blocking_bounds_are_as_published)
{
    // CHECKS S-62: lecture notes
    static const lw_tick five[] = {0, 20, 0, 5, 0, 10, 0, 5, 5, 0, 0, 5, 10, 3, 0};
    static const lw_tick inherit[] = {5, 20, 15, 10, 0}, ceiling[] = {5, 10, 10, 10, 0};
    // S-63: G. Buttazzo, section 7.6 (from memory)
    static const lw_tick four[] = {1, 2, 0, 0, 9, 3, 8, 7, 0, 6, 5, 4};
    lw_tick b[5];
    lw_timed_blocking(5, 3, five, LW_LOCKING_INHERITANCE, b);
    for (int i = 0; i < 5; i++)
        ck_assert_int_eq(b[i], inherit[i]);
    lw_timed_blocking(5, 3, five, LW_LOCKING_CEILING, b);
    for (int i = 0; i < 5; i++)
        ck_assert_int_eq(b[i], ceiling[i]);
    lw_timed_blocking(4, 3, four, LW_LOCKING_INHERITANCE, b);
    ck_assert(b[0] == 17 && b[2] == 6 && b[3] == 0);
}
END_TEST

// ---- a second computation: unit steps over the hyperperiod

static const int periods[] = {4, 5, 6, 8, 10, 12, 15, 20};

static uint32_t next(uint32_t *x)
{
    *x = *x * 1664525u + 1013904223u;
    return *x >> 16;
}

static int random_rows(uint32_t k, row *rows)
{
    uint32_t x = k * 2654435761u + 1;
    int n = 2 + (int)(next(&x) % 3);
    for (int i = 0; i < n; i++) {
        int period = periods[next(&x) % 8];
        rows[i] = (row){1 + next(&x) % (uint32_t)(2 * period / n), period, 0, 0, 0, 0};
    }
    return n;
}

static ref_result seen;

// Worst response of a task by unit steps, all released together.
static int worst_seen(lw_policy policy, int n, const row *rows, ref_fault fault, int task,
                      const int *offsets)
{
    ref_set set = {.policy = policy, .n = n, .horizon = 120 + 120};
    int worst = 0;
    for (int i = 0; i < n; i++)
        set.task[i] = (ref_task){.priority = i,
                                 .period = (int)rows[i].between,
                                 .deadline = (int)rows[i].between,
                                 .offset = offsets == NULL ? 0 : offsets[i],
                                 .n_takes = 1,
                                 .takes = {(int)rows[i].takes},
                                 .queue = 60};
    ref_run(&set, fault, &seen);
    for (int q = 0; q < seen.n[task]; q++) {
        int response = seen.job[task][q].finish - seen.job[task][q].release;
        worst = seen.job[task][q].finish >= 0 && response > worst ? response : worst;
    }
    return worst;
}

// Random sets at or below full load for which the analysis is not what is seen.
static int differing(lw_policy policy, int exact, ref_fault fault, int *compared)
{
    int bad = 0;
    *compared = 0;
    for (uint32_t k = 0; k < 400; k++) {
        row rows[MOST];
        int n = random_rows(k, rows), offsets[4];
        uint32_t x = k + 77;
        lw_timed_set set = set_of(policy, n, rows);
        ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
        for (int i = 0; i < n; i++)
            offsets[i] = (int)(next(&x) % (uint32_t)rows[i].between);
        for (int i = 0; i < n && !result.overload; i++) {
            int worst = worst_seen(policy, n, rows, fault, i, exact ? NULL : offsets);
            lw_tick bound = result.rows[i].response;
            bad += exact ? bound != worst : bound < worst;
            ++*compared;
        }
    }
    return bad;
}

START_TEST(fixed_priority_is_the_worst_that_unit_steps_show_and_a_fault_is_noticed)
{
    int compared;
    ck_assert_int_eq(differing(LW_POLICY_FIXED_PRIORITY, 1, REF_RIGHT, &compared), 0);
    ck_assert_int_gt(compared, 300);
    ck_assert_int_gt(differing(LW_POLICY_FIXED_PRIORITY, 1, REF_FORGETS_QUEUE, &compared), 0);
}
END_TEST

START_TEST(no_phases_show_more_than_the_bounds)
{
    int compared;
    for (int policy = 0; policy <= LW_POLICY_EARLIEST_DEADLINE; policy++)
        ck_assert_int_eq(differing((lw_policy)policy, 0, REF_RIGHT, &compared), 0);
}
END_TEST

// ---- slack, costs, what is refused

START_TEST(slack_is_the_last_growth_that_holds)
{
    // S-15's set: the fourth ends at its deadline of 18
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY, 3, fixed[6].rows);
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_OK);
    for (int i = 0; i < 3; i++) {
        tasks[i].takes += result.rows[i].slack;
        ck_assert(lw_timed_schedulable(&set));
        tasks[i].takes += 1;
        ck_assert(!lw_timed_schedulable(&set));
        tasks[i].takes -= 1 + result.rows[i].slack;
    }
}
END_TEST

START_TEST(a_malformed_set_is_refused_in_words)
{
    static const row rows[] = {{0, 10, 0, 0, 0, 0}};
    lw_timed_set set = set_of(LW_POLICY_FIXED_PRIORITY, 1, rows);
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_ERR_ARGUMENT);
    ck_assert_ptr_nonnull(strstr(err.text, "task 1"));
    set.policy = LW_POLICY_COOPERATIVE;
    ck_assert_int_eq(lw_timed_analyse(&set, &result, &err), LW_ERR_ARGUMENT);
    ck_assert_ptr_nonnull(strstr(err.text, "cooperative"));
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("timed");
    TCase *all = tcase_create("all");
#define COUNT(list) ((int)(sizeof(list) / sizeof *(list)))
    tcase_add_loop_test(all, published_response_times_under_fixed_priority_are_exact, 0,
                        COUNT(fixed));
    tcase_add_test(
        all, each_job_of_lehoczkys_third_example_is_as_published_and_the_first_is_not_the_worst);
    tcase_add_test(all, overload_has_no_bound_and_leaves_more_urgent_tasks_theirs);
    tcase_add_test(all, frames_of_davis_example_respond_as_published);
    tcase_add_test(all, frames_of_brosters_set_respond_as_published);
    tcase_add_test(all, without_preemption_the_continuous_supremum_is_given);
    tcase_add_loop_test(all, published_worst_responses_under_earliest_deadline_are_exact, 0,
                        COUNT(edf));
    tcase_add_loop_test(all, published_sets_are_feasible_by_deadline_or_not, 0, COUNT(feasibles));
    tcase_add_test(all, demand_is_as_published);
    tcase_add_test(all, utilisation_bounds_are_as_published);
    tcase_add_test(all, blocking_bounds_are_as_published);
    tcase_add_test(all, fixed_priority_is_the_worst_that_unit_steps_show_and_a_fault_is_noticed);
    tcase_add_test(all, no_phases_show_more_than_the_bounds);
    tcase_add_test(all, slack_is_the_last_growth_that_holds);
    tcase_add_test(all, a_malformed_set_is_refused_in_words);
    suite_add_tcase(suite, all);
    return run_suite(suite);
}
