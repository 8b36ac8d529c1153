// Control laws written in Lua.
//
// Parameters are matched by name: those declared in `state` are states, dt, now, period, job and
// missed are time, all others are inputs. The step is called with numbers in the order of its
// parameters and returns the outputs, then every scalar state. A state that is a list is one table
// of fixed length, filled before the call and read after it.
//
// Workload: once a period. Without lists: one push a parameter, one lua_pcall, one read a result.
// With lists the call goes through a C function, so that table access is protected too.
//
// Invariant: the thread's stack holds the step, then one table for each list, and during a call
// what is above them.

#include "fields.h"
#include "law.h"
#include "module.h"

#include <math.h>
#include <stdint.h>
#include <string.h>

#define MOST_PARAMETERS 120
#define MOST_EXACT 9007199254740992.0 // 2^53

typedef enum slot_kind {
    SLOT_INPUT,
    SLOT_STATE,
    SLOT_WHOLE_STATE, // a state marked by lw.int
    SLOT_DT,
    SLOT_NOW,
    SLOT_PERIOD,
    SLOT_JOB,
    SLOT_MISSED,
    SLOT_LIST
} slot_kind;

// A parameter of the step.
typedef struct slot {
    slot_kind kind;
    int index; // of the input, of the (first) state
    int n;     // elements of a list
    int table; // stack index of a list's table on the thread
    const char *name;
} slot;

// Where a result goes.
typedef struct result {
    int is_state, index, is_whole;
    const char *name;
} result;

typedef struct own {
    lw__lua_call call; // first
    int n_slots, n_results, n_lists;
    int n_in, n_out, n_state;
    slot slots[MOST_PARAMETERS];
    result results[LW_LAW_MAX_PORTS + LW_LAW_MAX_STATES];
} own;

// ---- the step

static void push_slot(lua_State *L, const slot *s, const lw_law_time *time, const double *in,
                      const double *state)
{
    switch (s->kind) {
    case SLOT_INPUT:
        lua_pushnumber(L, in[s->index]);
        break;
    case SLOT_STATE:
        lua_pushnumber(L, state[s->index]);
        break;
    case SLOT_WHOLE_STATE:
        lua_pushinteger(L, (lua_Integer)state[s->index]);
        break;
    case SLOT_DT:
        lua_pushnumber(L, time->dt);
        break;
    case SLOT_NOW:
        lua_pushnumber(L, time->now);
        break;
    case SLOT_PERIOD:
        lua_pushnumber(L, time->nominal);
        break;
    case SLOT_JOB:
        lua_pushnumber(L, (double)time->job);
        break;
    case SLOT_MISSED:
        lua_pushnumber(L, (double)time->missed);
        break;
    case SLOT_LIST:
        lua_pushvalue(L, s->table);
        break;
    }
}

// Results lie from first on; 0, or 1 with the message kept.
static int read_results(own *law, int first, double *state, double *out)
{
    lua_State *L = law->call.thread;
    for (int i = 0; i < law->n_results; i++) {
        const result *r = &law->results[i];
        if (lua_type(L, first + i) != LUA_TNUMBER)
            return lw__lua_call_returned(&law->call, first + i, r->name);
        double value = lua_tonumber(L, first + i);
        if (r->is_whole && !(fabs(value) <= MOST_EXACT && value == floor(value)))
            return lw__lua_call_not_whole(&law->call, value, r->name);
        if (r->is_state)
            state[r->index] = value;
        else
            out[r->index] = value;
    }
    return 0;
}

static int step(const void *param, const lw_law_time *time, const double *in, double *state,
                double *out)
{
    own *law = (own *)param;
    lua_State *L = law->call.thread;
    if (law->call.busy)
        return lw__lua_call_again(&law->call);
    lua_pushvalue(L, CALL_FUNCTION);
    for (int i = 0; i < law->n_slots; i++)
        push_slot(L, &law->slots[i], time, in, state);
    law->call.busy = 1;
    int status = lua_pcall(L, law->n_slots, law->n_results, 0);
    law->call.busy = 0;
    if (status != LUA_OK)
        return lw__lua_call_failed(&law->call);
    if (read_results(law, 2, state, out))
        return 1;
    lua_settop(L, 1);
    return 0;
}

