// Timings given as lists: discrete values, histograms, recordings replayed in order.
//
// A replay has no state: element (start + job) mod n, the start 0 or one draw a run.

#include "timing/family.h"

#include "base/alloc.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static double draw_by_quantile(const lw_timing *t, lw__draw_at *at)
{
    double u = lw__timing_uniform_of(at);
    const double *p = &u;
    return t->family->quantile(t, &p);
}

// First index whose cumulated weight is at least u.
static int index_of(const lw_timing *t, double u)
{
    int low = 0, high = t->n - 1;
    while (low < high) {
        int middle = low + (high - low) / 2;
        if (t->weight[middle] >= u)
            high = middle;
        else
            low = middle + 1;
    }
    return low;
}

static double power_of(double x, int n)
{
    double p = 1;
    while (n-- > 0)
        p *= x;
    return p;
}

static double no_density(const lw_timing *t, double x)
{
    (void)t;
    (void)x;
    return 0;
}

// Room for the lists, weights cumulated and normalised.
static lw_status set_lists(lw_timing *t, int n, const double *value, int n_values,
                           const double *weight, lw_error *err)
{
    t->value = lw__alloc(sizeof(double) * (size_t)n_values);
    t->weight = lw__alloc(sizeof(double) * (size_t)n);
    if (t->value == NULL || t->weight == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a timing");
    double sum = 0;
    for (int i = 0; i < n; i++) {
        double w = weight != NULL ? weight[i] : 1;
        if (!isfinite(w) || w < 0)
            return lw_error_set(err, LW_ERR_ARGUMENT, "weight %d is %g; permitted from 0 on", i + 1,
                                w);
        sum += w;
        t->weight[i] = sum;
    }
    if (!(sum > 0) || !isfinite(sum))
        return lw_error_set(err, LW_ERR_ARGUMENT, "the weights add to %g; a sum above 0 is wanted",
                            sum);
    for (int i = 0; i < n; i++)
        t->weight[i] = i + 1 < n ? t->weight[i] / sum : 1;
    for (int i = 0; i < n_values; i++) {
        if (!isfinite(value[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE, "value %d is %g; a finite number is wanted",
                                i + 1, value[i]);
        t->value[i] = value[i];
    }
    t->n = n;
    return LW_OK;
}

static lw_status give(lw_timing *t, lw_status status, lw_timing **out)
{
    if (status != LW_OK)
        lw_timing_free(t);
    else
        *out = t;
    return status;
}

static void list_cuts(const lw_timing *t, lw__points *out)
{
    for (int i = 0; i < t->n; i++)
        lw__points_add(out, t->value[i], 0, 1);
}

static void list_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    (void)how;
    for (int i = 0; i < t->n; i++)
        lw__points_add(out, t->value[i], t->weight[i] - (i > 0 ? t->weight[i - 1] : 0), 1);
}

// ---- discrete: values sorted, so that the quantile rises

static double discrete_quantile(const lw_timing *t, const double **u)
{
    return t->value[index_of(t, *(*u)++)];
}

// How many of the first n values, which rise, are at most x.
static int n_up_to(const lw_timing *t, int n, double x)
{
    int low = 0, high = n;
    while (low < high) {
        int middle = low + (high - low) / 2;
        if (t->value[middle] <= x)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

static double discrete_cdf(const lw_timing *t, double x)
{
    int n = n_up_to(t, t->n, x);
    return n > 0 ? t->weight[n - 1] : 0;
}

static double discrete_moment(const lw_timing *t, int order)
{
    double sum = 0, before = 0;
    for (int i = 0; i < t->n; i++) {
        sum += (t->weight[i] - before) * power_of(t->value[i], order);
        before = t->weight[i];
    }
    return sum;
}

static void discrete_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "one of %d values, %s to %s", t->n, lw__timing_words(t->lo).text,
             lw__timing_words(t->hi).text);
}

static const lw__family discrete_family = {"discrete",        draw_by_quantile, discrete_quantile,
                                           discrete_cdf,      no_density,       discrete_moment,
                                           discrete_describe, list_cuts,        list_points};

typedef struct weighted {
    double value, weight;
} weighted;

static int by_value(const void *a, const void *b)
{
    double x = ((const weighted *)a)->value, y = ((const weighted *)b)->value;
    return (x > y) - (x < y);
}

// Sort values with their weights, in place. What has no weight goes, so that the support is what
// is drawn.
static lw_status sort_pairs(lw_timing *t, lw_error *err)
{
    weighted *list = lw__alloc(sizeof *list * (size_t)t->n);
    if (list == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a timing");
    int n = 0;
    for (int i = 0; i < t->n; i++) {
        double weight = t->weight[i] - (i > 0 ? t->weight[i - 1] : 0);
        if (weight > 0)
            list[n++] = (weighted){t->value[i], weight};
    }
    t->n = n;
    qsort(list, (size_t)t->n, sizeof *list, by_value);
    double sum = 0;
    for (int i = 0; i < t->n; i++) {
        sum += list[i].weight;
        t->value[i] = list[i].value;
        t->weight[i] = i + 1 < t->n ? sum : 1;
    }
    lw__free(list);
    return LW_OK;
}

lw_status lw_timing_discrete(int n, const double *value, const double *weight, lw_timing **out,
                             lw_error *err)
{
    if (n < 1)
        return lw__timing_bad(err, "number of values", n, "at least 1 is wanted");
    lw_timing *t = lw__timing_node(&discrete_family, NULL, NULL);
    if (t == NULL)
        return lw__timing_give(t, out, err);
    lw_status status = set_lists(t, n, value, n, weight, err);
    if (status == LW_OK)
        status = sort_pairs(t, err);
    if (status == LW_OK) {
        t->lo = t->value[0];
        t->hi = t->value[t->n - 1];
        t->has_atoms = 1;
        t->n_streams = 1;
    }
    return give(t, status, out);
}

// ---- histogram: value holds n + 1 edges

static double histogram_quantile(const lw_timing *t, const double **u)
{
    double v = *(*u)++;
    int i = index_of(t, v);
    double before = i > 0 ? t->weight[i - 1] : 0, mass = t->weight[i] - before;
    double part = mass > 0 ? (v - before) / mass : 0;
    return t->value[i] + (t->value[i + 1] - t->value[i]) * part;
}

static int cell_of(const lw_timing *t, double x)
{
    int n = n_up_to(t, t->n, x);
    return n > 0 ? n - 1 : 0;
}

static double histogram_cdf(const lw_timing *t, double x)
{
    int i = cell_of(t, x);
    double before = i > 0 ? t->weight[i - 1] : 0, width = t->value[i + 1] - t->value[i];
    return before + (t->weight[i] - before) * (x - t->value[i]) / width;
}

static double histogram_density(const lw_timing *t, double x)
{
    int i = cell_of(t, x);
    double before = i > 0 ? t->weight[i - 1] : 0;
    return (t->weight[i] - before) / (t->value[i + 1] - t->value[i]);
}

// Mean of x^order from a to b, without a difference of powers: cells may be narrow.
static double mean_power(double a, double b, int order)
{
    double sum = 0;
    for (int k = 0; k <= order; k++)
        sum += power_of(a, k) * power_of(b, order - k);
    return sum / (order + 1);
}

static double histogram_moment(const lw_timing *t, int order)
{
    double sum = 0, before = 0;
    for (int i = 0; i < t->n; i++) {
        sum += (t->weight[i] - before) * mean_power(t->value[i], t->value[i + 1], order);
        before = t->weight[i];
    }
    return sum;
}

static void histogram_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "histogram of %d cells, %s to %s", t->n,
             lw__timing_words(t->lo).text, lw__timing_words(t->hi).text);
}

static void histogram_cuts(const lw_timing *t, lw__points *out)
{
    for (int i = 0; i <= t->n; i++)
        lw__points_add(out, t->value[i], 0, 1);
}

static const lw__family histogram_family = {
    "histogram",      draw_by_quantile,   histogram_quantile, histogram_cdf,    histogram_density,
    histogram_moment, histogram_describe, histogram_cuts,     lw__smooth_points};

lw_status lw_timing_histogram(int n, const double *edge, const double *weight, lw_timing **out,
                              lw_error *err)
{
    if (n < 1)
        return lw__timing_bad(err, "number of cells", n, "at least 1 is wanted");
    for (int i = 0; i < n; i++)
        if (!(edge[i + 1] > edge[i]))
            return lw_error_set(err, LW_ERR_ARGUMENT, "edge %d is %g after %g; edges must rise",
                                i + 2, edge[i + 1], edge[i]);
    lw_timing *t = lw__timing_node(&histogram_family, NULL, NULL);
    if (t == NULL)
        return lw__timing_give(t, out, err);
    // cells without weight at the ends go, so that the support is what is drawn
    int first = 0, last = n;
    while (weight != NULL && first + 1 < last && weight[first] == 0)
        first++;
    while (weight != NULL && last - 1 > first && weight[last - 1] == 0)
        last--;
    lw_status status = set_lists(t, n, edge, n + 1, weight, err);
    if (status == LW_OK) {
        t->n = n = last - first;
        memmove(t->value, t->value + first, sizeof(double) * (size_t)(n + 1));
        memmove(t->weight, t->weight + first, sizeof(double) * (size_t)n);
        t->weight[n - 1] = 1;
        t->lo = t->value[0];
        t->hi = t->value[n];
        t->n_streams = 1;
        t->has_density = 1;
    }
    return give(t, status, out);
}

// ---- replay: value holds the recording; every is 1 for a start drawn once a run

static double replay_draw(const lw_timing *t, lw__draw_at *at)
{
    uint64_t start = 0, n = (uint64_t)t->n;
    if (t->every) {
        lw_address once = {at->seed, at->run, *at->stream++, LW__ONCE_A_RUN};
        start = (uint64_t)(lw_draw_uniform(once) * (double)n);
    }
    return t->value[(start + at->job) % n];
}

static double replay_share(const lw_timing *t, double x)
{
    int below = 0;
    for (int i = 0; i < t->n; i++)
        below += t->value[i] <= x;
    return (double)below / t->n;
}

static double replay_moment(const lw_timing *t, int order)
{
    double sum = 0;
    for (int i = 0; i < t->n; i++)
        sum += power_of(t->value[i], order);
    return sum / t->n;
}

static void replay_describe(const lw_timing *t, char *text, int size)
{
    snprintf(text, (size_t)size, "replay of %d recorded values, %s to %s, from %s", t->n,
             lw__timing_words(t->lo).text, lw__timing_words(t->hi).text,
             t->every ? "a start drawn once a run" : "the first on");
}

static const lw__family replay_family = {"replay",        replay_draw, NULL,
                                         replay_share,    no_density,  replay_moment,
                                         replay_describe, list_cuts,   list_points};

lw_status lw_timing_replay(int n, const double *value, int random_start, lw_timing **out,
                           lw_error *err)
{
    if (n < 1)
        return lw__timing_bad(err, "number of values", n, "at least 1 is wanted");
    lw_timing *t = lw__timing_node(&replay_family, NULL, NULL);
    if (t == NULL)
        return lw__timing_give(t, out, err);
    lw_status status = set_lists(t, n, value, n, NULL, err);
    if (status == LW_OK) {
        t->has_atoms = 1;
        t->lo = t->hi = value[0];
        for (int i = 1; i < n; i++) {
            t->lo = value[i] < t->lo ? value[i] : t->lo;
            t->hi = value[i] > t->hi ? value[i] : t->hi;
        }
        t->every = random_start != 0;
        t->n_streams = random_start != 0;
    }
    return give(t, status, out);
}

// ---- replay from a file

typedef struct reading {
    const char *path;
    double scale, *value;
    int n, room;
    lw_error *err;
} reading;

static lw_status take_line(reading *r, char *line, int number)
{
    char *text = line + strspn(line, " \t"), *end;
    size_t length = strcspn(text, "\n");
    while (length > 0 && text[length - 1] == '\r')
        length--;
    text[length] = 0;
    if (*text == 0 || *text == '#' || *text == ';')
        return LW_OK;
    if (strchr(text, '\r') != NULL)
        return lw_error_set(r->err, LW_ERR_INPUT,
                            "%s:%d: a carriage return within the line; lines end with a line feed",
                            r->path, number);
    double value = strtod(text, &end);
    end += strspn(end, " \t");
    if (end == text || *end != 0 || !isfinite(value))
        return lw_error_set(r->err, LW_ERR_INPUT,
                            "%s:%d: \"%.60s\" is no duration; one number a line is wanted", r->path,
                            number, text);
    if (r->n == r->room) {
        int room = r->room == 0 ? 1024 : 2 * r->room;
        double *grown = lw__realloc(r->value, sizeof(double) * (size_t)room);
        if (grown == NULL)
            return lw_error_set(r->err, LW_ERR_MEMORY, "%s: no memory for the recording", r->path);
        r->value = grown;
        r->room = room;
    }
    r->value[r->n++] = value * r->scale;
    return LW_OK;
}

static lw_status read_lines(reading *r, FILE *file)
{
    char line[512];
    lw_status status = LW_OK;
    int number = 0;
    while (status == LW_OK && fgets(line, sizeof line, file) != NULL) {
        number++;
        int whole = strchr(line, '\n') != NULL || feof(file);
        int comment = line[strspn(line, " \t")] == '#' || line[strspn(line, " \t")] == ';';
        if (!whole && !comment)
            return lw_error_set(r->err, LW_ERR_INPUT,
                                "%s:%d: the line is too long; one number a line is wanted", r->path,
                                number);
        status = take_line(r, line, number);
        for (int c = 0; !whole && c != '\n' && c != EOF;)
            c = fgetc(file);
    }
    if (status == LW_OK && ferror(file))
        return lw_error_set(r->err, LW_ERR_INPUT, "%s: cannot be read: %s", r->path,
                            strerror(errno));
    if (status == LW_OK && r->n == 0)
        return lw_error_set(r->err, LW_ERR_INPUT,
                            "%s: holds no duration; one number a line is wanted", r->path);
    return status;
}

lw_status lw_timing_replay_file(const char *path, double scale, int random_start, lw_timing **out,
                                lw_error *err)
{
    if (!isfinite(scale) || scale <= 0)
        return lw__timing_bad(err, "scale", scale, "permitted above 0");
    FILE *file = fopen(path, "r");
    if (file == NULL)
        return lw_error_set(err, LW_ERR_INPUT, "%s: cannot be opened: %s", path, strerror(errno));
    reading r = {path, scale, NULL, 0, 0, err};
    lw_status status = read_lines(&r, file);
    fclose(file);
    if (status == LW_OK)
        status = lw_timing_replay(r.n, r.value, random_start, out, err);
    lw__free(r.value);
    return status;
}
