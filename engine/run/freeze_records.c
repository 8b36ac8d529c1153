// Freezing records: what each row holds, and whom the events come from.

#include "run/freezer.h"

#include "run/comparator.h"
#include "run/pwm.h"
#include "run/record.h"
#include "run/schedule.h"

#include <stdio.h>
#include <string.h>

static const char *keep(lw__freezer *w, const char *text)
{
    char *copy = lw__freezer_get(w, strlen(text) + 1);
    if (copy != NULL)
        memcpy(copy, text, strlen(text));
    return copy;
}

static const char *joined(lw__freezer *w, const char *stem, int n, int of)
{
    char text[64];
    snprintf(text, sizeof text, of > 1 ? "%s%d" : "%s", stem, n + 1);
    return keep(w, text);
}

static const char **columns_of(lw__freezer *w, lw__record *r, int n)
{
    r->n_columns = n;
    const char **columns = lw__freezer_get(w, sizeof *columns * (size_t)n);
    r->columns = columns;
    return columns;
}

static lw_status adc_record(lw__freezer *w, lw__record *r, int record, lw__adc *a)
{
    const char **columns = columns_of(w, r, 2 + 3 * a->n_channels);
    if (columns == NULL)
        return LW_ERR_MEMORY;
    columns[0] = "sample";
    columns[1] = "time";
    for (int c = 0; c < a->n_channels; c++) {
        columns[2 + 3 * c] = joined(w, "input", c, a->n_channels);
        columns[3 + 3 * c] = joined(w, "value", c, a->n_channels);
        columns[4 + 3 * c] = joined(w, "code", c, a->n_channels);
    }
    a->log = record;
    return LW_OK;
}

static lw_status dac_record(lw__freezer *w, lw__record *r, int record, lw__dac *d)
{
    static const char *const names[] = {"time", "asked", "limited", "value", "code", "saturated"};
    const char **columns = columns_of(w, r, 6);
    if (columns == NULL)
        return LW_ERR_MEMORY;
    for (int c = 0; c < 6; c++)
        columns[c] = names[c];
    d->log = record;
    return LW_OK;
}

static lw_status loop_record(lw__freezer *w, lw__record *r, int record, lw__loop *l)
{
    static const char *const names[] = {"sample", "time", "written", "latency", "job"};
    const char **columns = columns_of(w, r, 5 + l->law->n_out + l->law->n_state);
    if (columns == NULL)
        return LW_ERR_MEMORY;
    for (int c = 0; c < 5; c++)
        columns[c] = names[c];
    for (int k = 0; k < l->law->n_out; k++)
        columns[5 + k] = l->law->out_names[k];
    for (int k = 0; k < l->law->n_state; k++)
        columns[5 + l->law->n_out + k] = l->law->state_names[k];
    l->log = record;
    return LW_OK;
}

static lw_status named_record(lw__freezer *w, lw__record *r, int n, const char *const *names)
{
    const char **columns = columns_of(w, r, n);
    for (int c = 0; columns != NULL && c < n; c++)
        columns[c] = names[c];
    return columns != NULL ? LW_OK : LW_ERR_MEMORY;
}

#define COLUMN(name, words) words,
static const char *const job_columns[] = {LW_JOB_COLUMNS(COLUMN)};
static const char *const stretch_columns[] = {LW_STRETCH_COLUMNS(COLUMN)};
#undef COLUMN

static lw_status recorded_twice(lw__freezer *w, const lw_record_def *def)
{
    return lw__fail_at(def->origin, w->err, LW_ERR_DUPLICATE,
                       "record of \"%s\": its events are recorded already", def->signal);
}

// "bridge.level": the edges of a pwm. Its own name is of what it takes over, as of a dac.
static int is_edges(const lw__pwm *m, const char *name)
{
    size_t n = strlen(m->name);
    return strncmp(m->name, name, n) == 0 && strcmp(name + n, ".level") == 0;
}

