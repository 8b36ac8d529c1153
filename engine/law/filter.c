// Lead and z-transfer functions on the error.
//
// Workload: once a sample; a biquad is the usual size.
//
// Invariants
// 1. The recurrence runs on the unlimited output, so that it is the stated transfer function
//    whatever the limits are.
// 2. Coefficients are divided by a0 once, when the law is made.

#include "law/ready.h"

#include <math.h>
#include <string.h>

static const char *const in_names[] = {"wanted", "measured"};
static const char *const out_names[] = {"out", "unlimited"};

// ---- lead

typedef struct lead {
    double gain, zero, pole;
    lw__limits limits;
} lead;

enum { PREVIOUS_ERROR, PREVIOUS_OUTPUT, N_LEAD_STATES };

LW__LAW_BODY void advance_lead(const lead *p, const lw_law_time *time, const double *in,
                               double *state, double *out, int stride)
{
    double a = 2 / time->nominal, e = in[0] - in[stride];
    double e_prev = state[PREVIOUS_ERROR * stride], u_prev = state[PREVIOUS_OUTPUT * stride];
    double u = ((a - p->pole) * u_prev + p->gain * ((a + p->zero) * e + (p->zero - a) * e_prev)) /
               (a + p->pole);
    state[PREVIOUS_ERROR * stride] = e;
    state[PREVIOUS_OUTPUT * stride] = u;
    out[0] = lw__limited(p->limits, u);
    out[stride] = u;
}

static int step_lead(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out)
{
    advance_lead(param, time, in, state, out, 1);
    return 0;
}

static int lanes_lead(const void *param, const lw_law_time *time, const double *in, double *state,
                      double *out, int n, int stride)
{
    for (int w = 0; w < n; w++)
        advance_lead(param, time, in + w, state + w, out + w, stride);
    return 0;
}

static int jacobian_lead(const void *param, const lw_law_time *time, const double *in,
                         const double *state, double *j)
{
    const lead *p = param;
    double at[N_LEAD_STATES] = {state[PREVIOUS_ERROR], state[PREVIOUS_OUTPUT]}, out[2];
    advance_lead(p, time, in, at, out, 1);
    double a = 2 / time->nominal, whole = a + p->pole;
    double by_e = p->gain * (a + p->zero) / whole;
    const double u[4] = {by_e, -by_e, p->gain * (p->zero - a) / whole, (a - p->pole) / whole};
    const double e[4] = {1, -1, 0, 0};
    for (int k = 0; k < 4; k++) {
        j[0 * 4 + k] = lw__beyond(p->limits, out[1]) ? 0 : u[k];
        j[1 * 4 + k] = u[k];
        j[(2 + PREVIOUS_ERROR) * 4 + k] = e[k];
        j[(2 + PREVIOUS_OUTPUT) * 4 + k] = u[k];
    }
    return 0;
}

lw_status lw_law_lead(double gain, double zero, double pole, double lo, double hi, lw_law **out,
                      lw_error *err)
{
    static const char *const states[] = {"previous_error", "previous_output"};
    lead p = {.gain = gain, .zero = zero, .pole = pole};
    lw_status status = lw__law_field("gain", gain, err);
    if (status == LW_OK)
        status = lw__law_field("zero", zero, err);
    if (status == LW_OK)
        status = lw__law_field("pole", pole, err);
    if (status == LW_OK && !(pole > 0))
        status = lw__law_bad("pole", pole, "permitted above 0", err);
    if (status == LW_OK)
        status = lw__law_limits(lo, hi, &p.limits, err);
    if (status != LW_OK)
        return status;
    lead *param = lw__law_param(sizeof *param, err);
    if (param == NULL)
        return LW_ERR_MEMORY;
    *param = p;
    lw_law_def def = {.kind = "lead",
                      .n_in = 2,
                      .n_out = 2,
                      .n_state = N_LEAD_STATES,
                      .in_names = in_names,
                      .out_names = out_names,
                      .state_names = states,
                      .step = step_lead,
                      .lanes = lanes_lead,
                      .jacobian = jacobian_lead};
    return lw__law_finish(&def, param, out, err);
}

// ---- z-transfer function

typedef struct z_transfer {
    lw__limits limits;
    int order;
    double b[LW_LAW_MAX_STATES + 1], a[LW_LAW_MAX_STATES + 1]; // order + 1 each, a[0] = 1
} z_transfer;

