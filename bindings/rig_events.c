// Comparators and trips of a rig.

#include "rig.h"

#include "module.h"

#include <latewood/event.h>

#include <string.h>

// ---- comparators

typedef struct comparator {
    lw_comparator_def def;
    int edge;
} comparator;

static const char *const edges[] = {"rises", "falls", "both", NULL};

static const lw__lua_field comparator_fields[] = {
    REQUIRED(comparator, def.of, "of", FIELD_TEXT, NULL),
    OTHER("above"),
    OTHER("below"),
    OTHER("start"),
    OPTIONAL(comparator, def.hysteresis, "hysteresis", FIELD_NUMBER, NULL),
    CHOICE(comparator, edge, "edge", edges),
    OPTIONAL(comparator, def.delay, "delay", FIELD_NUMBER, "s"),
    OPTIONAL(comparator, def.blanking, "blanking", FIELD_NUMBER, "s"),
};

// The level on top of the stack: a number, a quantity, or the name of a signal.
static void read_level(const lw__lua_reader *r, const char *field, lw_comparator_def *def)
{
    lua_State *L = r->L;
    const char *text = lua_type(L, -1) == LUA_TSTRING ? lua_tostring(L, -1) : NULL;
    if (text != NULL && strchr("0123456789.+-", text[0]) == NULL)
        def->against = lw__lua_field_text(r, field, -1);
    else
        def->level = lw__lua_number(r, field, -1, NULL);
}

static void read_levels(const lw__lua_reader *r, lw_comparator_def *def)
{
    int n = 0;
    if (lw__lua_push_field(r, "above") != LUA_TNIL) {
        read_level(r, "above", def);
        n++;
    }
    if (lw__lua_push_field(r, "below") != LUA_TNIL) {
        read_level(r, "below", def);
        def->below = 1;
        n++;
    }
    if (n == 0)
        lw__lua_bad(r, "above or below is missing; the level is wanted");
    if (n == 2)
        lw__lua_bad(r, "both above and below are stated; one level is wanted");
}

int lw__lua_rig_comparator(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    comparator p = {.def = lw_comparator_default()};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "comparator", &p.def.name);
    LW__LUA_FIELDS(&r, comparator_fields, 1, &p);
    read_levels(&r, &p.def);
    if (lw__lua_push_field(&r, "start") != LUA_TNIL)
        p.def.start = (int)lw__lua_whole(&r, "start", -1, 0, 1);
    p.def.origin = r.origin;
    p.def.edge = (lw_edge)p.edge;
    return lw__lua_rig_added(&r, lw_rig_add_comparator(rig->it, &p.def, &err), &err);
}

// ---- trips

static const lw__lua_field trip_fields[] = {
    REQUIRED(lw_trip_def, by, "by", FIELD_TEXT, NULL),
    REQUIRED(lw_trip_def, output, "output", FIELD_TEXT, NULL),
    REQUIRED(lw_trip_def, to, "to", FIELD_NUMBER, NULL),
    OTHER("lasts"),
};

static const char *const ends[] = {"until clear", "until latch", "", "until end"};

// Words, or a time.
static void read_until(const lw__lua_reader *r, lw_trip_def *def)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "lasts") == LUA_TNIL)
        lw__lua_bad(
            r, "lasts is missing; \"until clear\", \"until latch\", \"until end\" or a time is "
               "wanted");
    const char *text = lua_type(L, -1) == LUA_TSTRING ? lua_tostring(L, -1) : "";
    for (int k = 0; k < (int)(sizeof ends / sizeof *ends); k++)
        if (k != LW_TRIP_TIME && strcmp(text, ends[k]) == 0) {
            def->until = (lw_trip_until)k;
            return;
        }
    if (text[0] != 0 && strchr("0123456789.+-", text[0]) == NULL)
        lw__lua_bad(r,
                    "lasts is \"%s\"; \"until clear\", \"until latch\", \"until end\" or a time is "
                    "wanted",
                    text);
    def->until = LW_TRIP_TIME;
    def->time = lw__lua_number(r, "lasts", -1, "s");
}

int lw__lua_rig_trip(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw_trip_def def = lw_trip_default();
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "trip", &def.name);
    LW__LUA_FIELDS(&r, trip_fields, 1, &def);
    read_until(&r, &def);
    def.origin = r.origin;
    return lw__lua_rig_added(&r, lw_rig_add_trip(rig->it, &def, &err), &err);
}
