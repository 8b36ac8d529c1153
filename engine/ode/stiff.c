// Radau IIA, order 5: three stages by simplified Newton iteration on the whole system of 3 n.
//
// Workload: stiff plants of a few states; a decomposition of 3 n unknowns a step size.

#include "ode/stepper.h"

#include <latewood/elementary.h>

#include <float.h>
#include <string.h>

#define MOST_ITERATIONS 10
#define ROOT6 2.449489742783178

static const double a[3][3] = {
    {(88 - 7 * ROOT6) / 360, (296 - 169 * ROOT6) / 1800, (-2 + 3 * ROOT6) / 225},
    {(296 + 169 * ROOT6) / 1800, (88 + 7 * ROOT6) / 360, (-2 - 3 * ROOT6) / 225},
    {(16 - ROOT6) / 36, (16 + ROOT6) / 36, 1.0 / 9}};
static const double c[3] = {(4 - ROOT6) / 10, (4 + ROOT6) / 10, 1};
// real eigenvalue of the matrix: 1 / (3 + 3^(2/3) - 3^(1/3))
static const double gamma0 = 0.27488882595965665;

int lw__ode_stiff_work(int n)
{
    // z, right-hand side, flows of the stages, scratch; matrices; pivots (stored as doubles' room)
    return 3 * n + 3 * n + 3 * n + 4 * n + n * n + 9 * n * n + n * n + 4 * n + 8;
}

// ---- linear algebra: rows are swapped for the largest pivot

static int decompose(int n, double *m, int *pivot)
{
    for (int k = 0; k < n; k++) {
        int at = k;
        for (int i = k + 1; i < n; i++)
            at = fabs(m[i * n + k]) > fabs(m[at * n + k]) ? i : at;
        pivot[k] = at;
        if (!(fabs(m[at * n + k]) > 0))
            return 1;
        for (int j = 0; at != k && j < n; j++) {
            double swap = m[k * n + j];
            m[k * n + j] = m[at * n + j];
            m[at * n + j] = swap;
        }
        for (int i = k + 1; i < n; i++) {
            double factor = m[i * n + k] /= m[k * n + k];
            for (int j = k + 1; factor != 0 && j < n; j++)
                m[i * n + j] -= factor * m[k * n + j];
        }
    }
    return 0;
}

static void solve(int n, const double *m, const int *pivot, double *b)
{
    for (int k = 0; k < n; k++) {
        double swap = b[k];
        b[k] = b[pivot[k]];
        b[pivot[k]] = swap;
    }
    for (int i = 1; i < n; i++)
        for (int j = 0; j < i; j++)
            b[i] -= m[i * n + j] * b[j];
    for (int i = n - 1; i >= 0; i--) {
        for (int j = i + 1; j < n; j++)
            b[i] -= m[i * n + j] * b[j];
        b[i] /= m[i * n + i];
    }
}

// ---- a step

typedef struct room_of {
    double *z, *rhs, *flows, *x, *change, *error, *spare; // 3 n, 3 n, 3 n, n each
    double *large, *small;                                // decompositions: 3 n and n
    int *large_pivot, *small_pivot;
} room_of;

static room_of rooms(const lw__ode_state *o)
{
    int n = o->n;
    room_of r;
    r.z = o->k;
    r.rhs = r.z + 3 * n;
    r.flows = r.rhs + 3 * n;
    r.x = r.flows + 3 * n;
    r.change = r.x + n;
    r.error = r.change + n;
    r.spare = r.error + n;
    r.large = r.spare + n + n * n; // the Jacobian stands before it
    r.small = r.large + 9 * n * n;
    r.large_pivot = (int *)(r.small + n * n);
    r.small_pivot = r.large_pivot + 3 * n;
    return r;
}

static double *jacobian_of(const lw__ode_state *o)
{
    return o->k + 13 * o->n;
}

