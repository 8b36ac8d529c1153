// The module table and every registration, on one page.
//
// Invariants
// 1. No globals: the module is what luaopen_latewood returns; classes live in the registry under
//    names that begin with "latewood.".
// 2. A name that a table of the module does not have is an error that offers the nearest one.

#include "module.h"

#include "box.h"
#include "captured.h"
#include "file.h"
#include "latewood_lua.h"
#include "statistics.h"

#include <string.h>

#ifndef LATEWOOD_VERSION
#define LATEWOOD_VERSION "0"
#endif

// ---- tables of functions

#define PLANT(name) {#name, lw__lua_plant_##name},
#define SOURCE(name) {#name, lw__lua_source_##name},
#define TIMING(name) {#name, lw__lua_timing_##name},
#define LAW(name) {#name, lw__lua_law_##name},
#define STATISTICS(name) {#name, lw__lua_statistics_##name},
#define RIG(name) {#name, lw__lua_rig_##name},
#define RUN(name) {#name, lw__lua_run_##name},
#define END                                                                                        \
    {                                                                                              \
        NULL, NULL                                                                                 \
    }

static const luaL_Reg plants[] = {LW__LUA_PLANTS(PLANT) END};
static const luaL_Reg plant_methods[] = {LW__LUA_PLANT_METHODS(PLANT) END};
static const luaL_Reg sources[] = {LW__LUA_SOURCES(SOURCE) END};
static const luaL_Reg timings[] = {LW__LUA_TIMINGS(TIMING) END};
static const luaL_Reg timing_methods[] = {LW__LUA_TIMING_METHODS(TIMING) END};
static const luaL_Reg laws[] = {LW__LUA_LAWS(LAW) END};
static const luaL_Reg law_methods[] = {LW__LUA_LAW_METHODS(LAW) END};
static const luaL_Reg statistics[] = {LW__LUA_STATISTICS(STATISTICS) END};
static const luaL_Reg rig_methods[] = {LW__LUA_RIG_METHODS(RIG) END};
static const luaL_Reg run_methods[] = {LW__LUA_RUN_METHODS(RUN) END};
static const luaL_Reg int_methods[] = {{"value", lw__lua_int_value}, END};
static const luaL_Reg no_methods[] = {END};

static const luaL_Reg module_functions[] = {{"rig", lw__lua_rig_new},
                                            {"draw", lw__lua_draw},
                                            {"normal_quantile", lw__lua_normal_quantile},
                                            {"normal_cdf", lw__lua_normal_cdf},
                                            {"random", lw__lua_random},
                                            {"quantise", lw__lua_quantise},
                                            {"int", lw__lua_int_new},
                                            {"quantity", lw__lua_quantity},
                                            {"number_text", lw__lua_number_text},
                                            {"nearest", lw__lua_nearest},
                                            {"metric_kinds", lw__lua_metric_kinds},
                                            {"columns", lw__lua_columns},
                                            {"fail", lw__lua_fail_here},
                                            END};

static const struct {
    const char *name;
    const luaL_Reg *functions;
} tables[] = {{"plant", plants},
              {"source", sources},
              {"timing", timings},
              {"law", laws},
              {"statistics", statistics}};

// ---- classes

static const luaL_Reg plant_meta[] = {
    {"__gc", lw__lua_plant_close}, {"__close", lw__lua_plant_close}, END};
static const luaL_Reg timing_meta[] = {
    {"__gc", lw__lua_timing_close},          {"__close", lw__lua_timing_close},
    {"__add", lw__lua_timing_add},           {"__mul", lw__lua_timing_multiply},
    {"__tostring", lw__lua_timing_describe}, END};
static const luaL_Reg law_meta[] = {
    {"__gc", lw__lua_law_close}, {"__close", lw__lua_law_close}, END};
static const luaL_Reg rig_meta[] = {
    {"__gc", lw__lua_rig_close}, {"__close", lw__lua_rig_close}, END};
