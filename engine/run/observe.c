// Those who follow a group that has a motion: its stretches go to tracks and records.
//
// Workload: one call an accepted step and watcher; a row's coefficients are formed once for all
// record instants inside.
//
// Invariants
// 1. Watchers write their own cells and tables only.
// 2. A record's rows are in order of time; those between two own events come at the later one.

#include "run/motion.h"
#include "run/record.h"
#include "run/track.h"

void lw__observe(lw__lane *s, const lw__stretch *stretch, lw_tick limit)
{
    const lw__group *g = stretch->group;
    for (int k = 0; k < g->n_watchers; k++)
        if (g->watchers[k].is_record)
            lw__record_stretch(s, g->watchers[k].index, stretch, limit);
        else
            lw__track_stretch(s, g->watchers[k].index, stretch);
}

void lw__observed(lw__lane *s, const lw__group *g, lw_tick limit)
{
    for (int k = 0; k < g->n_watchers; k++)
        if (g->watchers[k].is_record)
            lw__record_rest(s, g->watchers[k].index, limit);
        else
            lw__track_done(s, g->watchers[k].index);
}

static void take_last(void *context, const lw__stretch *stretch)
{
    lw__lane *s = context;
    lw__observe(s, stretch, s->now + 1);
}

void lw__observe_end(lw__lane *s)
{
    int W = s->width, L = s->lane;
    for (int i = 0; i < s->z->n_groups && s->status == LW_OK; i++) {
        const lw__group *g = &s->z->groups[i];
        if (g->motion == NULL || g->n_watchers == 0)
            continue;
        lw_tick at = s->now;
        const char *text = "";
        lw_status status = LW_OK;
        if (LW__I(g->anchor) < s->now)
            status = g->motion->look(s, g, take_last, s, &at, &text);
        if (status != LW_OK)
            lw__end_lane_at(s, at, status, g->name, text);
        else
            lw__observed(s, g, s->now + 1);
    }
}
