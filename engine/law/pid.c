// P, PI, PD and PID.
//
// Workload: the step is the hot path, once a sample in every run; a PI is by far the most common.
//
// Invariants
// 1. One body holds the recurrences. Steps for the common shapes are that body with the shape a
//    constant, so that every form gives the same bits.
// 2. A step asks nothing about limits that are not there: they are infinite.

#include "law/ready.h"

#include <math.h>
#include <string.h>

// What a law is made of, as bits.
enum {
    INTEGRAL = 1,
    DERIVATIVE = 2,
    TRAPEZOIDAL = 4,
    UPDATE_FIRST = 8,
    MEASURED_DT = 16,
    ON_MEASURED = 32,
    CLAMP = 64,
    PAUSE = 128,
    BACK_CALCULATION = 256,
    REMEMBERS = TRAPEZOIDAL | DERIVATIVE // has a sample before the first to make up
};

// Places of the states; those a shape does not have are not used.
typedef struct places {
    int integral, previous_error, derivative, previous_input, started, n;
} places;

typedef struct pid {
    double kp, ki, kd, filter, kb;
    lw__limits limits;
    int shape;
    places at;
} pid;

LW__LAW_BODY places places_of(int shape)
{
    places at = {0};
    at.integral = 0;
    at.previous_error = at.integral + ((shape & INTEGRAL) != 0);
    at.derivative = at.previous_error + ((shape & TRAPEZOIDAL) != 0);
    at.previous_input = at.derivative + ((shape & DERIVATIVE) != 0);
    at.started = at.previous_input + ((shape & DERIVATIVE) != 0);
    at.n = at.started + ((shape & REMEMBERS) != 0);
    return at;
}

// ---- the recurrences

// One step before anything is stored.
typedef struct moment {
    double T, e, e_prev, x, integral, d;
    double judged; // u formed with the old I, which anti-windup looks at
    double rise;   // what I would gain
    double grown;  // next I
    double u;
    int started, paused;
} moment;

LW__LAW_BODY double output_of(const pid *p, int shape, const moment *m, double integral)
{
    double u = p->kp * m->e;
    if (shape & INTEGRAL)
        u += integral;
    if (shape & DERIVATIVE)
        u += p->kd * m->d;
    return u;
}

LW__LAW_BODY void look_at_derivative(const pid *p, int shape, places at, const double *in,
                                     const double *state, int stride, moment *m)
{
    m->x = shape & ON_MEASURED ? -in[stride] : m->e;
    double x_prev = m->started ? state[at.previous_input * stride] : m->x;
    m->d = (p->filter * state[at.derivative * stride] + (m->x - x_prev)) / (p->filter + m->T);
}

LW__LAW_BODY void grow(const pid *p, int shape, moment *m)
{
    if (shape & BACK_CALCULATION) {
        double drive = shape & TRAPEZOIDAL ? p->ki * (m->e + m->e_prev) / 2 : p->ki * m->e;
        double excess = lw__limited(p->limits, m->judged) - m->judged;
        m->grown = m->integral + m->T * (drive + p->kb * excess);
        return;
    }
    m->rise = shape & TRAPEZOIDAL ? p->ki * m->T * (m->e + m->e_prev) / 2 : p->ki * m->T * m->e;
    m->grown = m->integral + m->rise;
    if (shape & CLAMP)
        m->grown = lw__limited(p->limits, m->grown);
    if (shape & PAUSE) {
        m->paused = ((m->judged > p->limits.hi) & (m->rise > 0)) |
                    ((m->judged < p->limits.lo) & (m->rise < 0));
        m->grown = m->paused ? m->integral : m->grown;
    }
}

LW__LAW_BODY moment look(const pid *p, int shape, places at, const lw_law_time *time,
                         const double *in, const double *state, int stride)
{
    moment m = {.T = shape & MEASURED_DT ? time->dt : time->nominal, .e = in[0] - in[stride]};
    m.started = (shape & REMEMBERS) && state[at.started * stride] > 0.5;
    if (shape & DERIVATIVE)
        look_at_derivative(p, shape, at, in, state, stride, &m);
    if (!(shape & INTEGRAL)) {
        m.u = output_of(p, shape, &m, 0);
        return m;
    }
    m.integral = state[at.integral * stride];
    m.e_prev = (shape & TRAPEZOIDAL) && m.started ? state[at.previous_error * stride] : m.e;
    m.judged = output_of(p, shape, &m, m.integral);
    grow(p, shape, &m);
    m.u = shape & UPDATE_FIRST ? output_of(p, shape, &m, m.grown) : m.judged;
    return m;
}

