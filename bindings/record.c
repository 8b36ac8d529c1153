// What a run recorded, as Lua tables and as text (CSV, JSON).

#include "module.h"
#include "run.h"

#include <latewood/quantity.h>
#include <math.h>
#include <string.h>

#define NUMBER_BYTES 32

// ---- places of names

static int place_of(lua_State *L, const char *what, int index, int n,
                    const char *(*name_of)(const lw_frozen *, int), const lw_frozen *frozen)
{
    lw__lua_reader r = {L, 0, NULL, what};
    luaL_checkstack(L, 16, NULL);
    if (lua_gettop(L) < index)
        lua_settop(L, index);
    r.origin = lw__lua_origin(L);
    const char *wanted = lw__lua_field_text(&r, "its name", index);
    const char **names = lw__lua_room(L, (size_t)n, sizeof *names);
    for (int i = 0; i < n; i++) {
        names[i] = name_of(frozen, i);
        if (strcmp(names[i], wanted) == 0)
            return i;
    }
    const char *near = lw_nearest_name(wanted, names, n);
    const char *quoted = lw__lua_quote(L, wanted);
    return lw__lua_fail(L, "no %s %s in this run%s%s%s", what, quoted, near ? "; nearest \"" : "",
                        near ? near : "", near ? "\"" : "");
}

// A record by name, or by its place in the list that was asked for.
int lw__lua_record_place(lua_State *L, const lw__lua_run *run, int index)
{
    int n = lw_frozen_n_records(run->frozen);
    if (lua_isinteger(L, index) && lua_tointeger(L, index) >= 1 && lua_tointeger(L, index) <= n)
        return (int)lua_tointeger(L, index) - 1;
    return place_of(L, "record", index, lw_frozen_n_records(run->frozen), lw_frozen_record_name,
                    run->frozen);
}

int lw__lua_metric_place(lua_State *L, const lw__lua_run *run, int index)
{
    return place_of(L, "metric", index, lw_frozen_n_metrics(run->frozen), lw_frozen_metric_name,
                    run->frozen);
}

// ---- as tables

// Push one column as a list of numbers.
static void push_column(lua_State *L, const lw__lua_run *box, int record, int column)
{
    int64_t n = lw_run_record_rows(box->run, 0, record);
    lua_createtable(L, (int)n, 0);
    for (int64_t i = 0; i < n; i++) {
        lua_pushnumber(L, lw_run_record_cell(box->run, 0, record, i, column));
        lua_rawseti(L, -2, i + 1);
    }
}

// Columns stand under their names and numbers; where a column is called n or columns, only under
// its number.
int lw__lua_run_record(lua_State *L)
{
    lw__lua_run *box = lw__lua_run_self(L);
    int record = lw__lua_record_place(L, box, 2);
    int n_columns = lw_frozen_record_n_columns(box->frozen, record);
    lua_createtable(L, n_columns, n_columns + 2);
    lua_createtable(L, n_columns, 0);
    for (int c = 0; c < n_columns; c++) {
        const char *name = lw_frozen_record_column(box->frozen, record, c);
        push_column(L, box, record, c);
        lua_pushvalue(L, -1);
        lua_setfield(L, -4, name);
        lua_rawseti(L, -3, c + 1);
        lua_pushstring(L, name);
        lua_rawseti(L, -2, c + 1);
    }
    lua_setfield(L, -2, "columns");
    lua_pushinteger(L, lw_run_record_rows(box->run, 0, record));
    lua_setfield(L, -2, "n");
    return 1;
}

// ---- as text

static void add_number(luaL_Buffer *b, double value)
{
    char text[NUMBER_BYTES];
    luaL_addstring(b, lw_double_format(value, text));
}

// A cell in quotes where it holds what CSV gives a meaning.
static void add_cell(luaL_Buffer *b, const char *text)
{
    if (strpbrk(text, ",\"\r\n") == NULL) {
        luaL_addstring(b, text);
        return;
    }
    luaL_addchar(b, '"');
    for (const char *at = text; *at != 0; at++) {
        if (*at == '"')
            luaL_addchar(b, '"');
        luaL_addchar(b, *at);
    }
    luaL_addchar(b, '"');
}

int lw__lua_run_csv(lua_State *L)
{
    luaL_Buffer b;
    lw__lua_run *box = lw__lua_run_self(L);
    int record = lw__lua_record_place(L, box, 2);
    int n_columns = lw_frozen_record_n_columns(box->frozen, record);
    int64_t n_rows = lw_run_record_rows(box->run, 0, record);
    luaL_buffinit(L, &b);
    for (int c = 0; c < n_columns; c++) {
        if (c > 0)
            luaL_addchar(&b, ',');
        add_cell(&b, lw_frozen_record_column(box->frozen, record, c));
    }
    luaL_addchar(&b, '\n');
    for (int64_t i = 0; i < n_rows; i++)
        for (int c = 0; c < n_columns; c++) {
            add_number(&b, lw_run_record_cell(box->run, 0, record, i, c));
            luaL_addchar(&b, c + 1 < n_columns ? ',' : '\n');
        }
    luaL_pushresult(&b);
    return 1;
}

