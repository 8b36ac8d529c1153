// Ready plants with modes: switched converters, end stops.
//
// Workload: made once a rig.

#include "plant/plant.h"

#include "base/alloc.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

// ---- converters

// States current, voltage; inputs supply, gate, load_current; outputs current, voltage, mode.
#define N_X 2
#define N_U 3
#define N_Y 3
#define MOST 4

typedef struct circuit {
    double a[N_X * N_X], b[N_X * N_U], constant[N_X], offset[N_Y];
} circuit;

static const double shown[N_Y * N_X] = {1, 0, 0, 1, 0, 0};
static const double no_current[N_X * N_X] = {0, 0, 0, 1};

lw_switched_converter lw_switched_converter_default(void)
{
    return (lw_switched_converter){.load_resistance = (double)INFINITY};
}

static lw_status check_converter(const lw_switched_converter *p, lw_error *err)
{
    const struct {
        const char *name;
        double value;
        int above_0;
    } list[] = {{"inductance", p->inductance, 1},
                {"capacitance", p->capacitance, 1},
                {"winding_resistance", p->winding_resistance, 0},
                {"switch_resistance", p->switch_resistance, 0},
                {"diode_drop", p->diode_drop, 0}};
    for (size_t i = 0; i < sizeof list / sizeof *list; i++) {
        if (!isfinite(list[i].value) || list[i].value < 0)
            return lw__plant_bad(LW_ERR_ARGUMENT, list[i].name, list[i].value,
                                 list[i].above_0 ? "permitted above 0" : "permitted from 0 on",
                                 err);
        if (list[i].above_0 && list[i].value == 0)
            return lw__plant_bad(LW_ERR_ARGUMENT, list[i].name, list[i].value, "permitted above 0",
                                 err);
    }
    if (!(p->load_resistance > 0))
        return lw__plant_bad(LW_ERR_ARGUMENT, "load_resistance", p->load_resistance,
                             "permitted above 0", err);
    return LW_OK;
}

// L i' = supply_share supply - r i - voltage_share v + constant;
// C v' = current_share i - v / R - load_current.
static circuit make_circuit(const lw_switched_converter *p, int mode, double r, double supply_share,
                            double voltage_share, double constant, double current_share)
{
    double l = p->inductance, c = p->capacitance;
    circuit k = {.a = {-r / l, -voltage_share / l, current_share / c, -1 / p->load_resistance / c},
                 .b = {supply_share / l, 0, 0, 0, 0, -1 / c},
                 .constant = {constant / l, 0},
                 .offset = {0, 0, mode + 1}};
    return k;
}

// No current flows in the winding.
static circuit make_open(const lw_switched_converter *p, int mode)
{
    circuit k = make_circuit(p, mode, 0, 0, 0, 0, 0);
    return k;
}

static lw_mode mode_of(const char *name, const circuit *k)
{
    return (lw_mode){name, k->a, k->b, k->constant, shown, NULL, k->offset};
}

static lw_status make_converter(int n_modes, const lw_mode *modes, int n_switchings,
                                const lw_switching *switchings, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"current", "voltage"};
    static const char *const inputs[] = {"supply", "gate", "load_current"};
    static const char *const outputs[] = {"current", "voltage", "mode"};
    lw_modes_def def = {.n_x = N_X,
                        .n_u = N_U,
                        .n_y = N_Y,
                        .n_modes = n_modes,
                        .n_switchings = n_switchings,
                        .state_names = states,
                        .input_names = inputs,
                        .output_names = outputs,
                        .modes = modes,
                        .switchings = switchings};
    return lw_plant_modes(&def, out, err);
}

static const double gate[N_U] = {0, 1, 0}, gate_down[N_U] = {0, -1, 0};
static const double current[N_X] = {1, 0}, current_down[N_X] = {-1, 0};

