// Cores, tasks, buses and frames as they are described: checked one by one, copied into the rig.
// A bus becomes a core of one cycle a bit; a frame becomes a task that copies a signal.

#include "run/definition.h"

#include "base/alloc.h"
#include "cpu/policy.h"

#include <math.h>
#include <string.h>

void lw__rig_free_cpu(lw_rig *rig)
{
    for (int i = 0; i < rig->n_tasks; i++) {
        lw_law_free(rig->tasks[i].law);
        lw_timing_free(rig->tasks[i].takes);
        lw_timing_free(rig->tasks[i].arrives);
        lw_timing_free(rig->tasks[i].jitter);
    }
    lw__free(rig->cores);
    lw__free(rig->tasks);
}

static lw_status fail(const lw__subject *s, lw_status status, const char *text)
{
    return lw__fail_at(s->origin, s->err, status, "%s \"%s\": %s", s->what, s->name, text);
}

// ---- cores

lw_core_def lw_core_default(void)
{
    return (lw_core_def){.clock = (double)NAN, .timer_tick = {0, 1}, .cycle = {0, 1}};
}

static lw_status check_span(const lw__subject *s, const char *field, lw_span span, double clock)
{
    if (span.in_cycles && isnan(clock))
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "%s \"%s\": %s is stated in cycles, but no clock is stated", s->what,
                           s->name, field);
    return span.in_cycles ? lw__check_at_least_0(s, field, span.value)
                          : lw__check_time(s, field, span.value);
}

static lw_status check_resources(const lw__subject *s, const lw_core_def *def)
{
    if (def->n_resources < 0 || def->n_resources > LW_CORE_MAX_RESOURCES)
        return lw__bad_field(s, "number of resources", def->n_resources, "permitted 0 to 16");
    for (int i = 0; i < def->n_resources; i++)
        for (int j = 0; j < i; j++)
            if (strcmp(def->resources[i], def->resources[j]) == 0)
                return lw__fail_at(s->origin, s->err, LW_ERR_DUPLICATE,
                                   "%s \"%s\": resources: \"%s\" is stated twice", s->what, s->name,
                                   def->resources[i]);
    return LW_OK;
}

static lw_status check_table(const lw__subject *s, const lw_core_def *def)
{
    if (!lw__policy_at((int)def->policy)->by_table)
        return def->n_slots == 0 ? LW_OK
                                 : fail(s, LW_ERR_ARGUMENT,
                                        "table is stated; only policy \"time-triggered table\" "
                                        "has one");
    if (def->n_slots == 0)
        return fail(s, LW_ERR_ARGUMENT, "table is missing; a time-triggered table has slots");
    LW__TRY(lw__check_period(s, "cycle", def->cycle));
    double end = 0, cycle = lw_period_seconds(def->cycle);
    for (int i = 0; i < def->n_slots; i++) {
        const lw_slot *slot = &def->slots[i];
        LW__TRY(lw__check_time(s, "at of a slot", slot->at));
        LW__TRY(lw__check_time(s, "lasts of a slot", slot->lasts));
        if (!(slot->lasts > 0))
            return lw__bad_field(s, "lasts of a slot", slot->lasts, "above 0 is wanted");
        if (slot->at < end - 1e-13)
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "%s \"%s\": table: the slot of \"%s\" at %.12g s overlaps the one "
                               "before, which ends at %.12g s",
                               s->what, s->name, slot->task, slot->at, end);
        end = slot->at + slot->lasts;
        if (end > cycle + 1e-13)
            return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                               "%s \"%s\": table: the slot of \"%s\" ends at %.12g s; the cycle "
                               "is %.12g s",
                               s->what, s->name, slot->task, end, cycle);
    }
    return LW_OK;
}

