// From t0 to t1 in steps: sizes, switchings, failures.

#include "ode/stepper.h"

#include <float.h>
#include <stddef.h>
#include <string.h>

#define MOST_STEPS 5000000
#define MOST_CUTS 3           // of one step, each nearer to its switching
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
    return 3 * n + (LW__ODE_DEGREE + 1) * n + method_work(n) + 2 * n + 7 * n_switches;
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
    double *g, *g_new, *g_mid, *g_lo, *g_hi, *x_mid;
    double *largest, *since; // of each switching function: in this call, since it switched
    int in_place;
    double
        creep; // the least step up to a switching, against least_step: grows where x stands still
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

static int all_finite(int n, const double *x)
{
    for (int i = 0; i < n; i++)
        if (!(fabs(x[i]) < 1e300))
            return 0;
    return 1;
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

// Between which shares of the step at hand the first switching lies, and the functions there.
typedef struct bracket {
    double lo, hi; // nothing has changed at lo, something has at hi; hi > 1: nothing does
} bracket;

// By quarters of the step: two switchings within one that undo each other would hide otherwise.
static int first_quarter(course *c, double h, bracket *b)
{
    *b = (bracket){0, 2};
    memcpy(c->g_lo, c->g, sizeof(double) * (size_t)c->n_g);
    if (!any_changed(c, c->g_new) && far_from_zero(c))
        return 0;
    make_dense(c, h);
    for (int quarter = 1; quarter <= 4; quarter++) {
        memcpy(c->g_mid, c->g_new, sizeof(double) * (size_t)c->n_g);
        if (quarter < 4 && look_inside(c, h, quarter / 4.0, c->g_mid))
            return 1;
        if (any_changed(c, c->g_mid)) {
            b->hi = quarter / 4.0;
            memcpy(c->g_hi, c->g_mid, sizeof(double) * (size_t)c->n_g);
            return 0;
        }
        b->lo = quarter / 4.0;
        memcpy(c->g_lo, c->g_mid, sizeof(double) * (size_t)c->n_g);
    }
    return 0;
}

static int narrow(course *c, double h, double s, bracket *b)
{
    if (!(s > b->lo && s < b->hi))
        return 0;
    if (look_inside(c, h, s, c->g_mid))
        return 1;
    int changed = any_changed(c, c->g_mid);
    *(changed ? &b->hi : &b->lo) = s;
    memcpy(changed ? c->g_hi : c->g_lo, c->g_mid, sizeof(double) * (size_t)c->n_g);
    return 0;
}

// Where the earliest of the functions that change would be zero if they were straight.
static double straight_zero(const course *c, const bracket *b)
{
    double first = 1;
    for (int k = 0; k < c->n_g; k++)
        if (side(c->g_hi[k]) != side(c->g[k])) {
            double share = c->g_lo[k] / (c->g_lo[k] - c->g_hi[k]);
            first = share < first ? share : first;
        }
    return b->lo + first * (b->hi - b->lo);
}

// Down to a few roundings of t: looks on both sides of where straight functions would be zero,
// nearer each time, and halves where that was no help (a jump, a kink).
static int locate(course *c, double h, bracket *b)
{
    if (first_quarter(c, h, b))
        return 1;
    double t = fabs(c->o.t) + fabs(h), near = 1.0 / 64;
    double resolution = fmax(2 * DBL_EPSILON * t / fabs(h), 1e-16);
    while (b->hi <= 1 && b->hi - b->lo > resolution) {
        double width = b->hi - b->lo, s = straight_zero(c, b);
        double w = fmax(0.4 * resolution, near * width);
        if (narrow(c, h, s + w, b) || narrow(c, h, s - w, b))
            return 1;
        int helped = b->hi - b->lo <= 0.5 * width;
        near = helped ? near * near : 1.0 / 64;
        if (helped)
            continue;
        double middle = b->lo + 0.5 * (b->hi - b->lo);
        if (!(middle > b->lo && middle < b->hi))
            break; // no number lies between
        if (narrow(c, h, middle, b))
            return 1;
    }
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

// The step at hand ends just before a switching: its end is carried along the flow there until
// something changes. Returns by how much; 0 where nothing does within a hundred millionth of the
// step, over which a straight line is as good as rounding.
static double cross(course *c, double h, double room)
{
    lw__ode_state *o = &c->o;
    double most = fmin(1e-8 * h, room), gap = 2 * DBL_EPSILON * (fabs(o->t) + h);
    for (; gap <= most; gap *= 2) {
        for (int i = 0; i < o->n; i++)
            c->x_mid[i] = o->x_new[i] + gap * o->f_new[i];
        if (look_at_switches(c, o->t + h + gap, c->x_mid, c->g_mid))
            return 0;
        if (!any_changed(c, c->g_mid))
            continue;
        memcpy(c->g_new, c->g_mid, sizeof(double) * (size_t)c->n_g);
        return gap;
    }
    return 0;
}

// The piece of the step at hand, lengthened by `gap`.
static void give_piece(course *c, double h, double gap)
{
    lw__ode_state *o = &c->o;
    make_dense(c, h);
    lw__ode_piece p = {o->t, h + gap, o->n, o->degree, o->c};
    if (o->degree == 4) {
        // a flow that fails at a point between is none of the run's: the step had it not
        lw_status failed = o->failed;
        p.degree = lw__ode_explicit_refine(o, h) == 0 ? 5 : 4;
        o->failed = failed;
    }
    double longer = 1 + gap / h, power = 1;
    for (int k = 1; gap > 0 && k <= p.degree; k++) {
        power *= longer;
        for (int i = 0; i < o->n; i++)
            o->c[k * o->n + i] *= power;
    }
    c->sink(c->context, &p);
}

static void accept(course *c, double h, double gap)
{
    lw__ode_state *o = &c->o;
    if (c->sink != NULL)
        give_piece(c, h, gap);
    o->t += h + gap;
    for (int i = 0; i < o->n; i++)
        o->x[i] = gap > 0 ? o->x_new[i] + gap * o->f_new[i] : o->x_new[i];
    memcpy(o->f, o->f_new, sizeof(double) * (size_t)o->n);
    o->jacobian_known = 0;
}

static lw__ode_outcome try_step(course *c, double h, int last, double *next)
{
    c->dense = 0;
    return c->m->stiff != 0 ? lw__ode_stiff(&c->o, c->m, h, next)
                            : lw__ode_explicit(&c->o, c->m, h, last, c->m->h, next);
}

// A trial step: what came of it, and what it asks for.
typedef struct trial {
    double h, natural; // its size, that of the following one
    int last, cuts;    // shortened; how often, by a switching
    double was_stiff;
} trial;

// The step was refused. If it goes over a switching, that may be why: it is tried once up to there.
static lw_status refused(course *c, trial *y, double wanted)
{
    lw__ode_state *o = &c->o;
    bracket b = {0, 2};
    if (wanted < least_step(c))
        return fail(c, LW_ERR_STEP,
                    "the step size collapsed: the solution ends there, or jumps without end");
    if (c->n_g > 0 && y->cuts == 0 && c->m->stiff == 0 && all_finite(o->n, o->x_new)) {
        if (look_at_switches(c, o->t + y->h, o->x_new, c->g_new) || locate(c, y->h, &b))
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
        if (b.hi <= 1 && b.lo * y->h > wanted) {
            y->cuts = 1;
            y->natural = b.lo * y->h;
            return LW_OK;
        }
    }
    y->cuts = 0;
    c->m->h = y->natural = wanted;
    return LW_OK;
}

// The step holds the tolerance: 1 where it is to be taken again up to a switching, -1 failed.
static int goes_over(course *c, trial *y)
{
    lw__ode_state *o = &c->o;
    bracket b;
    if (look_at_switches(c, o->t + y->h, o->x_new, c->g_new) || locate(c, y->h, &b))
        return -1;
    double least = c->creep * least_step(c), target = b.lo * y->h;
    target = target < least ? fmax(b.hi * y->h, least) : target;
    if (b.hi > 1 || y->cuts == MOST_CUTS || !(target < (1 - 4 * DBL_EPSILON) * y->h))
        return 0;
    y->cuts++;
    y->natural = target;
    c->m->stiff = y->was_stiff;
    return 1;
}

// One accepted step, at most up to t1. *switched: it ends at a switching.
static lw_status one_step(course *c, int *switched)
{
    lw__ode_state *o = &c->o;
    trial y = {.natural = c->m->h};
    double wanted;
    for (;;) {
        double left = c->t1 - o->t;
        int whole = y.natural >= 0.999999 * left;
        y.last = y.cuts > 0 || whole;
        y.h = whole && y.cuts == 0 ? left : fmin(y.natural, left);
        y.was_stiff = c->m->stiff;
        lw__ode_outcome outcome = try_step(c, y.h, y.last, &wanted);
        if (outcome == LW__ODE_FAILED)
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
        if (outcome == LW__ODE_REJECTED) {
            lw_status status = refused(c, &y, wanted);
            if (status != LW_OK)
                return status;
            continue;
        }
        int over = c->n_g > 0 ? goes_over(c, &y) : 0;
        if (over < 0)
            return fail(c, LW_ERR_LAW, "a function of the plant failed");
        if (over == 0)
            break;
    }
    double gap = y.cuts > 0 && !any_changed(c, c->g_new) ? cross(c, y.h, c->t1 - o->t - y.h) : 0;
    if (o->failed != LW_OK)
        return fail(c, LW_ERR_LAW, "a function of the plant failed");
    if (!y.last || wanted > c->m->h || y.was_stiff == 0)
        c->m->h = wanted;
    accept(c, y.h, gap);
    *switched = c->n_g > 0 && any_changed(c, c->g_new);
    // steps so short that no state moves would never come to a switching just ahead
    int crept = y.cuts > 0 && !*switched && y.h <= 4 * c->creep * least_step(c);
    c->creep = crept ? 4 * c->creep : 1;
    if (!*switched && c->n_g > 0)
        memcpy(c->g, c->g_new, sizeof(double) * (size_t)c->n_g);
    return LW_OK;
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
    if (!all_finite(o->n, o->x) || !all_finite(o->n, o->f))
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
                .creep = 1,
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
    c.g_lo = c.g_mid + c.n_g;
    c.g_hi = c.g_lo + c.n_g;
    c.largest = c.g_hi + c.n_g;
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
