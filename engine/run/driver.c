// The queue driver. Only a driver knows what is next; operations say what becomes due.
//
//   next tick = least timer
//   due       = operations of the timers at that tick
//   passes    : take the lowest operation due, again and again; operations that become due at or
//               before the one at work wait for the next pass (only phases 3 to 7 can)
//   observers : phase 8, once, after the last pass
//
// Phases: 0 anchors and sources, 1 completions (conversions, points of jobs, arrivals, delayed
// changes, laws after a conversion that took time), 2 latches, 3 samples, 4 conversions without
// length, 5 releases, 6 dispatch, 7 laws and points of jobs without work before them, 8 observers.
//
// Workload: a few timers (below 20) and a few operations an instant. Timers are looked through in
// a row: for so few that beats any tree. Operations are inlined here, once for each context.
//
// Invariants
// 1. Simultaneous operations run in the order of their numbers, pass by pass.
// 2. Between instants no operation is due.
// 3. An operation changes cells of the thing it serves, of what that drives, and timers; nothing
//    else. Records and metrics only read.
// 4. What an operation does depends on cells, the frozen rig and the present tick only.

#include "run/driver.h"
#include "run/comparator.h"
#include "run/dash.h"
#include "run/edges.h"

#include "run/op_adc.h"
#include "run/op_cpu.h"
#include "run/op_dac.h"
#include "run/op_group.h"
#include "run/op_loop.h"
#include "run/op_signal.h"
#include "run/op_source.h"
#include "run/pwm.h"
#include "run/record.h"
#include "run/sprint.h"
#include "run/track.h"

#include <string.h>

// The least timer; with one word a set, also the operations of the timers that stand there.
LW__INLINE lw_tick look_ahead(const lw__lane *s, lw__pass *p, int W, int L, int N)
{
    const lw_frozen *z = s->z;
    lw_tick least = LW_NEVER;
    uint64_t bits = 0;
    for (int k = 0; k < z->n_timers; k++) {
        lw_tick t = LW__I(z->due + k);
        if (N == 1) {
            uint64_t own = z->timer_ops[k].first;
            bits = t < least ? own : t == least ? bits | own : bits;
        }
        least = t < least ? t : least;
    }
    p->due = bits;
    return least;
}

static void collect_due(const lw__lane *s, lw__pass *p, int W, int L, int N)
{
    for (int k = 0; k < s->z->n_timers; k++)
        if (LW__I(s->z->due + k) == s->now)
            lw__tell(p, &s->z->timer_ops[k], N);
}

// Take the lowest operation due that is not held back; -1 if there is none.
LW__INLINE int take_lowest(lw__pass *p, const lw__set *held_back, int N)
{
    if (N == 1) {
        uint64_t bits = p->due & ~held_back->first;
        p->due &= ~(bits & -bits);
        return bits != 0 ? __builtin_ctzll(bits) : -1;
    }
    for (int w = 0; w < N; w++) {
        uint64_t bits = p->due_words[w] & ~held_back->words[w];
        if (bits != 0) {
            p->due_words[w] &= ~(bits & -bits);
            return w * 64 + __builtin_ctzll(bits);
        }
    }
    return -1;
}

