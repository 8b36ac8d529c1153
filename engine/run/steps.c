// Integration from own event to own event. See steps.h.
//
// Workload: one or two steps a call, six evaluations each; the flow takes most of the time.
//
// Invariants
// 1. The slope at the end of a step is that at the start of the next one, unless something changed.
// 2. A step ends where a switching passes through zero, a little past it.
// 3. All decisions depend on the system, the memory and the lengths only.

#include "run/steps.h"

#include <latewood/elementary.h>

#include <math.h>
#include <string.h>

#define SMALLEST 1e-15    // [s] a thousandth of a tick: shorter steps are a collapse
#define MOST_AT_ONCE 1000 // switchings within a tick
#define TICK 1e-12

// Places in the memory: step size, whether the slope stands, then the slope, then the sides of the
// switchings (-1, 1; 0: not known yet).
enum { M_SIZE, M_SLOPE_STANDS, M_DISTURBED, M_SLOPE = LW__STEPS_HEAD };

static const double nodes[7] = {0, 0.2, 0.3, 0.8, 8. / 9, 1, 1};
static const double a[7][6] = {{0},
                               {1. / 5},
                               {3. / 40, 9. / 40},
                               {44. / 45, -56. / 15, 32. / 9},
                               {19372. / 6561, -25360. / 2187, 64448. / 6561, -212. / 729},
                               {9017. / 3168, -355. / 33, 46732. / 5247, 49. / 176, -5103. / 18656},
                               {35. / 384, 0, 500. / 1113, 125. / 192, -2187. / 6784, 11. / 84}};
static const double error_weight[7] = {71. / 57600,      0,         -71. / 16695, 71. / 1920,
                                       -17253. / 339200, 22. / 525, -1. / 40};
static const double dense_weight[7] = {-12715105075. / 11282082432.,  0,
                                       87487479700. / 32700410799.,   -10690763975. / 1880347072.,
                                       701980252875. / 199316789632., -1453857185. / 822651844.,
                                       69997945. / 29380423.};

int lw__steps_memory(const lw__system *s)
{
    return M_SLOPE + s->n + s->n_switches;
}

const double *lw__steps_sides(const lw__system *s, const double *memory)
{
    return memory + M_SLOPE + s->n;
}

int lw__steps_scratch(const lw__system *s)
{
    return 14 * s->n + 2 * s->n_switches;
}

void lw__steps_disturb(double *memory)
{
    memory[M_SLOPE_STANDS] = 0;
    memory[M_DISTURBED] = 1;
}

// A call at work.
typedef struct work {
    const lw__system *s;
    double *memory, *sides;
    double t, *x;
    double *k, *y, *c, *at, *g; // slopes [7][n], end of a step, polynomials, a point, switchings
    int has_c;
    double marked; // instant from which switchings are counted
    int n_marked;
    lw__steps_end end;
} work;

static int fail(work *w, lw_status status, const char *text)
{
    w->end = (lw__steps_end){status, w->t, text};
    return 1;
}

static int law_failed(work *w)
{
    return fail(w, LW_ERR_LAW, "its flow failed");
}

// ---- the size of steps

// v^-0.1 to a thousandth, which is plenty for a step size.
static double tenth_root_inverse(double v)
{
    static const double part[10] = {1,
                                    0.93303299153680743,
                                    0.87055056329612412,
                                    0.81225239635623548,
                                    0.75785828325519905,
                                    0.70710678118654757,
                                    0.65975395538644710,
                                    0.61557220667245816,
                                    0.57434917749851755,
                                    0.53588673126814657};
    int exponent;
    double m = frexp(v, &exponent) - 0.75;
    int whole = exponent >= 0 ? exponent / 10 : -((9 - exponent) / 10);
    double root = 1.02918601 + m * (-0.14354694 + m * 0.10722); // through 0.5, 0.75, 1
    return ldexp(root * part[exponent - 10 * whole], -whole);
}

static double scale_of(const work *w, int i, double x)
{
    return w->s->atol[i] + w->s->rtol * fabs(x);
}

