// lw.math: Lua's `math` with elementary functions that give the same bits on every processor.
//
// Names and conventions are those of Lua 5.4's manual, section 6.7; tanh and others are added.
// Those with a kink or a jump note what they switch on while a flow runs (notes.h): x - lo, x - hi,
// a - b, x, or the condition; so the engine finds the instants from the very same function.

#include "module.h"

#include "box.h"
#include "notes.h"

#include <latewood/elementary.h>
#include <math.h>
#include <stdint.h>
#include <string.h>

#define PI 3.14159265358979323846
#define NOTEBOOK_KEY "latewood.notes"

lw__lua_notes *lw__lua_notes_of(lua_State *L)
{
    luaL_checkstack(L, 4, NULL);
    if (lua_getfield(L, LUA_REGISTRYINDEX, NOTEBOOK_KEY) == LUA_TUSERDATA)
        return lua_touserdata(L, -1);
    lua_pop(L, 1);
    lw__lua_notes *made = lua_newuserdatauv(L, sizeof *made, 0);
    *made = (lw__lua_notes){NULL, 0, 0, NULL};
    lua_pushvalue(L, -1);
    lua_setfield(L, LUA_REGISTRYINDEX, NOTEBOOK_KEY);
    return made;
}

// Note g; returns it, or the side that is to be taken in its place: a jump happens at the end of a
// step, where its instant was found, and not within.
static double note(lua_State *L, double g)
{
    lw__lua_notes *notes = lua_touserdata(L, lua_upvalueindex(1));
    if (notes->at == NULL)
        return g;
    double side = 0;
    if (notes->n < notes->room) {
        notes->at[notes->n] = g;
        side = notes->sides != NULL ? notes->sides[notes->n] : 0;
    }
    notes->n++;
    return side != 0 ? side : g;
}

