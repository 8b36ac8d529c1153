// Reading a Lua table into a definition struct. See fields.h.

#include "fields.h"

#include <latewood/quantity.h>
#include <math.h>
#include <stdarg.h>
#include <stddef.h>
#include <string.h>

#define MOST_FIELDS 128
#define MOST_ELEMENTS 50000000

// ---- messages

int lw__lua_bad(const lw__lua_reader *r, const char *format, ...)
{
    va_list arguments;
    luaL_checkstack(r->L, 4, NULL);
    va_start(arguments, format);
    lua_pushvfstring(r->L, format, arguments);
    va_end(arguments);
    return lw__lua_fail_at(r->L, r->origin, "%s: %s", r->subject, lua_tostring(r->L, -1));
}

int lw__lua_bad_field(const lw__lua_reader *r, const char *field, const lw_error *err)
{
    return lw__lua_bad(r, "%s: %s", field, err->text);
}

int lw__lua_bad_type(const lw__lua_reader *r, const char *field, int index, const char *wanted)
{
    const char *shown = lw__lua_shown(r->L, index);
    return lw__lua_bad(r, "%s is %s; %s is wanted", field, shown, wanted);
}

static int bad_value(const lw__lua_reader *r, const char *field, double value, const char *wanted)
{
    char text[32];
    return lw__lua_bad(r, "%s is %s; %s", field, lw_double_format(value, text), wanted);
}

// ---- beginning

lw__lua_reader lw__lua_read(lua_State *L, int index, const char *what)
{
    luaL_checkstack(L, 8, NULL);
    if (index > lua_gettop(L))
        lua_settop(L, index);
    lw__lua_reader r = {L, lua_absindex(L, index), NULL, what};
    r.origin = lw__lua_origin(L);
    if (lua_type(L, r.table) != LUA_TTABLE) {
        const char *shown = lw__lua_shown(L, r.table);
        lw__lua_fail_at(L, r.origin, "%s: one table of fields is wanted, and this is %s", what,
                        shown);
    }
    return r;
}

lw__lua_reader lw__lua_arguments(lua_State *L, const char *what, int n_arguments)
{
    luaL_checkstack(L, n_arguments + 8, NULL);
    lua_settop(L, n_arguments);
    lw__lua_reader r = {L, 0, NULL, what};
    r.origin = lw__lua_origin(L);
    return r;
}

const char *lw__lua_read_name(lw__lua_reader *r, const char *what)
{
    lua_State *L = r->L;
    r->subject = what;
    lua_rawgeti(L, r->table, 1);
    if (lua_isnil(L, -1))
        lw__lua_bad(r, "its name is missing; it is the first element: %s { \"name\", ... }", what);
    const char *name = lw__lua_field_text(r, "its name (the first element)", -1);
    const char *quoted = lw__lua_quote(L, name);
    r->subject = lua_pushfstring(L, "%s %s", what, quoted);
    return name;
}

int lw__lua_push_field(const lw__lua_reader *r, const char *name)
{
    lua_State *L = r->L;
    luaL_checkstack(L, 4, NULL);
    lua_pushstring(L, name);
    int type = lua_rawget(L, r->table);
    if (type == LUA_TNIL)
        lua_pop(L, 1);
    return type;
}

// ---- single values

// What the strings of a unit look like, for messages.
static const char *example_of(const char *unit)
{
    static const char *const examples[][2] = {
        {"s", "a time: seconds, or a text such as \"50 us\""},
        {"Hz", "a frequency: hertz, or a text such as \"2 kHz\""},
        {"rad/s", "an angular frequency: rad/s, or a text such as \"40 rad/s\""},
        {"ohm", "a resistance: ohms, or a text such as \"0.8 ohm\""},
        {"H", "an inductance: henries, or a text such as \"2 mH\""},
        {"1", "a plain number, or a percentage such as \"2 %\""}};
    for (size_t i = 0; unit != NULL && i < sizeof examples / sizeof *examples; i++)
        if (strcmp(unit, examples[i][0]) == 0)
            return examples[i][1];
    return "a number, or a text with a unit";
}

