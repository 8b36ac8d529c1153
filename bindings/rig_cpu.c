// rig:core, rig:task, rig:bus, rig:frame: processors and what runs on them.

#include "module.h"
#include "rig.h"
#include "wires.h"

#include <latewood/cpu.h>
#include <latewood/quantity.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#define N_FIELDS(fields) ((int)(sizeof(fields) / sizeof *(fields)))

static const char *const urgencies[] = {"", "larger", "smaller", NULL};

// ---- durations and places

// Cycles, where the text at `index` states them.
static int reads_cycles(const lw__lua_reader *r, const char *field, int index, double *cycles)
{
    lw_error err = {LW_OK, ""};
    lw_quantity q;
    if (lua_type(r->L, index) != LUA_TSTRING)
        return 0;
    const char *text = lw__lua_field_text(r, field, index);
    if (lw_quantity_parse(text, &q, &err) != LW_OK || q.kind != LW_UNIT_CYCLES)
        return 0;
    *cycles = q.value;
    return 1;
}

static lw_span span_at(const lw__lua_reader *r, const char *field, int index)
{
    double cycles;
    if (reads_cycles(r, field, index, &cycles))
        return (lw_span){cycles, 1};
    return (lw_span){lw__lua_number(r, field, index, "s"), 0};
}

static lw_span span_field(const lw__lua_reader *r, const char *field)
{
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return (lw_span){0, 0};
    return span_at(r, field, -1);
}

// "start", "finish", "release", a share of the job, or a time or cycles after its start.
static lw_place place_at(const lw__lua_reader *r, const char *field, int index)
{
    static const struct {
        const char *word;
        lw_place place;
    } words[] = {{"start", {LW_PLACE_SHARE, {0, 0}}},
                 {"finish", {LW_PLACE_SHARE, {1, 0}}},
                 {"release", {LW_PLACE_RELEASE, {0, 0}}}};
    lw_error err = {LW_OK, ""};
    lw_quantity q;
    if (lua_type(r->L, index) != LUA_TSTRING)
        return (lw_place){LW_PLACE_AFTER, {lw__lua_number(r, field, index, "s"), 0}};
    const char *text = lw__lua_field_text(r, field, index);
    for (size_t i = 0; i < sizeof words / sizeof *words; i++)
        if (strcmp(words[i].word, text) == 0)
            return words[i].place;
    if (lw_quantity_parse(text, &q, &err) == LW_OK && q.kind == LW_UNIT_PERCENT)
        return (lw_place){LW_PLACE_SHARE, {q.value, 0}};
    return (lw_place){LW_PLACE_AFTER, span_at(r, field, index)};
}

static void place_field(const lw__lua_reader *r, const char *field, lw_place *out)
{
    if (lw__lua_push_field(r, field) != LUA_TNIL)
        *out = place_at(r, field, -1);
}

// The tables of list `field`; element i is read by `read` through a reader of its own.
typedef void (*element_reader)(lw__lua_reader *r, int i, void *list);

static int read_elements(const lw__lua_reader *r, const char *field, size_t size, void **out,
                         element_reader read)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return 0;
    int list = lua_gettop(L);
    int n = lw__lua_length(r, field, list, "a list of tables");
    *out = lw__lua_room(L, (size_t)n + 1, size);
    luaL_checkstack(L, 8 * n + 16, NULL);
    for (int i = 0; i < n; i++) {
        lw__lua_reader inner = *r;
        if (lua_rawgeti(L, list, i + 1) != LUA_TTABLE)
            lw__lua_bad_type(r, field, -1, "a table");
        inner.table = lua_gettop(L);
        inner.subject = lua_pushfstring(L, "%s: %s", r->subject, field);
        read(&inner, i, *out);
    }
    return n;
}

// ---- cores

typedef struct core {
    lw_core_def def;
    int policy, urgent, locking;
    lw__lua_texts resources;
} core;

