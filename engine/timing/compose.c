// Timings made of timings: quiet and burst modes, stalls, sums, maxima, scaling.
//
// A node draws its own uniforms first, then lets its children draw theirs, always all of them, so
// that every part has the same streams whatever happens.

#include "timing/family.h"

#include <float.h>
#include <math.h>
#include <stdio.h>

static double factorial_ratio(int n, int k)
{
    static const int rows[5][5] = {
        {1, 0, 0, 0, 0}, {1, 1, 0, 0, 0}, {1, 2, 1, 0, 0}, {1, 3, 3, 1, 0}, {1, 4, 6, 4, 1}};
    return n <= 4 && k <= n ? rows[n][k] : (double)NAN;
}

static void name_of(const lw_timing *t, char *text, size_t size)
{
    lw_timing_describe(t, text, (int)size);
}

static int scaled_from(lw__points *out, int first, double factor)
{
    for (int i = first; i < out->n; i++)
        out->p[i].weight *= factor;
    return out->n;
}

static void both_cuts(const lw_timing *t, lw__points *out)
{
    t->a->family->cuts(t->a, out);
    t->b->family->cuts(t->b, out);
}

// Of a mixture, b with weight w.
static double mixed(double w, double of_a, double of_b)
{
    return (1 - w) * of_a + w * of_b;
}

// ---- modes: p[0] enter, p[1] leave, p[2] long-run share of bursts; one state: 1 in a burst

static double modes_draw(const lw_timing *t, lw__draw_at *at)
{
    double u = lw__timing_uniform_of(at), *burst = at->state++;
    double quiet_value = t->a->family->draw(t->a, at), burst_value = t->b->family->draw(t->b, at);
    if (at->job > 0) // a run begins quiet
        *burst = *burst != 0 ? u >= t->p[1] : u < t->p[0];
    return *burst != 0 ? burst_value : quiet_value;
}

static double mixture_cdf(const lw_timing *t, double x)
{
    return mixed(t->p[2], lw_timing_cdf(t->a, x), lw_timing_cdf(t->b, x));
}

static double mixture_density(const lw_timing *t, double x)
{
    return mixed(t->p[2], lw_timing_density(t->a, x), lw_timing_density(t->b, x));
}

static double mixture_moment(const lw_timing *t, int order)
{
    return mixed(t->p[2], lw_timing_moment(t->a, order), lw_timing_moment(t->b, order));
}

static void mixture_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    int first = out->n;
    t->a->family->points(t->a, how, out);
    first = scaled_from(out, first, 1 - t->p[2]);
    t->b->family->points(t->b, how, out);
    scaled_from(out, first, t->p[2]);
}

static void modes_describe(const lw_timing *t, char *text, int size)
{
    char quiet[120], burst[120];
    name_of(t->a, quiet, sizeof quiet);
    name_of(t->b, burst, sizeof burst);
    snprintf(text, (size_t)size,
             "quiet (%s) and burst (%s), entered with %.4g, left with %.4g a job", quiet, burst,
             t->p[0], t->p[1]);
}

static const lw__family modes_family = {"modes",        modes_draw,      NULL,
                                        mixture_cdf,    mixture_density, mixture_moment,
                                        modes_describe, both_cuts,       mixture_points};

static lw_status check_chance(const char *name, double value, lw_error *err)
{
    return value >= 0 && value <= 1
               ? LW_OK
               : lw__timing_bad(err, name, value, "a chance from 0 to 1 is wanted");
}

lw_status lw_timing_modes(const lw_timing *quiet, const lw_timing *burst, double enter,
                          double leave, lw_timing **out, lw_error *err)
{
    lw_status status = check_chance("enter", enter, err);
    if (status == LW_OK)
        status = check_chance("leave", leave, err);
    if (status != LW_OK)
        return status;
    lw_timing *t = lw__timing_node(&modes_family, quiet, burst);
    if (t != NULL) {
        t->p[0] = enter;
        t->p[1] = leave;
        t->p[2] = enter + leave > 0 ? enter / (enter + leave) : 0;
        t->n_streams += 1;
        t->n_state += 1;
        t->has_atoms = quiet->has_atoms | burst->has_atoms;
        t->has_density = quiet->has_density | burst->has_density;
        t->lo = quiet->lo < burst->lo || enter == 0 ? quiet->lo : burst->lo;
        t->hi = quiet->hi > burst->hi || enter == 0 ? quiet->hi : burst->hi;
    }
    return lw__timing_give(t, out, err);
}

