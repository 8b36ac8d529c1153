// What a function of a run can reach, before and after. See captured.h.
//
// A snapshot is a table of three: objects in the order found; object to its copy; object to the
// words that name it. Copies are flat and refer to the same inner objects, each of which has its
// own copy: so cycles and depth cost nothing, and comparing is flat too.
//
// Invariants
// 1. No recursion over the user's tables or functions: a growing list is walked.
// 2. Everything is read raw.

#include "captured.h"

#include "bytecode.h"

#include <math.h>
#include <string.h>

#define CONSTANT_KEY "latewood.constant"
#define MOST_NAME_BYTES 120

enum { ORDER = 1, COPIES, NAMES };

// ---- tables that count as constant

// Push the set of constant tables (weak keys), made when first asked for.
static void push_constants(lua_State *L)
{
    if (luaL_getsubtable(L, LUA_REGISTRYINDEX, CONSTANT_KEY))
        return;
    lua_createtable(L, 0, 1);
    lua_pushliteral(L, "k");
    lua_setfield(L, -2, "__mode");
    lua_setmetatable(L, -2);
}

static void keep_one(lua_State *L, int set, int index)
{
    lua_pushvalue(L, index);
    lua_pushboolean(L, 1);
    lua_rawset(L, set);
}

void lw__lua_keep_constant(lua_State *L, int index)
{
    index = lua_absindex(L, index);
    luaL_checkstack(L, 8, NULL);
    push_constants(L);
    keep_one(L, lua_gettop(L), index);
    lua_pop(L, 1);
}

static int is_constant(lua_State *L, int index)
{
    index = lua_absindex(L, index);
    push_constants(L);
    lua_pushvalue(L, index);
    int constant = lua_rawget(L, -2) != LUA_TNIL;
    lua_pop(L, 2);
    return constant;
}

// ---- functions and the globals they read

static int is_lua_function(lua_State *L, int index)
{
    return lua_type(L, index) == LUA_TFUNCTION && !lua_iscfunction(L, index);
}

// Push the table of globals of the function at `index`; 0 where it has none.
static int push_environment(lua_State *L, int index)
{
    const char *name;
    for (int i = 1; (name = lua_getupvalue(L, index, i)) != NULL; i++) {
        if (strcmp(name, "_ENV") == 0 && lua_type(L, -1) == LUA_TTABLE)
            return 1;
        lua_pop(L, 1);
    }
    return 0;
}

// ---- before: assignments

typedef struct inspection {
    lua_State *L;
    const lw__lua_reader *r;
    const char *field;
    int function, depth; // stack index; 0 for the function itself
    int pending;         // list of functions still to inspect
    int seen;
} inspection;

static void inspect_later(inspection *s, int index)
{
    lua_State *L = s->L;
    index = lua_absindex(L, index);
    lua_pushvalue(L, index);
    if (is_lua_function(L, index) && lua_rawget(L, s->seen) == LUA_TNIL) {
        lua_pushvalue(L, index);
        lua_rawseti(L, s->pending, (lua_Integer)lua_rawlen(L, s->pending) + 1);
        keep_one(L, s->seen, index);
    }
    lua_pop(L, 1);
}

static int refuse(const inspection *s, const char *what, const char *name, int line)
{
    lua_State *L = s->L;
    lua_Debug ar;
    lua_pushvalue(L, s->function);
    lua_getinfo(L, ">S", &ar);
    const char *quoted = lw__lua_quote(L, name);
    const char *place = lua_pushfstring(L, "%s:%d", ar.short_src, line > 0 ? line : ar.linedefined);
    return lw__lua_fail_at(
        L, place, "%s: %s%s assigns the %s %s; what a run remembers is returned as state",
        s->r->subject, s->field, s->depth > 0 ? " captures a function that" : "", what, quoted);
}

static void inspect_use(void *context, const lw__lua_found *use)
{
    inspection *s = context;
    lua_State *L = s->L;
    luaL_checkstack(L, 8, NULL);
    if (use->use == USE_SETS_UPVALUE) {
        const char *name = lua_getupvalue(L, s->function, use->upvalue);
        refuse(s, "upvalue", name != NULL ? name : "?", use->line);
    }
    lua_pushlstring(L, use->name, use->n_name);
    if (use->use == USE_SETS_GLOBAL)
        refuse(s, "global", lua_tostring(L, -1), use->line);
    if (push_environment(L, s->function)) {
        lua_pushvalue(L, -2);
        lua_rawget(L, -2);
        inspect_later(s, -1);
        lua_pop(L, 2);
    }
    lua_pop(L, 1);
}

