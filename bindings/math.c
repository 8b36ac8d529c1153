// lw.math: Lua's `math` with elementary functions that give the same bits on every processor.
//
// Names and conventions are those of Lua 5.4's manual, section 6.7; tanh and others are added.

#include "module.h"

#include "box.h"

#include <latewood/elementary.h>
#include <math.h>
#include <stdint.h>
#include <string.h>

#define PI 3.14159265358979323846

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
        luaL_checknumber(L, i);
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

#define ELEMENTARY(name) {#name, math_##name},
static const luaL_Reg functions[] = {LW_ELEMENTARY_1(ELEMENTARY)
                                         LW_ELEMENTARY_2(ELEMENTARY){"atan", math_atan_of},
                                     {"log", math_log_of},
                                     {"sqrt", math_sqrt},
                                     {"deg", math_deg},
                                     {"rad", math_rad},
                                     {"floor", math_floor},
                                     {"ceil", math_ceil},
                                     {"abs", math_abs},
                                     {"fmod", math_fmod},
                                     {"modf", math_modf},
                                     {"tointeger", math_tointeger},
                                     {"type", math_type},
                                     {"ult", math_ult},
                                     {"min", math_min},
                                     {"max", math_max},
                                     {"random", lw__lua_random},
                                     {"randomseed", lw__lua_random_seed},
                                     {NULL, NULL}};

int lw__lua_push_math(lua_State *L)
{
    luaL_newlib(L, functions);
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
