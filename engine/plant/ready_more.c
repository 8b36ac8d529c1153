// Further ready plants. Their equations stand in the public header (ready.h).
//
// Workload: made once a rig; a flow is evaluated some ten times a period.
//
// Invariants
// 1. Parameters are checked by one table a plant: name, value, permitted range.
// 2. A flow's parameters are its context, owned by the plant.

#include "plant/plant.h"

#include "base/alloc.h"

#include <latewood/elementary.h>
#include <latewood/ready.h>

#include <math.h>
#include <stdio.h>
#include <string.h>

typedef enum range { ANY, FROM_ZERO, ABOVE_ZERO, ABOVE_ZERO_OR_INFINITE } range;

typedef struct parameter {
    const char *name;
    double value;
    range permitted;
} parameter;

static int is_permitted(const parameter *p)
{
    if (p->permitted == ABOVE_ZERO_OR_INFINITE)
        return p->value > 0;
    return isfinite(p->value) &&
           (p->permitted == ANY || p->value > 0 || (p->permitted == FROM_ZERO && p->value == 0));
}

static lw_status check(int n, const parameter *list, lw_error *err)
{
    static const char *const words[] = {"a finite number is wanted", "permitted 0 or more",
                                        "permitted above 0", "permitted above 0"};
    for (int i = 0; i < n; i++)
        if (!is_permitted(&list[i]))
            return lw__plant_bad(LW_ERR_ARGUMENT, list[i].name, list[i].value,
                                 words[list[i].permitted], err);
    return LW_OK;
}

#define N_OF(list) ((int)(sizeof(list) / sizeof *(list)))

// ---- linear ones

lw_status lw_plant_lc_filter(const lw_lc_filter *p, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"current", "capacitor"}, *const outputs[] = {"current",
                                                                                      "out"};
    static const char *const inputs[] = {"voltage", "load_current"};
    const parameter list[] = {{"inductance", p->inductance, ABOVE_ZERO},
                              {"capacitance", p->capacitance, ABOVE_ZERO},
                              {"coil_resistance", p->coil_resistance, FROM_ZERO},
                              {"capacitor_resistance", p->capacitor_resistance, FROM_ZERO},
                              {"load_resistance", p->load_resistance, ABOVE_ZERO_OR_INFINITE}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    // out = v + s (i - out g - j), g the load's conductance: out = k (v + s (i - j))
    double s = p->capacitor_resistance, g = 1 / p->load_resistance, k = 1 / (1 + s * g);
    double l = p->inductance, c = p->capacitance;
    const double a[] = {-(p->coil_resistance + k * s) / l, -k / l, (1 - g * k * s) / c, -g * k / c};
    const double b[] = {1 / l, k * s / l, 0, -(1 - g * k * s) / c};
    const double shown[] = {1, 0, k * s, k}, direct[] = {0, 0, 0, -k * s};
    return lw_plant_state_space(2, 2, 2, a, b, shown, direct, NULL, states, inputs, outputs, out,
                                err);
}

