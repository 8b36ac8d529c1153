// Plants that are an ordinary differential equation written in Lua.
//
// Parameters of every function are matched by name to states, modes, inputs and t. The flow returns
// the derivatives in the order of the states; each output that is no state has a function of its
// own. An event has a function whose passing through zero is found, and others that return what
// states and modes are after it.
//
// Workload: several calls a step of the integrator: one push a parameter, one lua_pcall, one read a
// result; no tables. Functions of lw.math note what they switch on, so that the engine gets the
// switchings of the flow from the call it has just made.
//
// Invariants
// 1. The thread's stack holds the flow, then the functions of outputs and of events in order.
// 2. A flow notes as many numbers in each call; where it does not, that call has no switchings.

#include "fields.h"
#include "module.h"
#include "notes.h"
#include "plant.h"

#include <stdint.h>
#include <stdio.h>
#include <string.h>

#define MOST_PARAMETERS (LW_PLANT_MAX_STATES + LW_FLOW_MAX_MODES + LW_PLANT_MAX_PORTS + 1)
#define MOST_EVENTS 16
#define MOST_ROW (LW_PLANT_MAX_STATES + LW_FLOW_MAX_MODES + LW_FLOW_MAX_SWITCHES)

typedef enum slot_kind { SLOT_STATE, SLOT_INPUT, SLOT_TIME } slot_kind;

typedef struct slot {
    slot_kind kind;
    int index;
} slot;

// A function and what it is given.
typedef struct function {
    int place; // on the thread's stack
    int n_slots;
    slot slots[MOST_PARAMETERS];
    int state; // an output that is a state: no function, this state; -1 otherwise
} function;

typedef struct event {
    function when, on[2]; // on: falling, rising; place 0: nothing happens
} event;

typedef struct own {
    lw__lua_call call; // first
    lw__lua_notes *notes;
    int n_x, n_u, n_y, n_modes, n_noted, n_events;
    const char *state_names[LW_PLANT_MAX_STATES]; // held by the list of names
    const char *output_names[LW_PLANT_MAX_PORTS];
    const char *mode_names[LW_FLOW_MAX_MODES];
    function flow;
    function outputs[LW_PLANT_MAX_PORTS];
    event events[MOST_EVENTS];
    // the last call of the flow, for its switchings
    int has_last;
    double last_t, last_x[MOST_ROW], last_u[LW_PLANT_MAX_PORTS];
    double g[LW_FLOW_MAX_SWITCHES];
} own;

// ---- calls from the engine

static int call(own *o, const function *f, double t, const double *x, const double *u,
                int n_results)
{
    lua_State *L = o->call.thread;
    if (o->call.busy)
        return lw__lua_call_again(&o->call);
    lua_pushvalue(L, f->place);
    for (int i = 0; i < f->n_slots; i++) {
        const slot *s = &f->slots[i];
        lua_pushnumber(L, s->kind == SLOT_STATE   ? x[s->index]
                          : s->kind == SLOT_INPUT ? u[s->index]
                                                  : t);
    }
    o->call.busy = 1;
    int status = lua_pcall(L, f->n_slots, n_results, 0);
    o->call.busy = 0;
    return status == LUA_OK ? 0 : lw__lua_call_failed(&o->call);
}

static int returned_other(own *o, int index, const char *what, const char *name)
{
    char text[260];
    snprintf(text, sizeof text, "%s%.200s", what, name);
    return lw__lua_call_returned(&o->call, index, text);
}

static void remember(own *o, double t, const double *x, const double *u)
{
    o->has_last = 1;
    o->last_t = t;
    memcpy(o->last_x, x, sizeof(double) * (size_t)(o->n_x + o->n_modes + o->n_noted));
    memcpy(o->last_u, u, sizeof(double) * (size_t)o->n_u);
    for (int k = 0; o->notes->n != o->n_noted && k < o->n_noted; k++)
        o->g[k] = 1;
}

