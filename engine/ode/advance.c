// From t0 to t1 in steps: sizes, switchings, failures.

#include "ode/stepper.h"

#include <float.h>
#include <stddef.h>
#include <string.h>

#define MOST_STEPS 5000000
#define MOST_SWITCHINGS 20000 // in one call
#define MOST_IN_PLACE 100     // switchings in a row between which the function hardly left zero
#define HARDLY 1e-5           // of the largest value it had

int lw__ode_memory_size(int n)
{
    return (int)(sizeof(lw__ode_memory) / sizeof(double)) + n;
}

void lw__ode_disturb(double *memory)
{
    ((lw__ode_memory *)memory)->slope_known = 0;
}

static int method_work(int n)
{
    int a = lw__ode_explicit_work(n), b = lw__ode_stiff_work(n);
    return a > b ? a : b;
}

int lw__ode_work_size(int n, int n_switches)
{
    return 3 * n + (LW__ODE_DEGREE + 1) * n + method_work(n) + 2 * n + 5 * n_switches;
}

void lw__ode_piece_value(const lw__ode_piece *p, double s, double *x)
{
    for (int i = 0; i < p->n; i++) {
        double v = p->c[p->degree * p->n + i];
        for (int k = p->degree - 1; k >= 0; k--)
            v = v * s + p->c[k * p->n + i];
        x[i] = v;
    }
}

int lw__ode_piece_series(const lw__ode_piece *p, int state, double *c)
{
    for (int k = 0; k <= p->degree; k++)
        c[k] = p->c[k * p->n + state];
    return p->degree;
}

// ---- the integration under way

typedef struct course {
    lw__ode_state o;
    lw__ode_memory *m;
    double t1;
    lw__ode_sink sink;
    void *context;
    int n_g, dense; // dense: o.c is of the step at hand
    double *g, *g_new, *g_mid, *x_mid;
    double *largest, *since; // of each switching function: in this call, since it switched
    int in_place;
    const char *text;
} course;

static double least_step(const course *c)
{
    return fmax(8 * DBL_EPSILON * fabs(c->o.t), 1e-30 * fabs(c->t1));
}

static lw_status fail(course *c, lw_status status, const char *text)
{
    c->text = text;
    return status;
}

// A first size from the flow and its change (Hairer, Norsett, Wanner 1993, II.4).
static double first_size(course *c)
{
    lw__ode_state *o = &c->o;
    double d0 = 0, d1 = 0, d2 = 0;
    for (int i = 0; i < o->n; i++) {
        double scale = 1 / (o->atol[i] + o->rtol * fabs(o->x[i]));
        d0 = fmax(d0, fabs(o->x[i]) * scale);
        d1 = fmax(d1, fabs(o->f[i]) * scale);
    }
    double whole = c->t1 - o->t, h = d0 < 1e-5 || d1 < 1e-5 ? 1e-4 * whole : 0.01 * d0 / d1;
    h = h < whole ? h : whole;
    for (int i = 0; i < o->n; i++)
        c->x_mid[i] = o->x[i] + h * o->f[i];
    if (lw__ode_flow(o, o->t + h, c->x_mid, o->f_new))
        return 0;
    for (int i = 0; i < o->n; i++) {
        double scale = 1 / (o->atol[i] + o->rtol * fabs(o->x[i]));
        d2 = fmax(d2, fabs(o->f_new[i] - o->f[i]) * scale / h);
    }
    double most = fmax(d1, d2);
    // fifth root by repeated square roots is near enough: x^(3/16)
    double root = sqrt(sqrt(0.01 / fmax(most, 1e-15)));
    root = root * sqrt(sqrt(1 / root));
    double guess = most <= 1e-15 ? 100 * h : root;
    return fmin(100 * h, guess);
}

static int look_at_switches(course *c, double t, const double *x, double *g)
{
    const lw__ode_system *s = c->o.system;
    if (c->n_g == 0 || s->switches(s->context, t, x, g) == 0)
        return 0;
    c->o.failed = LW_ERR_LAW;
    return 1;
}

static int side(double g)
{
    return g > 0;
}

static int any_changed(const course *c, const double *g)
{
    for (int k = 0; k < c->n_g; k++)
        if (side(g[k]) != side(c->g[k]))
            return 1;
    return 0;
}

static void make_dense(course *c, double h)
{
    if (c->dense)
        return;
    c->dense = 1;
    if (c->o.degree == 3)
        lw__ode_stiff_dense(&c->o, h);
    else
        lw__ode_explicit_dense(&c->o, h);
}

// Switching functions at share s of the step at hand.
static int look_inside(course *c, double h, double s, double *g)
{
    lw__ode_piece p = {c->o.t, h, c->o.n, c->o.degree, c->o.c};
    lw__ode_piece_value(&p, s, c->x_mid);
    return look_at_switches(c, c->o.t + s * h, c->x_mid, g);
}

