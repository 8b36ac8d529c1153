// A rig and what is added to it: plants, connections, sources, values, adcs, dacs.

#include "rig.h"

#include "module.h"
#include "plant.h"
#include "source.h"

#include <math.h>
#include <string.h>

// ---- the rig itself

int lw__lua_rig_new(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "rig", 1);
    const char *name = lw__lua_field_text(&r, "its name", 1);
    lw__lua_rig *box = lw__lua_new(L, LW__LUA_RIG, sizeof *box, RIG_USER_VALUES);
    for (int i = 1; i <= RIG_USER_VALUES; i++) {
        lua_newtable(L);
        lua_setiuservalue(L, -2, i);
    }
    if (lw_rig_new(name, &box->it, &err) != LW_OK)
        lw__lua_raise(L, r.origin, &err);
    return 1;
}

lw__lua_rig *lw__lua_rig_self(lua_State *L)
{
    lw__lua_rig *box = luaL_checkudata(L, 1, LW__LUA_RIG);
    if (box->it == NULL)
        lw__lua_fail(L, "the rig is closed");
    return box;
}

lw__lua_reader lw__lua_rig_read(lua_State *L, const char *what, const char **name)
{
    lw__lua_reader r = lw__lua_read(L, 2, what);
    *name = lw__lua_read_name(&r, what);
    lua_getiuservalue(L, 1, RIG_ORIGINS);
    lua_pushboolean(L, 1);
    lua_setfield(L, -2, r.origin);
    lua_pop(L, 1);
    return r;
}

int lw__lua_rig_added(const lw__lua_reader *r, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        lw__lua_raise(r->L, r->origin, err);
    lua_pushvalue(r->L, 1);
    return 1;
}

void lw__lua_rig_keep(lua_State *L, int index)
{
    index = lua_absindex(L, index);
    luaL_checkstack(L, 4, NULL);
    lua_getiuservalue(L, 1, RIG_CALLS);
    lua_pushvalue(L, index);
    lua_rawseti(L, -2, (lua_Integer)lua_rawlen(L, -2) + 1);
    lua_pop(L, 1);
}

// Whether a message begins with the origin of a thing of the rig.
static int has_origin(lua_State *L, int rig, const char *text)
{
    int found = 0;
    lua_getiuservalue(L, rig, RIG_ORIGINS);
    for (lua_pushnil(L); lua_next(L, -2) != 0; lua_pop(L, 1)) {
        size_t n;
        const char *origin = lua_tolstring(L, -2, &n);
        found |= n > 0 && strncmp(text, origin, n) == 0 && text[n] == ':';
    }
    lua_pop(L, 1);
    return found;
}

int lw__lua_rig_raise(lua_State *L, int rig, const lw_error *err)
{
    luaL_checkstack(L, 8, NULL);
    const char *origin = lw__lua_origin(L);
    return lw__lua_raise(L, has_origin(L, rig, err->text) ? NULL : origin, err);
}

int lw__lua_rig_close(lua_State *L)
{
    lw__lua_rig *box = luaL_checkudata(L, 1, LW__LUA_RIG);
    lw_rig_free(box->it);
    box->it = NULL;
    return 0;
}

// ---- plants, connections, sources, values

// The object that is the second element.
static void *second(const lw__lua_reader *r, const char *class_name, const char *wanted)
{
    lua_rawgeti(r->L, r->table, 2);
    void *box = luaL_testudata(r->L, -1, class_name);
    if (box == NULL)
        lw__lua_bad_type(r, "its second element", -1, wanted);
    return box;
}

int lw__lua_rig_plant(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *name;
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "plant", &name);
    lw__lua_fields(&r, 0, NULL, 2, 0, NULL, NULL);
    lw__lua_plant *plant = second(&r, LW__LUA_PLANT, "a plant");
    if (plant->it == NULL)
        lw__lua_bad(&r, "the plant is closed");
    int calls_lua = lua_getiuservalue(L, -1, PLANT_CALL) == LUA_TUSERDATA; // not a ready flow
    lua_pop(L, 1);
    if (calls_lua)
        lw__lua_rig_keep(L, -1);
    lw_status status = lw_rig_add_plant(rig->it, r.origin, name, plant->it, &err);
    return lw__lua_rig_added(&r, status, &err);
}

typedef struct connection {
    const char *to;
} connection;

static const lw__lua_field connect_fields[] = {REQUIRED(connection, to, "to", FIELD_TEXT, NULL)};

int lw__lua_rig_connect(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *from;
    connection p = {NULL};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "connect", &from);
    LW__LUA_FIELDS(&r, connect_fields, 1, &p);
    return lw__lua_rig_added(&r, lw_rig_connect(rig->it, r.origin, from, p.to, &err), &err);
}

