// Flows: plants that are an ordinary differential equation given as functions.
//
// Workload: a few a rig, each made once; the functions are called by the rig's runs.
//
// Invariants
// 1. Copies of a flow with other names, start or delays share one definition; the last frees it.
// 2. A flow's matrices only say which outputs are states and which follow inputs without delay.

#include "plant/plant.h"

#include "base/alloc.h"

#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>

lw_flow_def lw_flow_default(void)
{
    return (lw_flow_def){.rtol = 1e-8, .direct = UINT32_MAX};
}

void lw__flow_release(lw__flow *flow)
{
    if (flow == NULL || --flow->references > 0)
        return;
    if (flow->def.free_context != NULL)
        flow->def.free_context(flow->def.context);
    lw__free(flow);
}

lw_status lw__plant_refuse_flow(const lw_plant *plant, const char *what, const char *name,
                                lw_error *err)
{
    if (plant->modes != NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "%s \"%.200s\": the plant has modes and not one set of matrices; it is "
                            "connected within a rig",
                            what, name);
    if (plant->flow == NULL)
        return LW_OK;
    return lw_error_set(err, LW_ERR_ARGUMENT,
                        "%s \"%.200s\": the plant is a flow and has no matrices; a flow is "
                        "connected within a rig",
                        what, name);
}

// ---- checks

static lw_status check_count(const char *what, int n, int most, lw_error *err)
{
    if (n >= 0 && n <= most)
        return LW_OK;
    return lw_error_set(err, LW_ERR_SHAPE, "number of %s is %d; permitted 0 to %d", what, n, most);
}

static lw_status check_parts(const lw_flow_def *def, lw_error *err)
{
    const struct {
        int missing;
        const char *name;
    } list[] = {{def->flow == NULL && def->n_x > 0, "flow"},
                {def->state_names == NULL && def->n_x > 0, "state_names"},
                {def->input_names == NULL && def->n_u > 0, "input_names"},
                {def->output_names == NULL && def->outputs != NULL && def->n_y > 0, "output_names"},
                {def->switches == NULL && def->n_switches > 0, "switches"}};
    for (size_t i = 0; i < sizeof list / sizeof list[0]; i++)
        if (list[i].missing)
            return lw_error_set(err, LW_ERR_ARGUMENT, "%s is missing", list[i].name);
    if (!(def->rtol >= 1e-13 && def->rtol <= 0.1))
        return lw__plant_bad(LW_ERR_ARGUMENT, "rtol", def->rtol, "permitted 1e-13 to 0.1", err);
    char field[240];
    for (int i = 0; def->atol != NULL && i < def->n_x; i++) {
        snprintf(field, sizeof field, "atol of %.200s", def->state_names[i]);
        if (!(def->atol[i] > 0 && isfinite(def->atol[i])))
            return lw__plant_bad(LW_ERR_ARGUMENT, field, def->atol[i], "permitted above 0", err);
    }
    for (int i = 0; def->modes != NULL && i < def->n_modes; i++) {
        snprintf(field, sizeof field, "mode %d", i + 1);
        if (!isfinite(def->modes[i]))
            return lw__plant_bad(LW_ERR_NOT_FINITE, field, def->modes[i],
                                 "a finite number is wanted", err);
    }
    return LW_OK;
}

