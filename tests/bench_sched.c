// Speed of schedules against a hand-written calendar scheduler of the same work, in one run:
//   W7.3, W7.10, W7.50  one core, fixed priority, that many periodic tasks with uniform execution
//                       times, no plant
// The plain C has releases in a sorted array (3, 10 tasks) or a tournament tree (50), the ready set
// in a word, and a generator of a few operations a draw. Of each job both know release, start,
// preemptions and finish.
// All parameters are invented.

#include "bench.h"

#define OK(call)                                                                                   \
    do {                                                                                           \
        lw_error err_ = {0}, *e = &err_;                                                           \
        if ((call) != LW_OK) {                                                                     \
            fprintf(stderr, "%s\n", err_.text);                                                    \
            exit(1);                                                                               \
        }                                                                                          \
        (void)e;                                                                                   \
    } while (0)

#include "loops.h"

#include <latewood/cpu.h>

#define MOST 64

static int n_tasks;
static int64_t period[MOST], least[MOST], most[MOST]; // ns

static void make_tasks(int n)
{
    static const int64_t base[] = {50000,  80000,  100000, 160000, 200000,
                                   250000, 400000, 500000, 800000, 1000000};
    static const int64_t three[] = {50000, 200000, 1000000};
    n_tasks = n;
    for (int i = 0; i < n; i++) {
        period[i] = n == 3 ? three[i] : base[i * 10 / n] + 10 * (i * 10 % n);
        most[i] = (int64_t)(0.9 * (double)period[i] / n);
        least[i] = most[i] / 2;
    }
}

// ---- plain C

static uint64_t seed;

static inline int64_t draw(int i)
{
    seed ^= seed << 13;
    seed ^= seed >> 7;
    seed ^= seed << 17;
    uint64_t range = (uint64_t)(most[i] - least[i] + 1);
    return least[i] + (int64_t)(((seed >> 32) * range) >> 32);
}

typedef struct plain {
    int64_t now, left[MOST], released[MOST], start[MOST];
    int queued[MOST], preempted[MOST];
    uint64_t ready;
    int running;
    double done, response;
    int64_t preemptions;
} plain;

static inline void begin(plain *p, int r, int64_t released)
{
    p->released[r] = released;
    p->start[r] = -1;
    p->preempted[r] = 0;
    p->left[r] = draw(r);
}

// Execute until `until`.
static inline void execute(plain *p, int64_t until)
{
    while (p->ready != 0 && p->now < until) {
        int r = __builtin_ctzll(p->ready);
        if (r != p->running && p->running >= 0)
            p->preempted[p->running]++;
        p->running = r;
        if (p->start[r] < 0)
            p->start[r] = p->now;
        if (p->now + p->left[r] > until) {
            p->left[r] -= until - p->now;
            break;
        }
        p->now += p->left[r];
        p->running = -1;
        p->done += 1;
        p->response += (double)(p->now - p->released[r]);
        p->preemptions += p->preempted[r];
        if (p->queued[r] > 0) {
            p->queued[r]--;
            begin(p, r, p->released[r] + period[r]);
        } else {
            p->ready &= ~(UINT64_C(1) << r);
        }
    }
    p->now = until;
}

static inline void release(plain *p, int i, int64_t at)
{
    if (p->ready >> i & 1) {
        p->queued[i]++;
        return;
    }
    p->ready |= UINT64_C(1) << i;
    begin(p, i, at);
}

// Releases in descending order: the next is the last.
static double plain_sorted(long n)
{
    plain p = {.running = -1};
    uint64_t key[MOST];
    seed = 88172645463325252u;
    for (int i = 0; i < n_tasks; i++)
        key[i] = (uint64_t)(n_tasks - 1 - i);
    for (long k = 0; k < n; k++) {
        uint64_t next = key[n_tasks - 1];
        int i = (int)(next & 63), j = n_tasks - 2;
        execute(&p, (int64_t)(next >> 6));
        release(&p, i, p.now);
        uint64_t again = next + ((uint64_t)period[i] << 6);
        for (; j >= 0 && key[j] < again; j--)
            key[j + 1] = key[j];
        key[j + 1] = again;
    }
    return p.done;
}

static double plain_tree(long n)
{
    plain p = {.running = -1};
    uint64_t win[2 * MOST];
    seed = 88172645463325252u;
    for (int i = 0; i < MOST; i++)
        win[MOST + i] = i < n_tasks ? (uint64_t)i : UINT64_MAX;
    for (int i = MOST - 1; i > 0; i--)
        win[i] = win[2 * i] < win[2 * i + 1] ? win[2 * i] : win[2 * i + 1];
    for (long k = 0; k < n; k++) {
        int i = (int)(win[1] & 63), j = MOST + i;
        execute(&p, (int64_t)(win[1] >> 6));
        release(&p, i, p.now);
        win[j] += (uint64_t)period[i] << 6;
        for (j /= 2; j > 0; j /= 2)
            win[j] = win[2 * j] < win[2 * j + 1] ? win[2 * j] : win[2 * j + 1];
    }
    return p.done;
}

// ---- ours

static lw_run *run;
static lw_frozen *frozen;
static double jobs_per_ns;

static void build(void)
{
    static char name[MOST][8];
    lw_rig *rig = NULL;
    OK(lw_rig_new("bench", &rig, e));
    lw_core_def core = lw_core_default();
    core.name = "core";
    core.urgent = LW_URGENT_SMALLER;
    OK(lw_rig_add_core(rig, &core, e));
    jobs_per_ns = 0;
    for (int i = 0; i < n_tasks; i++) {
        lw_timing *takes = NULL;
        lw_task_def t = lw_task_default();
        snprintf(name[i], sizeof name[i], "t%d", i);
        OK(lw_timing_uniform((double)least[i] * 1e-9, (double)most[i] * 1e-9, &takes, e));
        t.name = name[i];
        t.on = "core";
        t.priority = i;
        t.is_priority = 1;
        t.takes = takes;
        t.every = lw_period_of_ticks(period[i] * 1000);
        t.queue = 8;
        OK(lw_rig_add_task(rig, &t, e));
        lw_timing_free(takes);
        jobs_per_ns += 1.0 / (double)period[i];
    }
    frozen = freeze_rig(rig, NULL, MS);
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
}

static double ours(long n)
{
    lw_run_restart(run, 1, 0);
    if (lw_run_advance(run, (lw_tick)((double)n / jobs_per_ns) * 1000) != LW_OK)
        exit(1);
    return (double)lw_run_n_instants(run, 0) / 2;
}

int main(void)
{
    static const int sizes[] = {3, 10, 50};
    for (int s = 0; s < 3; s++) {
        char name[16];
        make_tasks(sizes[s]);
        build();
        snprintf(name, sizeof name, "W7.%d", sizes[s]);
        bench_pair(name, 200000, ours, sizes[s] < 30 ? plain_sorted : plain_tree);
        lw_run_free(run);
        lw_frozen_free(frozen);
    }
    return 0;
}