static void inspect(inspection *s)
{
    lua_State *L = s->L;
    if (!lw__lua_scan(L, s->function, inspect_use, s))
        lw__lua_bad(s->r, "%s: its bytecode is not that of Lua 5.4, so it cannot be checked",
                    s->field);
    for (int i = 1; lua_getupvalue(L, s->function, i) != NULL; i++) {
        inspect_later(s, -1);
        lua_pop(L, 1);
    }
}

void lw__lua_refuse_assignments(const lw__lua_reader *r, const char *field, int index)
{
    lua_State *L = r->L;
    int top = lua_gettop(L);
    index = lua_absindex(L, index);
    luaL_checkstack(L, 8, NULL);
    lua_newtable(L);
    lua_newtable(L);
    inspection s = {L, r, field, 0, 0, top + 1, top + 2};
    inspect_later(&s, index);
    for (int i = 1; lua_rawgeti(L, s.pending, i) != LUA_TNIL; i++) {
        s.function = lua_gettop(L);
        s.depth = i - 1;
        inspect(&s);
        lua_settop(L, top + 2);
    }
    lua_settop(L, top);
}

// ---- after: the snapshot

void lw__lua_snapshot_new(lua_State *L)
{
    luaL_checkstack(L, 4, NULL);
    lua_createtable(L, 3, 0);
    for (int i = ORDER; i <= NAMES; i++) {
        lua_newtable(L);
        lua_rawseti(L, -2, i);
    }
}

typedef struct snapshot {
    lua_State *L;
    int order, copies, names; // stack indices
    int object, copy;         // under copying
} snapshot;

static snapshot open_snapshot(lua_State *L, int index)
{
    snapshot s = {L, 0, 0, 0, 0, 0};
    index = lua_absindex(L, index);
    luaL_checkstack(L, 20, NULL);
    lua_rawgeti(L, index, ORDER);
    lua_rawgeti(L, index, COPIES);
    lua_rawgeti(L, index, NAMES);
    s.names = lua_gettop(L);
    s.copies = s.names - 1;
    s.order = s.names - 2;
    return s;
}

// Put the object at `index` on the list, named by the text on top of the stack, which is popped.
static void note(const snapshot *s, int index)
{
    lua_State *L = s->L;
    int name = lua_gettop(L);
    index = lua_absindex(L, index);
    int wanted =
        is_lua_function(L, index) || (lua_type(L, index) == LUA_TTABLE && !is_constant(L, index));
    lua_pushvalue(L, index);
    if (wanted && lua_rawget(L, s->names) == LUA_TNIL) {
        lua_pushvalue(L, index);
        lua_rawseti(L, s->order, (lua_Integer)lua_rawlen(L, s->order) + 1);
        lua_pushvalue(L, index);
        lua_pushvalue(L, name);
        lua_rawset(L, s->names);
    }
    lua_settop(L, name - 1);
}

// Push how the element of `object` under the key at `key` is called.
static void push_element_name(const snapshot *s, int key)
{
    lua_State *L = s->L;
    int place = lua_gettop(L) + 1;
    lua_pushvalue(L, s->object);
    lua_rawget(L, s->names);
    const char *name = lua_tostring(L, -1);
    if (strlen(name) > MOST_NAME_BYTES)
        name = "...";
    if (lua_type(L, key) == LUA_TSTRING)
        lua_pushfstring(L, "%s.%s", name, lua_tostring(L, key));
    else
        lua_pushfstring(L, "%s[%s]", name, lw__lua_shown(L, key));
    lua_replace(L, place);
    lua_settop(L, place);
}

static void copy_table(const snapshot *s)
{
    lua_State *L = s->L;
    for (lua_pushnil(L); lua_next(L, s->object) != 0;) {
        int key = lua_gettop(L) - 1;
        push_element_name(s, key);
        note(s, key + 1);
        lua_pushvalue(L, key);
        lua_insert(L, key);     // key, key, value
        lua_rawset(L, s->copy); // key
    }
}

// A copy holds this in place of nil, so that it has the key.
static const char nothing;

static void push_or_nothing(lua_State *L, int index)
{
    if (lua_isnil(L, index))
        lua_pushlightuserdata(L, (void *)&nothing);
    else
        lua_pushvalue(L, index);
}

// Upvalues under their numbers.
static void copy_upvalues(const snapshot *s)
{
    lua_State *L = s->L;
    const char *name;
    for (int i = 1; (name = lua_getupvalue(L, s->object, i)) != NULL; i++) {
        if (strcmp(name, "_ENV") != 0) {
            lua_pushstring(L, name);
            note(s, -2);
            push_or_nothing(L, -1);
            lua_rawseti(L, s->copy, i);
        }
        lua_pop(L, 1);
    }
}

