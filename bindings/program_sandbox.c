// The sandbox of a study.
//
// A study's chunk has its own table of globals: base functions that reach no file, string without
// dump, table, utf8, coroutine, and `math` with the engine's elementary functions. It can require
// "latewood" and files of its own folder. Instructions are counted; once they are used up every
// further one raises again, so that no pcall can go on. Time inside one call of a C function (a
// pattern that never ends) is not counted.
//
// Invariants
// 1. Nothing of os, io, package or debug can be reached from a study.
// 2. Only text is compiled, never bytecode.
// 3. What shipped modules call is theirs: a study has copies of the libraries and of the module's
//    tables, and changes only those.
// 4. pairs walks in one order, so that what a study builds does not depend on addresses.

#include "program_sandbox.h"

#include "captured.h"
#include "latewood_lua.h"
#include "program_files.h"
#include "program_pairs.h"
#include "shipped.h"

#include <lauxlib.h>
#include <lualib.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define EXIT_DATA 65
#define EXIT_NO_INPUT 66

#define GLOBALS "latewood.program.globals" // registry: the study's globals
#define FOLDER "latewood.program.folder"   // registry: the study's folder
#define LOADED "latewood.program.loaded"   // registry: modules of the study's folder
#define COUNT "latewood.program.count"     // registry: userdata with the instructions used
#define INPUTS "latewood.program.inputs"   // registry: list of { kind, name, path } of files read

#define HOOK_EVERY 100000
#define SHIPPED "@scripts/latewood/"
#define USED_UP                                                                                    \
    "the study used more than %d million instructions at one stretch; is there a loop without "    \
    "end?"

// ---- limits

void *lw__program_allocate(void *budget, void *p, size_t old_size, size_t new_size)
{
    lw__budget *b = budget;
    size_t old = p != NULL ? old_size : 0;
    if (new_size == 0) {
        free(p);
        b->used -= old;
        return NULL;
    }
    if (new_size > old && b->used - old + new_size > LW__PROGRAM_MEMORY)
        return NULL;
    void *grown = realloc(p, new_size);
    if (grown != NULL)
        b->used += new_size - old;
    return grown;
}

static int64_t *instruction_count(lua_State *L)
{
    lua_getfield(L, LUA_REGISTRYINDEX, COUNT);
    int64_t *count = lua_touserdata(L, -1);
    lua_pop(L, 1);
    return count;
}

void lw__program_allow_again(lua_State *L)
{
    int64_t *count = instruction_count(L);
    if (*count <= LW__PROGRAM_INSTRUCTIONS)
        *count = 0;
}

int lw__program_exhausted(lua_State *L)
{
    const int64_t *count = instruction_count(L);
    return count != NULL && *count > LW__PROGRAM_INSTRUCTIONS;
}

static void on_count(lua_State *L, lua_Debug *ar)
{
    int64_t *count = instruction_count(L);
    *count += lua_gethookcount(L);
    if (*count <= LW__PROGRAM_INSTRUCTIONS)
        return;
    lua_getinfo(L, "Sl", ar); // shipped modules go on, so that they can tell of it
    if (strncmp(ar->source, SHIPPED, sizeof SHIPPED - 1) == 0)
        return;
    lua_sethook(L, on_count, LUA_MASKCOUNT, 1); // raise again at once, whoever catches this
    lua_pushfstring(L, "%s:%d: " USED_UP, ar->short_src, ar->currentline,
                    (int)(LW__PROGRAM_INSTRUCTIONS / 1000000));
    lua_error(L);
}

// Upvalue 1: coroutine.create or wrap. Once the instructions are used up no coroutine begins: each
// would have HOOK_EVERY instructions of its own before it is stopped.
static int begin_coroutine(lua_State *L)
{
    if (lw__program_exhausted(L))
        return luaL_error(L, USED_UP, (int)(LW__PROGRAM_INSTRUCTIONS / 1000000));
    lua_pushvalue(L, lua_upvalueindex(1));
    lua_insert(L, 1);
    lua_call(L, lua_gettop(L) - 1, LUA_MULTRET);
    return lua_gettop(L);
}