// ---- affine: p[0] factor, p[1] shift

static double affine_draw(const lw_timing *t, lw__draw_at *at)
{
    return t->p[0] * t->a->family->draw(t->a, at) + t->p[1];
}

static double affine_quantile(const lw_timing *t, const double **u)
{
    return t->p[0] * t->a->family->quantile(t->a, u) + t->p[1];
}

// Going back to y rounds; the few last places more or less keep an atom of `a` on its own side.
static double affine_cdf(const lw_timing *t, double x)
{
    double y = (x - t->p[1]) / t->p[0];
    double slack = 2 * DBL_EPSILON * (fabs(x) + fabs(t->p[1])) / fabs(t->p[0]);
    return t->p[0] > 0 ? lw_timing_cdf(t->a, y + slack) : 1 - lw_timing_cdf(t->a, y - slack);
}

static double affine_density(const lw_timing *t, double x)
{
    return lw_timing_density(t->a, (x - t->p[1]) / t->p[0]) / fabs(t->p[0]);
}

static double affine_moment(const lw_timing *t, int order)
{
    double sum = 0, factor = 1;
    for (int k = 0; k <= order; k++) {
        double shift = 1;
        for (int i = 0; i < order - k; i++)
            shift *= t->p[1];
        sum += factorial_ratio(order, k) * factor * lw_timing_moment(t->a, k) * shift;
        factor *= t->p[0];
    }
    return sum;
}

static void affine_describe(const lw_timing *t, char *text, int size)
{
    char inner[160];
    name_of(t->a, inner, sizeof inner);
    snprintf(text, (size_t)size, "%.6g times (%s), shifted by %s", t->p[0], inner,
             lw__timing_words(t->p[1]).text);
}

static void affine_cuts(const lw_timing *t, lw__points *out)
{
    int first = out->n;
    t->a->family->cuts(t->a, out);
    for (int i = first; i < out->n; i++)
        out->p[i].x = t->p[0] * out->p[i].x + t->p[1];
}

static void affine_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    lw__points cuts = {0};
    int first = out->n;
    for (int i = 0; how->cuts != NULL && i < how->cuts->n; i++)
        lw__points_add(&cuts, (how->cuts->p[i].x - t->p[1]) / t->p[0], 0, 1);
    t->a->family->points(t->a, &(lw__how){&cuts, how->parts, how->n_nodes}, out);
    for (int i = first; i < out->n; i++)
        out->p[i].x = t->p[0] * out->p[i].x + t->p[1];
    out->failed |= cuts.failed;
    lw__points_free(&cuts);
}

static const lw__family affine_family = {"affine",        affine_draw,    affine_quantile,
                                         affine_cdf,      affine_density, affine_moment,
                                         affine_describe, affine_cuts,    affine_points};
// the same over a timing that has no quantile of its own
static const lw__family affine_drawn_family = {"affine",        affine_draw,    NULL,
                                               affine_cdf,      affine_density, affine_moment,
                                               affine_describe, affine_cuts,    affine_points};

lw_status lw_timing_affine(const lw_timing *of, double factor, double shift, lw_timing **out,
                           lw_error *err)
{
    if (!isfinite(factor))
        return lw__timing_bad(err, "factor", factor, "a finite number is wanted");
    if (!isfinite(shift))
        return lw__timing_bad(err, "shift", shift, "a finite number is wanted");
    if (factor == 0 || of->lo == of->hi)
        return lw_timing_constant(factor * of->lo + shift, out, err);
    int has_quantile = of->family->quantile != NULL;
    lw_timing *t = lw__timing_node(has_quantile ? &affine_family : &affine_drawn_family, of, NULL);
    if (t != NULL) {
        t->p[0] = factor;
        t->p[1] = shift;
        t->has_atoms = of->has_atoms;
        t->has_density = of->has_density;
        t->lo = factor * (factor > 0 ? of->lo : of->hi) + shift;
        t->hi = factor * (factor > 0 ? of->hi : of->lo) + shift;
    }
    return lw__timing_give(t, out, err);
}

