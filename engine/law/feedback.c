// State feedback, from measured states or from those an observer estimates.
//
// Workload: once a sample; two to ten states.
//
// Invariants
// 1. Matrices are row-major copies behind the parameter, in one block with it.
// 2. Sums run over columns in order, so that lanes and single steps give the same bits.
// 3. An observer's model is given the limited output, which is what the plant gets.

#include "law/ready.h"

#include <math.h>
#include <string.h>

typedef struct feedback {
    lw__limits limits;
    int n_x, n_u, n_y, n_w; // n_y = 0: the states are measured
    const double *k, *n;    // n_u x n_x, n_u x n_w
    const double *a, *b, *c, *l;
    double block[];
} feedback;

enum { MAX_X = LW_LAW_MAX_STATES, MAX_U = LW_LAW_MAX_PORTS / 2, MAX_Y = LW_LAW_MAX_PORTS };

// ---- steps

// Outputs from `x`, the states measured or estimated.
LW__LAW_BODY void control(const feedback *p, const double *in, const double *x, double *out,
                          int stride)
{
    for (int i = 0; i < p->n_u; i++) {
        const double *n = p->n + i * p->n_w, *k = p->k + i * p->n_x;
        double u = 0;
        for (int j = 0; j < p->n_w; j++)
            u += n[j] * in[j * stride];
        for (int j = 0; j < p->n_x; j++)
            u -= k[j] * x[j * stride];
        out[i * stride] = lw__limited(p->limits, u);
        out[(p->n_u + i) * stride] = u;
    }
}

LW__LAW_BODY double add_row(double sum, int n, const double *row, const double *x, int stride)
{
    for (int j = 0; j < n; j++)
        sum += row[j] * x[j * stride];
    return sum;
}

// The next estimate, from the limited outputs `u`.
LW__LAW_BODY void estimate(const feedback *p, const double *y, const double *u, double *x,
                           int stride)
{
    double surprise[MAX_Y], next[MAX_X];
    for (int i = 0; i < p->n_y; i++) {
        surprise[i] = y[i * stride];
        for (int j = 0; j < p->n_x; j++)
            surprise[i] -= p->c[i * p->n_x + j] * x[j * stride];
    }
    for (int i = 0; i < p->n_x; i++) {
        double sum = add_row(0, p->n_x, p->a + i * p->n_x, x, stride);
        sum = add_row(sum, p->n_u, p->b + i * p->n_u, u, stride);
        next[i] = add_row(sum, p->n_y, p->l + i * p->n_y, surprise, 1);
    }
    for (int i = 0; i < p->n_x; i++)
        x[i * stride] = next[i];
}

LW__LAW_BODY void observe(const feedback *p, const double *in, double *state, double *out,
                          int stride)
{
    control(p, in, state, out, stride);
    estimate(p, in + p->n_w * stride, out, state, stride);
}

static int step_feedback(const void *param, const lw_law_time *time, const double *in,
                         double *state, double *out)
{
    (void)time;
    (void)state;
    const feedback *p = param;
    control(p, in, in + p->n_w, out, 1);
    return 0;
}

static int lanes_feedback(const void *param, const lw_law_time *time, const double *in,
                          double *state, double *out, int n, int stride)
{
    (void)time;
    (void)state;
    const feedback *p = param;
    for (int w = 0; w < n; w++)
        control(p, in + w, in + p->n_w * stride + w, out + w, stride);
    return 0;
}

static int step_observer(const void *param, const lw_law_time *time, const double *in,
                         double *state, double *out)
{
    (void)time;
    observe(param, in, state, out, 1);
    return 0;
}

static int lanes_observer(const void *param, const lw_law_time *time, const double *in,
                          double *state, double *out, int n, int stride)
{
    (void)time;
    for (int w = 0; w < n; w++)
        observe(param, in + w, state + w, out + w, stride);
    return 0;
}

// ---- derivatives

// Rows of the outputs; `x_column` is where the states stand among the columns.
static void jacobian_of_control(const feedback *p, const double *in, const double *x, int n_columns,
                                int x_column, double *j)
{
    double out[2 * MAX_U];
    control(p, in, x, out, 1);
    for (int i = 0; i < p->n_u; i++) {
        double *limited = j + i * n_columns, *row = j + (p->n_u + i) * n_columns;
        memset(row, 0, sizeof(double) * (size_t)n_columns);
        for (int c = 0; c < p->n_w; c++)
            row[c] = p->n[i * p->n_w + c];
        for (int c = 0; c < p->n_x; c++)
            row[x_column + c] = -p->k[i * p->n_x + c];
        for (int c = 0; c < n_columns; c++)
            limited[c] = lw__beyond(p->limits, out[p->n_u + i]) ? 0 : row[c];
    }
}

static int jacobian_feedback(const void *param, const lw_law_time *time, const double *in,
                             const double *state, double *j)
{
    (void)time;
    (void)state;
    const feedback *p = param;
    jacobian_of_control(p, in, in + p->n_w, p->n_w + p->n_x, p->n_w, j);
    return 0;
}

static int jacobian_observer(const void *param, const lw_law_time *time, const double *in,
                             const double *state, double *j)
{
    (void)time;
    const feedback *p = param;
    int y_column = p->n_w, x_column = p->n_w + p->n_y, n_columns = x_column + p->n_x;
    jacobian_of_control(p, in, state, n_columns, x_column, j);
    for (int i = 0; i < p->n_x; i++) {
        double *row = j + (2 * p->n_u + i) * n_columns;
        const double *l = p->l + i * p->n_y;
        memset(row, 0, sizeof(double) * (size_t)n_columns);
        for (int c = 0; c < p->n_x; c++)
            row[x_column + c] = p->a[i * p->n_x + c];
        for (int r = 0; r < p->n_u; r++)
            for (int c = 0; c < n_columns; c++)
                row[c] += p->b[i * p->n_u + r] * j[r * n_columns + c];
        for (int r = 0; r < p->n_y; r++) {
            row[y_column + r] += l[r];
            for (int c = 0; c < p->n_x; c++)
                row[x_column + c] -= l[r] * p->c[r * p->n_x + c];
        }
    }
    return 0;
}