// ---- modules

static int load_shipped(lua_State *L)
{
    const char *name = lua_tostring(L, 1);
    for (const lw__shipped *m = lw__shipped_modules; m->name != NULL; m++) {
        if (strcmp(m->name, name) != 0)
            continue;
        lua_pushfstring(L, "@%s", m->file);
        if (luaL_loadbufferx(L, (const char *)m->text, m->n_bytes, lua_tostring(L, -1), "t") !=
            LUA_OK)
            return lua_error(L);
        lua_pushstring(L, m->file);
        return 2;
    }
    lua_pushfstring(L, "no module '%s' is shipped", name);
    return 1;
}

static int raise_at_study(lua_State *L, const char *message)
{
    luaL_where(L, 1);
    lua_pushstring(L, message);
    lua_concat(L, 2);
    return lua_error(L);
}

// Leave the text of a module as a function whose globals are the study's.
static int compile(lua_State *L, const char *text, size_t n_bytes, const char *path)
{
    lua_pushfstring(L, "@%s", path);
    int status = luaL_loadbufferx(L, text, n_bytes, lua_tostring(L, -1), "t");
    lua_remove(L, -2);
    if (status == LUA_OK) {
        lua_getfield(L, LUA_REGISTRYINDEX, GLOBALS);
        lua_setupvalue(L, -2, 1);
    }
    return status;
}

// Note that the study is made of this file too, once.
static void note_input(lua_State *L, const char *kind, const char *name, const char *path)
{
    lua_getfield(L, LUA_REGISTRYINDEX, INPUTS);
    if (lua_getfield(L, -1, name) != LUA_TNIL) {
        lua_pop(L, 2);
        return;
    }
    lua_pop(L, 1);
    lua_createtable(L, 3, 0);
    lua_pushstring(L, kind);
    lua_rawseti(L, -2, 1);
    lua_pushstring(L, name);
    lua_rawseti(L, -2, 2);
    lua_pushstring(L, path);
    lua_rawseti(L, -2, 3);
    lua_pushvalue(L, -1);
    lua_setfield(L, -3, name);
    lua_rawseti(L, -2, (lua_Integer)lua_rawlen(L, -2) + 1);
    lua_pop(L, 1);
}

void lw__program_inputs(lua_State *L)
{
    lua_getfield(L, LUA_REGISTRYINDEX, INPUTS);
}

// require of a study: "latewood", or a Lua file of its folder ("parts.motor": parts/motor.lua).
static int study_require(lua_State *L)
{
    char relative[512], why[700];
    const char *name = luaL_checkstring(L, 1);
    lua_settop(L, 1);
    lua_getfield(L, LUA_REGISTRYINDEX, LOADED);
    lua_pushvalue(L, 1);
    if (lua_rawget(L, 2) != LUA_TNIL)
        return 1;
    if (strlen(name) > 400 || strchr(name, '/') != NULL)
        return luaL_error(L, "require: \"%s\" is no name of a module", name);
    snprintf(relative, sizeof relative, "%s", name);
    for (char *c = relative; *c != 0; c++)
        *c = *c == '.' ? '/' : *c;
    strcat(relative, ".lua");
    lua_getfield(L, LUA_REGISTRYINDEX, FOLDER);
    char *path = lw__program_inside(lua_tostring(L, -1), relative, why, sizeof why);
    size_t n_bytes = 0;
    int missing, status = LUA_ERRRUN;
    char *text = path != NULL ? lw__program_read(path, &n_bytes, &missing, why, sizeof why) : NULL;
    if (text != NULL) {
        note_input(L, "module", relative, path);
        status = compile(L, text, n_bytes, relative);
    }
    free(text);
    free(path);
    if (text == NULL)
        return raise_at_study(L, why);
    if (status != LUA_OK)
        return lua_error(L);
    lua_pushvalue(L, 1);
    lua_call(L, 1, 1);
    if (lua_isnil(L, -1))
        lua_pushboolean(L, 1);
    lua_pushvalue(L, 1);
    lua_pushvalue(L, -2);
    lua_rawset(L, 2);
    return 1;
}

