// Batches for the program. See program_batch.h.
//
// Invariants
// 1. Ledgers and crews belong to userdata; an error raised on the way leaves them to the collector.
// 2. The compute function runs in workers only, under lua_pcall.

#include "program_batch.h"

#include "program_files.h"
#include "program_sandbox.h"
#include "statistics.h"

#include <latewood/crew.h>
#include <latewood/hash.h>
#include <lauxlib.h>
#include <math.h>
#include <signal.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

#define LEDGER "latewood.program.ledger"
#define CREW "latewood.program.crew"
#define COMMIT_ROWS 4096

static int failure(lua_State *L, const lw_error *err)
{
    lua_pushnil(L);
    lua_pushstring(L, err->text);
    lua_pushstring(L, lw_status_name(err->status));
    return 3;
}

static int success(lua_State *L, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        return failure(L, err);
    lua_pushboolean(L, 1);
    return 1;
}

// ---- a ledger's definition

static const char *text_at(lua_State *L, int list, int k)
{
    lua_rawgeti(L, list, k);
    const char *text = luaL_checkstring(L, -1); // stays alive: it stands in the list
    lua_pop(L, 1);
    return text;
}

static void *room(lua_State *L, lua_Unsigned n, size_t size)
{
    void *list = lua_newuserdatauv(L, (n + 1) * size, 0);
    memset(list, 0, (n + 1) * size);
    return list;
}

static void read_facts(lua_State *L, int def, lw_ledger_def *out)
{
    lua_getfield(L, def, "facts");
    luaL_checktype(L, -1, LUA_TTABLE);
    int list = lua_gettop(L);
    out->n_facts = (int)lua_rawlen(L, list);
    lw_fact *facts = room(L, (lua_Unsigned)out->n_facts, sizeof *facts);
    for (int k = 0; k < out->n_facts; k++) {
        lua_rawgeti(L, list, k + 1);
        int own = lua_gettop(L);
        facts[k] = (lw_fact){text_at(L, own, 1), text_at(L, own, 2), text_at(L, own, 3)};
        lua_pop(L, 1);
    }
    out->facts = facts;
}

static void read_metrics(lua_State *L, int def, lw_ledger_def *out)
{
    lua_getfield(L, def, "metrics");
    luaL_checktype(L, -1, LUA_TTABLE);
    int list = lua_gettop(L);
    out->n_metrics = (int)lua_rawlen(L, list);
    lw_ledger_metric *metrics = room(L, (lua_Unsigned)out->n_metrics, sizeof *metrics);
    for (int k = 0; k < out->n_metrics; k++) {
        lua_rawgeti(L, list, k + 1);
        int own = lua_gettop(L);
        metrics[k] = (lw_ledger_metric){text_at(L, own, 1), text_at(L, own, 2)};
        lua_pop(L, 1);
    }
    out->metrics = metrics;
}

static void read_limits(lua_State *L, int def, lw_ledger_def *out)
{
    static const char *const kinds[] = {"at most", "at least", "defined", NULL};
    lua_getfield(L, def, "limits");
    luaL_checktype(L, -1, LUA_TTABLE);
    int list = lua_gettop(L);
    out->n_limits = (int)lua_rawlen(L, list);
    lw_ledger_limit *limits = room(L, (lua_Unsigned)out->n_limits, sizeof *limits);
    for (int k = 0; k < out->n_limits; k++) {
        lua_rawgeti(L, list, k + 1);
        int own = lua_gettop(L);
        limits[k].name = text_at(L, own, 1);
        lua_rawgeti(L, own, 2);
        limits[k].metric = (int)luaL_checkinteger(L, -1) - 1;
        lua_rawgeti(L, own, 3);
        limits[k].limit = luaL_checknumber(L, -1);
        lua_rawgeti(L, own, 4);
        limits[k].kind = (lw_limit_kind)luaL_checkoption(L, -1, NULL, kinds);
        lua_settop(L, own - 1);
    }
    out->limits = limits;
}