static const luaL_Reg run_meta[] = {
    {"__gc", lw__lua_run_close}, {"__close", lw__lua_run_close}, END};
static const luaL_Reg int_meta[] = {{"__tostring", lw__lua_int_describe}, END};

static const struct {
    const char *name;
    const luaL_Reg *methods, *meta;
} classes[] = {
    {LW__LUA_PLANT, plant_methods, plant_meta},    {LW__LUA_SOURCE, no_methods, no_methods},
    {LW__LUA_TIMING, timing_methods, timing_meta}, {LW__LUA_LAW, law_methods, law_meta},
    {LW__LUA_RIG, rig_methods, rig_meta},          {LW__LUA_RUN, run_methods, run_meta},
    {LW__LUA_INT, int_methods, int_meta}};

// ---- names that a table does not have

// Upvalue 1: how the table is called in a message. The table is at index 1, the name at 2.
static int refuse_name(lua_State *L)
{
    const char *names[128];
    int n = 0;
    luaL_checkstack(L, 12, NULL);
    const char *shown = lw__lua_shown(L, 2);
    if (lua_type(L, 2) != LUA_TSTRING)
        return lw__lua_fail(L, "%s has no %s", lua_tostring(L, lua_upvalueindex(1)), shown);
    lua_getmetatable(L, 1);
    lua_getfield(L, -1, "names");
    for (lua_pushnil(L); n < 128 && lua_next(L, -2) != 0; lua_pop(L, 1))
        names[n++] = lua_tostring(L, -1);
    const char *near = lw_nearest_name(lua_tostring(L, 2), names, n);
    return lw__lua_fail(L, "%s has no %s%s%s%s", lua_tostring(L, lua_upvalueindex(1)), shown,
                        near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

// Make refuse_name the fallback of the table at `table`. Its own names are listed once, in order,
// so that the message is always the same.
static void guard(lua_State *L, int table, const char *prefix, const char *name,
                  const luaL_Reg *functions)
{
    lua_createtable(L, 0, 3);
    lua_pushfstring(L, "%s%s", prefix, name);
    lua_pushcclosure(L, refuse_name, 1);
    lua_setfield(L, -2, "__index");
    lua_newtable(L);
    for (int i = 0; functions[i].name != NULL; i++) {
        lua_pushstring(L, functions[i].name);
        lua_rawseti(L, -2, i + 1);
    }
    lua_setfield(L, -2, "names");
    lua_pushboolean(L, 0);
    lua_setfield(L, -2, "__metatable");
    lua_setmetatable(L, table);
}

static void make_class(lua_State *L, const char *name, const luaL_Reg *methods,
                       const luaL_Reg *meta)
{
    luaL_newmetatable(L, name);
    luaL_setfuncs(L, meta, 0);
    lua_newtable(L);
    luaL_setfuncs(L, methods, 0);
    guard(L, lua_gettop(L), "a ", strrchr(name, '.') + 1, methods);
    lua_setfield(L, -2, "__index");
    lua_pushboolean(L, 0);
    lua_setfield(L, -2, "__metatable");
    lua_pop(L, 1);
}

// ---- the parts written in Lua

static const char *const parts[] = {"study", "spread", "sweep", "worst_phase", "measured", NULL};

static int is_part(const char *name)
{
    for (int i = 0; parts[i] != NULL; i++)
        if (strcmp(parts[i], name) == 0)
            return 1;
    return 0;
}

// Let messages pass over the folder of a shipped module: `path` is where `require` found one.
static void note_scripts(lua_State *L, const char *path)
{
    const char *slash = path != NULL ? strrchr(path, '/') : NULL;
    if (slash == NULL)
        return;
    lua_pushliteral(L, "@");
    lua_pushlstring(L, path, (size_t)(slash + 1 - path));
    lua_concat(L, 2);
    if (lua_getfield(L, LUA_REGISTRYINDEX, LATEWOOD_SCRIPTS) == LUA_TNIL) {
        lua_pushvalue(L, -2);
        lua_setfield(L, LUA_REGISTRYINDEX, LATEWOOD_SCRIPTS);
    }
    lua_pop(L, 2);
}

// Upvalue 1: `require`; 2: refuse_name. The module is at index 1, the name at 2.
static int find_part(lua_State *L)
{
    lua_settop(L, 2);
    if (lua_type(L, 2) != LUA_TSTRING || !is_part(lua_tostring(L, 2)) ||
        lua_isnil(L, lua_upvalueindex(1))) {
        lua_pushvalue(L, lua_upvalueindex(2));
        lua_insert(L, 1);
        lua_call(L, 2, 1);
        return 1;
    }
    lua_pushvalue(L, lua_upvalueindex(1));
    lua_pushfstring(L, "latewood.%s", lua_tostring(L, 2));
    lua_call(L, 1, 2);
    if (lua_type(L, -1) == LUA_TSTRING)
        note_scripts(L, lua_tostring(L, -1));
    lua_pop(L, 1);
    lua_pushvalue(L, 2);
    lua_pushvalue(L, -2);
    lua_rawset(L, 1);
    return 1;
}

// Put find_part before refuse_name for the module on top of the stack.
static void guard_module(lua_State *L)
{
    guard(L, lua_gettop(L), "latewood", "", module_functions);
    lua_getmetatable(L, -1);
    lua_getglobal(L, "require");
    lua_getfield(L, -2, "__index");
    lua_pushcclosure(L, find_part, 2);
    lua_setfield(L, -2, "__index");
    lua_getfield(L, -1, "names");
    for (size_t i = 0; i < sizeof tables / sizeof *tables; i++) {
        lua_pushstring(L, tables[i].name);
        lua_rawseti(L, -2, (lua_Integer)lua_rawlen(L, -2) + 1);
    }
    for (int i = 0; parts[i] != NULL; i++) {
        lua_pushstring(L, parts[i]);
        lua_rawseti(L, -2, (lua_Integer)lua_rawlen(L, -2) + 1);
    }
    lua_pop(L, 2);
}

// What a law captures of the libraries is not compared after a run.
static void keep_libraries_constant(lua_State *L)
{
    static const char *const names[] = {"_G",        "string", "table", "math",  "utf8",
                                        "coroutine", "os",     "io",    "debug", "package"};
    luaL_getsubtable(L, LUA_REGISTRYINDEX, LUA_LOADED_TABLE);
    for (size_t i = 0; i < sizeof names / sizeof *names; i++) {
        if (lua_getfield(L, -1, names[i]) == LUA_TTABLE)
            lw__lua_keep_constant(L, -1);
        lua_pop(L, 1);
    }
    lua_pop(L, 1);
}

static void keep_module_constant(lua_State *L)
{
    lw__lua_keep_constant(L, -1);
    for (lua_pushnil(L); lua_next(L, -2) != 0; lua_pop(L, 1))
        if (lua_type(L, -1) == LUA_TTABLE)
            lw__lua_keep_constant(L, -1);
}

int luaopen_latewood(lua_State *L)
{
    for (size_t i = 0; i < sizeof classes / sizeof *classes; i++)
        make_class(L, classes[i].name, classes[i].methods, classes[i].meta);
    lw__lua_file_class(L);
    lw__lua_sample_class(L);
    luaL_newlib(L, module_functions);
    for (size_t i = 0; i < sizeof tables / sizeof *tables; i++) {
        lua_newtable(L);
        luaL_setfuncs(L, tables[i].functions, 0);
        guard(L, lua_gettop(L), "lw.", tables[i].name, tables[i].functions);
        lua_setfield(L, -2, tables[i].name);
    }
    lw__lua_push_math(L);
    lua_setfield(L, -2, "math");
    lua_pushliteral(L, "latewood " LATEWOOD_VERSION);
    lua_setfield(L, -2, "_VERSION");
    guard_module(L);
    keep_libraries_constant(L);
    keep_module_constant(L);
    return 1;
}
