// Processors, tasks, buses and frames in words.

#include "run/describe.h"
#include "run/schedule.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static const char *const lockings[] = {
    "a resource leaves priorities as they are",
    "who holds a resource inherits the urgency of whom it keeps waiting",
    "who holds a resource runs at the urgency of its most urgent user (immediate ceiling)"};

// ---- cores

static void describe_costs(writer *w, const lw__core *c)
{
    const lw_core_def *d = &c->item->def;
    say(w,
        "  each release costs %s, each start or resumption %s, and %s more where another job "
        "ran last",
        time_words(c->release_cost).text, time_words(c->dispatch_cost).text,
        time_words(c->switch_cost).text);
    if (c->timer_tick.num > 0)
        say(w, "  releases by clock come with the next tick of its timer: %s",
            period_words(c->timer_tick).text);
    if (d->drift != 0)
        say(w, "  its clock is %s by %.6g ppm; periods, offsets, ticks and cycles are its own",
            d->drift > 0 ? "fast" : "slow", fabs(d->drift) * 1e6);
    for (int k = 0; k < c->n_stalls; k++)
        say(w, "  it stands still from %s on for %s", time_words(c->stalls[k].at).text,
            time_words(c->stalls[k].lasts).text);
    for (int k = 0; k < c->n_resources; k++)
        say(w, "  resource \"%s\"", d->resources[k]);
    if (c->n_resources > 0)
        say(w, "  %s%s", lockings[c->locking], c->locking == LW_LOCKING_NONE ? " (default)" : "");
}

static void describe_table(writer *w, const lw__core *c)
{
    for (int k = 0; k < c->n_turns; k++)
        if (c->turns[k].rank >= 0)
            say(w, "  slot of \"%s\" at %s in each cycle of %s", c->tasks[c->turns[k].rank]->name,
                time_words(c->turns[k].at).text, period_words(c->table_cycle).text);
}

// Share of the core that its tasks ask for, where all have a period.
static double utilisation(const lw__core *c, double *most)
{
    double mean = 0;
    *most = 0;
    for (int r = 0; r < c->n_tasks; r++) {
        const lw__task *t = c->tasks[r];
        double between = t->release == LW__RELEASE_ARRIVALS ? lw_timing_moment(t->item->arrives, 1)
                                                            : lw_period_seconds(t->period);
        if (!(between > 0))
            continue;
        double takes = t->takes.timing != NULL
                           ? lw_timing_moment(t->takes.timing, 1) * t->takes.scale * 1e-12
                           : lw_tick_seconds(t->takes.constant);
        mean += takes / between;
        *most += lw_tick_seconds(t->takes.most) / between;
    }
    return mean;
}

static void describe_core(writer *w, const lw__core *c)
{
    const lw_core_def *d = &c->item->def;
    double most, mean = utilisation(c, &most);
    if (c->item->is_bus)
        say(w, "bus \"%s\": %.6g bit/s, the %s number goes first; a frame is sent whole", c->name,
            d->clock, d->urgent == LW_URGENT_LARGER ? "larger" : "smaller");
    else
        say(w, "core \"%s\": %s%s: %s%s", c->name, lw_policy_words(d->policy),
            d->policy == LW_POLICY_FIXED_PRIORITY ? " (default)" : "", c->policy->rule,
            d->urgent == LW_URGENT_LARGER    ? "; larger priority numbers are urgent"
            : d->urgent == LW_URGENT_SMALLER ? "; smaller priority numbers are urgent"
                                             : "");
    if (!c->item->is_bus)
        describe_costs(w, c);
    describe_table(w, c);
    say(w, "  %d %s%s ask%s for %.4g %% of its time on average, %.4g %% at most%s", c->n_tasks,
        c->item->is_bus ? "frame" : "task", c->n_tasks == 1 ? "" : "s", c->n_tasks == 1 ? "s" : "",
        100 * mean, 100 * most,
        mean > 1   ? ": more than it has, jobs will be late or skipped"
        : most > 1 ? ": at the longest more than it has"
                   : "");
}

// ---- tasks

