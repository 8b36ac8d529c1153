// rig:timed(): what the analysis of response times says of each core and bus.

#include "module.h"
#include "rig.h"
#include "run.h"

#include <latewood/timed.h>
#include <string.h>

static void set_seconds(lua_State *L, const char *key, lw_tick t)
{
    if (t == LW_NEVER)
        return;
    lua_pushnumber(L, lw_tick_seconds(t));
    lua_setfield(L, -2, key);
}

static void set_flag(lua_State *L, const char *key, int value)
{
    lua_pushboolean(L, value);
    lua_setfield(L, -2, key);
}

static void set_number(lua_State *L, const char *key, double value)
{
    lua_pushnumber(L, value);
    lua_setfield(L, -2, key);
}

static void push_row(lua_State *L, lw_task_view task, const lw_timed_row *row)
{
    lua_createtable(L, 0, 8);
    lua_pushstring(L, task.name);
    lua_setfield(L, -2, "name");
    lua_pushstring(L, lw_timed_outcome_words(row->outcome));
    lua_setfield(L, -2, "outcome");
    set_seconds(L, "deadline", task.deadline);
    set_flag(L, "meets", row->meets);
    set_seconds(L, "response", row->response);
    if (row->slack >= 0)
        set_seconds(L, "slack", row->slack);
    if (row->outcome == LW_TIMED_BOUND) {
        lua_pushinteger(L, (lua_Integer)row->job + 1);
        lua_setfield(L, -2, "job");
    }
}

// The lines of `text` as a list.
static void push_lines(lua_State *L, const char *text)
{
    lua_createtable(L, 0, 0);
    for (int i = 1; *text != '\0'; i++) {
        size_t n = strcspn(text, "\n");
        lua_pushlstring(L, text, n);
        lua_rawseti(L, -2, i);
        text += n + (text[n] == '\n');
    }
}

static void push_core(lua_State *L, const lw_frozen *frozen, int core, const lw_timed_core *t)
{
    lua_createtable(L, 0, 8);
    lua_pushstring(L, lw_frozen_core(frozen, core).name);
    lua_setfield(L, -2, "name");
    set_flag(L, "analysed", t->analysed);
    push_lines(L, t->why);
    lua_setfield(L, -2, "notes");
    lua_createtable(L, t->n, 0);
    for (int i = 0; i < t->n; i++) {
        push_row(L, lw_frozen_task(frozen, t->tasks[i]), &t->result.rows[i]);
        lua_rawseti(L, -2, i + 1);
    }
    lua_setfield(L, -2, "tasks");
    if (!t->analysed)
        return;
    set_flag(L, "schedulable", t->result.schedulable);
    set_flag(L, "overload", t->result.overload);
    set_number(L, "utilisation", t->result.utilisation);
    set_number(L, "bound", t->result.bound);
    set_number(L, "hyperbolic", t->result.hyperbolic);
}

int lw__lua_rig_timed(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const lw_frozen *frozen = lw__lua_rig_frozen(L, "timed");
    lw_timed_core *t = lw__lua_room(L, 1, sizeof *t);
    int n = lw_frozen_n_cores(frozen);
    luaL_checkstack(L, 16, NULL);
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        if (lw_timed_rig(frozen, i, t, &err) != LW_OK)
            lw__lua_rig_raise(L, 1, &err);
        push_core(L, frozen, i, t);
        lua_rawseti(L, -2, i + 1);
    }
    return 1;
}
