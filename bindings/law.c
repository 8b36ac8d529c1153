// Ready control laws, and what every law tells of itself.

#include "law.h"

#include "module.h"

#include <math.h>

lw__lua_law *lw__lua_law_new(lua_State *L)
{
    return lw__lua_new(L, LW__LUA_LAW, sizeof(lw__lua_law), LAW_USER_VALUES);
}

// The law's box is on top of the stack.
static int made(const lw__lua_reader *r, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        lw__lua_bad(r, "%s", lua_pushstring(r->L, err->text));
    return 1;
}

// ---- P to PID

typedef struct pid {
    lw_pid p;
    double limit[2];
    int anti_windup, integration;
} pid;

static const char *const anti_windups[] = {"none", "clamp", "pause", "back-calculation", NULL};
static const char *const integrations[] = {"forward euler", "trapezoidal", NULL};
static const char *const orders[] = {"output first", "update first", NULL};
static const char *const periods[] = {"nominal", "measured", NULL};
static const char *const derivatives[] = {"error", "measured", NULL};

#define KP REQUIRED(pid, p.kp, "kp", FIELD_NUMBER, NULL)
#define LIMIT(type) OPTIONAL(type, limit, "limit", FIELD_RANGE, NULL)
#define PERIOD CHOICE(pid, p.use_measured_dt, "period", periods)
#define INTEGRAL                                                                                   \
    REQUIRED(pid, p.ki, "ki", FIELD_NUMBER, NULL),                                                 \
        CHOICE(pid, anti_windup, "anti_windup", anti_windups),                                     \
        OPTIONAL(pid, p.kb, "kb", FIELD_NUMBER, NULL),                                             \
        CHOICE(pid, integration, "integration", integrations),                                     \
        CHOICE(pid, p.update_first, "order", orders),                                              \
        OPTIONAL(pid, p.start, "start", FIELD_NUMBER, NULL)
#define DERIVATIVE                                                                                 \
    REQUIRED(pid, p.kd, "kd", FIELD_NUMBER, NULL),                                                 \
        OPTIONAL(pid, p.filter, "filter", FIELD_NUMBER, "s"),                                      \
        CHOICE(pid, p.derivative_on_measured, "derivative_of", derivatives)

static const lw__lua_field p_fields[] = {KP, LIMIT(pid)};
static const lw__lua_field pi_fields[] = {KP, LIMIT(pid), PERIOD, INTEGRAL};
static const lw__lua_field pd_fields[] = {KP, LIMIT(pid), PERIOD, DERIVATIVE};
static const lw__lua_field pid_fields[] = {KP, LIMIT(pid), PERIOD, INTEGRAL, DERIVATIVE};

static int pid_law(lua_State *L, const char *kind, int n, const lw__lua_field *fields)
{
    lw_error err = {LW_OK, ""};
    pid d = {.p = lw_pid_default(), .limit = {(double)NAN, (double)NAN}};
    d.anti_windup = (int)d.p.anti_windup;
    d.integration = (int)d.p.integration;
    lw__lua_reader r = lw__lua_read(L, 1, "law");
    r.subject = lua_pushfstring(L, "law %s", kind);
    lw__lua_fields(&r, n, fields, 0, 0, NULL, &d);
    d.p.lo = d.limit[0];
    d.p.hi = d.limit[1];
    d.p.anti_windup = (lw_anti_windup)d.anti_windup;
    d.p.integration = (lw_integration)d.integration;
    lw__lua_law *box = lw__lua_law_new(L);
    return made(&r, lw_law_pid(kind, &d.p, &box->it, &err), &err);
}