static double norm_of(const work *w, const double *v)
{
    double sum = 0;
    for (int i = 0; i < w->s->n; i++) {
        double e = v[i] / scale_of(w, i, w->x[i]);
        sum += e * e;
    }
    return sqrt(sum / (w->s->n > 0 ? w->s->n : 1));
}

// A first step from the sizes of state, slope and the slope's change (Hairer and others, II.4).
static int first_size(work *w, double longest)
{
    int n = w->s->n;
    double size = norm_of(w, w->x), slope = norm_of(w, w->k);
    double h = size < 1e-5 || slope < 1e-5 ? 1e-6 * longest : 0.01 * size / slope;
    h = h < longest ? h : longest;
    for (int i = 0; i < n; i++)
        w->y[i] = w->x[i] + h * w->k[i];
    if (w->s->flow(w->s->context, w->t + h, w->y, w->k + n))
        return law_failed(w);
    for (int i = 0; i < n; i++)
        w->at[i] = (w->k[n + i] - w->k[i]) / h;
    double most = fmax(norm_of(w, w->at), slope);
    double second = most > 1e-15 ? lw_pow(0.01 / most, 0.2) : 1e-3 * longest;
    h = fmin(100 * h, second);
    w->memory[M_SIZE] = h > 0 && isfinite(h) ? fmin(h, longest) : longest;
    return 0;
}

// ---- one step

// From x over h to y; the square of the error against the tolerance, NAN where a number is lost.
static double try_step(work *w, double h)
{
    int n = w->s->n;
    double sum = 0;
    for (int stage = 1; stage < 7; stage++) {
        for (int i = 0; i < n; i++) {
            double v = a[stage][0] * w->k[i];
            for (int m = 1; m < stage; m++)
                v += a[stage][m] * w->k[m * n + i];
            w->y[i] = w->x[i] + h * v;
        }
        if (w->s->flow(w->s->context, w->t + nodes[stage] * h, w->y, w->k + stage * n)) {
            law_failed(w);
            return 0;
        }
    }
    w->has_c = 0;
    for (int i = 0; i < n; i++) {
        double e = 0;
        for (int stage = 0; stage < 7; stage++)
            e += error_weight[stage] * w->k[stage * n + i];
        e = h * e / scale_of(w, i, fmax(fabs(w->x[i]), fabs(w->y[i])));
        sum += e * e + 0 * w->k[6 * n + i];
    }
    return sum / (n > 0 ? n : 1);
}

// The step's polynomials, once a step.
static const double *polynomials(work *w, double h)
{
    int n = w->s->n;
    double *c = w->c;
    for (int i = 0; i < n && !w->has_c; i++) {
        const double *k = w->k + i;
        double d = w->y[i] - w->x[i], b = h * k[0] - d, r4 = d - h * k[6 * n] - b, r5 = 0;
        for (int stage = 0; stage < 7; stage++)
            r5 += dense_weight[stage] * k[stage * n];
        r5 *= h;
        c[i] = w->x[i];
        c[n + i] = d + b;
        c[2 * n + i] = -b + r4 + r5;
        c[3 * n + i] = -r4 - 2 * r5;
        c[4 * n + i] = r5;
    }
    w->has_c = 1;
    return c;
}

void lw__step_value(const lw__step *step, double at, double *x)
{
    for (int i = 0; i < step->n; i++) {
        double v = step->c[LW__STEP_DEGREE * step->n + i];
        for (int power = LW__STEP_DEGREE - 1; power >= 0; power--)
            v = v * at + step->c[power * step->n + i];
        x[i] = v;
    }
}

// ---- switchings

static int side_of(double g)
{
    return g > 0 ? 1 : g < 0 ? -1 : 0;
}

static int switches_at(work *w, double t, const double *x)
{
    return w->s->switches(w->s->context, t, x, w->g) ? law_failed(w) : 0;
}

// Whether any switching stands on the other side than before.
static int any_passed(const work *w)
{
    for (int k = 0; k < w->s->n_switches; k++)
        if (side_of(w->g[k]) * w->sides[k] < 0)
            return 1;
    return 0;
}