// ---- the step with lists

typedef struct arguments {
    own *law;
    const lw_law_time *time;
    const double *in;
    double *state;
} arguments;

static void fill(lua_State *L, int table, int n, const double *v)
{
    for (int e = 0; e < n; e++) {
        lua_pushnumber(L, v[e]);
        lua_rawseti(L, table, e + 1);
    }
}

static void read_back(lua_State *L, const slot *s, int table, double *v)
{
    for (int e = 0; e < s->n; e++) {
        if (lua_rawgeti(L, table, e + 1) != LUA_TNUMBER)
            luaL_error(L, "state %s: element %d is %s after the step; a number is wanted", s->name,
                       e + 1, lw__lua_shown(L, -1));
        v[e] = lua_tonumber(L, -1);
        lua_pop(L, 1);
    }
}

// Stack: arguments, step, the lists' tables in order of the slots.
static int protected_step(lua_State *L)
{
    arguments *a = lua_touserdata(L, 1);
    own *law = a->law;
    int table = 3;
    luaL_checkstack(L, law->n_slots + law->n_results + 8, NULL);
    lua_pushvalue(L, 2);
    for (int i = 0; i < law->n_slots; i++) {
        const slot *s = &law->slots[i];
        if (s->kind != SLOT_LIST) {
            push_slot(L, s, a->time, a->in, a->state);
            continue;
        }
        fill(L, table, s->n, a->state + s->index);
        lua_pushvalue(L, table++);
    }
    lua_call(L, law->n_slots, law->n_results);
    table = 3;
    for (int i = 0; i < law->n_slots; i++)
        if (law->slots[i].kind == SLOT_LIST) {
            read_back(L, &law->slots[i], table, a->state + law->slots[i].index);
            table++;
        }
    return law->n_results;
}

static int step_with_lists(const void *param, const lw_law_time *time, const double *in,
                           double *state, double *out)
{
    own *law = (own *)param;
    lua_State *L = law->call.thread;
    arguments a = {law, time, in, state};
    if (law->call.busy)
        return lw__lua_call_again(&law->call);
    lua_pushcfunction(L, protected_step);
    lua_pushlightuserdata(L, &a);
    for (int i = 1; i <= law->call.top; i++)
        lua_pushvalue(L, i);
    law->call.busy = 1;
    int status = lua_pcall(L, 1 + law->call.top, law->n_results, 0);
    law->call.busy = 0;
    if (status != LUA_OK)
        return lw__lua_call_failed(&law->call);
    if (read_results(law, law->call.top + 1, state, out))
        return 1;
    lua_settop(L, law->call.top);
    return 0;
}

static int has_only_elements(lua_State *L, int table, int n)
{
    for (lua_pushnil(L); lua_next(L, table) != 0; lua_pop(L, 1)) {
        lua_Integer key = lua_isinteger(L, -2) ? lua_tointeger(L, -2) : 0;
        if (key < 1 || key > n) {
            lua_pop(L, 2);
            return 0;
        }
    }
    return 1;
}

void lw__lua_own_check(lua_State *L, const lw__lua_call *call)
{
    const own *law = (const own *)call;
    lua_Debug ar;
    for (int i = 0; call->top > 1 && i < law->n_slots; i++) {
        const slot *s = &law->slots[i];
        if (s->kind != SLOT_LIST)
            continue;
        luaL_checkstack(L, 8, NULL);
        lua_pushvalue(call->thread, s->table);
        lua_xmove(call->thread, L, 1);
        int clean = has_only_elements(L, lua_gettop(L), s->n);
        lua_pop(L, 1);
        if (clean)
            continue;
        lua_pushvalue(call->thread, CALL_FUNCTION);
        lua_getinfo(call->thread, ">S", &ar);
        lw__lua_fail_at(L, lua_pushfstring(L, "%s:%d", ar.short_src, ar.linedefined),
                        "state %s holds more than its %d elements after the run; a list keeps its "
                        "length",
                        s->name, s->n);
    }
}