static lw_status check_stalls(const lw__subject *s, const lw_core_def *def)
{
    for (int i = 0; i < def->n_stalls; i++) {
        LW__TRY(lw__check_time(s, "at of a stall", def->stalls[i].at));
        LW__TRY(lw__check_time(s, "lasts of a stall", def->stalls[i].lasts));
        if (i > 0 && !(def->stalls[i].at > def->stalls[i - 1].at))
            return lw__bad_field(s, "at of a stall", def->stalls[i].at, "stalls rise in time");
    }
    return LW_OK;
}

static lw_status check_core(const lw__subject *s, const lw_core_def *def)
{
    if (lw__policy_at((int)def->policy) == NULL)
        return lw__bad_field(s, "policy", (double)def->policy, "not a policy");
    if (!isnan(def->clock) && !(def->clock > 0 && def->clock <= 1e12))
        return lw__bad_field(s, "clock", def->clock, "above 0 and at most 1e12 Hz is wanted");
    if (!(fabs(def->drift) <= 0.1))
        return lw__bad_field(s, "drift", def->drift, "permitted -0.1 to 0.1");
    LW__TRY(check_span(s, "context_switch", def->context_switch, def->clock));
    LW__TRY(check_span(s, "dispatch_cost", def->dispatch_cost, def->clock));
    LW__TRY(check_span(s, "release_cost", def->release_cost, def->clock));
    if (def->timer_tick.num > 0)
        LW__TRY(lw__check_period(s, "timer_tick", def->timer_tick));
    LW__TRY(check_resources(s, def));
    LW__TRY(check_table(s, def));
    return check_stalls(s, def);
}

static const lw_slot *copy_slots(lw__copier *c, const lw_core_def *def)
{
    lw_slot *slots = lw__copy_bytes(c, def->slots, sizeof *slots * (size_t)def->n_slots);
    for (int i = 0; slots != NULL && i < def->n_slots; i++)
        slots[i].task = lw__copy_text(c, slots[i].task);
    return slots;
}

static lw_status add_core(lw_rig *rig, const lw_core_def *def, int is_bus, lw_error *err)
{
    lw__copier c = {rig->arena, 0};
    lw__core_item item = {*def, is_bus, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.resources = lw__copy_texts(&c, def->n_resources, def->resources);
    item.def.slots = copy_slots(&c, def);
    item.def.stalls = lw__copy_bytes(&c, def->stalls, sizeof *def->stalls * (size_t)def->n_stalls);
    lw__core_item *at = lw__room((void **)&rig->cores, rig->n_cores, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_cores++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_add_core(lw_rig *rig, const lw_core_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "core", def->name, err));
    lw__subject s = {def->origin, "core", def->name, err};
    LW__TRY(check_core(&s, def));
    return add_core(rig, def, 0, err);
}

// ---- tasks

lw_task_def lw_task_default(void)
{
    return (lw_task_def){.every = {0, 1},
                         .deadline = (double)NAN,
                         .nominal = (double)NAN,
                         .reads = {LW_PLACE_SHARE, {0, 0}},
                         .writes = {LW_PLACE_SHARE, {1, 0}},
                         .logical = (double)NAN,
                         .queue = 1};
}

static lw_status check_place(const lw__subject *s, const char *field, lw_place place, int is_read)
{
    if (place.kind == LW_PLACE_SHARE && !(place.value.value >= 0 && place.value.value <= 1))
        return lw__bad_field(s, field, place.value.value, "a share from 0 to 1 is wanted");
    if (place.kind == LW_PLACE_AFTER)
        return place.value.in_cycles ? lw__check_at_least_0(s, field, place.value.value)
                                     : lw__check_time(s, field, place.value.value);
    if (place.kind == LW_PLACE_RELEASE && !is_read)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "%s \"%s\": %s cannot be at the release; only reads can", s->what,
                           s->name, field);
    return LW_OK;
}

// A place further on, as far as that can be told without the execution time.
static int before(lw_place a, lw_place b)
{
    return a.kind == b.kind && a.value.in_cycles == b.value.in_cycles &&
           a.value.value < b.value.value;
}