LW__LAW_BODY void advance(const pid *p, int shape, places at, const lw_law_time *time,
                          const double *in, double *state, double *out, int stride)
{
    moment m = look(p, shape, at, time, in, state, stride);
    out[0] = lw__limited(p->limits, m.u);
    out[stride] = m.u;
    if (shape & INTEGRAL)
        state[at.integral * stride] = m.grown;
    if (shape & TRAPEZOIDAL)
        state[at.previous_error * stride] = m.e;
    if (shape & DERIVATIVE) {
        state[at.derivative * stride] = m.d;
        state[at.previous_input * stride] = m.x;
    }
    if (shape & REMEMBERS)
        state[at.started * stride] = 1;
}

// ---- steps and lanes

static int step_any(const void *param, const lw_law_time *time, const double *in, double *state,
                    double *out)
{
    const pid *p = param;
    advance(p, p->shape, p->at, time, in, state, out, 1);
    return 0;
}

static int lanes_any(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out, int n, int stride)
{
    const pid *p = param;
    for (int w = 0; w < n; w++)
        advance(p, p->shape, p->at, time, in + w, state + w, out + w, stride);
    return 0;
}

// The copy of the parameter tells the compiler that no store changes it.
#define SPECIALISED(name, shape)                                                                   \
    static int step_##name(const void *param, const lw_law_time *time, const double *in,           \
                           double *state, double *out)                                             \
    {                                                                                              \
        const pid p = *(const pid *)param;                                                         \
        advance(&p, shape, places_of(shape), time, in, state, out, 1);                             \
        return 0;                                                                                  \
    }                                                                                              \
    static int lanes_##name(const void *param, const lw_law_time *time, const double *restrict in, \
                            double *restrict state, double *restrict out, int n, int stride)       \
    {                                                                                              \
        const pid p = *(const pid *)param;                                                         \
        for (int w = 0; w < n; w++)                                                                \
            advance(&p, shape, places_of(shape), time, in + w, state + w, out + w, stride);        \
        return 0;                                                                                  \
    }

SPECIALISED(p, 0)
SPECIALISED(pi, INTEGRAL)
SPECIALISED(pi_clamp, INTEGRAL | CLAMP)
SPECIALISED(pi_pause, INTEGRAL | PAUSE)
SPECIALISED(pi_back, INTEGRAL | BACK_CALCULATION)

static void choose(int shape, lw_law_def *def)
{
    switch (shape) {
#define CHOICE(name, shape)                                                                        \
    case shape:                                                                                    \
        def->step = step_##name;                                                                   \
        def->lanes = lanes_##name;                                                                 \
        return;
        CHOICE(p, 0)
        CHOICE(pi, INTEGRAL)
        CHOICE(pi_clamp, INTEGRAL | CLAMP)
        CHOICE(pi_pause, INTEGRAL | PAUSE)
        CHOICE(pi_back, INTEGRAL | BACK_CALCULATION)
#undef CHOICE
    default:
        def->step = step_any;
        def->lanes = lanes_any;
    }
}

// ---- derivatives

enum { MAX_COLUMNS = 2 + 5 };

// A quantity's derivatives by each input, then each state.
typedef struct slope {
    double by[MAX_COLUMNS];
} slope;

static slope by_state(int place)
{
    slope s = {{0}};
    s.by[2 + place] = 1;
    return s;
}

static slope mix(double a, slope f, double b, slope g)
{
    for (int k = 0; k < MAX_COLUMNS; k++)
        f.by[k] = a * f.by[k] + b * g.by[k];
    return f;
}

static slope slope_of_derivative(const pid *p, const moment *m, slope e)
{
    slope x = p->shape & ON_MEASURED ? (slope){{0, -1}} : e;
    slope x_prev = m->started ? by_state(p->at.previous_input) : x;
    double whole = p->filter + m->T;
    return mix(p->filter / whole, by_state(p->at.derivative), 1 / whole, mix(1, x, -1, x_prev));
}

static slope slope_of_output(const pid *p, slope e, slope integral, slope d)
{
    return mix(p->kp, e, 1, mix(1, integral, p->kd, d));
}

