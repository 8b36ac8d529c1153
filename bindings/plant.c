// Plants of one kind each: state space, transfer functions, ready textbook plants.
//
// Every constructor also takes states, inputs, outputs (names), start and delay, laid over the
// plant after it is made.

#include "plant.h"
#include "fields.h"
#include "module.h"

#include <math.h>
#include <string.h>

typedef struct common {
    lw__lua_texts states, inputs, outputs;
    lw__lua_list start;
} common;

#define COMMON(type)                                                                               \
    OPTIONAL(type, common.states, "states", FIELD_TEXTS, NULL),                                    \
        OPTIONAL(type, common.inputs, "inputs", FIELD_TEXTS, NULL),                                \
        OPTIONAL(type, common.outputs, "outputs", FIELD_TEXTS, NULL),                              \
        OPTIONAL(type, common.start, "start", FIELD_LIST, NULL), OTHER("delay")

// ---- names, start and delay

static lw__lua_plant *new_plant(lua_State *L)
{
    return lw__lua_new(L, LW__LUA_PLANT, sizeof(lw__lua_plant), 0);
}

// Raise the engine's words on the whole of a plant.
static void must(const lw__lua_reader *r, lw_status status, const lw_error *err)
{
    if (status == LW_OK)
        return;
    lua_pushstring(r->L, err->text);
    lw__lua_bad(r, "%s", lua_tostring(r->L, -1));
}

static void replace(lw__lua_plant *box, lw_plant *plant)
{
    lw_plant_free(box->it);
    box->it = plant;
}

static const char *const *names_for(const lw__lua_reader *r, const char *field,
                                    const lw__lua_texts *names, int n)
{
    if (names->v != NULL && names->n != n)
        lw__lua_bad(r, "%s has %d names; the plant has %d", field, names->n, n);
    return names->v;
}

static void rename_ports(const lw__lua_reader *r, lw__lua_plant *box, const common *c)
{
    lw_error err = {LW_OK, ""};
    lw_plant *renamed = NULL;
    lw_plant_view view = lw_plant_look(box->it);
    const char *const *states = names_for(r, "states", &c->states, view.n_x);
    const char *const *inputs = names_for(r, "inputs", &c->inputs, view.n_u);
    const char *const *outputs = names_for(r, "outputs", &c->outputs, view.n_y);
    if (states == NULL && inputs == NULL && outputs == NULL)
        return;
    must(r, lw_plant_renamed(box->it, states, inputs, outputs, &renamed, &err), &err);
    replace(box, renamed);
}

static void delay_input(const lw__lua_reader *r, lw__lua_plant *box, const char *input, int index)
{
    lw_error err = {LW_OK, ""};
    lw_plant *delayed = NULL;
    double seconds = lw__lua_number(r, "delay", index, "s");
    must(r, lw_plant_delayed(box->it, input, seconds, &delayed, &err), &err);
    replace(box, delayed);
}

// "2 us" where there is one input, { voltage = "2 us" } otherwise; inputs in the plant's order.
void lw__lua_plant_delays(const lw__lua_reader *r, lw__lua_plant *box)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, "delay");
    if (type == LUA_TNIL)
        return;
    lw_plant_view view = lw_plant_look(box->it);
    if (type != LUA_TTABLE) {
        if (view.n_u != 1)
            lw__lua_bad(r,
                        "delay is one time, and the plant has %d inputs; { input = time } is "
                        "wanted",
                        view.n_u);
        delay_input(r, box, view.input_names[0], lua_gettop(L));
        return;
    }
    lw__lua_reader inner = *r;
    inner.table = lua_gettop(L);
    inner.subject = lua_pushfstring(L, "%s: delay", r->subject);
    lw__lua_fields(&inner, 0, NULL, 0, view.n_u, view.input_names, NULL);
    for (int i = 0; i < view.n_u; i++) {
        // The names change hands with each copy of the plant.
        const char *name = lua_pushstring(L, lw_plant_look(box->it).input_names[i]);
        if (lw__lua_push_field(&inner, name) != LUA_TNIL)
            delay_input(r, box, name, lua_gettop(L));
    }
}

