// Runs: a block of state, the lanes over it, and what is read of them.
//
// Invariants
// 1. Everything that decides how a run goes on is in the block; seed and run number are fixed for
//    a run and stand beside it.
// 2. A lane that ended stays as it was at its last operation.

#include "run/comparator.h"
#include "run/driver.h"
#include "run/edges.h"
#include "run/job_metric.h"
#include "run/motion.h"
#include "run/pwm.h"
#include "run/record.h"
#include "run/schedule.h"
#include "run/track.h"

#include "base/alloc.h"
#include "io/source.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

struct lw_run {
    lw_frozen *z;
    int width, finished;
    uint64_t seed, first_run;
    size_t block_size;
    void *block;
    lw__lane *lanes;
    lw__table *tables; // width x n_records
    int64_t *instants;
    uint64_t *sets;
    double *work, *motion_work;
    int64_t *ticks;
};

// ---- time zero

static void start_plants(lw__lane *s, int W, int L)
{
    const lw_frozen *z = s->z;
    for (int i = 0; i < z->n_groups; i++) {
        const lw__group *g = &z->groups[i];
        for (int k = 0; k < g->n_x; k++)
            LW__F(g->x + k) = g->start[k];
        for (int k = 0; k < g->n_u; k++)
            LW__F(g->u_anchor + k) = LW__F(g->u_now + k) = g->u_start[k];
        LW__I(g->count) = g->first;
        if (g->timer >= 0)
            LW__I(z->due + g->timer) = lw_period_at(g->grid, g->grid_offset, g->first);
        for (int k = 0; k < g->n_generators; k++)
            LW__I(z->due + g->generators[k].timer) = lw__source_change(g->generators[k].def, 0);
        if (g->motion != NULL)
            g->motion->start(s, g);
    }
}

static void start_converters(lw__lane *s, int W, int L)
{
    const lw_frozen *z = s->z;
    for (int i = 0; i < z->n_sources; i++) {
        const lw__source *src = &z->sources[i];
        LW__F(src->held) = lw__source_first(&src->item->def);
        if (src->timer >= 0)
            LW__I(z->due + src->timer) = lw__source_change(&src->item->def, 0);
    }
    for (int i = 0; i < z->n_values; i++) {
        LW__F(z->values[i].held) = z->values[i].start;
        LW__I(z->values[i].job) = -1;
    }
    for (int i = 0; i < z->n_adcs; i++) {
        const lw__adc *a = &z->adcs[i];
        for (int c = 0; c < a->n_channels; c++) {
            LW__F(a->value + c) = a->item->def.start;
            LW__F(a->input + c) = LW__F(a->code + c) = (double)NAN;
        }
        if (a->has_clock)
            LW__I(z->due + a->timer) = a->offset;
    }
    for (int i = 0; i < z->n_dacs; i++) {
        const lw__dac *d = &z->dacs[i];
        LW__F(d->asked) = LW__F(d->limited) = LW__F(d->held) = d->item->def.start;
        LW__F(d->code) = (double)NAN;
        LW__I(d->job) = -1;
        LW__I(d->sampled) = -1;
        if (d->timer >= 0)
            LW__I(z->due + d->timer) = d->latch_offset + d->phase[0];
    }
}

static void start_pwms(lw__lane *s)
{
    for (int i = 0; i < s->z->n_pwms; i++)
        lw__pwm_start(s, &s->z->pwms[i]);
}

static void start_loops(lw__lane *s, int W, int L)
{
    const lw_frozen *z = s->z;
    for (int i = 0; i < z->n_loops; i++) {
        const lw__loop *l = &z->loops[i];
        for (int k = 0; k < l->law->n_state; k++)
            LW__F(l->state + k) = l->law->start != NULL ? l->law->start[k] : 0;
        LW__I(l->stepped_at) = -1;
    }
    for (int i = 0; i < z->n_records; i++)
        if (z->records[i].is_signal)
            LW__I(z->due + z->records[i].timer) = lw__record_first(&z->records[i]);
    for (int i = 0; i < z->n_tracks; i++)
        LW__I(z->due + z->tracks[i].timer) = z->tracks[i].from;
    for (int i = 0; i < z->n_metrics; i++)
        if (z->metrics[i].task >= 0 || z->metrics[i].dac >= 0)
            lw__job_metric_start(s, &z->metrics[i]);
        else
            lw__metric_start(s, &z->metrics[i]);
}

