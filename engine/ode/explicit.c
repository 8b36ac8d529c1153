// Dormand-Prince 5(4), written once and compiled for each small number of states.

#include "ode/stepper.h"

#include <string.h>

#define INLINE static inline __attribute__((always_inline))
#define STAGES 7

int lw__ode_explicit_work(int n)
{
    return (STAGES + 2) * n;
}

// Weights of order 5 less those of order 4.
const double lw__ode_pair_error[STAGES] = {71. / 57600,      0,         -71. / 16695, 71. / 1920,
                                           -17253. / 339200, 22. / 525, -1. / 40};

// Sum of weighted stages: y = x + h (w0 k0 + w1 k1 + ...), in this order.
INLINE void combine(int n, double h, const double *x, const double *k, int m, const double *w,
                    double *y)
{
    for (int i = 0; i < n; i++) {
        double sum = w[0] * k[i];
#pragma GCC unroll 7
        for (int j = 1; j < m; j++)
            if (w[j] != 0)
                sum += w[j] * k[j * n + i];
        y[i] = x[i] + h * sum;
    }
}

// The error against what is permitted, worst state; not a number where anything is not.
INLINE double error_of(const lw__ode_state *o, int n, double h, const double *k)
{
    double worst = 0;
    for (int i = 0; i < n; i++) {
        double sum = lw__ode_pair_error[0] * k[i];
        for (int j = 2; j < STAGES; j++)
            sum += lw__ode_pair_error[j] * k[j * n + i];
        double a = fabs(o->x[i]), b = fabs(o->x_new[i]);
        double ratio = fabs(h * sum) / (o->atol[i] + o->rtol * (a > b ? a : b));
        worst = ratio <= worst ? worst : ratio; // keeps what is no number
    }
    return worst;
}

// Stiffness (Hairer, Wanner 1996, IV.2): the step against the largest eigenvalue as the last two
// stages see it. Fifteen steps in a row beyond 1.5 hand over: at tight tolerances steps settle
// below the border of stability, 3.3, and stay there.
INLINE void suspect(const lw__ode_state *o, lw__ode_memory *m, int n, double h, const double *k,
                    const double *sixth)
{
    double num = 0, den = 0;
    for (int i = 0; i < n; i++) {
        double scale = 1 / (o->atol[i] + o->rtol * fabs(o->x_new[i]));
        double a = (k[6 * n + i] - k[5 * n + i]) * scale, b = (o->x_new[i] - sixth[i]) * scale;
        num += a * a;
        den += b * b;
    }
    if (h * h * num > 2.25 * den) {
        m->suspicion += 1;
        if (m->suspicion >= 15) {
            m->stiff = 1;
            m->suspicion = 0;
        }
    } else if (m->suspicion > 0) {
        m->suspicion -= 0.25;
    }
}

// v^-0.2 to a thousandth, which is plenty for a step size and costs a tenth of a power.
static double fifth_root_inverse(double v)
{
    static const double part[5] = {1, 0.87055056329612412, 0.75785828325519905, 0.65975395538644710,
                                   0.57434917749851755};
    int exponent;
    double m = frexp(v, &exponent) - 0.75; // 0.5 to 1, less its middle
    int whole = exponent >= 0 ? exponent / 5 : -((4 - exponent) / 5);
    double root = 1.05922 + m * (-0.29658 + m * 0.24066); // parabola through 0.5, 0.75 and 1
    return ldexp(root * part[exponent - 5 * whole], -whole);
}

INLINE lw__ode_outcome step(lw__ode_state *o, lw__ode_memory *m, int n, double h, int last,
                            double natural, double *next)
{
    static const double a[STAGES][6] = {
        {0},
        {1. / 5},
        {3. / 40, 9. / 40},
        {44. / 45, -56. / 15, 32. / 9},
        {19372. / 6561, -25360. / 2187, 64448. / 6561, -212. / 729},
        {9017. / 3168, -355. / 33, 46732. / 5247, 49. / 176, -5103. / 18656},
        {35. / 384, 0, 500. / 1113, 125. / 192, -2187. / 6784, 11. / 84}};
    static const double c[STAGES] = {0, 1. / 5, 3. / 10, 4. / 5, 8. / 9, 1, 1};
    double *k = o->k, *y = k + STAGES * n, *sixth = y + n;
    memcpy(k, o->f, sizeof(double) * (size_t)n);
#pragma GCC unroll 7
    for (int j = 1; j < STAGES; j++) {
        double *to = j == 6 ? o->x_new : j == 5 ? sixth : y;
        combine(n, h, o->x, k, j, a[j], to);
        if (lw__ode_flow(o, o->t + c[j] * h, to, k + j * n))
            return LW__ODE_FAILED;
    }
    double error = error_of(o, n, h, k);
    if (!(error <= 1)) {
        double factor = error < 1e30 ? 0.9 * fifth_root_inverse(error) : 0.1;
        *next = h * (factor < 0.1 ? 0.1 : factor);
        return LW__ODE_REJECTED;
    }
    memcpy(o->f_new, k + 6 * n, sizeof(double) * (size_t)n);
    *next = natural;
    if (!last || 5 * h > natural) {
        double grown = error < 1.9e-4 ? 5 * h : h * 0.9 * fifth_root_inverse(error);
        *next = !last || grown > natural ? grown : natural;
    }
    if (!last)
        suspect(o, m, n, h, k, sixth);
    return LW__ODE_ACCEPTED;
}

