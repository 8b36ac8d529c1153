// Comparators and trips as they are described: copies, checked one by one.

#include "run/definition.h"

#include "base/alloc.h"
#include "base/text.h"

#include <string.h>

lw_comparator_def lw_comparator_default(void)
{
    return (lw_comparator_def){.start = -1};
}

static lw_status check_comparator(const lw__subject *s, const lw_comparator_def *def)
{
    LW__TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->of, 1, s->err)));
    if (def->against != NULL)
        LW__TRY(lw__blame(s->origin, s->err, lw__name_check("signal", def->against, 1, s->err)));
    else
        LW__TRY(lw__check_finite(s, def->below ? "below" : "above", def->level));
    LW__TRY(lw__check_at_least_0(s, "hysteresis", def->hysteresis));
    LW__TRY(lw__check_time(s, "delay", def->delay));
    return lw__check_time(s, "blanking", def->blanking);
}

lw_status lw_rig_add_comparator(lw_rig *rig, const lw_comparator_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "comparator", def->name, err));
    lw__subject s = {def->origin, "comparator", def->name, err};
    LW__TRY(check_comparator(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__comparator_item item = {*def, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.of = lw__copy_text(&c, def->of);
    item.def.against = lw__copy_text(&c, def->against);
    lw__comparator_item *at = lw__room((void **)&rig->comparators, rig->n_comparators, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_comparators++;
    rig->n_places++;
    return LW_OK;
}

lw_trip_def lw_trip_default(void)
{
    return (lw_trip_def){.until = LW_TRIP_RUN};
}

static lw_status check_trip(const lw__subject *s, const lw_trip_def *def)
{
    LW__TRY(lw__blame(s->origin, s->err, lw__name_check("trip by", def->by, 0, s->err)));
    LW__TRY(lw__blame(s->origin, s->err, lw__name_check("trip output", def->output, 0, s->err)));
    LW__TRY(lw__check_finite(s, "to", def->to));
    if (def->until != LW_TRIP_TIME)
        return LW_OK;
    LW__TRY(lw__check_time(s, "lasts", def->time));
    return def->time >= 1e-12 ? LW_OK
                              : lw__bad_field(s, "lasts", def->time, "at least 1 ps is wanted");
}

lw_status lw_rig_add_trip(lw_rig *rig, const lw_trip_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "trip", def->name, err));
    lw__subject s = {def->origin, "trip", def->name, err};
    LW__TRY(check_trip(&s, def));
    lw__copier c = {rig->arena, 0};
    lw__trip_item item = {*def, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.by = lw__copy_text(&c, def->by);
    item.def.output = lw__copy_text(&c, def->output);
    lw__trip_item *at = lw__room((void **)&rig->trips, rig->n_trips, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_trips++;
    rig->n_places++;
    return LW_OK;
}

void lw__rig_free_events(lw_rig *rig)
{
    lw__free(rig->comparators);
    lw__free(rig->trips);
}

const char *lw__rig_event_thing(const lw_rig *rig, const char *name)
{
    for (int i = 0; i < rig->n_comparators; i++)
        if (strcmp(rig->comparators[i].def.name, name) == 0)
            return "comparator";
    for (int i = 0; i < rig->n_trips; i++)
        if (strcmp(rig->trips[i].def.name, name) == 0)
            return "trip";
    return NULL;
}