static int flow(void *context, double t, const double *x, const double *u, double *dx)
{
    own *o = context;
    lua_State *L = o->call.thread;
    lw__lua_notes before = *o->notes;
    *o->notes = (lw__lua_notes){o->g, 0, o->n_noted, x + o->n_x + o->n_modes};
    int failed = call(o, &o->flow, t, x, u, o->n_x);
    if (!failed && o->notes->n != o->n_noted) { // not the same in each call: no sides to take
        lua_settop(L, o->call.top);
        *o->notes = (lw__lua_notes){o->g, 0, o->n_noted, NULL};
        failed = call(o, &o->flow, t, x, u, o->n_x);
    }
    if (o->n_noted > 0 && !failed)
        remember(o, t, x, u);
    *o->notes = before;
    if (failed)
        return 1;
    int top = o->call.top;
    for (int i = 0; i < o->n_x; i++) {
        int is_number;
        dx[i] = lua_tonumberx(L, top + 1 + i, &is_number);
        if (!is_number || lua_type(L, top + 1 + i) != LUA_TNUMBER)
            return returned_other(o, top + 1 + i, "the derivative of ", o->state_names[i]);
    }
    lua_settop(L, top);
    return 0;
}

static int switches(void *context, double t, const double *x, const double *u, double *g)
{
    own *o = context;
    double dx[LW_PLANT_MAX_STATES];
    int same =
        o->has_last && t == o->last_t &&
        memcmp(x, o->last_x, sizeof(double) * (size_t)(o->n_x + o->n_modes + o->n_noted)) == 0 &&
        memcmp(u, o->last_u, sizeof(double) * (size_t)o->n_u) == 0;
    if (o->n_noted > 0 && !same && flow(context, t, x, u, dx))
        return 1;
    memcpy(g, o->g, sizeof(double) * (size_t)o->n_noted);
    for (int k = 0; k < o->n_events; k++) {
        if (call(o, &o->events[k].when, t, x, u, 1))
            return 1;
        if (lua_type(o->call.thread, -1) != LUA_TNUMBER)
            return returned_other(o, lua_gettop(o->call.thread), "when of an event", "");
        g[o->n_noted + k] = lua_tonumber(o->call.thread, -1);
        lua_settop(o->call.thread, o->call.top);
    }
    return 0;
}

// The function of an event returns all states, then all modes.
static int happened(void *context, double t, double *x, const double *u, int which, int rising)
{
    own *o = context;
    lua_State *L = o->call.thread;
    int n = o->n_x + o->n_modes, top = o->call.top;
    if (which < o->n_noted || o->events[which - o->n_noted].on[rising != 0].place == 0)
        return 0;
    if (call(o, &o->events[which - o->n_noted].on[rising != 0], t, x, u, n))
        return 1;
    double after[LW_PLANT_MAX_STATES + LW_FLOW_MAX_MODES];
    for (int i = 0; i < n; i++) {
        if (lua_type(L, top + 1 + i) != LUA_TNUMBER)
            return returned_other(o, top + 1 + i, "after an event, ",
                                  i < o->n_x ? o->state_names[i] : o->mode_names[i - o->n_x]);
        after[i] = lua_tonumber(L, top + 1 + i);
    }
    lua_settop(L, top);
    memcpy(x, after, sizeof(double) * (size_t)n);
    return 0;
}

static int outputs(void *context, double t, const double *x, const double *u, double *y)
{
    own *o = context;
    lua_State *L = o->call.thread;
    for (int i = 0; i < o->n_y; i++) {
        const function *f = &o->outputs[i];
        if (f->state >= 0) {
            y[i] = x[f->state];
            continue;
        }
        if (call(o, f, t, x, u, 1))
            return 1;
        if (lua_type(L, -1) != LUA_TNUMBER)
            return returned_other(o, lua_gettop(L), "output ", o->output_names[i]);
        y[i] = lua_tonumber(L, -1);
        lua_settop(L, o->call.top);
    }
    return 0;
}

// ---- making one

typedef struct flow_def {
    lw__lua_texts states, inputs, modes;
    double *modes_start;
    lw__lua_list start;
    double rtol;
} flow_def;

