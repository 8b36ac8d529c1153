// Fits of step responses by nonlinear least squares.
//
// Workload: from some tens of rows to a million, once a study; nothing here is on a run's path.
//
// Invariants
// 1. Rows are fitted in units of the data (time over the stretch after the step, values over their
//    range), so that one set of tolerances serves.
// 2. Parameters that are above 0 are fitted by their logarithms. p: offset, gain, then the time
//    constant or frequency and damping, then the delay.
// 3. Results are rounded; the plant is built from what was rounded.

#include <latewood/fit.h>

#include <gsl/gsl_blas.h>
#include <gsl/gsl_errno.h>
#include <gsl/gsl_multifit_nlinear.h>
#include <latewood/elementary.h>
#include <math.h>
#include <string.h>

#define MOST 5          // parameters
#define COARSE 1000     // rows among which starts compete
#define MOST_ROUNDS 200 // of one descent
#define TOLERANCE 1e-11 // of a parameter and of the gradient; results are kept to 1e-6

static const char *const kind_words[] = {
#define WORDS(name, words) words,
    LW_FIT_LIST(WORDS)};
static const char *const parameter_words[] = {LW_FIT_PARAMETERS(WORDS)
#undef WORDS
};

const char *lw_fit_words(lw_fit_kind kind)
{
    return (int)kind >= 0 && kind < LW_N_FIT_KINDS ? kind_words[kind] : "";
}

const char *lw_fit_parameter_words(lw_fit_parameter which)
{
    return (int)which >= 0 && which < LW_N_FIT_PARAMETERS ? parameter_words[which] : "";
}

// ---- step responses of gain 1

typedef struct shape {
    int integrates, order; // order of what is beside the integrator
    int delayed;
} shape;

static shape shape_of(lw_fit_kind kind)
{
    static const shape shapes[] = {{0, 1, 0}, {0, 1, 1}, {0, 2, 0}, {0, 2, 1},
                                   {1, 0, 0}, {1, 0, 1}, {1, 1, 0}, {1, 1, 1}};
    return shapes[kind];
}

static int parameters_of(shape f)
{
    return 2 + f.order + f.delayed;
}

// exp(-z x) times cos(r x), sin(r x) / r and (sin(r x) / r - x cos(r x)) / (2 r^2), r^2 = 1 - z^2,
// also where that is negative.
typedef struct basis {
    double c, s, m;
} basis;

static basis second_order(double z, double x)
{
    double q = 1 - z * z, u = q * x * x;
    basis b;
    if (fabs(u) < 1e-3) {
        double e = lw_exp(-z * x); // series: the terms left out are below 1e-15
        b.c = e * (1 - u / 2 * (1 - u / 12 * (1 - u / 30)));
        b.s = e * x * (1 - u / 6 * (1 - u / 20 * (1 - u / 42)));
        b.m = e * x * x * x * (1.0 / 6 - u / 60 + u * u / 1680 - u * u * u / 90720);
        return b;
    }
    if (q > 0) {
        double r = sqrt(q), e = lw_exp(-z * x);
        b.c = e * lw_cos(r * x);
        b.s = e * lw_sin(r * x) / r;
    } else {
        double k = sqrt(-q), slow = lw_exp(-x / (z + k)), fast = lw_exp(-x * (z + k));
        b.c = 0.5 * (slow + fast);
        b.s = 0.5 * (slow - fast) / k;
    }
    b.m = (b.s - x * b.c) / (2 * q);
    return b;
}

// The response of gain 1 at t after the step, and its derivatives by the parameters from the third
// on.
static double response(shape f, const double *p, double t, double *d)
{
    double delay = f.delayed ? p[2 + f.order] : 0, slope = 1, g;
    for (int k = 0; k < f.order + f.delayed; k++)
        d[k] = 0;
    t -= delay;
    if (!(t > 0))
        return 0;
    if (f.order == 0) {
        g = t;
    } else if (f.order == 1) {
        double size = lw_exp(p[2]), x = t / size, e = lw_exp(-x);
        g = f.integrates ? t - size * (1 - e) : 1 - e;
        d[0] = f.integrates ? size * (e * (1 + x) - 1) : -x * e;
        slope = f.integrates ? 1 - e : e / size;
    } else {
        double w = lw_exp(p[2]), z = lw_exp(p[3]), x = w * t;
        basis b = second_order(z, x);
        g = 1 - (b.c + z * b.s);
        d[0] = x * b.s;
        d[1] = -2 * z * b.m;
        slope = w * b.s;
    }
    if (f.delayed)
        d[f.order] = -slope;
    return g;
}

