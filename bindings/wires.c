// The law of a loop or task, and the signals on its inputs and outputs.

#include "wires.h"

#include "rig.h"

#include <string.h>

// ---- inputs

// The input `base`number, counted from 1, or `base` alone where it is the only one.
static const char *numbered(lua_State *L, const lw_law_def *law, const char *base, int number)
{
    const char *name = lua_pushfstring(L, "%s%d", base, number);
    for (int i = 0; i < law->n_in; i++)
        if (strcmp(law->in_names[i], name) == 0 ||
            (number == 1 && strcmp(law->in_names[i], base) == 0))
            return law->in_names[i];
    return NULL;
}

// A signal's name or a number, on top of the stack.
static lw_wire wire(const lw__lua_reader *r, const char *port, const char *field)
{
    if (lua_type(r->L, -1) == LUA_TSTRING)
        return (lw_wire){port, lw__lua_field_text(r, field, -1), 0};
    if (lua_type(r->L, -1) != LUA_TNUMBER)
        lw__lua_bad_type(r, field, -1, "a signal or a number");
    return (lw_wire){port, NULL, lw__lua_number(r, field, -1, NULL)};
}

// A list under `base` serves base1, base2, ...
static void list_of_wires(const lw__lua_reader *r, const lw_law_def *law, const char *base,
                          lw_wire *wires, int *n)
{
    lua_State *L = r->L;
    int list = lua_gettop(L);
    int length = lw__lua_length(r, base, list, "a list of signals");
    luaL_checkstack(L, 4 * LW_LAW_MAX_PORTS, NULL);
    for (int i = 0; i < length; i++) {
        const char *port = numbered(L, law, base, i + 1);
        if (port == NULL || *n == LW_LAW_MAX_PORTS)
            lw__lua_bad(r, "%s has %d signals; the law takes %d", base, length, i);
        lua_rawgeti(L, list, i + 1);
        wires[(*n)++] = wire(r, port, base);
    }
}

lw_wire *lw__lua_inputs(const lw__lua_reader *r, const lw_law_def *law, int n_names,
                        const char *const *names, int *n)
{
    lua_State *L = r->L;
    lw_wire *wires = lw__lua_room(L, LW_LAW_MAX_PORTS, sizeof *wires);
    *n = 0;
    luaL_checkstack(L, LW__LUA_INPUT_NAMES + 8, NULL);
    for (int i = 0; i < n_names; i++) {
        int type = lw__lua_push_field(r, names[i]);
        if (type == LUA_TTABLE)
            list_of_wires(r, law, names[i], wires, n);
        else if (type != LUA_TNIL && *n < LW_LAW_MAX_PORTS)
            wires[(*n)++] = wire(r, names[i], names[i]);
    }
    return wires;
}

// Names under which inputs may be stated: those of the law, and the common part of numbered ones.
int lw__lua_input_names(const lw__lua_reader *r, const lw_law_def *law, int n_fields,
                        const lw__lua_field *fields, const char **names)
{
    static const char *const bases[] = {"wanted", "measured"};
    int n = 0;
    for (int i = 0; i < law->n_in; i++) {
        names[n++] = law->in_names[i];
        for (int f = 0; f < n_fields; f++)
            if (strcmp(law->in_names[i], fields[f].name) == 0)
                lw__lua_bad(r,
                            "the law has an input \"%s\", which is a field of a loop; another "
                            "name is wanted",
                            law->in_names[i]);
    }
    for (int b = 0; b < 2; b++)
        if (numbered(r->L, law, bases[b], 2) != NULL)
            names[n++] = bases[b];
    return n;
}

// ---- outputs

lw_wire *lw__lua_outputs(const lw__lua_reader *r, const lw_law_def *law, int *n)
{
    lua_State *L = r->L;
    lw_wire *wires = lw__lua_room(L, LW_LAW_MAX_PORTS, sizeof *wires);
    int type = lw__lua_push_field(r, "output");
    if (type == LUA_TNIL)
        lw__lua_bad(r, "output is missing; the dac or value that is written is wanted");
    *n = 1;
    if (type != LUA_TTABLE) {
        wires[0] = (lw_wire){law->out_names[0], lw__lua_field_text(r, "output", -1), 0};
        return wires;
    }
    int list = lua_gettop(L);
    *n = lw__lua_length(r, "output", list, "a list of dacs and values");
    if (*n > law->n_out)
        lw__lua_bad(r, "output has %d names; the law has %d outputs", *n, law->n_out);
    luaL_checkstack(L, *n + 8, NULL);
    for (int i = 0; i < *n; i++) {
        lua_rawgeti(L, list, i + 1);
        wires[i] = (lw_wire){law->out_names[i], lw__lua_field_text(r, "output", -1), 0};
    }
    return wires;
}

// ---- the law

lw__lua_law *lw__lua_law_field(const lw__lua_reader *r)
{
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "law") == LUA_TNIL)
        lw__lua_bad(r, "law is missing");
    lw__lua_law *law = luaL_testudata(L, -1, LW__LUA_LAW);
    if (law == NULL)
        lw__lua_bad_type(r, "law", -1, "a law");
    if (law->it == NULL)
        lw__lua_bad(r, "law is a law that is closed");
    if (law->call != NULL)
        lw__lua_rig_keep(L, -1);
    return law;
}
