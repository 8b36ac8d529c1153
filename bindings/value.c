// Small values: draws by address, quantising, whole numbers, quantities, names.

#include "fields.h"
#include "module.h"
#include "run.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>
#include <latewood/quantity.h>
#include <math.h>
#include <stdint.h>

// lw.draw(seed, run, name, job): a uniform number in (0, 1).
int lw__lua_draw(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "draw", 4);
    lw_address at;
    at.seed = (uint64_t)lw__lua_whole(&r, "seed", 1, 0, INT64_MAX);
    at.run = (uint64_t)lw__lua_whole(&r, "run", 2, 0, INT64_MAX);
    at.stream = lw_stream(lw__lua_field_text(&r, "name", 3));
    at.job = (uint32_t)lw__lua_whole(&r, "job", 4, 0, UINT32_MAX);
    lua_pushnumber(L, lw_draw_uniform(at));
    return 1;
}

// lw.normal_quantile(p), 0 < p < 1, and lw.normal_cdf(x) of the standard normal distribution.
int lw__lua_normal_quantile(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "normal_quantile", 1);
    double p = lw__lua_number(&r, "p", 1, NULL);
    if (!(p > 0 && p < 1))
        lw__lua_bad(&r, "p is %f; permitted between 0 and 1", p);
    lua_pushnumber(L, lw_normal_quantile(p));
    return 1;
}

int lw__lua_normal_cdf(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "normal_cdf", 1);
    lua_pushnumber(L, lw_normal_cdf(lw__lua_number(&r, "x", 1, NULL)));
    return 1;
}

// lw.random(name, job): the same with seed and run of the run in which it is called.
int lw__lua_random(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "random", 2);
    if (lua_type(L, 1) != LUA_TSTRING)
        lw__lua_bad(&r, "a draw is addressed, so that a run can be repeated: "
                        "random(\"name\", job) in a law, draw(seed, run, \"name\", job) elsewhere");
    const lw__lua_run *run = lw__lua_present_of(L)->run;
    if (run == NULL)
        lw__lua_bad(&r, "no run is going on; draw(seed, run, \"name\", job) states one");
    lw_address at = {run->seed, run->number, 0, 0};
    at.stream = lw_stream(lw__lua_field_text(&r, "name", 1));
    at.job = (uint32_t)lw__lua_whole(&r, "job", 2, 0, UINT32_MAX);
    lua_pushnumber(L, lw_draw_uniform(at));
    return 1;
}

int lw__lua_random_seed(lua_State *L)
{
    return lw__lua_fail(L, "randomseed: the seed is that of the study; a draw is addressed: "
                           "random(\"name\", job)");
}

typedef struct quantiser {
    lw_quantiser q;
    double range[2];
    int rounding;
} quantiser;

static const char *const roundings[] = {"nearest", "floor", NULL};
static const lw__lua_field quantiser_fields[] = {
    OPTIONAL(quantiser, q.bits, "bits", FIELD_COUNT, NULL),
    OPTIONAL(quantiser, range, "range", FIELD_RANGE, NULL),
    CHOICE(quantiser, rounding, "rounding", roundings)};

// lw.quantise(y, { bits, range, rounding }): value and code.
int lw__lua_quantise(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    quantiser p = {lw_quantiser_default(), {(double)NAN, (double)NAN}, 0};
    lw__lua_reader r = lw__lua_read(L, 2, "quantise");
    double code, y = lw__lua_number(&r, "the value", 1, NULL);
    LW__LUA_FIELDS(&r, quantiser_fields, 0, &p);
    p.q.lo = p.range[0];
    p.q.hi = p.range[1];
    p.q.rounding = (lw_rounding)p.rounding;
    if (lw_quantiser_check(&p.q, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    lua_pushnumber(L, lw_quantise(&p.q, y, &code));
    lua_pushnumber(L, code);
    return 2;
}

// lw.int(x): a state that the step is given as an integer.
int lw__lua_int_new(lua_State *L)
{
    static const int64_t most = INT64_C(1) << 53;
    lw__lua_reader r = lw__lua_arguments(L, "int", 1);
    int64_t value = lw__lua_whole(&r, "the number", 1, -most, most);
    lw__lua_int *box = lw__lua_new(L, LW__LUA_INT, sizeof *box, 0);
    box->value = value;
    return 1;
}

int lw__lua_int_value(lua_State *L)
{
    lw__lua_int *box = luaL_checkudata(L, 1, LW__LUA_INT);
    lua_pushinteger(L, box->value);
    return 1;
}

int lw__lua_int_describe(lua_State *L)
{
    lw__lua_int *box = luaL_checkudata(L, 1, LW__LUA_INT);
    lua_pushfstring(L, "int %I", (LUAI_UACINT)box->value);
    return 1;
}

// ---- for the modules written in Lua

// lw.quantity(x, unit): a number, or a text with a unit, in SI; unit "1" takes percentages, no unit
// takes any.
int lw__lua_quantity(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "quantity", 2);
    const char *unit = lua_isnil(L, 2) ? NULL : lw__lua_field_text(&r, "the unit", 2);
    lua_pushnumber(L, lw__lua_number(&r, "the value", 1, unit));
    return 1;
}

// lw.number_text(x): the shortest text that reads back as the same number.
int lw__lua_number_text(lua_State *L)
{
    char text[32];
    lua_pushstring(L, lw_double_format(luaL_checknumber(L, 1), text));
    return 1;
}

// lw.nearest(name, list): the name on the list that was likely meant, or nil.
int lw__lua_nearest(lua_State *L)
{
    lw__lua_reader r = lw__lua_arguments(L, "nearest", 2);
    const char *name = lw__lua_field_text(&r, "the name", 1);
    lw__lua_texts names = lw__lua_names(&r, "the list", 2);
    lua_pushstring(L, lw_nearest_name(name, names.v, names.n));
    return 1;
}

// lw.metric_kinds(): the kinds of metrics in words.
int lw__lua_metric_kinds(lua_State *L)
{
    int n = lw_metric_count();
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        lua_pushstring(L, lw_metric_words((lw_metric_kind)i));
        lua_rawseti(L, -2, i + 1);
    }
    return 1;
}

// lw.fail(message): raise at the line of the user's chunk.
int lw__lua_fail_here(lua_State *L)
{
    lua_settop(L, 1);
    return lw__lua_fail(L, "%s", luaL_checkstring(L, 1));
}