static const lw__lua_field flow_fields[] = {REQUIRED(flow_def, states, "states", FIELD_TEXTS, NULL),
                                            OPTIONAL(flow_def, inputs, "inputs", FIELD_TEXTS, NULL),
                                            OPTIONAL(flow_def, start, "start", FIELD_LIST, NULL),
                                            OPTIONAL(flow_def, rtol, "rtol", FIELD_NUMBER, "1"),
                                            OTHER("flow"),
                                            OTHER("outputs"),
                                            OTHER("events"),
                                            OTHER("modes"),
                                            OTHER("atol"),
                                            OTHER("delay")};

typedef struct making {
    lw__lua_reader *r;
    own *o;
    const flow_def *p;
    lw_flow_def def;
    double atol[LW_PLANT_MAX_STATES];
    const char *output_names[LW_PLANT_MAX_PORTS];
    int used[LW_PLANT_MAX_PORTS]; // inputs that some function takes
    int in_outputs;
} making;

// A mode is a name, which starts at 0, or { name, start }. Names stay on the stack.
static void read_modes(const lw__lua_reader *r, flow_def *p)
{
    static const char wanted[] = "a list of names and { name, start }";
    lua_State *L = r->L;
    if (lw__lua_push_field(r, "modes") == LUA_TNIL)
        return;
    int list = lua_gettop(L), n = lw__lua_length(r, "modes", list, wanted);
    if (n > LW_FLOW_MAX_MODES)
        lw__lua_bad(r, "modes has %d names; permitted up to %d", n, LW_FLOW_MAX_MODES);
    p->modes.n = n;
    p->modes.v = lw__lua_room(L, (size_t)n, sizeof *p->modes.v);
    p->modes_start = lw__lua_room(L, (size_t)n, sizeof *p->modes_start);
    luaL_checkstack(L, 4 * n + 8, "too many modes");
    for (int i = 0; i < n; i++) {
        const char *field = lua_pushfstring(L, "modes[%d]", i + 1);
        if (lua_rawgeti(L, list, i + 1) == LUA_TTABLE) {
            int pair = lua_gettop(L);
            lua_rawgeti(L, pair, 2);
            p->modes_start[i] = lw__lua_number(r, field, -1, NULL);
            lua_rawgeti(L, pair, 1);
        }
        if (lua_type(L, -1) != LUA_TSTRING)
            lw__lua_bad_type(r, field, -1, "a name or { name, start }");
        p->modes.v[i] = lw__lua_field_text(r, field, -1);
    }
}

static int place_of(const lw__lua_texts *names, const char *name)
{
    for (int i = 0; i < names->n; i++)
        if (strcmp(names->v[i], name) == 0)
            return i;
    return -1;
}

