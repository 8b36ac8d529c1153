// pairs of the sandbox. See program_pairs.h.
//
// Lua's own order of texts depends on a number drawn at start-up: a rig built in that order would
// not be the same twice.
//
// Workload: small tables, once a study. A list needs no room; other keys are sorted once.

#include "program_pairs.h"

#include <lauxlib.h>
#include <stdlib.h>
#include <string.h>

typedef struct key {
    enum { NUMBER, TEXT, TRUTH, OTHER } kind;
    lua_Integer place; // in the list of keys as found
    lua_Number number; // of a truth: 0 or 1
    const char *text;  // stays while the key stands in the list
    size_t n_bytes;
} key;

static int by_order(const void *first, const void *second)
{
    const key *a = first, *b = second;
    if (a->kind != b->kind)
        return a->kind < b->kind ? -1 : 1;
    if (a->kind == TEXT) {
        size_t both = a->n_bytes < b->n_bytes ? a->n_bytes : b->n_bytes;
        int order = memcmp(a->text, b->text, both);
        return order != 0 ? order : a->n_bytes < b->n_bytes ? -1 : 1;
    }
    if (a->number < b->number || a->number > b->number)
        return a->number < b->number ? -1 : 1;
    return a->place < b->place ? -1 : 1;
}

static key read_key(lua_State *L, int index, lua_Integer place)
{
    key k = {OTHER, place, 0, NULL, 0};
    switch (lua_type(L, index)) {
    case LUA_TNUMBER:
        k.kind = NUMBER;
        k.number = lua_tonumber(L, index);
        break;
    case LUA_TSTRING:
        k.kind = TEXT;
        k.text = lua_tolstring(L, index, &k.n_bytes);
        break;
    case LUA_TBOOLEAN:
        k.kind = TRUTH;
        k.number = lua_toboolean(L, index);
        break;
    default:
        break;
    }
    return k;
}

// Push the list of keys of the table at 1 that are not the whole numbers 1 to n; their number.
static lua_Integer push_keys(lua_State *L, lua_Integer n)
{
    lua_Integer n_keys = 0;
    lua_newtable(L);
    int keys = lua_gettop(L);
    for (lua_pushnil(L); lua_next(L, 1) != 0; lua_pop(L, 1)) {
        if (lua_isinteger(L, -2) && lua_tointeger(L, -2) >= 1 && lua_tointeger(L, -2) <= n)
            continue;
        lua_pushvalue(L, -2);
        lua_rawseti(L, keys, ++n_keys);
    }
    return n_keys;
}

// Push the keys of the list on top of the stack in order.
static void push_sorted(lua_State *L, lua_Integer n_keys)
{
    int keys = lua_gettop(L);
    key *k = lua_newuserdatauv(L, (size_t)n_keys * sizeof *k, 0);
    for (lua_Integer i = 0; i < n_keys; i++) {
        lua_rawgeti(L, keys, i + 1);
        k[i] = read_key(L, -1, i + 1);
        lua_pop(L, 1);
    }
    if (n_keys > 1)
        qsort(k, (size_t)n_keys, sizeof *k, by_order);
    lua_createtable(L, n_keys < 1000000 ? (int)n_keys : 1000000, 0);
    for (lua_Integer i = 0; i < n_keys; i++) {
        lua_rawgeti(L, keys, k[i].place);
        lua_rawseti(L, -2, i + 1);
    }
}

// Upvalues: table, n, list of the other keys, place last visited (counted over both).
static int next_pair(lua_State *L)
{
    lua_Integer n = lua_tointeger(L, lua_upvalueindex(2));
    lua_Integer place = lua_tointeger(L, lua_upvalueindex(4));
    lua_settop(L, 0);
    for (;;) {
        place++;
        if (place <= n)
            lua_pushinteger(L, place);
        else if (lua_rawgeti(L, lua_upvalueindex(3), place - n) == LUA_TNIL)
            return 1;
        lua_pushvalue(L, -1);
        if (lua_rawget(L, lua_upvalueindex(1)) != LUA_TNIL)
            break;
        lua_settop(L, 0);
    }
    lua_pushinteger(L, place);
    lua_replace(L, lua_upvalueindex(4));
    return 2;
}

int lw__program_pairs(lua_State *L)
{
    luaL_checkany(L, 1);
    lua_settop(L, 1);
    if (luaL_getmetafield(L, 1, "__pairs") != LUA_TNIL) {
        lua_pushvalue(L, 1);
        lua_call(L, 1, 3);
        return 3;
    }
    luaL_checktype(L, 1, LUA_TTABLE);
    lua_Integer n = (lua_Integer)lua_rawlen(L, 1);
    lua_pushinteger(L, n);
    push_sorted(L, push_keys(L, n));
    lua_replace(L, 3);
    lua_settop(L, 3);
    lua_pushinteger(L, 0);
    lua_pushcclosure(L, next_pair, 4);
    return 1;
}
