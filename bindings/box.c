// Messages at the user's line, and userdata that own engine objects. See box.h.

#include "box.h"

#include "latewood_lua.h"

#include <latewood/quantity.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

#define SHOWN_BYTES 200

// ---- where the user's code stands

// Whether a chunk is one of the shipped modules. The stack is left as it was.
static int is_shipped(lua_State *L, const char *source)
{
    lua_getfield(L, LUA_REGISTRYINDEX, LATEWOOD_SCRIPTS);
    const char *folder = lua_tostring(L, -1);
    int shipped = folder != NULL && strncmp(source, folder, strlen(folder)) == 0;
    lua_pop(L, 1);
    return shipped;
}

const char *lw__lua_origin(lua_State *L)
{
    lua_Debug ar;
    luaL_checkstack(L, 4, NULL);
    for (int level = 0; lua_getstack(L, level, &ar); level++) {
        lua_getinfo(L, "Sl", &ar);
        if (ar.currentline > 0 && !is_shipped(L, ar.source))
            return lua_pushfstring(L, "%s:%d", ar.short_src, ar.currentline);
    }
    return lua_pushliteral(L, "");
}

// Raise the message on top of the stack with `origin` before it.
static int raise_top(lua_State *L, const char *origin)
{
    if (origin != NULL && origin[0] != 0)
        lua_pushfstring(L, "%s: %s", origin, lua_tostring(L, -1));
    return lua_error(L);
}

int lw__lua_fail_at(lua_State *L, const char *origin, const char *format, ...)
{
    va_list arguments;
    luaL_checkstack(L, 4, NULL);
    va_start(arguments, format);
    lua_pushvfstring(L, format, arguments);
    va_end(arguments);
    return raise_top(L, origin);
}

int lw__lua_fail(lua_State *L, const char *format, ...)
{
    va_list arguments;
    luaL_checkstack(L, 4, NULL);
    const char *origin = lw__lua_origin(L);
    va_start(arguments, format);
    lua_pushvfstring(L, format, arguments);
    va_end(arguments);
    return raise_top(L, origin);
}

int lw__lua_raise(lua_State *L, const char *origin, const lw_error *err)
{
    size_t n = origin != NULL ? strlen(origin) : 0;
    luaL_checkstack(L, 4, NULL);
    lua_pushstring(L, err->text);
    int has_it = n > 0 && strncmp(err->text, origin, n) == 0 && err->text[n] == ':';
    return raise_top(L, has_it ? NULL : origin);
}

const char *lw__lua_quote(lua_State *L, const char *text)
{
    size_t n = strlen(text);
    luaL_checkstack(L, 4, NULL);
    if (n <= SHOWN_BYTES)
        return lua_pushfstring(L, "\"%s\"", text);
    n = SHOWN_BYTES;
    while (n > 0 && ((unsigned char)text[n] & 0xC0) == 0x80)
        n--;
    lua_pushlstring(L, text, n);
    const char *quoted = lua_pushfstring(L, "\"%s...\"", lua_tostring(L, -1));
    lua_remove(L, -2);
    return quoted;
}

const char *lw__lua_shown(lua_State *L, int index)
{
    char number[32];
    luaL_checkstack(L, 4, NULL);
    switch (lua_type(L, index)) {
    case LUA_TNUMBER:
        if (lua_isinteger(L, index))
            return lua_pushfstring(L, "%I", (LUAI_UACINT)lua_tointeger(L, index));
        return lua_pushstring(L, lw_double_format(lua_tonumber(L, index), number));
    case LUA_TSTRING:
        return lw__lua_quote(L, lua_tostring(L, index));
    case LUA_TBOOLEAN:
        return lua_pushstring(L, lua_toboolean(L, index) ? "true" : "false");
    case LUA_TNIL:
    case LUA_TNONE:
        return lua_pushliteral(L, "nil");
    default:
        break;
    }
    if (luaL_getmetafield(L, index, "__name") == LUA_TSTRING) {
        const char *name = lua_tostring(L, -1);
        const char *dot = strrchr(name, '.');
        name = lua_pushfstring(L, "a %s", dot != NULL ? dot + 1 : name);
        lua_remove(L, -2);
        return name;
    }
    return lua_pushfstring(L, "a %s", luaL_typename(L, index));
}

// ---- boxes

void *lw__lua_new(lua_State *L, const char *name, size_t size, int n_user_values)
{
    luaL_checkstack(L, 4, NULL);
    void *box = lua_newuserdatauv(L, size, n_user_values);
    memset(box, 0, size);
    luaL_setmetatable(L, name);
    return box;
}

void *lw__lua_check(lua_State *L, int index, const char *name, const char *field, const char *what)
{
    void *box = luaL_testudata(L, index, name);
    if (box == NULL) {
        const char *shown = lw__lua_shown(L, index);
        lw__lua_fail(L, "%s is %s; %s is wanted", field, shown, what);
    }
    return box;
}

void *lw__lua_room(lua_State *L, size_t n, size_t size)
{
    luaL_checkstack(L, 4, NULL);
    if (n > (size_t)-1 / 2 / size)
        lw__lua_fail(L, "a list of this length does not fit into memory");
    void *room = lua_newuserdatauv(L, n * size + 1, 0);
    memset(room, 0, n * size + 1);
    return room;
}

const char *lw__lua_text(lua_State *L, int index, const char *field)
{
    size_t n;
    if (lua_type(L, index) != LUA_TSTRING) {
        const char *shown = lw__lua_shown(L, index);
        lw__lua_fail(L, "%s is %s; a text is wanted", field, shown);
    }
    const char *text = lua_tolstring(L, index, &n);
    if (strlen(text) != n) {
        const char *shown = lw__lua_quote(L, text);
        lw__lua_fail(L, "%s has a zero byte after %s; texts have none", field, shown);
    }
    return text;
}

int lw__lua_push_names(lua_State *L, int n, const char *const *names)
{
    luaL_checkstack(L, 4, NULL);
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        lua_pushstring(L, names[i]);
        lua_rawseti(L, -2, i + 1);
    }
    return 1;
}

int lw__lua_push_numbers(lua_State *L, int n, const double *v)
{
    luaL_checkstack(L, 4, NULL);
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        lua_pushnumber(L, v[i]);
        lua_rawseti(L, -2, i + 1);
    }
    return 1;
}
