// Freezing the watch: records, and metrics as readings of shared tracks.

#include "run/comparator.h"
#include "run/freezer.h"
#include "run/job_metric.h"
#include "run/schedule.h"

#include "io/source.h"
#include "run/record.h"
#include "run/series.h"
#include "run/track.h"

#include <math.h>
#include <string.h>

static int of_loop(lw_metric_kind kind)
{
    return kind == LW_METRIC_LATENCY_PERCENTILE || kind == LW_METRIC_LATENCY_MEAN ||
           kind == LW_METRIC_LATENCY_MAXIMUM || kind == LW_METRIC_LOST || kind == LW_METRIC_MISSED;
}

static int needs_of(lw_metric_kind kind)
{
    switch (kind) {
    case LW_METRIC_MAXIMUM:
    case LW_METRIC_MINIMUM:
    case LW_METRIC_PEAK:
    case LW_METRIC_PEAK_TIME:
    case LW_METRIC_OVERSHOOT:
    case LW_METRIC_RIPPLE:
    case LW_METRIC_UNDERSHOOT:
        return LW__NEED_EXTREMES;
    case LW_METRIC_MEAN:
    case LW_METRIC_SATURATION_TIME:
        return LW__NEED_MEAN;
    case LW_METRIC_RMS:
    case LW_METRIC_EFFORT:
        return LW__NEED_SQUARE;
    case LW_METRIC_IAE:
        return LW__NEED_ABSOLUTE;
    case LW_METRIC_ITAE:
        return LW__NEED_ABSOLUTE | LW__NEED_TIMED;
    case LW_METRIC_ISE:
    case LW_METRIC_ERROR_RMS:
        return LW__NEED_ERROR_SQUARE;
    case LW_METRIC_ERROR_PEAK:
        return LW__NEED_ERROR_PEAK;
    case LW_METRIC_SETTLING:
    case LW_METRIC_RISE:
    case LW_METRIC_ITSE:
    case LW_METRIC_MEAN_ERROR:
    case LW_METRIC_STEADY_ERROR:
    case LW_METRIC_VARIATION:
    case LW_METRIC_REVERSALS:
    case LW_METRIC_CHATTER:
    case LW_METRIC_MASK_VIOLATION:
    case LW_METRIC_MASK_TIME:
    case LW_METRIC_MASK_FIRST:
        return LW__NEED_OWN;
    default:
        return 0;
    }
}

static int needs_level(const lw_metric_def *def)
{
    switch (def->kind) {
    case LW_METRIC_PEAK:
    case LW_METRIC_PEAK_TIME:
    case LW_METRIC_OVERSHOOT:
    case LW_METRIC_UNDERSHOOT:
    case LW_METRIC_SETTLING:
    case LW_METRIC_IAE:
    case LW_METRIC_ISE:
    case LW_METRIC_ITAE:
    case LW_METRIC_ITSE:
    case LW_METRIC_ERROR_RMS:
    case LW_METRIC_ERROR_PEAK:
    case LW_METRIC_MEAN_ERROR:
    case LW_METRIC_STEADY_ERROR:
        return 1;
    case LW_METRIC_RISE:
        return isnan(def->low_value);
    default:
        return 0;
    }
}

static int level_first(const lw_metric_def *def)
{
    return def->kind == LW_METRIC_SETTLING ||
           (def->kind == LW_METRIC_RISE && isnan(def->low_value));
}

static lw_status metric_error(lw__freezer *w, const lw_metric_def *def, const char *text)
{
    return lw__fail_at(def->origin, w->err, LW_ERR_ARGUMENT, "metric \"%s\": %s", def->name, text);
}

// ---- of a loop

