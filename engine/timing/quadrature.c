// Quadrature: moments, and nodes for expectations over a timing.
//
// Nodes: the recursion coefficients of the polynomials orthogonal under the timing come from a
// fine discrete version of it (Stieltjes' procedure), the nodes are the eigenvalues of their
// Jacobi matrix. Methods: W. Gautschi, SIAM J. Sci. Stat. Comput. 3 (1982) 289-317; G. Golub,
// J. Welsch, Math. Comp. 23 (1969) 221-230.

#include "timing/quadrature.h"

#include "base/alloc.h"
#include "timing/family.h"

#include <gsl/gsl_eigen.h>
#include <gsl/gsl_errno.h>
#include <gsl/gsl_integration.h>
#include <math.h>
#include <string.h>

#define PIECES 64
#define NODES 16

void lw__gauss_legendre(int n, double *x, double *weight)
{
    gsl_error_handler_t *handler = gsl_set_error_handler_off();
    gsl_integration_glfixed_table *table = gsl_integration_glfixed_table_alloc((size_t)n);
    for (int i = 0; i < n; i++) {
        x[i] = weight[i] = 0;
        if (table != NULL)
            gsl_integration_glfixed_point(-1, 1, (size_t)i, &x[i], &weight[i], table);
    }
    if (table != NULL)
        gsl_integration_glfixed_table_free(table);
    gsl_set_error_handler(handler);
}

double lw__timing_integral(double (*f)(const void *context, double x), const void *context,
                           double lo, double hi, int pieces)
{
    double x[NODES], w[NODES], sum = 0, h = (hi - lo) / pieces;
    lw__gauss_legendre(NODES, x, w);
    for (int p = 0; p < pieces; p++)
        for (int i = 0; i < NODES; i++)
            sum += w[i] * 0.5 * h * f(context, lo + h * (p + 0.5 + 0.5 * x[i]));
    return sum;
}

typedef struct power_term {
    const lw_timing *t;
    int order;
} power_term;

static double survival_power(const void *context, double x)
{
    const power_term *p = context;
    double y = p->order;
    for (int k = 1; k < p->order; k++)
        y *= x;
    return y * (1 - lw_timing_cdf(p->t, x));
}

// E[X^n] = lo^n + integral of n x^(n-1) (1 - F(x)): no density is needed.
double lw__quadrature_moment(const lw_timing *t, int order)
{
    power_term p = {t, order};
    double lo, hi, first = 1;
    lw_timing_support(t, &lo, &hi);
    for (int k = 0; k < order; k++)
        first *= lo;
    return first + lw__timing_integral(survival_power, &p, lo, hi, PIECES);
}

// ---- nodes

typedef struct points {
    int n;
    double *x, *w;
} points;

// A fine discrete version of the timing, in units of its support mapped to [-1, 1].
static int discretise(const lw_timing *t, points *out)
{
    double node[NODES], weight[NODES], lo = t->lo, span = t->hi - t->lo;
    int has_list = t->value != NULL && t->weight != NULL && t->a == NULL;
    int lists = has_list && t->flag == 0, cells = has_list && t->flag == 1;
    int pieces = cells ? t->n : PIECES * 4; // the cells of a histogram are its pieces
    out->n = lists ? t->n : pieces * NODES;
    out->x = lw__alloc(sizeof(double) * 2 * (size_t)out->n);
    if (out->x == NULL)
        return 0;
    out->w = out->x + out->n;
    for (int i = 0; lists && i < t->n; i++) {
        out->x[i] = 2 * (t->value[i] - lo) / span - 1;
        out->w[i] = t->weight[i] - (i > 0 ? t->weight[i - 1] : 0);
    }
    if (lists)
        return 1;
    lw__gauss_legendre(NODES, node, weight);
    for (int p = 0; p < pieces; p++) {
        double from = cells ? t->value[p] : lo + p * (span / pieces);
        double h = cells ? t->value[p + 1] - from : span / pieces;
        double mass = lw_timing_cdf(t, from + h) - (p > 0 ? lw_timing_cdf(t, from) : 0), total = 0;
        for (int i = 0; i < NODES; i++) {
            double x = from + h * (0.5 + 0.5 * node[i]);
            out->x[p * NODES + i] = 2 * (x - lo) / span - 1;
            out->w[p * NODES + i] = weight[i] * lw_timing_density(t, x);
            total += out->w[p * NODES + i];
        }
        for (int i = 0; i < NODES; i++) // each piece keeps its mass, atoms included
            out->w[p * NODES + i] =
                total > 0 ? out->w[p * NODES + i] * mass / total : mass * weight[i] / 2;
    }
    return 1;
}