static int finish(const lw__lua_reader *r, lw__lua_plant *box, const common *c, int box_index)
{
    lw_error err = {LW_OK, ""};
    lw_plant *started = NULL;
    rename_ports(r, box, c);
    lw__lua_plant_delays(r, box);
    if (c->start.v != NULL) {
        int n_x = lw_plant_look(box->it).n_x;
        if (c->start.n != n_x)
            lw__lua_bad(r, "start has %d numbers; the plant has %d states", c->start.n, n_x);
        must(r, lw_plant_started(box->it, c->start.n, c->start.v, &started, &err), &err);
        replace(box, started);
    }
    lua_pushvalue(r->L, box_index);
    return 1;
}

// ---- state space

typedef struct state_space {
    common common;
    lw__lua_matrix a, b, c, d;
} state_space;

static const lw__lua_field state_space_fields[] = {
    REQUIRED(state_space, a, "A", FIELD_MATRIX, NULL),
    REQUIRED(state_space, b, "B", FIELD_MATRIX, NULL),
    REQUIRED(state_space, c, "C", FIELD_MATRIX, NULL),
    OPTIONAL(state_space, d, "D", FIELD_MATRIX, NULL),
    COMMON(state_space),
};

static void want_shape(const lw__lua_reader *r, const char *field, const lw__lua_matrix *m,
                       int n_rows, int n_columns)
{
    if (m->n_rows != n_rows || (n_rows > 0 && m->n_columns != n_columns))
        lw__lua_bad(r, "%s is %d x %d; %d x %d is wanted", field, m->n_rows, m->n_columns, n_rows,
                    n_columns);
}

int lw__lua_plant_state_space(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    state_space p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "plant state_space");
    LW__LUA_FIELDS(&r, state_space_fields, 0, &p);
    int n_x = p.a.n_rows, n_y = p.c.n_rows;
    int n_u = n_x > 0 ? p.b.n_columns : p.d.n_columns;
    want_shape(&r, "A", &p.a, n_x, n_x);
    want_shape(&r, "B", &p.b, n_x, n_u);
    want_shape(&r, "C", &p.c, n_y, n_x);
    if (p.d.stated)
        want_shape(&r, "D", &p.d, n_y, n_u);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r,
         lw_plant_state_space(n_x, n_u, n_y, p.a.v, p.b.v, p.c.v, p.d.v, NULL, NULL, NULL, NULL,
                              &box->it, &err),
         &err);
    return finish(&r, box, &p.common, index);
}

// ---- transfer functions

typedef struct transfer {
    common common;
} transfer;

static const lw__lua_field transfer_fields[] = {OTHER("num"), OTHER("den"), COMMON(transfer)};

typedef struct polynomials {
    int n_rows, n_columns;
    lw_poly *list;
} polynomials;

// Whether the list at `index` begins with a list.
static int is_nested(lua_State *L, int index)
{
    int nested = lua_type(L, index) == LUA_TTABLE && lua_rawgeti(L, index, 1) == LUA_TTABLE;
    if (lua_type(L, index) == LUA_TTABLE)
        lua_pop(L, 1);
    return nested;
}

static polynomials one_polynomial(const lw__lua_reader *r, const char *field, int index)
{
    lw__lua_list list = lw__lua_numbers(r, field, index, NULL);
    polynomials p = {1, 1, lw__lua_room(r->L, 1, sizeof(lw_poly))};
    p.list[0] = (lw_poly){list.n, list.v};
    return p;
}