// ---- least squares

typedef struct data {
    shape f;
    int n, step; // rows, of which each step-th counts
    const double *time, *value;
    double at, span, base, range;
} data;

static int rows_of(const data *d)
{
    return (d->n + d->step - 1) / d->step;
}

static double time_of(const data *d, int row)
{
    return (d->time[row * d->step] - d->at) / d->span;
}

static double value_of(const data *d, int row)
{
    return (d->value[row * d->step] - d->base) / d->range;
}

static int residuals(const gsl_vector *x, void *context, gsl_vector *out)
{
    const data *d = context;
    const double *p = x->data;
    double unused[MOST];
    for (int i = 0; i < rows_of(d); i++)
        gsl_vector_set(out, (size_t)i,
                       p[0] + p[1] * response(d->f, p, time_of(d, i), unused) - value_of(d, i));
    return GSL_SUCCESS;
}

static int derivatives(const gsl_vector *x, void *context, gsl_matrix *out)
{
    const data *d = context;
    const double *p = x->data;
    for (int i = 0; i < rows_of(d); i++) {
        double by[MOST], g = response(d->f, p, time_of(d, i), by);
        gsl_matrix_set(out, (size_t)i, 0, 1);
        gsl_matrix_set(out, (size_t)i, 1, g);
        for (int k = 0; k < d->f.order + d->f.delayed; k++)
            gsl_matrix_set(out, (size_t)i, (size_t)(2 + k), p[1] * by[k]);
    }
    return GSL_SUCCESS;
}

// One descent from p, which it moves. covariance (not NULL): of unit residuals. Gives the sum of
// squares; infinite where no minimum was found, below 0 where there is no memory.
static double descend(data *d, double *p, double covariance[MOST][MOST])
{
    size_t n = (size_t)rows_of(d), n_p = (size_t)parameters_of(d->f);
    gsl_multifit_nlinear_parameters how = gsl_multifit_nlinear_default_parameters();
    gsl_multifit_nlinear_fdf system = {
        .f = residuals, .df = derivatives, .n = n, .p = n_p, .params = d};
    gsl_multifit_nlinear_workspace *w =
        gsl_multifit_nlinear_alloc(gsl_multifit_nlinear_trust, &how, n, n_p);
    gsl_matrix *c = gsl_matrix_calloc(n_p, n_p);
    double sum = -1;
    if (w != NULL && c != NULL) {
        gsl_vector_view start = gsl_vector_view_array(p, n_p);
        int why = 0, status = gsl_multifit_nlinear_init(&start.vector, &system, w);
        if (status == GSL_SUCCESS)
            status = gsl_multifit_nlinear_driver(MOST_ROUNDS, TOLERANCE, TOLERANCE, 0, NULL, NULL,
                                                 &why, w);
        gsl_blas_ddot(w->f, w->f, &sum);
        // no progress: the rounding of the sum is reached, perhaps at once
        int at_bottom = status == GSL_ENOPROG || (status == GSL_EMAXITER && why == GSL_ENOPROG);
        if ((status != GSL_SUCCESS && !at_bottom) || !isfinite(sum))
            sum = INFINITY;
        for (size_t k = 0; k < n_p; k++)
            p[k] = gsl_vector_get(w->x, k);
        if (covariance != NULL && isfinite(sum))
            gsl_multifit_nlinear_covar(w->J, 0, c);
        for (size_t k = 0; covariance != NULL && k < n_p * n_p; k++)
            covariance[k / n_p][k % n_p] = gsl_matrix_get(c, k / n_p, k % n_p);
    }
    if (w != NULL)
        gsl_multifit_nlinear_free(w);
    if (c != NULL)
        gsl_matrix_free(c);
    return sum;
}

