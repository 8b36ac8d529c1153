// Polynomials on [0, 1].
//
// Roots: the polynomial in Bernstein form; its coefficients change sign at least as often as it
// has roots, so no change means none and one change means exactly one, found by bisection with
// Newton steps; otherwise the interval is halved. Method: J. Lane, R. Riesenfeld, "Bounds on a
// polynomial", BIT 21 (1981) 112-117.

#include "run/poly.h"

#include <math.h>
#include <string.h>

#define DEPTH 52

double lw__poly_value(int degree, const double *c, double s)
{
    double v = c[degree];
    for (int k = degree - 1; k >= 0; k--)
        v = v * s + c[k];
    return v;
}

static double slope(int degree, const double *c, double s)
{
    double v = 0;
    for (int k = degree; k >= 1; k--)
        v = v * s + k * c[k];
    return v;
}

double lw__poly_swing(int degree, const double *c)
{
    double sum = 0;
    for (int k = 1; k <= degree; k++)
        sum += fabs(c[k]);
    return sum;
}

void lw__poly_part(int degree, double *c, double a, double b)
{
    if (a == 0 && b == 1)
        return;
    for (int k = 0; k < degree; k++)
        for (int i = degree - 1; i >= k; i--)
            c[i] += a * c[i + 1];
    double factor = 1;
    for (int k = 1; k <= degree; k++)
        c[k] *= factor *= b - a;
}

double lw__poly_product_integral(int degree_p, const double *p, int degree_q, const double *q)
{
    double sum = 0;
    for (int i = degree_p; i >= 0; i--) {
        double inner = 0;
        for (int j = degree_q; j >= 0; j--)
            inner += q[j] / (i + j + 1);
        sum += p[i] * inner;
    }
    return sum;
}

double lw__poly_integral(int degree, const double *c, double a, double b)
{
    double at_a = 0, at_b = 0;
    for (int k = degree; k >= 0; k--) {
        double d = c[k] / (k + 1);
        at_a = at_a * a + d;
        at_b = at_b * b + d;
    }
    return at_b * b - at_a * a;
}

// Bernstein coefficients on [0, 1]: b_i = sum over k <= i of C(i, k) / C(n, k) c_k.
static void to_bernstein(int n, const double *c, double *b)
{
    for (int i = 0; i <= n; i++) {
        double ratio = 1;
        b[i] = c[0];
        for (int k = 1; k <= i; k++) {
            ratio *= (double)(i - k + 1) / (n - k + 1);
            b[i] += ratio * c[k];
        }
    }
}

static int sign_changes(int n, const double *b)
{
    int changes = 0;
    double last = 0;
    for (int i = 0; i <= n; i++) {
        if (b[i] == 0)
            continue;
        changes += last * b[i] < 0;
        last = b[i];
    }
    return changes;
}

// The one root between a and b. Where rounding hides the change of sign it is at an end.
static double single_root(int degree, const double *c, double a, double b)
{
    double at_a = lw__poly_value(degree, c, a), at_b = lw__poly_value(degree, c, b);
    double s = 0.5 * (a + b);
    if (at_a * at_b >= 0)
        return fabs(at_a) <= fabs(at_b) ? a : b;
    for (int k = 0; k < 100 && b - a > 0x1p-54; k++) {
        double v = lw__poly_value(degree, c, s);
        if (v == 0)
            return s;
        if (v * at_a > 0)
            a = s;
        else
            b = s;
        double d = slope(degree, c, s), newton = d != 0 ? s - v / d : a;
        s = newton > a && newton < b ? newton : 0.5 * (a + b);
    }
    return s;
}

// Halve Bernstein coefficients by de Casteljau's rule: `b` becomes the left half.
static void halve(int n, double *b, double *right)
{
    memcpy(right, b, sizeof(double) * (size_t)(n + 1));
    double work[LW__POLY_MAX + 1];
    memcpy(work, b, sizeof(double) * (size_t)(n + 1));
    for (int level = 1; level <= n; level++) {
        for (int i = 0; i <= n - level; i++)
            work[i] = 0.5 * (work[i] + work[i + 1]);
        b[level] = work[0];
        right[n - level] = work[n - level];
    }
}

typedef struct search {
    int degree;
    const double *c;
    int n_roots;
    double *roots;
} search;

static void found(search *f, double s)
{
    if (f->n_roots < f->degree && (f->n_roots == 0 || s - f->roots[f->n_roots - 1] > 0x1p-48))
        f->roots[f->n_roots++] = s;
}

static void find(search *f, double *b, double from, double to, int depth)
{
    int changes = sign_changes(f->degree, b);
    if (b[0] == 0)
        found(f, from);
    if (changes == 1 && b[0] != 0 && b[f->degree] != 0) {
        found(f, single_root(f->degree, f->c, from, to));
    } else if (changes > 0) {
        double right[LW__POLY_MAX + 1], middle = 0.5 * (from + to);
        if (depth == DEPTH) {
            found(f, middle);
            return;
        }
        halve(f->degree, b, right);
        find(f, b, from, middle, depth + 1);
        find(f, right, middle, to, depth + 1);
    }
}

int lw__poly_roots(int degree, const double *c, double *roots)
{
    while (degree > 0 && c[degree] == 0)
        degree--;
    if (degree == 0 || fabs(c[0]) > lw__poly_swing(degree, c))
        return 0;
    double b[LW__POLY_MAX + 1];
    search f = {degree, c, 0, roots};
    to_bernstein(degree, c, b);
    find(&f, b, 0, 1, 0);
    if (b[degree] == 0 || lw__poly_value(degree, c, 1) == 0)
        found(&f, 1);
    return f.n_roots;
}