static const char *const policies[] = {
#define POLICY(name, words) words,
    LW_POLICY_LIST(POLICY)
#undef POLICY
        NULL};
static const char *const lockings[] = {"none", "inheritance", "ceiling", NULL};

static const lw__lua_field core_fields[] = {
    OTHER("context_switch"),
    OTHER("dispatch_cost"),
    OTHER("release_cost"),
    OTHER("drift"),
    OTHER("table"),
    OTHER("stalls"),
    OPTIONAL(core, def.clock, "clock", FIELD_NUMBER, "Hz"),
    CHOICE(core, policy, "policy", policies),
    CHOICE(core, urgent, "urgent", urgencies),
    CHOICE(core, locking, "locking", lockings),
    OPTIONAL(core, def.timer_tick, "timer_tick", FIELD_PERIOD, NULL),
    OPTIONAL(core, def.cycle, "cycle", FIELD_PERIOD, NULL),
    OPTIONAL(core, resources, "resources", FIELD_TEXTS, NULL),
};

static void read_slot(lw__lua_reader *r, int i, void *list)
{
    lw_slot *slot = (lw_slot *)list + i;
    static const lw__lua_field fields[] = {REQUIRED(lw_slot, at, "at", FIELD_NUMBER, "s"),
                                           REQUIRED(lw_slot, lasts, "lasts", FIELD_NUMBER, "s")};
    lua_rawgeti(r->L, r->table, 1);
    slot->task = lw__lua_field_text(r, "the task", -1);
    LW__LUA_FIELDS(r, fields, 1, slot);
}

static void read_stall(lw__lua_reader *r, int i, void *list)
{
    static const lw__lua_field fields[] = {REQUIRED(lw_stall, at, "at", FIELD_NUMBER, "s"),
                                           REQUIRED(lw_stall, lasts, "lasts", FIELD_NUMBER, "s")};
    LW__LUA_FIELDS(r, fields, 0, (lw_stall *)list + i);
}

// A share; "20 ppm" as well.
static double read_drift(const lw__lua_reader *r)
{
    if (lw__lua_push_field(r, "drift") == LUA_TNIL)
        return 0;
    if (lua_type(r->L, -1) == LUA_TSTRING) {
        const char *text = lw__lua_field_text(r, "drift", -1);
        size_t n = strlen(text);
        if (n > 3 && strcmp(text + n - 3, "ppm") == 0) {
            lua_pushlstring(r->L, text, n - 3);
            return lw__lua_number(r, "drift", -1, "1") * 1e-6;
        }
    }
    return lw__lua_number(r, "drift", -1, "1");
}

int lw__lua_rig_core(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    core p = {.def = lw_core_default()};
    void *slots = NULL, *stalls = NULL;
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "core", &p.def.name);
    LW__LUA_FIELDS(&r, core_fields, 1, &p);
    p.def.origin = r.origin;
    p.def.policy = (lw_policy)p.policy;
    p.def.urgent = (lw_urgent)p.urgent;
    p.def.locking = (lw_locking)p.locking;
    p.def.n_resources = p.resources.n;
    p.def.resources = p.resources.v;
    p.def.context_switch = span_field(&r, "context_switch");
    p.def.dispatch_cost = span_field(&r, "dispatch_cost");
    p.def.release_cost = span_field(&r, "release_cost");
    p.def.drift = read_drift(&r);
    p.def.n_slots = read_elements(&r, "table", sizeof(lw_slot), &slots, read_slot);
    p.def.slots = slots;
    p.def.n_stalls = read_elements(&r, "stalls", sizeof(lw_stall), &stalls, read_stall);
    p.def.stalls = stalls;
    return lw__lua_rig_added(&r, lw_rig_add_core(rig->it, &p.def, &err), &err);
}

// ---- tasks

typedef struct task {
    lw_task_def def;
    int overruns, delay, when_full;
    int64_t priority, interrupt;
} task;