#define PID(kind)                                                                                  \
    int lw__lua_law_##kind(lua_State *L)                                                           \
    {                                                                                              \
        return pid_law(L, #kind, (int)(sizeof kind##_fields / sizeof *kind##_fields),              \
                       kind##_fields);                                                             \
    }
PID(p)
PID(pi)
PID(pd)
PID(pid)

// ---- filters

typedef struct filter {
    double gain, zero, pole, limit[2];
    lw__lua_list b, a;
} filter;

static const filter no_filter = {.gain = 1, .limit = {(double)NAN, (double)NAN}};

static const lw__lua_field lead_fields[] = {OPTIONAL(filter, gain, "gain", FIELD_NUMBER, NULL),
                                            REQUIRED(filter, zero, "zero", FIELD_NUMBER, "rad/s"),
                                            REQUIRED(filter, pole, "pole", FIELD_NUMBER, "rad/s"),
                                            LIMIT(filter)};

int lw__lua_law_lead(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    filter p = no_filter;
    lw__lua_reader r = lw__lua_read(L, 1, "law lead");
    LW__LUA_FIELDS(&r, lead_fields, 0, &p);
    lw__lua_law *box = lw__lua_law_new(L);
    return made(&r, lw_law_lead(p.gain, p.zero, p.pole, p.limit[0], p.limit[1], &box->it, &err),
                &err);
}

static const lw__lua_field z_transfer_fields[] = {REQUIRED(filter, b, "b", FIELD_LIST, NULL),
                                                  REQUIRED(filter, a, "a", FIELD_LIST, NULL),
                                                  LIMIT(filter)};

static int z_transfer(lua_State *L, const char *what, int is_biquad)
{
    lw_error err = {LW_OK, ""};
    filter p = no_filter;
    lw__lua_reader r = lw__lua_read(L, 1, what);
    LW__LUA_FIELDS(&r, z_transfer_fields, 0, &p);
    if (is_biquad && (p.b.n != 3 || p.a.n != 3))
        lw__lua_bad(&r, "b has %d numbers and a %d; { b0, b1, b2 } and { 1, a1, a2 } are wanted",
                    p.b.n, p.a.n);
    lw__lua_law *box = lw__lua_law_new(L);
    return made(
        &r, lw_law_z_transfer(p.b.n, p.b.v, p.a.n, p.a.v, p.limit[0], p.limit[1], &box->it, &err),
        &err);
}

int lw__lua_law_biquad(lua_State *L)
{
    return z_transfer(L, "law biquad", 1);
}

int lw__lua_law_z_transfer(lua_State *L)
{
    return z_transfer(L, "law z_transfer", 0);
}

// ---- state feedback and observer

typedef struct gains {
    lw__lua_matrix a, b, c, l, k;
    lw__lua_list start;
    double limit[2];
} gains;

static const gains no_gains = {.limit = {(double)NAN, (double)NAN}};

// N as a matrix, also from one number; none has no columns.
static lw__lua_matrix feed_forward(const lw__lua_reader *r, int n_u)
{
    lw__lua_matrix n = {0, n_u, 0, NULL};
    int type = lw__lua_push_field(r, "N");
    if (type == LUA_TNIL)
        return n;
    if (type == LUA_TTABLE) {
        n = lw__lua_rows(r, "N", -1);
    } else {
        double value = lw__lua_number(r, "N", -1, NULL);
        n = (lw__lua_matrix){1, 1, 1, lw__lua_room(r->L, 1, sizeof(double))};
        n.v[0] = value;
    }
    if (n.n_rows != n_u)
        lw__lua_bad(r, "N has %d rows and K %d; one number is wanted", n.n_rows, n_u);
    return n;
}

static void want_shape(const lw__lua_reader *r, const char *field, const lw__lua_matrix *m,
                       int n_rows, int n_columns)
{
    if (m->n_rows != n_rows || m->n_columns != n_columns)
        lw__lua_bad(r, "%s is %d x %d; %d x %d is wanted", field, m->n_rows, m->n_columns, n_rows,
                    n_columns);
}

static const lw__lua_field state_feedback_fields[] = {REQUIRED(gains, k, "K", FIELD_MATRIX, NULL),
                                                      OTHER("N"), LIMIT(gains)};

int lw__lua_law_state_feedback(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    gains p = no_gains;
    lw__lua_reader r = lw__lua_read(L, 1, "law state_feedback");
    LW__LUA_FIELDS(&r, state_feedback_fields, 0, &p);
    lw__lua_matrix n = feed_forward(&r, p.k.n_rows);
    lw__lua_law *box = lw__lua_law_new(L);
    return made(&r,
                lw_law_state_feedback(p.k.n_rows, p.k.n_columns, n.n_columns, p.k.v, n.v,
                                      p.limit[0], p.limit[1], &box->it, &err),
                &err);
}

static const lw__lua_field observer_fields[] = {
    REQUIRED(gains, a, "A", FIELD_MATRIX, NULL),       REQUIRED(gains, b, "B", FIELD_MATRIX, NULL),
    REQUIRED(gains, c, "C", FIELD_MATRIX, NULL),       REQUIRED(gains, l, "L", FIELD_MATRIX, NULL),
    REQUIRED(gains, k, "K", FIELD_MATRIX, NULL),       OTHER("N"),
    OPTIONAL(gains, start, "start", FIELD_LIST, NULL), LIMIT(gains)};

int lw__lua_law_observer(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    gains p = no_gains;
    lw__lua_reader r = lw__lua_read(L, 1, "law observer");
    LW__LUA_FIELDS(&r, observer_fields, 0, &p);
    lw__lua_matrix n = feed_forward(&r, p.k.n_rows);
    int n_x = p.a.n_rows, n_u = p.b.n_columns, n_y = p.c.n_rows;
    want_shape(&r, "A", &p.a, n_x, n_x);
    want_shape(&r, "B", &p.b, n_x, n_u);
    want_shape(&r, "C", &p.c, n_y, n_x);
    want_shape(&r, "L", &p.l, n_x, n_y);
    want_shape(&r, "K", &p.k, n_u, n_x);
    if (p.start.v != NULL && p.start.n != n_x)
        lw__lua_bad(&r, "start has %d numbers; the model has %d states", p.start.n, n_x);
    lw_observer def = {n_x,   n_u,   n_y, n.n_columns, p.a.v,      p.b.v,     p.c.v,
                       p.l.v, p.k.v, n.v, p.start.v,   p.limit[0], p.limit[1]};
    lw__lua_law *box = lw__lua_law_new(L);
    return made(&r, lw_law_observer(&def, &box->it, &err), &err);
}

// ---- methods

static const lw_law_def *look(lua_State *L)
{
    lw__lua_law *box = luaL_checkudata(L, 1, LW__LUA_LAW);
    if (box->it == NULL)
        lw__lua_fail(L, "the law is closed");
    return lw_law_look(box->it);
}

int lw__lua_law_inputs(lua_State *L)
{
    const lw_law_def *def = look(L);
    return lw__lua_push_names(L, def->n_in, def->in_names);
}

int lw__lua_law_outputs(lua_State *L)
{
    const lw_law_def *def = look(L);
    return lw__lua_push_names(L, def->n_out, def->out_names);
}

int lw__lua_law_states(lua_State *L)
{
    const lw_law_def *def = look(L);
    return lw__lua_push_names(L, def->n_state, def->state_names);
}

// The prepared call of a Lua law stays: a rig may still hold the law.
int lw__lua_law_close(lua_State *L)
{
    lw__lua_law *box = luaL_checkudata(L, 1, LW__LUA_LAW);
    lw_law_free(box->it);
    box->it = NULL;
    return 0;
}