// Hertz and radians a second have one dimension but differ by 2 pi: neither passes for the other.
static void refuse_mixed_turns(const lw__lua_reader *r, const char *field, const char *text,
                               const char *unit)
{
    int wants_hertz = strcmp(unit, "Hz") == 0, wants_angular = strcmp(unit, "rad/s") == 0;
    int is_hertz = strstr(text, "Hz") != NULL;
    int is_angular = strstr(text, "rad") || strstr(text, "deg") || strstr(text, "rpm");
    if ((!wants_hertz || !is_angular) && (!wants_angular || !is_hertz))
        return;
    const char *shown = lw__lua_quote(r->L, text);
    lw__lua_bad(r, "%s: %s is %s; %s is wanted", field, shown,
                is_hertz ? "a frequency" : "an angular frequency", example_of(unit));
}

static double quantity(const lw__lua_reader *r, const char *field, const char *text,
                       const char *unit)
{
    lw_error err = {LW_OK, ""};
    lw_quantity q;
    double value = 0;
    if (unit != NULL) {
        refuse_mixed_turns(r, field, text, unit);
        if (lw_quantity_parse_as(text, unit, &value, &err) != LW_OK)
            lw__lua_bad_field(r, field, &err);
        return value;
    }
    if (lw_quantity_parse(text, &q, &err) != LW_OK)
        lw__lua_bad_field(r, field, &err);
    if (q.kind != LW_UNIT_SI) {
        const char *shown = lw__lua_quote(r->L, text);
        lw__lua_bad(r, "%s is %s; a number or a quantity with an SI unit is wanted", field, shown);
    }
    return q.value;
}

double lw__lua_number(const lw__lua_reader *r, const char *field, int index, const char *unit)
{
    double value = 0;
    int type = lua_type(r->L, index);
    if (type == LUA_TNUMBER)
        value = lua_tonumber(r->L, index);
    else if (type == LUA_TSTRING)
        value = quantity(r, field, lw__lua_field_text(r, field, index), unit);
    else
        lw__lua_bad_type(r, field, index, example_of(unit));
    if (!isfinite(value))
        bad_value(r, field, value, "a finite number is wanted");
    return value;
}

int64_t lw__lua_whole(const lw__lua_reader *r, const char *field, int index, int64_t lo, int64_t hi)
{
    int is_whole = 0;
    int64_t value = 0;
    if (lua_type(r->L, index) == LUA_TNUMBER)
        value = lua_tointegerx(r->L, index, &is_whole);
    if (!is_whole)
        lw__lua_bad_type(r, field, index, "a whole number");
    if (value < lo || value > hi)
        lw__lua_bad(r, "%s is %I; permitted %I to %I", field, (LUAI_UACINT)value, (LUAI_UACINT)lo,
                    (LUAI_UACINT)hi);
    return value;
}

const char *lw__lua_field_text(const lw__lua_reader *r, const char *field, int index)
{
    size_t n;
    if (lua_type(r->L, index) != LUA_TSTRING)
        lw__lua_bad_type(r, field, index, "a text");
    const char *text = lua_tolstring(r->L, index, &n);
    if (strlen(text) != n) {
        const char *shown = lw__lua_quote(r->L, text);
        lw__lua_bad(r, "%s has a zero byte after %s; texts have none", field, shown);
    }
    return text;
}

lw_period lw__lua_period(const lw__lua_reader *r, const char *field, int index)
{
    static const char wanted[] = "a period: seconds, or a text such as \"50 us\" or \"20 kHz\"";
    lw_error err = {LW_OK, ""};
    lw_period period = {0, 1};
    lw_status status = LW_OK;
    int type = lua_type(r->L, index);
    if (type == LUA_TNUMBER)
        status = lw_period_from_seconds(lua_tonumber(r->L, index), &period, &err);
    else if (type == LUA_TSTRING)
        status = lw_period_parse(lw__lua_field_text(r, field, index), &period, &err);
    else
        lw__lua_bad_type(r, field, index, wanted);
    if (status != LW_OK)
        lw__lua_bad_field(r, field, &err);
    return period;
}

