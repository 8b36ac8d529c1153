// Plants that are linear between switchings: modes, switchings, and the ready ones.
//
// A condition is a table of names and factors with one level: { gate = 1, above = 0.5 } holds where
// the sum of the named states and inputs, each times its factor, is at or above the level.

#include "fields.h"
#include "module.h"
#include "plant.h"

#include <latewood/modes.h>

#include <math.h>
#include <string.h>

// ---- what is being read

typedef struct modes {
    lw__lua_texts states, inputs, outputs;
    lw__lua_list start;
} modes;

static const lw__lua_field modes_fields[] = {
    REQUIRED(modes, states, "states", FIELD_TEXTS, NULL),
    OPTIONAL(modes, inputs, "inputs", FIELD_TEXTS, NULL),
    OPTIONAL(modes, outputs, "outputs", FIELD_TEXTS, NULL),
    OPTIONAL(modes, start, "start", FIELD_LIST, NULL),
    OTHER("modes"),
    OTHER("switchings"),
    OTHER("delay"),
};

typedef struct making {
    const lw__lua_reader *r;
    const modes *p;
    int n_x, n_u, n_y;
} making;

static lw__lua_plant *new_plant(lua_State *L)
{
    return lw__lua_new(L, LW__LUA_PLANT, sizeof(lw__lua_plant), 0);
}

static double *zeros(const making *m, int n)
{
    double *v = lw__lua_room(m->r->L, (size_t)(n > 0 ? n : 1), sizeof *v);
    memset(v, 0, sizeof *v * (size_t)(n > 0 ? n : 1));
    return v;
}

static int place_of(const lw__lua_texts *names, const char *name)
{
    for (int i = 0; i < names->n; i++)
        if (strcmp(names->v[i], name) == 0)
            return i;
    return -1;
}

// A reader of the table on top of the stack; `what` becomes part of the subject.
static lw__lua_reader inner_reader(const making *m, const char *what)
{
    lw__lua_reader inner = *m->r;
    inner.table = lua_gettop(m->r->L);
    inner.subject = lua_pushfstring(m->r->L, "%s: %s", m->r->subject, what);
    return inner;
}

// ---- modes

typedef struct mode_matrices {
    lw__lua_matrix a, b, c, d;
    lw__lua_list constant, offset;
} mode_matrices;

static const lw__lua_field mode_fields[] = {
    REQUIRED(mode_matrices, a, "A", FIELD_MATRIX, NULL),
    OPTIONAL(mode_matrices, b, "B", FIELD_MATRIX, NULL),
    OPTIONAL(mode_matrices, c, "C", FIELD_MATRIX, NULL),
    OPTIONAL(mode_matrices, d, "D", FIELD_MATRIX, NULL),
    OPTIONAL(mode_matrices, constant, "constant", FIELD_LIST, NULL),
    OPTIONAL(mode_matrices, offset, "offset", FIELD_LIST, NULL),
};

static const double *matrix(const lw__lua_reader *r, const char *field, const lw__lua_matrix *m,
                            int n_rows, int n_columns)
{
    if (!m->stated)
        return NULL;
    if (m->n_rows != n_rows || (n_rows > 0 && m->n_columns != n_columns))
        lw__lua_bad(r, "%s is %d x %d; %d x %d is wanted", field, m->n_rows, m->n_columns, n_rows,
                    n_columns);
    return m->v;
}

static const double *list(const lw__lua_reader *r, const char *field, const lw__lua_list *l, int n)
{
    if (l->v != NULL && l->n != n)
        lw__lua_bad(r, "%s has %d numbers; %d are wanted", field, l->n, n);
    return l->v;
}

// Outputs that are not stated are the states.
static const double *identity(const making *m)
{
    double *c = zeros(m, m->n_y * m->n_x);
    for (int i = 0; i < m->n_y; i++)
        c[i * m->n_x + i] = 1;
    return c;
}