static slope slope_of_integral(const pid *p, const moment *m, slope e, slope judged)
{
    slope old = by_state(p->at.integral), mean = e;
    if (p->shape & TRAPEZOIDAL)
        mean = mix(0.5, e, 0.5, m->started ? by_state(p->at.previous_error) : e);
    slope grown = mix(1, old, p->ki * m->T, mean);
    if (p->shape & CLAMP && lw__beyond(p->limits, m->integral + m->rise))
        return (slope){{0}};
    if (p->shape & BACK_CALCULATION && lw__beyond(p->limits, m->judged))
        return mix(1, grown, -m->T * p->kb, judged);
    return m->paused ? old : grown;
}

static int jacobian(const void *param, const lw_law_time *time, const double *in,
                    const double *state, double *j)
{
    const pid *p = param;
    const slope none = {{0}}, e = {{1, -1}};
    moment m = look(p, p->shape, p->at, time, in, state, 1);
    slope d = p->shape & DERIVATIVE ? slope_of_derivative(p, &m, e) : none;
    slope integral = p->shape & INTEGRAL ? by_state(p->at.integral) : none;
    slope u = slope_of_output(p, e, integral, d), row[2 + 5] = {{{0}}};
    if (p->shape & INTEGRAL) {
        slope grown = slope_of_integral(p, &m, e, u);
        row[2 + p->at.integral] = grown;
        u = p->shape & UPDATE_FIRST ? slope_of_output(p, e, grown, d) : u;
    }
    row[0] = lw__beyond(p->limits, m.u) ? none : u;
    row[1] = u;
    if (p->shape & TRAPEZOIDAL)
        row[2 + p->at.previous_error] = e;
    if (p->shape & DERIVATIVE) {
        row[2 + p->at.derivative] = d;
        row[2 + p->at.previous_input] = p->shape & ON_MEASURED ? (slope){{0, -1}} : e;
    }
    int n = 2 + p->at.n;
    for (int r = 0; r < n; r++)
        memcpy(j + r * n, row[r].by, sizeof(double) * (size_t)n);
    return 0;
}

// ---- making one

lw_pid lw_pid_default(void)
{
    return (lw_pid){.lo = NAN, .hi = NAN};
}

static const char *const windup_words[] = {"none", "clamp", "pause", "back-calculation"};

// Parts of a kind, -1 where the kind is not known.
static int parts_of(const char *kind)
{
    static const struct {
        const char *kind;
        int parts;
    } kinds[] = {{"p", 0}, {"pi", INTEGRAL}, {"pd", DERIVATIVE}, {"pid", INTEGRAL | DERIVATIVE}};
    for (int i = 0; kind != NULL && i < 4; i++)
        if (strcmp(kind, kinds[i].kind) == 0)
            return kinds[i].parts;
    return -1;
}

typedef struct field {
    const char *name;
    double value;
    int part;     // that it belongs to, 0: any kind
    int negative; // may be below 0
} field;

static lw_status check_field(int parts, const field *f, lw_error *err)
{
    lw_status status = lw__law_field(f->name, f->value, err);
    if (status != LW_OK)
        return status;
    if (f->part & ~parts && f->value != 0)
        return lw__law_bad(f->name, f->value,
                           f->part == INTEGRAL ? "permitted 0, the law has no integral"
                                               : "permitted 0, the law has no derivative",
                           err);
    if (!f->negative && f->value < 0)
        return lw__law_bad(f->name, f->value, "permitted from 0 on", err);
    return LW_OK;
}

static lw_status check_fields(int parts, const lw_pid *p, lw_error *err)
{
    const field fields[] = {
        {"kp", p->kp, 0, 1},
        {"ki", p->ki, INTEGRAL, 1},
        {"kd", p->kd, DERIVATIVE, 1},
        {"filter", p->filter, DERIVATIVE, 0},
        {"derivative_on_measured", p->derivative_on_measured, DERIVATIVE, 1},
        {"kb", p->kb, INTEGRAL, 0},
        {"integration", p->integration, INTEGRAL, 0},
        {"update_first", p->update_first, INTEGRAL, 1},
        {"start", p->start, INTEGRAL, 1},
    };
    for (size_t i = 0; i < sizeof fields / sizeof *fields; i++) {
        lw_status status = check_field(parts, &fields[i], err);
        if (status != LW_OK)
            return status;
    }
    if (p->integration > LW_TRAPEZOIDAL)
        return lw__law_bad("integration", (double)p->integration,
                           "permitted 0 (forward Euler) and 1 (trapezoidal)", err);
    return LW_OK;
}

