// Data files that a study names. See file.h.
//
// Workload: up to some millions of lines once a rig; memory is the two columns and one line.

#include "file.h"

#include "latewood_lua.h"
#include "module.h"

#include <errno.h>
#include <latewood/quantity.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define FILE_CLASS "latewood.file"
#define MOST_COLUMNS 1000

const char *lw__lua_resolve(const lw__lua_reader *r, const char *field, const char *path)
{
    lua_State *L = r->L;
    luaL_checkstack(L, 8, NULL);
    if (lua_getfield(L, LUA_REGISTRYINDEX, LATEWOOD_RESOLVE) != LUA_TFUNCTION) {
        lua_pop(L, 1);
        return lua_pushstring(L, path);
    }
    lua_pushstring(L, path);
    lua_call(L, 1, 2);
    if (lua_type(L, -2) != LUA_TSTRING) {
        const char *quoted = lw__lua_quote(L, path);
        const char *why = lua_tostring(L, -2);
        lw__lua_bad(r, "%s %s: %s", field, quoted, why != NULL ? why : "not permitted");
    }
    lua_pop(L, 1);
    return lua_tostring(L, -1);
}

// ---- an open file, owned by a userdata

typedef struct file {
    FILE *stream;
    char *line;
    size_t capacity;
    int number; // of the line
} file;

static int close_file(lua_State *L)
{
    file *f = luaL_checkudata(L, 1, FILE_CLASS);
    if (f->stream != NULL)
        fclose(f->stream);
    free(f->line);
    f->stream = NULL;
    f->line = NULL;
    return 0;
}

void lw__lua_file_class(lua_State *L)
{
    luaL_newmetatable(L, FILE_CLASS);
    lua_pushcfunction(L, close_file);
    lua_setfield(L, -2, "__gc");
    lua_pop(L, 1);
}

static file *open_file(const lw__lua_reader *r, const char *path)
{
    file *f = lw__lua_new(r->L, FILE_CLASS, sizeof *f, 0);
    f->stream = fopen(path, "r");
    if (f->stream == NULL) {
        const char *why = strerror(errno);
        lw__lua_bad(r, "file %s: %s", lw__lua_quote(r->L, path), why);
    }
    return f;
}

// The next line that holds data, without its end; NULL at the end of the file.
static char *next_line(file *f)
{
    ssize_t n;
    while ((n = getline(&f->line, &f->capacity, f->stream)) >= 0) {
        f->number++;
        while (n > 0 && strchr(" \t\r\n", f->line[n - 1]) != NULL)
            f->line[--n] = 0;
        char *text = f->line;
        if (f->number == 1 && strncmp(text, "\xEF\xBB\xBF", 3) == 0)
            text += 3;
        text += strspn(text, " ");
        if (text[0] != 0 && text[0] != '#' && text[0] != ';')
            return text;
    }
    return NULL;
}

// ---- cells

static char separator_of(const char *line, const lw__lua_format *format)
{
    static const char separators[] = "\t;,";
    if (format->separator != 0)
        return format->separator;
    int n = format->decimal == ',' ? 2 : 3; // a decimal comma separates nothing
    for (int i = 0; i < n; i++)
        if (strchr(line, separators[i]) != NULL)
            return separators[i];
    return n == 2 ? ';' : ',';
}

// Cut `line` into cells in place, blanks and quotes around them taken away; their number.
static int cut(char *line, char separator, char **cells)
{
    int n = 0;
    for (char *at = line; at != NULL && n < MOST_COLUMNS; n++) {
        at += strspn(at, separator == '\t' ? " " : " \t");
        int quoted = at[0] == '"';
        char *end = quoted ? strchr(at + 1, '"') : NULL;
        char *next = strchr(end != NULL ? end : at, separator);
        cells[n] = at + (end != NULL);
        if (next != NULL)
            *next = 0;
        if (end != NULL)
            *end = 0;
        for (char *last = cells[n] + strlen(cells[n]);
             last > cells[n] && (last[-1] == ' ' || last[-1] == '\t'); last--)
            last[-1] = 0;
        at = next != NULL ? next + 1 : NULL;
    }
    return n;
}

static int is_number(char *text, const lw__lua_format *format, double *value)
{
    static const lw_dimension none = {0, 0, 0, 0, 0};
    lw_quantity q;
    char *comma = format->decimal == ',' ? strchr(text, ',') : NULL;
    if (comma != NULL)
        *comma = '.';
    if (lw_quantity_parse(text, &q, NULL) != LW_OK || q.kind != LW_UNIT_SI ||
        (!format->quantities && memcmp(&q.dimension, &none, sizeof none) != 0))
        return 0;
    *value = q.value;
    return 1;
}