static const char *const overruns[] = {"queue", "skip", "abort", "rephase", NULL};
static const char *const delays[] = {"absolute", "relative", NULL};
static const char *const when_full[] = {"skip", "end the run", NULL};

#define UNSTATED INT64_MIN

static const lw__lua_field task_fields[] = {
    OTHER("law"),
    OTHER("output"),
    OTHER("offset"),
    OTHER("arrives"),
    OTHER("jitter"),
    OTHER("deadline"),
    OTHER("takes"),
    OTHER("reads"),
    OTHER("writes"),
    OTHER("logical"),
    OTHER("sections"),
    OTHER("masked"),
    OTHER("yields"),
    REQUIRED(task, def.on, "on", FIELD_TEXT, NULL),
    OPTIONAL(task, priority, "priority", FIELD_LONG, NULL),
    OPTIONAL(task, interrupt, "interrupt", FIELD_LONG, NULL),
    OPTIONAL(task, def.every, "every", FIELD_PERIOD, NULL),
    OPTIONAL(task, def.released_by, "released_by", FIELD_TEXT, NULL),
    OPTIONAL(task, def.nominal, "nominal", FIELD_NUMBER, "s"),
    CHOICE(task, overruns, "overruns", overruns),
    OPTIONAL(task, def.queue, "queue", FIELD_COUNT, NULL),
    CHOICE(task, when_full, "when_full", when_full),
    CHOICE(task, delay, "delay", delays),
    OPTIONAL(task, def.lost, "lost", FIELD_NUMBER, "1"),
};

static const lw_timing *timing_field(const lw__lua_reader *r, const char *field)
{
    return lw__lua_push_field(r, field) == LUA_TNIL ? NULL : lw__lua_timing_at(r, field, -1);
}

typedef struct per {
    int per;
} per;

static const char *const pers[] = {"second", "cycle", NULL};
static const lw__lua_field per_fields[] = {CHOICE(per, per, "per", pers)};

// A time, cycles, a timing, or { timing, per = "cycle" }.
static void read_takes(const lw__lua_reader *r, lw_task_def *def)
{
    lua_State *L = r->L;
    lw_error err = {LW_OK, ""};
    double cycles;
    int type = lw__lua_push_field(r, "takes");
    int index = lua_gettop(L);
    if (type == LUA_TNIL)
        return;
    if (reads_cycles(r, "takes", index, &cycles)) {
        lw__lua_timing *box = lw__lua_new(L, LW__LUA_TIMING, sizeof *box, 0);
        if (lw_timing_constant(cycles, &box->it, &err) != LW_OK)
            lw__lua_bad_field(r, "takes", &err);
        def->takes = box->it;
        def->takes_in_cycles = 1;
        return;
    }
    if (type != LUA_TTABLE) {
        def->takes = lw__lua_timing_at(r, "takes", index);
        return;
    }
    per p = {0};
    lw__lua_reader inner = *r;
    inner.table = index;
    inner.subject = lua_pushfstring(L, "%s: takes", r->subject);
    LW__LUA_FIELDS(&inner, per_fields, 1, &p);
    lua_rawgeti(L, index, 1);
    def->takes = lw__lua_timing_at(r, "takes", -1);
    def->takes_in_cycles = p.per;
}

typedef struct section {
    const char *resource;
} section;

static void read_section(lw__lua_reader *r, int i, void *list)
{
    static const lw__lua_field fields[] = {OTHER("from"), OTHER("to")};
    lw_section *s = (lw_section *)list + i;
    s->from = (lw_place){LW_PLACE_SHARE, {0, 0}};
    s->to = (lw_place){LW_PLACE_SHARE, {1, 0}};
    lua_rawgeti(r->L, r->table, 1);
    if (!lua_isnil(r->L, -1))
        s->resource = lw__lua_field_text(r, "the resource", -1);
    LW__LUA_FIELDS(r, fields, 1, s);
    place_field(r, "from", &s->from);
    place_field(r, "to", &s->to);
}