// The share of the step, within [0, 1], up to which one has passed: bisection on the polynomials,
// so that jumps of a switching do no harm; it ends at neighbours in time.
static int locate(work *w, double h, double *share)
{
    double lo = 0, hi = 1, near = 1e-14 + 0x1p-52 * w->t / h;
    lw__step step = {w->t, h, w->s->n, polynomials(w, h)};
    while (hi - lo > near) {
        double middle = 0.5 * (lo + hi);
        lw__step_value(&step, middle, w->at);
        if (switches_at(w, w->t + middle * h, w->at))
            return 1;
        if (any_passed(w))
            hi = middle;
        else
            lo = middle;
    }
    *share = hi;
    return 0;
}

static int count_switching(work *w)
{
    if (w->t - w->marked > TICK) {
        w->marked = w->t;
        w->n_marked = 0;
    }
    if (++w->n_marked > MOST_AT_ONCE)
        return fail(w, LW_ERR_CHATTER,
                    "it switches on and on at one instant; what holds it there is to be a mode");
    return 0;
}

// Take the sides as they are at x; those that changed happen, which may change others.
static int settle_sides(work *w)
{
    const lw__system *s = w->s;
    for (;;) {
        if (switches_at(w, w->t, w->x))
            return 1;
        int which = -1;
        for (int k = 0; k < s->n_switches && which < 0; k++) {
            int side = side_of(w->g[k]);
            which = side * w->sides[k] < 0 ? k : -1;
            w->sides[k] = side != 0 ? side : w->sides[k];
        }
        if (which < 0)
            return 0;
        w->memory[M_SLOPE_STANDS] = 0;
        if (count_switching(w))
            return 1;
        if (s->happened != NULL && s->happened(s->context, w->t, w->x, which, w->sides[which] > 0))
            return law_failed(w);
    }
}

// At the end of a step that passed one: those passed happen; a state that jumped decides anew.
static int make_switchings(work *w)
{
    const lw__system *s = w->s;
    if (switches_at(w, w->t, w->x))
        return 1;
    memcpy(w->at, w->x, sizeof(double) * (size_t)s->n);
    for (int k = 0; k < s->n_switches; k++) {
        int side = side_of(w->g[k]);
        int passed = side * w->sides[k] < 0;
        w->sides[k] = side != 0 ? side : w->sides[k];
        if (!passed)
            continue;
        w->memory[M_SLOPE_STANDS] = 0;
        if (count_switching(w))
            return 1;
        if (s->happened != NULL && s->happened(s->context, w->t, w->x, k, side > 0))
            return law_failed(w);
    }
    if (memcmp(w->at, w->x, sizeof(double) * (size_t)s->n) == 0)
        return 0;
    if (switches_at(w, w->t, w->x))
        return 1;
    for (int k = 0; k < s->n_switches; k++) // at zero after a jump: on neither side
        if (w->g[k] == 0)
            w->sides[k] = 0;
    return settle_sides(w);
}

// ---- a call

static int begin(work *w, double t1)
{
    const lw__system *s = w->s;
    if (s->n_switches > 0 && w->memory[M_DISTURBED] != 0 && settle_sides(w))
        return 1;
    w->memory[M_DISTURBED] = 0;
    if (w->memory[M_SLOPE_STANDS] != 0)
        memcpy(w->k, w->memory + M_SLOPE, sizeof(double) * (size_t)s->n);
    else if (s->flow(s->context, w->t, w->x, w->k))
        return law_failed(w);
    for (int i = 0; i < s->n; i++)
        if (!isfinite(w->k[i]))
            return fail(w, LW_ERR_NOT_FINITE, "its flow is not finite");
    return w->memory[M_SIZE] == 0 ? first_size(w, t1 - w->t) : 0;
}