// LATEWOOD_RESOLVE: the path to open for a data file of the study.
static int resolve(lua_State *L)
{
    char why[700];
    const char *name = luaL_checkstring(L, 1);
    lua_getfield(L, LUA_REGISTRYINDEX, FOLDER);
    char *path = lw__program_inside(lua_tostring(L, -1), name, why, sizeof why);
    if (path == NULL) {
        lua_pushnil(L);
        lua_pushstring(L, why);
        return 2;
    }
    note_input(L, "data", name, path);
    lua_pushstring(L, path);
    free(path);
    return 1;
}

// ---- what a study sees

// Replace the function at index 1, which gives a chunk in pieces, by the whole text.
static void join_pieces(lua_State *L)
{
    luaL_Buffer b;
    luaL_checktype(L, 1, LUA_TFUNCTION);
    lua_settop(L, 4);
    luaL_buffinit(L, &b);
    for (;;) {
        lua_pushvalue(L, 1);
        lua_call(L, 0, 1);
        if (lua_isnil(L, -1) || (lua_isstring(L, -1) && lua_rawlen(L, -1) == 0))
            break;
        if (!lua_isstring(L, -1))
            luaL_error(L, "load: a piece is a %s; text is wanted", luaL_typename(L, -1));
        luaL_addvalue(&b);
    }
    lua_pop(L, 1);
    luaL_pushresult(&b);
    lua_replace(L, 1);
}

// Only text: bytecode could break the interpreter.
static int safe_load(lua_State *L)
{
    size_t n_bytes;
    int in_pieces = !lua_isstring(L, 1), has_globals = lua_gettop(L) >= 4;
    if (in_pieces)
        join_pieces(L);
    const char *text = lua_tolstring(L, 1, &n_bytes);
    const char *name = luaL_optstring(L, 2, in_pieces ? "=(load)" : text);
    if (luaL_loadbufferx(L, text, n_bytes, name, "t") != LUA_OK) {
        lua_pushnil(L);
        lua_insert(L, -2);
        return 2;
    }
    if (has_globals)
        lua_pushvalue(L, 4);
    else
        lua_getfield(L, LUA_REGISTRYINDEX, GLOBALS);
    if (lua_setupvalue(L, -2, 1) == NULL)
        lua_pop(L, 1);
    return 1;
}

static int safe_setmetatable(lua_State *L)
{
    luaL_checktype(L, 1, LUA_TTABLE);
    if (lua_istable(L, 2)) {
        lua_pushliteral(L, "__gc");
        if (lua_rawget(L, 2) != LUA_TNIL)
            return luaL_error(L, "setmetatable: a study may not use __gc");
        lua_pop(L, 1);
    } else if (!lua_isnil(L, 2)) {
        return luaL_error(L, "setmetatable: a table or nil is wanted");
    }
    if (luaL_getmetafield(L, 1, "__metatable") != LUA_TNIL)
        return luaL_error(L, "setmetatable: the metatable is protected");
    lua_settop(L, 2);
    lua_setmetatable(L, 1);
    return 1;
}

// print goes to standard error: standard output holds results only.
static int print_aside(lua_State *L)
{
    int n = lua_gettop(L);
    for (int i = 1; i <= n; i++) {
        size_t length;
        const char *text = luaL_tolstring(L, i, &length);
        fwrite(text, 1, length, stderr);
        fputc(i < n ? '\t' : '\n', stderr);
        lua_pop(L, 1);
    }
    if (n == 0)
        fputc('\n', stderr);
    return 0;
}

static void copy_names(lua_State *L, int from, int to, const char *const *names)
{
    for (; *names != NULL; names++) {
        lua_getfield(L, from, *names);
        lua_setfield(L, to, *names);
    }
}