// ---- where to start

typedef struct guess {
    double offset, gain, lag; // lag: about the time constant and the delay together
} guess;

static double mean_of(const data *d, int first, int last)
{
    double sum = 0;
    for (int i = first; i < last; i++)
        sum += value_of(d, i);
    return last > first ? sum / (last - first) : value_of(d, 0);
}

static guess look(const data *d)
{
    int n = rows_of(d), first = 0;
    while (first < n - 1 && time_of(d, first + 1) <= 0)
        first++;
    guess g = {.offset = mean_of(d, 0, first)};
    int half = (first + n) / 2, tail = n - 1 - (n - first) / 10;
    if (d->f.integrates) {
        double slope =
            (value_of(d, n - 1) - value_of(d, half)) / (time_of(d, n - 1) - time_of(d, half));
        g.gain = slope != 0 ? slope : 1;
        g.lag = time_of(d, n - 1) - (value_of(d, n - 1) - g.offset) / g.gain;
    } else {
        g.gain = mean_of(d, tail, n) - g.offset;
        for (int i = n - 1; i > first; i--) // 63 %: C. L. Smith's point of a first order (1972)
            if ((value_of(d, i) - g.offset) * g.gain >= 0.632 * g.gain * g.gain)
                g.lag = time_of(d, i);
    }
    if (!(g.lag > 1e-6 && g.lag < 1))
        g.lag = 0.1;
    return g;
}

// Fill p with start k; 0 when there are no more.
static int start_at(const data *d, const guess *g, int k, double *p)
{
    static const double shares[] = {0.05, 0.4, 0.75}, dampings[] = {0.15, 0.5, 1, 2.5},
                        reach[] = {1.15, 1.45, 2.15, 5.2}; // x at 63 %
    int n_shares = d->f.delayed ? 3 : 1, n_dampings = d->f.order == 2 ? 4 : 1;
    if (k >= n_shares * n_dampings)
        return 0;
    double share = !d->f.delayed ? 0 : d->f.order == 0 ? 1 : shares[k % n_shares];
    int z = k / n_shares;
    p[0] = g->offset;
    p[1] = g->gain;
    if (d->f.order == 1)
        p[2] = lw_log((1 - share) * g->lag);
    if (d->f.order == 2) {
        p[2] = lw_log(reach[z] / ((1 - share) * g->lag));
        p[3] = lw_log(dampings[z]);
    }
    if (d->f.delayed)
        p[2 + d->f.order] = share * g->lag;
    return 1;
}

// The best of all starts over some of the rows.
static double compete(const data *d, double *best)
{
    data some = *d;
    some.step = (d->n + COARSE - 1) / COARSE;
    guess g = look(&some);
    double least = INFINITY, p[MOST];
    for (int k = 0; start_at(&some, &g, k, p); k++) {
        double sum = descend(&some, p, NULL);
        if (sum < 0)
            return sum;
        if (sum < least) {
            least = sum;
            memcpy(best, p, sizeof p);
        }
    }
    return least;
}

// ---- results

// To so many significant digits.
static double rounded(double v, int digits)
{
    if (v == 0 || !isfinite(v))
        return v;
    double size = fabs(v), power = 1;
    int exponent = 0;
    for (; size >= 10; size /= 10)
        exponent++;
    for (; size < 1; size *= 10)
        exponent--;
    int shift = digits - 1 - exponent;
    for (int k = 0; k < abs(shift) && k < 300; k++)
        power *= 10;
    return shift >= 0 ? rint(v * power) / power : rint(v / power) * power;
}

// What is below the rounding of sums (1e-9 of its scale) is 0.
static void put(lw_fit *out, lw_fit_parameter which, double value, double error, double scale)
{
    double least = 1e-9 * fabs(scale);
    out->value[which] = fabs(value) < least ? 0 : rounded(value, 6);
    out->error[which] = fabs(error) < least ? 0 : rounded(fabs(error), 3);
}

