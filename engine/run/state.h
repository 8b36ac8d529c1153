// The mutable side of a run: the block, and what an operation sees of it.
//
// Operations are written once and compiled three times by the driver: for one run and at most 64
// operations (a cell is its offset, a set is one word in a register), for one run, and for any
// width. Hence the context every operation is inlined with: lane s, pass p, width W, lane number
// L, words of a set N.
#ifndef LATEWOOD_RUN_STATE_H
#define LATEWOOD_RUN_STATE_H

#include "run/frozen.h"

typedef struct lw__table {
    double *cell; // rows x columns
    int64_t n_rows, room;
} lw__table;

// One lane of a block.
typedef struct lw__lane {
    const lw_frozen *z;
    double *f;  // doubles of the block
    int64_t *i; // integers of the block
    int width, lane;
    lw_tick now;
    uint64_t seed, run;
    uint64_t *due, *next; // sets of a pass where one word is too small
    double *work;         // scratch doubles
    double *motion_work;  // and those of motions: observers use `work` while a group moves
    int64_t *ticks;       // scratch for a list of input changes: ticks, then channels
    lw__table *tables;    // records of this lane
    // why the lane ended
    lw_status status;
    const char *what; // the thing concerned
    const char *text; // in words
} lw__lane;

// Scratch: what forming a group's state takes stands first, results may stand behind it.
#define LW__WORK_BEHIND(z) (6 * (z)->most_x + 3 * (z)->most_u + 2 * LW__LIST_CAPACITY)
#define LW__WORK(z) (2 * LW__WORK_BEHIND(z) + 4 * LW_LAW_MAX_STATES)

// Operations due in this pass and in the next one.
typedef struct lw__pass {
    uint64_t due, next;
    uint64_t *due_words, *next_words;
    int op; // at work; -1 outside
} lw__pass;

#define LW__INLINE static inline __attribute__((always_inline))
#define LW__CONTEXT lw__lane *s, lw__pass *p, int W, int L, int N
#define LW__HERE s, p, W, L, N

// Cells by offset.
#define LW__F(offset) (s->f[(int64_t)(offset)*W + L])
#define LW__I(offset) (s->i[(int64_t)(offset)*W + L])

LW__INLINE double lw__seconds(lw_tick t)
{
    return (double)t / 1e12;
}

// Instant k of a grid.
LW__INLINE lw_tick lw__grid_at(lw_period period, lw_tick offset, int64_t k)
{
    if (period.den == 1 && k < LW_TICK_MAX / period.num)
        return offset + k * period.num;
    return lw_period_at(period, offset, k);
}

// Sets of more than one word, apart: these are not worth inlining everywhere.
void lw__words_make_due(lw__pass *p, int op);
void lw__words_make_all_due(lw__pass *p, const lw__set *set, int N);
void lw__words_tell(lw__pass *p, const lw__set *observers, int N);

// Make one operation due; at or before the one at work it waits for the next pass.
LW__INLINE void lw__make_due(lw__pass *p, int op, int N)
{
    uint64_t bit = UINT64_C(1) << (op & 63);
    if (N != 1) {
        lw__words_make_due(p, op);
        return;
    }
    p->due |= op > p->op ? bit : 0;
    p->next |= op > p->op ? 0 : bit;
}

// Make a set due, likewise.
LW__INLINE void lw__make_all_due(lw__pass *p, const lw__set *set, int N)
{
    if (N != 1) {
        lw__words_make_all_due(p, set, N);
        return;
    }
    uint64_t later = ~UINT64_C(1) << p->op; // p->op is at least 0 here
    p->due |= set->first & later;
    p->next |= set->first & ~later;
}

// Observers come after everything else, so they are always later.
LW__INLINE void lw__tell(lw__pass *p, const lw__set *observers, int N)
{
    if (N != 1)
        lw__words_tell(p, observers, N);
    else
        p->due |= observers->first;
}

LW__INLINE void lw__end_lane(lw__lane *s, lw_status status, const char *what, const char *text)
{
    if (s->status != LW_OK)
        return;
    s->status = status;
    s->what = what;
    s->text = text;
}

// Put a lane at time zero.
void lw__lane_start(lw__lane *s);
// State and present output of a group or signal, for readers that change nothing.
void lw__group_state(const lw__lane *s, int group, double *x, double *u);
double lw__signal_value(const lw__lane *s, const lw__reference *r);
// An output of a dac that has `gaps`.
void lw__dac_changed(lw__lane *s, const lw__dac *d);
// One row to a record; a full record ends the lane.
void lw__table_add(lw__lane *s, int record, const double *row);

#endif