// Sections that lock and sections that are masked, in one list.
static void read_sections(const lw__lua_reader *r, lw_task_def *def)
{
    void *locked = NULL, *masked = NULL;
    int n = read_elements(r, "sections", sizeof(lw_section), &locked, read_section);
    int m = read_elements(r, "masked", sizeof(lw_section), &masked, read_section);
    lw_section *all = lw__lua_room(r->L, (size_t)(n + m) + 1, sizeof *all), *list = locked;
    for (int i = 0; i < n; i++) {
        if (list[i].resource == NULL)
            lw__lua_bad(r, "sections: the resource of section %d is missing", i + 1);
        all[i] = list[i];
    }
    for (int i = 0; i < m; i++) {
        all[n + i] = ((lw_section *)masked)[i];
        if (all[n + i].resource != NULL)
            lw__lua_bad(r, "masked: a masked section has no resource");
    }
    def->n_sections = n + m;
    def->sections = all;
}

static void read_yields(const lw__lua_reader *r, lw_task_def *def)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "yields") == LUA_TNIL)
        return;
    int list = lua_gettop(L);
    int n = lw__lua_length(r, "yields", list, "a list of places");
    lw_place *places = lw__lua_room(L, (size_t)n + 1, sizeof *places);
    for (int i = 0; i < n; i++) {
        lua_rawgeti(L, list, i + 1);
        places[i] = place_at(r, "yields", lua_gettop(L));
        lua_pop(L, 1);
    }
    def->n_yields = n;
    def->yields = places;
}

static double share_field(const lw__lua_reader *r, const char *field, double period,
                          double fallback)
{
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return fallback;
    return lw__lua_time_or_share(r, field, -1, period);
}

static void read_priority(const lw__lua_reader *r, const task *p, lw_task_def *def)
{
    int64_t priority = p->interrupt != UNSTATED ? p->interrupt : p->priority;
    if (p->interrupt != UNSTATED && p->priority != UNSTATED)
        lw__lua_bad(r, "priority and interrupt are both stated; one is wanted");
    def->interrupt = p->interrupt != UNSTATED;
    def->is_priority = priority != UNSTATED;
    if (!def->is_priority)
        return;
    if (priority < -1000000 || priority > 1000000)
        lw__lua_bad(r, "priority is %I; permitted -1000000 to 1000000", (LUAI_UACINT)priority);
    def->priority = (int)priority;
}

// The law with its wires; names are those of inputs, which the list of fields must allow.
static void read_law(const lw__lua_reader *r, task *p, int n_names, const char *const *names)
{
    const lw_law_def *law = lw_law_look(p->def.law);
    p->def.inputs = lw__lua_inputs(r, law, n_names, names, &p->def.n_inputs);
    if (lw__lua_push_field(r, "output") != LUA_TNIL)
        p->def.outputs = lw__lua_outputs(r, law, &p->def.n_outputs);
}

int lw__lua_rig_task(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *names[LW__LUA_INPUT_NAMES];
    int n_names = 0;
    task p = {.def = lw_task_default(), .priority = UNSTATED, .interrupt = UNSTATED};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "task", &p.def.name);
    luaL_checkstack(L, 64, NULL);
    int has_law = lw__lua_push_field(&r, "law") != LUA_TNIL;
    if (has_law) {
        p.def.law = lw__lua_law_field(&r)->it;
        n_names = lw__lua_input_names(&r, lw_law_look(p.def.law), N_FIELDS(task_fields),
                                      task_fields, names);
    }
    lw__lua_fields(&r, N_FIELDS(task_fields), task_fields, 1, n_names, names, &p);
    p.def.origin = r.origin;
    p.def.overrun = (lw_overrun)p.overruns;
    p.def.delay = (lw_delay)p.delay;
    p.def.full_is_end = p.when_full;
    read_priority(&r, &p, &p.def);
    double period = p.def.every.num > 0 ? lw_period_seconds(p.def.every) : 0;
    p.def.offset = share_field(&r, "offset", period, 0);
    p.def.deadline = share_field(&r, "deadline", period, p.def.deadline);
    p.def.logical = share_field(&r, "logical", period, p.def.logical);
    p.def.arrives = timing_field(&r, "arrives");
    p.def.jitter = timing_field(&r, "jitter");
    read_takes(&r, &p.def);
    place_field(&r, "reads", &p.def.reads);
    place_field(&r, "writes", &p.def.writes);
    read_sections(&r, &p.def);
    read_yields(&r, &p.def);
    if (has_law)
        read_law(&r, &p, n_names, names);
    return lw__lua_rig_added(&r, lw_rig_add_task(rig->it, &p.def, &err), &err);
}