#define ONE_ARGUMENT(name)                                                                         \
    static int math_##name(lua_State *L)                                                           \
    {                                                                                              \
        lua_pushnumber(L, lw_##name(luaL_checknumber(L, 1)));                                      \
        return 1;                                                                                  \
    }
#define TWO_ARGUMENTS(name)                                                                        \
    static int math_##name(lua_State *L)                                                           \
    {                                                                                              \
        lua_pushnumber(L, lw_##name(luaL_checknumber(L, 1), luaL_checknumber(L, 2)));              \
        return 1;                                                                                  \
    }
LW_ELEMENTARY_1(ONE_ARGUMENT)
LW_ELEMENTARY_2(TWO_ARGUMENTS)

// atan(y, x), x being 1 unless given
static int math_atan_of(lua_State *L)
{
    lua_pushnumber(L, lw_atan2(luaL_checknumber(L, 1), luaL_optnumber(L, 2, 1)));
    return 1;
}

// log(x, base)
static int math_log_of(lua_State *L)
{
    double x = luaL_checknumber(L, 1);
    double base = luaL_optnumber(L, 2, 0);
    if (lua_isnoneornil(L, 2))
        lua_pushnumber(L, lw_log(x));
    else if (base == 2)
        lua_pushnumber(L, lw_log2(x));
    else if (base == 10)
        lua_pushnumber(L, lw_log10(x));
    else
        lua_pushnumber(L, lw_log(x) / lw_log(base));
    return 1;
}

static int math_sqrt(lua_State *L)
{
    lua_pushnumber(L, sqrt(luaL_checknumber(L, 1)));
    return 1;
}

static int math_deg(lua_State *L)
{
    lua_pushnumber(L, luaL_checknumber(L, 1) * (180 / PI));
    return 1;
}

static int math_rad(lua_State *L)
{
    lua_pushnumber(L, luaL_checknumber(L, 1) * (PI / 180));
    return 1;
}

// ---- whole numbers

static void push_whole(lua_State *L, double value)
{
    lua_Integer whole;
    if (lua_numbertointeger(value, &whole))
        lua_pushinteger(L, whole);
    else
        lua_pushnumber(L, value);
}

static int math_floor(lua_State *L)
{
    if (lua_isinteger(L, 1))
        lua_settop(L, 1);
    else
        push_whole(L, floor(luaL_checknumber(L, 1)));
    return 1;
}

static int math_ceil(lua_State *L)
{
    if (lua_isinteger(L, 1))
        lua_settop(L, 1);
    else
        push_whole(L, ceil(luaL_checknumber(L, 1)));
    return 1;
}

static int math_abs(lua_State *L)
{
    note(L, luaL_checknumber(L, 1));
    if (lua_isinteger(L, 1)) {
        lua_Integer n = lua_tointeger(L, 1);
        lua_pushinteger(L, n < 0 ? (lua_Integer)(0u - (lua_Unsigned)n) : n);
    } else {
        lua_pushnumber(L, fabs(luaL_checknumber(L, 1)));
    }
    return 1;
}

static int math_fmod(lua_State *L)
{
    if (!lua_isinteger(L, 1) || !lua_isinteger(L, 2)) {
        lua_pushnumber(L, fmod(luaL_checknumber(L, 1), luaL_checknumber(L, 2)));
        return 1;
    }
    lua_Integer d = lua_tointeger(L, 2);
    luaL_argcheck(L, d != 0, 2, "zero");
    lua_pushinteger(L, d == -1 ? 0 : lua_tointeger(L, 1) % d);
    return 1;
}

static int math_modf(lua_State *L)
{
    double x = luaL_checknumber(L, 1);
    double whole = x < 0 ? ceil(x) : floor(x);
    lua_pushnumber(L, whole);
    lua_pushnumber(L, whole == x ? 0 : x - whole);
    return 2;
}

static int math_tointeger(lua_State *L)
{
    int is_whole;
    lua_Integer n = lua_tointegerx(L, 1, &is_whole);
    if (is_whole) {
        lua_pushinteger(L, n);
        return 1;
    }
    luaL_checkany(L, 1);
    luaL_pushfail(L);
    return 1;
}

static int math_type(lua_State *L)
{
    if (lua_type(L, 1) == LUA_TNUMBER) {
        lua_pushstring(L, lua_isinteger(L, 1) ? "integer" : "float");
        return 1;
    }
    luaL_checkany(L, 1);
    luaL_pushfail(L);
    return 1;
}

static int math_ult(lua_State *L)
{
    lua_pushboolean(L,
                    (lua_Unsigned)luaL_checkinteger(L, 1) < (lua_Unsigned)luaL_checkinteger(L, 2));
    return 1;
}

static int extreme(lua_State *L, int largest)
{
    int n = lua_gettop(L), best = 1;
    luaL_argcheck(L, n >= 1, 1, "number expected");
    for (int i = 1; i <= n; i++) {
        double x = luaL_checknumber(L, i);
        if (i > 1)
            note(L, x - lua_tonumber(L, best));
        if (largest ? lua_compare(L, best, i, LUA_OPLT) : lua_compare(L, i, best, LUA_OPLT))
            best = i;
    }
    lua_pushvalue(L, best);
    return 1;
}

static int math_min(lua_State *L)
{
    return extreme(L, 0);
}

static int math_max(lua_State *L)
{
    return extreme(L, 1);
}

// ---- with a kink or a jump, beyond Lua's

// clamp(x, lo, hi): x held within lo and hi
static int math_clamp(lua_State *L)
{
    double x = luaL_checknumber(L, 1), lo = luaL_checknumber(L, 2), hi = luaL_checknumber(L, 3);
    luaL_argcheck(L, lo <= hi, 3, "below the second");
    note(L, x - lo);
    note(L, x - hi);
    lua_pushnumber(L, x < lo ? lo : x > hi ? hi : x);
    return 1;
}

// sign(x): -1, 0 or 1
static int math_sign(lua_State *L)
{
    double x = note(L, luaL_checknumber(L, 1));
    lua_pushnumber(L, x > 0 ? 1 : x < 0 ? -1 : x);
    return 1;
}

// where(c, a, b): a where c > 0 or c is true, b otherwise
static int math_where(lua_State *L)
{
    double c = lua_isboolean(L, 1) ? (lua_toboolean(L, 1) ? 1 : -1) : luaL_checknumber(L, 1);
    luaL_checknumber(L, 2);
    luaL_checknumber(L, 3);
    lua_pushvalue(L, note(L, c) > 0 ? 2 : 3);
    return 1;
}

// A table of points as a function: lines between, the ends held. It notes its distance from the
// nearest point, with a sign that alternates from line to line.
static int table_value(lua_State *L)
{
    double x = luaL_checknumber(L, 1);
    const double *point = lua_touserdata(L, lua_upvalueindex(2));
    int n = (int)lua_tointeger(L, lua_upvalueindex(3)), low = 0, high = n;
    while (high - low > 0) { // low: points at or before x
        int middle = low + (high - low) / 2;
        if (point[2 * middle] <= x)
            low = middle + 1;
        else
            high = middle;
    }
    double before = low > 0 ? x - point[2 * low - 2] : (double)HUGE_VAL;
    double after = low < n ? point[2 * low] - x : (double)HUGE_VAL;
    note(L, (low % 2 == 0 ? -1 : 1) * (before < after ? before : after));
    if (low == 0 || low == n) {
        lua_pushnumber(L, point[low == 0 ? 1 : 2 * n - 1]);
        return 1;
    }
    const double *a = point + 2 * low - 2, *b = a + 2;
    lua_pushnumber(L, a[1] + (x - a[0]) * ((b[1] - a[1]) / (b[0] - a[0])));
    return 1;
}

// table { { x, y }, ... }: x rising
static int math_table(lua_State *L)
{
    luaL_checktype(L, 1, LUA_TTABLE);
    lua_settop(L, 1);
    lua_Unsigned n = lua_rawlen(L, 1);
    luaL_argcheck(L, n >= 2 && n <= 100000, 1, "2 to 100000 points { x, y } expected");
    lua_pushvalue(L, lua_upvalueindex(1));
    double *point = lua_newuserdatauv(L, 2 * (size_t)n * sizeof *point, 0);
    for (lua_Unsigned i = 0; i < n; i++) {
        int given = lua_rawgeti(L, 1, (lua_Integer)i + 1) == LUA_TTABLE;
        for (int k = 0; given && k < 2; k++) {
            given = lua_rawgeti(L, 4, k + 1) == LUA_TNUMBER;
            point[2 * i + (lua_Unsigned)k] = lua_tonumber(L, -1);
            given = given && isfinite(point[2 * i + (lua_Unsigned)k]);
            lua_pop(L, 1);
        }
        if (!given)
            return luaL_argerror(L, 1, lua_pushfstring(L, "point %d is no { x, y }", (int)i + 1));
        if (i > 0 && !(point[2 * i] > point[2 * i - 2]))
            return luaL_argerror(
                L, 1, lua_pushfstring(L, "x of point %d is not above the one before", (int)i + 1));
        lua_settop(L, 3);
    }
    lua_pushinteger(L, (lua_Integer)n);
    lua_pushcclosure(L, table_value, 3);
    return 1;
}

#define ELEMENTARY(name) {#name, math_##name},
static const luaL_Reg noting[] = {{"abs", math_abs},     {"min", math_min},   {"max", math_max},
                                  {"clamp", math_clamp}, {"sign", math_sign}, {"where", math_where},
                                  {"table", math_table}, {NULL, NULL}};
static const luaL_Reg functions[] = {LW_ELEMENTARY_1(ELEMENTARY)
                                         LW_ELEMENTARY_2(ELEMENTARY){"atan", math_atan_of},
                                     {"log", math_log_of},
                                     {"sqrt", math_sqrt},
                                     {"deg", math_deg},
                                     {"rad", math_rad},
                                     {"floor", math_floor},
                                     {"ceil", math_ceil},
                                     {"fmod", math_fmod},
                                     {"modf", math_modf},
                                     {"tointeger", math_tointeger},
                                     {"type", math_type},
                                     {"ult", math_ult},
                                     {"random", lw__lua_random},
                                     {"randomseed", lw__lua_random_seed},
                                     {NULL, NULL}};

int lw__lua_push_math(lua_State *L)
{
    luaL_newlib(L, functions);
    lw__lua_notes_of(L);
    luaL_setfuncs(L, noting, 1);
    lua_pushnumber(L, PI);
    lua_setfield(L, -2, "pi");
    lua_pushnumber(L, (lua_Number)HUGE_VAL);
    lua_setfield(L, -2, "huge");
    lua_pushinteger(L, LUA_MAXINTEGER);
    lua_setfield(L, -2, "maxinteger");
    lua_pushinteger(L, LUA_MININTEGER);
    lua_setfield(L, -2, "mininteger");
    return 1;
}
