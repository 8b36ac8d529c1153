// rig:loop: a law between an adc and an output, with its latency stated directly.

#include "law.h"
#include "module.h"
#include "rig.h"

#include <latewood/quantity.h>
#include <string.h>

#define MOST_NAMES (LW_LAW_MAX_PORTS + 4)

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

// ---- inputs

// The input `base`number, counted from 1, or `base` alone where it is the only one.
static const char *numbered(lua_State *L, const lw_law_def *law, const char *base, int number)
{
    const char *name = lua_pushfstring(L, "%s%d", base, number);
    for (int i = 0; i < law->n_in; i++)
        if (strcmp(law->in_names[i], name) == 0 ||
            (number == 1 && strcmp(law->in_names[i], base) == 0))
            return law->in_names[i];
    return NULL;
}

// A signal's name or a number, on top of the stack.
static lw_wire wire(const lw__lua_reader *r, const char *port, const char *field)
{
    if (lua_type(r->L, -1) == LUA_TSTRING)
        return (lw_wire){port, lw__lua_field_text(r, field, -1), 0};
    if (lua_type(r->L, -1) != LUA_TNUMBER)
        lw__lua_bad_type(r, field, -1, "a signal or a number");
    return (lw_wire){port, NULL, lw__lua_number(r, field, -1, NULL)};
}

// A list under `base` serves base1, base2, ...
static void list_of_wires(const lw__lua_reader *r, const lw_law_def *law, const char *base,
                          lw_wire *wires, int *n)
{
    lua_State *L = r->L;
    int list = lua_gettop(L);
    int length = lw__lua_length(r, base, list, "a list of signals");
    luaL_checkstack(L, 4 * LW_LAW_MAX_PORTS, NULL);
    for (int i = 0; i < length; i++) {
        const char *port = numbered(L, law, base, i + 1);
        if (port == NULL || *n == LW_LAW_MAX_PORTS)
            lw__lua_bad(r, "%s has %d signals; the law takes %d", base, length, i);
        lua_rawgeti(L, list, i + 1);
        wires[(*n)++] = wire(r, port, base);
    }
}

static lw_wire *read_inputs(const lw__lua_reader *r, const lw_law_def *law, int n_names,
                            const char *const *names, int *n)
{
    lua_State *L = r->L;
    lw_wire *wires = lw__lua_room(L, LW_LAW_MAX_PORTS, sizeof *wires);
    *n = 0;
    luaL_checkstack(L, MOST_NAMES + 8, NULL);
    for (int i = 0; i < n_names; i++) {
        int type = lw__lua_push_field(r, names[i]);
        if (type == LUA_TTABLE)
            list_of_wires(r, law, names[i], wires, n);
        else if (type != LUA_TNIL && *n < LW_LAW_MAX_PORTS)
            wires[(*n)++] = wire(r, names[i], names[i]);
    }
    return wires;
}

// Names under which inputs may be stated: those of the law, and the common part of numbered ones.
static int input_names(const lw__lua_reader *r, const lw_law_def *law, const char **names)
{
    static const char *const bases[] = {"wanted", "measured"};
    int n = 0;
    for (int i = 0; i < law->n_in; i++) {
        names[n++] = law->in_names[i];
        for (size_t f = 0; f < sizeof loop_fields / sizeof *loop_fields; f++)
            if (strcmp(law->in_names[i], loop_fields[f].name) == 0)
                lw__lua_bad(r,
                            "the law has an input \"%s\", which is a field of a loop; another "
                            "name is wanted",
                            law->in_names[i]);
    }
    for (int b = 0; b < 2; b++)
        if (numbered(r->L, law, bases[b], 2) != NULL)
            names[n++] = bases[b];
    return n;
}

// ---- outputs

static lw_wire *read_outputs(const lw__lua_reader *r, const lw_law_def *law, int *n)
{
    lua_State *L = r->L;
    lw_wire *wires = lw__lua_room(L, LW_LAW_MAX_PORTS, sizeof *wires);
    int type = lw__lua_push_field(r, "output");
    if (type == LUA_TNIL)
        lw__lua_bad(r, "output is missing; the dac or value that is written is wanted");
    *n = 1;
    if (type != LUA_TTABLE) {
        wires[0] = (lw_wire){law->out_names[0], lw__lua_field_text(r, "output", -1), 0};
        return wires;
    }
    int list = lua_gettop(L);
    *n = lw__lua_length(r, "output", list, "a list of dacs and values");
    if (*n > law->n_out)
        lw__lua_bad(r, "output has %d names; the law has %d outputs", *n, law->n_out);
    luaL_checkstack(L, *n + 8, NULL);
    for (int i = 0; i < *n; i++) {
        lua_rawgeti(L, list, i + 1);
        wires[i] = (lw_wire){law->out_names[i], lw__lua_field_text(r, "output", -1), 0};
    }
    return wires;
}

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

static lw__lua_law *read_law(const lw__lua_reader *r)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "law") == LUA_TNIL)
        lw__lua_bad(r, "law is missing");
    lw__lua_law *law = luaL_testudata(L, -1, LW__LUA_LAW);
    if (law == NULL)
        lw__lua_bad_type(r, "law", -1, "a law");
    if (law->it == NULL)
        lw__lua_bad(r, "law is a law that is closed");
    if (law->call != NULL)
        lw__lua_rig_keep(L, -1);
    return law;
}

int lw__lua_rig_loop(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *names[MOST_NAMES];
    loop p = {.def = lw_loop_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "loop", &p.def.name);
    p.arrival = (int)p.def.latency.arrival;
    p.def.origin = r.origin;
    p.def.law = read_law(&r)->it;
    const lw_law_def *law = lw_law_look(p.def.law);
    int n_names = input_names(&r, law, names);
    lw__lua_fields(&r, (int)(sizeof loop_fields / sizeof *loop_fields), loop_fields, 1, n_names,
                   names, &p);
    p.def.inputs = read_inputs(&r, law, n_names, names, &p.def.n_inputs);
    p.def.outputs = read_outputs(&r, law, &p.def.n_outputs);
    p.def.latency.arrival = (lw_arrival)p.arrival;
    read_latency(&r, &p.def.latency);
    return lw__lua_rig_added(&r, lw_rig_add_loop(rig->it, &p.def, &err), &err);
}
