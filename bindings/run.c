// Running a rig: freezing, advancing, finishing, and what a run tells.
//
// Invariants
// 1. One userdata owns watch, frozen rig and run; it holds the rig's userdata and so every function
//    that the engine calls.
// 2. While the engine advances a run, nothing may close, advance or restart it.

#include "run.h"

#include "captured.h"
#include "law.h"
#include "module.h"
#include "plant.h"
#include "rig.h"
#include "source.h"

#include <math.h>
#include <stdint.h>
#include <string.h>

#define PRESENT_KEY "latewood.present"
#define DESCRIBED_SECONDS 1.0
#define MOST_RUNS_WITHIN_RUNS 16 // each takes some of the C stack, unseen by Lua's own limit

// ---- the functions behind a rig

// Push call i of the rig's list and return it; NULL (nothing pushed) after the last.
static lw__lua_call *push_call(lua_State *L, int rig, int i)
{
    luaL_checkstack(L, 8, NULL);
    lua_getiuservalue(L, rig, RIG_CALLS);
    if (lua_rawgeti(L, -1, i) == LUA_TNIL) {
        lua_pop(L, 2);
        return NULL;
    }
    int of_law = luaL_testudata(L, -1, LW__LUA_LAW) != NULL;
    int of_plant = luaL_testudata(L, -1, LW__LUA_PLANT) != NULL;
    lua_getiuservalue(L, -1, of_law ? LAW_CALL : of_plant ? PLANT_CALL : SOURCE_CALL);
    lua_replace(L, -3);
    lua_pop(L, 1);
    return lua_touserdata(L, -1);
}

// The userdata of a call belongs to a law or to a source; only laws have more to check.
static int is_law_call(lua_State *L, int rig, int i)
{
    lua_getiuservalue(L, rig, RIG_CALLS);
    lua_rawgeti(L, -1, i);
    int of_law = luaL_testudata(L, -1, LW__LUA_LAW) != NULL;
    lua_pop(L, 2);
    return of_law;
}

// Push a snapshot of all that the rig's functions reach; nil where it has none.
static void push_snapshot(lua_State *L, int rig)
{
    lua_pushnil(L);
    int place = lua_gettop(L);
    lw__lua_call *call;
    for (int i = 1; (call = push_call(L, rig, i)) != NULL; i++) {
        if (lua_isnil(L, place)) {
            lw__lua_snapshot_new(L);
            lua_replace(L, place);
        }
        for (int f = CALL_FUNCTION; f <= call->top; f++) {
            lua_pushvalue(call->thread, f);
            lua_xmove(call->thread, L, 1);
            if (lua_isfunction(L, -1)) // not the table of a list
                lw__lua_snapshot_add(L, place, lua_gettop(L));
            lua_pop(L, 1);
        }
        lua_settop(L, place);
    }
}

static void forget_failures(lua_State *L, int rig)
{
    lw__lua_call *call;
    for (int i = 1; (call = push_call(L, rig, i)) != NULL; i++) {
        call->error.status = LW_OK;
        lua_pop(L, 1);
    }
}

// Push the message of the function that failed; nil where none did.
static void push_failure(lua_State *L, int rig)
{
    lw__lua_call *call;
    for (int i = 1; (call = push_call(L, rig, i)) != NULL; i++) {
        if (call->error.status != LW_OK) {
            lua_pushstring(L, call->error.text);
            lua_remove(L, -2);
            return;
        }
        lua_pop(L, 1);
    }
    lua_pushnil(L);
}