static words use_words(const lw__use *u)
{
    words w;
    if (u->timing == NULL)
        return time_words(u->constant);
    lw_timing_describe(u->timing, w.text, sizeof w.text);
    return w;
}

static words takes_words(const lw__task *t)
{
    words w;
    if (t->takes.timing == NULL || !t->item->def.takes_in_cycles)
        return use_words(&t->takes);
    words least = time_words(t->takes.least), most = time_words(t->takes.most);
    snprintf(w.text, sizeof w.text, "%.60s to %.60s, by a timing in cycles", least.text, most.text);
    return w;
}

static void describe_release(writer *w, const lw__task *t)
{
    const lw_task_def *d = &t->item->def;
    if (t->release == LW__RELEASE_CLOCK && t->relative)
        say(w, "  released %s after its job before has finished, first at %s",
            period_words(t->period).text, time_words(t->offset).text);
    else if (t->release == LW__RELEASE_CLOCK)
        say(w, "  released every %s from %s on", period_words(t->period).text,
            time_words(t->offset).text);
    else if (t->release == LW__RELEASE_ARRIVALS)
        say(w, "  released by arrivals, %s apart", use_words(&t->arrives).text);
    else if (t->release == LW__RELEASE_EVENT)
        say(w, "  released by \"%s\" (%s)", d->released_by,
            t->trigger.kind == LW__EVENT_TASK         ? "its finish"
            : t->trigger.kind == LW__EVENT_COMPARATOR ? "an edge of the comparator"
                                                      : "its end of conversion");
    else
        say(w, "  released by the slots of its core's table");
    if (t->has_jitter)
        say(w, "  each release comes late by %s, drawn from \"%s.jitter\"",
            use_words(&t->jitter).text, t->name);
}

static words place_words(lw_place p)
{
    words w;
    if (p.kind == LW_PLACE_RELEASE)
        snprintf(w.text, sizeof w.text, "its release");
    else if (p.kind == LW_PLACE_AFTER)
        snprintf(w.text, sizeof w.text, "%.6g %s of execution", p.value.value,
                 p.value.in_cycles ? "cycles" : "s");
    else if (p.value.value == 0 || p.value.value == 1)
        snprintf(w.text, sizeof w.text, p.value.value == 0 ? "its start" : "its finish");
    else
        snprintf(w.text, sizeof w.text, "%.6g %% of its execution", 100 * p.value.value);
    return w;
}

static void describe_law(writer *w, const lw__task *t)
{
    const lw_task_def *d = &t->item->def;
    if (!t->item->is_frame)
        say(w, "  %s, nominal period %s s", t->law.law->kind, number_words(t->law.nominal).text);
    words at = t->logical != LW_NEVER ? place_words((lw_place){LW_PLACE_RELEASE, {0, 0}})
                                      : place_words(d->reads);
    const char *by_default =
        d->reads.kind == LW_PLACE_SHARE && d->reads.value.value == 0 ? " (default)" : "";
    for (int k = 0; k < d->n_inputs; k++)
        if (d->inputs[k].signal != NULL)
            say(w, "  reads %s from \"%s\" at %s%s", d->inputs[k].port, d->inputs[k].signal,
                at.text, t->logical != LW_NEVER ? "" : by_default);
        else
            say(w, "  reads %s as the constant %.9g", d->inputs[k].port, d->inputs[k].constant);
    by_default = d->writes.kind == LW_PLACE_SHARE && d->writes.value.value == 1 ? " (default)" : "";
    for (int k = 0; k < d->n_outputs; k++)
        if (t->logical != LW_NEVER)
            say(w, "  writes %s to \"%s\" %s after each release (logical execution time)",
                d->outputs[k].port, d->outputs[k].signal, time_words(t->logical).text);
        else
            say(w, "  writes %s to \"%s\" at %s%s", d->outputs[k].port, d->outputs[k].signal,
                place_words(d->writes).text, by_default);
    if (t->lost > 0)
        say(w, "  its writes are lost with probability %.6g", t->lost);
}