// What the definition points to stays on the stack.
static lw_ledger_def read_def(lua_State *L, int def)
{
    static const char *const keeps[] = {"all", "failures", "counts", NULL};
    lw_ledger_def out = {0};
    lua_getfield(L, def, "path");
    out.path = luaL_optstring(L, -1, NULL);
    lua_getfield(L, def, "keep");
    out.keep = (lw_keep)luaL_checkoption(L, -1, "all", keeps);
    read_facts(L, def, &out);
    read_metrics(L, def, &out);
    read_limits(L, def, &out);
    return out;
}

// ---- ledgers

typedef struct ledger_box {
    lw_ledger *it;
} ledger_box;

static int new_ledger(lua_State *L)
{
    static const char *const modes[] = {"create", "resume", "open", NULL};
    int mode = luaL_checkoption(L, 1, NULL, modes);
    luaL_checktype(L, 2, LUA_TTABLE);
    lw_error err = {LW_OK, ""};
    ledger_box *box = lua_newuserdatauv(L, sizeof *box, 0);
    box->it = NULL;
    luaL_setmetatable(L, LEDGER);
    int index = lua_gettop(L);
    lw_status status;
    if (mode == 2) {
        lua_getfield(L, 2, "path");
        status = lw_ledger_open(luaL_checkstring(L, -1), &box->it, &err);
    } else {
        lw_ledger_def def = read_def(L, 2);
        status = mode == 0 ? lw_ledger_create(&def, &err) : LW_OK;
        if (status == LW_OK)
            status = lw_ledger_resume(&def, &box->it, &err);
    }
    if (status != LW_OK)
        return failure(L, &err);
    lua_pushvalue(L, index);
    return 1;
}

static lw_ledger *ledger_at(lua_State *L, int index)
{
    ledger_box *box = luaL_checkudata(L, index, LEDGER);
    luaL_argcheck(L, box->it != NULL, index, "the ledger is closed");
    return box->it;
}

static int ledger_close(lua_State *L)
{
    ledger_box *box = luaL_checkudata(L, 1, LEDGER);
    lw_ledger_close(box->it);
    box->it = NULL;
    return 0;
}

static int ledger_point(lua_State *L)
{
    lw_error err;
    lw_status status = lw_ledger_point(ledger_at(L, 1), luaL_checkinteger(L, 2),
                                       luaL_checkstring(L, 3), luaL_checkstring(L, 4), &err);
    return success(L, status, &err);
}

static int ledger_commit(lua_State *L)
{
    lw_error err;
    return success(L, lw_ledger_commit(ledger_at(L, 1), &err), &err);
}

static int ledger_provenance(lua_State *L)
{
    lw_error err;
    lw_status status =
        lw_ledger_provenance(ledger_at(L, 1), luaL_checkstring(L, 2), luaL_checkstring(L, 3), &err);
    return success(L, status, &err);
}

static int ledger_done(lua_State *L)
{
    lw_error err;
    uint64_t mask;
    if (lw_ledger_done(ledger_at(L, 1), luaL_checkinteger(L, 2), luaL_checkinteger(L, 3), &mask,
                       &err) != LW_OK)
        return failure(L, &err);
    lua_pushinteger(L, (lua_Integer)mask);
    return 1;
}

static int ledger_tally(lua_State *L)
{
    lw_error err;
    int64_t count;
    if (lw_ledger_tally(ledger_at(L, 1), luaL_checkinteger(L, 2), luaL_checkstring(L, 3), &count,
                        &err) != LW_OK)
        return failure(L, &err);
    lua_pushinteger(L, count);
    return 1;
}

static int ledger_kept(lua_State *L)
{
    static const char *const keeps[] = {"all", "failures", "counts"};
    lua_pushstring(L, keeps[lw_ledger_kept(ledger_at(L, 1))]);
    return 1;
}

// Lists are gathered by functions that the engine calls; they must not raise, so what they do runs
// under lua_pcall and a failure is kept.
typedef struct gathering {
    lua_State *L;
    int list, failed;
    int64_t wanted;
    int most;
} gathering;

typedef struct piece {
    int64_t number;
    double instant;
    const char *text[3];
    int n_texts, has_number, has_instant;
} piece;