// Raise if a function of the rig changed what outlives its call.
static void check_captured(lua_State *L, int run)
{
    luaL_checkstack(L, 8, NULL);
    lua_getiuservalue(L, run, RUN_RIG);
    int rig = lua_gettop(L);
    if (lua_getiuservalue(L, run, RUN_SNAPSHOT) != LUA_TNIL) {
        const char *changed = lw__lua_snapshot_compare(L, -1);
        if (changed != NULL)
            lw__lua_fail(L,
                         "%s changed during the run; a law, a source or a flow may read "
                         "what it captures, not change it",
                         changed);
    }
    lw__lua_call *call;
    for (int i = 1; (call = push_call(L, rig, i)) != NULL; i++) {
        if (is_law_call(L, rig, i))
            lw__lua_own_check(L, call);
        lua_pop(L, 1);
    }
    lua_settop(L, rig - 1);
}

// ---- freezing

typedef struct options {
    lw_tick lasts;
    int64_t seed, run;
} options;

static const lw__lua_field run_fields[] = {
    REQUIRED(options, lasts, "lasts", FIELD_TICK, NULL),
    OPTIONAL(options, seed, "seed", FIELD_LONG, NULL),
    OPTIONAL(options, run, "run", FIELD_LONG, NULL),
    OTHER("record"),
    OTHER("metrics"),
};

// A run with its rig frozen, not yet begun, on top of the stack. The rig is at 1, options at 2.
static lw__lua_run *freeze(lua_State *L, const char *what, options *p)
{
    lw_error err = {LW_OK, ""};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_read(L, 2, what);
    LW__LUA_FIELDS(&r, run_fields, 0, p);
    lw__lua_run *box = lw__lua_new(L, LW__LUA_RUN, sizeof *box, RUN_USER_VALUES);
    int index = lua_gettop(L);
    lua_pushvalue(L, 1);
    lua_setiuservalue(L, index, RUN_RIG);
    box->lasts = p->lasts;
    if (lw_watch_new(&box->watch, &err) != LW_OK)
        lw__lua_raise(L, r.origin, &err);
    lw__lua_watch_read(&r, box->watch);
    if (lw_rig_freeze(rig->it, box->watch, p->lasts, &box->frozen, &err) != LW_OK)
        lw__lua_rig_raise(L, 1, &err);
    lua_settop(L, index);
    return box;
}

int lw__lua_rig_freeze(lua_State *L)
{
    options p = {0, 1, 0};
    freeze(L, "freeze", &p);
    lua_pushboolean(L, 1);
    return 1;
}

// ---- a run's life

lw__lua_run *lw__lua_run_self(lua_State *L)
{
    lw__lua_run *box = luaL_checkudata(L, 1, LW__LUA_RUN);
    if (box->run == NULL)
        lw__lua_fail(L, "the run is closed");
    return box;
}

lw__lua_present *lw__lua_present_of(lua_State *L)
{
    luaL_checkstack(L, 4, NULL);
    if (lua_getfield(L, LUA_REGISTRYINDEX, PRESENT_KEY) != LUA_TUSERDATA) {
        lua_pop(L, 1);
        lw__lua_present *made = lua_newuserdatauv(L, sizeof *made, 0);
        *made = (lw__lua_present){NULL, 0};
        lua_setfield(L, LUA_REGISTRYINDEX, PRESENT_KEY);
        return made;
    }
    lw__lua_present *present = lua_touserdata(L, -1);
    lua_pop(L, 1);
    return present;
}

// The run at stack index `run` goes on to `until` (LW_NEVER: until its tasks have finished, without
// further releases); a function's failure is kept with it.
static lw_status advance(lua_State *L, int run, lw_tick until)
{
    lw__lua_run *box = lua_touserdata(L, run);
    lw__lua_present *present = lw__lua_present_of(L);
    lua_getiuservalue(L, run, RUN_RIG);
    int rig = lua_gettop(L);
    forget_failures(L, rig);
    if (present->depth == MOST_RUNS_WITHIN_RUNS)
        lw__lua_fail(L, "runs are within runs, more than %d deep", MOST_RUNS_WITHIN_RUNS);
    const lw__lua_run *before = present->run;
    box->busy = 1;
    present->run = box;
    present->depth++;
    lw_status status =
        until == LW_NEVER ? lw_run_drain(box->run) : lw_run_advance(box->run, until);
    present->depth--;
    present->run = before;
    box->busy = 0;
    if (lw_run_status(box->run, 0, NULL) == LW_ERR_LAW) {
        push_failure(L, rig);
        lua_setiuservalue(L, run, RUN_MESSAGE);
    }
    forget_failures(L, rig);
    lua_settop(L, rig - 1);
    return status;
}