static lw_status event_record(lw__freezer *w, lw__record *r, int record, const lw_record_def *def)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_adcs; i++)
        if (strcmp(z->adcs[i].item->def.name, def->signal) == 0)
            return z->adcs[i].log >= 0 ? recorded_twice(w, def)
                                       : adc_record(w, r, record, &z->adcs[i]);
    for (int i = 0; i < z->n_dacs; i++)
        if (strcmp(z->dacs[i].item->def.name, def->signal) == 0)
            return z->dacs[i].log >= 0 ? recorded_twice(w, def)
                                       : dac_record(w, r, record, &z->dacs[i]);
    for (int i = 0; i < z->n_loops; i++)
        if (strcmp(z->loops[i].item->def.name, def->signal) == 0)
            return z->loops[i].log >= 0 ? recorded_twice(w, def)
                                        : loop_record(w, r, record, &z->loops[i]);
    for (int i = 0; i < z->n_tasks; i++)
        if (strcmp(z->tasks[i].name, def->signal) == 0) {
            if (z->tasks[i].log >= 0)
                return recorded_twice(w, def);
            z->tasks[i].log = record;
            return named_record(w, r, LW_N_JOB_COLUMNS, job_columns);
        }
    for (int i = 0; i < z->n_cores; i++)
        if (strcmp(z->cores[i].name, def->signal) == 0) {
            if (z->cores[i].log >= 0)
                return recorded_twice(w, def);
            z->cores[i].log = record;
            return named_record(w, r, LW_N_STRETCH_COLUMNS, stretch_columns);
        }
    for (int i = 0; i < z->n_comparators; i++)
        if (strcmp(z->comparators[i].name, def->signal) == 0) {
            static const char *const columns[] = {"time", "value", "crossed"};
            if (z->comparators[i].log >= 0)
                return recorded_twice(w, def);
            z->comparators[i].log = record;
            return named_record(w, r, 3, columns);
        }
    for (int i = 0; i < z->n_pwms; i++)
        if (is_edges(&z->pwms[i], def->signal)) {
            static const char *const columns[] = {"time", "level", "duty"};
            if (z->pwms[i].log >= 0)
                return recorded_twice(w, def);
            z->pwms[i].log = record;
            return named_record(w, r, 3, columns);
        }
    return lw__fail_at(
        def->origin, w->err, LW_ERR_NAME,
        "record: no adc, dac, loop, task, core or comparator \"%s\"; a signal needs every or "
        "at",
        def->signal);
}

static lw_status signal_record(lw__freezer *w, lw__record *r, const lw_record_def *def)
{
    lw_status status = lw__signal_find(w->z, def->signal, &r->of.at, w->err);
    if (status != LW_OK) {
        lw_error_prefix(w->err, "record: ");
        return lw__blame(def->origin, w->err, status);
    }
    const char **columns = columns_of(w, r, 2);
    if (columns == NULL)
        return LW_ERR_MEMORY;
    columns[0] = "time";
    columns[1] = "value";
    r->is_signal = 1;
    r->n = def->n;
    r->every = def->every;
    r->from = def->from;
    r->until = def->until == LW_NEVER ? w->z->lasts : def->until;
    lw_tick *at = lw__freezer_get(w, sizeof *at * (size_t)(def->n + 1));
    if (at == NULL)
        return LW_ERR_MEMORY;
    if (def->n > 0)
        memcpy(at, def->at, sizeof *at * (size_t)def->n);
    r->at = at;
    if (r->of.at.kind == LW__SIGNAL_ROW && w->z->groups[r->of.at.index].motion != NULL) {
        r->moving = &w->z->groups[r->of.at.index];
        r->served = lw__freezer_integer(w, r->name, "instants with a row", LW_SLICE_METRIC, 1);
        if (r->served < 0)
            return LW_ERR_MEMORY;
    }
    r->timer = lw__freezer_timer(w);
    r->count = lw__freezer_integer(w, r->name, "instants recorded", LW_SLICE_METRIC, 1);
    return r->count >= 0 ? LW_OK : LW_ERR_MEMORY;
}

lw_status lw__freeze_records(lw__freezer *w)
{
    lw_frozen *z = w->z;
    int n = w->watch != NULL ? w->watch->n_records : 0;
    z->records = lw__freezer_get(w, sizeof *z->records * (size_t)(n + 1));
    if (z->records == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < n; i++) {
        const lw__record_item *item = &w->watch->records[i];
        lw__record *r = &z->records[i];
        r->name = keep(w, item->def.signal);
        r->limit = item->def.limit;
        r->timer = -1;
        if (r->name == NULL)
            return LW_ERR_MEMORY;
        LW__TRY(item->is_events ? event_record(w, r, i, &item->def)
                                : signal_record(w, r, &item->def));
        z->n_records = i + 1;
    }
    return LW_OK;
}