// ---- making one

typedef struct making {
    lw__lua_reader *r;
    own *law;
    int state_table; // stack index, 0 where there is none
    const char *in_names[LW_LAW_MAX_PORTS], *state_names[LW_LAW_MAX_STATES];
    double start[LW_LAW_MAX_STATES];
} making;

static int time_slot(const char *name, slot_kind *kind)
{
    static const char *const names[] = {"dt", "now", "period", "job", "missed"};
    for (int i = 0; i < 5; i++)
        if (strcmp(name, names[i]) == 0) {
            *kind = (slot_kind)(SLOT_DT + i);
            return 1;
        }
    return 0;
}

static int add_state(making *m, const char *name, double start)
{
    own *law = m->law;
    if (law->n_state == LW_LAW_MAX_STATES)
        lw__lua_bad(m->r, "state has more than %d numbers; permitted up to %d", LW_LAW_MAX_STATES,
                    LW_LAW_MAX_STATES);
    m->state_names[law->n_state] = name;
    m->start[law->n_state] = start;
    return law->n_state++;
}

// The list on top of the stack becomes a table of its own on the thread.
static void add_list(making *m, slot *s)
{
    lua_State *L = m->r->L;
    own *law = m->law;
    lw__lua_list list = lw__lua_numbers(m->r, s->name, -1, NULL);
    if (list.n == 0)
        lw__lua_bad(m->r, "state %s is an empty list; its length is that of the state", s->name);
    s->kind = SLOT_LIST;
    s->n = list.n;
    s->index = law->n_state;
    for (int e = 0; e < list.n; e++)
        add_state(m, lua_pushfstring(L, "%s[%d]", s->name, e + 1), list.v[e]);
    lw__lua_push_numbers(L, list.n, list.v);
    lua_xmove(L, law->call.thread, 1);
    s->table = ++law->call.top;
    law->n_lists++;
}

// The start value is on top of the stack.
static void add_state_slot(making *m, slot *s)
{
    lua_State *L = m->r->L;
    own *law = m->law;
    lw__lua_int *whole = luaL_testudata(L, -1, LW__LUA_INT);
    if (lua_type(L, -1) == LUA_TTABLE) {
        add_list(m, s);
        return;
    }
    s->kind = whole != NULL ? SLOT_WHOLE_STATE : SLOT_STATE;
    double start = whole != NULL ? (double)whole->value : lw__lua_number(m->r, s->name, -1, NULL);
    s->index = add_state(m, s->name, start);
    law->results[law->n_results++] = (result){1, s->index, whole != NULL, s->name};
}

static void add_parameter(making *m, const char *name)
{
    lua_State *L = m->r->L;
    own *law = m->law;
    slot *s = &law->slots[law->n_slots++];
    *s = (slot){SLOT_INPUT, 0, 0, 0, name};
    luaL_checkstack(L, 2 * LW_LAW_MAX_STATES + 16, NULL);
    if (m->state_table != 0) {
        lua_pushstring(L, name);
        if (lua_rawget(L, m->state_table) != LUA_TNIL) {
            if (time_slot(name, &s->kind))
                lw__lua_bad(m->r, "state %s: the name stands for time; another is wanted", name);
            add_state_slot(m, s);
            return;
        }
        lua_pop(L, 1);
    }
    if (time_slot(name, &s->kind))
        return;
    if (law->n_in == LW_LAW_MAX_PORTS)
        lw__lua_bad(m->r, "step has more than %d inputs; permitted up to %d", LW_LAW_MAX_PORTS,
                    LW_LAW_MAX_PORTS);
    s->index = law->n_in;
    m->in_names[law->n_in++] = name;
}

// Every declared state is to be a parameter; others could never reach the step.
static void check_states_used(const making *m)
{
    const char *names[MOST_PARAMETERS];
    lw__lua_reader state = *m->r;
    if (m->state_table == 0)
        return;
    state.table = m->state_table;
    for (int i = 0; i < m->law->n_slots; i++)
        names[i] = m->law->slots[i].name;
    lw__lua_refuse_unknown(&state, "state: step has no parameter", 0, m->law->n_slots, names);
}