static lw_status check_windup(int parts, const lw_pid *p, lw__limits limits, lw_error *err)
{
    if ((unsigned)p->anti_windup > LW_WINDUP_BACK_CALCULATION)
        return lw__law_bad("anti_windup", (double)p->anti_windup,
                           "permitted 0 (none) to 3 (back-calculation)", err);
    const char *word = windup_words[p->anti_windup];
    if (p->anti_windup != LW_WINDUP_NONE && !(parts & INTEGRAL))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "anti_windup is \"%s\"; permitted \"none\", the law has no integral",
                            word);
    if (p->anti_windup != LW_WINDUP_NONE && isinf(limits.lo) && isinf(limits.hi))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "anti_windup is \"%s\"; without a limit \"none\" is permitted", word);
    if (p->anti_windup == LW_WINDUP_CLAMP && lw__beyond(limits, p->start))
        return lw_error_set(
            err, LW_ERR_ARGUMENT,
            "start is %.12g; permitted %.12g to %.12g, where clamp holds the integral", p->start,
            limits.lo, limits.hi);
    if (p->anti_windup == LW_WINDUP_BACK_CALCULATION && !(p->kb > 0))
        return lw__law_bad("kb", p->kb, "permitted above 0 with back-calculation", err);
    if (p->anti_windup != LW_WINDUP_BACK_CALCULATION && p->kb != 0)
        return lw__law_bad("kb", p->kb, "permitted 0 without back-calculation", err);
    return LW_OK;
}

static int shape_of(int parts, const lw_pid *p)
{
    static const int windup[] = {0, CLAMP, PAUSE, BACK_CALCULATION};
    int shape = parts | windup[p->anti_windup];
    shape |= p->integration == LW_TRAPEZOIDAL ? TRAPEZOIDAL : 0;
    shape |= p->update_first ? UPDATE_FIRST : 0;
    shape |= p->use_measured_dt ? MEASURED_DT : 0;
    shape |= p->derivative_on_measured ? ON_MEASURED : 0;
    return shape;
}

static lw_status make(const char *kind, int shape, const lw_pid *p, lw__limits limits, lw_law **out,
                      lw_error *err)
{
    static const char *const in_names[] = {"wanted", "measured"};
    static const char *const out_names[] = {"out", "unlimited"};
    places at = places_of(shape);
    const char *names[5] = {NULL};
    names[at.started] = "started"; // then overwritten by states of the same place that exist
    if (shape & DERIVATIVE) {
        names[at.derivative] = "derivative";
        names[at.previous_input] = "previous_input";
    }
    if (shape & TRAPEZOIDAL)
        names[at.previous_error] = "previous_error";
    if (shape & INTEGRAL)
        names[at.integral] = "integral";
    double start[5] = {p->start};
    pid *param = lw__law_param(sizeof *param, err);
    if (param == NULL)
        return LW_ERR_MEMORY;
    *param = (pid){p->kp, p->ki, p->kd, p->filter, p->kb, limits, shape, at};
    lw_law_def def = {.kind = kind,
                      .n_in = 2,
                      .n_out = 2,
                      .n_state = at.n,
                      .in_names = in_names,
                      .out_names = out_names,
                      .state_names = names,
                      .start = start,
                      .jacobian = jacobian};
    choose(shape, &def);
    return lw__law_finish(&def, param, out, err);
}

lw_status lw_law_pid(const char *kind, const lw_pid *p, lw_law **out, lw_error *err)
{
    int parts = parts_of(kind);
    if (parts < 0)
        return lw_error_set(err, LW_ERR_NAME,
                            "kind is \"%s\"; permitted \"p\", \"pi\", \"pd\" or \"pid\"",
                            kind != NULL ? kind : "");
    lw__limits limits = {0, 0};
    lw_status status = check_fields(parts, p, err);
    if (status == LW_OK)
        status = lw__law_limits(p->lo, p->hi, &limits, err);
    if (status == LW_OK)
        status = check_windup(parts, p, limits, err);
    if (status == LW_OK)
        status = make(kind, shape_of(parts, p), p, limits, out, err);
    return status;
}