// Central differences: the method converges to the flow whatever the Jacobian, but faster with a
// good one.
static int form_jacobian(lw__ode_state *o, const room_of *r)
{
    int n = o->n;
    double *j = jacobian_of(o), *lo = r->rhs, *hi = r->flows;
    const lw__ode_system *s = o->system;
    o->jacobian_known = 1;
    if (s->jacobian != NULL) {
        if (s->jacobian(s->context, o->t, o->x, j) == 0)
            return 0;
        o->failed = LW_ERR_LAW;
        return 1;
    }
    memcpy(r->x, o->x, sizeof(double) * (size_t)n);
    for (int k = 0; k < n; k++) {
        double step = 6e-6 * fmax(fabs(o->x[k]), 1e-3 * o->atol[k] / o->rtol);
        r->x[k] = o->x[k] + step;
        double up = r->x[k];
        if (lw__ode_flow(o, o->t, r->x, hi))
            return 1;
        r->x[k] = o->x[k] - step;
        double width = up - r->x[k];
        if (lw__ode_flow(o, o->t, r->x, lo))
            return 1;
        r->x[k] = o->x[k];
        for (int i = 0; i < n; i++)
            j[i * n + k] = (hi[i] - lo[i]) / width;
    }
    return 0;
}

static int decompose_both(const lw__ode_state *o, const room_of *r, double h)
{
    int n = o->n, n3 = 3 * n;
    const double *j = jacobian_of(o);
    for (int p = 0; p < 3; p++)
        for (int q = 0; q < 3; q++)
            for (int i = 0; i < n; i++)
                for (int k = 0; k < n; k++)
                    r->large[(p * n + i) * n3 + q * n + k] =
                        (p == q && i == k ? 1 : 0) - h * a[p][q] * j[i * n + k];
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n; k++)
            r->small[i * n + k] = (i == k ? 1 : 0) - h * gamma0 * j[i * n + k];
    return decompose(n3, r->large, r->large_pivot) || decompose(n, r->small, r->small_pivot);
}

static double scale_of(const lw__ode_state *o, int i)
{
    return 1 / (o->atol[i] + o->rtol * fabs(o->x[i]));
}

// Newton's iteration for the stages: 0 converged, 1 not, -1 a function failed.
static int iterate(lw__ode_state *o, const room_of *r, double h)
{
    int n = o->n;
    double before = 0, goal = fmax(0.01, 20 * DBL_EPSILON / o->rtol);
    memset(r->z, 0, sizeof(double) * 3 * (size_t)n);
    for (int m = 0; m < MOST_ITERATIONS; m++) {
        for (int p = 0; p < 3; p++) {
            for (int i = 0; i < n; i++)
                r->x[i] = o->x[i] + r->z[p * n + i];
            if (lw__ode_flow(o, o->t + c[p] * h, r->x, r->flows + p * n))
                return -1;
        }
        for (int p = 0; p < 3; p++)
            for (int i = 0; i < n; i++)
                r->rhs[p * n + i] = h * (a[p][0] * r->flows[i] + a[p][1] * r->flows[n + i] +
                                         a[p][2] * r->flows[2 * n + i]) -
                                    r->z[p * n + i];
        solve(3 * n, r->large, r->large_pivot, r->rhs);
        double size = 0;
        for (int i = 0; i < 3 * n; i++) {
            r->z[i] += r->rhs[i];
            double ratio = fabs(r->rhs[i]) * scale_of(o, i % n);
            size = ratio <= size ? size : ratio;
        }
        if (!(size < 1e300))
            return 1;
        double theta = m > 0 ? size / before : 0.5;
        if (size == 0 || (m > 0 && theta < 1 && size * theta / (1 - theta) <= goal))
            return 0;
        if (m > 1 && theta >= 0.99 && size > goal)
            return 1;
        before = size;
    }
    return before <= 10 * goal ? 0 : 1;
}

static double error_norm(const lw__ode_state *o, const room_of *r)
{
    double worst = 0;
    for (int i = 0; i < o->n; i++) {
        double largest = fmax(fabs(o->x[i]), fabs(o->x_new[i]));
        double ratio = fabs(r->error[i]) / (o->atol[i] + o->rtol * largest);
        worst = ratio <= worst ? worst : ratio;
    }
    return worst;
}