static lw_status check_sections(const lw__subject *s, const lw_task_def *def)
{
    if (def->n_sections < 0 || def->n_sections > LW_TASK_MAX_SECTIONS)
        return lw__bad_field(s, "number of sections", def->n_sections, "permitted 0 to 16");
    for (int i = 0; i < def->n_sections; i++) {
        const lw_section *section = &def->sections[i];
        LW__TRY(check_place(s, "from of a section", section->from, 0));
        LW__TRY(check_place(s, "to of a section", section->to, 0));
        if (section->from.kind != section->to.kind ||
            section->from.value.in_cycles != section->to.value.in_cycles)
            return fail(s, LW_ERR_ARGUMENT,
                        "a section begins and ends in the same terms: shares, seconds or cycles");
        if (!before(section->from, section->to))
            return lw__bad_field(s, "to of a section", section->to.value.value,
                                 "a section ends after it begins");
        if (section->resource != NULL && def->interrupt)
            return fail(s, LW_ERR_ARGUMENT,
                        "sections: an interrupt handler locks no resource; it cannot wait");
    }
    for (int i = 0; i < def->n_yields; i++)
        LW__TRY(check_place(s, "yields", def->yields[i], 0));
    return LW_OK;
}

static lw_status check_timing(const lw__subject *s, const char *field, const lw_timing *timing)
{
    double lo, hi;
    if (timing == NULL)
        return LW_OK;
    lw_timing_support(timing, &lo, &hi);
    if (!(lo >= 0))
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "%s \"%s\": %s has its minimum at %.12g s; a duration is at least 0",
                           s->what, s->name, field, lo);
    return LW_OK;
}

static lw_status check_release(const lw__subject *s, const lw_task_def *def)
{
    int stated = (def->every.num > 0) + (def->released_by != NULL) + (def->arrives != NULL);
    if (stated > 1)
        return fail(s, LW_ERR_ARGUMENT, "one of every, released_by and arrives is wanted");
    if (def->every.num != 0)
        LW__TRY(lw__check_period(s, "every", def->every));
    LW__TRY(lw__check_time(s, "offset", def->offset));
    if (def->every.num == 0 && def->overrun == LW_OVERRUN_REPHASE)
        return fail(s, LW_ERR_ARGUMENT, "overruns: only a clock (every) can be rephased");
    if (def->every.num == 0 && def->delay == LW_DELAY_RELATIVE)
        return fail(s, LW_ERR_ARGUMENT, "delay: only a clock (every) can be relative");
    LW__TRY(check_timing(s, "jitter", def->jitter));
    LW__TRY(check_timing(s, "arrives", def->arrives));
    double lo, hi;
    if (def->arrives != NULL) {
        lw_timing_support(def->arrives, &lo, &hi);
        if (!(hi > 0))
            return fail(s, LW_ERR_ARGUMENT, "arrives: the time between arrivals is always 0");
    }
    return LW_OK;
}