LW__LAW_BODY void advance_z(const z_transfer *p, const double *in, double *state, double *out,
                            int stride)
{
    int n = p->order;
    double e = in[0] - in[stride];
    double u = n > 0 ? p->b[0] * e + state[0] : p->b[0] * e;
    for (int i = 1; i < n; i++)
        state[(i - 1) * stride] = state[i * stride] + p->b[i] * e - p->a[i] * u;
    if (n > 0)
        state[(n - 1) * stride] = p->b[n] * e - p->a[n] * u;
    out[0] = lw__limited(p->limits, u);
    out[stride] = u;
}

static int step_z(const void *param, const lw_law_time *time, const double *in, double *state,
                  double *out)
{
    (void)time;
    advance_z(param, in, state, out, 1);
    return 0;
}

static int lanes_z(const void *param, const lw_law_time *time, const double *in, double *state,
                   double *out, int n, int stride)
{
    (void)time;
    for (int w = 0; w < n; w++)
        advance_z(param, in + w, state + w, out + w, stride);
    return 0;
}

static int jacobian_z(const void *param, const lw_law_time *time, const double *in,
                      const double *state, double *j)
{
    (void)time;
    const z_transfer *p = param;
    int order = p->order, n = 2 + order;
    double u = order > 0 ? p->b[0] * (in[0] - in[1]) + state[0] : p->b[0] * (in[0] - in[1]);
    memset(j, 0, sizeof(double) * (size_t)(n * n));
    double *by_u = j + n;
    by_u[0] = p->b[0];
    by_u[1] = -p->b[0];
    if (order > 0)
        by_u[2] = 1;
    if (!lw__beyond(p->limits, u))
        memcpy(j, by_u, sizeof(double) * (size_t)n);
    for (int i = 1; i <= order; i++) {
        double *row = j + (1 + i) * n;
        row[0] = p->b[i];
        row[1] = -p->b[i];
        for (int k = 0; k < n; k++)
            row[k] -= p->a[i] * by_u[k];
        if (i < order)
            row[2 + i] += 1;
    }
    return 0;
}

static lw_status read_list(const char *name, int n, const double *list, double a0, double *to,
                           lw_error *err)
{
    for (int i = 0; i < n; i++) {
        if (!isfinite(list[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE, "%s%d is %.12g; a finite number is wanted",
                                name, i, list[i]);
        to[i] = list[i] / a0;
        if (!isfinite(to[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s%d / a0 is %.12g / %.12g, beyond the range of numbers", name, i,
                                list[i], a0);
    }
    return LW_OK;
}

static lw_status check_lengths(int n_b, int n_a, lw_error *err)
{
    const char *name = n_b < 1 || n_b > LW_LAW_MAX_STATES + 1 ? "b" : "a";
    int n = name[0] == 'b' ? n_b : n_a;
    if (n < 1 || n > LW_LAW_MAX_STATES + 1)
        return lw_error_set(err, LW_ERR_SHAPE, "%s has %d coefficients; permitted 1 to %d", name, n,
                            LW_LAW_MAX_STATES + 1);
    return LW_OK;
}

static lw_status read_z(int n_b, const double *b, int n_a, const double *a, double lo, double hi,
                        z_transfer *p, lw_error *err)
{
    lw_status status = check_lengths(n_b, n_a, err);
    if (status == LW_OK && a[0] == 0)
        status = lw__law_bad("a0", a[0], "any other number is permitted", err);
    if (status == LW_OK)
        status = read_list("a", n_a, a, a[0], p->a, err);
    if (status == LW_OK)
        status = read_list("b", n_b, b, a[0], p->b, err);
    if (status == LW_OK)
        status = lw__law_limits(lo, hi, &p->limits, err);
    p->order = (n_b > n_a ? n_b : n_a) - 1;
    return status;
}

lw_status lw_law_z_transfer(int n_b, const double *b, int n_a, const double *a, double lo,
                            double hi, lw_law **out, lw_error *err)
{
    z_transfer p = {.order = 0};
    lw_status status = read_z(n_b, b, n_a, a, lo, hi, &p, err);
    if (status != LW_OK)
        return status;
    z_transfer *param = lw__law_param(sizeof *param, err);
    if (param == NULL)
        return LW_ERR_MEMORY;
    *param = p;
    lw__ports states = {0};
    lw__ports_add(&states, "s", p.order, 1);
    lw_law_def def = {.kind = "z transfer",
                      .n_in = 2,
                      .n_out = 2,
                      .n_state = p.order,
                      .in_names = in_names,
                      .out_names = out_names,
                      .state_names = states.name,
                      .step = step_z,
                      .lanes = lanes_z,
                      .jacobian = jacobian_z};
    return lw__law_finish(&def, param, out, err);
}