static int unknown_parameter(const making *m, const char *field, const char *name)
{
    const char *known[MOST_PARAMETERS];
    int n = 0;
    for (int i = 0; i < m->p->states.n; i++)
        known[n++] = m->p->states.v[i];
    for (int i = 0; i < m->p->modes.n; i++)
        known[n++] = m->p->modes.v[i];
    for (int i = 0; i < m->p->inputs.n; i++)
        known[n++] = m->p->inputs.v[i];
    const char *near = lw_nearest_name(name, known, n);
    return lw__lua_bad(m->r, "%s: its parameter \"%s\" is no state, mode or input and not t%s%s%s",
                       field, name, near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

static void add_slot(making *m, const char *field, function *f, const char *name)
{
    int state = place_of(&m->p->states, name), input = place_of(&m->p->inputs, name);
    int mode = place_of(&m->p->modes, name);
    slot s = {SLOT_TIME, 0};
    if (state >= 0)
        s = (slot){SLOT_STATE, state};
    else if (mode >= 0) // modes stand behind the states
        s = (slot){SLOT_STATE, m->p->states.n + mode};
    else if (input >= 0)
        s = (slot){SLOT_INPUT, input};
    else if (strcmp(name, "t") != 0)
        unknown_parameter(m, field, name);
    if (input >= 0) {
        m->used[input] = 1;
        if (m->in_outputs)
            m->def.direct |= UINT32_C(1) << input;
    }
    f->slots[f->n_slots++] = s;
}

// The function at `index` of the stack goes to the thread.
static void take_function(making *m, const char *field, int index, function *f)
{
    lua_State *L = m->r->L;
    lua_Debug ar;
    lw__lua_call_check(m->r, field, index);
    lua_pushvalue(L, index);
    lua_getinfo(L, ">u", &ar);
    if (ar.isvararg)
        lw__lua_bad(m->r, "%s takes ...; its parameters are matched by name", field);
    if (ar.nparams > MOST_PARAMETERS)
        lw__lua_bad(m->r, "%s has %d parameters; permitted up to %d", field, (int)ar.nparams,
                    MOST_PARAMETERS);
    for (int i = 1; i <= ar.nparams; i++) {
        lua_pushvalue(L, index);
        const char *name = lua_getlocal(L, NULL, i);
        lua_pop(L, 1);
        if (name == NULL)
            lw__lua_bad(m->r,
                        "%s carries no names of its parameters; it is to be loaded from "
                        "source text",
                        field);
        add_slot(m, field, f, name);
    }
    f->state = -1;
    if (f == &m->o->flow) {
        f->place = CALL_FUNCTION;
        return;
    }
    lua_pushvalue(L, index);
    lua_xmove(L, m->o->call.thread, 1);
    f->place = ++m->o->call.top;
}

// An output is the name of a state, or { name, function }.
static void take_output(making *m, int i, int index)
{
    lua_State *L = m->r->L;
    function *f = &m->o->outputs[i];
    const char *field = lua_pushfstring(L, "outputs[%d]", i + 1);
    if (lua_type(L, index) == LUA_TSTRING) {
        m->output_names[i] = lw__lua_field_text(m->r, field, index);
        f->state = place_of(&m->p->states, m->output_names[i]);
        if (f->state >= 0)
            return;
        const char *near = lw_nearest_name(m->output_names[i], m->p->states.v, m->p->states.n);
        lw__lua_bad(m->r,
                    "%s: no state \"%s\"%s%s%s; an output that is no state is { name, function }",
                    field, m->output_names[i], near ? "; nearest \"" : "", near ? near : "",
                    near ? "\"" : "");
    }
    if (lw__lua_length(m->r, field, index, "the name of a state, or { name, function }") != 2)
        lw__lua_bad(m->r, "%s: the name of a state, or { name, function }, is wanted", field);
    lua_rawgeti(L, index, 1);
    m->output_names[i] = lw__lua_field_text(m->r, field, lua_gettop(L));
    lua_rawgeti(L, index, 2);
    const char *inner = lua_pushfstring(L, "%s, \"%s\"", field, m->output_names[i]);
    take_function(m, inner, lua_gettop(L) - 1, f);
    m->def.outputs = outputs;
}

// What is pushed here stays on the stack: it holds the names.
static void take_outputs(making *m)
{
    lua_State *L = m->r->L;
    if (lw__lua_push_field(m->r, "outputs") == LUA_TNIL)
        return;
    int list = lua_gettop(L);
    int n = lw__lua_length(m->r, "outputs", list, "a list of states and { name, function }");
    if (n < 1 || n > LW_PLANT_MAX_PORTS)
        lw__lua_bad(m->r, "outputs has %d elements; permitted 1 to %d", n, LW_PLANT_MAX_PORTS);
    luaL_checkstack(L, 8 * n + 8, "too many outputs");
    m->in_outputs = 1;
    for (int i = 0; i < n; i++) {
        lua_rawgeti(L, list, i + 1);
        take_output(m, i, lua_gettop(L));
    }
    m->in_outputs = 0;
    m->o->n_y = m->def.n_y = n;
    m->def.output_names = m->output_names;
}

// { when = function, rising = function, falling = function }; the table is on top of the stack.
static void take_event(making *m, int k)
{
    static const char *const names[] = {"when", "falling", "rising"};
    static const lw__lua_field known[] = {OTHER("when"), OTHER("falling"), OTHER("rising")};
    lua_State *L = m->r->L;
    event *e = &m->o->events[k];
    lw__lua_reader inner = *m->r;
    inner.table = lua_gettop(L);
    inner.subject = lua_pushfstring(L, "%s: events[%d]", m->r->subject, k + 1);
    if (lua_type(L, inner.table) != LUA_TTABLE)
        lw__lua_bad_type(m->r, lua_pushfstring(L, "events[%d]", k + 1), inner.table,
                         "{ when, rising, falling }");
    LW__LUA_FIELDS(&inner, known, 0, NULL);
    for (int i = 0; i < 3; i++) {
        function *f = i == 0 ? &e->when : &e->on[i - 1];
        if (lw__lua_push_field(&inner, names[i]) == LUA_TNIL)
            continue;
        int index = lua_gettop(L);
        take_function(m, lua_pushfstring(L, "events[%d], %s", k + 1, names[i]), index, f);
    }
    if (e->when.place == 0)
        lw__lua_bad(&inner, "when is missing; a function that passes through zero is wanted");
}

static void take_events(making *m)
{
    lua_State *L = m->r->L;
    if (lw__lua_push_field(m->r, "events") == LUA_TNIL)
        return;
    int list = lua_gettop(L);
    int n = lw__lua_length(m->r, "events", list, "a list of { when, rising, falling }");
    if (n > MOST_EVENTS)
        lw__lua_bad(m->r, "events has %d elements; permitted up to %d", n, MOST_EVENTS);
    luaL_checkstack(L, 12 * n + 8, "too many events");
    for (int k = 0; k < n; k++) {
        lua_rawgeti(L, list, k + 1);
        take_event(m, k);
    }
    m->o->n_events = n;
    m->def.happened = happened;
}

static void take_tolerances(making *m)
{
    lua_State *L = m->r->L;
    int type = lw__lua_push_field(m->r, "atol"), n = m->p->states.n;
    m->def.rtol = m->p->rtol;
    if (type == LUA_TNIL)
        return;
    m->def.atol = m->atol;
    if (type != LUA_TTABLE) {
        for (int i = 0; i < n; i++)
            m->atol[i] = lw__lua_number(m->r, "atol", -1, NULL);
        return;
    }
    lw__lua_list list = lw__lua_numbers(m->r, "atol", lua_gettop(L), NULL);
    if (list.n != n)
        lw__lua_bad(m->r, "atol has %d numbers; the plant has %d states", list.n, n);
    memcpy(m->atol, list.v, sizeof(double) * (size_t)n);
}

// Every state and input is told apart by its name.
static void check_names(const making *m)
{
    const flow_def *p = m->p;
    if (p->states.n < 1 || p->states.n > LW_PLANT_MAX_STATES)
        lw__lua_bad(m->r, "states has %d names; permitted 1 to %d", p->states.n,
                    LW_PLANT_MAX_STATES);
    if (p->inputs.n > LW_PLANT_MAX_PORTS)
        lw__lua_bad(m->r, "inputs has %d names; permitted up to %d", p->inputs.n,
                    LW_PLANT_MAX_PORTS);
    if (place_of(&p->states, "t") >= 0 || place_of(&p->inputs, "t") >= 0 ||
        place_of(&p->modes, "t") >= 0)
        lw__lua_bad(m->r, "the name t stands for time; another is wanted");
    for (int i = 0; i < p->inputs.n; i++)
        if (place_of(&p->states, p->inputs.v[i]) >= 0 || place_of(&p->modes, p->inputs.v[i]) >= 0)
            lw__lua_bad(m->r, "\"%s\" is an input and a state or mode", p->inputs.v[i]);
    for (int i = 0; i < p->modes.n; i++)
        if (place_of(&p->states, p->modes.v[i]) >= 0)
            lw__lua_bad(m->r, "\"%s\" is a mode and a state", p->modes.v[i]);
    if (p->start.v != NULL && p->start.n != p->states.n)
        lw__lua_bad(m->r, "start has %d numbers; the plant has %d states", p->start.n, p->states.n);
}

// One call at the start, inputs at 0: the number of results, and of switchings.
static void try_flow(making *m)
{
    own *o = m->o;
    lua_State *T = o->call.thread;
    double x[MOST_ROW] = {0}, u[LW_PLANT_MAX_PORTS] = {0};
    if (m->p->start.v != NULL)
        memcpy(x, m->p->start.v, sizeof(double) * (size_t)o->n_x);
    if (o->n_modes > 0)
        memcpy(x + o->n_x, m->p->modes_start, sizeof(double) * (size_t)o->n_modes);
    lw__lua_notes before = *o->notes;
    *o->notes = (lw__lua_notes){o->g, 0, LW_FLOW_MAX_SWITCHES, NULL};
    int failed = call(o, &o->flow, 0, x, u, LUA_MULTRET);
    int n_noted = o->notes->n;
    *o->notes = before;
    if (failed)
        lw__lua_bad(m->r, "flow, called at the start with its inputs at 0: %s",
                    lua_pushstring(m->r->L, o->call.error.text));
    int n = lua_gettop(T) - o->call.top;
    lua_settop(T, o->call.top);
    if (n != o->n_x)
        lw__lua_bad(m->r, "flow returns %d values; one derivative a state is wanted, %d", n,
                    o->n_x);
    if (n_noted + o->n_events > LW_FLOW_MAX_SWITCHES)
        lw__lua_bad(m->r, "flow has %d kinks and events; permitted up to %d", n_noted + o->n_events,
                    LW_FLOW_MAX_SWITCHES);
    o->n_noted = n_noted;
    m->def.n_switches = n_noted + o->n_events;
    m->def.switches = m->def.n_switches > 0 ? switches : NULL;
}

static void fill_definition(making *m)
{
    own *o = m->o;
    const flow_def *p = m->p;
    o->n_x = m->def.n_x = p->states.n;
    o->n_u = m->def.n_u = p->inputs.n;
    o->n_modes = m->def.n_modes = p->modes.n;
    m->def.modes = p->modes_start;
    m->def.state_names = p->states.v;
    m->def.input_names = p->inputs.v;
    m->def.start = p->start.v;
    m->def.flow = flow;
    m->def.context = o;
    m->def.needs_serial = 1;
    m->def.direct = 0;
}

static const char *keep_name(lua_State *L, const char *name)
{
    const char *kept = lua_pushstring(L, name);
    lua_rawseti(L, -2, (lua_Integer)lua_rawlen(L, -2) + 1);
    return kept;
}

// Push the list that holds them.
static void keep_names(making *m)
{
    lua_State *L = m->r->L;
    lua_newtable(L);
    for (int i = 0; i < m->o->n_x; i++)
        m->o->state_names[i] = keep_name(L, m->p->states.v[i]);
    for (int i = 0; i < m->o->n_y; i++)
        m->o->output_names[i] = keep_name(L, m->output_names[i]);
    for (int i = 0; i < m->o->n_modes; i++)
        m->o->mode_names[i] = keep_name(L, m->p->modes.v[i]);
}

int lw__lua_plant_flow(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    flow_def p = {.rtol = 1e-8};
    lw__lua_reader r = lw__lua_read(L, 1, "plant flow");
    LW__LUA_FIELDS(&r, flow_fields, 0, &p);
    read_modes(&r, &p);
    making m = {.r = &r, .p = &p, .def = lw_flow_default()};
    check_names(&m);
    if (lw__lua_push_field(&r, "flow") == LUA_TNIL)
        lw__lua_bad(&r, "flow is missing; a function that returns the derivatives is wanted");
    int place = lua_gettop(L);
    if (lua_type(L, place) != LUA_TFUNCTION)
        lw__lua_bad_type(&r, "flow", place, "a function written in Lua");
    lw__lua_plant *box = lw__lua_new(L, LW__LUA_PLANT, sizeof *box, PLANT_USER_VALUES);
    int index = lua_gettop(L);
    m.o = lw__lua_call_new(L, place, sizeof(own), MOST_PARAMETERS + 3 * LW_PLANT_MAX_STATES);
    lua_setiuservalue(L, index, PLANT_CALL);
    m.o->notes = lw__lua_notes_of(L); // the registry holds it as long as the state lives
    fill_definition(&m);
    take_function(&m, "flow", place, &m.o->flow);
    take_outputs(&m);
    take_events(&m);
    take_tolerances(&m);
    try_flow(&m);
    for (int i = 0; i < p.inputs.n; i++)
        if (!m.used[i])
            lw__lua_bad(&r, "inputs: no function takes \"%s\"", p.inputs.v[i]);
    if (lw_plant_flow(&m.def, &box->it, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    lw__lua_plant_delays(&r, box);
    keep_names(&m);
    lua_setiuservalue(L, index, PLANT_NAMES);
    lua_pushvalue(L, index);
    return 1;
}