LW__INLINE void perform(LW__CONTEXT, int op)
{
    const lw__op *o = &s->z->ops[op];
    p->op = op;
    switch (o->kind) {
    case LW__OP_ANCHOR:
        op_anchor(LW__HERE, o->thing);
        return;
    case LW__OP_TURN:
        op_turn(LW__HERE, o->thing, o->part);
        return;
    case LW__OP_SOURCE:
        op_source(LW__HERE, o->thing);
        return;
    case LW__OP_CONVERT:
        op_convert(LW__HERE, o->thing);
        return;
    case LW__OP_ARRIVE:
        op_arrive(LW__HERE, o->thing);
        return;
    case LW__OP_DELAYED:
        op_delayed(LW__HERE, o->thing, o->part);
        return;
    case LW__OP_STEP:
        op_step(LW__HERE, o->thing);
        return;
    case LW__OP_LATCH:
        op_latch(LW__HERE, o->thing);
        return;
    case LW__OP_PWM_STRETCH:
        lw__pwm_stretch(LW__HERE, o->thing);
        return;
    case LW__OP_PWM_EDGE:
        lw__pwm_edge(LW__HERE, o->thing);
        return;
    case LW__OP_PWM_WRITTEN:
        lw__pwm_written(LW__HERE, o->thing);
        return;
    case LW__OP_SAMPLE:
        op_sample(LW__HERE, o->thing);
        return;
    case LW__OP_CROSS:
        lw__event_cross(LW__HERE, o->thing);
        return;
    case LW__OP_EDGE:
        lw__event_edge(LW__HERE, o->thing);
        return;
    case LW__OP_COUNT:
        lw__edges_come(LW__HERE, o->thing);
        return;
    case LW__OP_COUNT_SEARCH:
        lw__edges_search(LW__HERE, o->thing);
        return;
    case LW__OP_TRIP:
        lw__event_trip(LW__HERE, o->thing);
        return;
    case LW__OP_RELEASE_TRIP:
        lw__event_release(LW__HERE, o->thing);
        return;
    case LW__OP_LATCH_TRIP:
        lw__event_latch(LW__HERE, o->thing);
        return;
    case LW__OP_PWM_SEARCH:
        lw__pwm_search(LW__HERE, o->thing);
        return;
    case LW__OP_SEARCH:
        lw__event_search(LW__HERE, o->thing);
        return;
    case LW__OP_LOGICAL:
        op_logical(LW__HERE, o->thing);
        return;
    case LW__OP_WRITES:
        op_writes(LW__HERE, o->thing);
        return;
    case LW__OP_READS:
        op_reads(LW__HERE, o->thing);
        return;
    case LW__OP_RELEASES:
        op_releases(LW__HERE, o->thing);
        return;
    case LW__OP_RELEASE:
        op_release(LW__HERE, o->thing);
        return;
    case LW__OP_DISPATCH:
        op_dispatch(LW__HERE, o->thing);
        return;
    case LW__OP_READ:
        op_read(LW__HERE, o->thing);
        return;
    case LW__OP_POINTS:
        op_points(LW__HERE, o->thing);
        return;
    case LW__OP_TRACK:
        lw__track_update(s, o->index);
        return;
    case LW__OP_RECORD:
        lw__record_take(s, o->index);
        return;
    }
}

// Move what waited for the next pass into the present one; 0 if nothing did.
LW__INLINE int next_pass(lw__pass *p, int N)
{
    uint64_t any = p->next;
    p->due |= p->next;
    p->next = 0;
    for (int w = 0; N > 1 && w < N; w++) {
        any |= p->next_words[w];
        p->due_words[w] |= p->next_words[w];
        p->next_words[w] = 0;
    }
    return any != 0;
}

static void begin_sets(lw__pass *p, int N)
{
    memset(p->due_words, 0, sizeof(uint64_t) * (size_t)N);
    memset(p->next_words, 0, sizeof(uint64_t) * (size_t)N);
}

// All operations of the present tick.
LW__INLINE void instant(LW__CONTEXT)
{
    const lw_frozen *z = s->z;
    int passes = 0;
    do {
        for (int op; s->status == LW_OK && (op = take_lowest(p, &z->phase_8, N)) >= 0;)
            perform(LW__HERE, op);
        if (++passes > LW__MAX_PASSES)
            lw__end_lane(s, LW_ERR_PASSES, z->name, "work goes on and on at one instant");
    } while (s->status == LW_OK && next_pass(p, N));
    for (int op; s->status == LW_OK && (op = take_lowest(p, &z->no_ops, N)) >= 0;)
        perform(LW__HERE, op);
    p->op = -1;
}

// Cores whose next instants are theirs alone go on by themselves.
LW__INLINE int64_t dash_all(lw__lane *s, lw_tick until)
{
    int64_t handled = 0;
    for (int i = 0; i < s->z->n_cores; i++)
        if (s->z->cores[i].quick != 0)
            handled += lw__dash_run(s, &s->z->cores[i], until);
    return handled;
}

LW__INLINE int64_t drive_lane(lw__lane *s, lw_tick until, int W, int L, int N)
{
    lw__pass own = {.due_words = s->due, .next_words = s->next, .op = -1}, *p = &own;
    int64_t handled = 0;
    begin_sets(p, s->z->n_words);
    while (s->status == LW_OK) {
        if (N == 1 && W == 1 && s->z->sprint != NULL)
            handled += lw__sprint_run(s, s->z->sprint, until);
        if (W == 1)
            handled += dash_all(s, until);
        lw_tick next = s->status == LW_OK ? look_ahead(s, p, W, L, N) : LW_NEVER;
        if (s->status != LW_OK)
            break;
        if (next > until) {
            s->now = until;
            break;
        }
        s->now = next;
        if (N != 1)
            collect_due(s, p, W, L, N);
        instant(LW__HERE);
        handled++;
    }
    LW__I(s->z->now) = s->now;
    return handled;
}

int64_t lw__drive_lane(lw__lane *s, lw_tick until)
{
    int n = s->z->n_words;
    if (s->width == 1 && n == 1)
        return drive_lane(s, until, 1, 0, 1);
    if (s->width == 1)
        return drive_lane(s, until, 1, 0, n);
    return drive_lane(s, until, s->width, s->lane, n);
}