static void results(const data *d, double input, const double *p, const double *e, lw_fit *out)
{
    double per = d->range / input / (d->f.integrates ? d->span : 1);
    put(out, LW_FIT_OFFSET, d->base + d->range * p[0], d->range * e[0], d->range);
    put(out, LW_FIT_GAIN, per * p[1], per * e[1], per * p[1]);
    if (d->f.order == 1) {
        double constant = d->span * lw_exp(p[2]);
        put(out, LW_FIT_TIME_CONSTANT, constant, constant * e[2], constant);
    } else if (d->f.order == 2) {
        double w = lw_exp(p[2]) / d->span, z = lw_exp(p[3]);
        put(out, LW_FIT_NATURAL_FREQUENCY, w, w * e[2], w);
        put(out, LW_FIT_DAMPING, z, z * e[3], z);
    }
    if (d->f.delayed)
        put(out, LW_FIT_DELAY, d->span * p[2 + d->f.order], d->span * e[2 + d->f.order], d->span);
}

static void quality(const data *d, double sum, lw_fit *out)
{
    double mean = 0, square = 0;
    for (int i = 0; i < d->n; i++)
        mean += value_of(d, i) / d->n;
    for (int i = 0; i < d->n; i++)
        square += (value_of(d, i) - mean) * (value_of(d, i) - mean);
    out->n = d->n;
    out->fit = rounded(1 - sqrt(sum / square), 6);
    out->r_squared = rounded(1 - sum / square, 6);
    double rms = sqrt(sum / d->n); // of values over their range
    out->residual_rms = rms < 1e-9 ? 0 : rounded(d->range * rms, 6);
}

static lw_status undetermined(lw_fit_kind kind, const char *what, lw_error *err)
{
    return lw_error_set(err, LW_ERR_FIT, "fit of a plant \"%s\": %s", lw_fit_words(kind), what);
}

// A delay below 0 that may be none becomes none.
static lw_status check_delay(const data *d, double *p, const double *e, lw_fit_kind kind,
                             lw_error *err)
{
    double *delay = &p[2 + d->f.order];
    if (!d->f.delayed || *delay >= 0)
        return LW_OK;
    if (*delay < -3 * e[2 + d->f.order] && *delay < -1e-9)
        return undetermined(kind, "the response begins before the step; is `at` its instant?", err);
    *delay = 0;
    return LW_OK;
}

static lw_status fit_all(data *d, lw_fit_kind kind, double input, lw_fit *out, lw_error *err)
{
    double p[MOST] = {0}, e[MOST], c[MOST][MOST];
    double sum = compete(d, p);
    if (sum >= 0 && isfinite(sum))
        sum = descend(d, p, c);
    if (sum < 0)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a fit");
    if (!isfinite(sum))
        return undetermined(kind, "no minimum was found; another kind may serve", err);
    int n_p = parameters_of(d->f);
    for (int k = 0; k < n_p; k++) {
        e[k] = sqrt(c[k][k] * sum / (d->n - n_p));
        int is_log = k >= 2 && k < 2 + d->f.order;
        if (!(c[k][k] > 0) || !isfinite(e[k]) || (is_log && e[k] > 3))
            return undetermined(kind, "the data do not determine all of its parameters", err);
    }
    lw_status status = check_delay(d, p, e, kind, err);
    if (status != LW_OK)
        return status;
    lw_fit fit = {.kind = kind};
    for (int k = 0; k < LW_N_FIT_PARAMETERS; k++)
        fit.value[k] = fit.error[k] = (double)NAN;
    results(d, input, p, e, &fit);
    quality(d, sum, &fit);
    *out = fit;
    return LW_OK;
}

// ---- the data