// ---- sum and maximum of independent timings

static double sum_draw(const lw_timing *t, lw__draw_at *at)
{
    double a = t->a->family->draw(t->a, at), b = t->b->family->draw(t->b, at);
    return a + b;
}

static double sum_quantile(const lw_timing *t, const double **u)
{
    double a = t->a->family->quantile(t->a, u), b = t->b->family->quantile(t->b, u);
    return a + b;
}

// What to go through by points: a list if there is one, otherwise not what is itself a sum.
static const lw_timing *gone_through(const lw_timing *t)
{
    if (!t->a->has_density)
        return t->a;
    return t->b->has_density && t->b->family->cdf == t->family->cdf ? t->a : t->b;
}

// Sum over the points y of `of` of weight times what(other, x - y); atoms alone if wanted.
static double convolved(const lw_timing *of, const lw_timing *other, double x, int atoms_only,
                        double (*what)(const lw_timing *, double))
{
    lw__points cuts = {0}, list = {0};
    double sum = 0;
    other->family->cuts(other, &cuts);
    for (int i = 0; i < cuts.n; i++)
        cuts.p[i].x = x - cuts.p[i].x;
    of->family->points(of, &(lw__how){&cuts, 1, 0}, &list);
    for (int i = 0; i < list.n; i++) {
        double y = list.p[i].x, slack = 2 * DBL_EPSILON * (fabs(x) + fabs(y)); // as in affine_cdf
        if (list.p[i].sure || !atoms_only)
            sum += list.p[i].weight * what(other, x - y + slack);
    }
    int failed = cuts.failed | list.failed;
    lw__points_free(&cuts);
    lw__points_free(&list);
    return failed ? (double)NAN : sum;
}

static double sum_cdf(const lw_timing *t, double x)
{
    const lw_timing *of = gone_through(t), *other = of == t->a ? t->b : t->a;
    double f = convolved(of, other, x, 0, lw_timing_cdf);
    return f > 1 ? 1 : f;
}

static double sum_density(const lw_timing *t, double x)
{
    const lw_timing *of = gone_through(t), *other = of == t->a ? t->b : t->a;
    double f = other->has_density ? convolved(of, other, x, 0, lw_timing_density) : 0;
    return other->has_atoms && of->has_density ? f + convolved(other, of, x, 1, lw_timing_density)
                                               : f;
}

// Every pair of points.
static void add_pairs(const lw__points *a, const lw__points *b, lw__points *out)
{
    for (int i = 0; i < a->n; i++)
        for (int k = 0; k < b->n && !out->failed; k++)
            lw__points_add(out, a->p[i].x + b->p[k].x, a->p[i].weight * b->p[k].weight,
                           a->p[i].sure && b->p[k].sure);
    out->failed |= a->failed | b->failed;
}

// Nodes of a part; as exact for polynomials as its points are, and few.
static void add_nodes(const lw_timing *t, int n, lw__points *out)
{
    double x[64], weight[64];
    lw_error err;
    out->failed |= lw_timing_nodes(t, n, x, weight, &err) != LW_OK;
    for (int i = 0; i < n && !out->failed; i++)
        if (weight[i] > 0)
            lw__points_add(out, x[i], weight[i], 0);
}

static void sum_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    lw__points a = {0}, b = {0};
    if (how->n_nodes == 0 && !t->has_atoms) {
        lw__smooth_points(t, how, out);
        return;
    }
    if (how->n_nodes > 0) {
        add_nodes(t->a, how->n_nodes, &a);
        add_nodes(t->b, how->n_nodes, &b);
    } else {
        t->a->family->points(t->a, &(lw__how){NULL, 1, 0}, &a);
        t->b->family->points(t->b, &(lw__how){NULL, 1, 0}, &b);
    }
    add_pairs(&a, &b, out);
    lw__points_free(&a);
    lw__points_free(&b);
}

