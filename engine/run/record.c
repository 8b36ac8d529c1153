// Records of signals at instants, and of the events of adcs, dacs and loops.
//
// Workload: one row an instant or event, appended to a table that grows by doubling up to the
// limit of its record: memory is bounded by limit * columns * 8 bytes a lane.
//
// Invariants
// 1. A row is complete or absent.

#include "run/record.h"

#include "base/alloc.h"

#include <string.h>

static lw_tick instant_of(const lw__record *r, int64_t k)
{
    if (r->n > 0)
        return k < r->n ? r->at[k] : LW_NEVER;
    lw_tick t = lw_period_at(r->every, r->from, k);
    return t <= r->until ? t : LW_NEVER;
}

lw_tick lw__record_first(const lw__record *r)
{
    return instant_of(r, 0);
}

void lw__table_add(lw__lane *s, int record, const double *row)
{
    const lw__record *r = &s->z->records[record];
    lw__table *t = &s->tables[record];
    if (t->n_rows == r->limit) {
        lw__end_lane(s, LW_ERR_CAPACITY, r->name, "the record is full; state a larger limit");
        return;
    }
    if (t->n_rows == t->room) {
        int64_t room = t->room == 0 ? 256 : 2 * t->room;
        room = room > r->limit ? r->limit : room;
        double *grown = lw__realloc(t->cell, sizeof(double) * (size_t)room * (size_t)r->n_columns);
        if (grown == NULL) {
            lw__end_lane(s, LW_ERR_MEMORY, r->name, "no memory for the record");
            return;
        }
        t->cell = grown;
        t->room = room;
    }
    memcpy(t->cell + t->n_rows * r->n_columns, row, sizeof(double) * (size_t)r->n_columns);
    t->n_rows++;
}

void lw__record_take(lw__lane *s, int record)
{
    const lw__record *r = &s->z->records[record];
    int W = s->width, L = s->lane;
    int64_t k = LW__I(r->count);
    if (r->moving != NULL && LW__I(r->moving->anchor) == s->now)
        lw__record_rest(s, record, s->now + 1);
    double value = r->moving == NULL ? lw__signal_value(s, &r->of) : 0;
    do {
        if (r->moving == NULL)
            lw__table_add(s, record, (double[]){lw_tick_seconds(s->now), value});
        k++;
    } while (instant_of(r, k) == s->now && s->status == LW_OK);
    LW__I(r->count) = k;
    LW__I(s->z->due + r->timer) = instant_of(r, k);
}

// ---- rows of a group with a motion

void lw__record_stretch(lw__lane *s, int record, const lw__stretch *stretch, lw_tick limit)
{
    const lw__record *r = &s->z->records[record];
    int W = s->width, L = s->lane, degree = -1;
    int64_t k = LW__I(r->served);
    double c[LW__POLY_MAX + 1], length = stretch->end - stretch->begin;
    for (lw_tick at; s->status == LW_OK && (at = instant_of(r, k)) < limit; k++) {
        double since = lw_tick_seconds(at - stretch->anchor);
        if (!(since < stretch->end)) // at the end of a stretch: the next one begins with it
            break;
        if (degree < 0)
            degree = stretch->row(stretch, r->of.at.part, c);
        double in = since > stretch->begin ? (since - stretch->begin) / length : 0;
        lw__table_add(s, record, (double[]){lw_tick_seconds(at), lw__poly_value(degree, c, in)});
    }
    LW__I(r->served) = k;
}

void lw__record_rest(lw__lane *s, int record, lw_tick limit)
{
    const lw__record *r = &s->z->records[record];
    int W = s->width, L = s->lane;
    int64_t k = LW__I(r->served);
    double value = 0;
    if (instant_of(r, k) < limit)
        value = lw__signal_value(s, &r->of);
    for (lw_tick at; s->status == LW_OK && (at = instant_of(r, k)) < limit; k++)
        lw__table_add(s, record, (double[]){lw_tick_seconds(at), value});
    LW__I(r->served) = k;
}