// ---- buses

typedef struct bus {
    lw_bus_def def;
    int urgent;
} bus;

static const lw__lua_field bus_fields[] = {
    REQUIRED(bus, def.rate, "bits_per_second", FIELD_NUMBER, NULL),
    CHOICE(bus, urgent, "urgent", urgencies),
};

int lw__lua_rig_bus(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    bus p = {.def = lw_bus_default()};
    p.urgent = (int)p.def.urgent;
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "bus", &p.def.name);
    LW__LUA_FIELDS(&r, bus_fields, 1, &p);
    p.def.origin = r.origin;
    p.def.urgent = (lw_urgent)p.urgent;
    return lw__lua_rig_added(&r, lw_rig_add_bus(rig->it, &p.def, &err), &err);
}

typedef struct frame {
    lw_frame_def def;
    int stuffing, overruns;
} frame;

static const char *const stuffings[] = {"worst", "none", "random", NULL};

static const lw__lua_field frame_fields[] = {
    OTHER("offset"),
    OTHER("arrives"),
    OTHER("jitter"),
    OTHER("deadline"),
    REQUIRED(frame, def.on, "on", FIELD_TEXT, NULL),
    REQUIRED(frame, def.priority, "priority", FIELD_COUNT, NULL),
    OPTIONAL(frame, def.bytes, "bytes", FIELD_COUNT, NULL),
    OPTIONAL(frame, def.identifier, "identifier", FIELD_COUNT, NULL),
    OPTIONAL(frame, def.bits, "bits", FIELD_COUNT, NULL),
    CHOICE(frame, stuffing, "stuffing", stuffings),
    OPTIONAL(frame, def.carries, "carries", FIELD_TEXT, NULL),
    OPTIONAL(frame, def.to, "to", FIELD_TEXT, NULL),
    OPTIONAL(frame, def.every, "every", FIELD_PERIOD, NULL),
    OPTIONAL(frame, def.released_by, "released_by", FIELD_TEXT, NULL),
    CHOICE(frame, overruns, "overruns", overruns),
    OPTIONAL(frame, def.queue, "queue", FIELD_COUNT, NULL),
    OPTIONAL(frame, def.lost, "lost", FIELD_NUMBER, "1"),
};

int lw__lua_rig_frame(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    frame p = {.def = lw_frame_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "frame", &p.def.name);
    LW__LUA_FIELDS(&r, frame_fields, 1, &p);
    double period = p.def.every.num > 0 ? lw_period_seconds(p.def.every) : 0;
    p.def.origin = r.origin;
    p.def.stuffing = (lw_stuffing)p.stuffing;
    p.def.overrun = (lw_overrun)p.overruns;
    p.def.offset = share_field(&r, "offset", period, 0);
    p.def.deadline = share_field(&r, "deadline", period, p.def.deadline);
    p.def.arrives = timing_field(&r, "arrives");
    p.def.jitter = timing_field(&r, "jitter");
    return lw__lua_rig_added(&r, lw_rig_add_frame(rig->it, &p.def, &err), &err);
}
