// Laws that belong to sensors: the decimation filter behind a modulator, speed from counts and from
// the time between edges.
//
// Workload: the filter steps once a clock of its modulator, one product for each open window.
//
// Invariants
// 1. Weights are whole numbers over ratio^order, exact as doubles.
// 2. The windows open at one time are `order`: each clock adds to all of them, none looks back.

#include "law/ready.h"

#include "base/alloc.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#define MAX_ORDER 4

typedef struct sinc {
    int order, ratio, n; // n: length of the impulse response
    double weight[];     // n, newest first
} sinc;

// States: the integral at the clock before, then the sums of the windows, the next to close first.
static int step_sinc(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out)
{
    const sinc *p = param;
    double *sum = state + 2, whole = in[0], mean = (whole - state[0]) / time->nominal;
    state[0] = whole;
    if (time->job > 0) {
        int place = (int)((time->job - 1) % p->ratio);
        for (int m = 0; m < p->order; m++) {
            int age = p->ratio - 1 - place + m * p->ratio;
            if (age < p->n)
                sum[m] += p->weight[age] * mean;
        }
        if (place == p->ratio - 1) {
            state[1] = sum[0];
            for (int m = 0; m < p->order; m++)
                sum[m] = m + 1 < p->order ? sum[m + 1] : 0;
        }
    }
    out[0] = state[1];
    return 0;
}

// Convolve `order` boxes of `ratio` ones; each pass is a running sum.
static void fill_weights(sinc *p)
{
    double whole = 1, box[MAX_ORDER * 1024] = {1};
    int n = 1;
    for (int k = 0; k < p->order; k++) {
        double out[MAX_ORDER * 1024] = {0};
        for (int i = 0; i < n + p->ratio - 1; i++)
            for (int j = i < p->ratio ? 0 : i - p->ratio + 1; j <= i && j < n; j++)
                out[i] += box[j];
        n += p->ratio - 1;
        memcpy(box, out, sizeof box);
        whole *= p->ratio;
    }
    for (int i = 0; i < n; i++)
        p->weight[i] = box[i] / whole;
}

lw_status lw_law_sinc(int order, int ratio, lw_law **out, lw_error *err)
{
    static const char *const in_names[] = {"integral"}, *const out_names[] = {"out"};
    static const char *const states[] = {"before",  "standing", "window1",
                                         "window2", "window3",  "window4"};
    if (order < 1 || order > MAX_ORDER)
        return lw_error_set(err, LW_ERR_ARGUMENT, "order is %d; permitted 1 to 4", order);
    if (ratio < 2 || ratio > 1024)
        return lw_error_set(err, LW_ERR_ARGUMENT, "ratio is %d; permitted 2 to 1024", ratio);
    int n = order * (ratio - 1) + 1;
    sinc *p = lw__alloc(sizeof *p + sizeof(double) * (size_t)n);
    if (p == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a filter");
    p->order = order;
    p->ratio = ratio;
    p->n = n;
    fill_weights(p);
    const lw_law_def def = {.kind = "sinc filter",
                            .n_in = 1,
                            .n_out = 1,
                            .n_state = 2 + order,
                            .in_names = in_names,
                            .out_names = out_names,
                            .state_names = states,
                            .step = step_sinc,
                            .param = p,
                            .free_param = lw__free};
    lw_status status = lw_law_new(&def, out, err);
    if (status != LW_OK)
        lw__free(p);
    return status;
}

// ---- speed from counts

typedef struct count_speed {
    int window;
    double per_count;
} count_speed;

// States: counts of the samples before, the last one first.
static int step_count_speed(const void *param, const lw_law_time *time, const double *in,
                            double *state, double *out)
{
    const count_speed *p = param;
    int64_t back = time->job < p->window ? time->job : p->window;
    out[0] =
        back == 0 ? 0 : (in[0] - state[back - 1]) * p->per_count / ((double)back * time->nominal);
    memmove(state + 1, state, sizeof *state * (size_t)(p->window - 1));
    state[0] = in[0];
    return 0;
}

lw_status lw_law_count_speed(int window, double per_count, lw_law **out, lw_error *err)
{
    static const char *const in_names[] = {"counts"}, *const out_names[] = {"out"};
    char text[LW_LAW_MAX_STATES][16];
    const char *states[LW_LAW_MAX_STATES];
    if (window < 1 || window > LW_LAW_MAX_STATES)
        return lw_error_set(err, LW_ERR_ARGUMENT, "speed_over is %d; permitted 1 to %d samples",
                            window, LW_LAW_MAX_STATES);
    if (!isfinite(per_count))
        return lw_error_set(err, LW_ERR_NOT_FINITE, "the turn of a count is not finite");
    for (int i = 0; i < window; i++) {
        snprintf(text[i], sizeof text[i], "before%d", i + 1);
        states[i] = text[i];
    }
    count_speed *p = lw__alloc(sizeof *p);
    if (p == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a speed");
    *p = (count_speed){window, per_count};
    const lw_law_def def = {.kind = "speed from counts",
                            .n_in = 1,
                            .n_out = 1,
                            .n_state = window,
                            .in_names = in_names,
                            .out_names = out_names,
                            .state_names = states,
                            .step = step_count_speed,
                            .param = p,
                            .free_param = lw__free};
    lw_status status = lw_law_new(&def, out, err);
    if (status != LW_OK)
        lw__free(p);
    return status;
}

// ---- speed from the time between edges

typedef struct edge_speed {
    double per_count, zero_after;
} edge_speed;

static int step_edge_speed(const void *param, const lw_law_time *time, const double *in,
                           double *state, double *out)
{
    const edge_speed *p = param;
    double span = in[0], steps = in[1], since = time->now - in[2];
    (void)state;
    out[0] = 0;
    if (!(span > 0) || steps == 0 || since >= p->zero_after)
        return 0;
    double speed = steps * p->per_count / span, most = p->per_count / since;
    if (since * fabs(steps) > span && fabs(speed) > most)
        speed = copysign(most, speed);
    out[0] = speed;
    return 0;
}

lw_status lw_law_edge_speed(double per_count, double zero_after, lw_law **out, lw_error *err)
{
    static const char *const in_names[] = {"span", "steps", "last"}, *const out_names[] = {"out"};
    if (!(per_count > 0) || isinf(per_count))
        return lw_error_set(err, LW_ERR_NOT_FINITE,
                            "the turn of a count is not above 0 and finite");
    if (!(zero_after > 0))
        return lw_error_set(err, LW_ERR_ARGUMENT, "zero_after is %.12g s; above 0 is wanted",
                            zero_after);
    edge_speed *p = lw__alloc(sizeof *p);
    if (p == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a speed");
    *p = (edge_speed){per_count, zero_after};
    const lw_law_def def = {.kind = "speed from edges",
                            .n_in = 3,
                            .n_out = 1,
                            .in_names = in_names,
                            .out_names = out_names,
                            .step = step_edge_speed,
                            .param = p,
                            .free_param = lw__free};
    lw_status status = lw_law_new(&def, out, err);
    if (status != LW_OK)
        lw__free(p);
    return status;
}
