// Polynomials of signals over short times, from the derivatives at their start.
//
// Workload: degree times a matrix-vector product a piece; see series.h for what is returned.

#include "run/series.h"

#include "io/source.h"

#include <string.h>

static double dot(int n, const double *a, const double *b)
{
    double sum = 0;
    for (int k = 0; k < n; k++)
        sum += a[k] * b[k];
    return sum;
}

void lw__row_series(const lw__kernel *k, const lw__row *row, const double *x, const double *u,
                    double length, int degree, double *work, double *c)
{
    int n = k->n;
    double *term = work, *next = work + n;
    memcpy(term, x, sizeof(double) * (size_t)n);
    c[0] = dot(n, row->c, x) + dot(k->m, row->d, u);
    for (int power = 1; power <= degree; power++) {
        double factor = length / power;
        memset(next, 0, sizeof(double) * (size_t)n);
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++)
                next[i] += k->a[j * n + i] * term[j];
        for (int j = 0; power == 1 && j < k->m; j++)
            for (int i = 0; i < n; i++)
                next[i] += k->b[j * n + i] * u[j];
        for (int i = 0; i < n; i++)
            term[i] = next[i] * factor;
        c[power] = dot(n, row->c, term);
    }
}

void lw__source_series(const lw_source_def *def, lw_tick t, double length, int degree, double *c)
{
    memset(c, 0, sizeof(double) * (size_t)(degree + 1));
    c[0] = lw__source_value(def, t);
    if (def->kind != LW_SOURCE_SINE) {
        if (degree > 0)
            c[1] = lw__source_slope(def, t) * length;
        return;
    }
    double sine, cosine, turn = lw__source_turn(def) * length, factor = 1;
    lw__source_sine(def, t, &sine, &cosine);
    for (int k = 1; k <= degree; k++) {
        factor *= turn / k;
        double derivative = k % 2 == 1 ? cosine : sine;
        c[k] = (k % 4 == 2 || k % 4 == 3 ? -derivative : derivative) * factor;
    }
}