static double sum_moment(const lw_timing *t, int order)
{
    double sum = 0;
    for (int k = 0; k <= order; k++)
        sum += factorial_ratio(order, k) * lw_timing_moment(t->a, k) *
               lw_timing_moment(t->b, order - k);
    return sum;
}

static void sum_describe(const lw_timing *t, char *text, int size)
{
    char a[120], b[120];
    name_of(t->a, a, sizeof a);
    name_of(t->b, b, sizeof b);
    snprintf(text, (size_t)size, "the sum of (%s) and (%s)", a, b);
}

static const lw__family sum_family = {"sum",        sum_draw,     sum_quantile,
                                      sum_cdf,      sum_density,  sum_moment,
                                      sum_describe, lw__sum_cuts, sum_points};
static const lw__family sum_drawn_family = {"sum",        sum_draw,     NULL,
                                            sum_cdf,      sum_density,  sum_moment,
                                            sum_describe, lw__sum_cuts, sum_points};

static double maximum_draw(const lw_timing *t, lw__draw_at *at)
{
    double a = t->a->family->draw(t->a, at), b = t->b->family->draw(t->b, at);
    return a > b ? a : b;
}

static double maximum_quantile(const lw_timing *t, const double **u)
{
    double a = t->a->family->quantile(t->a, u), b = t->b->family->quantile(t->b, u);
    return a > b ? a : b;
}

static double maximum_cdf(const lw_timing *t, double x)
{
    return lw_timing_cdf(t->a, x) * lw_timing_cdf(t->b, x);
}

static double maximum_density(const lw_timing *t, double x)
{
    return lw_timing_cdf(t->a, x) * lw_timing_density(t->b, x) +
           lw_timing_cdf(t->b, x) * lw_timing_density(t->a, x);
}

// Points of `of` where the other is not above it: at an atom of both, one side alone counts it.
static void add_larger(const lw_timing *of, const lw_timing *other, int ties, const lw__how *how,
                       lw__points *out)
{
    lw__points cuts = {0};
    int first = out->n;
    for (int i = 0; how->cuts != NULL && i < how->cuts->n; i++)
        lw__points_add(&cuts, how->cuts->p[i].x, 0, 1);
    other->family->cuts(other, &cuts);
    of->family->points(of, &(lw__how){&cuts, how->parts, 0}, out);
    for (int i = first; i < out->n; i++) {
        lw__point *p = &out->p[i];
        double below = 8 * DBL_EPSILON * (fabs(p->x) + fabs(other->lo) + fabs(other->hi));
        p->weight *= lw_timing_cdf(other, p->sure && !ties ? p->x - below : p->x);
    }
    out->failed |= cuts.failed;
    lw__points_free(&cuts);
}

static void maximum_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    add_larger(t->a, t->b, 1, how, out);
    add_larger(t->b, t->a, 0, how, out);
}

static void maximum_describe(const lw_timing *t, char *text, int size)
{
    char a[120], b[120];
    name_of(t->a, a, sizeof a);
    name_of(t->b, b, sizeof b);
    snprintf(text, (size_t)size, "the larger of (%s) and (%s)", a, b);
}

static const lw__family maximum_family = {"maximum",        maximum_draw,    maximum_quantile,
                                          maximum_cdf,      maximum_density, lw__points_moment,
                                          maximum_describe, both_cuts,       maximum_points};
static const lw__family maximum_drawn_family = {
    "maximum",         maximum_draw,     NULL,      maximum_cdf,   maximum_density,
    lw__points_moment, maximum_describe, both_cuts, maximum_points};

static int both_have_quantiles(const lw_timing *a, const lw_timing *b)
{
    return a->family->quantile != NULL && b->family->quantile != NULL;
}