static lw_status check(lw_fit_kind kind, int n, const double *time, const double *value,
                       double input, double at, lw_error *err)
{
    if ((int)kind < 0 || kind >= LW_N_FIT_KINDS)
        return lw_error_set(err, LW_ERR_ARGUMENT, "kind is %d, which is none", (int)kind);
    if (!isfinite(input) || input == 0)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "input is %.12g; the height of the step, not 0, "
                            "is wanted",
                            input);
    if (!isfinite(at))
        return lw_error_set(err, LW_ERR_ARGUMENT, "at is not finite");
    int n_after = 0, least = parameters_of(shape_of(kind)) + 1;
    for (int i = 0; i < n; i++) {
        if (!isfinite(time[i]) || !isfinite(value[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE, "row %d is not finite", i + 1);
        if (i > 0 && !(time[i] > time[i - 1]))
            return lw_error_set(err, LW_ERR_ARGUMENT, "row %d: times rise from row to row", i + 1);
        n_after += time[i] > at;
    }
    if (n_after < least)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "%d rows after the step at %.9g s; at least %d "
                            "are wanted",
                            n_after, at, least);
    return LW_OK;
}

lw_status lw_fit_step(lw_fit_kind kind, int n, const double *time, const double *value,
                      double input, double at, lw_fit *out, lw_error *err)
{
    lw_status status = check(kind, n, time, value, input, at, err);
    if (status != LW_OK)
        return status;
    double lo = value[0], hi = value[0];
    for (int i = 1; i < n; i++) {
        lo = fmin(lo, value[i]);
        hi = fmax(hi, value[i]);
    }
    if (!(hi > lo))
        return undetermined(kind, "all values are the same", err);
    data d = {.f = shape_of(kind),
              .n = n,
              .step = 1,
              .time = time,
              .value = value,
              .at = at,
              .span = time[n - 1] - at,
              .base = value[0],
              .range = hi - lo};
    gsl_error_handler_t *handler = gsl_set_error_handler_off();
    status = fit_all(&d, kind, input, out, err);
    gsl_set_error_handler(handler);
    return status;
}

void lw_fit_response(const lw_fit *fit, double input, double at, int n, const double *time,
                     double *model)
{
    shape f = shape_of(fit->kind);
    double p[MOST] = {0}, unused[MOST];
    if (f.order == 1)
        p[2] = lw_log(fit->value[LW_FIT_TIME_CONSTANT]);
    if (f.order == 2) {
        p[2] = lw_log(fit->value[LW_FIT_NATURAL_FREQUENCY]);
        p[3] = lw_log(fit->value[LW_FIT_DAMPING]);
    }
    if (f.delayed)
        p[2 + f.order] = fit->value[LW_FIT_DELAY];
    for (int i = 0; i < n; i++)
        model[i] = fit->value[LW_FIT_OFFSET] +
                   fit->value[LW_FIT_GAIN] * input * response(f, p, time[i] - at, unused);
}

// ---- the plant

static lw_status undelayed(const lw_fit *fit, lw_plant **out, lw_error *err)
{
    shape f = shape_of(fit->kind);
    double gain = fit->value[LW_FIT_GAIN], constant = fit->value[LW_FIT_TIME_CONSTANT];
    if (f.order == 2)
        return lw_plant_second_order(gain, fit->value[LW_FIT_NATURAL_FREQUENCY],
                                     fit->value[LW_FIT_DAMPING], out, err);
    if (!f.integrates)
        return lw_plant_first_order(gain, constant, out, err);
    if (f.order == 0)
        return lw_plant_integrator(gain, out, err);
    const double num[] = {gain}, den[] = {constant, 1, 0};
    const lw_poly top = {1, num}, bottom = {3, den};
    return lw_plant_transfer(1, 1, &top, &bottom, NULL, NULL, out, err);
}

lw_status lw_fit_plant(const lw_fit *fit, lw_plant **out, lw_error *err)
{
    lw_plant *plant = NULL;
    lw_status status = undelayed(fit, &plant, err);
    double delay = fit->value[LW_FIT_DELAY];
    if (status != LW_OK || !(delay > 0)) {
        if (status == LW_OK)
            *out = plant;
        return status;
    }
    status = lw_plant_delayed(plant, lw_plant_look(plant).input_names[0], delay, out, err);
    lw_plant_free(plant);
    return status;
}
