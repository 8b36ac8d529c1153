// rig:loop: a law between an adc and an output, with its latency stated directly.

#include "law.h"
#include "module.h"
#include "rig.h"
#include "wires.h"

#include <latewood/quantity.h>
#include <string.h>

typedef struct loop {
    lw_loop_def def;
    int arrival;
} loop;

static const char *const arrivals[] = {"arrival", "newest", NULL};

static const lw__lua_field loop_fields[] = {
    OTHER("law"),
    OTHER("output"),
    OTHER("latency"),
    OPTIONAL(loop, def.on, "on", FIELD_TEXT, NULL),
    CHOICE(loop, arrival, "arrival", arrivals),
    OPTIONAL(loop, def.latency.lost, "lost", FIELD_NUMBER, "1"),
    OPTIONAL(loop, def.latency.missed, "missed", FIELD_NUMBER, "1"),
    OPTIONAL(loop, def.latency.capacity, "in_flight", FIELD_COUNT, NULL),
};

// ---- latency

static lw_latency_entry entry_from_text(const lw__lua_reader *r, int index)
{
    lw_error err = {LW_OK, ""};
    lw_quantity q;
    const char *text = lw__lua_field_text(r, "latency", index);
    if (strcmp(text, "lost") == 0)
        return (lw_latency_entry){0, 0, LW_FATE_LOST};
    if (strcmp(text, "missed") == 0)
        return (lw_latency_entry){0, 0, LW_FATE_MISSED};
    if (lw_quantity_parse(text, &q, &err) != LW_OK)
        lw__lua_bad_field(r, "latency", &err);
    if (q.kind == LW_UNIT_SAMPLES || q.kind == LW_UNIT_PERCENT)
        return (lw_latency_entry){q.value, 1, LW_FATE_WRITTEN};
    return (lw_latency_entry){lw__lua_number(r, "latency", index, "s"), 0, LW_FATE_WRITTEN};
}

static lw_latency_entry read_entry(const lw__lua_reader *r, int index)
{
    int type = lua_type(r->L, index);
    if (type == LUA_TSTRING)
        return entry_from_text(r, index);
    if (type != LUA_TNUMBER)
        lw__lua_bad_type(r, "latency", index,
                         "a time, \"0.5 samples\", a share, \"lost\" or \"missed\"");
    return (lw_latency_entry){lw__lua_number(r, "latency", index, "s"), 0, LW_FATE_WRITTEN};
}

static const lw_timing *open_timing(const lw__lua_reader *r, int index)
{
    lw__lua_timing *box = luaL_testudata(r->L, index, LW__LUA_TIMING);
    if (box != NULL && box->it == NULL)
        lw__lua_bad(r, "latency is a timing that is closed");
    return box != NULL ? box->it : NULL;
}

typedef struct per {
    int per;
} per;

static const char *const pers[] = {"second", "sample", NULL};
static const lw__lua_field per_fields[] = {CHOICE(per, per, "per", pers)};

static void read_list(const lw__lua_reader *r, int index, lw_latency *latency)
{
    lua_State *L = r->L;
    int n = lw__lua_length(r, "latency", index, "a list of latencies");
    if (n < 1)
        lw__lua_bad(r, "latency is an empty list");
    lw_latency_entry *list = lw__lua_room(L, (size_t)n, sizeof *list);
    for (int i = 0; i < n; i++) {
        lua_rawgeti(L, index, i + 1);
        list[i] = read_entry(r, lua_gettop(L));
        lua_pop(L, 1);
    }
    latency->n_list = n;
    latency->list = list;
}

// Zero and nothing are the engine's "at the end of conversion": an empty list.
static void read_latency(const lw__lua_reader *r, lw_latency *latency)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "latency");
    int index = lua_gettop(L);
    if (type == LUA_TNIL || (type == LUA_TNUMBER && lua_tonumber(L, index) == 0))
        return;
    latency->timing = open_timing(r, index);
    if (latency->timing != NULL)
        return;
    if (type != LUA_TTABLE) {
        lw_latency_entry *one = lw__lua_room(L, 1, sizeof *one);
        *one = read_entry(r, index);
        latency->n_list = 1;
        latency->list = one;
        return;
    }
    lua_rawgeti(L, index, 1);
    latency->timing = open_timing(r, -1);
    if (latency->timing == NULL) {
        read_list(r, index, latency);
        return;
    }
    per p = {0};
    lw__lua_reader inner = *r;
    inner.table = index;
    inner.subject = lua_pushfstring(L, "%s: latency", r->subject);
    LW__LUA_FIELDS(&inner, per_fields, 1, &p);
    latency->timing_in_samples = p.per;
}

// ---- the loop

int lw__lua_rig_loop(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *names[LW__LUA_INPUT_NAMES];
    loop p = {.def = lw_loop_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "loop", &p.def.name);
    p.arrival = (int)p.def.latency.arrival;
    p.def.origin = r.origin;
    p.def.law = lw__lua_law_field(&r)->it;
    const lw_law_def *law = lw_law_look(p.def.law);
    int n_fields = (int)(sizeof loop_fields / sizeof *loop_fields);
    int n_names = lw__lua_input_names(&r, law, n_fields, loop_fields, names);
    lw__lua_fields(&r, n_fields, loop_fields, 1, n_names, names, &p);
    p.def.inputs = lw__lua_inputs(&r, law, n_names, names, &p.def.n_inputs);
    p.def.outputs = lw__lua_outputs(&r, law, &p.def.n_outputs);
    p.def.latency.arrival = (lw_arrival)p.arrival;
    read_latency(&r, &p.def.latency);
    return lw__lua_rig_added(&r, lw_rig_add_loop(rig->it, &p.def, &err), &err);
}