void lw__lane_start(lw__lane *s)
{
    int W = s->width, L = s->lane;
    for (int k = 0; k < s->z->n_f; k++)
        LW__F(k) = 0;
    for (int k = 0; k < s->z->n_i; k++)
        LW__I(k) = 0;
    for (int k = 0; k < s->z->n_timers; k++)
        LW__I(s->z->due + k) = LW_NEVER;
    s->now = 0;
    s->status = LW_OK;
    start_plants(s, W, L);
    start_converters(s, W, L);
    start_pwms(s);
    start_loops(s, W, L);
    lw__cores_start(s);
    lw__events_start(s);
    lw__edges_start(s);
}

// ---- runs

void lw_run_free(lw_run *run)
{
    if (run == NULL)
        return;
    for (int k = 0; run->tables != NULL && k < run->width * run->z->n_records; k++)
        lw__free(run->tables[k].cell);
    lw__free(run->tables);
    lw__free(run->block);
    lw__free(run->lanes);
    lw__free(run->instants);
    lw__free(run->sets);
    lw__free(run->work);
    lw__free(run->motion_work);
    lw__free(run->ticks);
    lw_frozen_free(run->z);
    lw__free(run);
}

static void set_lanes(lw_run *run)
{
    const lw_frozen *z = run->z;
    size_t words = (size_t)z->n_words;
    for (int k = 0; k < run->width; k++)
        run->lanes[k] = (lw__lane){.z = z,
                                   .f = (double *)run->block,
                                   .i = (int64_t *)run->block + (size_t)z->n_f * (size_t)run->width,
                                   .width = run->width,
                                   .lane = k,
                                   .due = run->sets + 2 * words * (size_t)k,
                                   .next = run->sets + 2 * words * (size_t)k + words,
                                   .work = run->work,
                                   .motion_work = run->motion_work,
                                   .ticks = run->ticks,
                                   .tables = run->tables + (size_t)k * (size_t)z->n_records};
}

static int get_memory(lw_run *run)
{
    const lw_frozen *z = run->z;
    size_t width = (size_t)run->width;
    run->block_size = 8 * width * (size_t)(z->n_f + z->n_i);
    run->block = lw__alloc(run->block_size);
    run->lanes = lw__alloc(sizeof *run->lanes * width);
    run->tables = lw__alloc(sizeof *run->tables * (width * (size_t)z->n_records + 1));
    run->instants = lw__alloc(sizeof *run->instants * width);
    run->sets = lw__alloc(sizeof *run->sets * 2 * width * (size_t)z->n_words);
    run->work = lw__alloc(sizeof(double) * (size_t)LW__WORK(z));
    run->motion_work = lw__alloc(sizeof(double) * (size_t)(z->motion_work + 1));
    run->ticks = lw__alloc(sizeof *run->ticks * 2 * LW__LIST_CAPACITY);
    return run->block && run->lanes && run->tables && run->instants && run->sets && run->work &&
           run->motion_work && run->ticks;
}

