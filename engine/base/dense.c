// Small dense linear algebra. See dense.h.
//
// Workload: a few exponentials of matrices below 10 x 10 each time a rig is frozen.

#include "base/dense.h"

#include "base/alloc.h"

#include <gsl/gsl_eigen.h>
#include <gsl/gsl_errno.h>
#include <math.h>
#include <string.h>

// ---- balancing

static void off_diagonal_norms(int n, const double *a, const double *scale, int i, double *row,
                               double *column)
{
    *row = *column = 0;
    for (int j = 0; j < n; j++)
        if (j != i) {
            *row += fabs(a[i * n + j]) * scale[j];
            *column += fabs(a[j * n + i]) / scale[j];
        }
    *row /= scale[i];
    *column *= scale[i];
}

// Power of two by which to scale so that row and column come within a factor of two.
static double balancing_factor(double row, double column)
{
    double factor = 1;
    while (column * factor < row / factor / 2 && factor < 0x1p60)
        factor *= 2;
    while (column * factor > row / factor * 2 && factor > 0x1p-60)
        factor /= 2;
    return factor;
}

void lw__dense_balance(int n, const double *a, double *scale)
{
    for (int i = 0; i < n; i++)
        scale[i] = 1;
    for (int sweep = 0, changed = 1; changed && sweep < 100; sweep++) {
        changed = 0;
        for (int i = 0; i < n; i++) {
            double row, column;
            off_diagonal_norms(n, a, scale, i, &row, &column);
            if (row == 0 || column == 0)
                continue;
            double factor = balancing_factor(row, column);
            if (row / factor + column * factor >= 0.95 * (row + column))
                continue;
            scale[i] *= factor;
            changed = 1;
        }
    }
}

double lw__dense_norm_inf(int n, const double *a)
{
    double norm = 0;
    for (int i = 0; i < n; i++) {
        double row = 0;
        for (int j = 0; j < n; j++)
            row += fabs(a[i * n + j]);
        norm = row > norm ? row : norm;
    }
    return norm;
}

// ---- exponential

static void product(int n, const lw__dd *a, const lw__dd *b, lw__dd *out)
{
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            out[i * n + j] = lw__dd_from_double(0);
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n; k++) {
            lw__dd f = a[i * n + k];
            if (f.hi == 0)
                continue;
            for (int j = 0; j < n; j++)
                if (b[k * n + j].hi != 0)
                    out[i * n + j] = lw__dd_add(out[i * n + j], lw__dd_mul(f, b[k * n + j]));
        }
}

static double norm_dd(int n, const lw__dd *a)
{
    double norm = 0;
    for (int i = 0; i < n; i++) {
        double row = 0;
        for (int j = 0; j < n; j++)
            row += fabs(a[i * n + j].hi);
        norm = row > norm || isnan(row) ? row : norm;
    }
    return norm;
}

// exp(M) - I by Taylor for norm(M) <= 1/4. Squaring E = exp - I as 2 E + E^2 keeps small entries
// that 1 + small would lose.
static void taylor(int n, const lw__dd *m, lw__dd *e, lw__dd *term, lw__dd *next)
{
    size_t size = sizeof(lw__dd) * (size_t)(n * n);
    memcpy(e, m, size);
    memcpy(term, m, size);
    for (int k = 2; k < 40; k++) {
        product(n, term, m, next);
        for (int i = 0; i < n * n; i++) {
            term[i] = lw__dd_div(next[i], lw__dd_from_double(k));
            e[i] = lw__dd_add(e[i], term[i]);
        }
        if (norm_dd(n, term) < 0x1p-125 * norm_dd(n, m))
            return;
    }
}

// Element (i, j) of 2 E + E^2 in plain double arithmetic, where infinity stays infinity.
static double squared_element(int n, const lw__dd *e, int i, int j)
{
    double sum = 2 * e[i * n + j].hi;
    for (int k = 0; k < n; k++)
        if (e[i * n + k].hi != 0 && e[k * n + j].hi != 0)
            sum += e[i * n + k].hi * e[k * n + j].hi;
    return sum;
}

// The error terms of a product are no numbers once it, or a part of a factor, overflows: there a
// double serves.
static void square(int n, lw__dd *e, lw__dd *next)
{
    product(n, e, e, next);
    for (int i = 0; i < n * n; i++) {
        next[i] = lw__dd_add(lw__dd_scale(e[i], 2), next[i]);
        if (!isfinite(next[i].hi))
            next[i] = lw__dd_from_double(squared_element(n, e, i / n, i % n));
    }
    memcpy(e, next, sizeof(lw__dd) * (size_t)(n * n));
}