static int push_piece(lua_State *L)
{
    const piece *p = lua_touserdata(L, 2);
    lua_createtable(L, 4, 0);
    int at = 1;
    if (p->has_number) {
        lua_pushinteger(L, p->number);
        lua_rawseti(L, -2, at++);
    }
    if (p->has_instant) {
        lua_pushnumber(L, p->instant);
        lua_rawseti(L, -2, at++);
    }
    for (int k = 0; k < p->n_texts; k++) {
        lua_pushstring(L, p->text[k]);
        lua_rawseti(L, -2, at++);
    }
    lua_rawseti(L, 1, (lua_Integer)lua_rawlen(L, 1) + 1);
    return 0;
}

static int gather(gathering *g, piece p)
{
    lua_pushcfunction(g->L, push_piece);
    lua_pushvalue(g->L, g->list);
    lua_pushlightuserdata(g->L, &p);
    g->failed = lua_pcall(g->L, 2, 0, 0) != LUA_OK;
    return g->failed;
}

static int take_fact(void *context, const lw_fact *f)
{
    return gather(context, (piece){.n_texts = 3, .text = {f->section, f->name, f->value}});
}

static int take_point(void *context, int64_t number, const char *name, const char *text)
{
    return gather(context,
                  (piece){.has_number = 1, .number = number, .n_texts = 2, .text = {name, text}});
}

static int take_metric(void *context, const lw_ledger_metric *m)
{
    return gather(context, (piece){.n_texts = 2, .text = {m->name, m->unit}});
}

static int take_ended(void *context, const lw_ledger_row *row)
{
    gathering *g = context;
    if (row->status == LW_OK)
        return 0;
    if (g->most-- <= 0)
        return 1;
    return gather(g, (piece){.has_number = 1,
                             .number = row->run,
                             .has_instant = 1,
                             .instant = row->instant,
                             .n_texts = 1,
                             .text = {row->text}});
}

static gathering begin_list(lua_State *L, int most)
{
    luaL_checkstack(L, 12, NULL);
    lua_newtable(L);
    return (gathering){.L = L, .list = lua_gettop(L), .most = most};
}

static int end_list(lua_State *L, const gathering *g, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        return failure(L, err);
    if (g->failed)
        return lua_error(L);
    lua_settop(L, g->list);
    return 1;
}

static int ledger_facts(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    gathering g = begin_list(L, 0);
    return end_list(L, &g, lw_ledger_facts(ledger, take_fact, &g, &err), &err);
}

static int ledger_points(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    gathering g = begin_list(L, 0);
    return end_list(L, &g, lw_ledger_points(ledger, take_point, &g, &err), &err);
}

static int ledger_metrics(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    gathering g = begin_list(L, 0);
    return end_list(L, &g, lw_ledger_metrics(ledger, take_metric, &g, &err), &err);
}

static int ledger_ended(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    int64_t point = luaL_checkinteger(L, 2);
    gathering g = begin_list(L, (int)luaL_optinteger(L, 3, 1000));
    return end_list(L, &g, lw_ledger_rows(ledger, point, take_ended, &g, &err), &err);
}

typedef struct column_of {
    lw__lua_sample *sample;
    int metric;
} column_of;

static int take_value(void *context, const lw_ledger_row *row)
{
    column_of *c = context;
    double v = row->status == LW_OK ? row->values[c->metric] : (double)NAN;
    return lw__lua_sample_add(c->sample, row->run, v);
}

static int ledger_column(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    int64_t point = luaL_checkinteger(L, 2), metric = luaL_checkinteger(L, 3);
    luaL_argcheck(L, metric >= 1 && metric <= lw_ledger_n_metrics(ledger), 3, "no such metric");
    column_of c = {lw__lua_sample_new(L), (int)metric - 1};
    if (lw_ledger_rows(ledger, point, take_value, &c, &err) != LW_OK)
        return failure(L, &err);
    if (c.sample->failed)
        return luaL_error(L, "no memory for a sample");
    return 1;
}

typedef struct one_row {
    int64_t run;
    int found, n;
    lw_status status;
    double instant;
    char text[LW_ERROR_TEXT];
    double values[LW_LEDGER_MOST_METRICS];
} one_row;

static int take_one(void *context, const lw_ledger_row *row)
{
    one_row *o = context;
    if (row->run < o->run)
        return 0;
    o->found = row->run == o->run;
    o->status = row->status;
    o->instant = row->instant;
    strncpy(o->text, row->text, sizeof o->text - 1);
    memcpy(o->values, row->values, sizeof(double) * (size_t)o->n);
    return 1;
}