lw__ode_outcome lw__ode_explicit(lw__ode_state *o, lw__ode_memory *m, double h, int last,
                                 double natural, double *next)
{
    o->degree = 4;
    switch (o->n) {
    case 1:
        return step(o, m, 1, h, last, natural, next);
    case 2:
        return step(o, m, 2, h, last, natural, next);
    case 3:
        return step(o, m, 3, h, last, natural, next);
    case 4:
        return step(o, m, 4, h, last, natural, next);
    case 5:
        return step(o, m, 5, h, last, natural, next);
    case 6:
        return step(o, m, 6, h, last, natural, next);
    default:
        return step(o, m, o->n, h, last, natural, next);
    }
}

// Hairer, Norsett, Wanner (1993), II.6: x + s (d + (1 - s) (p + s (q + (1 - s) r))) in powers of s.
void lw__ode_explicit_dense(lw__ode_state *o, double h)
{
    static const double d[STAGES] = {-12715105075.0 / 11282082432.0,  0,
                                     87487479700.0 / 32700410799.0,   -10690763975.0 / 1880347072.0,
                                     701980252875.0 / 199316789632.0, -1453857185.0 / 822651844.0,
                                     69997945.0 / 29380423.0};
    int n = o->n;
    const double *k = o->k;
    for (int i = 0; i < n; i++) {
        double sum = d[0] * k[i];
        for (int j = 2; j < STAGES; j++)
            sum += d[j] * k[j * n + i];
        double rise = o->x_new[i] - o->x[i], p = h * k[i] - rise;
        double q = rise - h * k[6 * n + i] - p, r = h * sum;
        o->c[i] = o->x[i];
        o->c[n + i] = rise + p;
        o->c[2 * n + i] = q + r - p;
        o->c[3 * n + i] = -(q + 2 * r);
        o->c[4 * n + i] = r;
    }
}

// Order 5 from order 4 (W. Enright, K. Jackson, S. Norsett, P. Thomsen, ACM TOMS 12 (1986)
// 193-218): the flow at two points of the interpolant, whose errors are an order smaller; then the
// polynomial of degree 5 with these derivatives, those of the ends, and both ends.
int lw__ode_explicit_refine(lw__ode_state *o, double h)
{
    static const double at[2] = {0.2, 0.8};
    int n = o->n;
    double *k = o->k, *g = k + STAGES * n, *x = o->c + 5 * n;
    lw__ode_piece p = {o->t, h, n, 4, o->c};
    for (int j = 0; j < 2; j++) {
        lw__ode_piece_value(&p, at[j], x);
        if (lw__ode_flow(o, o->t + at[j] * h, x, g + j * n))
            return 1;
    }
    for (int i = 0; i < n; i++) {
        double f0 = k[i], rise = o->x_new[i] - o->x[i] - h * f0;
        double a = h * (g[i] - f0), b = h * (g[n + i] - f0), e = h * (k[6 * n + i] - f0);
        o->c[n + i] = h * f0;
        o->c[2 * n + i] = 125. / 12 * a + 125. / 24 * b + 0.25 * e - 12 * rise;
        o->c[3 * n + i] = -875. / 24 * a - 625. / 24 * b - 0.875 * e + 58 * rise;
        o->c[4 * n + i] = 125. / 3 * a + 875. / 24 * b - 75 * rise;
        o->c[5 * n + i] = -125. / 8 * a - 125. / 8 * b + 0.625 * e + 30 * rise;
    }
    return 0;
}
