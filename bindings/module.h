// Every function of the module that Lua can call, one line of module.c each.
#ifndef LATEWOOD_BINDINGS_MODULE_H
#define LATEWOOD_BINDINGS_MODULE_H

#include <lua.h>

// X(name): lw__lua_plant_NAME is lw.plant.NAME, and so on.
// clang-format off
#define LW__LUA_PLANTS(X)                                                                          \
    X(state_space) X(transfer) X(zeros_poles) X(gain) X(integrator) X(first_order)                 \
    X(second_order) X(winding) X(dc_machine) X(two_mass_drive)                                     \
    X(series) X(parallel) X(feedback) X(connect) X(flow)                                           \
    X(lc_filter) X(thermal_lag) X(buck) X(boost) X(magnet_machine) X(pendulum) X(tank)             \
    X(modes) X(buck_switched) X(boost_switched) X(end_stop) X(fit)
#define LW__LUA_PLANT_METHODS(X) X(states) X(inputs) X(outputs) X(matrices)

#define LW__LUA_SOURCES(X)                                                                         \
    X(constant) X(step) X(ramp) X(sine) X(chirp) X(pulses) X(table) X(noise) X(own)

#define LW__LUA_TIMINGS(X)                                                                         \
    X(constant) X(uniform) X(triangular) X(normal) X(log_normal) X(exponential) X(gumbel)          \
    X(discrete) X(histogram) X(replay) X(modes) X(stall) X(maximum)
#define LW__LUA_TIMING_METHODS(X)                                                                  \
    X(support) X(cdf) X(density) X(quantile) X(median) X(moment) X(nodes) X(draw) X(describe)

#define LW__LUA_LAWS(X)                                                                            \
    X(p) X(pi) X(pd) X(pid) X(lead) X(biquad) X(z_transfer) X(state_feedback) X(observer) X(own)
#define LW__LUA_LAW_METHODS(X) X(inputs) X(outputs) X(states)

#define LW__LUA_STATISTICS(X) X(sample) X(proportion) X(rate) X(tolerance_runs)

#define LW__LUA_RIG_METHODS(X)                                                                     \
    X(plant) X(connect) X(source) X(value) X(adc) X(dac) X(pwm) X(loop)                                   \
    X(core) X(task) X(bus) X(frame) X(comparator) X(trip) X(encoder) X(noise)                                          \
    X(freeze) X(describe) X(timed) X(slices) X(start) X(run) X(close)
#define LW__LUA_RUN_METHODS(X)                                                                     \
    X(advance) X(drain) X(finish) X(restart) X(status) X(now) X(instants) X(value) X(metric)       \
    X(metrics) X(row) X(record) X(csv) X(json) X(block) X(close)
// clang-format on

#define LW__LUA_DECLARE_PLANT(name) int lw__lua_plant_##name(lua_State *L);
#define LW__LUA_DECLARE_SOURCE(name) int lw__lua_source_##name(lua_State *L);
#define LW__LUA_DECLARE_TIMING(name) int lw__lua_timing_##name(lua_State *L);
#define LW__LUA_DECLARE_LAW(name) int lw__lua_law_##name(lua_State *L);
#define LW__LUA_DECLARE_STATISTICS(name) int lw__lua_statistics_##name(lua_State *L);
#define LW__LUA_DECLARE_RIG(name) int lw__lua_rig_##name(lua_State *L);
#define LW__LUA_DECLARE_RUN(name) int lw__lua_run_##name(lua_State *L);
LW__LUA_PLANTS(LW__LUA_DECLARE_PLANT)
LW__LUA_PLANT_METHODS(LW__LUA_DECLARE_PLANT)
LW__LUA_SOURCES(LW__LUA_DECLARE_SOURCE)
LW__LUA_TIMINGS(LW__LUA_DECLARE_TIMING)
LW__LUA_TIMING_METHODS(LW__LUA_DECLARE_TIMING)
LW__LUA_LAWS(LW__LUA_DECLARE_LAW)
LW__LUA_LAW_METHODS(LW__LUA_DECLARE_LAW)
LW__LUA_STATISTICS(LW__LUA_DECLARE_STATISTICS)
LW__LUA_RIG_METHODS(LW__LUA_DECLARE_RIG)
LW__LUA_RUN_METHODS(LW__LUA_DECLARE_RUN)

// Metamethods.
int lw__lua_plant_close(lua_State *L);
int lw__lua_timing_close(lua_State *L);
int lw__lua_timing_add(lua_State *L);
int lw__lua_timing_multiply(lua_State *L);
int lw__lua_law_close(lua_State *L);
int lw__lua_int_value(lua_State *L);
int lw__lua_int_describe(lua_State *L);

// Of the module itself.
int lw__lua_rig_new(lua_State *L);
int lw__lua_draw(lua_State *L);
int lw__lua_normal_quantile(lua_State *L);
int lw__lua_normal_cdf(lua_State *L);
int lw__lua_random(lua_State *L);
int lw__lua_random_seed(lua_State *L);
int lw__lua_quantise(lua_State *L);
int lw__lua_int_new(lua_State *L);
int lw__lua_quantity(lua_State *L);
int lw__lua_number_text(lua_State *L);
int lw__lua_nearest(lua_State *L);
int lw__lua_metric_kinds(lua_State *L);
int lw__lua_columns(lua_State *L);
int lw__lua_fail_here(lua_State *L);
int lw__lua_push_math(lua_State *L);

#endif
