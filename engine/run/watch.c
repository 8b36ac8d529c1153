// The watch: what to observe, as described. Checked against a rig when both are frozen.

#include "run/watch.h"

#include "base/alloc.h"
#include "run/rig.h"

#include <math.h>
#include <string.h>

static const char *const words[] = {
#define METRIC_WORDS(name, text) text,
    LW_METRIC_LIST(METRIC_WORDS)
#undef METRIC_WORDS
};

const char *lw_metric_words(lw_metric_kind kind)
{
    int index = (int)kind;
    return index >= 0 && index < lw_metric_count() ? words[index] : "";
}

int lw_metric_count(void)
{
    return (int)(sizeof words / sizeof words[0]);
}

lw_status lw_watch_new(lw_watch **out, lw_error *err)
{
    lw_watch *watch = lw__alloc(sizeof *watch);
    lw__arena *arena = watch != NULL ? lw__arena_new() : NULL;
    if (arena == NULL) {
        lw__free(watch);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a watch");
    }
    watch->arena = arena;
    *out = watch;
    return LW_OK;
}

void lw_watch_free(lw_watch *watch)
{
    if (watch == NULL)
        return;
    lw__free(watch->records);
    lw__free(watch->metrics);
    lw__arena_free(watch->arena);
    lw__free(watch);
}

static void *grow(void *list, int n, size_t size)
{
    return (n & (n - 1)) == 0 ? lw__realloc(list, size * (size_t)(n == 0 ? 1 : 2 * n)) : list;
}

static const char *keep(lw_watch *watch, const char *text, int *failed)
{
    const char *copy = text != NULL ? lw__arena_text(watch->arena, text) : NULL;
    *failed |= text != NULL && copy == NULL;
    return copy;
}

static const double *keep_numbers(lw_watch *watch, int n, const double *from, int *failed)
{
    if (n == 0)
        return NULL;
    double *copy = lw__arena_get(watch->arena, sizeof *copy * (size_t)n);
    if (copy != NULL)
        memcpy(copy, from, sizeof *copy * (size_t)n);
    *failed |= copy == NULL;
    return copy;
}

static lw_status check_record(const lw_record_def *def, lw_error *err)
{
    if (def->signal == NULL || def->signal[0] == 0)
        return lw__fail_at(def->origin, err, LW_ERR_NAME, "record: the signal's name is missing");
    for (int i = 0; i < def->n; i++)
        if (def->at[i] < 0 || (i > 0 && def->at[i] < def->at[i - 1]))
            return lw__fail_at(def->origin, err, LW_ERR_TIME,
                               "record of \"%s\": instant %d is %.12g s; instants rise from 0",
                               def->signal, i + 1, lw_tick_seconds(def->at[i]));
    if (def->n == 0 && (def->every.num <= 0 || def->every.num < def->every.den))
        return lw__fail_at(def->origin, err, LW_ERR_ARGUMENT,
                           "record of \"%s\": every or at is missing", def->signal);
    if (def->limit < 0)
        return lw__fail_at(def->origin, err, LW_ERR_ARGUMENT,
                           "record of \"%s\": limit is %lld; permitted from 1 on", def->signal,
                           (long long)def->limit);
    return LW_OK;
}

static lw_status add_record(lw_watch *watch, const lw_record_def *def, int is_events, lw_error *err)
{
    int failed = 0;
    lw__record_item item = {*def, is_events};
    item.def.origin = keep(watch, def->origin, &failed);
    item.def.signal = keep(watch, def->signal, &failed);
    if (def->n > 0) {
        lw_tick *at = lw__arena_get(watch->arena, sizeof *at * (size_t)def->n);
        if (at != NULL)
            memcpy(at, def->at, sizeof *at * (size_t)def->n);
        failed |= at == NULL;
        item.def.at = at;
    }
    if (item.def.limit == 0)
        item.def.limit = 1000000;
    lw__record_item *list = grow(watch->records, watch->n_records, sizeof item);
    if (list != NULL)
        watch->records = list;
    if (list == NULL || failed)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a record");
    watch->records[watch->n_records++] = item;
    return LW_OK;
}

lw_status lw_watch_record(lw_watch *watch, const lw_record_def *def, lw_error *err)
{
    lw_status status = check_record(def, err);
    return status != LW_OK ? status : add_record(watch, def, 0, err);
}

lw_status lw_watch_events(lw_watch *watch, const char *origin, const char *name, int64_t limit,
                          lw_error *err)
{
    lw_record_def def = {.origin = origin, .signal = name, .every = {1, 1}, .limit = limit};
    lw_status status = check_record(&def, err);
    return status != LW_OK ? status : add_record(watch, &def, 1, err);
}