// Find the size with which a step holds the tolerance; *last: it ends at t1.
static int hold_tolerance(work *w, double t1, double *h, int *last)
{
    double size = w->memory[M_SIZE];
    for (;;) {
        *last = size >= (t1 - w->t) * 0.999999;
        *h = *last ? t1 - w->t : size;
        double error = try_step(w, *h);
        if (w->end.status != LW_OK)
            return 1;
        if (error <= 1) {
            if (!*last || *h * 5 > w->memory[M_SIZE]) { // no root where it cannot matter
                double next = *h * (error < 3.5e-8 ? 5 : 0.9 * tenth_root_inverse(error));
                w->memory[M_SIZE] = !*last || next > w->memory[M_SIZE] ? next : w->memory[M_SIZE];
            }
            return 0;
        }
        size = *h * (error < 1e300 ? fmax(0.2, 0.9 * tenth_root_inverse(error)) : 0.1);
        w->memory[M_SIZE] = size;
        if (size < SMALLEST || !(w->t + size > w->t))
            return isfinite(error)
                       ? fail(w, LW_ERR_STEP, "its steps collapse: it escapes or jumps by itself")
                       : fail(w, LW_ERR_NOT_FINITE, "its state is not finite from here on");
    }
}

// A step that holds the tolerance is cut where a switching passes; *passed: one did.
static int cut_at_switching(work *w, double t1, double *h, int *last, int *passed)
{
    *passed = 0;
    if (w->s->n_switches == 0)
        return 0;
    if (switches_at(w, w->t + *h, w->y))
        return 1;
    for (int k = 0; k < w->s->n_switches; k++)
        if (w->sides[k] == 0)
            w->sides[k] = side_of(w->g[k]);
    if (!any_passed(w))
        return 0;
    double share, before = w->memory[M_SIZE];
    if (locate(w, *h, &share))
        return 1;
    *passed = 1;
    if (share >= 1)
        return 0;
    w->memory[M_SIZE] = share * *h;
    if (hold_tolerance(w, w->t + share * *h, h, last))
        return 1;
    *passed = *last; // a flow that jumps inside takes smaller steps up to there
    *last = *last && w->t + *h >= t1;
    w->memory[M_SIZE] = *passed ? before : w->memory[M_SIZE];
    return 0;
}

static int accept(work *w, double t1, double h, int last, int passed,
                  void (*take)(void *context, const lw__step *step), void *context)
{
    int n = w->s->n;
    if (take != NULL) {
        lw__step step = {w->t, h, n, polynomials(w, h)};
        take(context, &step);
    }
    memcpy(w->x, w->y, sizeof(double) * (size_t)n);
    memcpy(w->k, w->k + 6 * n, sizeof(double) * (size_t)n);
    w->t = last ? t1 : w->t + h;
    w->memory[M_SLOPE_STANDS] = 1;
    if (!passed)
        return 0;
    if (make_switchings(w))
        return 1;
    if (w->memory[M_SLOPE_STANDS] == 0 && w->s->flow(w->s->context, w->t, w->x, w->k))
        return law_failed(w);
    w->memory[M_SLOPE_STANDS] = 1;
    return 0;
}

lw__steps_end lw__steps_advance(const lw__system *s, double *memory, double t0, double t1,
                                double *x, void (*take)(void *context, const lw__step *step),
                                void *context, double *scratch)
{
    int n = s->n;
    work w = {.s = s,
              .memory = memory,
              .sides = memory + M_SLOPE + n,
              .t = t0,
              .x = x,
              .k = scratch,
              .y = scratch + 7 * n,
              .c = scratch + 8 * n,
              .at = scratch + 13 * n,
              .g = scratch + 14 * n,
              .marked = t0 - 1};
    if (memory[M_SIZE] == 0)
        memory[M_DISTURBED] = 1; // sides are to be taken
    if (t0 < t1 && begin(&w, t1))
        return w.end;
    while (w.t < t1) {
        double h;
        int last, passed;
        if (hold_tolerance(&w, t1, &h, &last) || cut_at_switching(&w, t1, &h, &last, &passed) ||
            accept(&w, t1, h, last, passed, take, context))
            return w.end;
    }
    if (t0 < t1)
        memcpy(memory + M_SLOPE, w.k, sizeof(double) * (size_t)n);
    return w.end;
}