static void finish(lua_State *L, int run)
{
    lw__lua_run *box = lua_touserdata(L, run);
    if (box->finished)
        return;
    lw_run_finish(box->run);
    box->finished = 1;
    check_captured(L, run);
}

// Begin a run: it is on top of the stack.
static void begin(lua_State *L, lw__lua_run *box, const options *p)
{
    lw_error err = {LW_OK, ""};
    int index = lua_gettop(L);
    box->seed = (uint64_t)p->seed;
    box->number = (uint64_t)p->run;
    push_snapshot(L, 1);
    lua_setiuservalue(L, index, RUN_SNAPSHOT);
    if (lw_run_new(box->frozen, 1, box->seed, box->number, &box->run, &err) != LW_OK)
        lw__lua_rig_raise(L, 1, &err);
}

int lw__lua_rig_start(lua_State *L)
{
    options p = {0, 1, 0};
    lw__lua_run *box = freeze(L, "start", &p);
    begin(L, box, &p);
    return 1;
}

int lw__lua_rig_run(lua_State *L)
{
    options p = {0, 1, 0};
    lw__lua_run *box = freeze(L, "run", &p);
    int index = lua_gettop(L);
    begin(L, box, &p);
    advance(L, index, box->lasts);
    finish(L, index);
    lua_settop(L, index);
    return 1;
}

static void refuse_busy(lua_State *L, const lw__lua_run *box, const char *what)
{
    if (box->busy)
        lw__lua_fail(L, "a function of a run may not %s that run", what);
}

// nil, message, name of the status.
static int push_status(lua_State *L, lw__lua_run *box)
{
    lw_error err = {LW_OK, ""};
    lw_status status = lw_run_status(box->run, 0, &err);
    lua_pushnil(L);
    if (lua_getiuservalue(L, 1, RUN_MESSAGE) == LUA_TSTRING)
        lua_pushfstring(L, "%s (%s)", lua_tostring(L, -1), err.text);
    else
        lua_pushstring(L, err.text);
    lua_remove(L, -2);
    lua_pushstring(L, lw_status_name(status));
    return 3;
}

int lw__lua_run_advance(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    lw__lua_reader r = lw__lua_arguments(L, "advance", 2);
    lw_tick until = lw__lua_tick(&r, "the instant", 2);
    refuse_busy(L, box, "advance");
    if (box->finished)
        lw__lua_bad(&r, "the run is finished");
    if (until < lw_run_now(box->run, 0)) {
        const char *shown = lw__lua_shown(L, 2);
        lw__lua_bad(&r, "the instant is %s, and the run is past it", shown);
    }
    if (advance(L, 1, until) != LW_OK)
        return push_status(L, box);
    lua_settop(L, 1);
    return 1;
}

int lw__lua_run_drain(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    refuse_busy(L, box, "drain");
    if (box->finished)
        lw__lua_fail(L, "the run is finished");
    if (advance(L, 1, LW_NEVER) != LW_OK)
        return push_status(L, box);
    lua_settop(L, 1);
    return 1;
}

int lw__lua_run_finish(lua_State *L)
{
    refuse_busy(L, lw__lua_run_self(L), "finish");
    finish(L, 1);
    lua_settop(L, 1);
    return 1;
}

static const lw__lua_field restart_fields[] = {
    OPTIONAL(options, seed, "seed", FIELD_LONG, NULL),
    OPTIONAL(options, run, "run", FIELD_LONG, NULL),
};