// A flat copy of the table on top of the stack without one of its names, in its place.
static void copy_table(lua_State *L, const char *without)
{
    luaL_checkstack(L, 6, NULL);
    lua_newtable(L);
    for (lua_pushnil(L); lua_next(L, -3) != 0; lua_pop(L, 1)) {
        if (without != NULL && strcmp(lua_tostring(L, -2), without) == 0)
            continue;
        lua_pushvalue(L, -2);
        lua_pushvalue(L, -2);
        lua_rawset(L, -5);
    }
    if (lua_getmetatable(L, -2))
        lua_setmetatable(L, -2);
    lua_remove(L, -2);
}

// A copy of the module and of its tables, left on the stack; they count as constant, as the
// module's own do. Parts written in Lua are shared: they are loaded when first asked for.
static void copy_module(lua_State *L, int module)
{
    lua_pushvalue(L, module);
    copy_table(L, NULL);
    lw__lua_keep_constant(L, -1);
    static const char *const tables[] = {"plant", "source", "timing", "law", "math", "statistics"};
    for (size_t i = 0; i < sizeof tables / sizeof *tables; i++) {
        lua_getfield(L, -1, tables[i]);
        copy_table(L, NULL);
        lw__lua_keep_constant(L, -1);
        lua_setfield(L, -2, tables[i]);
    }
}

// Strings find their methods in a table of which nobody has another name.
static void protect_strings(lua_State *L)
{
    lua_pushliteral(L, "");
    lua_getmetatable(L, -1);
    lua_getglobal(L, "string");
    copy_table(L, "dump");
    lua_setfield(L, -2, "__index");
    lua_pushboolean(L, 0);
    lua_setfield(L, -2, "__metatable");
    lua_pop(L, 2);
}

static void limit_coroutines(lua_State *L, int globals)
{
    static const char *const beginning[] = {"create", "wrap"};
    lua_getfield(L, globals, "coroutine");
    for (size_t i = 0; i < sizeof beginning / sizeof *beginning; i++) {
        lua_getfield(L, -1, beginning[i]);
        lua_pushcclosure(L, begin_coroutine, 1);
        lua_setfield(L, -2, beginning[i]);
    }
    lua_pop(L, 1);
}

// The globals of a study, in the registry. The study's copy of the module is on top of the stack.
static void make_globals(lua_State *L)
{
    static const char *const base[] = {"assert",   "error",    "getmetatable", "ipairs", "next",
                                       "pcall",    "rawequal", "rawget",       "rawlen", "rawset",
                                       "select",   "tonumber", "tostring",     "type",   "xpcall",
                                       "_VERSION", NULL};
    static const luaL_Reg own[] = {
        {"load", safe_load},        {"setmetatable", safe_setmetatable}, {"print", print_aside},
        {"require", study_require}, {"pairs", lw__program_pairs},        {NULL, NULL}};
    static const char *const libraries[] = {"table", "utf8", "coroutine", "string"};
    lua_newtable(L);
    int globals = lua_gettop(L);
    lua_pushglobaltable(L);
    copy_names(L, globals + 1, globals, base);
    lua_pop(L, 1);
    luaL_setfuncs(L, own, 0);
    lua_pushvalue(L, globals);
    lua_setfield(L, globals, "_G");
    for (size_t i = 0; i < sizeof libraries / sizeof *libraries; i++) {
        lua_getglobal(L, libraries[i]);
        copy_table(L, "dump");
        lua_setfield(L, globals, libraries[i]);
    }
    limit_coroutines(L, globals);
    lua_getfield(L, globals - 1, "math");
    lua_setfield(L, globals, "math");
    lua_setfield(L, LUA_REGISTRYINDEX, GLOBALS);
}