static int ledger_row(lua_State *L)
{
    lw_error err;
    lw_ledger *ledger = ledger_at(L, 1);
    one_row *o = room(L, 0, sizeof *o);
    o->run = luaL_checkinteger(L, 3);
    o->n = lw_ledger_n_metrics(ledger);
    if (lw_ledger_rows(ledger, luaL_checkinteger(L, 2), take_one, o, &err) != LW_OK)
        return failure(L, &err);
    if (!o->found)
        return 0;
    lua_pushinteger(L, o->status);
    lua_pushnumber(L, o->instant);
    lua_pushstring(L, o->text);
    lua_createtable(L, o->n, 0);
    for (int k = 0; k < o->n; k++) {
        lua_pushnumber(L, o->values[k]);
        lua_rawseti(L, -2, k + 1);
    }
    return 4;
}

// ---- crews

typedef struct crew_box {
    lw_crew *it;
    int n_values;
} crew_box;

typedef struct computing {
    lua_State *L;
    int function, n_values;
} computing;

// Results of compute(point, run) from `first` on; 0 where they are a row.
static int put_row(const computing *c, lw_crew_desk *desk, int64_t point, int64_t run, int first)
{
    lua_State *L = c->L;
    double values[LW_LEDGER_MOST_METRICS];
    lw_ledger_row row = {.point = point,
                         .run = run,
                         .values = values,
                         .status = (lw_status)lua_tointeger(L, first),
                         .instant = lua_tonumber(L, first + 1),
                         .text = lua_tostring(L, first + 2)};
    for (int k = 0; k < c->n_values; k++) {
        int is_number;
        values[k] = lua_tonumberx(L, first + 3 + k, &is_number);
        if (!is_number)
            values[k] = (double)NAN;
    }
    lw_crew_put(desk, &row);
    return 0;
}

static int compute(void *context, const lw_block *block, lw_crew_desk *desk, char *message)
{
    const computing *c = context;
    lua_State *L = c->L;
    int top = lua_gettop(L);
    for (int k = 0; k < LW_LEDGER_BLOCK; k++) {
        if ((block->mask >> k & 1) == 0)
            continue;
        int64_t run = block->block * LW_LEDGER_BLOCK + k;
        lw_crew_begin(desk, run);
        lua_pushvalue(L, c->function);
        lua_pushinteger(L, block->point);
        lua_pushinteger(L, run);
        if (lua_pcall(L, 2, 3 + c->n_values, 0) != LUA_OK) {
            const char *text = lua_tostring(L, -1);
            strncpy(message, text != NULL ? text : "an error without a message", LW_ERROR_TEXT - 1);
            return 1;
        }
        put_row(c, desk, block->point, run, top + 1);
        lua_settop(L, top);
    }
    return 0;
}

static int new_crew(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    luaL_checktype(L, 1, LUA_TTABLE);
    crew_box *box = lua_newuserdatauv(L, sizeof *box, 0);
    box->it = NULL;
    luaL_setmetatable(L, CREW);
    int index = lua_gettop(L);
    lua_getfield(L, 1, "jobs");
    lua_getfield(L, 1, "values");
    lua_getfield(L, 1, "compute");
    luaL_checktype(L, -1, LUA_TFUNCTION);
    computing c = {L, lua_gettop(L), (int)luaL_checkinteger(L, -2)};
    luaL_checkstack(L, LW_LEDGER_MOST_METRICS + 20, NULL);
    lw_crew_def def = {.jobs = (int)luaL_checkinteger(L, -3),
                       .n_values = c.n_values,
                       .compute = compute,
                       .context = &c};
    box->n_values = def.n_values;
    if (lw_crew_start(&def, &box->it, &err) != LW_OK)
        return failure(L, &err);
    lua_settop(L, index);
    return 1;
}

static crew_box *crew_at(lua_State *L)
{
    crew_box *box = luaL_checkudata(L, 1, CREW);
    luaL_argcheck(L, box->it != NULL, 1, "the crew is closed");
    return box;
}

static int crew_close(lua_State *L)
{
    crew_box *box = luaL_checkudata(L, 1, CREW);
    lw_crew_free(box->it);
    box->it = NULL;
    return 0;
}

