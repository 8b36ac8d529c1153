// Events by name: who triggers whom.

#include "run/event.h"

#include "run/comparator.h"
#include "run/schedule.h"

#include <string.h>

#define MOST_NAMES 256 // among which the nearest is looked for
#define MOST_HOPS 4096

typedef struct search {
    const char *wanted;
    lw__event found;
    int n;
    const char *names[MOST_NAMES];
} search;

static void offer(search *l, const char *name, lw__event_kind kind, int index)
{
    if (strcmp(name, l->wanted) == 0)
        l->found = (lw__event){kind, index};
    if (l->n < MOST_NAMES)
        l->names[l->n++] = name;
}

static void offer_all(const lw__freezer *w, search *l)
{
    for (int i = 0; i < w->z->n_adcs; i++)
        offer(l, w->rig->adcs[i].def.name, LW__EVENT_ADC, i);
    for (int i = 0; i < w->z->n_tasks; i++)
        offer(l, w->rig->tasks[i].def.name, LW__EVENT_TASK, i);
    for (int i = 0; i < w->z->n_comparators; i++)
        offer(l, w->rig->comparators[i].def.name, LW__EVENT_COMPARATOR, i);
}

lw_status lw__event_find(lw__freezer *w, const char *origin, const char *what, const char *owner,
                         const char *field, const char *name, lw__event *out)
{
    search l = {.wanted = name};
    offer_all(w, &l);
    *out = l.found;
    if (l.found.kind != LW__EVENT_NONE)
        return LW_OK;
    const char *near = lw_nearest_name(name, l.names, l.n);
    return lw__fail_at(origin, w->err, LW_ERR_NAME,
                       "%s \"%s\": %s: no adc, task or comparator \"%s\"%s%s%s", what, owner, field,
                       name, near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

lw__set *lw__event_set(const lw_frozen *z, lw__event event)
{
    switch (event.kind) {
    case LW__EVENT_ADC:
        return &z->adcs[event.index].after;
    case LW__EVENT_TASK:
        return &z->tasks[event.index].after;
    case LW__EVENT_COMPARATOR:
        return &z->comparators[event.index].after;
    case LW__EVENT_NONE:
        break;
    }
    return NULL;
}

// The event that triggers the thing whose event this is.
static lw__event cause_of(const lw_frozen *z, lw__event event, lw_period *period)
{
    *period = (lw_period){0, 1};
    switch (event.kind) {
    case LW__EVENT_ADC:
        if (z->adcs[event.index].has_clock)
            *period = z->adcs[event.index].item->def.every;
        return z->adcs[event.index].trigger;
    case LW__EVENT_TASK:
        *period = z->tasks[event.index].release == LW__RELEASE_EVENT ? (lw_period){0, 1}
                                                                     : z->tasks[event.index].period;
        return z->tasks[event.index].trigger;
    case LW__EVENT_COMPARATOR:
    case LW__EVENT_NONE:
        break;
    }
    return (lw__event){LW__EVENT_NONE, -1};
}

lw_status lw__event_period(lw__freezer *w, lw__event event, lw_period *out)
{
    *out = (lw_period){0, 1};
    for (int hops = 0; event.kind != LW__EVENT_NONE && out->num == 0; hops++) {
        if (hops > MOST_HOPS)
            return LW_ERR_LOOP;
        event = cause_of(w->z, event, out);
    }
    return LW_OK;
}