static void scaled_exponential(int n, const lw__dd *m, lw__dd h, lw__dd *e, lw__dd *work)
{
    lw__dd *scaled = work, *term = work + n * n, *next = work + 2 * n * n;
    double *plain = (double *)(work + 3 * n * n), *scale = plain + n * n;
    for (int i = 0; i < n * n; i++)
        plain[i] = m[i].hi;
    lw__dense_balance(n, plain, scale);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            scaled[i * n + j] = lw__dd_mul(lw__dd_scale(m[i * n + j], scale[j] / scale[i]), h);
    double norm = norm_dd(n, scaled);
    int squarings = 0;
    for (; norm > 0.25 && squarings < 1100; squarings++)
        norm /= 2;
    for (int i = 0; i < n * n; i++)
        scaled[i] = lw__dd_scale(scaled[i], ldexp(1, -squarings));
    taylor(n, scaled, e, term, next);
    for (int k = 0; k < squarings; k++)
        square(n, e, next);
    for (int i = 0; i < n; i++)
        if (isfinite(e[i * n + i].hi))
            e[i * n + i] = lw__dd_add(e[i * n + i], lw__dd_from_double(1));
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            e[i * n + j] = lw__dd_scale(e[i * n + j], scale[i] / scale[j]);
}

lw_status lw__dense_exp_dd(int n, const lw__dd *m, lw__dd h, lw__dd *out)
{
    size_t cells = (size_t)(n * n);
    lw__dd *work = lw__alloc(sizeof(lw__dd) * (4 * cells + (size_t)n + 1));
    if (work == NULL)
        return LW_ERR_MEMORY;
    scaled_exponential(n, m, h, out, work);
    lw__free(work);
    return LW_OK;
}

// ---- equations

static void swap_rows(int n, lw__dd *a, int i, int j)
{
    for (int k = 0; k < n; k++) {
        lw__dd t = a[i * n + k];
        a[i * n + k] = a[j * n + k];
        a[j * n + k] = t;
    }
}

static void subtract_row(int n, lw__dd *a, int from, int row, lw__dd factor, int first)
{
    for (int k = first; k < n; k++)
        a[row * n + k] = lw__dd_sub(a[row * n + k], lw__dd_mul(factor, a[from * n + k]));
}

int lw__dense_solve_dd(int n, int n_rhs, lw__dd *a, lw__dd *b)
{
    for (int c = 0; c < n; c++) {
        int pivot = c;
        for (int i = c + 1; i < n; i++)
            if (fabs(a[i * n + c].hi) > fabs(a[pivot * n + c].hi))
                pivot = i;
        if (!(fabs(a[pivot * n + c].hi) > 0))
            return 0;
        swap_rows(n, a, c, pivot);
        swap_rows(n_rhs, b, c, pivot);
        for (int i = 0; i < n; i++) {
            if (i == c || a[i * n + c].hi == 0)
                continue;
            lw__dd factor = lw__dd_div(a[i * n + c], a[c * n + c]);
            subtract_row(n, a, c, i, factor, c);
            subtract_row(n_rhs, b, c, i, factor, 0);
        }
    }
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n_rhs; k++)
            b[i * n_rhs + k] = lw__dd_div(b[i * n_rhs + k], a[i * n + i]);
    return 1;
}

// ---- eigenvalues

// Memory of our own for the matrix and the values; GSL takes that of its workspace itself.
static lw_status gsl_eigenvalues(int n, const double *a, double *work, double *re, double *im)
{
    size_t size = (size_t)n;
    gsl_eigen_nonsymm_workspace *w = gsl_eigen_nonsymm_alloc(size);
    if (w == NULL)
        return LW_ERR_MEMORY;
    gsl_eigen_nonsymm_params(0, 1, w);
    memcpy(work, a, sizeof(double) * size * size);
    double *pairs = work + size * size;
    gsl_matrix_view m = gsl_matrix_view_array(work, size, size);
    gsl_vector_complex_view values = gsl_vector_complex_view_array(pairs, size);
    int failed = gsl_eigen_nonsymm(&m.matrix, &values.vector, w);
    gsl_eigen_nonsymm_free(w);
    if (failed)
        return LW_ERR_NOT_FINITE;
    for (size_t i = 0; i < size; i++) {
        re[i] = pairs[2 * i];
        im[i] = pairs[2 * i + 1];
    }
    return LW_OK;
}

static int all_finite(int n, const double *a)
{
    for (int i = 0; i < n * n; i++)
        if (!isfinite(a[i]))
            return 0;
    return 1;
}

lw_status lw__dense_eigen(int n, const double *a, double *re, double *im, lw_error *err)
{
    if (n == 0)
        return LW_OK;
    lw_status status = LW_ERR_NOT_FINITE;
    if (all_finite(n, a)) {
        double *work = lw__alloc(sizeof(double) * (size_t)(n + 2) * (size_t)n);
        gsl_error_handler_t *handler = gsl_set_error_handler_off();
        status = work != NULL ? gsl_eigenvalues(n, a, work, re, im) : LW_ERR_MEMORY;
        gsl_set_error_handler(handler);
        lw__free(work);
    }
    if (status == LW_ERR_MEMORY)
        return lw_error_set(err, status, "no memory for the eigenvalues of a matrix");
    return status == LW_OK
               ? LW_OK
               : lw_error_set(err, status, "the eigenvalues of a %d x %d matrix could not be found",
                              n, n);
}