// Whether no function can well have been at zero within the step: each is farther from it, at both
// ends, than it has moved.
static int far_from_zero(const course *c)
{
    for (int k = 0; k < c->n_g; k++)
        if (!(fmin(fabs(c->g[k]), fabs(c->g_new[k])) > fabs(c->g_new[k] - c->g[k])))
            return 0;
    return 1;
}

// The share of the step by which the first switching has happened; 1 where none does before the
// end. g_new holds the values at the end. Bisection on whether anything changed, which needs no
// continuity; the last half digit by regula falsi would be lost in rounding anyway.
static int first_switching(course *c, double h, double *share)
{
    double lo = 0, hi = 1;
    *share = 1;
    if (!any_changed(c, c->g_new) && far_from_zero(c))
        return 0;
    make_dense(c, h);
    if (look_inside(c, h, 0.5, c->g_mid))
        return 1;
    if (any_changed(c, c->g_mid))
        hi = 0.5;
    else if (!any_changed(c, c->g_new))
        return 0;
    else
        lo = 0.5;
    double resolution = fmax(2 * DBL_EPSILON * fabs(c->o.t) / h, 1e-16);
    while (hi - lo > resolution && hi - lo > 4 * DBL_EPSILON * hi) {
        double middle = lo + 0.5 * (hi - lo);
        if (look_inside(c, h, middle, c->g_mid))
            return 1;
        *(any_changed(c, c->g_mid) ? &hi : &lo) = middle;
    }
    *share = hi;
    return 0;
}

// What changed its sign on the way to here, told in order of index.
static lw_status tell_switchings(course *c)
{
    const lw__ode_system *s = c->o.system;
    for (int k = 0; k < c->n_g; k++) {
        if (side(c->g_new[k]) == side(c->g[k]))
            continue;
        if (s->happened != NULL &&
            s->happened(s->context, c->o.t, c->o.x, k, side(c->g_new[k])) != 0)
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
    }
    if (look_at_switches(c, c->o.t, c->o.x, c->g))
        return fail(c, LW_ERR_LAW, "a function of the plant failed");
    c->o.f_known = c->o.jacobian_known = 0;
    return LW_OK;
}

static void accept(course *c, double h)
{
    lw__ode_state *o = &c->o;
    if (c->sink != NULL) {
        make_dense(c, h);
        lw__ode_piece p = {o->t, h, o->n, o->degree, o->c};
        if (o->degree == 4) {
            // a flow that fails at a point between is none of the run's: the step had it not
            lw_status failed = o->failed;
            p.degree = lw__ode_explicit_refine(o, h) == 0 ? 5 : 4;
            o->failed = failed;
        }
        c->sink(c->context, &p);
    }
    o->t += h;
    memcpy(o->x, o->x_new, sizeof(double) * (size_t)o->n);
    memcpy(o->f, o->f_new, sizeof(double) * (size_t)o->n);
    o->jacobian_known = 0;
}

static lw__ode_outcome try_step(course *c, double h, int last, double *next)
{
    c->dense = 0;
    return c->m->stiff != 0 ? lw__ode_stiff(&c->o, c->m, h, next)
                            : lw__ode_explicit(&c->o, c->m, h, last, c->m->h, next);
}

// One accepted step, at most up to t1. *switched: it ends at a switching.
static lw_status one_step(course *c, int *switched)
{
    lw__ode_state *o = &c->o;
    double next = c->m->h;
    *switched = 0;
    for (int cut = 0;;) {
        double left = c->t1 - o->t, h = cut ? next : c->m->h;
        int last = cut || h >= 0.999999 * left;
        if (h >= 0.999999 * left)
            h = left;
        double was_stiff = c->m->stiff, wanted;
        lw__ode_outcome outcome = try_step(c, h, last, &wanted);
        if (outcome == LW__ODE_FAILED)
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
        if (outcome == LW__ODE_REJECTED) {
            if (wanted < least_step(c))
                return fail(c, LW_ERR_STEP,
                            "the step size collapsed: the solution ends there, or jumps without "
                            "end");
            cut = 0;
            c->m->h = wanted;
            continue;
        }
        double share = 1;
        if (c->n_g > 0 &&
            (look_at_switches(c, o->t + h, o->x_new, c->g_new) || first_switching(c, h, &share)))
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
        double first = fmax(share * h, least_step(c));
        if (first < h && !cut) {
            cut = 1; // again, to end there
            next = first;
            c->m->stiff = was_stiff;
            continue;
        }
        if (!last || was_stiff != 0)
            c->m->h = last && wanted < c->m->h ? c->m->h : wanted;
        else
            c->m->h = wanted;
        accept(c, h);
        *switched = c->n_g > 0 && any_changed(c, c->g_new);
        if (!*switched && c->n_g > 0)
            memcpy(c->g, c->g_new, sizeof(double) * (size_t)c->n_g);
        return LW_OK;
    }
}