static void add_json_text(luaL_Buffer *b, const char *text)
{
    static const char digits[] = "0123456789abcdef";
    luaL_addchar(b, '"');
    for (const unsigned char *at = (const unsigned char *)text; *at != 0; at++) {
        if (*at == '"' || *at == '\\')
            luaL_addchar(b, '\\');
        if (*at >= 0x20) {
            luaL_addchar(b, (char)*at);
            continue;
        }
        luaL_addstring(b, "\\u00");
        luaL_addchar(b, digits[*at >> 4]);
        luaL_addchar(b, digits[*at & 15]);
    }
    luaL_addchar(b, '"');
}

// JSON has no word for infinite and undefined numbers: null.
static void add_json_number(luaL_Buffer *b, double value)
{
    if (isfinite(value))
        add_number(b, value);
    else
        luaL_addstring(b, "null");
}

static void add_json_count(luaL_Buffer *b, lua_State *L, uint64_t value)
{
    char text[24], *at = text + sizeof text;
    (void)L;
    *--at = 0;
    do
        *--at = (char)('0' + value % 10);
    while ((value /= 10) > 0);
    luaL_addstring(b, at);
}

static void add_json_metrics(luaL_Buffer *b, const lw__lua_run *box)
{
    int n = box->finished ? lw_frozen_n_metrics(box->frozen) : 0;
    luaL_addstring(b, "\"metrics\": {");
    for (int i = 0; i < n; i++) {
        luaL_addstring(b, i > 0 ? ", " : "");
        add_json_text(b, lw_frozen_metric_name(box->frozen, i));
        luaL_addstring(b, ": ");
        add_json_number(b, lw_run_metric(box->run, 0, i));
    }
    luaL_addstring(b, "}");
}

static void add_json_record(luaL_Buffer *b, const lw__lua_run *box, int record)
{
    int n_columns = lw_frozen_record_n_columns(box->frozen, record);
    int64_t n_rows = lw_run_record_rows(box->run, 0, record);
    luaL_addstring(b, "{\"name\": ");
    add_json_text(b, lw_frozen_record_name(box->frozen, record));
    luaL_addstring(b, ", \"columns\": [");
    for (int c = 0; c < n_columns; c++) {
        luaL_addstring(b, c > 0 ? ", " : "");
        add_json_text(b, lw_frozen_record_column(box->frozen, record, c));
    }
    luaL_addstring(b, "], \"rows\": [");
    for (int64_t i = 0; i < n_rows; i++) {
        luaL_addstring(b, i > 0 ? ", [" : "[");
        for (int c = 0; c < n_columns; c++) {
            luaL_addstring(b, c > 0 ? ", " : "");
            add_json_number(b, lw_run_record_cell(box->run, 0, record, i, c));
        }
        luaL_addstring(b, "]");
    }
    luaL_addstring(b, "]}");
}

// One object; keys always in this order. "format" tells readers what they have.
int lw__lua_run_json(lua_State *L)
{
    luaL_Buffer b;
    lw__lua_run *box = lw__lua_run_self(L);
    lw_error err = {LW_OK, ""};
    lw_status status = lw_run_status(box->run, 0, &err);
    if (lua_getiuservalue(L, 1, RUN_MESSAGE) != LUA_TSTRING)
        lua_pushstring(L, err.text);
    const char *message = lua_tostring(L, -1);
    luaL_buffinit(L, &b);
    luaL_addstring(&b, "{\"format\": \"latewood run\", \"version\": 1, \"seed\": ");
    add_json_count(&b, L, box->seed);
    luaL_addstring(&b, ", \"run\": ");
    add_json_count(&b, L, box->number);
    luaL_addstring(&b, ", \"lasts\": ");
    add_json_number(&b, lw_tick_seconds(box->lasts));
    luaL_addstring(&b, ", \"now\": ");
    add_json_number(&b, lw_tick_seconds(lw_run_now(box->run, 0)));
    luaL_addstring(&b, ", \"status\": ");
    add_json_text(&b, status == LW_OK ? "done" : lw_status_name(status));
    luaL_addstring(&b, ", \"message\": ");
    if (status == LW_OK)
        luaL_addstring(&b, "null");
    else
        add_json_text(&b, message);
    luaL_addstring(&b, ", ");
    add_json_metrics(&b, box);
    luaL_addstring(&b, ", \"records\": [");
    for (int i = 0; i < lw_frozen_n_records(box->frozen); i++) {
        luaL_addstring(&b, i > 0 ? ", " : "");
        add_json_record(&b, box, i);
    }
    luaL_addstring(&b, "]}");
    luaL_pushresult(&b);
    return 1;
}