static void add_parameters(making *m, int function)
{
    lua_State *L = m->r->L;
    lua_Debug ar;
    lua_pushvalue(L, function);
    lua_getinfo(L, ">u", &ar);
    if (ar.isvararg)
        lw__lua_bad(m->r, "step takes ...; its parameters are matched by name");
    if (ar.nparams > MOST_PARAMETERS)
        lw__lua_bad(m->r, "step has %d parameters; permitted up to %d", (int)ar.nparams,
                    MOST_PARAMETERS);
    for (int i = 1; i <= ar.nparams; i++) {
        lua_pushvalue(L, function);
        const char *name = lua_getlocal(L, NULL, i);
        lua_pop(L, 1);
        if (name == NULL)
            lw__lua_bad(m->r, "step carries no names of its parameters; it is to be loaded from "
                              "source text");
        add_parameter(m, name);
    }
}

typedef struct own_def {
    lw__lua_texts outputs;
} own_def;

static const lw__lua_field own_fields[] = {
    OTHER("step"), OTHER("state"), OPTIONAL(own_def, outputs, "outputs", FIELD_TEXTS, NULL)};

// Outputs come first among the results.
static void add_outputs(making *m, const lw__lua_texts *outputs)
{
    own *law = m->law;
    if (outputs->n < 1 || outputs->n > LW_LAW_MAX_PORTS)
        lw__lua_bad(m->r, "outputs has %d names; permitted 1 to %d", outputs->n, LW_LAW_MAX_PORTS);
    for (int i = 0; i < outputs->n; i++)
        law->results[law->n_results++] = (result){0, i, 0, outputs->v[i]};
    law->n_out = outputs->n;
}

// A step with lists takes the longer way.
static lw_law_def definition(const making *m, const char *const *out_names)
{
    const own *law = m->law;
    return (lw_law_def){.kind = "own",
                        .n_in = law->n_in,
                        .n_out = law->n_out,
                        .n_state = law->n_state,
                        .in_names = m->in_names,
                        .out_names = out_names,
                        .state_names = m->state_names,
                        .start = m->start,
                        .step = law->n_lists > 0 ? step_with_lists : step,
                        .param = law,
                        .needs_serial = 1};
}

int lw__lua_law_own(lua_State *L)
{
    static const char *default_output[] = {"out"};
    lw_error err = {LW_OK, ""};
    own_def p = {{1, default_output}};
    making m = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "law own");
    LW__LUA_FIELDS(&r, own_fields, 0, &p);
    if (lw__lua_push_field(&r, "step") == LUA_TNIL)
        lw__lua_bad(&r, "step is missing; a function is wanted");
    int function = lua_gettop(L);
    lw__lua_call_check(&r, "step", function);
    if (lw__lua_push_field(&r, "state") != LUA_TNIL)
        m.state_table = lua_gettop(L);
    if (m.state_table != 0 && lua_type(L, -1) != LUA_TTABLE)
        lw__lua_bad_type(&r, "state", -1, "a table of names and start values");
    lw__lua_law *box = lw__lua_law_new(L);
    int index = lua_gettop(L);
    m.r = &r;
    m.law = lw__lua_call_new(L, function, sizeof(own), MOST_PARAMETERS + 2 * LW_LAW_MAX_STATES);
    lua_setiuservalue(L, index, LAW_CALL);
    add_outputs(&m, &p.outputs);
    add_parameters(&m, function);
    check_states_used(&m);
    lw_law_def def = definition(&m, p.outputs.v);
    if (lw_law_new(&def, &box->it, &err) != LW_OK)
        lw__lua_bad(&r, "%s", lua_pushstring(L, err.text));
    box->call = &m.law->call;
    for (int i = 0; i < m.law->n_out; i++)
        m.law->results[i].name = lw_law_look(box->it)->out_names[i];
    lua_pushvalue(L, index);
    return 1;
}