lw_tick lw__lua_tick(const lw__lua_reader *r, const char *field, int index)
{
    lw_error err = {LW_OK, ""};
    lw_tick tick = 0;
    int type = lua_type(r->L, index);
    if (type == LUA_TSTRING) {
        if (lw_duration_parse(lw__lua_field_text(r, field, index), &tick, NULL, &err) != LW_OK)
            lw__lua_bad_field(r, field, &err);
        return tick;
    }
    double seconds = lw__lua_number(r, field, index, "s");
    if (lw_tick_from_seconds(seconds, &tick) != LW_OK)
        bad_value(r, field, seconds, "permitted -9e6 to 9e6 seconds");
    return tick;
}

double lw__lua_time_or_share(const lw__lua_reader *r, const char *field, int index, double period)
{
    lw_error err = {LW_OK, ""};
    lw_quantity q;
    if (lua_type(r->L, index) != LUA_TSTRING)
        return lw__lua_number(r, field, index, "s");
    const char *text = lw__lua_field_text(r, field, index);
    if (lw_quantity_parse(text, &q, &err) != LW_OK)
        lw__lua_bad_field(r, field, &err);
    if (q.kind != LW_UNIT_PERCENT && q.kind != LW_UNIT_SAMPLES)
        return lw__lua_number(r, field, index, "s");
    if (!(period > 0)) {
        const char *shown = lw__lua_quote(r->L, text);
        lw__lua_bad(r,
                    "%s is %s, but there is no period of its own to take it of; a time is wanted",
                    field, shown);
    }
    return q.value * period;
}

// ---- lists

int lw__lua_length(const lw__lua_reader *r, const char *field, int index, const char *wanted)
{
    lua_State *L = r->L;
    index = lua_absindex(L, index);
    luaL_checkstack(L, 8, NULL);
    if (lua_type(L, index) != LUA_TTABLE)
        lw__lua_bad_type(r, field, index, wanted);
    lua_Unsigned n = lua_rawlen(L, index);
    if (n > MOST_ELEMENTS)
        lw__lua_bad(r, "%s has %I elements; permitted up to %d", field, (LUAI_UACINT)n,
                    MOST_ELEMENTS);
    for (lua_pushnil(L); lua_next(L, index) != 0; lua_pop(L, 1)) {
        lua_Integer key = lua_isinteger(L, -2) ? lua_tointeger(L, -2) : 0;
        if (key < 1 || (lua_Unsigned)key > n) {
            const char *shown = lw__lua_shown(L, -2);
            lw__lua_bad(r, "%s has the key %s; %s is wanted, without gaps", field, shown, wanted);
        }
    }
    return (int)n;
}

lw__lua_list lw__lua_numbers(const lw__lua_reader *r, const char *field, int index,
                             const char *unit)
{
    lua_State *L = r->L;
    index = lua_absindex(L, index);
    int n = lw__lua_length(r, field, index, "a list of numbers");
    lw__lua_list list = {n, lw__lua_room(L, (size_t)n, sizeof(double))};
    int top = lua_gettop(L);
    for (int i = 0; i < n; i++) {
        if (lua_rawgeti(L, index, i + 1) == LUA_TNUMBER && isfinite(lua_tonumber(L, -1)))
            list.v[i] = lua_tonumber(L, -1);
        else
            list.v[i] =
                lw__lua_number(r, lua_pushfstring(L, "%s[%d]", field, i + 1), top + 1, unit);
        lua_settop(L, top);
    }
    return list;
}

// Columns of the row at the top of the stack, which must agree with those before.
static int row_length(const lw__lua_reader *r, const char *field, int row, int n_columns)
{
    lua_State *L = r->L;
    int top = lua_gettop(L);
    const char *name = lua_pushfstring(L, "%s[%d]", field, row + 1);
    int n = lw__lua_length(r, name, top, "a row of numbers, as in { { 1, 0 }, { 0, 1 } }");
    if (row > 0 && n != n_columns)
        lw__lua_bad(r, "%s has rows of %d and of %d numbers; one length is wanted", field,
                    n_columns, n);
    lua_settop(L, top);
    return n;
}