// A polynomial { 1, 2 }, or polynomials by output and input: { { {1}, {2} }, { {3}, {4} } }.
static polynomials read_polynomials(const lw__lua_reader *r, const char *field)
{
    static const char wanted[] = "a polynomial, or a list of rows of polynomials";
    lua_State *L = r->L;
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        lw__lua_bad(r, "%s is missing", field);
    int index = lua_gettop(L);
    if (!is_nested(L, index))
        return one_polynomial(r, field, index);
    polynomials p = {lw__lua_length(r, field, index, wanted), 0, NULL};
    for (int i = 0; i < p.n_rows; i++) {
        lua_rawgeti(L, index, i + 1);
        int n = lw__lua_length(r, field, -1, wanted);
        if (i > 0 && n != p.n_columns)
            lw__lua_bad(r, "%s has rows of %d and of %d polynomials; one length is wanted", field,
                        p.n_columns, n);
        p.n_columns = n;
        lua_pop(L, 1);
    }
    if (p.n_rows > LW_PLANT_MAX_PORTS || p.n_columns > LW_PLANT_MAX_PORTS)
        lw__lua_bad(r, "%s is %d x %d; permitted up to %d x %d", field, p.n_rows, p.n_columns,
                    LW_PLANT_MAX_PORTS, LW_PLANT_MAX_PORTS);
    p.list = lw__lua_room(L, (size_t)p.n_rows * (size_t)p.n_columns, sizeof(lw_poly));
    luaL_checkstack(L, 2 * p.n_rows * p.n_columns + p.n_rows + 8, "too many polynomials");
    for (int k = 0; k < p.n_rows * p.n_columns; k++) {
        int i = k / p.n_columns, j = k % p.n_columns;
        const char *name = lua_pushfstring(L, "%s[%d][%d]", field, i + 1, j + 1);
        if (lua_rawgeti(L, index, i + 1) != LUA_TTABLE)
            lw__lua_bad_type(r, field, -1, wanted);
        lua_rawgeti(L, -1, j + 1);
        lw__lua_list list = lw__lua_numbers(r, name, -1, NULL);
        p.list[k] = (lw_poly){list.n, list.v};
        lua_replace(L, -4); // keep the numbers only
        lua_pop(L, 2);
    }
    return p;
}

int lw__lua_plant_transfer(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    transfer p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "plant transfer");
    LW__LUA_FIELDS(&r, transfer_fields, 0, &p);
    polynomials num = read_polynomials(&r, "num");
    polynomials den = read_polynomials(&r, "den");
    if (num.n_rows != den.n_rows || num.n_columns != den.n_columns)
        lw__lua_bad(&r, "num is %d x %d and den %d x %d polynomials; one shape is wanted",
                    num.n_rows, num.n_columns, den.n_rows, den.n_columns);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r,
         lw_plant_transfer(num.n_rows, num.n_columns, num.list, den.list, NULL, NULL, &box->it,
                           &err),
         &err);
    return finish(&r, box, &p.common, index);
}

typedef struct zeros_poles {
    common common;
    double gain;
} zeros_poles;

static const lw__lua_field zeros_poles_fields[] = {
    OTHER("zeros"),
    OTHER("poles"),
    OPTIONAL(zeros_poles, gain, "gain", FIELD_NUMBER, NULL),
    COMMON(zeros_poles),
};

// A list of numbers and { re, im }; NULL and 0 where it is not stated.
static double (*read_roots(const lw__lua_reader *r, const char *field, int *n))[2]
{
    lua_State *L = r->L;
    *n = 0;
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        return NULL;
    int index = lua_gettop(L);
    *n = lw__lua_length(r, field, index, "a list of numbers and { re, im }");
    double(*roots)[2] = lw__lua_room(L, (size_t)*n, sizeof *roots);
    int top = lua_gettop(L);
    for (int i = 0; i < *n; i++) {
        const char *name = lua_pushfstring(L, "%s[%d]", field, i + 1);
        if (lua_rawgeti(L, index, i + 1) == LUA_TTABLE) {
            lw__lua_list pair = lw__lua_numbers(r, name, -1, NULL);
            if (pair.n != 2)
                lw__lua_bad(r, "%s has %d numbers; { re, im } is wanted", name, pair.n);
            memcpy(roots[i], pair.v, sizeof roots[i]);
        } else {
            roots[i][0] = lw__lua_number(r, name, -1, NULL);
        }
        lua_settop(L, top);
    }
    return roots;
}

int lw__lua_plant_zeros_poles(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    zeros_poles p = {.gain = 1};
    int n_zeros, n_poles;
    lw__lua_reader r = lw__lua_read(L, 1, "plant zeros_poles");
    LW__LUA_FIELDS(&r, zeros_poles_fields, 0, &p);
    double(*zeros)[2] = read_roots(&r, "zeros", &n_zeros);
    double(*poles)[2] = read_roots(&r, "poles", &n_poles);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r,
         lw_plant_zeros_poles(n_zeros, (const double(*)[2])zeros, n_poles,
                              (const double(*)[2])poles, p.gain, &box->it, &err),
         &err);
    return finish(&r, box, &p.common, index);
}