// Back to time zero with another seed or number, without freezing again.
int lw__lua_run_restart(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    lw__lua_reader r = lw__lua_read(L, 2, "restart");
    options p = {0, (int64_t)box->seed, (int64_t)box->number};
    LW__LUA_FIELDS(&r, restart_fields, 0, &p);
    refuse_busy(L, box, "restart");
    lua_pushnil(L);
    lua_setiuservalue(L, 1, RUN_MESSAGE);
    lw_run_restart(box->run, (uint64_t)p.seed, (uint64_t)p.run);
    box->seed = (uint64_t)p.seed;
    box->number = (uint64_t)p.run;
    box->finished = 0;
    lua_settop(L, 1);
    return 1;
}

// row(number): the whole run of that number, without freezing again. Gives the status as a number
// (0: reached its end), the instant and the message of an early end, then each metric.
int lw__lua_run_row(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_run *box = lw__lua_run_self(L);
    lw__lua_reader r = lw__lua_arguments(L, "row", 2);
    box->number = (uint64_t)lw__lua_whole(&r, "the number", 2, 0, INT64_MAX);
    refuse_busy(L, box, "restart");
    lua_pushnil(L);
    lua_setiuservalue(L, 1, RUN_MESSAGE);
    lw_run_restart(box->run, box->seed, box->number);
    box->finished = 0;
    lw_status status = advance(L, 1, box->lasts);
    if (status != LW_OK)
        status = lw_run_status(box->run, 0, &err);
    if (status == LW_ERR_LAW && lua_getiuservalue(L, 1, RUN_MESSAGE) == LUA_TSTRING)
        return lua_error(L); // the study is wrong, not the loop
    finish(L, 1);
    lua_settop(L, 2);
    int n = lw_frozen_n_metrics(box->frozen);
    luaL_checkstack(L, n + 4, NULL);
    lua_pushinteger(L, status);
    lua_pushnumber(L, lw_tick_seconds(lw_run_now(box->run, 0)));
    lua_pushstring(L, err.text);
    for (int i = 0; i < n; i++)
        lua_pushnumber(L, status == LW_OK ? lw_run_metric(box->run, 0, i) : (double)NAN);
    return n + 3;
}

int lw__lua_run_close(lua_State *L)
{
    lw__lua_run *box = luaL_checkudata(L, 1, LW__LUA_RUN);
    refuse_busy(L, box, "close");
    lw_watch_free(box->watch);
    lw_run_free(box->run);
    lw_frozen_free(box->frozen);
    box->watch = NULL;
    box->run = NULL;
    box->frozen = NULL;
    return 0;
}

// ---- what a run tells

int lw__lua_run_status(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    if (lw_run_status(box->run, 0, NULL) == LW_OK) {
        lua_pushliteral(L, "done");
        return 1;
    }
    push_status(L, box); // nil, message, name
    lua_insert(L, -2);
    return 2;
}

int lw__lua_run_now(lua_State *L)
{
    lua_pushnumber(L, lw_tick_seconds(lw_run_now(lw__lua_run_self(L)->run, 0)));
    return 1;
}

int lw__lua_run_instants(lua_State *L)
{
    lua_pushinteger(L, lw_run_n_instants(lw__lua_run_self(L)->run, 0));
    return 1;
}

int lw__lua_run_value(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw_signal signal;
    lw__lua_run *box = lw__lua_run_self(L);
    lw__lua_reader r = lw__lua_arguments(L, "value", 2);
    const char *name = lw__lua_field_text(&r, "the signal", 2);
    if (lw_frozen_signal(box->frozen, name, &signal, &err) != LW_OK)
        lw__lua_raise(L, r.origin, &err);
    lua_pushnumber(L, lw_run_read(box->run, 0, signal));
    return 1;
}

int lw__lua_run_metric(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    int place = lw__lua_metric_place(L, box, 2);
    if (!box->finished)
        lw__lua_fail(L, "metrics stand when the run is finished: call run:finish() first");
    lua_pushnumber(L, lw_run_metric(box->run, 0, place));
    return 1;
}

