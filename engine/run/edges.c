// Edges of encoders, compiled once for any width.
//
//   search  phase 8, after any change of the group: the next edge above or below
//   come    phase 0: the count changes, the edge gets its stamp
//
// Workload: an operation an edge and one a change of the group; two searches each.
//
// Invariants
// 1. The count is the floor of the angle in counts: the same edges both ways. Edge k lies between
//    counts k - 1 and k, so that an edge passed there and back is no way gone.
// 2. Stamps are whole periods of the stamping clock, at or before the edge.
// 3. Only the edges' own cells and timer change.

#include "run/edges.h"

#include "run/definition.h"
#include "run/op_group.h"

#include <math.h>

#define QUICK 1000      // ticks: an edge so soon after one the other way is no motion
#define MOST_QUICK 1000 // of these in a row

// ---- freezing

static lw_status edges_cells(lw__freezer *w, lw__edges *e)
{
    const char *name = e->name;
    e->span = lw__freezer_double(w, name, "time between edges", LW_SLICE_HELD, 1);
    e->steps = lw__freezer_double(w, name, "counts between them", LW_SLICE_HELD, 1);
    e->last = lw__freezer_double(w, name, "last edge", LW_SLICE_HELD, 1);
    e->count = lw__freezer_integer(w, name, "count", LW_SLICE_HELD, 1);
    e->known = lw__freezer_integer(w, name, "count is known", LW_SLICE_SCHEDULE, 1);
    e->direction = lw__freezer_integer(w, name, "direction of the next edge", LW_SLICE_SCHEDULE, 1);
    e->stamps = lw__freezer_integer(w, name, "stamps of edges", LW_SLICE_HELD, e->n + 1);
    e->places = lw__freezer_integer(w, name, "places of edges", LW_SLICE_HELD, e->n + 1);
    e->n_edges = lw__freezer_integer(w, name, "edges", LW_SLICE_HELD, 1);
    e->edge_at = lw__freezer_integer(w, name, "tick of the last edge", LW_SLICE_SCHEDULE, 1);
    e->quick = lw__freezer_integer(w, name, "quick edges in a row", LW_SLICE_SCHEDULE, 1);
    return e->quick >= 0 ? LW_OK : LW_ERR_MEMORY;
}

lw_status lw__freeze_edges_cells(lw__freezer *w)
{
    lw_frozen *z = w->z;
    z->n_edges = w->rig->n_edges;
    z->edges = lw__freezer_get(w, sizeof *z->edges * (size_t)(z->n_edges + 1));
    if (z->edges == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < z->n_edges; i++) {
        lw__edges *e = &z->edges[i];
        e->item = &w->rig->edges[i];
        e->name = e->item->def.name;
        e->adc = &z->adcs[e->item->adc];
        e->n = e->item->def.speed_edges;
        LW__TRY(edges_cells(w, e));
    }
    return LW_OK;
}

lw_status lw__freeze_edges(lw__freezer *w)
{
    for (int i = 0; i < w->z->n_edges; i++) {
        lw__edges *e = &w->z->edges[i];
        const lw_encoder_def *def = &e->item->def;
        lw__reference angle, zero = {{LW__SIGNAL_CONSTANT, 0, 0}, def->zero};
        LW__TRY(lw__freezer_signal(w, def->origin, "encoder", def->name, "of", def->of, &angle));
        if (angle.at.kind != LW__SIGNAL_ROW)
            return lw__fail_at(
                def->origin, w->err, LW_ERR_ARGUMENT,
                "encoder \"%s\": of: \"%s\" is no signal of a plant; a speed by time "
                "wants one, whose edges can be found between samples",
                def->name, def->of);
        LW__TRY(lw__condition_make(w, &angle, &zero, &e->condition));
        e->per_count = def->turn / def->counts;
        e->timer = lw__freezer_timer(w);
    }
    return LW_OK;
}

void lw__edges_start(lw__lane *s)
{
    int W = s->width, L = s->lane;
    for (int i = 0; i < s->z->n_edges; i++)
        LW__I(s->z->due + s->z->edges[i].timer) = 0;
}

// ---- operations

static lw__crossing next_edge(const lw__lane *s, const lw__edges *e, int side, int64_t count)
{
    double at = (double)(side > 0 ? count + 1 : count) * e->per_count;
    lw__question ask = {.side = side,
                        .offset = at,
                        .from = s->now + 1,
                        .until = lw__group_next(s, e->condition.group)};
    return lw__crossing_next(s, &e->condition, &ask);
}

void lw__edges_search(LW__CONTEXT, const lw__edges *e)
{
    (void)p;
    (void)N;
    int64_t count = LW__I(e->count);
    lw__crossing up = next_edge(s, e, 1, count), down = next_edge(s, e, -1, count);
    int falls = down.tick < up.tick || (down.tick == up.tick && down.since < up.since);
    LW__I(e->direction) = falls ? -1 : 1;
    LW__I(s->z->due + e->timer) = falls ? down.tick : up.tick;
}

static lw_tick stamp_of(const lw__lane *s, const lw__edges *e)
{
    lw_period clock = e->item->def.edge_clock;
    if (clock.num == 0)
        return s->now;
    int64_t k = lw_period_index(clock, 0, s->now);
    lw_tick at = lw_period_at(clock, 0, k);
    return at > s->now ? lw_period_at(clock, 0, k - 1) : at;
}

static void count_quick(lw__lane *s, const lw__edges *e, int64_t place, int W, int L)
{
    int again = LW__I(e->n_edges) > 0 && LW__I(e->places) == place;
    int quick = again && s->now - LW__I(e->edge_at) <= QUICK;
    LW__I(e->quick) = quick ? LW__I(e->quick) + 1 : 0;
    LW__I(e->edge_at) = s->now;
    if (LW__I(e->quick) >= MOST_QUICK)
        lw__end_lane(s, LW_ERR_CHATTER, e->name,
                     "goes back and forth over one edge 1000 times in a row, each within 1 ns");
}

static void take_stamp(lw__lane *s, const lw__edges *e, int64_t place, int W, int L)
{
    for (int k = e->n; k > 0; k--) {
        LW__I(e->stamps + k) = LW__I(e->stamps + k - 1);
        LW__I(e->places + k) = LW__I(e->places + k - 1);
    }
    LW__I(e->stamps) = stamp_of(s, e);
    LW__I(e->places) = place;
    LW__I(e->n_edges) += 1;
    LW__F(e->last) = lw__seconds(LW__I(e->stamps));
    if (LW__I(e->n_edges) <= e->n)
        return;
    LW__F(e->steps) = (double)(place - LW__I(e->places + e->n));
    LW__F(e->span) = lw__seconds(LW__I(e->stamps) - LW__I(e->stamps + e->n));
}

void lw__edges_come(LW__CONTEXT, const lw__edges *e)
{
    LW__I(s->z->due + e->timer) = LW_NEVER;
    lw__make_due(p, e->search_op, N);
    if (LW__I(e->known) == 0) {
        LW__I(e->known) = 1;
        LW__I(e->count) = (int64_t)floor(lw__condition_value(s, &e->condition) / e->per_count);
        return;
    }
    int direction = (int)LW__I(e->direction);
    move_anchor(s, e->condition.group, W, L);
    lw__tell(p, &e->condition.group->observers, N);
    int64_t place = LW__I(e->count) + (direction > 0 ? 1 : 0);
    LW__I(e->count) += direction;
    count_quick(s, e, place, W, L);
    take_stamp(s, e, place, W, L);
    lw__tell(p, &e->observers, N);
}