// Places of the columns (from 0) in the header.
static void find_columns(const lw__lua_reader *r, const char *path, const lw__lua_column columns[2],
                         int n_cells, char **cells, int places[2])
{
    for (int c = 0; c < 2; c++) {
        places[c] = columns[c].number - 1;
        for (int i = 0; columns[c].name != NULL && i < n_cells; i++)
            if (strcmp(cells[i], columns[c].name) == 0) {
                places[c] = i;
                break;
            }
        if (columns[c].name == NULL || places[c] >= 0)
            continue;
        const char *near = lw_nearest_name(columns[c].name, (const char *const *)cells, n_cells);
        const char *quoted = lw__lua_quote(r->L, columns[c].name);
        lw__lua_bad(r, "%s has no column %s%s%s%s", lua_pushstring(r->L, path), quoted,
                    near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
    }
}

// ---- columns

typedef struct table {
    int n, capacity, slot; // slot: stack index of the userdata that owns the numbers
    double *v;             // pairs
} table;

static void append(lua_State *L, table *t, const double pair[2])
{
    if (t->n == t->capacity) {
        t->capacity = t->capacity > 0 ? 2 * t->capacity : 256;
        double *grown = lw__lua_room(L, (size_t)t->capacity, 2 * sizeof(double));
        if (t->n > 0)
            memcpy(grown, t->v, (size_t)t->n * 2 * sizeof(double));
        t->v = grown;
        lua_replace(L, t->slot);
    }
    memcpy(t->v + 2 * (size_t)t->n, pair, 2 * sizeof(double));
    t->n++;
}

// Whether the places of this line hold numbers; raises unless it may be a header.
static int read_pair(const lw__lua_reader *r, const char *path, const file *f, int n_cells,
                     char **cells, const int places[2], const lw__lua_format *format,
                     int may_be_header, double pair[2])
{
    for (int c = 0; c < 2; c++) {
        if (places[c] < 0)
            continue;
        if (places[c] < n_cells && is_number(cells[places[c]], format, &pair[c]))
            continue;
        if (may_be_header)
            return 0;
        const char *shown = places[c] < n_cells ? lw__lua_quote(r->L, cells[places[c]]) : "missing";
        lw__lua_bad(r, "%s:%d: column %d is %s; a number is wanted", path, f->number, places[c] + 1,
                    shown);
    }
    return 1;
}

static void split(lua_State *L, const table *t, lw__lua_list out[2])
{
    for (int c = 0; c < 2; c++) {
        out[c] = (lw__lua_list){t->n, lw__lua_room(L, (size_t)t->n, sizeof(double))};
        for (int i = 0; i < t->n; i++)
            out[c].v[i] = t->v[2 * (size_t)i + (size_t)c];
    }
}

void lw__lua_read_columns(const lw__lua_reader *r, const char *path,
                          const lw__lua_column columns[2], const lw__lua_format *format,
                          lw__lua_list out[2])
{
    lua_State *L = r->L;
    char **cells = lw__lua_room(L, MOST_COLUMNS, sizeof *cells);
    lua_pushnil(L);
    table t = {0, 0, lua_gettop(L), NULL};
    file *f = open_file(r, path);
    int by_name = columns[0].name != NULL || columns[1].name != NULL;
    int places[2] = {columns[0].number - 1, columns[1].number - 1};
    int n_lines = 0;
    char separator = ',';
    for (char *line = next_line(f); line != NULL; line = next_line(f), n_lines++) {
        double pair[2] = {t.n, t.n}; // a column that counts rows keeps this
        if (n_lines == 0)
            separator = separator_of(line, format);
        int n_cells = cut(line, separator, cells);
        if (n_lines == 0 && by_name)
            find_columns(r, path, columns, n_cells, cells, places);
        else if (read_pair(r, path, f, n_cells, cells, places, format, n_lines == 0, pair))
            append(L, &t, pair);
    }
    if (ferror(f->stream))
        lw__lua_bad(r, "file %s: it cannot be read to its end", lw__lua_quote(L, path));
    lua_pushcfunction(L, close_file);
    lua_insert(L, -2);
    lua_call(L, 1, 0);
    if (t.n == 0)
        lw__lua_bad(r, "%s holds no numbers", path);
    split(L, &t, out);
}

lw__lua_column lw__lua_column_field(const lw__lua_reader *r, const char *field)
{
    lw__lua_column c = {NULL, 0};
    int type = lw__lua_push_field(r, field);
    if (type == LUA_TNIL)
        lw__lua_bad(r, "%s is missing", field);
    if (type == LUA_TNUMBER)
        c.number = (int)lw__lua_whole(r, field, -1, 1, 1000);
    else if (type == LUA_TSTRING)
        c.name = lw__lua_field_text(r, field, -1);
    else
        lw__lua_bad_type(r, field, -1, "a column's name or number");
    return c;
}

// ---- for the modules written in Lua

static void push_list(lua_State *L, const lw__lua_list *list)
{
    lua_createtable(L, list->n, 0);
    for (int i = 0; i < list->n; i++) {
        lua_pushnumber(L, list->v[i]);
        lua_rawseti(L, -2, i + 1);
    }
}

typedef struct named_file {
    const char *decimal, *separator;
} named_file;

// lw.columns { file, time = , value = , decimal = , separator = }: two lists of numbers, in SI
// where cells have units; the first is nil where no column is named time.
int lw__lua_columns(lua_State *L)
{
    static const lw__lua_field wanted[] = {
        OTHER("time"), OTHER("value"), OPTIONAL(named_file, decimal, "decimal", FIELD_TEXT, NULL),
        OPTIONAL(named_file, separator, "separator", FIELD_TEXT, NULL)};
    named_file p = {".", ""};
    lw__lua_reader r = lw__lua_read(L, 1, "measured");
    const char *path = lw__lua_read_name(&r, "measured");
    LW__LUA_FIELDS(&r, wanted, 1, &p);
    lw__lua_column columns[2] = {{NULL, 0}, lw__lua_column_field(&r, "value")};
    int timed = lw__lua_push_field(&r, "time") != LUA_TNIL;
    if (timed)
        columns[0] = lw__lua_column_field(&r, "time");
    lw__lua_format format = {p.decimal[0], strcmp(p.separator, "tab") == 0 ? '\t' : p.separator[0],
                             1};
    lw__lua_list out[2];
    lw__lua_read_columns(&r, lw__lua_resolve(&r, "file", path), columns, &format, out);
    if (timed)
        push_list(L, &out[0]);
    else
        lua_pushnil(L);
    push_list(L, &out[1]);
    return 2;
}