static lw_status check(const lw_flow_def *def, lw_error *err)
{
    lw_status status = check_count("states", def->n_x, LW_PLANT_MAX_STATES, err);
    if (status == LW_OK)
        status = check_count("inputs", def->n_u, LW_PLANT_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_count("outputs", def->n_y, LW_PLANT_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_count("switches", def->n_switches, LW_FLOW_MAX_SWITCHES, err);
    if (status == LW_OK)
        status = check_count("modes", def->n_modes, LW_FLOW_MAX_MODES, err);
    return status == LW_OK ? check_parts(def, err) : status;
}

// ---- the shape: which outputs are states, which follow inputs

typedef struct shape {
    double zeros[LW_PLANT_MAX_STATES * LW_PLANT_MAX_STATES]; // for A and B
    double c[LW_PLANT_MAX_STATES * LW_PLANT_MAX_STATES];
    double d[LW_PLANT_MAX_STATES * LW_PLANT_MAX_PORTS];
} shape;

// An output that bears a state's name is that state.
static int select_state(const lw_flow_def *def, int output, shape *s)
{
    int state = def->output_names == NULL ? output : -1;
    for (int k = 0; state < 0 && k < def->n_x; k++)
        if (strcmp(def->output_names[output], def->state_names[k]) == 0)
            state = k;
    if (state < 0)
        return 0;
    s->c[output * def->n_x + state] = 1;
    return 1;
}

static lw_status select_states(const lw_flow_def *def, shape *s, lw_error *err)
{
    for (int i = 0; i < def->n_y; i++) {
        if (!select_state(def, i, s)) {
            const char *name = def->output_names != NULL ? def->output_names[i] : "";
            const char *near = lw_nearest_name(name, def->state_names, def->n_x);
            return lw_error_set(err, LW_ERR_NAME,
                                "no state \"%.200s\" to be an output%s%s%s; other outputs need a "
                                "function",
                                name, near ? "; nearest \"" : "", near ? near : "",
                                near ? "\"" : "");
        }
    }
    return LW_OK;
}

static lw_status make(const lw_flow_def *def, lw__flow *flow, shape *s, lw_plant **out,
                      lw_error *err)
{
    int n_y = def->outputs == NULL && def->output_names == NULL ? def->n_x : def->n_y;
    flow->def.n_y = n_y;
    lw_plant_view v = {.n_x = def->n_x,
                       .n_u = def->n_u,
                       .n_y = n_y,
                       .a = s->zeros,
                       .b = s->zeros,
                       .c = s->c,
                       .d = s->d,
                       .start = def->start,
                       .state_names = def->state_names,
                       .input_names = def->input_names,
                       .output_names =
                           def->output_names != NULL ? def->output_names : def->state_names,
                       .flow = &flow->def};
    if (def->outputs == NULL) {
        lw_status status = select_states(&flow->def, s, err);
        if (status != LW_OK)
            return status;
    }
    for (int i = 0; def->outputs != NULL && i < n_y; i++)
        if (!select_state(def, i, s))
            for (int k = 0; k < def->n_u; k++)
                s->d[i * def->n_u + k] = def->direct >> k & 1 ? 1.0 : 0.0;
    return lw__plant_make(&v, LW_PLANT_MAX_STATES, out, err);
}

// The definition with its own copies of lists of numbers, and without names: those are the plant's.
static lw__flow *own_definition(const lw_flow_def *def)
{
    size_t n_atol = (size_t)def->n_x, n_modes = (size_t)def->n_modes;
    lw__flow *flow = lw__alloc(sizeof *flow + sizeof(double) * (n_atol + n_modes + 1));
    if (flow == NULL)
        return NULL;
    double *atol = (double *)(flow + 1), *modes = atol + n_atol;
    for (size_t i = 0; i < n_atol; i++)
        atol[i] = def->atol != NULL ? def->atol[i] : def->rtol / 100;
    for (size_t i = 0; i < n_modes; i++)
        modes[i] = def->modes != NULL ? def->modes[i] : 0;
    flow->def = *def;
    flow->def.atol = atol;
    flow->def.modes = modes;
    flow->references = 1;
    return flow;
}

lw_status lw_plant_flow(const lw_flow_def *def, lw_plant **out, lw_error *err)
{
    lw_status status = check(def, err);
    if (status != LW_OK)
        return status;
    lw__flow *flow = own_definition(def);
    shape *s = flow != NULL ? lw__alloc(sizeof *s) : NULL;
    if (s == NULL) {
        lw__free(flow);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    }
    status = make(def, flow, s, out, err);
    lw__free(s);
    if (status != LW_OK) { // the context stays the caller's
        lw__free(flow);
        return status;
    }
    flow->references--; // the plant holds it now
    flow->def.state_names = flow->def.input_names = flow->def.output_names = NULL;
    flow->def.start = NULL;
    return LW_OK;
}