// Hairer, Wanner (1996), (IV.8.19) and, where that is too large, (IV.8.20).
static double error_of(lw__ode_state *o, const room_of *r, double h)
{
    int n = o->n;
    const double e[3] = {gamma0 / 3 * (-13 - 7 * ROOT6), gamma0 / 3 * (-13 + 7 * ROOT6),
                         gamma0 / 3 * -1};
    for (int i = 0; i < n; i++) {
        r->spare[i] = e[0] * r->z[i] + e[1] * r->z[n + i] + e[2] * r->z[2 * n + i];
        r->error[i] = r->spare[i] + gamma0 * h * o->f[i];
    }
    solve(n, r->small, r->small_pivot, r->error);
    double worst = error_norm(o, r);
    if (worst < 1)
        return worst;
    for (int i = 0; i < n; i++)
        r->x[i] = o->x[i] + r->error[i];
    if (lw__ode_flow(o, o->t, r->x, r->error))
        return -1;
    for (int i = 0; i < n; i++)
        r->error[i] = r->spare[i] + gamma0 * h * r->error[i];
    solve(n, r->small, r->small_pivot, r->error);
    return error_norm(o, r);
}

// Back to the explicit method once ten steps in a row are small against the Jacobian.
static void unsuspect(const lw__ode_state *o, lw__ode_memory *m, double h)
{
    double norm = 0;
    const double *j = jacobian_of(o);
    for (int i = 0; i < o->n; i++) {
        double row = 0, own = scale_of(o, i);
        for (int k = 0; k < o->n; k++)
            row += fabs(j[i * o->n + k]) * own / scale_of(o, k);
        norm = fmax(norm, row);
    }
    m->suspicion = h * norm < 1 ? m->suspicion + 1 : 0;
    if (m->suspicion >= 10) {
        m->stiff = 0;
        m->suspicion = 0;
    }
}

lw__ode_outcome lw__ode_stiff(lw__ode_state *o, lw__ode_memory *m, double h, double *next)
{
    room_of r = rooms(o);
    int n = o->n;
    o->degree = 3;
    *next = h / 2;
    if (!o->jacobian_known && form_jacobian(o, &r))
        return LW__ODE_FAILED;
    if (decompose_both(o, &r, h))
        return LW__ODE_REJECTED;
    int converged = iterate(o, &r, h);
    if (converged < 0)
        return LW__ODE_FAILED;
    if (converged > 0) {
        *next = h / 4;
        return LW__ODE_REJECTED;
    }
    for (int i = 0; i < n; i++)
        o->x_new[i] = o->x[i] + r.z[2 * n + i];
    double error = error_of(o, &r, h);
    if (o->failed != LW_OK)
        return LW__ODE_FAILED;
    double factor = error < 1e-12 ? 8 : error < 1e30 ? 0.9 * lw_pow(error, -0.25) : 0.1;
    factor = factor > 8 ? 8 : factor < 0.1 ? 0.1 : factor;
    *next = h * factor;
    if (!(error <= 1)) {
        *next = h * (factor < 0.9 ? factor : 0.9);
        return LW__ODE_REJECTED;
    }
    if (lw__ode_flow(o, o->t + h, o->x_new, o->f_new))
        return LW__ODE_FAILED;
    unsuspect(o, m, h);
    return LW__ODE_ACCEPTED;
}

// The polynomial of degree 3 through the start and the three stages.
void lw__ode_stiff_dense(lw__ode_state *o, double h)
{
    (void)h;
    room_of r = rooms(o);
    int n = o->n;
    for (int i = 0; i < n; i++) {
        // divided differences over 0, c1, c2, 1; the value at 0 is x
        double d1 = r.z[i] / c[0], d2 = (r.z[n + i] - r.z[i]) / (c[1] - c[0]);
        double d3 = (r.z[2 * n + i] - r.z[n + i]) / (c[2] - c[1]);
        double q1 = (d2 - d1) / c[1], q2 = (d3 - d2) / (c[2] - c[0]), p = (q2 - q1) / c[2];
        o->c[i] = o->x[i];
        o->c[n + i] = d1 - c[0] * q1 + c[0] * c[1] * p;
        o->c[2 * n + i] = q1 - (c[0] + c[1]) * p;
        o->c[3 * n + i] = p;
        o->c[4 * n + i] = 0;
    }
}