lw_metric_def lw_metric_default(lw_metric_kind kind)
{
    return (lw_metric_def){.kind = kind,
                           .level = (double)NAN,
                           .base = (double)NAN,
                           .band = 0.02,
                           .low = 0.1,
                           .high = 0.9,
                           .share = 0.99,
                           .window = 10,
                           .band_value = (double)NAN,
                           .low_value = (double)NAN,
                           .high_value = (double)NAN,
                           .from = 0,
                           .until = LW_NEVER};
}

static lw_status bad(const lw_metric_def *def, lw_error *err, const char *field, double value,
                     const char *range)
{
    return lw__fail_at(def->origin, err, LW_ERR_ARGUMENT, "metric \"%s\": %s is %.12g; %s",
                       def->name, field, value, range);
}

static int is_mask(lw_metric_kind kind)
{
    return kind == LW_METRIC_MASK_VIOLATION || kind == LW_METRIC_MASK_TIME ||
           kind == LW_METRIC_MASK_FIRST;
}

static lw_status check_corner(const lw_metric_def *def, int k, lw_error *err)
{
    double t = def->mask_time[k], low = def->mask_low[k], high = def->mask_high[k];
    if (!(t >= 0 && t < 9e6) || (k > 0 && !(t > def->mask_time[k - 1])))
        return bad(def, err, "mask: time", t, "times rise, from 0 on");
    if (isinf(low) || isinf(high) || low > high)
        return bad(def, err, "mask: low", low, "at most high, and finite, is wanted");
    return LW_OK;
}

static lw_status check_metric(const lw_metric_def *def, lw_error *err)
{
    if (def->of == NULL || def->name == NULL)
        return lw__fail_at(def->origin, err, LW_ERR_NAME, "metric \"%s\": of is missing",
                           def->name != NULL ? def->name : "");
    if ((int)def->kind < 0 || (int)def->kind >= lw_metric_count())
        return bad(def, err, "kind", (double)def->kind, "not a kind of metric");
    if (isinf(def->level) || isinf(def->base))
        return bad(def, err, "level", def->level, "a finite number is wanted");
    if (!(def->band > 0))
        return bad(def, err, "band", def->band, "above 0 is wanted");
    if (!(def->low >= 0 && def->low < def->high && def->high <= 1))
        return bad(def, err, "low", def->low, "0 <= low < high <= 1 is wanted");
    if (!(def->share > 0 && def->share < 1))
        return bad(def, err, "share", def->share, "between 0 and 1 is wanted");
    if (!isnan(def->band_value) && !(def->band_value > 0))
        return bad(def, err, "band_value", def->band_value, "above 0 is wanted");
    if (isnan(def->low_value) != isnan(def->high_value) || def->low_value == def->high_value)
        return bad(def, err, "low_value", def->low_value,
                   "two different levels, low_value and high_value, are wanted");
    if (!(def->step >= 0) || isinf(def->step))
        return bad(def, err, "step", def->step, "permitted from 0 on");
    if (def->last < 0)
        return bad(def, err, "last", lw_tick_seconds(def->last), "permitted from 0 on");
    if (is_mask(def->kind) != (def->n_mask > 0))
        return lw__fail_at(def->origin, err, LW_ERR_ARGUMENT, "metric \"%s\": mask %s", def->name,
                           def->n_mask > 0 ? "has no place in this metric" : "is missing");
    for (int k = 0; k < def->n_mask; k++) {
        lw_status status = check_corner(def, k, err);
        if (status != LW_OK)
            return status;
    }
    if (def->from < 0 || def->until <= def->from)
        return bad(def, err, "from", lw_tick_seconds(def->from),
                   "a window begins at 0 or later and ends after it begins");
    return LW_OK;
}

lw_status lw_watch_metric(lw_watch *watch, const lw_metric_def *def, lw_error *err)
{
    lw_status status = check_metric(def, err);
    if (status != LW_OK)
        return status;
    int failed = 0;
    lw_metric_def item = *def;
    item.origin = keep(watch, def->origin, &failed);
    item.name = keep(watch, def->name, &failed);
    item.of = keep(watch, def->of, &failed);
    item.against = keep(watch, def->against, &failed);
    item.mask_time = keep_numbers(watch, def->n_mask, def->mask_time, &failed);
    item.mask_low = keep_numbers(watch, def->n_mask, def->mask_low, &failed);
    item.mask_high = keep_numbers(watch, def->n_mask, def->mask_high, &failed);
    lw_metric_def *list = grow(watch->metrics, watch->n_metrics, sizeof item);
    if (list != NULL)
        watch->metrics = list;
    if (list == NULL || failed)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a metric");
    watch->metrics[watch->n_metrics++] = item;
    return LW_OK;
}