lw_status lw_timing_sum(const lw_timing *a, const lw_timing *b, lw_timing **out, lw_error *err)
{
    lw_timing *t =
        lw__timing_node(both_have_quantiles(a, b) ? &sum_family : &sum_drawn_family, a, b);
    if (t != NULL) {
        t->has_atoms = a->has_atoms & b->has_atoms;
        t->has_density = a->has_density | b->has_density;
        t->lo = a->lo + b->lo;
        t->hi = a->hi + b->hi;
    }
    return lw__timing_give(t, out, err);
}

lw_status lw_timing_maximum(const lw_timing *a, const lw_timing *b, lw_timing **out, lw_error *err)
{
    lw_timing *t =
        lw__timing_node(both_have_quantiles(a, b) ? &maximum_family : &maximum_drawn_family, a, b);
    if (t != NULL) {
        t->has_atoms = a->has_atoms | b->has_atoms;
        t->has_density = a->has_density | b->has_density;
        t->lo = a->lo > b->lo ? a->lo : b->lo;
        t->hi = a->hi > b->hi ? a->hi : b->hi;
    }
    return lw__timing_give(t, out, err);
}

// ---- stall: a usual, b the sum of usual and stall; p[2] share of stalls. Both parts of the sum
// are drawn, the stall is added or not.

static double stall_draw(const lw_timing *t, lw__draw_at *at)
{
    const uint32_t *own = at->stream++;
    double usual = t->a->family->draw(t->a, at), stall = t->b->b->family->draw(t->b->b, at);
    int stalls;
    if (t->every > 0) {
        int64_t phase = t->phase;
        lw_address once = {at->seed, at->run, *own, LW__ONCE_A_RUN};
        if (phase < 0)
            phase = (int64_t)(lw_draw_uniform(once) * (double)t->every);
        stalls = at->job >= phase && (at->job - phase) % t->every == 0;
    } else {
        stalls = lw_draw_uniform((lw_address){at->seed, at->run, *own, at->job}) < t->p[2];
    }
    return stalls ? usual + stall : usual;
}

static void stall_describe(const lw_timing *t, char *text, int size)
{
    char usual[120], stall[120];
    name_of(t->a, usual, sizeof usual);
    name_of(t->b->b, stall, sizeof stall);
    if (t->every > 0)
        snprintf(text, (size_t)size, "%s, and (%s) more at every %lldth job", usual, stall,
                 (long long)t->every);
    else
        snprintf(text, (size_t)size, "%s, and (%s) more with chance %.4g a job", usual, stall,
                 t->p[2]);
}

static const lw__family stall_family = {"stall",        stall_draw,      NULL,
                                        mixture_cdf,    mixture_density, mixture_moment,
                                        stall_describe, both_cuts,       mixture_points};

lw_status lw_timing_stall(const lw_timing *usual, const lw_timing *stall, double chance,
                          int64_t every, int64_t phase, lw_timing **out, lw_error *err)
{
    lw_status status = every > 0 ? LW_OK : check_chance("chance", chance, err);
    if (status == LW_OK && every < 0)
        status = lw__timing_bad(err, "every", (double)every, "permitted from 1 on");
    if (status == LW_OK && stall->lo < 0)
        status = lw__timing_bad(err, "stall", stall->lo, "a stall is at least 0 long");
    if (status != LW_OK)
        return status;
    lw_timing *sum = NULL;
    status = lw_timing_sum(usual, stall, &sum, err);
    if (status != LW_OK)
        return status;
    lw_timing *t = lw__timing_node(&stall_family, usual, sum);
    if (t != NULL) {
        t->p[2] = every > 0 ? 1.0 / (double)every : chance;
        t->every = every;
        t->phase = phase;
        t->has_atoms = usual->has_atoms;
        t->has_density = sum->has_density;
        t->n_streams = sum->n_streams + 1;
        t->n_state = sum->n_state;
        t->lo = t->p[2] == 1 ? sum->lo : usual->lo;
        t->hi = t->p[2] == 0 ? usual->hi : sum->hi;
    }
    lw_timing_free(sum);
    return lw__timing_give(t, out, err);
}