static lw_status loop_metric(lw__freezer *w, lw__metric *m)
{
    lw_frozen *z = w->z;
    m->track = m->loop = -1;
    for (int i = 0; i < z->n_loops; i++)
        if (strcmp(z->loops[i].item->def.name, m->def.of) == 0)
            m->loop = i;
    if (m->loop < 0)
        return lw__fail_at(m->def.origin, w->err, LW_ERR_NAME,
                           "metric \"%s\": of: no loop or task \"%s\"", m->def.name, m->def.of);
    lw__loop *l = &z->loops[m->loop];
    l->observed = 1;
    double lo = lw_tick_seconds(l->latency.lowest), hi = lw_tick_seconds(l->latency.highest);
    m->lo = lo;
    m->per_cell = hi > lo ? LW__CELLS / (hi - lo) : 0;
    m->own = lw__freezer_double(w, m->def.name, "sum, count, largest", LW_SLICE_METRIC, LW__N_OWN);
    int cells = m->def.kind == LW_METRIC_LATENCY_PERCENTILE ? LW__CELLS : 0;
    m->cells = lw__freezer_integer(w, m->def.name, "histogram", LW_SLICE_METRIC, cells);
    return m->cells >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// ---- of a dac's output

static int of_output(lw_metric_kind kind)
{
    return kind == LW_METRIC_OUTPUT_AGE || kind == LW_METRIC_OUTPUT_AGE_MEAN ||
           kind == LW_METRIC_OUTPUT_AGE_PERCENTILE;
}

static lw_status output_metric(lw__freezer *w, lw__metric *m)
{
    lw_frozen *z = w->z;
    m->track = m->loop = -1;
    for (int i = 0; i < z->n_dacs; i++)
        if (strcmp(z->dacs[i].item->def.name, m->def.of) == 0) {
            z->dacs[i].observed = 1;
            m->aged = &z->dacs[i];
        }
    if (m->aged == NULL)
        return lw__fail_at(m->def.origin, w->err, LW_ERR_NAME, "metric \"%s\": of: no dac \"%s\"",
                           m->def.name, m->def.of);
    m->own = lw__freezer_double(w, m->def.name, "sum, weight, largest", LW_SLICE_METRIC, LW__N_OWN);
    int cells = m->def.kind == LW_METRIC_OUTPUT_AGE_PERCENTILE ? LW__TIME_CELLS : 0;
    m->cells = lw__freezer_integer(w, m->def.name, "counts", LW_SLICE_METRIC, cells);
    return m->own >= 0 && m->cells >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// ---- of a track

// Value of a source at tick t where it is a function of time alone.
static int known_value(const lw_source_def *def, lw_tick t, double *value)
{
    if (def->kind == LW_SOURCE_NOISE || def->kind == LW_SOURCE_FUNCTION)
        return 0;
    if (lw__source_moves(def)) {
        *value = lw__source_value(def, t);
        return 1;
    }
    *value = lw__source_first(def);
    int64_t k = -1;
    for (int64_t step = INT64_C(1) << 40; step > 0; step /= 2)
        if (lw__source_change(def, k + step) <= t)
            k += step;
    int failed = 0;
    if (k >= 0)
        *value = lw__source_after(def, k, 0, 0, 0, &failed);
    return 1;
}

static lw_status track_level(lw__freezer *w, lw__track *t, const lw_metric_def *def)
{
    t->level = def->level;
    t->against.at.kind = LW__SIGNAL_CONSTANT;
    t->against.constant = isnan(def->level) ? 0 : def->level;
    if (def->against == NULL)
        return LW_OK;
    t->against_name = def->against;
    lw_status status = lw__signal_find(w->z, def->against, &t->against.at, w->err);
    if (status != LW_OK) {
        lw_error_prefix(w->err, "metric \"%s\": against: ", def->name);
        return lw__blame(def->origin, w->err, status);
    }
    if (t->against.at.kind == LW__SIGNAL_ROW && w->z->groups[t->against.at.index].motion == NULL)
        return metric_error(w, def,
                            "against: a plant's output; a source, a value or a number is "
                            "wanted");
    if (!isnan(t->level))
        return LW_OK;
    for (int i = 0; i < w->z->n_sources; i++) {
        const lw_source_def *source = &w->z->sources[i].item->def;
        double value;
        if (strcmp(source->name, def->against) == 0 && known_value(source, t->until, &value))
            t->level = value;
    }
    return LW_OK;
}

static lw_status track_signal(lw__freezer *w, lw__track *t, const lw_metric_def *def)
{
    char name[240];
    size_t length = strlen(def->of);
    if (length > 200)
        return metric_error(w, def, "of: the name is too long");
    memcpy(name, def->of, length + 1);
    if (def->kind == LW_METRIC_SATURATION_TIME)
        memcpy(name + length, ".saturated", sizeof ".saturated");
    char *copy = lw__freezer_get(w, strlen(name) + 1);
    if (copy == NULL)
        return LW_ERR_MEMORY;
    memcpy(copy, name, strlen(name));
    t->name = copy;
    lw_status status = lw__signal_find(w->z, name, &t->of.at, w->err);
    if (status == LW_OK)
        return LW_OK;
    lw_error_prefix(w->err, "metric \"%s\": of: ", def->name);
    return lw__blame(def->origin, w->err, status);
}

// The group with a motion behind a reference; NULL where there is none.
static const lw__group *motion_behind(const lw__freezer *w, const lw__reference *r)
{
    const lw__group *g = r->at.kind == LW__SIGNAL_ROW ? &w->z->groups[r->at.index] : NULL;
    return g != NULL && g->motion != NULL ? g : NULL;
}

// A track takes the stretches of one such group as they come.
static lw_status track_motion(lw__freezer *w, lw__track *t, const lw_metric_def *def)
{
    const lw__group *of = motion_behind(w, &t->of), *against = motion_behind(w, &t->against);
    t->moving = of != NULL ? of : against;
    if (of != NULL && against != NULL && of != against)
        return metric_error(w, def,
                            "of and against are signals of two plants that are each integrated "
                            "step by step and not connected; one is wanted");
    return LW_OK;
}

// Those who follow each group with a motion.
static lw_status list_watchers(lw__freezer *w)
{
    lw_frozen *z = w->z;
    for (int i = 0; i < z->n_groups; i++) {
        lw__group *g = &z->groups[i];
        if (g->motion == NULL)
            continue;
        struct lw__watcher *list =
            lw__freezer_get(w, sizeof *list * (size_t)(z->n_tracks + z->n_records + 1));
        if (list == NULL)
            return LW_ERR_MEMORY;
        for (int k = 0; k < z->n_tracks; k++)
            if (z->tracks[k].moving == g)
                list[g->n_watchers++] = (struct lw__watcher){0, k};
        for (int k = 0; k < z->n_records; k++)
            if (z->records[k].moving == g)
                list[g->n_watchers++] = (struct lw__watcher){1, k};
        g->watchers = list;
    }
    return LW_OK;
}

// Pieces short enough for the plant and for a sine that it is compared with.
static void track_pieces(lw__freezer *w, lw__track *t)
{
    double norm = 0;
    if (t->of.at.kind == LW__SIGNAL_ROW && w->z->groups[t->of.at.index].motion == NULL) {
        const lw__group *g = &w->z->groups[t->of.at.index];
        norm = g->kernel.norm;
        t->n_x = g->n_x;
        t->n_u = g->n_u;
    }
    const lw__reference *refs[2] = {&t->of, &t->against};
    for (int k = 0; k < 2; k++)
        if (refs[k]->at.kind == LW__SIGNAL_SOURCE) {
            const lw_source_def *def = &w->z->sources[refs[k]->at.index].item->def;
            double turn = def->kind == LW_SOURCE_SINE ? lw__source_turn(def) : 0;
            norm = turn > norm ? turn : norm;
        }
    t->piece = lw__piece_length(norm);
    int plain = t->of.at.kind != LW__SIGNAL_ROW && t->of.at.kind != LW__SIGNAL_SOURCE &&
                t->against.at.kind != LW__SIGNAL_SOURCE;
    t->degree = plain ? 0 : LW__PIECE_DEGREE;
    // a stretch is no longer than a grid step of its group: fewer terms may do
    if (t->of.at.kind == LW__SIGNAL_ROW && t->against.at.kind != LW__SIGNAL_SOURCE) {
        double reach = lw_tick_seconds(w->z->groups[t->of.at.index].kernel.reach) * norm, term = 1;
        t->degree = 1;
        for (int k = 1; k < LW__PIECE_DEGREE && (term *= fmin(reach, LW__PIECE_NORM) / k) > 0x1p-60;
             k++)
            t->degree = k + 1;
    }
}

static lw_status track_cells(lw__freezer *w, lw__track *t)
{
    t->x = lw__freezer_double(w, t->name, "state at the last change", LW_SLICE_METRIC, t->n_x);
    t->u = lw__freezer_double(w, t->name, "inputs since", LW_SLICE_METRIC, t->n_u);
    t->held = lw__freezer_double(w, t->name, "value since", LW_SLICE_METRIC, 1);
    t->wanted = lw__freezer_double(w, t->name, "wanted since", LW_SLICE_METRIC, 1);
    t->sums = lw__freezer_double(w, t->name, "sums", LW_SLICE_METRIC, LW__N_SUMS);
    t->began = lw__freezer_integer(w, t->name, "last change", LW_SLICE_METRIC, 1);
    t->open = lw__freezer_integer(w, t->name, "window is open", LW_SLICE_METRIC, 1);
    if (t->moving != NULL)
        t->done = lw__freezer_integer(w, t->name, "taken up to", LW_SLICE_METRIC, 1);
    t->timer = lw__freezer_timer(w);
    return t->open >= 0 && t->done >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static int equal_number(double a, double b)
{
    return a == b || (isnan(a) && isnan(b));
}

static int equal_track(const lw__track *a, const lw__track *b)
{
    return memcmp(&a->of.at, &b->of.at, sizeof a->of.at) == 0 &&
           memcmp(&a->against.at, &b->against.at, sizeof a->against.at) == 0 &&
           a->against.constant == b->against.constant && equal_number(a->level, b->level) &&
           equal_number(a->base, b->base) && a->from == b->from && a->until == b->until;
}

static lw_status track_metric(lw__freezer *w, lw__metric *m)
{
    lw_frozen *z = w->z;
    const lw_metric_def *def = &m->def;
    lw__track t = {.from = def->from,
                   .until = def->until == LW_NEVER ? z->lasts : def->until,
                   .base = def->base};
    lw_tick last =
        def->last > 0 || def->kind != LW_METRIC_STEADY_ERROR ? def->last : (t.until - t.from) / 10;
    if (last > 0 && t.until - t.from > last)
        t.from = t.until - last;
    m->loop = -1;
    LW__TRY(track_signal(w, &t, def));
    LW__TRY(track_level(w, &t, def));
    LW__TRY(track_motion(w, &t, def));
    if (needs_level(def) && isnan(def->level) && def->against == NULL)
        return metric_error(w, def, "level or against is missing; it is measured against one");
    if (level_first(def) && isnan(t.level))
        return metric_error(w, def,
                            "level is missing; what it is taken against is not known "
                            "before the end of the run");
    if (def->kind == LW_METRIC_SATURATION_TIME && strstr(t.name, ".saturated") == NULL)
        return metric_error(w, def, "of: a dac is wanted");
    m->own = lw__freezer_double(w, def->name, "instants", LW_SLICE_METRIC, LW__N_OWN);
    if (m->own < 0)
        return LW_ERR_MEMORY;
    m->track = -1;
    for (int k = 0; k < z->n_tracks; k++)
        if (equal_track(&z->tracks[k], &t))
            m->track = k;
    if (m->track < 0) {
        track_pieces(w, &t);
        LW__TRY(track_cells(w, &t));
        m->track = z->n_tracks;
        z->tracks[z->n_tracks++] = t;
    }
    z->tracks[m->track].needs |= needs_of(def->kind);
    return LW_OK;
}

// ---- whom a change concerns

static int owns(const char *owner, const char *name)
{
    size_t length = strlen(owner);
    return strncmp(owner, name, length) == 0 && (name[length] == 0 || name[length] == '.');
}

lw__set *lw__signal_observers(lw_frozen *z, const char *name)
{
    for (int i = 0; i < z->n_plants; i++)
        if (owns(z->plants[i].name, name))
            return &z->groups[z->plants[i].group].observers;
    for (int i = 0; i < z->n_sources; i++)
        if (owns(z->sources[i].item->def.name, name))
            return &z->sources[i].observers;
    for (int i = 0; i < z->n_values; i++)
        if (owns(z->values[i].name, name))
            return &z->values[i].observers;
    for (int i = 0; i < z->n_adcs; i++)
        if (owns(z->adcs[i].item->def.name, name))
            return &z->adcs[i].observers;
    for (int i = 0; i < z->n_dacs; i++)
        if (owns(z->dacs[i].item->def.name, name))
            return &z->dacs[i].observers;
    for (int i = 0; i < z->n_loops; i++)
        if (owns(z->loops[i].item->def.name, name))
            return &z->loops[i].observers;
    for (int i = 0; i < z->n_tasks; i++)
        if (owns(z->tasks[i].name, name))
            return &z->tasks[i].law.observers;
    for (int i = 0; i < z->n_comparators; i++)
        if (strcmp(z->comparators[i].name, name) == 0)
            return &z->comparators[i].observers;
    return NULL;
}

lw_status lw__track_watch(lw__freezer *w, lw__track *t, int op)
{
    const char *names[2] = {t->name, t->against_name};
    for (int k = 0; k < 2; k++) {
        lw__set *set = names[k] != NULL ? lw__signal_observers(w->z, names[k]) : NULL;
        if (set != NULL)
            LW__TRY(lw__set_put(w, set, op));
    }
    return LW_OK;
}

// The mask in the frozen rig's own memory: the watch may be gone before the run.
static lw_status keep_mask(lw__freezer *w, lw_metric_def *def)
{
    size_t n = (size_t)def->n_mask;
    double *own = n > 0 ? lw__freezer_get(w, sizeof *own * 3 * n) : NULL;
    if (n == 0)
        return LW_OK;
    if (own == NULL)
        return LW_ERR_MEMORY;
    memcpy(own, def->mask_time, sizeof *own * n);
    memcpy(own + n, def->mask_low, sizeof *own * n);
    memcpy(own + 2 * n, def->mask_high, sizeof *own * n);
    def->mask_time = own;
    def->mask_low = own + n;
    def->mask_high = own + 2 * n;
    return LW_OK;
}

// Times and counts have no last part.
static lw_status refuse_last(lw__freezer *w, const lw_metric_def *def)
{
    if (def->last > 0 &&
        (of_output(def->kind) || lw__job_metric_concerns(w, def) || of_loop(def->kind)))
        return metric_error(w, def, "last has no place in this metric");
    return LW_OK;
}

lw_status lw__freeze_watch(lw__freezer *w)
{
    lw_frozen *z = w->z;
    LW__TRY(lw__freeze_records(w));
    int n = w->watch != NULL ? w->watch->n_metrics : 0;
    z->metrics = lw__freezer_get(w, sizeof *z->metrics * (size_t)(n + 1));
    z->tracks = lw__freezer_get(w, sizeof *z->tracks * (size_t)(n + 1));
    if (z->metrics == NULL || z->tracks == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < n; i++) {
        lw__metric *m = &z->metrics[i];
        m->def = w->watch->metrics[i];
        const char *texts[3] = {m->def.name, m->def.of, m->def.against};
        for (int k = 0; k < 3; k++) {
            char *copy = texts[k] != NULL ? lw__freezer_get(w, strlen(texts[k]) + 1) : NULL;
            if (texts[k] != NULL && copy == NULL)
                return LW_ERR_MEMORY;
            if (copy != NULL)
                memcpy(copy, texts[k], strlen(texts[k]));
            texts[k] = copy;
        }
        m->def.name = texts[0];
        m->def.of = texts[1];
        m->def.against = texts[2];
        m->task = m->dac = -1;
        LW__TRY(refuse_last(w, &m->def));
        LW__TRY(keep_mask(w, &m->def));
        LW__TRY(of_output(m->def.kind)                ? output_metric(w, m)
                : lw__job_metric_concerns(w, &m->def) ? lw__job_metric_freeze(w, m)
                : of_loop(m->def.kind)                ? loop_metric(w, m)
                                                      : track_metric(w, m));
        z->n_metrics = i + 1;
    }
    return list_watchers(w);
}
