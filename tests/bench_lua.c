// Speed of a control law written in Lua: W6, a PI with filter called each period, under the full
// contract of a law inside a whole loop (plant, adc, dac), against a bare protected call from C
// with positional scalars and a lag as cheap as can be.

#include "bench.h"

#include "../bindings/latewood_lua.h"

#include <lauxlib.h>
#include <lualib.h>

static lua_State *L;
static int run_at, bare_at; // places of the run and of the bare function on the stack

static const char script[] =
    "local lw = require 'latewood'\n"
    "local FILTER, KP, KI, KAW, MOST = 0.35, 2.0, 0.012, 0.03, 15.0\n"
    "local rig = lw.rig 'bench'\n"
    "rig:plant { 'lag', lw.plant.first_order { gain = 1.3, time_constant = 0.0125 } }\n"
    "rig:adc { 'adc', of = 'lag.out', every = '50 us', bits = 12, range = { -40, 40 } }\n"
    "rig:dac { 'dac', to = 'lag.in' }\n"
    "rig:loop { 'loop', wanted = 12, measured = 'adc', output = 'dac', law = lw.law.own {\n"
    "  state = { xf = 0, xi = 0 },\n"
    "  step = function(wanted, measured, xf, xi)\n"
    "    xf = xf + FILTER * (measured - xf)\n"
    "    local e = wanted - xf\n"
    "    local p = KP * e + xi\n"
    "    local u = p\n"
    "    if u < -MOST then u = -MOST elseif u > MOST then u = MOST end\n"
    "    return u, xf, xi + KI * e + KAW * (u - p)\n"
    "  end } }\n"
    "local xf, xi = 0.0, 0.0\n"
    "local function bare(wanted, measured)\n"
    "  xf = xf + FILTER * (measured - xf)\n"
    "  local e = wanted - xf\n"
    "  local p = KP * e + xi\n"
    "  local u = p\n"
    "  if u < -MOST then u = -MOST elseif u > MOST then u = MOST end\n"
    "  xi = xi + KI * e + KAW * (u - p)\n"
    "  return u\n"
    "end\n"
    "local function run(n)\n"
    "  local r = rig:start { lasts = n * 50e-6 }\n"
    "  r:advance(n * 50e-6)\n"
    "  return r:value 'lag.out'\n"
    "end\n"
    "return run, bare\n";

static void fail(void)
{
    fprintf(stderr, "%s\n", lua_tostring(L, -1));
    exit(1);
}

static double whole_loop(long n)
{
    lua_pushvalue(L, run_at);
    lua_pushinteger(L, n);
    if (lua_pcall(L, 1, 1, 0) != LUA_OK)
        fail();
    double y = lua_tonumber(L, -1);
    lua_settop(L, bare_at);
    return y;
}

static double bare_calls(long n)
{
    const double magic = 6755399441055744.0, lsb = 80.0 / 4096;
    double y = 0;
    for (long k = 0; k < n; k++) {
        double code = (y * (1 / lsb) + magic) - magic;
        lua_pushvalue(L, bare_at);
        lua_pushnumber(L, 12);
        lua_pushnumber(L, code * lsb);
        if (lua_pcall(L, 2, 1, 0) != LUA_OK)
            fail();
        y += 0.004 * (lua_tonumber(L, -1) * 1.3 - y);
        lua_settop(L, bare_at);
    }
    return y;
}

int main(void)
{
    L = luaL_newstate();
    luaL_openlibs(L);
    luaL_requiref(L, "latewood", luaopen_latewood, 0);
    if (luaL_dostring(L, script) != LUA_OK)
        fail();
    run_at = lua_gettop(L) - 1;
    bare_at = run_at + 1;
    bench_pair("W6", 300000, whole_loop, bare_calls);
    lua_close(L);
    return 0;
}