static void describe_overrun(writer *w, const lw__task *t)
{
    const lw_task_def *d = &t->item->def;
    switch (t->overrun) {
    case LW_OVERRUN_QUEUE:
        say(w, "  a release that finds its job before unfinished waits, %d deep%s; %s", t->queue,
            t->queue == 1 ? " (default)" : "",
            d->full_is_end ? "one more ends the run" : "further ones are skipped (default)");
        return;
    case LW_OVERRUN_SKIP:
        say(w, "  a release that finds its job before unfinished is skipped");
        return;
    case LW_OVERRUN_ABORT:
        say(w, "  a release ends its unfinished job before, which writes no more");
        return;
    case LW_OVERRUN_REPHASE:
        say(w, "  a release that finds its job before unfinished comes when that finishes, and "
               "its clock goes on from there");
        return;
    }
}

static void describe_sections(writer *w, const lw__core *c, const lw__task *t)
{
    const lw_task_def *d = &t->item->def;
    for (int k = 0; k < t->n_sections; k++) {
        words from = place_words(d->sections[k].from);
        words to = place_words(d->sections[k].to);
        if (t->sections[k].resource >= 0)
            say(w, "  holds \"%s\" from %s to %s", c->item->def.resources[t->sections[k].resource],
                from.text, to.text);
        else
            say(w, "  nothing interrupts it from %s to %s", from.text, to.text);
    }
    for (int k = 0; k < d->n_yields; k++)
        say(w, "  lets others go first at %s", place_words(d->yields[k]).text);
}

static void describe_task(writer *w, const lw_frozen *z, const lw__task *t)
{
    const lw__core *c = &z->cores[t->core];
    const lw_task_def *d = &t->item->def;
    char rank[64] = "";
    if (d->is_priority)
        snprintf(rank, sizeof rank, ", %s %d", t->is_handler ? "interrupt level" : "priority",
                 d->priority);
    say(w, "%s \"%s\" on \"%s\"%s: takes %s", t->item->is_frame ? "frame" : "task", t->name,
        c->name, rank, takes_words(t).text);
    describe_release(w, t);
    if (t->deadline != LW_NEVER)
        say(w, "  its deadline is %s after the nominal release%s", time_words(t->deadline).text,
            isnan(d->deadline) ? " (default: a period)" : "");
    if (t->has_law)
        describe_law(w, t);
    describe_overrun(w, t);
    describe_sections(w, c, t);
}

// ---- who sees what

static void describe_reader(writer *w, const char *value, const lw__task *by, const char *what,
                            const char *name, int n, const lw_wire *inputs)
{
    for (int k = 0; k < n; k++)
        if (inputs[k].signal != NULL && strcmp(inputs[k].signal, value) == 0)
            say(w,
                "at one tick: \"%s\" is written by %s \"%s\" and read by %s \"%s\", which sees "
                "the new value",
                value, by->law.what, by->name, what, name);
}

// A job's write comes first in its tick: whoever reads it then sees the new value.
static void describe_readers(writer *w, const lw_frozen *z, const lw__task *t)
{
    for (int k = 0; t->has_law && t->takes.least > 0 && k < t->law.n_targets; k++) {
        if (t->law.targets[k].dac != NULL)
            continue;
        const char *value = t->law.targets[k].value->name;
        for (int i = 0; i < z->n_loops; i++) {
            const lw_loop_def *d = &z->loops[i].item->def;
            describe_reader(w, value, t, "loop", d->name, d->n_inputs, d->inputs);
        }
        for (int i = 0; i < z->n_tasks; i++) {
            const lw_task_def *d = &z->tasks[i].item->def;
            describe_reader(w, value, t, z->tasks[i].law.what, d->name, d->n_inputs, d->inputs);
        }
    }
}

void lw__describe_cpu(writer *w, const lw_frozen *z)
{
    for (int i = 0; i < z->n_cores; i++)
        describe_core(w, &z->cores[i]);
    for (int i = 0; i < z->n_tasks; i++)
        describe_task(w, z, &z->tasks[i]);
    for (int i = 0; i < z->n_tasks; i++)
        describe_readers(w, z, &z->tasks[i]);
}