lw_status lw_run_new(lw_frozen *frozen, int width, uint64_t seed, uint64_t first_run, lw_run **out,
                     lw_error *err)
{
    if (width < 1 || width > LW_RUN_MAX_WIDTH)
        return lw_error_set(err, LW_ERR_ARGUMENT, "width is %d; permitted 1 to %d", width,
                            LW_RUN_MAX_WIDTH);
    lw_run *run = lw__alloc(sizeof *run);
    if (run == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a run");
    run->z = lw_frozen_hold(frozen);
    run->width = width;
    if (!get_memory(run)) {
        lw_run_free(run);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a run");
    }
    set_lanes(run);
    lw_run_restart(run, seed, first_run);
    *out = run;
    return LW_OK;
}

void lw_run_restart(lw_run *run, uint64_t seed, uint64_t first_run)
{
    run->seed = seed;
    run->first_run = first_run;
    run->finished = 0;
    for (int k = 0; k < run->width; k++) {
        run->lanes[k].seed = seed;
        run->lanes[k].run = first_run + (uint64_t)k;
        run->instants[k] = 0;
        lw__lane_start(&run->lanes[k]);
    }
    for (int k = 0; k < run->width * run->z->n_records; k++)
        run->tables[k].n_rows = 0;
}

lw_status lw_run_advance(lw_run *run, lw_tick until)
{
    lw_status status = LW_OK;
    if (run->finished || until > LW_TICK_MAX)
        return LW_ERR_TIME;
    for (int k = 0; k < run->width; k++) {
        lw__lane *s = &run->lanes[k];
        if (s->status == LW_OK && until >= s->now)
            run->instants[k] += lw__drive_lane(s, until);
        if (s->status != LW_OK)
            status = LW_STOPPED;
    }
    return status;
}

lw_status lw_run_drain(lw_run *run)
{
    lw_status status = LW_OK;
    if (run->finished)
        return LW_ERR_TIME;
    for (int k = 0; k < run->width; k++) {
        lw__lane *s = &run->lanes[k];
        run->instants[k] += lw__lane_drain(s);
        if (s->status != LW_OK)
            status = LW_STOPPED;
    }
    return status;
}

void lw_run_finish(lw_run *run)
{
    if (run->finished)
        return;
    run->finished = 1;
    for (int k = 0; k < run->width; k++) {
        lw__observe_end(&run->lanes[k]);
        for (int t = 0; t < run->z->n_tracks; t++)
            lw__track_finish(&run->lanes[k], t);
        lw__outputs_finish(&run->lanes[k]);
    }
}

lw_tick lw_run_now(const lw_run *run, int lane)
{
    return run->lanes[lane].now;
}

int lw_run_width(const lw_run *run)
{
    return run->width;
}

int64_t lw_run_n_instants(const lw_run *run, int lane)
{
    return run->instants[lane];
}

lw_status lw_run_status(const lw_run *run, int lane, lw_error *err)
{
    const lw__lane *s = &run->lanes[lane];
    if (s->status == LW_OK)
        return LW_OK;
    return lw_error_set(err, s->status, "at %.12g s: \"%s\": %s", lw_tick_seconds(s->now), s->what,
                        s->text);
}

double lw_run_read(const lw_run *run, int lane, lw_signal signal)
{
    lw__reference r = {signal, (double)NAN};
    return lw__signal_value(&run->lanes[lane], &r);
}

// ---- metrics and records

int lw_frozen_n_metrics(const lw_frozen *frozen)
{
    return frozen->n_metrics;
}

const char *lw_frozen_metric_name(const lw_frozen *frozen, int metric)
{
    return frozen->metrics[metric].def.name;
}

double lw_run_metric(const lw_run *run, int lane, int metric)
{
    return lw__metric_value(&run->lanes[lane], metric);
}

int lw_frozen_n_records(const lw_frozen *frozen)
{
    return frozen->n_records;
}

const char *lw_frozen_record_name(const lw_frozen *frozen, int record)
{
    return frozen->records[record].name;
}

int lw_frozen_record_n_columns(const lw_frozen *frozen, int record)
{
    return frozen->records[record].n_columns;
}

const char *lw_frozen_record_column(const lw_frozen *frozen, int record, int column)
{
    return frozen->records[record].columns[column];
}

int64_t lw_run_record_rows(const lw_run *run, int lane, int record)
{
    return run->tables[lane * run->z->n_records + record].n_rows;
}

double lw_run_record_cell(const lw_run *run, int lane, int record, int64_t row, int column)
{
    const lw__table *t = &run->tables[lane * run->z->n_records + record];
    return t->cell[row * run->z->records[record].n_columns + column];
}

// ---- the block

size_t lw_run_block_size(const lw_run *run)
{
    return run->block_size;
}

const void *lw_run_block(const lw_run *run)
{
    return run->block;
}

lw_status lw_run_copy(lw_run *to, const lw_run *from)
{
    if (to->z != from->z || to->width != from->width)
        return LW_ERR_ARGUMENT;
    memcpy(to->block, from->block, from->block_size);
    to->seed = from->seed;
    to->first_run = from->first_run;
    to->finished = from->finished;
    for (int k = 0; k < to->width; k++) {
        lw__lane *a = &to->lanes[k];
        const lw__lane *b = &from->lanes[k];
        a->now = b->now;
        a->seed = b->seed;
        a->run = b->run;
        a->status = b->status;
        a->what = b->what;
        a->text = b->text;
        to->instants[k] = from->instants[k];
    }
    return LW_OK;
}

size_t lw_run_lane_size(const lw_run *run)
{
    return run->block_size / (size_t)run->width;
}

void lw_run_lane(const lw_run *run, int lane, void *out)
{
    const uint64_t *cells = run->block;
    uint64_t *to = out;
    size_t n = lw_run_lane_size(run) / 8;
    for (size_t k = 0; k < n; k++)
        to[k] = cells[k * (size_t)run->width + (size_t)lane];
}
