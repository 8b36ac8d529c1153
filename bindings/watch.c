// What rig:run is told to observe: its lists `record` and `metrics`.

#include "run.h"

#include <math.h>
#include <string.h>

// Open entry i of the list at `list`; a plain name becomes an entry with nothing else.
static lw__lua_reader open_entry(const lw__lua_reader *r, const char *what, int list, int i)
{
    lua_State *L = r->L;
    lw__lua_reader entry = *r;
    luaL_checkstack(L, 24, "too many entries");
    entry.subject = lua_pushfstring(L, "%s[%d]", what, i + 1);
    if (lua_rawgeti(L, list, i + 1) == LUA_TSTRING) {
        lua_createtable(L, 1, 0);
        lua_insert(L, -2);
        lua_rawseti(L, -2, 1);
    }
    if (lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(&entry, "it", -1, "a name, or a table that begins with one");
    entry.table = lua_gettop(L);
    return entry;
}

// ---- records

typedef struct record {
    lw_period every;
    lw_tick from, until;
    int64_t limit;
} record;

static const lw__lua_field record_fields[] = {
    OTHER("at"),
    OPTIONAL(record, every, "every", FIELD_PERIOD, NULL),
    OPTIONAL(record, from, "from", FIELD_TICK, NULL),
    OPTIONAL(record, until, "until", FIELD_TICK, NULL), // a keyword of Lua: ["until"] = ...
    OPTIONAL(record, until, "to", FIELD_TICK, NULL),
    OPTIONAL(record, limit, "limit", FIELD_LONG, NULL),
};

static lw_tick *read_instants(const lw__lua_reader *r, int *n)
{
    lua_State *L = r->L;
    int list = lua_gettop(L);
    *n = lw__lua_length(r, "at", list, "a list of times");
    if (*n == 0)
        lw__lua_bad(r, "at is an empty list");
    lw_tick *at = lw__lua_room(L, (size_t)*n, sizeof *at);
    for (int i = 0; i < *n; i++) {
        lua_rawgeti(L, list, i + 1);
        at[i] = lw__lua_tick(r, "at", -1);
        lua_pop(L, 1);
    }
    return at;
}

static void read_record(const lw__lua_reader *r, lw_watch *watch)
{
    lua_State *L = r->L;
    lw_error err = {LW_OK, ""};
    record p = {{0, 1}, 0, LW_NEVER, 0};
    lw__lua_reader entry = *r;
    const char *name = lw__lua_read_name(&entry, "record");
    LW__LUA_FIELDS(&entry, record_fields, 1, &p);
    lw_record_def def = {.origin = r->origin,
                         .signal = name,
                         .every = p.every,
                         .from = p.from,
                         .until = p.until,
                         .limit = p.limit};
    int has_at = lw__lua_push_field(&entry, "at") != LUA_TNIL;
    if (has_at && p.every.num > 0)
        lw__lua_bad(&entry, "both every and at are stated; one is wanted");
    if (has_at)
        def.at = read_instants(&entry, &def.n);
    lw_status status = !has_at && p.every.num == 0
                           ? lw_watch_events(watch, r->origin, name, p.limit, &err)
                           : lw_watch_record(watch, &def, &err);
    if (status != LW_OK)
        lw__lua_raise(L, r->origin, &err);
}

// ---- metrics

static const lw__lua_field metric_fields[] = {
    REQUIRED(lw_metric_def, of, "of", FIELD_TEXT, NULL),
    OPTIONAL(lw_metric_def, against, "against", FIELD_TEXT, NULL),
    OPTIONAL(lw_metric_def, level, "level", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, base, "base", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, band, "band", FIELD_NUMBER, "1"),
    OPTIONAL(lw_metric_def, low, "low", FIELD_NUMBER, "1"),
    OPTIONAL(lw_metric_def, high, "high", FIELD_NUMBER, "1"),
    OPTIONAL(lw_metric_def, share, "share", FIELD_NUMBER, "1"),
    OPTIONAL(lw_metric_def, window, "window", FIELD_LONG, NULL),
    OPTIONAL(lw_metric_def, from, "from", FIELD_TICK, NULL),
    OPTIONAL(lw_metric_def, until, "until", FIELD_TICK, NULL),
    OPTIONAL(lw_metric_def, until, "to", FIELD_TICK, NULL),
    OPTIONAL(lw_metric_def, band_value, "band_value", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, low_value, "low_value", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, high_value, "high_value", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, step, "step", FIELD_NUMBER, NULL),
    OPTIONAL(lw_metric_def, last, "last", FIELD_TICK, NULL),
    OTHER("mask"),
};

// mask = { { time, low, high }, ... }; false where there is no limit.
static void read_mask(const lw__lua_reader *r, lw_metric_def *def)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "mask") == LUA_TNIL)
        return;
    int list = lua_gettop(L);
    int n = lw__lua_length(r, "mask", list, "a list of { time, low, high }");
    double *v = lw__lua_room(L, 3 * (size_t)n, sizeof *v); // stays on the stack
    if (n < 2)
        lw__lua_bad(r, "mask has %d corners; at least 2 are wanted", n);
    for (int k = 0; k < n; k++) {
        lua_rawgeti(L, list, k + 1);
        int corner = lua_gettop(L);
        if (!lua_istable(L, corner))
            lw__lua_bad_type(r, "mask", corner, "a list of { time, low, high }");
        for (int side = 0; side < 3; side++) {
            lua_rawgeti(L, corner, side + 1);
            int none = side > 0 && (lua_isnil(L, -1) || !lua_toboolean(L, -1));
            v[side * n + k] =
                none ? (double)NAN : lw__lua_number(r, "mask", -1, side == 0 ? "s" : NULL);
        }
        lua_settop(L, corner - 1);
    }
    def->n_mask = n;
    def->mask_time = v;
    def->mask_low = v + n;
    def->mask_high = v + 2 * n;
}