lw__lua_matrix lw__lua_rows(const lw__lua_reader *r, const char *field, int index)
{
    lua_State *L = r->L;
    index = lua_absindex(L, index);
    int n = lw__lua_length(r, field, index, "a list of rows, as in { { 1, 0 }, { 0, 1 } }");
    lw__lua_matrix m = {1, n, 0, NULL};
    for (int i = 0; i < n; i++) {
        lua_rawgeti(L, index, i + 1);
        m.n_columns = row_length(r, field, i, m.n_columns);
        lua_pop(L, 1);
    }
    m.v = lw__lua_room(L, (size_t)n * (size_t)m.n_columns, sizeof(double));
    int top = lua_gettop(L);
    for (int k = 0; k < n * m.n_columns; k++) {
        int i = k / m.n_columns, j = k % m.n_columns;
        if (lua_rawgeti(L, index, i + 1) != LUA_TTABLE)
            lw__lua_bad_type(r, field, -1, "a list of rows that stays as it is");
        lua_rawgeti(L, -1, j + 1);
        m.v[k] =
            lw__lua_number(r, lua_pushfstring(L, "%s[%d][%d]", field, i + 1, j + 1), top + 2, NULL);
        lua_settop(L, top);
    }
    return m;
}

lw__lua_texts lw__lua_names(const lw__lua_reader *r, const char *field, int index)
{
    lua_State *L = r->L;
    index = lua_absindex(L, index);
    int n = lw__lua_length(r, field, index, "a list of texts");
    lw__lua_texts list = {n, lw__lua_room(L, (size_t)n, sizeof(char *))};
    luaL_checkstack(L, 2 * n + 8, "too many names");
    for (int i = 0; i < n; i++) {
        const char *name = lua_pushfstring(L, "%s[%d]", field, i + 1);
        lua_rawgeti(L, index, i + 1);
        list.v[i] = lw__lua_field_text(r, name, -1);
    }
    return list;
}

// ---- tables of fields

// The name on the list that is nearest to the unknown one, pushed as the end of a message.
static const char *hint(lua_State *L, const char *name, int n, const char *const *known)
{
    const char *near = lw_nearest_name(name, known, n);
    if (near == NULL)
        return lua_pushliteral(L, "");
    return lua_pushfstring(L, "; nearest \"%s\"", near);
}

// Whether the key at the top of the stack is a known one.
static int is_known(lua_State *L, int n_positional, int n_known, const char *const *known)
{
    if (lua_isinteger(L, -1))
        return lua_tointeger(L, -1) >= 1 && lua_tointeger(L, -1) <= n_positional;
    if (lua_type(L, -1) != LUA_TSTRING)
        return 0;
    size_t length;
    const char *key = lua_tolstring(L, -1, &length);
    for (int i = 0; i < n_known; i++)
        if (strlen(known[i]) == length && memcmp(known[i], key, length) == 0)
            return 1;
    return 0;
}

// Of several unknown keys the first in byte order is named, so that the message is always the same.
void lw__lua_refuse_unknown(const lw__lua_reader *r, const char *words, int n_positional,
                            int n_known, const char *const *known)
{
    lua_State *L = r->L;
    lua_pushnil(L);
    int worst = lua_gettop(L);
    lua_pushnil(L);
    while (lua_next(L, r->table) != 0) {
        lua_pop(L, 1);
        if (is_known(L, n_positional, n_known, known))
            continue;
        if (lua_type(L, -1) == LUA_TSTRING)
            lua_pushvalue(L, -1);
        else
            lw__lua_shown(L, -1);
        if (lua_isnil(L, worst) || strcmp(lua_tostring(L, -1), lua_tostring(L, worst)) < 0)
            lua_replace(L, worst);
        else
            lua_pop(L, 1);
    }
    if (!lua_isnil(L, worst)) {
        const char *quoted = lw__lua_quote(L, lua_tostring(L, worst));
        lw__lua_bad(r, "%s %s%s", words, quoted, hint(L, lua_tostring(L, worst), n_known, known));
    }
    lua_pop(L, 1);
}

