// Metrics of jobs. Each keeps sum, count and largest of one time of its task's jobs, and, for a
// percentile, a histogram with 512 cells an octave from 2^10 to 2^52 ps: a value is known to 0.1 %.
//
// Workload: a few additions a job and metric.
//
// Invariants
// 1. A metric writes its own cells only.
// 2. A job missed its deadline if it finished later, was skipped or was aborted; at the reading
//    also if it is unfinished and its deadline is past.

#include "run/job_metric.h"

#include <math.h>
#include <string.h>

// Integer cells of counts: misses in a row now, the longest such row, jobs, misses, misses within
// the window now, the most, place in the window; then the window itself.
enum { RUN, LONGEST, JOBS, MISSES, WITHIN, MOST, PLACE, N_COUNTS };

// ---- which kind is what

typedef enum statistic { MEAN, MAXIMUM, PERCENTILE, COUNT } statistic;

typedef struct kind_of {
    lw_metric_kind kind;
    lw__job_time time;
    statistic statistic;
} kind_of;

static const kind_of kinds[] = {
#define JOB_KIND(name, words)                                                                      \
    {LW_METRIC_##name##_MEAN, LW__JOB_##name, MEAN},                                               \
        {LW_METRIC_##name##_MAXIMUM, LW__JOB_##name, MAXIMUM},                                     \
        {LW_METRIC_##name##_PERCENTILE, LW__JOB_##name, PERCENTILE},
    LW_JOB_TIMES(JOB_KIND)
#undef JOB_KIND
        {LW_METRIC_LATENCY_MEAN, LW__JOB_LATENCY, MEAN},
    {LW_METRIC_LATENCY_MAXIMUM, LW__JOB_LATENCY, MAXIMUM},
    {LW_METRIC_LATENCY_PERCENTILE, LW__JOB_LATENCY, PERCENTILE},
    {LW_METRIC_GAP, LW__JOB_GAP, MAXIMUM},
    {LW_METRIC_GAP_MEAN, LW__JOB_GAP, MEAN},
    {LW_METRIC_GAP_PERCENTILE, LW__JOB_GAP, PERCENTILE},
    {LW_METRIC_LOST, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_MISSED, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_JOBS, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_SKIPPED, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_ABORTED, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_MISSES_IN_A_ROW, LW__JOB_NO_TIME, COUNT},
    {LW_METRIC_MISSES_IN_WINDOW, LW__JOB_NO_TIME, COUNT},
};

static const kind_of *look_up(lw_metric_kind kind)
{
    for (size_t i = 0; i < sizeof kinds / sizeof *kinds; i++)
        if (kinds[i].kind == kind)
            return &kinds[i];
    return NULL;
}

static int task_named(const lw_frozen *z, const char *name)
{
    for (int i = 0; i < z->n_tasks; i++)
        if (strcmp(z->tasks[i].name, name) == 0)
            return i;
    return -1;
}

static int dac_named(const lw_frozen *z, const char *name)
{
    for (int i = 0; i < z->n_dacs; i++)
        if (strcmp(z->dacs[i].item->def.name, name) == 0)
            return i;
    return -1;
}

// Kinds that a loop has as well go to tasks only where the name is one.
int lw__job_metric_concerns(const lw__freezer *w, const lw_metric_def *def)
{
    const kind_of *k = look_up(def->kind);
    if (k == NULL)
        return 0;
    int of_loops =
        k->time == LW__JOB_LATENCY || def->kind == LW_METRIC_LOST || def->kind == LW_METRIC_MISSED;
    return !of_loops || task_named(w->z, def->of) >= 0;
}

// ---- freezing

static lw_status unknown(lw__freezer *w, const lw__metric *m, int gap)
{
    return lw__fail_at(m->def.origin, w->err, LW_ERR_NAME, "metric \"%s\": of: no task%s \"%s\"",
                       m->def.name, gap ? " or dac" : "", m->def.of);
}

lw_status lw__job_metric_freeze(lw__freezer *w, lw__metric *m)
{
    lw_frozen *z = w->z;
    const kind_of *k = look_up(m->def.kind);
    m->track = m->loop = -1;
    m->task = task_named(z, m->def.of);
    m->dac = m->task < 0 && k->time == LW__JOB_GAP ? dac_named(z, m->def.of) : -1;
    m->job_time = (int)k->time;
    if (m->task < 0 && m->dac < 0)
        return unknown(w, m, k->time == LW__JOB_GAP);
    if (m->def.kind == LW_METRIC_MISSES_IN_WINDOW && (m->def.window < 1 || m->def.window > 1000000))
        return lw__fail_at(m->def.origin, w->err, LW_ERR_ARGUMENT,
                           "metric \"%s\": window is %lld; permitted 1 to 1000000 jobs",
                           m->def.name, (long long)m->def.window);
    if (m->task >= 0)
        z->tasks[m->task].observed = 1;
    else
        z->dacs[m->dac].gaps = 1;
    m->own = lw__freezer_double(w, m->def.name, "sum, count, largest", LW_SLICE_METRIC, LW__N_OWN);
    int cells = (k->statistic == PERCENTILE ? LW__TIME_CELLS : 0) + (k->time == LW__JOB_GAP);
    if (k->statistic == COUNT)
        cells = N_COUNTS + (m->def.kind == LW_METRIC_MISSES_IN_WINDOW ? (int)m->def.window : 0);
    m->cells = lw__freezer_integer(w, m->def.name, "counts", LW_SLICE_METRIC, cells);
    return m->cells >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// Cell of the last output's instant, behind the histogram.
static int last_output(const lw__metric *m)
{
    return m->cells + (m->def.kind == LW_METRIC_GAP_PERCENTILE ? LW__TIME_CELLS : 0);
}

void lw__job_metric_start(lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    if (m->job_time == LW__JOB_GAP)
        LW__I(last_output(m)) = -1; // none yet
}

// ---- while it runs

static int cell_of(lw_tick t)
{
    int exponent;
    double part = frexp((double)t, &exponent); // [1/2, 1)
    int octave = exponent - 1 - LW__TIME_FIRST_OCTAVE;
    if (octave < 0)
        return 0;
    if (octave >= LW__TIME_OCTAVES)
        return LW__TIME_CELLS - 1;
    return 1 + octave * LW__TIME_PER_OCTAVE + (int)((2 * part - 1) * LW__TIME_PER_OCTAVE);
}

// Middle of a cell [s].
static double middle_of(int cell)
{
    if (cell == 0)
        return 0;
    int octave = (cell - 1) / LW__TIME_PER_OCTAVE;
    double part = 1 + ((cell - 1) % LW__TIME_PER_OCTAVE + 0.5) / LW__TIME_PER_OCTAVE;
    return ldexp(part, octave + LW__TIME_FIRST_OCTAVE) * 1e-12;
}

static void sum_up(lw__lane *s, const lw__metric *m, lw_tick time)
{
    int W = s->width, L = s->lane;
    double seconds = lw_tick_seconds(time);
    LW__F(m->own) += seconds;
    LW__F(m->own + 1) += 1;
    LW__F(m->own + 2) = fmax(LW__F(m->own + 2), seconds);
}

void lw__time_take(lw__lane *s, const lw__metric *m, lw_tick time)
{
    int W = s->width, L = s->lane;
    sum_up(s, m, time);
    LW__I(m->cells + cell_of(time)) += 1;
}

static void take(lw__lane *s, const lw__metric *m, lw_tick time)
{
    if (look_up(m->def.kind)->statistic == PERCENTILE)
        lw__time_take(s, m, time);
    else
        sum_up(s, m, time);
}

static void take_gap(lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    lw_tick last = LW__I(last_output(m));
    LW__I(last_output(m)) = s->now;
    if (last >= 0 && last >= m->def.from)
        take(s, m, s->now - last);
}

static int is_open(const lw__lane *s, const lw__metric *m)
{
    return s->now >= m->def.from && s->now <= m->def.until;
}

void lw__dac_changed(lw__lane *s, const lw__dac *d)
{
    for (int k = 0; k < s->z->n_metrics; k++) {
        const lw__metric *m = &s->z->metrics[k];
        if (m->dac >= 0 && &s->z->dacs[m->dac] == d && is_open(s, m))
            take_gap(s, m);
    }
}

static void count_job(lw__lane *s, const lw__metric *m, const lw__job_end *e, int missed)
{
    int W = s->width, L = s->lane;
    int at = m->cells;
    LW__I(at + JOBS) += m->def.kind == LW_METRIC_SKIPPED   ? e->outcome == LW_JOB_SKIPPED
                        : m->def.kind == LW_METRIC_ABORTED ? e->outcome == LW_JOB_ABORTED
                                                           : e->outcome == LW_JOB_FINISHED;
    LW__I(at + MISSES) += missed;
    LW__I(at + RUN) = missed ? LW__I(at + RUN) + 1 : 0;
    if (LW__I(at + RUN) > LW__I(at + LONGEST))
        LW__I(at + LONGEST) = LW__I(at + RUN);
    if (m->def.kind != LW_METRIC_MISSES_IN_WINDOW)
        return;
    int64_t place = LW__I(at + PLACE);
    LW__I(at + WITHIN) += missed - LW__I(at + N_COUNTS + place);
    LW__I(at + N_COUNTS + place) = missed;
    LW__I(at + PLACE) = (place + 1) % m->def.window;
    if (LW__I(at + WITHIN) > LW__I(at + MOST))
        LW__I(at + MOST) = LW__I(at + WITHIN);
}

// A time of a job; -1 where it has none.
static lw_tick time_of(const lw__job_end *e, lw__job_time which)
{
    int read = e->read >= 0, written = e->written >= 0;
    switch (which) {
    case LW__JOB_LATENESS:
        return e->ready - e->nominal;
    case LW__JOB_START:
        return e->start >= 0 ? e->start - e->nominal : -1;
    case LW__JOB_RESPONSE:
        return e->outcome == LW_JOB_FINISHED ? e->finish - e->nominal : -1;
    case LW__JOB_EXECUTION:
        return e->outcome == LW_JOB_FINISHED ? e->executed : -1;
    case LW__JOB_READ_TO_WRITE:
        return read && written && e->written >= e->read ? e->written - e->read : -1;
    case LW__JOB_DATA_AGE:
        return read ? e->read - e->sample : -1;
    case LW__JOB_LATENCY:
        return read && written && e->written >= e->sample ? e->written - e->sample : -1;
    default:
        return -1;
    }
}

void lw__job_observed(lw__lane *s, const lw__task *t, const lw__job_end *e)
{
    int missed = e->outcome != LW_JOB_FINISHED ||
                 (t->deadline != LW_NEVER && e->finish - e->nominal > t->deadline);
    for (int k = 0; k < s->z->n_metrics; k++) {
        const lw__metric *m = &s->z->metrics[k];
        if (m->task != t->index || !is_open(s, m))
            continue;
        if (m->job_time == LW__JOB_NO_TIME) {
            count_job(s, m, e, missed);
            continue;
        }
        lw_tick time = time_of(e, (lw__job_time)m->job_time);
        if (time >= 0)
            take(s, m, time);
    }
}

void lw__task_wrote(lw__lane *s, const lw__task *t)
{
    int W = s->width, L = s->lane;
    for (int k = 0; k < s->z->n_metrics; k++) {
        const lw__metric *m = &s->z->metrics[k];
        if (m->task != t->index || !is_open(s, m))
            continue;
        if (m->job_time == LW__JOB_GAP)
            take_gap(s, m);
        else if (t->logical != LW_NEVER && m->job_time == LW__JOB_READ_TO_WRITE)
            take(s, m, t->logical); // written long after the job is over
        else if (t->logical != LW_NEVER && m->job_time == LW__JOB_LATENCY)
            take(s, m, s->now - LW__I(t->law.stepped_at));
    }
}

// ---- reading

double lw__time_percentile(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    double total = LW__F(m->own + 1), below = 0, largest = LW__F(m->own + 2);
    for (int k = 0; k < LW__TIME_CELLS; k++) {
        below += (double)LW__I(m->cells + k);
        if (below >= m->def.share * total)
            return fmin(middle_of(k), largest);
    }
    return largest;
}

// Jobs still unfinished whose deadline is past.
static int64_t late_now(const lw__lane *s, const lw__task *t)
{
    int W = s->width, L = s->lane;
    int64_t late = 0;
    for (int64_t k = 0; t->deadline != LW_NEVER && k < LW__I(t->count); k++)
        late += LW__I(t->ring_nominal + ((LW__I(t->head) + k) & t->mask)) + t->deadline < s->now;
    return late;
}

static double count_value(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    const lw__task *t = &s->z->tasks[m->task];
    int64_t late = late_now(s, t), run = LW__I(m->cells + RUN) + late;
    switch (m->def.kind) {
    case LW_METRIC_LOST:
        return t->has_law ? (double)LW__I(t->law.n_lost) : 0;
    case LW_METRIC_MISSED:
        return (double)(LW__I(m->cells + MISSES) + late);
    case LW_METRIC_MISSES_IN_A_ROW:
        return fmax((double)LW__I(m->cells + LONGEST), (double)run);
    case LW_METRIC_MISSES_IN_WINDOW:
        return (double)LW__I(m->cells + MOST);
    default:
        return (double)LW__I(m->cells + JOBS);
    }
}

double lw__job_metric_value(const lw__lane *s, const lw__metric *m)
{
    int W = s->width, L = s->lane;
    const kind_of *k = look_up(m->def.kind);
    if (k->statistic == COUNT)
        return count_value(s, m);
    if (LW__F(m->own + 1) == 0)
        return (double)NAN;
    if (k->statistic == MEAN)
        return LW__F(m->own) / LW__F(m->own + 1);
    return k->statistic == MAXIMUM ? LW__F(m->own + 2) : lw__time_percentile(s, m);
}