// The kind by its words: the second element, or the name itself.
static lw_metric_kind read_kind(const lw__lua_reader *r, const char *name)
{
    lua_State *L = r->L;
    const char *words[256];
    int n = 0;
    const char *wanted = name;
    if (lua_rawgeti(L, r->table, 2) != LUA_TNIL)
        wanted = lw__lua_field_text(r, "its kind (the second element)", -1);
    for (; n < lw_metric_count() && n < 256; n++) {
        words[n] = lw_metric_words((lw_metric_kind)n);
        if (strcmp(words[n], wanted) == 0)
            return (lw_metric_kind)n;
    }
    const char *near = lw_nearest_name(wanted, words, n);
    const char *quoted = lw__lua_quote(L, wanted);
    lw__lua_bad(r, "no kind of metric %s%s%s%s", quoted, near ? "; nearest \"" : "",
                near ? near : "", near ? "\"" : "");
    return LW_METRIC_MAXIMUM;
}

static void read_metric(const lw__lua_reader *r, lw_watch *watch)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader entry = *r;
    const char *name = lw__lua_read_name(&entry, "metric");
    lw_metric_def def = lw_metric_default(read_kind(&entry, name));
    LW__LUA_FIELDS(&entry, metric_fields, 2, &def);
    def.origin = r->origin;
    def.name = name;
    read_mask(&entry, &def);
    if (lw_watch_metric(watch, &def, &err) != LW_OK)
        lw__lua_raise(r->L, r->origin, &err);
}

static void read_list(const lw__lua_reader *r, const char *field, lw_watch *watch,
                      void (*read)(const lw__lua_reader *entry, lw_watch *watch))
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return;
    int list = lua_gettop(L);
    int n = lw__lua_length(r, field, list, "a list of names and tables");
    for (int i = 0; i < n; i++) {
        lw__lua_reader entry = open_entry(r, field, list, i);
        read(&entry, watch);
        lua_settop(L, list);
    }
    lua_pop(L, 1);
}

void lw__lua_watch_read(const lw__lua_reader *r, lw_watch *watch)
{
    read_list(r, "record", watch, read_record);
    read_list(r, "metrics", watch, read_metric);
}
