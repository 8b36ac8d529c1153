// Pulse-width modulated outputs of a rig, and what is timed by their carriers.

#include "module.h"
#include "rig.h"

#include <latewood/pwm.h>
#include <math.h>
#include <string.h>

typedef struct pwm {
    lw_pwm_def def;
    int shape, bridge, reload, writes;
    int64_t counts;
} pwm;

static const char *const shapes[] = {"trailing", "leading", "centre", NULL};
static const char *const bridges[] = {"half", "bipolar", "unipolar", NULL};
static const char *const reloads[] = {"valley", "peak", "both", "at once", NULL};
static const char *const written[] = {"share", "level", NULL};

static const lw__lua_field pwm_fields[] = {
    REQUIRED(pwm, def.to, "to", FIELD_TEXT, NULL),
    REQUIRED(pwm, def.carrier, "carrier", FIELD_PERIOD, NULL),
    OTHER("offset"),
    CHOICE(pwm, shape, "shape", shapes),
    CHOICE(pwm, bridge, "bridge", bridges),
    CHOICE(pwm, reload, "reload", reloads),
    CHOICE(pwm, writes, "writes", written),
    OPTIONAL(pwm, def.averaged, "averaged", FIELD_FLAG, NULL),
    OTHER("supply"),
    OPTIONAL(pwm, counts, "counts", FIELD_LONG, NULL),
    OTHER("least_pulse"),
    OTHER("dead_time"),
    OPTIONAL(pwm, def.current, "current", FIELD_TEXT, NULL),
    OPTIONAL(pwm, def.start, "start", FIELD_NUMBER, NULL),
    OTHER("missed"),
    OTHER("peak"),
};

static const lw__lua_field peak_fields[] = {
    REQUIRED(lw_pwm_peak, current, "current", FIELD_TEXT, NULL),  OTHER("wanted"),
    OPTIONAL(lw_pwm_peak, slope, "slope", FIELD_NUMBER, NULL),    OTHER("blanking"),
    OPTIONAL(lw_pwm_peak, most, "most_duty", FIELD_NUMBER, NULL),
};

static double share_or(const lw__lua_reader *r, const char *field, double period)
{
    return lw__lua_push_field(r, field) == LUA_TNIL ? 0
                                                    : lw__lua_time_or_share(r, field, -1, period);
}

// A number, a quantity, or the signal that it is.
static void read_supply(const lw__lua_reader *r, lw_pwm_def *def)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "supply");
    if (type == LUA_TNIL)
        return;
    const char *text = type == LUA_TSTRING ? lua_tostring(L, -1) : "";
    if (text[0] != 0 && strchr("0123456789.+-", text[0]) == NULL)
        def->supply_of = lw__lua_field_text(r, "supply", -1);
    else
        def->supply = lw__lua_number(r, "supply", -1, NULL);
}

static void read_missed(const lw__lua_reader *r, lw_pwm_def *def)
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

// peak = { current, wanted, slope, blanking, most_duty }
static void read_peak(const lw__lua_reader *r, lw_pwm_peak *peak, double period)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "peak");
    if (type == LUA_TNIL)
        return;
    if (type != LUA_TTABLE)
        lw__lua_bad_type(r, "peak", -1, "a table with current and wanted");
    lw__lua_reader inner = *r;
    inner.table = lua_gettop(L);
    inner.subject = lua_pushfstring(L, "%s: peak", r->subject);
    LW__LUA_FIELDS(&inner, peak_fields, 0, peak);
    peak->blanking = share_or(&inner, "blanking", period);
    type = lw__lua_push_field(&inner, "wanted");
    if (type == LUA_TNIL)
        lw__lua_bad(&inner, "wanted is missing; a number or a signal is wanted");
    const char *text = type == LUA_TSTRING ? lua_tostring(L, -1) : "";
    if (text[0] != 0 && strchr("0123456789.+-", text[0]) == NULL)
        peak->wanted_of = lw__lua_field_text(&inner, "wanted", -1);
    else
        peak->wanted = lw__lua_number(&inner, "wanted", -1, NULL);
}

// Note the carrier for what is timed by it.
static void note_carrier(lua_State *L, const lw_pwm_def *def)
{
    lua_getiuservalue(L, 1, RIG_CARRIERS);
    lua_createtable(L, 3, 0);
    lua_pushinteger(L, def->carrier.num);
    lua_rawseti(L, -2, 1);
    lua_pushinteger(L, def->carrier.den);
    lua_rawseti(L, -2, 2);
    lua_pushnumber(L, def->offset);
    lua_rawseti(L, -2, 3);
    lua_setfield(L, -2, def->name);
    lua_pop(L, 1);
}

int lw__lua_rig_pwm(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    pwm p = {.def = lw_pwm_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "pwm", &p.def.name);
    LW__LUA_FIELDS(&r, pwm_fields, 1, &p);
    double period = lw_period_seconds(p.def.carrier);
    p.def.origin = r.origin;
    p.def.shape = (lw_pwm_shape)p.shape;
    p.def.bridge = (lw_pwm_bridge)p.bridge;
    p.def.reload = (lw_pwm_reload)p.reload;
    p.def.writes_level = p.writes;
    p.def.counts = p.counts;
    p.def.offset = share_or(&r, "offset", period);
    p.def.least_pulse = share_or(&r, "least_pulse", period);
    p.def.dead_time = share_or(&r, "dead_time", period);
    read_supply(&r, &p.def);
    read_missed(&r, &p.def);
    read_peak(&r, &p.def.peak, period);
    lw_status status = lw_rig_add_pwm(rig->it, &p.def, &err);
    if (status == LW_OK)
        note_carrier(L, &p.def);
    return lw__lua_rig_added(&r, status, &err);
}

// at = "bridge", phase = "valley" | "peak" | a time or share of the carrier's period: the clock of
// an adc. Instants are those of the carrier, the peak to a tick.
void lw__lua_carrier_clock(const lw__lua_reader *r, lw_period *every, double *offset)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "at") == LUA_TNIL)
        return;
    const char *name = lw__lua_field_text(r, "at", -1);
    if (every->num > 0)
        lw__lua_bad(r, "both every and at are stated; one trigger is wanted");
    lua_getiuservalue(L, 1, RIG_CARRIERS);
    if (lua_getfield(L, -1, name) != LUA_TTABLE) {
        const char *quoted = lw__lua_quote(L, name);
        lw__lua_bad(r, "at: no pwm %s was added before", quoted);
    }
    lua_rawgeti(L, -1, 1);
    lua_rawgeti(L, -2, 2);
    lua_rawgeti(L, -3, 3);
    *every = (lw_period){lua_tointeger(L, -3), lua_tointeger(L, -2)};
    double period = lw_period_seconds(*every), first = lua_tonumber(L, -1), phase = 0;
    int type = lw__lua_push_field(r, "phase");
    const char *text = type == LUA_TSTRING ? lua_tostring(L, -1) : "";
    if (strcmp(text, "peak") == 0)
        phase = period / 2;
    else if (type != LUA_TNIL && strcmp(text, "valley") != 0)
        phase = lw__lua_time_or_share(r, "phase", -1, period);
    if (phase < 0 || phase >= period)
        lw__lua_bad(r, "phase is %f s; permitted from 0 to below one period", phase);
    *offset = fmod(first + phase, period);
}
