// Speed of a control law written in Lua: W6, a PI with filter called each period, under the full
// contract of a law inside a whole loop (plant, adc, dac), against a bare protected call from C
// with positional scalars and a lag as cheap as can be. And of a plant written in Lua: W4.lua, the
// loop of W4 with its flow in Lua, against plain C.

#include "bench.h"
#include "w4.h"

#include "../bindings/latewood_lua.h"

#include <lauxlib.h>
#include <lualib.h>

static lua_State *L;
static int run_at, bare_at, flow_at; // places of the functions on the stack

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
    "local axis = lw.rig 'axis'\n"
    "local tanh, sin, abs = lw.math.tanh, lw.math.sin, lw.math.abs\n"
    "axis:plant { 'plant', lw.plant.flow {\n"
    "  states = { 'current', 'motor', 'twist', 'load', 'angle' }, inputs = { 'volts' },\n"
    "  rtol = 1e-8, atol = 1e-10,\n"
    "  flow = function(current, motor, twist, load, angle, volts)\n"
    "    local shaft = 160 * twist + 0.012 * (motor - load)\n"
    "    local held = 0.015 * tanh(load / 0.4) + 0.00006 * load * abs(load)\n"
    "                 + 0.05 * sin(angle + 0.3)\n"
    "    return (volts - 1.2 * current - 0.11 * motor) / 0.0018,\n"
    "           (0.11 * current - 0.00025 * motor - shaft) / 0.00014,\n"
    "           motor - load, (shaft - 0.0003 * load - held) / 0.0009, load\n"
    "  end } }\n"
    "axis:source { 'wanted', lw.source.pulses { low = -12, high = 12, width = '100 ms',\n"
    "  every = '200 ms' } }\n"
    "axis:adc { 'adc', of = 'plant.motor', every = '50 us', bits = 12, range = { -40, 40 } }\n"
    "axis:dac { 'dac', to = 'plant.volts' }\n"
    "axis:loop { 'loop', wanted = 'wanted', measured = 'adc', output = 'dac',\n"
    "  latency = '0.37 samples', law = lw.law.pi { kp = 2, ki = 240, limit = { -15, 15 },\n"
    "  anti_windup = 'back-calculation', kb = 600 } }\n"
    "local function flow(n)\n"
    "  local r = axis:start { lasts = n * 50e-6 }\n"
    "  r:advance(n * 50e-6)\n"
    "  return r:value 'plant.motor'\n"
    "end\n"
    "return run, bare, flow\n";

static void fail(void)
{
    fprintf(stderr, "%s\n", lua_tostring(L, -1));
    exit(1);
}

static double call_with(int function, long n)
{
    lua_pushvalue(L, function);
    lua_pushinteger(L, n);
    if (lua_pcall(L, 1, 1, 0) != LUA_OK)
        fail();
    double y = lua_tonumber(L, -1);
    lua_settop(L, flow_at);
    return y;
}

static double whole_loop(long n)
{
    return call_with(run_at, n);
}

static double flow_loop(long n)
{
    return call_with(flow_at, n);
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
        lua_settop(L, flow_at);
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
    run_at = lua_gettop(L) - 2;
    bare_at = run_at + 1;
    flow_at = run_at + 2;
    bench_pair("W6", 300000, whole_loop, bare_calls);
    bench_pair("W4.lua", 4000, flow_loop, w4_plain);
    lua_close(L);
    return 0;
}