static lw_status check_task(const lw__subject *s, const lw_task_def *def)
{
    LW__TRY(check_release(s, def));
    if (!isnan(def->deadline) && !(def->deadline > 0))
        return lw__bad_field(s, "deadline", def->deadline, "above 0 is wanted");
    if (!isnan(def->deadline))
        LW__TRY(lw__check_time(s, "deadline", def->deadline));
    if (!isnan(def->nominal) && !(def->nominal > 0))
        return lw__bad_field(s, "nominal", def->nominal, "above 0 is wanted");
    if (def->takes == NULL)
        return fail(s, LW_ERR_ARGUMENT, "takes is missing; the execution time is wanted");
    LW__TRY(check_timing(s, "takes", def->takes));
    LW__TRY(check_place(s, "reads", def->reads, 1));
    LW__TRY(check_place(s, "writes", def->writes, 0));
    if (!isnan(def->logical) && !(def->logical > 0))
        return lw__bad_field(s, "logical", def->logical, "above 0 is wanted");
    if (def->queue < 1 || def->queue > LW_TASK_MAX_QUEUE)
        return lw__bad_field(s, "queue", def->queue, "permitted 1 to 64");
    if (!(def->lost >= 0 && def->lost <= 1))
        return lw__bad_field(s, "lost", def->lost, "a chance from 0 to 1 is wanted");
    LW__TRY(check_sections(s, def));
    if (def->law == NULL)
        return def->n_inputs == 0 && def->n_outputs == 0
                   ? LW_OK
                   : fail(s, LW_ERR_ARGUMENT, "inputs or outputs are stated without a law");
    return lw__check_law_wires(s, def->law, def->n_inputs, def->inputs, def->n_outputs,
                               def->outputs);
}

static const lw_section *copy_sections(lw__copier *c, const lw_task_def *def)
{
    lw_section *list = lw__copy_bytes(c, def->sections, sizeof *list * (size_t)def->n_sections);
    for (int i = 0; list != NULL && i < def->n_sections; i++)
        list[i].resource = lw__copy_text(c, list[i].resource);
    return list;
}

static lw_timing *hold(const lw_timing *timing)
{
    return timing != NULL ? lw_timing_hold(timing) : NULL;
}

static lw_status add_task(lw_rig *rig, const lw_task_def *def, int is_frame, lw_error *err)
{
    lw__copier c = {rig->arena, 0};
    lw__task_item item = {.def = *def, .is_frame = is_frame, .place = rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.on = lw__copy_text(&c, def->on);
    item.def.released_by = lw__copy_text(&c, def->released_by);
    item.def.sections = copy_sections(&c, def);
    item.def.yields = lw__copy_bytes(&c, def->yields, sizeof *def->yields * (size_t)def->n_yields);
    item.def.inputs = lw__copy_wires(&c, def->n_inputs, def->inputs);
    item.def.outputs = lw__copy_wires(&c, def->n_outputs, def->outputs);
    lw__task_item *at = lw__room((void **)&rig->tasks, rig->n_tasks, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    item.law = def->law != NULL ? lw_law_hold(def->law) : NULL;
    item.takes = hold(def->takes);
    item.arrives = hold(def->arrives);
    item.jitter = hold(def->jitter);
    *at = item;
    rig->n_tasks++;
    rig->n_places++;
    return LW_OK;
}

lw_status lw_rig_add_task(lw_rig *rig, const lw_task_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "task", def->name, err));
    lw__subject s = {def->origin, "task", def->name, err};
    if (def->on == NULL)
        return fail(&s, LW_ERR_ARGUMENT, "on is missing; the core is wanted");
    LW__TRY(check_task(&s, def));
    return add_task(rig, def, 0, err);
}

// ---- buses

lw_bus_def lw_bus_default(void)
{
    return (lw_bus_def){.urgent = LW_URGENT_SMALLER};
}

lw_status lw_rig_add_bus(lw_rig *rig, const lw_bus_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "bus", def->name, err));
    lw__subject s = {def->origin, "bus", def->name, err};
    if (!(def->rate > 0 && def->rate <= 1e12))
        return lw__bad_field(&s, "rate", def->rate, "above 0 and at most 1e12 bit/s is wanted");
    lw_core_def core = lw_core_default();
    core.origin = def->origin;
    core.name = def->name;
    core.clock = def->rate;
    core.policy = LW_POLICY_FIXED_PRIORITY_WITHOUT_PREEMPTION;
    core.urgent = def->urgent;
    return add_core(rig, &core, 1, err);
}

lw_frame_def lw_frame_default(void)
{
    return (lw_frame_def){.identifier = 11, .every = {0, 1}, .deadline = (double)NAN, .queue = 1};
}

