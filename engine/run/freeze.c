// Freezing a rig: validate the whole, resolve names, reserve cells, order the operations.
//
// Workload: once a point of a sweep; below 1 ms for a small rig.
//
// Invariants
// 1. Nothing global is touched; all memory is one arena of the frozen rig.
// 2. The order of operations is phase, kind, place of declaration: never order of insertion.
// 3. Timers of observers come after those of the model, so that observing renumbers none.

#include "run/freeze.h"

#include "run/comparator.h"
#include "run/edges.h"
#include "run/freezer.h"
#include "run/pwm.h"
#include "run/schedule.h"
#include "run/white.h"

#include <stdint.h>

static lw_status begin_frozen(lw__freezer *w, lw_tick lasts)
{
    w->arena = lw__arena_new();
    if (w->arena == NULL)
        return lw__freezer_no_memory(w);
    lw_frozen *z = lw__arena_get(w->arena, sizeof *z);
    if (z == NULL)
        return lw__freezer_no_memory(w);
    const lw_rig *rig = w->rig;
    *z = (lw_frozen){.references = 1, .arena = w->arena, .name = rig->name, .lasts = lasts};
    w->z = z;
    z->n_plants = rig->n_plants;
    z->n_sources = rig->n_sources;
    z->n_values = rig->n_values;
    z->n_adcs = rig->n_adcs;
    z->n_dacs = rig->n_dacs;
    z->n_loops = rig->n_loops;
    z->n_cores = rig->n_cores;
    z->n_tasks = rig->n_tasks;
    z->n_comparators = rig->n_comparators;
    z->n_trips = rig->n_trips;
    z->n_pwms = rig->n_pwms;
    z->plants = lw__freezer_get(w, sizeof *z->plants * (size_t)(z->n_plants + 1));
    z->sources = lw__freezer_get(w, sizeof *z->sources * (size_t)(z->n_sources + 1));
    z->values = lw__freezer_get(w, sizeof *z->values * (size_t)(z->n_values + 1));
    z->adcs = lw__freezer_get(w, sizeof *z->adcs * (size_t)(z->n_adcs + 1));
    z->dacs = lw__freezer_get(w, sizeof *z->dacs * (size_t)(z->n_dacs + 1));
    z->loops = lw__freezer_get(w, sizeof *z->loops * (size_t)(z->n_loops + 1));
    z->cores = lw__freezer_get(w, sizeof *z->cores * (size_t)(z->n_cores + 1));
    z->tasks = lw__freezer_get(w, sizeof *z->tasks * (size_t)(z->n_tasks + 1));
    z->comparators = lw__freezer_get(w, sizeof *z->comparators * (size_t)(z->n_comparators + 1));
    z->trips = lw__freezer_get(w, sizeof *z->trips * (size_t)(z->n_trips + 1));
    z->pwms = lw__freezer_get(w, sizeof *z->pwms * (size_t)(z->n_pwms + 1));
    if (!z->comparators || !z->trips || !z->pwms)
        return LW_ERR_MEMORY;
    if (!z->plants || !z->sources || !z->values || !z->adcs || !z->dacs || !z->loops || !z->cores ||
        !z->tasks)
        return LW_ERR_MEMORY;
    z->now = lw__freezer_integer(w, rig->name, "now", LW_SLICE_SCHEDULE, 1);
    return z->now >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status place_plants(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_plants; i++)
        z->plants[i] =
            (lw__plant_place){w->rig->plants[i].name, lw_plant_look(w->rig->plants[i].plant),
                              w->group_of[i], w->first_row[i], w->first_state[i]};
    for (int g = 0; g < z->n_groups; g++) {
        z->most_x = z->groups[g].n_x > z->most_x ? z->groups[g].n_x : z->most_x;
        z->most_u = z->groups[g].n_u > z->most_u ? z->groups[g].n_u : z->most_u;
    }
    return LW_OK;
}

static lw_status freeze_parts(lw__freezer *w)
{
    LW__TRY(lw__freeze_plants(w));
    LW__TRY(place_plants(w));
    LW__TRY(lw__freeze_clocks(w));
    LW__TRY(lw__freeze_event_cells(w));
    LW__TRY(lw__freeze_pwm_cells(w));
    LW__TRY(lw__freeze_edges_cells(w));
    LW__TRY(lw__freeze_converters(w));
    LW__TRY(lw__freeze_pwms(w));
    LW__TRY(lw__freeze_loops(w));
    LW__TRY(lw__freeze_cores(w));
    LW__TRY(lw__freeze_events(w));
    LW__TRY(lw__freeze_edges(w));
    LW__TRY(lw__freeze_white(w));
    LW__TRY(lw__freeze_streams(w));
    lw__freeze_anchors(w);
    LW__TRY(lw__freeze_watch(w));
    return lw__freeze_order(w);
}

lw_status lw_rig_freeze(const lw_rig *rig, const lw_watch *watch, lw_tick lasts, lw_frozen **out,
                        lw_error *err)
{
    return lw__freeze(rig, watch, lasts, 0, out, err);
}

lw_status lw__freeze(const lw_rig *rig, const lw_watch *watch, lw_tick lasts, int general,
                     lw_frozen **out, lw_error *err)
{
    if (lasts < 0 || lasts > LW_TICK_MAX)
        return lw_error_set(err, LW_ERR_TIME, "lasts is %.12g s; permitted 0 to 9e6 s",
                            lw_tick_seconds(lasts));
    lw__freezer w = {.rig = rig, .watch = watch, .err = err, .general = general};
    lw_status status = begin_frozen(&w, lasts);
    if (status == LW_OK)
        status = freeze_parts(&w);
    if (status != LW_OK) {
        lw__arena_free(w.arena);
        return status;
    }
    // the rig is held for its laws, timings and names; only its count changes
    w.z->rig = lw_rig_hold((lw_rig *)(uintptr_t)rig);
    *out = w.z;
    return LW_OK;
}

lw_frozen *lw_frozen_hold(lw_frozen *frozen)
{
    frozen->references++;
    return frozen;
}

void lw_frozen_free(lw_frozen *frozen)
{
    if (frozen == NULL || --frozen->references > 0)
        return;
    lw_rig *rig = frozen->rig;
    lw__arena_free(frozen->arena);
    lw_rig_free(rig);
}

lw_tick lw_frozen_lasts(const lw_frozen *frozen)
{
    return frozen->lasts;
}

int lw_frozen_n_slices(const lw_frozen *frozen)
{
    return frozen->n_slices;
}

lw_slice lw_frozen_slice(const lw_frozen *frozen, int index)
{
    return frozen->slices[index];
}