// ---- making one

static lw_status check_size(const char *what, int n, int lo, int hi, lw_error *err)
{
    if (n < lo || n > hi)
        return lw_error_set(err, LW_ERR_SHAPE, "number of %s is %d; permitted %d to %d", what, n,
                            lo, hi);
    return LW_OK;
}

// One matrix to copy: where it comes from and which pointer is to show the copy.
typedef struct matrix {
    const char *name;
    const double *from;
    int n_rows, n_columns;
    const double **to;
} matrix;

static lw_status check_matrix(const matrix *m, lw_error *err)
{
    int n = m->n_rows * m->n_columns;
    if (n > 0 && m->from == NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT, "%s is missing", m->name);
    for (int i = 0; i < n; i++)
        if (!isfinite(m->from[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s is %.12g in row %d, column %d; a finite number is wanted",
                                m->name, m->from[i], i / m->n_columns + 1, i % m->n_columns + 1);
    return LW_OK;
}

// A parameter with copies of the six matrices, or NULL with the message set.
static feedback *build(const lw_observer *o, lw__limits limits, lw_status *status, lw_error *err)
{
    feedback p = {.limits = limits, .n_x = o->n_x, .n_u = o->n_u, .n_y = o->n_y, .n_w = o->n_w};
    int n_model = o->n_y > 0 ? o->n_x : 0; // rows of the model
    const matrix all[] = {
        {"A", o->a, n_model, o->n_x, &p.a}, {"B", o->b, n_model, o->n_u, &p.b},
        {"C", o->c, o->n_y, o->n_x, &p.c},  {"L", o->l, n_model, o->n_y, &p.l},
        {"K", o->k, o->n_u, o->n_x, &p.k},  {"N", o->n, o->n_u, o->n_w, &p.n},
    };
    size_t cells = 0;
    for (int i = 0; i < 6; i++) {
        *status = check_matrix(&all[i], err);
        if (*status != LW_OK)
            return NULL;
        cells += (size_t)(all[i].n_rows * all[i].n_columns);
    }
    feedback *own = lw__law_param(sizeof *own + sizeof(double) * cells, err);
    *status = own != NULL ? LW_OK : LW_ERR_MEMORY;
    if (own == NULL)
        return NULL;
    double *next = own->block;
    for (int i = 0; i < 6; i++) {
        int n = all[i].n_rows * all[i].n_columns;
        if (n > 0)
            memcpy(next, all[i].from, sizeof(double) * (size_t)n);
        *all[i].to = next;
        next += n;
    }
    *own = p; // leaves the block alone
    return own;
}

static lw_status make(const lw_observer *o, const char *kind, lw_law_def *def, lw_law **out,
                      lw_error *err)
{
    lw__limits limits = {0, 0};
    lw_status status = lw__law_limits(o->lo, o->hi, &limits, err);
    if (status != LW_OK)
        return status;
    feedback *p = build(o, limits, &status, err);
    if (p == NULL)
        return status;
    lw__ports in = {0}, outs = {0}, states = {0};
    lw__ports_add(&in, "wanted", o->n_w, 0);
    lw__ports_add(&in, "measured", o->n_y > 0 ? o->n_y : o->n_x, 0);
    lw__ports_add(&outs, "out", o->n_u, 0);
    lw__ports_add(&outs, "unlimited", o->n_u, 0);
    lw__ports_add(&states, "estimate", o->n_y > 0 ? o->n_x : 0, 1);
    def->kind = kind;
    def->n_in = in.n;
    def->n_out = outs.n;
    def->n_state = states.n;
    def->in_names = in.name;
    def->out_names = outs.name;
    def->state_names = states.name;
    def->start = o->start;
    return lw__law_finish(def, p, out, err);
}

lw_status lw_law_state_feedback(int n_u, int n_x, int n_w, const double *k, const double *n,
                                double lo, double hi, lw_law **out, lw_error *err)
{
    lw_status status = check_size("outputs", n_u, 1, MAX_U, err);
    if (status == LW_OK)
        status = check_size("measured states", n_x, 1, LW_LAW_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_size("wanted values", n_w, 0, LW_LAW_MAX_PORTS - n_x, err);
    if (status != LW_OK)
        return status;
    lw_observer o = {.n_x = n_x, .n_u = n_u, .n_w = n_w, .k = k, .n = n, .lo = lo, .hi = hi};
    lw_law_def def = {
        .step = step_feedback, .lanes = lanes_feedback, .jacobian = jacobian_feedback};
    return make(&o, "state feedback", &def, out, err);
}

lw_status lw_law_observer(const lw_observer *p, lw_law **out, lw_error *err)
{
    lw_status status = check_size("states", p->n_x, 1, MAX_X, err);
    if (status == LW_OK)
        status = check_size("outputs", p->n_u, 1, MAX_U, err);
    if (status == LW_OK)
        status = check_size("measured values", p->n_y, 1, MAX_Y, err);
    if (status == LW_OK)
        status = check_size("wanted values", p->n_w, 0, LW_LAW_MAX_PORTS - p->n_y, err);
    if (status != LW_OK)
        return status;
    lw_law_def def = {
        .step = step_observer, .lanes = lanes_observer, .jacobian = jacobian_observer};
    return make(p, "observer", &def, out, err);
}