// ---- ready plants

typedef struct ready {
    common common;
    double gain, time_constant, natural_frequency, damping, resistance, inductance;
} ready;

#define GAIN OPTIONAL(ready, gain, "gain", FIELD_NUMBER, NULL)
#define STATED_GAIN REQUIRED(ready, gain, "gain", FIELD_NUMBER, NULL)

static const lw__lua_field gain_fields[] = {STATED_GAIN, COMMON(ready)};
static const lw__lua_field integrator_fields[] = {STATED_GAIN, COMMON(ready)};
static const lw__lua_field first_order_fields[] = {
    GAIN, REQUIRED(ready, time_constant, "time_constant", FIELD_NUMBER, "s"), COMMON(ready)};
static const lw__lua_field second_order_fields[] = {
    GAIN, REQUIRED(ready, natural_frequency, "natural_frequency", FIELD_NUMBER, "rad/s"),
    REQUIRED(ready, damping, "damping", FIELD_NUMBER, "1"), COMMON(ready)};
static const lw__lua_field winding_fields[] = {
    REQUIRED(ready, resistance, "resistance", FIELD_NUMBER, "ohm"),
    REQUIRED(ready, inductance, "inductance", FIELD_NUMBER, "H"), COMMON(ready)};

// Read `fields`, make the plant by `make`, lay names, start and delay over it.
static int ready_plant(lua_State *L, const char *what, int n, const lw__lua_field *fields,
                       lw_status (*make)(const ready *p, lw_plant **out, lw_error *err))
{
    lw_error err = {LW_OK, ""};
    ready p = {.gain = 1};
    lw__lua_reader r = lw__lua_read(L, 1, what);
    lw__lua_fields(&r, n, fields, 0, 0, NULL, &p);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r, make(&p, &box->it, &err), &err);
    return finish(&r, box, &p.common, index);
}

static lw_status make_gain(const ready *p, lw_plant **out, lw_error *err)
{
    return lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &p->gain, NULL, NULL, NULL, NULL, out,
                                err);
}

static lw_status make_integrator(const ready *p, lw_plant **out, lw_error *err)
{
    return lw_plant_integrator(p->gain, out, err);
}

static lw_status make_first_order(const ready *p, lw_plant **out, lw_error *err)
{
    return lw_plant_first_order(p->gain, p->time_constant, out, err);
}

static lw_status make_second_order(const ready *p, lw_plant **out, lw_error *err)
{
    return lw_plant_second_order(p->gain, p->natural_frequency, p->damping, out, err);
}

static lw_status make_winding(const ready *p, lw_plant **out, lw_error *err)
{
    return lw_plant_winding(p->resistance, p->inductance, out, err);
}

#define READY(name)                                                                                \
    int lw__lua_plant_##name(lua_State *L)                                                         \
    {                                                                                              \
        return ready_plant(L, "plant " #name, (int)(sizeof name##_fields / sizeof *name##_fields), \
                           name##_fields, make_##name);                                            \
    }
READY(gain)
READY(integrator)
READY(first_order)
READY(second_order)
READY(winding)

typedef struct dc_machine {
    common common;
    lw_dc_machine p;
} dc_machine;

#define MACHINE(type)                                                                              \
    REQUIRED(type, p.resistance, "resistance", FIELD_NUMBER, "ohm"),                               \
        REQUIRED(type, p.inductance, "inductance", FIELD_NUMBER, "H"),                             \
        REQUIRED(type, p.torque_constant, "torque_constant", FIELD_NUMBER, "N m/A"),               \
        OPTIONAL(type, p.back_emf_constant, "back_emf_constant", FIELD_NUMBER, "V s"),             \
        COMMON(type)

static const lw__lua_field dc_machine_fields[] = {
    MACHINE(dc_machine),
    REQUIRED(dc_machine, p.inertia, "inertia", FIELD_NUMBER, "kg m^2"),
    OPTIONAL(dc_machine, p.friction, "friction", FIELD_NUMBER, "N m s"),
};

int lw__lua_plant_dc_machine(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    dc_machine d = {.p = {.back_emf_constant = (double)NAN}};
    lw__lua_reader r = lw__lua_read(L, 1, "plant dc_machine");
    LW__LUA_FIELDS(&r, dc_machine_fields, 0, &d);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r, lw_plant_dc_machine(&d.p, &box->it, &err), &err);
    return finish(&r, box, &d.common, index);
}

