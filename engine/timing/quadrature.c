// Quadrature: nodes for expectations over a timing.
//
// Nodes: the recursion coefficients of the polynomials orthogonal under the timing come from a
// fine discrete version of it (points.c; Stieltjes' procedure), the nodes are the eigenvalues of
// their Jacobi matrix. Methods: W. Gautschi, SIAM J. Sci. Stat. Comput. 3 (1982) 289-317; G. Golub,
// J. Welsch, Math. Comp. 23 (1969) 221-230.

#include "timing/quadrature.h"

#include "base/alloc.h"
#include "timing/family.h"

#include <gsl/gsl_eigen.h>
#include <gsl/gsl_errno.h>
#include <gsl/gsl_integration.h>
#include <math.h>

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

// Recursion coefficients alpha[0..n-1], beta[0..n-1]; the count that exists.
static int stieltjes(const lw__points *list, int n, double *alpha, double *beta, double *work)
{
    double *before = work, *now = work + list->n, norm_before = 1;
    for (int i = 0; i < list->n; i++) {
        before[i] = 0;
        now[i] = 1;
    }
    for (int k = 0; k < n; k++) {
        double norm = 0, first = 0;
        for (int i = 0; i < list->n; i++) {
            norm += list->p[i].weight * now[i] * now[i];
            first += list->p[i].weight * list->p[i].x * now[i] * now[i];
        }
        if (!(norm > 1e-26 * norm_before) && k > 0)
            return k;
        alpha[k] = first / norm;
        beta[k] = k > 0 ? norm / norm_before : norm;
        for (int i = 0; i < list->n; i++) {
            double next = (list->p[i].x - alpha[k]) * now[i] - (k > 0 ? beta[k] : 0) * before[i];
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

// Points of t in units of its support mapped to [-1, 1].
static void in_units(const lw_timing *t, int n, lw__points *list)
{
    t->family->points(t, &(lw__how){NULL, 1 + n / 8, n}, list);
    for (int i = 0; i < list->n; i++)
        list->p[i].x = 2 * (list->p[i].x - t->lo) / (t->hi - t->lo) - 1;
}

static lw_status nodes_of(const lw_timing *t, int n, double *x, double *weight, lw_error *err)
{
    lw__points list = {0};
    double alpha[64], beta[64], *work = NULL;
    int found = 0;
    in_units(t, n, &list);
    if (!list.failed)
        work = lw__alloc(sizeof(double) * 2 * (size_t)list.n);
    if (work != NULL)
        found = stieltjes(&list, n, alpha, beta, work);
    lw__free(work);
    lw__points_free(&list);
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