// Chatter: a function that is driven back to zero from both sides. Its swings are as small as the
// tolerance, far below what it has been.
static lw_status watch_chatter(course *c, int switched)
{
    int swung = 0;
    for (int k = 0; k < c->n_g; k++) {
        double size = fabs(c->g[k]);
        c->largest[k] = fmax(c->largest[k], size);
        c->since[k] = fmax(c->since[k], size);
        if (switched && side(c->g_new[k]) != side(c->g[k])) {
            swung |= c->since[k] > HARDLY * c->largest[k];
            c->since[k] = 0;
        }
    }
    if (switched)
        c->in_place = swung ? 0 : c->in_place + 1;
    return c->in_place <= MOST_IN_PLACE
               ? LW_OK
               : fail(c, LW_ERR_CHATTER,
                      "it chatters: a switching is driven back to its border from both sides; "
                      "state the motion along the border as a mode, or smooth the jump");
}

static lw_status begin(course *c)
{
    lw__ode_state *o = &c->o;
    if (!o->f_known && lw__ode_flow(o, o->t, o->x, o->f))
        return fail(c, LW_ERR_LAW, "a function of the plant failed");
    o->f_known = 1;
    if (c->m->h <= 0)
        c->m->h = first_size(c);
    if (o->failed != LW_OK)
        return fail(c, LW_ERR_LAW, "a function of the plant failed");
    for (int i = 0; i < o->n; i++)
        if (!(fabs(o->x[i]) < 1e300) || !(fabs(o->f[i]) < 1e300))
            return fail(c, LW_ERR_NOT_FINITE, "a state or its derivative is not finite");
    return c->m->h > 0 ? LW_OK : fail(c, LW_ERR_NOT_FINITE, "no step size can be found");
}

static lw_status go(course *c)
{
    lw__ode_state *o = &c->o;
    int n_switchings = 0;
    for (int steps = 0; o->t < c->t1; steps++) {
        int switched;
        lw_status status = begin(c);
        if (status == LW_OK)
            status = one_step(c, &switched);
        if (status == LW_OK && c->n_g > 0)
            status = watch_chatter(c, switched);
        if (status == LW_OK && switched) {
            status = tell_switchings(c);
            if (status == LW_OK && ++n_switchings > MOST_SWITCHINGS)
                status = fail(c, LW_ERR_STEP, "it switches without end between two events");
        }
        if (status != LW_OK)
            return status;
        if (steps == MOST_STEPS)
            return fail(c, LW_ERR_STEP, "more than five million steps between two events");
        if (c->t1 - o->t < least_step(c))
            o->t = c->t1;
    }
    return LW_OK;
}

lw_status lw__ode_advance(const lw__ode_system *s, double rtol, const double *atol, double *memory,
                          double t0, double t1, double *x, lw__ode_sink sink, void *context,
                          double *work, double *t_failed, const char **text)
{
    int n = s->n;
    course c = {.o = {.system = s, .n = n, .rtol = rtol, .atol = atol, .t = t0, .x = x},
                .m = (lw__ode_memory *)memory,
                .t1 = t1,
                .sink = sink,
                .context = context,
                .n_g = s->n_switches};
    if (!(t1 > t0) || n == 0)
        return LW_OK;
    c.o.f = work;
    c.o.x_new = c.o.f + n;
    c.o.f_new = c.o.x_new + n;
    c.o.c = c.o.f_new + n;
    c.x_mid = c.o.c + (LW__ODE_DEGREE + 1) * n;
    c.g = c.x_mid + 2 * n;
    c.g_new = c.g + c.n_g;
    c.g_mid = c.g_new + c.n_g;
    c.largest = c.g_mid + c.n_g;
    c.since = c.largest + c.n_g;
    c.o.k = c.since + c.n_g;
    memset(c.largest, 0, sizeof(double) * 2 * (size_t)c.n_g);
    double *slope = memory + sizeof(lw__ode_memory) / sizeof(double);
    if ((c.o.f_known = c.m->slope_known != 0))
        memcpy(c.o.f, slope, sizeof(double) * (size_t)n);
    lw_status status = look_at_switches(&c, t0, x, c.g)
                           ? fail(&c, LW_ERR_LAW, "a function of the plant failed")
                           : go(&c);
    c.m->slope_known = status == LW_OK && c.o.f_known;
    if (c.m->slope_known != 0)
        memcpy(slope, c.o.f, sizeof(double) * (size_t)n);
    if (status != LW_OK) {
        *t_failed = c.o.t;
        *text = c.text;
    }
    return status;
}