lw_status lw_plant_thermal_lag(const lw_thermal_lag *p, lw_plant **out, lw_error *err)
{
    enum { MOST = 32 };
    static const char *const inputs[] = {"power", "ambient"};
    char name[MOST][20];
    const char *names[MOST];
    double a[MOST * MOST] = {0}, b[MOST * 2] = {0}, shown[MOST * MOST] = {0};
    const parameter list[] = {{"resistance", p->resistance, ABOVE_ZERO},
                              {"capacity", p->capacity, ABOVE_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    int n = p->stages;
    if (n < 1 || n > MOST)
        return lw__plant_bad(LW_ERR_ARGUMENT, "stages", n, "permitted 1 to 32", err);
    double rate = (double)n * n / (p->resistance * p->capacity);
    for (int i = 0; i < n; i++) {
        snprintf(name[i], sizeof name[i], n == 1 ? "temperature" : "temperature%d", i + 1);
        names[i] = name[i];
        shown[i * n + i] = 1;
        a[i * n + i] = i > 0 ? -2 * rate : -rate;
        if (i > 0)
            a[i * n + i - 1] = rate;
        if (i < n - 1)
            a[i * n + i + 1] = rate;
    }
    b[0] = n / p->capacity;
    b[(n - 1) * 2 + 1] = rate;
    return lw_plant_state_space(n, 2, n, a, b, shown, NULL, NULL, names, inputs, names, out, err);
}

// ---- flows

// Make the plant; it owns a copy of the parameters.
static lw_status make(lw_flow_def def, const void *parameters, size_t size, lw_plant **out,
                      lw_error *err)
{
    void *own = lw__alloc(size);
    if (own == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    def.context = memcpy(own, parameters, size);
    def.free_context = lw__free;
    lw_status status = lw_plant_flow(&def, out, err);
    if (status != LW_OK)
        lw__free(own);
    return status;
}

static const char *const converter_states[] = {"current", "voltage"};
static const char *const converter_inputs[] = {"duty", "supply", "load_current"};

static double share(double duty)
{
    return duty < 0 ? 0 : duty > 1 ? 1 : duty;
}

static double capacitor(const lw_averaged_converter *p, double current, double v, double load)
{
    double power = p->load_power != 0 ? p->load_power / v : 0;
    return (current - v / p->load_resistance - load - power) / p->capacitance;
}

static int buck(void *context, double t, const double *x, const double *u, double *dx)
{
    const lw_averaged_converter *p = context;
    (void)t;
    dx[0] = (share(u[0]) * u[1] - p->resistance * x[0] - x[1]) / p->inductance;
    dx[1] = capacitor(p, x[0], x[1], u[2]);
    return 0;
}

static int boost(void *context, double t, const double *x, const double *u, double *dx)
{
    const lw_averaged_converter *p = context;
    double off = 1 - share(u[0]);
    (void)t;
    dx[0] = (u[1] - p->resistance * x[0] - off * x[1]) / p->inductance;
    dx[1] = capacitor(p, off * x[0], x[1], u[2]);
    return 0;
}

static lw_status make_converter(const lw_averaged_converter *p,
                                int (*flow)(void *, double, const double *, const double *,
                                            double *),
                                lw_plant **out, lw_error *err)
{
    const parameter list[] = {{"inductance", p->inductance, ABOVE_ZERO},
                              {"capacitance", p->capacitance, ABOVE_ZERO},
                              {"resistance", p->resistance, FROM_ZERO},
                              {"load_power", p->load_power, FROM_ZERO},
                              {"load_resistance", p->load_resistance, ABOVE_ZERO_OR_INFINITE}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    const double start[] = {0, p->load_power > 0 ? 1.0 : 0.0}; // constant power has no meaning at 0
    lw_flow_def def = lw_flow_default();
    def.n_x = 2;
    def.n_u = 3;
    def.state_names = converter_states;
    def.input_names = converter_inputs;
    def.start = start;
    def.flow = flow;
    return make(def, p, sizeof *p, out, err);
}

lw_status lw_plant_buck(const lw_averaged_converter *p, lw_plant **out, lw_error *err)
{
    return make_converter(p, buck, out, err);
}

lw_status lw_plant_boost(const lw_averaged_converter *p, lw_plant **out, lw_error *err)
{
    return make_converter(p, boost, out, err);
}

static double machine_torque(const lw_magnet_machine *p, const double *x)
{
    double saliency = (p->d_inductance - p->q_inductance) * x[0] * x[1];
    return 1.5 * p->pole_pairs * (p->flux * x[1] + saliency);
}

static int machine(void *context, double t, const double *x, const double *u, double *dx)
{
    const lw_magnet_machine *p = context;
    double w = p->pole_pairs * x[2], ld = p->d_inductance, lq = p->q_inductance;
    (void)t;
    dx[0] = (u[0] - p->resistance * x[0] + w * lq * x[1]) / ld;
    dx[1] = (u[1] - p->resistance * x[1] - w * (ld * x[0] + p->flux)) / lq;
    dx[2] = (machine_torque(p, x) - p->friction * x[2] - u[2]) / p->inertia;
    dx[3] = x[2];
    return 0;
}

static int machine_outputs(void *context, double t, const double *x, const double *u, double *y)
{
    (void)t;
    (void)u;
    memcpy(y, x, sizeof(double) * 4);
    y[4] = machine_torque(context, x);
    return 0;
}

lw_status lw_plant_magnet_machine(const lw_magnet_machine *p, lw_plant **out, lw_error *err)
{
    static const char *const names[] = {"d_current", "q_current", "speed", "angle", "torque"};
    static const char *const inputs[] = {"d_voltage", "q_voltage", "load_torque"};
    const parameter list[] = {{"resistance", p->resistance, FROM_ZERO},
                              {"d_inductance", p->d_inductance, ABOVE_ZERO},
                              {"q_inductance", p->q_inductance, ABOVE_ZERO},
                              {"flux", p->flux, ANY},
                              {"inertia", p->inertia, ABOVE_ZERO},
                              {"friction", p->friction, FROM_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    if (p->pole_pairs < 1 || p->pole_pairs > 100)
        return lw__plant_bad(LW_ERR_ARGUMENT, "pole_pairs", p->pole_pairs, "permitted 1 to 100",
                             err);
    lw_flow_def def = lw_flow_default();
    def.n_x = 4;
    def.n_u = 3;
    def.n_y = 5;
    def.state_names = names;
    def.input_names = inputs;
    def.output_names = names;
    def.flow = machine;
    def.outputs = machine_outputs;
    def.direct = 0;
    return make(def, p, sizeof *p, out, err);
}

// ---- pendulum: modes are whether it rests, and the way it moves (-1 or 1)

enum { ANGLE, SPEED, RESTS, WAY };
enum { MOVES, HELD, UNDECIDED }; // undecided: at the start, as speed and torque are there

static double torque_without_friction(const lw_pendulum *p, const double *x, const double *u)
{
    return u[0] - p->weight_torque * lw_sin(x[ANGLE]);
}

static int is_held(const lw_pendulum *p, const double *x, double torque)
{
    return x[RESTS] == HELD ||
           (x[RESTS] == UNDECIDED && x[SPEED] == 0 && fabs(torque) <= p->breakaway);
}

static double way_of(const double *x, double torque)
{
    if (x[RESTS] == MOVES)
        return x[WAY];
    double by = x[SPEED] != 0 ? x[SPEED] : torque;
    return by > 0 ? 1 : -1;
}

static int pendulum(void *context, double t, const double *x, const double *u, double *dx)
{
    const lw_pendulum *p = context;
    (void)t;
    double torque = torque_without_friction(p, x, u);
    dx[ANGLE] = dx[SPEED] = 0;
    if (p->dry > 0 && is_held(p, x, torque))
        return 0;
    double dry = p->dry > 0 ? p->dry * way_of(x, torque) : 0;
    dx[ANGLE] = x[SPEED];
    dx[SPEED] = (torque - p->viscous * x[SPEED] - dry) / p->inertia;
    return 0;
}

// It comes to rest where the speed passes zero; it breaks away upwards or downwards.
static int pendulum_switches(void *context, double t, const double *x, const double *u, double *g)
{
    const lw_pendulum *p = context;
    double torque = torque_without_friction(p, x, u);
    (void)t;
    g[0] = x[SPEED];
    g[1] = torque - p->breakaway;
    g[2] = -torque - p->breakaway;
    return 0;
}

static int pendulum_happened(void *context, double t, double *x, const double *u, int which,
                             int rising)
{
    const lw_pendulum *p = context;
    double torque = torque_without_friction(p, x, u);
    (void)t;
    if (which == 0 && x[RESTS] != HELD) {
        x[RESTS] = fabs(torque) <= p->breakaway ? HELD : MOVES;
        x[SPEED] = x[RESTS] == HELD ? 0 : x[SPEED];
        x[WAY] = torque > 0 ? 1 : -1;
    } else if (which > 0 && rising && x[RESTS] != MOVES && x[SPEED] == 0) {
        x[RESTS] = MOVES;
        x[WAY] = which == 1 ? 1 : -1;
    }
    return 0;
}

lw_status lw_plant_pendulum(const lw_pendulum *p, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"angle", "speed"}, *const inputs[] = {"torque"};
    const parameter list[] = {{"inertia", p->inertia, ABOVE_ZERO},
                              {"weight_torque", p->weight_torque, ANY},
                              {"viscous", p->viscous, FROM_ZERO},
                              {"dry", p->dry, FROM_ZERO},
                              {"breakaway", p->breakaway, FROM_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    lw_pendulum own = *p;
    own.breakaway = own.breakaway == 0 ? own.dry : own.breakaway;
    if (own.breakaway < own.dry)
        return lw__plant_bad(LW_ERR_ARGUMENT, "breakaway", p->breakaway,
                             "at least the dry friction is wanted", err);
    static const double modes[] = {UNDECIDED, 1};
    lw_flow_def def = lw_flow_default();
    def.n_x = 2;
    def.n_u = 1;
    def.state_names = states;
    def.input_names = inputs;
    def.flow = pendulum;
    if (own.dry > 0) {
        def.n_switches = 3;
        def.switches = pendulum_switches;
        def.n_modes = 2;
        def.modes = modes;
        def.happened = pendulum_happened;
    }
    return make(def, &own, sizeof own, out, err);
}

// ---- tank

static double outflow(const lw_tank *p, double level)
{
    return level > 0 ? p->outlet_area * sqrt(2 * p->gravity * level) : 0;
}

static int tank(void *context, double t, const double *x, const double *u, double *dx)
{
    const lw_tank *p = context;
    (void)t;
    double rise = (u[0] - outflow(p, x[0])) / p->area;
    dx[0] = x[0] <= 0 && rise < 0 ? 0 : rise; // an empty tank stays empty
    return 0;
}

static int tank_outputs(void *context, double t, const double *x, const double *u, double *y)
{
    (void)t;
    (void)u;
    y[0] = x[0];
    y[1] = outflow(context, x[0]);
    return 0;
}

static int tank_switches(void *context, double t, const double *x, const double *u, double *g)
{
    (void)context;
    (void)t;
    (void)u;
    g[0] = x[0];
    return 0;
}

static int tank_empty(void *context, double t, double *x, const double *u, int which, int rising)
{
    (void)context;
    (void)t;
    (void)u;
    (void)which;
    if (!rising)
        x[0] = 0;
    return 0;
}

lw_status lw_plant_tank(const lw_tank *p, lw_plant **out, lw_error *err)
{
    static const char *const names[] = {"level", "outflow"}, *const inputs[] = {"inflow"};
    const parameter list[] = {{"area", p->area, ABOVE_ZERO},
                              {"outlet_area", p->outlet_area, FROM_ZERO},
                              {"gravity", p->gravity, FROM_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    if (status != LW_OK)
        return status;
    lw_tank own = *p;
    own.gravity = own.gravity == 0 ? 9.80665 : own.gravity;
    lw_flow_def def = lw_flow_default();
    def.n_x = 1;
    def.n_u = 1;
    def.n_y = 2;
    def.state_names = names;
    def.input_names = inputs;
    def.output_names = names;
    def.flow = tank;
    def.outputs = tank_outputs;
    def.direct = 0;
    def.n_switches = 1;
    def.switches = tank_switches;
    def.happened = tank_empty;
    return make(def, &own, sizeof own, out, err);
}