static int crew_lost(lua_State *L)
{
    lua_pushinteger(L, lw_crew_n_lost(crew_at(L)->it));
    return 1;
}

// While the crew works: functions of Lua are called under lua_pcall and a failure stops the work.
typedef struct working {
    lua_State *L;
    lw_ledger *ledger;
    int next, finished, pause; // their places on the stack
    int raised, uncommitted;
    lw_status status;
    lw_error err;
} working;

static int call(working *w, int function, int n_arguments, int n_results)
{
    w->raised = lua_pcall(w->L, n_arguments, n_results, 0) != LUA_OK;
    (void)function;
    return w->raised;
}

static int next_block(void *context, lw_block *out)
{
    working *w = context;
    int top = lua_gettop(w->L), none = 1;
    if (w->raised)
        return 1;
    lua_pushvalue(w->L, w->next);
    if (call(w, w->next, 0, 3))
        return 1;
    if (!lua_isnil(w->L, -3)) {
        *out = (lw_block){lua_tointeger(w->L, -3), lua_tointeger(w->L, -2),
                          (uint64_t)lua_tointeger(w->L, -1)};
        none = 0;
    }
    lua_settop(w->L, top);
    return none;
}

static int take_row(void *context, const lw_ledger_row *row)
{
    working *w = context;
    w->status = lw_ledger_add(w->ledger, row, &w->err);
    if (w->status == LW_OK && ++w->uncommitted >= COMMIT_ROWS) {
        w->uncommitted = 0;
        w->status = lw_ledger_commit(w->ledger, &w->err);
    }
    return w->status != LW_OK;
}

static int asks_to_stop(working *w, int n_arguments)
{
    if (call(w, 0, n_arguments, 1))
        return 1;
    int stop = lua_toboolean(w->L, -1);
    lua_pop(w->L, 1);
    return stop;
}

static int block_finished(void *context, const lw_block *block)
{
    working *w = context;
    lua_pushvalue(w->L, w->finished);
    lua_pushinteger(w->L, block->point);
    lua_pushinteger(w->L, block->block);
    return asks_to_stop(w, 2);
}

static int look_up(void *context)
{
    working *w = context;
    if (w->raised)
        return 1;
    lua_pushvalue(w->L, w->pause);
    return asks_to_stop(w, 0);
}

static int crew_work(lua_State *L)
{
    crew_box *box = crew_at(L);
    working w = {.L = L, .ledger = ledger_at(L, 2), .next = 3, .finished = 4, .pause = 5};
    for (int k = 3; k <= 5; k++)
        luaL_checktype(L, k, LUA_TFUNCTION);
    lua_settop(L, 5);
    lw_crew_orders orders = {.next = next_block,
                             .take = take_row,
                             .finished = block_finished,
                             .pause = look_up,
                             .context = &w};
    lw_error err = {LW_OK, ""};
    lw_status status = lw_crew_work(box->it, &orders, &err);
    if (w.raised)
        return lua_error(L); // its message is on top
    if (w.status != LW_OK)
        return failure(L, &w.err);
    lw_error late;
    lw_status kept = lw_ledger_commit(w.ledger, &late); // also what came before a failure
    if (status != LW_OK && status != LW_STOPPED)
        return failure(L, &err);
    if (kept != LW_OK)
        return failure(L, &late);
    lua_pushstring(L, status == LW_OK ? "done" : "stopped");
    return 1;
}

// ---- what a study is made of