lw_status lw_plant_buck_switched(const lw_switched_converter *p, lw_plant **out, lw_error *err)
{
    static const double voltage[N_X] = {0, 1}, voltage_down[N_X] = {0, -1};
    static const double supply_down[N_U] = {-1, 0, 0};
    enum { OFF, ON, DIODE, BACK };
    lw_status status = check_converter(p, err);
    if (status != LW_OK)
        return status;
    double rs = p->winding_resistance + p->switch_resistance, vd = p->diode_drop;
    circuit k[MOST] = {make_open(p, OFF), make_circuit(p, ON, rs, 1, 1, 0, 1),
                       make_circuit(p, DIODE, p->winding_resistance, 0, 1, -vd, 1),
                       make_circuit(p, BACK, p->winding_resistance, 1, 1, vd, 1)};
    const lw_mode modes[] = {mode_of("off", &k[OFF]), mode_of("on", &k[ON]),
                             mode_of("diode", &k[DIODE]), mode_of("back", &k[BACK])};
    const lw_condition opens = {NULL, gate_down, 0.5}, closes = {NULL, gate, -0.5};
    const lw_switching switchings[] = {
        {NULL, "on", closes, {0}, 0, NULL, NULL},
        {"on", "diode", opens, {current, NULL, 0}, 1, NULL, NULL},
        {"on", "back", opens, {current_down, NULL, 0}, 1, NULL, NULL},
        {"diode", "off", {current_down, NULL, 0}, {0}, 0, no_current, NULL},
        {"back", "off", {current, NULL, 0}, {0}, 0, no_current, NULL},
        {"off", "diode", {voltage_down, NULL, -vd}, {0}, 0, NULL, NULL},
        {"off", "back", {voltage, supply_down, -vd}, {0}, 0, NULL, NULL}};
    return make_converter(4, modes, (int)(sizeof switchings / sizeof *switchings), switchings, out,
                          err);
}

lw_status lw_plant_boost_switched(const lw_switched_converter *p, lw_plant **out, lw_error *err)
{
    static const double voltage_down[N_X] = {0, -1};
    static const double supply[N_U] = {1, 0, 0};
    enum { OFF, ON, DIODE };
    lw_status status = check_converter(p, err);
    if (status != LW_OK)
        return status;
    double rs = p->winding_resistance + p->switch_resistance, vd = p->diode_drop;
    circuit k[MOST] = {make_open(p, OFF), make_circuit(p, ON, rs, 1, 0, 0, 0),
                       make_circuit(p, DIODE, p->winding_resistance, 1, 1, -vd, 1)};
    const lw_mode modes[] = {mode_of("off", &k[OFF]), mode_of("on", &k[ON]),
                             mode_of("diode", &k[DIODE])};
    const lw_condition opens = {NULL, gate_down, 0.5}, closes = {NULL, gate, -0.5};
    const lw_switching switchings[] = {
        {NULL, "on", closes, {0}, 0, NULL, NULL},
        {"on", "diode", opens, {0}, 0, NULL, NULL},
        {"diode", "off", {current_down, NULL, 0}, {0}, 0, no_current, NULL},
        {"off", "diode", {voltage_down, supply, -vd}, {0}, 0, NULL, NULL}};
    return make_converter(3, modes, (int)(sizeof switchings / sizeof *switchings), switchings, out,
                          err);
}

// ---- end stops

#define LARGE (LW_PLANT_MAX_STATES * LW_PLANT_MAX_STATES)

// What an end stop is put together of; modes: free, at the low stop, at the high stop.
typedef struct stops {
    lw_plant_view v;
    const lw_end_stop *def;
    int position, velocity;
    double held[LARGE], held_b[LW_PLANT_MAX_STATES * LW_PLANT_MAX_PORTS];
    double bounce[LARGE], rest[LARGE], at_stop[2][LW_PLANT_MAX_STATES];
    double forth[LW_PLANT_MAX_STATES], back[LW_PLANT_MAX_STATES];
    double speed[2][LW_PLANT_MAX_STATES]; // rebound: restitution times the speed of impact
    double push[2][LW_PLANT_MAX_STATES], push_u[2][LW_PLANT_MAX_PORTS];
    int n_modes, n_switchings;
    lw_mode modes[3];
    lw_switching switchings[6];
} stops;

static lw_status find_state(const lw_plant_view *v, const char *field, const char *name, int *out,
                            lw_error *err)
{
    for (int i = 0; i < v->n_x; i++)
        if (name != NULL && strcmp(v->state_names[i], name) == 0) {
            *out = i;
            return LW_OK;
        }
    const char *near = name != NULL ? lw_nearest_name(name, v->state_names, v->n_x) : NULL;
    return lw_error_set(err, LW_ERR_NAME, "%s: no state \"%.200s\"%s%s%s", field,
                        name != NULL ? name : "", near ? "; nearest \"" : "", near ? near : "",
                        near ? "\"" : "");
}

