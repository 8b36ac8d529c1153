// A Lua function prepared to be called from inside a run. See call.h.

#include "call.h"

#include "captured.h"

#include <latewood/quantity.h>
#include <string.h>

void *lw__lua_call_new(lua_State *L, int function, size_t size, int n_slots)
{
    luaL_checkstack(L, 4, NULL);
    lw__lua_call *call = lua_newuserdatauv(L, size, 1);
    memset(call, 0, size);
    call->top = 1;
    lua_State *thread = lua_newthread(L);
    lua_setiuservalue(L, -2, 1);
    if (!lua_checkstack(thread, n_slots + LUA_MINSTACK))
        lw__lua_fail(L, "no memory for the stack of a function");
    lua_pushvalue(L, function);
    lua_xmove(L, thread, 1);
    call->thread = thread;
    return call;
}

void lw__lua_call_check(const lw__lua_reader *r, const char *field, int index)
{
    if (lua_type(r->L, index) != LUA_TFUNCTION || lua_iscfunction(r->L, index))
        lw__lua_bad_type(r, field, index, "a function written in Lua");
    lw__lua_refuse_assignments(r, field, index);
}

static int keep(lw__lua_call *call)
{
    lua_settop(call->thread, call->top);
    return 1;
}

int lw__lua_call_failed(lw__lua_call *call)
{
    lua_State *L = call->thread;
    if (lua_type(L, -1) == LUA_TSTRING)
        lw_error_set(&call->error, LW_ERR_LAW, "%s", lua_tostring(L, -1));
    else
        lw_error_set(&call->error, LW_ERR_LAW, "error with a %s in place of a message",
                     lua_typename(L, lua_type(L, -1)));
    return keep(call);
}

// The line on which the function begins.
static void locate(lw__lua_call *call, lua_Debug *ar)
{
    lua_pushvalue(call->thread, CALL_FUNCTION);
    lua_getinfo(call->thread, ">S", ar);
}

int lw__lua_call_returned(lw__lua_call *call, int index, const char *what)
{
    lua_Debug ar;
    const char *type = lua_typename(call->thread, lua_type(call->thread, index));
    locate(call, &ar);
    lw_error_set(&call->error, LW_ERR_LAW, "%s:%d: returns %s%s as %s; a number is wanted",
                 ar.short_src, ar.linedefined, lua_isnoneornil(call->thread, index) ? "" : "a ",
                 type, what);
    return keep(call);
}

int lw__lua_call_not_whole(lw__lua_call *call, double value, const char *what)
{
    lua_Debug ar;
    char text[32];
    locate(call, &ar);
    lw_error_set(&call->error, LW_ERR_LAW, "%s:%d: returns %s as %s; a whole number is wanted",
                 ar.short_src, ar.linedefined, lw_double_format(value, text), what);
    return keep(call);
}

int lw__lua_call_again(lw__lua_call *call)
{
    // The thread's stack is in use: it is left alone.
    lw_error_set(&call->error, LW_ERR_LAW, "a function of a run may not run itself");
    return 1;
}