int lw__lua_run_metrics(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    if (!box->finished)
        lw__lua_fail(L, "metrics stand when the run is finished: call run:finish() first");
    int n = lw_frozen_n_metrics(box->frozen);
    lua_createtable(L, 0, n);
    for (int i = 0; i < n; i++) {
        lua_pushnumber(L, lw_run_metric(box->run, 0, i));
        lua_setfield(L, -2, lw_frozen_metric_name(box->frozen, i));
    }
    return 1;
}

int lw__lua_run_block(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    lua_pushlstring(L, lw_run_block(box->run), lw_run_block_size(box->run));
    return 1;
}

// ---- what a frozen rig tells

// Room for the lines, or (text NULL) only their count and length: the engine is not left while it
// describes.
typedef struct lines {
    char *text;
    size_t n_bytes;
    int n_lines;
} lines;

static int add_line(void *context, const char *text)
{
    lines *to = context;
    size_t n = strlen(text) + 1;
    if (to->text != NULL)
        memcpy(to->text + to->n_bytes, text, n);
    to->n_bytes += n;
    to->n_lines++;
    return 0;
}

// Options are those of rig:run; without a table a second is described.
const lw_frozen *lw__lua_rig_frozen(lua_State *L, const char *what)
{
    options p = {0, 1, 0};
    if (lua_isnoneornil(L, 2)) {
        lua_settop(L, 1);
        lua_createtable(L, 0, 1);
        lua_pushnumber(L, DESCRIBED_SECONDS);
        lua_setfield(L, 2, "lasts");
    }
    return freeze(L, what, &p)->frozen;
}

int lw__lua_rig_describe(lua_State *L)
{
    const lw_frozen *frozen = lw__lua_rig_frozen(L, "describe");
    lines counted = {NULL, 0, 0}, kept = {NULL, 0, 0};
    lw_frozen_describe(frozen, add_line, &counted);
    kept.text = lw__lua_room(L, counted.n_bytes, 1);
    lw_frozen_describe(frozen, add_line, &kept);
    lua_createtable(L, kept.n_lines, 0);
    const char *at = kept.text;
    for (int i = 1; i <= kept.n_lines; i++) {
        lua_pushstring(L, at);
        lua_rawseti(L, -2, i);
        at += strlen(at) + 1;
    }
    return 1;
}

static void push_slice(lua_State *L, lw_slice slice)
{
    static const char *const kinds[] = {"plant", "law", "held", "in flight", "schedule", "metric"};
    lua_createtable(L, 0, 7);
    lua_pushstring(L, slice.owner);
    lua_setfield(L, -2, "owner");
    lua_pushstring(L, slice.name);
    lua_setfield(L, -2, "name");
    lua_pushstring(L, slice.unit);
    lua_setfield(L, -2, "unit");
    lua_pushstring(L, kinds[slice.kind]);
    lua_setfield(L, -2, "kind");
    lua_pushboolean(L, slice.is_integer);
    lua_setfield(L, -2, "integer");
    lua_pushinteger(L, slice.offset);
    lua_setfield(L, -2, "offset");
    lua_pushinteger(L, slice.count);
    lua_setfield(L, -2, "count");
}

int lw__lua_rig_slices(lua_State *L)
{
    options p = {0, 1, 0};
    if (lua_isnoneornil(L, 2)) {
        lua_settop(L, 1);
        lua_createtable(L, 0, 1);
        lua_pushnumber(L, DESCRIBED_SECONDS);
        lua_setfield(L, 2, "lasts");
    }
    lw__lua_run *box = freeze(L, "slices", &p);
    int n = lw_frozen_n_slices(box->frozen);
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        push_slice(L, lw_frozen_slice(box->frozen, i));
        lua_rawseti(L, -2, i + 1);
    }
    return 1;
}