static lw_mode read_mode(const making *m, int i)
{
    lua_State *L = m->r->L;
    mode_matrices p = {0};
    const char *field = lua_pushfstring(L, "modes[%d]", i + 1);
    lua_insert(L, -2);
    if (lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(m->r, field, -1, "{ name, A, B, constant, C, D, offset }");
    lw__lua_reader r = inner_reader(m, field);
    lua_rawgeti(L, r.table, 1);
    lw_mode mode = {.name = lw__lua_field_text(&r, "its name", lua_gettop(L))};
    LW__LUA_FIELDS(&r, mode_fields, 1, &p);
    mode.a = matrix(&r, "A", &p.a, m->n_x, m->n_x);
    mode.b = matrix(&r, "B", &p.b, m->n_x, m->n_u);
    mode.c = matrix(&r, "C", &p.c, m->n_y, m->n_x);
    mode.d = matrix(&r, "D", &p.d, m->n_y, m->n_u);
    mode.constant = list(&r, "constant", &p.constant, m->n_x);
    mode.offset = list(&r, "offset", &p.offset, m->n_y);
    if (mode.c == NULL && m->p->outputs.v != NULL)
        lw__lua_bad(&r, "C is missing; outputs are stated");
    if (mode.c == NULL)
        mode.c = identity(m);
    return mode;
}

// ---- conditions and resets

static double factor(const lw__lua_reader *r, const char *name)
{
    return lw__lua_number(r, name, lua_gettop(r->L), NULL);
}

// Every name of states and inputs, and `more`, for messages on others.
static void refuse_unknown(const making *m, const lw__lua_reader *r, int with_inputs, int n_more,
                           const char *const *more)
{
    const char *known[LW_PLANT_MAX_STATES + LW_PLANT_MAX_PORTS + 4];
    int n = 0;
    for (int i = 0; i < m->n_x; i++)
        known[n++] = m->p->states.v[i];
    for (int i = 0; with_inputs && i < m->n_u; i++)
        known[n++] = m->p->inputs.v[i];
    for (int i = 0; i < n_more; i++)
        known[n++] = more[i];
    lw__lua_refuse_unknown(r, "unknown name", 0, n, known);
}

// The table on top of the stack: sum of factors times names, at or above (below) a level.
static lw_condition read_condition(const making *m, const lw__lua_reader *outer, const char *field)
{
    static const char *const levels[] = {"above", "below"};
    lua_State *L = m->r->L;
    if (lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(outer, field, -1, "a table such as { current = 1, below = 0 }");
    lw__lua_reader r = *outer;
    r.table = lua_gettop(L);
    r.subject = lua_pushfstring(L, "%s: %s", outer->subject, field);
    refuse_unknown(m, &r, 1, 2, levels);
    double *x = zeros(m, m->n_x), *u = zeros(m, m->n_u), sign = 0, level = 0;
    for (int k = 0; k < 2; k++)
        if (lw__lua_push_field(&r, levels[k]) != LUA_TNIL) {
            if (sign != 0)
                lw__lua_bad(&r, "both above and below are stated; one level is wanted");
            sign = k == 0 ? 1 : -1;
            level = factor(&r, levels[k]);
        }
    if (sign == 0)
        lw__lua_bad(&r, "above or below is missing; the level is wanted");
    for (int i = 0; i < m->n_x; i++)
        if (lw__lua_push_field(&r, m->p->states.v[i]) != LUA_TNIL)
            x[i] = sign * factor(&r, m->p->states.v[i]);
    for (int i = 0; i < m->n_u; i++)
        if (lw__lua_push_field(&r, m->p->inputs.v[i]) != LUA_TNIL)
            u[i] = sign * factor(&r, m->p->inputs.v[i]);
    return (lw_condition){x, u, -sign * level};
}

// A state after the jump: a number, or { state = factor, ..., offset = number }.
static void read_jump(const making *m, const lw__lua_reader *r, int state, double *reset,
                      double *offset)
{
    static const char *const more[] = {"offset"};
    lua_State *L = m->r->L;
    const char *name = m->p->states.v[state];
    reset[state * m->n_x + state] = 0;
    if (lua_type(L, -1) != LUA_TTABLE) {
        offset[state] = factor(r, name);
        return;
    }
    lw__lua_reader inner = *r;
    inner.table = lua_gettop(L);
    inner.subject = lua_pushfstring(L, "%s: %s", r->subject, name);
    refuse_unknown(m, &inner, 0, 1, more);
    for (int i = 0; i < m->n_x; i++)
        if (lw__lua_push_field(&inner, m->p->states.v[i]) != LUA_TNIL)
            reset[state * m->n_x + i] = factor(&inner, m->p->states.v[i]);
    if (lw__lua_push_field(&inner, "offset") != LUA_TNIL)
        offset[state] = factor(&inner, "offset");
}

static void read_sets(const making *m, const lw__lua_reader *outer, lw_switching *w)
{
    lua_State *L = m->r->L;
    if (lw__lua_push_field(outer, "sets") == LUA_TNIL)
        return;
    if (lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(outer, "sets", -1, "a table such as { speed = { speed = -0.8 } }");
    lw__lua_reader r = *outer;
    r.table = lua_gettop(L);
    r.subject = lua_pushfstring(L, "%s: sets", outer->subject);
    refuse_unknown(m, &r, 0, 0, NULL);
    double *reset = zeros(m, m->n_x * m->n_x), *offset = zeros(m, m->n_x);
    for (int i = 0; i < m->n_x; i++)
        reset[i * m->n_x + i] = 1;
    for (int i = 0; i < m->n_x; i++)
        if (lw__lua_push_field(&r, m->p->states.v[i]) != LUA_TNIL)
            read_jump(m, &r, i, reset, offset);
    w->reset = reset;
    w->reset_offset = offset;
}

typedef struct switching_fields_of {
    const char *from, *to;
} switching_names;

static const lw__lua_field switching_fields[] = {
    OPTIONAL(switching_names, from, "from", FIELD_TEXT, NULL),
    REQUIRED(switching_names, to, "to", FIELD_TEXT, NULL),
    OTHER("when"),
    OTHER("only_if"),
    OTHER("sets"),
};

static lw_switching read_switching(const making *m, int i)
{
    lua_State *L = m->r->L;
    switching_names names = {0};
    const char *field = lua_pushfstring(L, "switchings[%d]", i + 1);
    lua_insert(L, -2);
    if (lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(m->r, field, -1, "{ from, to, when, only_if, sets }");
    lw__lua_reader r = inner_reader(m, field);
    LW__LUA_FIELDS(&r, switching_fields, 0, &names);
    lw_switching w = {.from = names.from, .to = names.to};
    if (lw__lua_push_field(&r, "when") == LUA_TNIL)
        lw__lua_bad(&r, "when is missing; a condition is wanted");
    w.when = read_condition(m, &r, "when");
    if (lw__lua_push_field(&r, "only_if") != LUA_TNIL) {
        w.only_if = read_condition(m, &r, "only_if");
        w.conditional = 1;
    }
    read_sets(m, &r, &w);
    return w;
}

// ---- the plant

static int length_of(const making *m, const char *field, int most, const char *wanted)
{
    int n = lw__lua_length(m->r, field, lua_gettop(m->r->L), wanted);
    if (n > most)
        lw__lua_bad(m->r, "%s has %d elements; permitted up to %d", field, n, most);
    return n;
}

static void check_names(const making *m)
{
    static const char *const words[] = {"above", "below", "offset"};
    for (int k = 0; k < 3; k++)
        if (place_of(&m->p->states, words[k]) >= 0 || place_of(&m->p->inputs, words[k]) >= 0)
            lw__lua_bad(m->r, "the name %s stands for a level in conditions; another is wanted",
                        words[k]);
    if (m->n_x < 1 || m->n_x > LW_PLANT_MAX_STATES)
        lw__lua_bad(m->r, "states has %d names; permitted 1 to %d", m->n_x, LW_PLANT_MAX_STATES);
    if (m->n_u > LW_PLANT_MAX_PORTS)
        lw__lua_bad(m->r, "inputs has %d names; permitted up to %d", m->n_u, LW_PLANT_MAX_PORTS);
    for (int i = 0; i < m->n_u; i++)
        if (place_of(&m->p->states, m->p->inputs.v[i]) >= 0)
            lw__lua_bad(m->r, "\"%s\" is an input and a state", m->p->inputs.v[i]);
    if (m->p->start.v != NULL && m->p->start.n != m->n_x)
        lw__lua_bad(m->r, "start has %d numbers; the plant has %d states", m->p->start.n, m->n_x);
}

// What is read stays on the stack: it holds names and numbers.
static void read_modes(const making *m, lw_modes_def *def, lw_mode *into)
{
    lua_State *L = m->r->L;
    if (lw__lua_push_field(m->r, "modes") == LUA_TNIL)
        lw__lua_bad(m->r, "modes is missing; a list of { name, A, ... } is wanted");
    int at = lua_gettop(L);
    def->n_modes = length_of(m, "modes", LW_MODES_MAX, "a list of { name, A, ... }");
    for (int i = 0; i < def->n_modes; i++) {
        luaL_checkstack(L, 64, "too many modes");
        lua_rawgeti(L, at, i + 1);
        into[i] = read_mode(m, i);
    }
    def->modes = into;
}

static void read_switchings(const making *m, lw_modes_def *def, lw_switching *into)
{
    lua_State *L = m->r->L;
    if (lw__lua_push_field(m->r, "switchings") == LUA_TNIL)
        return;
    int at = lua_gettop(L);
    def->n_switchings =
        length_of(m, "switchings", LW_MODES_MAX_SWITCHINGS, "a list of { from, to, when, ... }");
    for (int i = 0; i < def->n_switchings; i++) {
        luaL_checkstack(L, 64 + 4 * LW_PLANT_MAX_STATES, "too many switchings");
        lua_rawgeti(L, at, i + 1);
        into[i] = read_switching(m, i);
    }
    def->switchings = into;
}

int lw__lua_plant_modes(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    modes p = {0};
    lw_mode list_of_modes[LW_MODES_MAX];
    lw_switching list_of_switchings[LW_MODES_MAX_SWITCHINGS];
    lw__lua_reader r = lw__lua_read(L, 1, "plant modes");
    LW__LUA_FIELDS(&r, modes_fields, 0, &p);
    making m = {&r, &p, p.states.n, p.inputs.n, p.outputs.v != NULL ? p.outputs.n : p.states.n};
    check_names(&m);
    lw_modes_def def = {.n_x = m.n_x,
                        .n_u = m.n_u,
                        .n_y = m.n_y,
                        .state_names = p.states.v,
                        .input_names = p.inputs.v,
                        .output_names = p.outputs.v != NULL ? p.outputs.v : p.states.v,
                        .start = p.start.v};
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    read_modes(&m, &def, list_of_modes);
    read_switchings(&m, &def, list_of_switchings);
    if (lw_plant_modes(&def, &box->it, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    lw__lua_plant_delays(&r, box);
    lua_pushvalue(L, index);
    return 1;
}

// ---- ready ones

#define CONVERTER(member, unit) OPTIONAL(lw_switched_converter, member, #member, FIELD_NUMBER, unit)

static const lw__lua_field converter_fields[] = {
    REQUIRED(lw_switched_converter, inductance, "inductance", FIELD_NUMBER, "H"),
    REQUIRED(lw_switched_converter, capacitance, "capacitance", FIELD_NUMBER, "F"),
    CONVERTER(load_resistance, "ohm"),
    CONVERTER(winding_resistance, "ohm"),
    CONVERTER(switch_resistance, "ohm"),
    CONVERTER(diode_drop, "V"),
    OTHER("start"),
    OTHER("delay"),
};

static void take_start(const lw__lua_reader *r, lw__lua_plant *box)
{
    lw_error err = {LW_OK, ""};
    lw_plant *started = NULL;
    if (lw__lua_push_field(r, "start") == LUA_TNIL)
        return;
    lw__lua_list start = lw__lua_numbers(r, "start", lua_gettop(r->L), NULL);
    if (lw_plant_started(box->it, start.n, start.v, &started, &err) != LW_OK)
        lw__lua_bad(r, "%s", lua_pushstring(r->L, err.text));
    lw_plant_free(box->it);
    box->it = started;
}

static int converter(lua_State *L, const char *what,
                     lw_status (*make)(const lw_switched_converter *p, lw_plant **out,
                                       lw_error *err))
{
    lw_error err = {LW_OK, ""};
    lw_switched_converter p = lw_switched_converter_default();
    lw__lua_reader r = lw__lua_read(L, 1, what);
    LW__LUA_FIELDS(&r, converter_fields, 0, &p);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    if (make(&p, &box->it, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    take_start(&r, box);
    lw__lua_plant_delays(&r, box);
    lua_pushvalue(L, index);
    return 1;
}

int lw__lua_plant_buck_switched(lua_State *L)
{
    return converter(L, "plant buck_switched", lw_plant_buck_switched);
}

int lw__lua_plant_boost_switched(lua_State *L)
{
    return converter(L, "plant boost_switched", lw_plant_boost_switched);
}

static const lw__lua_field stop_fields[] = {
    REQUIRED(lw_end_stop, position, "position", FIELD_TEXT, NULL),
    REQUIRED(lw_end_stop, velocity, "velocity", FIELD_TEXT, NULL),
    OPTIONAL(lw_end_stop, lo, "low", FIELD_NUMBER, NULL),
    OPTIONAL(lw_end_stop, hi, "high", FIELD_NUMBER, NULL),
    OPTIONAL(lw_end_stop, restitution, "restitution", FIELD_NUMBER, "1"),
    OPTIONAL(lw_end_stop, rest_below, "rest_below", FIELD_NUMBER, NULL),
};

int lw__lua_plant_end_stop(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw_end_stop p = {.lo = -(double)INFINITY, .hi = (double)INFINITY};
    lw__lua_reader r = lw__lua_read(L, 1, "plant end_stop");
    LW__LUA_FIELDS(&r, stop_fields, 1, &p);
    lua_rawgeti(L, r.table, 1);
    lw__lua_plant *from = luaL_testudata(L, -1, LW__LUA_PLANT);
    if (from == NULL || from->it == NULL)
        lw__lua_bad_type(&r, "its first element", -1, "a plant");
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    if (lw_plant_end_stop(from->it, &p, &box->it, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    lua_pushvalue(L, index);
    return 1;
}