int lw__lua_rig_source(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *name;
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "source", &name);
    lw__lua_fields(&r, 0, NULL, 2, 0, NULL, NULL);
    lw__lua_source *source = second(&r, LW__LUA_SOURCE, "a source");
    lw_source_def def = source->def;
    def.origin = r.origin;
    def.name = name;
    if (def.kind == LW_SOURCE_FUNCTION)
        lw__lua_rig_keep(L, -1);
    return lw__lua_rig_added(&r, lw_rig_add_source(rig->it, &def, &err), &err);
}

typedef struct value {
    double start;
} value;

static const lw__lua_field value_fields[] = {OPTIONAL(value, start, "start", FIELD_NUMBER, NULL)};

int lw__lua_rig_value(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const char *name;
    value p = {0};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "value", &name);
    LW__LUA_FIELDS(&r, value_fields, 1, &p);
    lw_status status = lw_rig_add_value(rig->it, r.origin, name, p.start, &err);
    return lw__lua_rig_added(&r, status, &err);
}

// ---- adc

typedef struct adc {
    lw_adc_def def;
    double range[2];
    int rounding;
    lw__lua_list skew;
} adc;

static const char *const roundings[] = {"nearest", "floor", NULL};

#define NUMBER(member, name, unit) OPTIONAL(adc, def.member, name, FIELD_NUMBER, unit)

static const lw__lua_field adc_fields[] = {
    OTHER("of"),
    OTHER("offset"),
    OTHER("takes"),
    OPTIONAL(adc, skew, "skew", FIELD_LIST, "s"),
    OPTIONAL(adc, def.every, "every", FIELD_PERIOD, NULL),
    OPTIONAL(adc, def.after, "after", FIELD_TEXT, NULL),
    OPTIONAL(adc, def.quantiser.bits, "bits", FIELD_COUNT, NULL),
    OPTIONAL(adc, range, "range", FIELD_RANGE, NULL),
    CHOICE(adc, rounding, "rounding", roundings),
    NUMBER(nominal, "nominal", "s"),
    OTHER("at"),
    OTHER("phase"),
    OTHER("analog"),
    OTHER("filter"),
    NUMBER(gain, "gain", NULL),
    NUMBER(bias, "bias", NULL),
    NUMBER(noise, "noise", NULL),
    OPTIONAL(adc, def.average, "average", FIELD_COUNT, NULL),
    NUMBER(average_every, "average_every", "s"),
    NUMBER(start, "start", NULL),
    NUMBER(reread, "reread", NULL),
    NUMBER(stale_after, "stale_after", "s"),
    NUMBER(stale, "stale", NULL),
};

// One signal, or a list of them.
static lw__lua_texts signals(const lw__lua_reader *r, const char *field)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, field);
    if (type == LUA_TNIL)
        lw__lua_bad(r, "%s is missing; the signal is wanted", field);
    if (type == LUA_TTABLE)
        return lw__lua_names(r, field, -1);
    const char *text = lw__lua_field_text(r, field, -1);
    lw__lua_texts one = {1, lw__lua_room(L, 1, sizeof(char *))};
    one.v[0] = text;
    return one;
}

// A time, or a share of `period`; `fallback` where the field is not there.
static double share_field(const lw__lua_reader *r, const char *field, double period,
                          double fallback)
{
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return fallback;
    return lw__lua_time_or_share(r, field, -1, period);
}

static void note_period(lua_State *L, const char *name, lw_period period)
{
    lua_getiuservalue(L, 1, RIG_PERIODS);
    lua_pushnumber(L, lw_period_seconds(period));
    lua_setfield(L, -2, name);
    lua_pop(L, 1);
}

int lw__lua_rig_adc(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    adc p = {.def = lw_adc_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "adc", &p.def.name);
    p.range[0] = p.def.quantiser.lo;
    p.range[1] = p.def.quantiser.hi;
    LW__LUA_FIELDS(&r, adc_fields, 1, &p);
    lw__lua_texts of = signals(&r, "of");
    if (p.skew.v != NULL && p.skew.n != of.n)
        lw__lua_bad(&r, "skew has %d times; one for each of %d channels is wanted", p.skew.n, of.n);
    lw__lua_carrier_clock(&r, &p.def.every, &p.def.offset);
    double period = p.def.every.num > 0 ? lw_period_seconds(p.def.every) : 0;
    p.def.origin = r.origin;
    p.def.n_channels = of.n;
    p.def.of = of.v;
    p.def.skew = p.skew.v;
    p.def.offset = share_field(&r, "offset", period, p.def.offset);
    p.def.takes = share_field(&r, "takes", period, p.def.takes);
    p.def.quantiser.lo = p.range[0];
    p.def.quantiser.hi = p.range[1];
    p.def.quantiser.rounding = (lw_rounding)p.rounding;
    lw_adc_front front = {0};
    lw__lua_read_front(&r, &front);
    lw_period own_clock = p.def.every;
    if (front.sinc_order > 0) {
        own_clock = (lw_period){front.clock.num * front.ratio, front.clock.den};
        period = lw_period_seconds(own_clock);
    }
    lw_status status = lw_rig_add_adc_behind(rig->it, &p.def, &front, &err);
    if (status == LW_OK && period > 0)
        note_period(L, p.def.name, own_clock);
    return lw__lua_rig_added(&r, status, &err);
}