// Recursion coefficients alpha[0..n-1], beta[0..n-1]; the count that exists.
static int stieltjes(const points *p, int n, double *alpha, double *beta, double *work)
{
    double *before = work, *now = work + p->n, norm_before = 1;
    for (int i = 0; i < p->n; i++) {
        before[i] = 0;
        now[i] = 1;
    }
    for (int k = 0; k < n; k++) {
        double norm = 0, first = 0;
        for (int i = 0; i < p->n; i++) {
            norm += p->w[i] * now[i] * now[i];
            first += p->w[i] * p->x[i] * now[i] * now[i];
        }
        if (!(norm > 1e-26 * norm_before) && k > 0)
            return k;
        alpha[k] = first / norm;
        beta[k] = k > 0 ? norm / norm_before : norm;
        for (int i = 0; i < p->n; i++) {
            double next = (p->x[i] - alpha[k]) * now[i] - (k > 0 ? beta[k] : 0) * before[i];
            before[i] = now[i];
            now[i] = next;
        }
        norm_before = norm;
    }
    return n;
}

static int golub_welsch(int n, const double *alpha, const double *beta, double *x, double *w)
{
    size_t size = (size_t)n;
    gsl_matrix *m = gsl_matrix_calloc(size, size), *vectors = gsl_matrix_alloc(size, size);
    gsl_vector *values = gsl_vector_alloc(size);
    gsl_eigen_symmv_workspace *space = gsl_eigen_symmv_alloc(size);
    int done = m != NULL && vectors != NULL && values != NULL && space != NULL;
    for (size_t i = 0; done && i < size; i++) {
        gsl_matrix_set(m, i, i, alpha[i]);
        if (i > 0) {
            gsl_matrix_set(m, i, i - 1, sqrt(beta[i]));
            gsl_matrix_set(m, i - 1, i, sqrt(beta[i]));
        }
    }
    done = done && gsl_eigen_symmv(m, values, vectors, space) == GSL_SUCCESS;
    if (done)
        gsl_eigen_symmv_sort(values, vectors, GSL_EIGEN_SORT_VAL_ASC);
    for (size_t i = 0; done && i < size; i++) {
        double first = gsl_matrix_get(vectors, 0, i);
        x[i] = gsl_vector_get(values, i);
        w[i] = beta[0] * first * first;
    }
    if (space != NULL)
        gsl_eigen_symmv_free(space);
    if (values != NULL)
        gsl_vector_free(values);
    if (vectors != NULL)
        gsl_matrix_free(vectors);
    if (m != NULL)
        gsl_matrix_free(m);
    return done;
}

static lw_status nodes_of(const lw_timing *t, int n, double *x, double *weight, lw_error *err)
{
    points p = {0};
    double alpha[64], beta[64], *work = NULL;
    int found = 0;
    if (discretise(t, &p))
        work = lw__alloc(sizeof(double) * 2 * (size_t)p.n);
    if (work != NULL)
        found = stieltjes(&p, n, alpha, beta, work);
    lw__free(work);
    lw__free(p.x);
    if (found == 0 || !golub_welsch(found, alpha, beta, x, weight))
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the nodes of a timing");
    for (int i = 0; i < n; i++) { // fewer points than asked for: the rest weighs nothing
        x[i] = i < found ? t->lo + (x[i] + 1) * 0.5 * (t->hi - t->lo) : t->hi;
        weight[i] = i < found ? weight[i] : 0;
    }
    return LW_OK;
}

lw_status lw_timing_nodes(const lw_timing *t, int n, double *x, double *weight, lw_error *err)
{
    if (n < 1 || n > 64)
        return lw_error_set(err, LW_ERR_ARGUMENT, "nodes is %d; permitted 1 to 64", n);
    if (t->lo == t->hi) {
        for (int i = 0; i < n; i++) {
            x[i] = t->lo;
            weight[i] = i == 0;
        }
        return LW_OK;
    }
    gsl_error_handler_t *handler = gsl_set_error_handler_off();
    lw_status status = nodes_of(t, n, x, weight, err);
    gsl_set_error_handler(handler);
    return status;
}