static void read_range(const lw__lua_reader *r, const lw__lua_field *f, int index, double *out)
{
    lw__lua_list list = lw__lua_numbers(r, f->name, index, f->unit);
    if (list.n != 2)
        lw__lua_bad(r, "%s has %d numbers; { lo, hi } is wanted", f->name, list.n);
    if (!(list.v[0] < list.v[1])) {
        char lo[32], hi[32];
        lw__lua_bad(r, "%s is { %s, %s }; the first is to be the lower one", f->name,
                    lw_double_format(list.v[0], lo), lw_double_format(list.v[1], hi));
    }
    memcpy(out, list.v, 2 * sizeof *out);
}

static int read_choice(const lw__lua_reader *r, const lw__lua_field *f, int index)
{
    lua_State *L = r->L;
    int n = 0;
    while (f->words[n] != NULL)
        n++;
    const char *text = lw__lua_field_text(r, f->name, index);
    for (int i = 0; i < n; i++)
        if (strcmp(text, f->words[i]) == 0)
            return i;
    const char *quoted = lw__lua_quote(L, text);
    lua_pushliteral(L, "");
    for (int i = 0; i < n; i++) {
        lua_pushfstring(L, "%s%s\"%s\"", lua_tostring(L, -1), i > 0 ? ", " : "", f->words[i]);
        lua_remove(L, -2);
    }
    return lw__lua_bad(r, "%s is %s; permitted are %s", f->name, quoted, lua_tostring(L, -1));
}

// The value is on top of the stack and stays there, with what was made of it.
static void read_field(const lw__lua_reader *r, const lw__lua_field *f, void *at)
{
    int index = lua_gettop(r->L);
    switch (f->kind) {
    case FIELD_NUMBER:
        *(double *)at = lw__lua_number(r, f->name, index, f->unit);
        break;
    case FIELD_RANGE:
        read_range(r, f, index, at);
        break;
    case FIELD_COUNT:
        *(int *)at = (int)lw__lua_whole(r, f->name, index, INT32_MIN, INT32_MAX);
        break;
    case FIELD_LONG:
        *(int64_t *)at = lw__lua_whole(r, f->name, index, 0, INT64_MAX);
        break;
    case FIELD_FLAG:
        if (lua_type(r->L, index) != LUA_TBOOLEAN)
            lw__lua_bad_type(r, f->name, index, "true or false");
        *(int *)at = lua_toboolean(r->L, index);
        break;
    case FIELD_CHOICE:
        *(int *)at = read_choice(r, f, index);
        break;
    case FIELD_TEXT:
        *(const char **)at = lw__lua_field_text(r, f->name, index);
        break;
    case FIELD_PERIOD:
        *(lw_period *)at = lw__lua_period(r, f->name, index);
        break;
    case FIELD_TICK:
        *(lw_tick *)at = lw__lua_tick(r, f->name, index);
        break;
    case FIELD_LIST:
        *(lw__lua_list *)at = lw__lua_numbers(r, f->name, index, f->unit);
        break;
    case FIELD_MATRIX:
        *(lw__lua_matrix *)at = lw__lua_rows(r, f->name, index);
        break;
    case FIELD_TEXTS:
        *(lw__lua_texts *)at = lw__lua_names(r, f->name, index);
        break;
    case FIELD_OTHER:
        break;
    }
}

void lw__lua_fields(lw__lua_reader *r, int n, const lw__lua_field *fields, int n_positional,
                    int n_more, const char *const *more, void *def)
{
    const char *known[MOST_FIELDS];
    int n_known = 0;
    for (int i = 0; i < n; i++)
        known[n_known++] = fields[i].name;
    for (int i = 0; i < n_more && n_known < MOST_FIELDS; i++)
        known[n_known++] = more[i];
    luaL_checkstack(r->L, 2 * n + 16, "too many fields");
    lw__lua_refuse_unknown(r, "no field", n_positional, n_known, known);
    for (int i = 0; i < n; i++) {
        if (lw__lua_push_field(r, fields[i].name) != LUA_TNIL)
            read_field(r, &fields[i], (char *)def + fields[i].offset);
        else if (fields[i].required)
            lw__lua_bad(r, "%s is missing", fields[i].name);
    }
}