// inputs(): list of { kind, name, text or hash }. Texts of the study and its modules, hashes of
// data.
static int inputs(lua_State *L)
{
    char why[700];
    lua_newtable(L);
    lw__program_inputs(L);
    int list = lua_gettop(L), n = (int)lua_rawlen(L, list);
    for (int k = 1; k <= n; k++) {
        lua_settop(L, list);
        lua_rawgeti(L, list, k);
        int entry = list + 1, missing;
        const char *kind = text_at(L, entry, 1), *path = text_at(L, entry, 3);
        size_t n_bytes = 0;
        char *text = lw__program_read(path, &n_bytes, &missing, why, sizeof why);
        if (text == NULL)
            return luaL_error(L, "%s", why);
        lua_createtable(L, 3, 0);
        lua_rawgeti(L, entry, 1);
        lua_rawseti(L, -2, 1);
        lua_rawgeti(L, entry, 2);
        lua_rawseti(L, -2, 2);
        char hex[65];
        lw_hash h = lw_hash_begin();
        lw_hash_add(&h, text, n_bytes);
        lw_hash_text(&h, hex);
        int whole = strcmp(kind, "data") != 0 && strlen(text) == n_bytes;
        if (whole)
            lua_pushstring(L, text);
        else
            lua_pushfstring(L, "sha256 %s", hex);
        free(text);
        lua_rawseti(L, -2, 3);
        lua_pushstring(L, hex);
        lua_rawseti(L, -2, 4);
        lua_rawseti(L, list - 1, k);
    }
    lua_settop(L, list - 1);
    return 1;
}

// ---- clocks and cores, for progress and provenance

static int monotonic(lua_State *L)
{
    struct timespec t = {0, 0};
    clock_gettime(CLOCK_MONOTONIC, &t);
    lua_pushnumber(L, (double)t.tv_sec + 1e-9 * (double)t.tv_nsec);
    return 1;
}

static int date(lua_State *L)
{
    char text[40];
    time_t now = time(NULL);
    struct tm at;
    gmtime_r(&now, &at);
    strftime(text, sizeof text, "%Y-%m-%dT%H:%M:%SZ", &at);
    lua_pushstring(L, text);
    return 1;
}

static int cores(lua_State *L)
{
    long n = sysconf(_SC_NPROCESSORS_ONLN);
    lua_pushinteger(L, n < 1 ? 1 : n > LW_CREW_MOST ? LW_CREW_MOST : n);
    return 1;
}

// ---- being asked to stop

static volatile sig_atomic_t asked; // signal that came; a handler can reach nothing else
static struct sigaction before_int, before_term;

static void note_signal(int number)
{
    asked = number;
}

static int catch_signals(lua_State *L)
{
    (void)L;
    const struct sigaction note = {.sa_handler = note_signal};
    asked = 0;
    sigaction(SIGINT, &note, &before_int);
    sigaction(SIGTERM, &note, &before_term);
    return 0;
}

static int release_signals(lua_State *L)
{
    (void)L;
    sigaction(SIGINT, &before_int, NULL);
    sigaction(SIGTERM, &before_term, NULL);
    return 0;
}

static int interrupted(lua_State *L)
{
    if (asked == 0)
        return 0;
    lua_pushinteger(L, asked);
    return 1;
}

// ---- registration

static void make_class(lua_State *L, const char *name, const luaL_Reg *methods, lua_CFunction end)
{
    if (luaL_newmetatable(L, name)) {
        lua_pushcfunction(L, end);
        lua_setfield(L, -2, "__gc");
        lua_newtable(L);
        luaL_setfuncs(L, methods, 0);
        lua_setfield(L, -2, "__index");
    }
    lua_pop(L, 1);
}

void lw__program_batch(lua_State *L)
{
    static const luaL_Reg ledger_methods[] = {
        {"point", ledger_point},           {"commit", ledger_commit},
        {"provenance", ledger_provenance}, {"done", ledger_done},
        {"tally", ledger_tally},           {"kept", ledger_kept},
        {"facts", ledger_facts},           {"points", ledger_points},
        {"metrics", ledger_metrics},       {"ended", ledger_ended},
        {"column", ledger_column},         {"row", ledger_row},
        {"close", ledger_close},           {NULL, NULL}};
    static const luaL_Reg crew_methods[] = {
        {"work", crew_work}, {"lost", crew_lost}, {"close", crew_close}, {NULL, NULL}};
    static const luaL_Reg functions[] = {{"ledger", new_ledger},
                                         {"crew", new_crew},
                                         {"inputs", inputs},
                                         {"clock", monotonic},
                                         {"date", date},
                                         {"cores", cores},
                                         {"catch", catch_signals},
                                         {"release", release_signals},
                                         {"interrupted", interrupted},
                                         {NULL, NULL}};
    make_class(L, LEDGER, ledger_methods, ledger_close);
    make_class(L, CREW, crew_methods, crew_close);
    luaL_setfuncs(L, functions, 0);
}
