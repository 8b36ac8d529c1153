// Plants made of plants: series, parallel, feedback, and connection by names.

#include "fields.h"
#include "module.h"

#include <math.h>
#include <string.h>

static const lw_plant *plant_at(lua_State *L, int index, const char *field)
{
    lw__lua_plant *box = lw__lua_check(L, index, LW__LUA_PLANT, field, "a plant");
    if (box->it == NULL)
        lw__lua_fail(L, "%s is a plant that is closed", field);
    return box->it;
}

static lw__lua_plant *new_plant(lua_State *L)
{
    return lw__lua_new(L, LW__LUA_PLANT, sizeof(lw__lua_plant), 0);
}

static void must(lua_State *L, const char *what, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        lw__lua_fail(L, "%s: %s", what, lua_pushstring(L, err->text));
}

// ---- one input and one output

int lw__lua_plant_series(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    int n = lua_gettop(L);
    if (n < 2)
        lw__lua_fail(L, "plant series: two plants or more are wanted");
    for (int i = 1; i <= n; i++)
        plant_at(L, i, lua_pushfstring(L, "plant series: argument %d", i));
    for (int i = 2; i <= n; i++) {
        const lw_plant *chain = plant_at(L, 1, "plant series");
        const lw_plant *next = plant_at(L, i, "plant series");
        lw__lua_plant *box = new_plant(L);
        must(L, "plant series", lw_plant_series(chain, next, &box->it, &err), &err);
        lua_replace(L, 1);
    }
    lua_settop(L, 1);
    return 1;
}

static double sign_at(lua_State *L, int index, const char *what, double fallback)
{
    if (lua_isnoneornil(L, index))
        return fallback;
    double sign = lua_type(L, index) == LUA_TNUMBER ? lua_tonumber(L, index) : 0;
    if (sign != 1 && sign != -1) {
        const char *shown = lw__lua_shown(L, index);
        lw__lua_fail(L, "%s: sign is %s; permitted are 1 and -1", what, shown);
    }
    return sign;
}

int lw__lua_plant_parallel(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lua_settop(L, 3);
    const lw_plant *a = plant_at(L, 1, "plant parallel: argument 1");
    const lw_plant *b = plant_at(L, 2, "plant parallel: argument 2");
    double sign = sign_at(L, 3, "plant parallel", 1);
    lw__lua_plant *box = new_plant(L);
    must(L, "plant parallel", lw_plant_parallel(a, b, sign, &box->it, &err), &err);
    return 1;
}

// Without a second plant the output is fed back as it is.
int lw__lua_plant_feedback(lua_State *L)
{
    static const double one = 1;
    lw_error err = {LW_OK, ""};
    lua_settop(L, 3);
    const lw_plant *a = plant_at(L, 1, "plant feedback: argument 1");
    double sign = sign_at(L, 3, "plant feedback", -1);
    if (lua_isnil(L, 2)) {
        lw__lua_plant *unity = new_plant(L);
        lua_replace(L, 2);
        must(L, "plant feedback",
             lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &one, NULL, NULL, NULL, NULL,
                                  &unity->it, &err),
             &err);
    }
    const lw_plant *b = plant_at(L, 2, "plant feedback: argument 2");
    lw__lua_plant *box = new_plant(L);
    must(L, "plant feedback", lw_plant_feedback(a, b, sign, &box->it, &err), &err);
    return 1;
}

// ---- by names

// Elements 1 and 2 of the entry on top of the stack as texts, kept on the stack below it.
static void pair_of_texts(lw__lua_reader *entry, const char *names[2])
{
    lua_State *L = entry->L;
    for (int i = 0; i < 2; i++) {
        const char *field = lua_pushfstring(L, "element %d", i + 1);
        lua_rawgeti(L, entry->table, i + 1);
        names[i] = lw__lua_field_text(entry, field, -1);
    }
}