void lw__program_open(lua_State *L)
{
    int top = lua_gettop(L);
    static const luaL_Reg libraries[] = {
        {LUA_GNAME, luaopen_base},          {LUA_LOADLIBNAME, luaopen_package},
        {LUA_COLIBNAME, luaopen_coroutine}, {LUA_TABLIBNAME, luaopen_table},
        {LUA_STRLIBNAME, luaopen_string},   {LUA_MATHLIBNAME, luaopen_math},
        {LUA_UTF8LIBNAME, luaopen_utf8}};
    for (size_t i = 0; i < sizeof libraries / sizeof *libraries; i++) {
        luaL_requiref(L, libraries[i].name, libraries[i].func, 1);
        lua_pop(L, 1);
    }
    lua_getglobal(L, "package"); // shipped modules and nothing from the disk
    lua_createtable(L, 2, 0);
    lua_getfield(L, -2, "searchers");
    lua_rawgeti(L, -1, 1); // preload
    lua_rawseti(L, -3, 1);
    lua_pop(L, 1);
    lua_pushcfunction(L, load_shipped);
    lua_rawseti(L, -2, 2);
    lua_setfield(L, -2, "searchers");
    lua_pop(L, 1);
    lua_pushliteral(L, SHIPPED);
    lua_setfield(L, LUA_REGISTRYINDEX, LATEWOOD_SCRIPTS);
    lua_pushcfunction(L, resolve);
    lua_setfield(L, LUA_REGISTRYINDEX, LATEWOOD_RESOLVE);
    protect_strings(L);
    luaL_requiref(L, "latewood", luaopen_latewood, 0);
    copy_module(L, lua_gettop(L));
    make_globals(L);
    lua_newtable(L);
    lua_insert(L, -2);
    lua_setfield(L, -2, "latewood");
    lua_setfield(L, LUA_REGISTRYINDEX, LOADED);
    lua_newtable(L);
    lua_setfield(L, LUA_REGISTRYINDEX, INPUTS);
    *(int64_t *)lua_newuserdatauv(L, sizeof(int64_t), 0) = 0;
    lua_setfield(L, LUA_REGISTRYINDEX, COUNT);
    lua_sethook(L, on_count, LUA_MASKCOUNT, HOOK_EVERY);
    lua_settop(L, top);
}

// ---- running a study

static int message_with_code(lua_State *L, int code, const char *message)
{
    lua_pushstring(L, message);
    return code;
}

int lw__program_study(lua_State *L, const char *path)
{
    char why[700];
    size_t n_bytes = 0;
    int missing = 0;
    char *text = lw__program_read(path, &n_bytes, &missing, why, sizeof why);
    if (text == NULL)
        return message_with_code(L, missing ? EXIT_NO_INPUT : EXIT_DATA, why);
    const char *slash = strrchr(path, '/');
    note_input(L, "study", slash != NULL ? slash + 1 : path, path);
    char *folder = lw__program_folder_of(path);
    lua_pushstring(L, folder);
    lua_setfield(L, LUA_REGISTRYINDEX, FOLDER);
    free(folder);
    lua_getfield(L, LUA_REGISTRYINDEX, GLOBALS);
    lua_getfield(L, -1, "utf8");
    lua_getfield(L, -1, "len");
    lua_pushlstring(L, text, n_bytes);
    lua_call(L, 1, 1);
    int is_utf8 = lua_isinteger(L, -1);
    lua_pop(L, 3);
    int status = is_utf8 ? compile(L, text, n_bytes, path) : LUA_OK;
    free(text);
    if (!is_utf8) {
        snprintf(why, sizeof why, "%s: is not UTF-8 text; a study is", path);
        return message_with_code(L, EXIT_DATA, why);
    }
    if (status == LUA_OK)
        status = lua_pcall(L, 0, 1, 0);
    if (status == LUA_OK)
        return 0;
    if (status == LUA_ERRMEM)
        lua_pushfstring(L, "%s: not enough memory; a study may use %d MiB", path,
                        (int)(LW__PROGRAM_MEMORY >> 20));
    else if (!lua_isstring(L, -1))
        lua_pushfstring(L, "%s: raised a value of type %s instead of a message", path,
                        luaL_typename(L, -1));
    return EXIT_DATA;
}