// ---- dac

typedef struct dac {
    lw_dac_def def;
    double range[2];
    int rounding;
} dac;

static const lw__lua_field dac_fields[] = {
    OPTIONAL(dac, def.to, "to", FIELD_TEXT, NULL),
    OTHER("latch"),
    OTHER("phase"),
    OTHER("set_up"),
    OTHER("missed"),
    OPTIONAL(dac, def.quantiser.bits, "bits", FIELD_COUNT, NULL),
    OPTIONAL(dac, range, "range", FIELD_RANGE, NULL),
    CHOICE(dac, rounding, "rounding", roundings),
    OPTIONAL(dac, def.slew, "slew", FIELD_NUMBER, NULL),
    OPTIONAL(dac, def.dead_band, "dead_band", FIELD_NUMBER, NULL),
    OPTIONAL(dac, def.start, "start", FIELD_NUMBER, NULL),
};

// Seconds of the clock of the adc that is named by the text on top of the stack; 0: none.
static double period_of_adc(lua_State *L)
{
    lua_getiuservalue(L, 1, RIG_PERIODS);
    lua_pushvalue(L, -2);
    lua_rawget(L, -2);
    double period = lua_tonumber(L, -1);
    lua_pop(L, 2);
    return period;
}

// A period, a frequency, or the name of an adc; returns the period where it is known.
static double read_latch(const lw__lua_reader *r, lw_dac_def *def)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "latch");
    if (type == LUA_TNIL)
        return 0;
    if (type == LUA_TSTRING) {
        const char *text = lw__lua_field_text(r, "latch", -1);
        double period = period_of_adc(L);
        if (period > 0 || strchr("0123456789.+-", text[0]) == NULL) {
            def->latched_by = text;
            return period;
        }
    }
    def->latch = lw__lua_period(r, "latch", -1);
    return lw_period_seconds(def->latch);
}

static void read_phases(const lw__lua_reader *r, lw_dac_def *def, double period)
{
    static const int most = (int)(sizeof def->phase / sizeof *def->phase);
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "phase");
    if (type == LUA_TNIL)
        return;
    if (type != LUA_TTABLE) {
        def->phase[0] = lw__lua_time_or_share(r, "phase", -1, period);
        return;
    }
    int list = lua_gettop(L);
    int n = lw__lua_length(r, "phase", list, "a list of times");
    if (n < 1 || n > most)
        lw__lua_bad(r, "phase has %d times; permitted 1 to %d", n, most);
    def->n_phases = n;
    for (int i = 0; i < n; i++) {
        lua_rawgeti(L, list, i + 1);
        def->phase[i] = lw__lua_time_or_share(r, "phase", -1, period);
    }
}

static void read_missed(const lw__lua_reader *r, lw_dac_def *def)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "missed") == LUA_TNIL)
        return;
    const char *text = lua_type(L, -1) == LUA_TSTRING ? lua_tostring(L, -1) : "";
    if (strcmp(text, "keep") == 0)
        return;
    def->on_missed = 1;
    def->missed = strcmp(text, "zero") == 0 ? 0 : lw__lua_number(r, "missed", -1, NULL);
}

int lw__lua_rig_dac(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    dac p = {.def = lw_dac_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "dac", &p.def.name);
    p.range[0] = p.def.quantiser.lo;
    p.range[1] = p.def.quantiser.hi;
    LW__LUA_FIELDS(&r, dac_fields, 1, &p);
    double period = read_latch(&r, &p.def);
    read_phases(&r, &p.def, period);
    read_missed(&r, &p.def);
    p.def.origin = r.origin;
    p.def.set_up = share_field(&r, "set_up", period, p.def.set_up);
    p.def.quantiser.lo = p.range[0];
    p.def.quantiser.hi = p.range[1];
    p.def.quantiser.rounding = (lw_rounding)p.rounding;
    return lw__lua_rig_added(&r, lw_rig_add_dac(rig->it, &p.def, &err), &err);
}