// Open entry i of the list at `list`: a table of two elements and the fields given.
static lw__lua_reader open_entry(const lw__lua_reader *r, const char *field, int list, int i)
{
    lua_State *L = r->L;
    lw__lua_reader entry = *r;
    luaL_checkstack(L, 16, "too many parts");
    entry.subject = lua_pushfstring(L, "%s: %s[%d]", r->subject, field, i + 1);
    if (lua_rawgeti(L, list, i + 1) != LUA_TTABLE)
        lw__lua_bad_type(&entry, "it", -1, "a list of two elements");
    entry.table = lua_gettop(L);
    return entry;
}

static int open_list(const lw__lua_reader *r, const char *field, int required, int *n)
{
    *n = 0;
    if (lw__lua_push_field(r, field) == LUA_TNIL) {
        if (required)
            lw__lua_bad(r, "%s is missing", field);
        return 0;
    }
    int list = lua_gettop(r->L);
    *n = lw__lua_length(r, field, list, "a list");
    return list;
}

static lw_part *read_parts(const lw__lua_reader *r, int *n)
{
    lua_State *L = r->L;
    int list = open_list(r, "parts", 1, n);
    lw_part *parts = lw__lua_room(L, (size_t)*n, sizeof *parts);
    for (int i = 0; i < *n; i++) {
        lw__lua_reader entry = open_entry(r, "parts", list, i);
        lw__lua_fields(&entry, 0, NULL, 2, 0, NULL, NULL);
        lua_rawgeti(L, entry.table, 1);
        parts[i].name = lw__lua_field_text(&entry, "its name", -1);
        lua_rawgeti(L, entry.table, 2);
        int second = lua_gettop(L);
        parts[i].plant = plant_at(L, second, lua_pushfstring(L, "%s: element 2", entry.subject));
    }
    return parts;
}

static const lw__lua_field link_fields[] = {OPTIONAL(lw_link, sign, "sign", FIELD_NUMBER, "1")};

static lw_link *read_links(const lw__lua_reader *r, int *n)
{
    int list = open_list(r, "links", 0, n);
    lw_link *links = lw__lua_room(r->L, (size_t)*n, sizeof *links);
    for (int i = 0; i < *n; i++) {
        const char *names[2];
        lw__lua_reader entry = open_entry(r, "links", list, i);
        links[i].sign = 1;
        LW__LUA_FIELDS(&entry, link_fields, 2, &links[i]);
        pair_of_texts(&entry, names);
        links[i].from = names[0];
        links[i].to = names[1];
    }
    return links;
}

static lw_port *read_ports(const lw__lua_reader *r, const char *field, int *n)
{
    int list = open_list(r, field, 1, n);
    lw_port *ports = lw__lua_room(r->L, (size_t)*n, sizeof *ports);
    for (int i = 0; i < *n; i++) {
        const char *names[2];
        lw__lua_reader entry = open_entry(r, field, list, i);
        lw__lua_fields(&entry, 0, NULL, 2, 0, NULL, NULL);
        pair_of_texts(&entry, names);
        ports[i] = (lw_port){names[0], names[1]};
    }
    return ports;
}

static const lw__lua_field connect_fields[] = {OTHER("parts"), OTHER("links"), OTHER("inputs"),
                                               OTHER("outputs")};

int lw__lua_plant_connect(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    int n_parts, n_links, n_inputs, n_outputs;
    lw__lua_reader r = lw__lua_read(L, 1, "plant connect");
    LW__LUA_FIELDS(&r, connect_fields, 0, NULL);
    lw_part *parts = read_parts(&r, &n_parts);
    lw_link *links = read_links(&r, &n_links);
    lw_port *inputs = read_ports(&r, "inputs", &n_inputs);
    lw_port *outputs = read_ports(&r, "outputs", &n_outputs);
    lw__lua_plant *box = new_plant(L);
    must(L, "plant connect",
         lw_plant_connect(n_parts, parts, n_links, links, n_inputs, inputs, n_outputs, outputs,
                          &box->it, &err),
         &err);
    return 1;
}