typedef struct two_mass_drive {
    common common;
    lw_two_mass_drive p;
} two_mass_drive;

static const lw__lua_field two_mass_drive_fields[] = {
    MACHINE(two_mass_drive),
    REQUIRED(two_mass_drive, p.motor_inertia, "motor_inertia", FIELD_NUMBER, "kg m^2"),
    REQUIRED(two_mass_drive, p.load_inertia, "load_inertia", FIELD_NUMBER, "kg m^2"),
    REQUIRED(two_mass_drive, p.stiffness, "stiffness", FIELD_NUMBER, "N m"),
    OPTIONAL(two_mass_drive, p.damping, "damping", FIELD_NUMBER, "N m s"),
    OPTIONAL(two_mass_drive, p.motor_friction, "motor_friction", FIELD_NUMBER, "N m s"),
    OPTIONAL(two_mass_drive, p.load_friction, "load_friction", FIELD_NUMBER, "N m s"),
};

int lw__lua_plant_two_mass_drive(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    two_mass_drive d = {.p = {.back_emf_constant = (double)NAN}};
    lw__lua_reader r = lw__lua_read(L, 1, "plant two_mass_drive");
    LW__LUA_FIELDS(&r, two_mass_drive_fields, 0, &d);
    lw__lua_plant *box = new_plant(L);
    int index = lua_gettop(L);
    must(&r, lw_plant_two_mass_drive(&d.p, &box->it, &err), &err);
    return finish(&r, box, &d.common, index);
}

// ---- methods

static lw_plant_view look(lua_State *L)
{
    lw__lua_plant *box = luaL_checkudata(L, 1, LW__LUA_PLANT);
    if (box->it == NULL)
        lw__lua_fail(L, "the plant is closed");
    return lw_plant_look(box->it);
}

int lw__lua_plant_states(lua_State *L)
{
    lw_plant_view view = look(L);
    return lw__lua_push_names(L, view.n_x, view.state_names);
}

int lw__lua_plant_inputs(lua_State *L)
{
    lw_plant_view view = look(L);
    return lw__lua_push_names(L, view.n_u, view.input_names);
}

int lw__lua_plant_outputs(lua_State *L)
{
    lw_plant_view view = look(L);
    return lw__lua_push_names(L, view.n_y, view.output_names);
}

static void push_rows(lua_State *L, const char *name, int n_rows, int n_columns, const double *v)
{
    lua_createtable(L, n_rows, 0);
    for (int i = 0; i < n_rows; i++) {
        lw__lua_push_numbers(L, n_columns, v + (size_t)i * (size_t)n_columns);
        lua_rawseti(L, -2, i + 1);
    }
    lua_setfield(L, -2, name);
}

int lw__lua_plant_matrices(lua_State *L)
{
    lw_plant_view view = look(L);
    lua_createtable(L, 0, 6);
    push_rows(L, "A", view.n_x, view.n_x, view.a);
    push_rows(L, "B", view.n_x, view.n_u, view.b);
    push_rows(L, "C", view.n_y, view.n_x, view.c);
    push_rows(L, "D", view.n_y, view.n_u, view.d);
    lw__lua_push_numbers(L, view.n_x, view.start);
    lua_setfield(L, -2, "start");
    lw__lua_push_numbers(L, view.n_u, view.delay);
    lua_setfield(L, -2, "delay");
    return 1;
}

int lw__lua_plant_close(lua_State *L)
{
    lw__lua_plant *box = luaL_checkudata(L, 1, LW__LUA_PLANT);
    lw_plant_free(box->it);
    box->it = NULL;
    return 0;
}