// Globals that the function reads, under their names.
static void copy_global(void *context, const lw__lua_found *use)
{
    const snapshot *s = context;
    lua_State *L = s->L;
    luaL_checkstack(L, 10, NULL);
    if (use->use != USE_GETS_GLOBAL || !push_environment(L, s->object))
        return;
    lua_pushlstring(L, use->name, use->n_name);
    lua_pushvalue(L, -1);
    lua_rawget(L, -3); // globals, name, value
    lua_pushvalue(L, -2);
    note(s, -2);
    push_or_nothing(L, -1);
    lua_remove(L, -2);
    lua_rawset(L, s->copy);
    lua_pop(L, 1);
}

static void copy_object(snapshot *s)
{
    lua_State *L = s->L;
    s->object = lua_gettop(L);
    lua_newtable(L);
    s->copy = lua_gettop(L);
    if (lua_type(L, s->object) == LUA_TTABLE) {
        copy_table(s);
    } else {
        copy_upvalues(s);
        lw__lua_scan(L, s->object, copy_global, s);
    }
    lua_pushvalue(L, s->object);
    lua_pushvalue(L, s->copy);
    lua_rawset(L, s->copies);
}

void lw__lua_snapshot_add(lua_State *L, int index, int function)
{
    int top = lua_gettop(L);
    function = lua_absindex(L, function);
    snapshot s = open_snapshot(L, index);
    lua_Integer i = (lua_Integer)lua_rawlen(L, s.order) + 1;
    lua_pushliteral(L, "the function");
    note(&s, function);
    for (; lua_rawgeti(L, s.order, i) != LUA_TNIL; i++) {
        copy_object(&s);
        lua_settop(L, s.names);
    }
    lua_settop(L, top);
}

// ---- comparing

// Whether the copied and the present value are the same; a NaN is the same as a NaN.
static int is_same(lua_State *L, int a, int b)
{
    if (lua_rawequal(L, a, b))
        return 1;
    if (lua_touserdata(L, a) == &nothing)
        return lua_isnil(L, b);
    return lua_type(L, a) == LUA_TNUMBER && lua_type(L, b) == LUA_TNUMBER &&
           isnan(lua_tonumber(L, a)) && isnan(lua_tonumber(L, b));
}

// The present value of what the copy has under the key at `key`, pushed.
static void push_present(const snapshot *s, int key)
{
    lua_State *L = s->L;
    if (lua_type(L, s->object) == LUA_TTABLE) {
        lua_pushvalue(L, key);
        lua_rawget(L, s->object);
    } else if (lua_isinteger(L, key)) {
        if (lua_getupvalue(L, s->object, (int)lua_tointeger(L, key)) == NULL)
            lua_pushnil(L);
    } else if (push_environment(L, s->object)) {
        lua_pushvalue(L, key);
        lua_rawget(L, -2);
        lua_remove(L, -2);
    } else {
        lua_pushnil(L);
    }
}

static const char *changed_name(const snapshot *s, int key)
{
    lua_State *L = s->L;
    if (lua_type(L, s->object) == LUA_TTABLE) {
        push_element_name(s, key);
        return lua_pushfstring(L, "the captured table element %s", lua_tostring(L, -1));
    }
    if (lua_type(L, key) == LUA_TSTRING)
        return lua_pushfstring(L, "the global %s", lua_tostring(L, key));
    const char *name = lua_getupvalue(L, s->object, (int)lua_tointeger(L, key));
    return lua_pushfstring(L, "the captured %s", name != NULL ? name : "?");
}

// NULL, or the words for a difference between object and copy.
static const char *difference(const snapshot *s)
{
    lua_State *L = s->L;
    for (lua_pushnil(L); lua_next(L, s->copy) != 0;) {
        int key = lua_gettop(L) - 1;
        push_present(s, key);
        if (!is_same(L, key + 1, key + 2))
            return changed_name(s, key);
        lua_settop(L, key);
    }
    if (lua_type(L, s->object) != LUA_TTABLE)
        return NULL;
    for (lua_pushnil(L); lua_next(L, s->object) != 0;) {
        int key = lua_gettop(L) - 1;
        lua_pushvalue(L, key);
        if (lua_rawget(L, s->copy) == LUA_TNIL)
            return changed_name(s, key);
        lua_settop(L, key);
    }
    return NULL;
}

const char *lw__lua_snapshot_compare(lua_State *L, int index)
{
    int top = lua_gettop(L);
    snapshot s = open_snapshot(L, index);
    for (lua_Integer i = 1; lua_rawgeti(L, s.order, i) != LUA_TNIL; i++) {
        s.object = lua_gettop(L);
        lua_pushvalue(L, s.object);
        lua_rawget(L, s.copies);
        s.copy = lua_gettop(L);
        const char *words = difference(&s);
        if (words != NULL) {
            words = lua_pushstring(L, words);
            lua_replace(L, top + 1);
            lua_settop(L, top + 1);
            return lua_tostring(L, -1);
        }
        lua_settop(L, s.names);
    }
    lua_settop(L, top);
    return NULL;
}