static lw_status check_stop(const lw_plant *plant, const lw_end_stop *e, stops *s, lw_error *err)
{
    s->v = lw_plant_look(plant);
    if (s->v.flow != NULL || s->v.modes != NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "the plant is not linear; an end stop wants one "
                            "that is");
    lw_status status = find_state(&s->v, "position", e->position, &s->position, err);
    if (status == LW_OK)
        status = find_state(&s->v, "velocity", e->velocity, &s->velocity, err);
    if (status != LW_OK)
        return status;
    if (!(e->lo < e->hi) || (isinf(e->lo) && isinf(e->hi)))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "range is %.12g to %.12g; at least one stop, the low one first", e->lo,
                            e->hi);
    if (!(e->restitution >= 0 && e->restitution <= 1))
        return lw__plant_bad(LW_ERR_ARGUMENT, "restitution", e->restitution, "permitted 0 to 1",
                             err);
    if (!isfinite(e->rest_below) || e->rest_below < 0 || (e->restitution > 0 && e->rest_below == 0))
        return lw__plant_bad(LW_ERR_ARGUMENT, "rest_below", e->rest_below,
                             "a rebound above 0 below which it comes to rest is wanted", err);
    double start = s->v.start[s->position];
    if (start < e->lo || start > e->hi)
        return lw__plant_bad(LW_ERR_ARGUMENT, "start of the position", start,
                             "a place between the stops is wanted", err);
    return LW_OK;
}

// At a stop neither position nor velocity moves.
static void hold(stops *s)
{
    int n = s->v.n_x, m = s->v.n_u;
    memcpy(s->held, s->v.a, sizeof(double) * (size_t)(n * n));
    memcpy(s->held_b, s->v.b, sizeof(double) * (size_t)(n * m));
    const int stands[2] = {s->position, s->velocity};
    for (int k = 0; k < 2; k++) {
        memset(s->held + stands[k] * n, 0, sizeof(double) * (size_t)n);
        memset(s->held_b + stands[k] * m, 0, sizeof(double) * (size_t)m);
    }
    for (int i = 0; i < n; i++)
        s->bounce[i * n + i] = s->rest[i * n + i] = 1;
    s->bounce[s->velocity * n + s->velocity] = -s->def->restitution;
    s->rest[s->position * n + s->position] = s->rest[s->velocity * n + s->velocity] = 0;
}

// One stop: `side` 0 low, 1 high.
static void add_stop(stops *s, int side)
{
    static const char *const names[] = {"at the low stop", "at the high stop"};
    const lw_end_stop *e = s->def;
    double sign = side ? 1 : -1, at = side ? e->hi : e->lo;
    int n = s->v.n_x, m = s->v.n_u;
    double *toward = side ? s->forth : s->back;
    toward[s->position] = sign;
    s->at_stop[side][s->position] = at;
    s->speed[side][s->velocity] = sign * e->restitution;
    for (int k = 0; k < n; k++)
        s->push[side][k] = -sign * s->v.a[s->velocity * n + k];
    for (int k = 0; k < m; k++)
        s->push_u[side][k] = -sign * s->v.b[s->velocity * m + k];
    s->modes[s->n_modes++] = (lw_mode){names[side], s->held, s->held_b, NULL, s->v.c, s->v.d, NULL};
    lw_condition hits = {toward, NULL, -sign * at};
    lw_condition fast = {s->speed[side], NULL, -e->rest_below};
    if (e->restitution > 0)
        s->switchings[s->n_switchings++] =
            (lw_switching){"free", "free", hits, fast, 1, s->bounce, NULL};
    s->switchings[s->n_switchings++] =
        (lw_switching){"free", names[side], hits, {0}, 0, s->rest, s->at_stop[side]};
    s->switchings[s->n_switchings++] = (lw_switching){
        names[side], "free", {s->push[side], s->push_u[side], 0}, {0}, 0, NULL, NULL};
}

lw_status lw_plant_end_stop(const lw_plant *plant, const lw_end_stop *stop, lw_plant **out,
                            lw_error *err)
{
    stops *s = lw__alloc(sizeof *s);
    if (s == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    s->def = stop;
    lw_status status = check_stop(plant, stop, s, err);
    if (status == LW_OK) {
        hold(s);
        s->modes[s->n_modes++] = (lw_mode){"free", s->v.a, s->v.b, NULL, s->v.c, s->v.d, NULL};
        if (!isinf(stop->lo))
            add_stop(s, 0);
        if (!isinf(stop->hi))
            add_stop(s, 1);
        lw_modes_def def = {.n_x = s->v.n_x,
                            .n_u = s->v.n_u,
                            .n_y = s->v.n_y,
                            .n_modes = s->n_modes,
                            .n_switchings = s->n_switchings,
                            .state_names = s->v.state_names,
                            .input_names = s->v.input_names,
                            .output_names = s->v.output_names,
                            .start = s->v.start,
                            .modes = s->modes,
                            .switchings = s->switchings};
        status = lw_plant_modes(&def, out, err);
    }
    lw__free(s);
    return status;
}