static int copy_step(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out)
{
    (void)param;
    (void)time;
    (void)state;
    out[0] = in[0];
    return 0;
}

static lw_status copying_law(lw_law **out, lw_error *err)
{
    static const char *const in_names[] = {"carries"}, *const out_names[] = {"to"};
    const lw_law_def def = {.kind = "a copy",
                            .n_in = 1,
                            .n_out = 1,
                            .in_names = in_names,
                            .out_names = out_names,
                            .step = copy_step};
    return lw_law_new(&def, out, err);
}

// Bits on the wire, in cycles of the bus.
static lw_status frame_length(const lw__subject *s, const lw_frame_def *def, lw_timing **out)
{
    double bits[40];
    int most = lw_frame_bits(def->bytes, def->identifier, LW_STUFFING_WORST);
    int least = lw_frame_bits(def->bytes, def->identifier, LW_STUFFING_NONE);
    if (def->bits != 0) {
        if (def->bits < 1)
            return lw__bad_field(s, "bits", def->bits, "permitted from 1 on");
        return lw_timing_constant(def->bits, out, s->err);
    }
    if (most < 0)
        return def->bytes < 0 || def->bytes > 8
                   ? lw__bad_field(s, "bytes", def->bytes, "permitted 0 to 8")
                   : lw__bad_field(s, "identifier", def->identifier, "11 or 29 bits");
    if (def->stuffing != LW_STUFFING_RANDOM)
        return lw_timing_constant(def->stuffing == LW_STUFFING_WORST ? most : least, out, s->err);
    for (int k = 0; k <= most - least; k++)
        bits[k] = least + k;
    return lw_timing_discrete(most - least + 1, bits, NULL, out, s->err);
}

static lw_status frame_as_task(lw_rig *rig, const lw__subject *s, const lw_frame_def *def,
                               const lw_timing *length, const lw_law *law)
{
    lw_task_def task = lw_task_default();
    lw_wire in = {"carries", def->carries, 0}, out = {"to", def->to, 0};
    task.origin = def->origin;
    task.name = def->name;
    task.on = def->on;
    task.priority = def->priority;
    task.is_priority = 1;
    task.every = def->every;
    task.offset = def->offset;
    task.released_by = def->released_by;
    task.arrives = def->arrives;
    task.jitter = def->jitter;
    task.deadline = def->deadline;
    task.takes = length;
    task.takes_in_cycles = 1;
    task.reads.kind = LW_PLACE_RELEASE;
    task.overrun = def->overrun;
    task.queue = def->queue;
    task.lost = def->lost;
    task.law = law;
    task.n_inputs = task.n_outputs = law != NULL;
    task.inputs = &in;
    task.outputs = &out;
    task.nominal = 1; // a copy has no use for a period
    LW__TRY(check_task(s, &task));
    return add_task(rig, &task, 1, s->err);
}

lw_status lw_rig_add_frame(lw_rig *rig, const lw_frame_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "frame", def->name, err));
    lw__subject s = {def->origin, "frame", def->name, err};
    if (def->on == NULL)
        return fail(&s, LW_ERR_ARGUMENT, "on is missing; the bus is wanted");
    if ((def->carries == NULL) != (def->to == NULL))
        return fail(&s, LW_ERR_ARGUMENT, "carries and to are stated together, or neither");
    if (def->overrun == LW_OVERRUN_ABORT || def->overrun == LW_OVERRUN_REPHASE)
        return fail(&s, LW_ERR_ARGUMENT, "overruns: a frame is queued or skipped");
    lw_timing *length = NULL;
    lw_law *law = NULL;
    lw_status status = frame_length(&s, def, &length);
    if (status == LW_OK && def->carries != NULL)
        status = copying_law(&law, err);
    if (status == LW_OK)
        status = frame_as_task(rig, &s, def, length, law);
    lw_timing_free(length);
    lw_law_free(law);
    return status;
}
