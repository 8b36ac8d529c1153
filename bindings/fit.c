// lw.plant.fit: a plant from a measured step response.

#include "fields.h"
#include "module.h"

#include <latewood/fit.h>
#include <math.h>

typedef struct request {
    int kind;
    double input, at;
} request;

static const char *const kinds[] = {
#define WORDS(name, words) words,
    LW_FIT_LIST(WORDS)
#undef WORDS
        NULL};

static const lw__lua_field fields[] = {
    {"kind", FIELD_CHOICE, NULL, offsetof(request, kind), 1, kinds},
    REQUIRED(request, input, "input", FIELD_NUMBER, NULL),
    OPTIONAL(request, at, "at", FIELD_NUMBER, "s"),
    OTHER("measured"),
};

static void push_numbers(lua_State *L, int n, const double *v)
{
    lua_createtable(L, n, 0);
    for (int i = 0; i < n; i++) {
        lua_pushnumber(L, v[i]);
        lua_rawseti(L, -2, i + 1);
    }
}

// What a plant of the kind has, by name.
static void push_parameters(lua_State *L, const double *v)
{
    lua_newtable(L);
    for (int k = 0; k < LW_N_FIT_PARAMETERS; k++) {
        if (isnan(v[k]))
            continue;
        lua_pushnumber(L, v[k]);
        lua_setfield(L, -2, lw_fit_parameter_words((lw_fit_parameter)k));
    }
}

static void set_number(lua_State *L, const char *name, double value)
{
    lua_pushnumber(L, value);
    lua_setfield(L, -2, name);
}

static void push_result(lua_State *L, const lw_fit *fit, const request *p,
                        const lw__lua_list rows[2])
{
    int n = rows[0].n;
    double *model = lw__lua_room(L, (size_t)n, 2 * sizeof *model), *residual = model + n;
    lw_fit_response(fit, p->input, p->at, n, rows[0].v, model);
    for (int i = 0; i < n; i++)
        residual[i] = rows[1].v[i] - model[i];
    lua_createtable(L, 0, 12);
    push_parameters(L, fit->value);
    lua_setfield(L, -2, "parameters");
    push_parameters(L, fit->error);
    lua_setfield(L, -2, "errors");
    push_numbers(L, n, model);
    lua_setfield(L, -2, "model");
    push_numbers(L, n, residual);
    lua_setfield(L, -2, "residual");
    lua_pushstring(L, lw_fit_words(fit->kind));
    lua_setfield(L, -2, "kind");
    set_number(L, "n", n);
    set_number(L, "fit", fit->fit);
    set_number(L, "r_squared", fit->r_squared);
    set_number(L, "residual_rms", fit->residual_rms);
    set_number(L, "input", p->input);
    set_number(L, "at", p->at);
}

static void read_rows(const lw__lua_reader *r, lw__lua_list rows[2])
{
    static const char *const names[] = {"time", "value"};
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "measured") != LUA_TTABLE)
        lw__lua_bad(r, "measured is missing; what lw.measured gives is wanted");
    lw__lua_reader inner = *r;
    inner.table = lua_gettop(L);
    inner.subject = lua_pushfstring(L, "%s: measured", r->subject);
    for (int c = 0; c < 2; c++) {
        if (lw__lua_push_field(&inner, names[c]) == LUA_TNIL)
            lw__lua_bad(&inner, "%s is missing", names[c]);
        rows[c] = lw__lua_numbers(&inner, names[c], -1, NULL);
    }
    if (rows[0].n != rows[1].n)
        lw__lua_bad(&inner, "time has %d numbers and value %d; one length is wanted", rows[0].n,
                    rows[1].n);
}

// lw.plant.fit { measured = , kind = , input = , at = 0 }: a table; nil, message and status where
// the data do not determine the plant.
int lw__lua_plant_fit(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    request p = {0};
    lw_fit fit;
    lw__lua_list rows[2];
    lw__lua_reader r = lw__lua_read(L, 1, "plant fit");
    LW__LUA_FIELDS(&r, fields, 0, &p);
    read_rows(&r, rows);
    luaL_checkstack(L, 16, NULL);
    lw_status status = lw_fit_step((lw_fit_kind)p.kind, rows[0].n, rows[0].v, rows[1].v, p.input,
                                   p.at, &fit, &err);
    lw__lua_plant *box = lw__lua_new(L, LW__LUA_PLANT, sizeof *box, 0);
    int plant = lua_gettop(L);
    if (status == LW_OK)
        status = lw_fit_plant(&fit, &box->it, &err);
    if (status == LW_ERR_FIT) {
        lua_pushnil(L);
        lua_pushstring(L, err.text);
        lua_pushstring(L, lw_status_name(status));
        return 3;
    }
    if (status != LW_OK)
        return lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    push_result(L, &fit, &p, rows);
    lua_pushvalue(L, plant);
    lua_setfield(L, -2, "plant");
    lw__lua_push_field(&r, "measured");
    lua_setfield(L, -2, "measured");
    return 1;
}
