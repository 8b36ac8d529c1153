// Plants from transfer functions given as polynomials.
//
// Workload: a few a rig, orders below ten; the powers of the coefficients may span hundreds of
// decades (poles at -1 and at -1e6, sixfold poles), so what is kept exact matters more than speed.
//
// Realisation: controllable canonical form (T. Kailath, Linear Systems, 1980, section 2.1) of the
// monic denominator s^n + a1 s^(n-1) + ... + an,
//     x1' = -a1 x1 - ... - an xn + u,   x(k+1)' = xk,   y = sum (bk - b0 ak) xk + b0 u,
// with each state divided by a power of two, x1 by 1, such that rows and columns of A have like
// norms (Parlett and Reinsch). A companion form keeps the coefficients the user gave; powers of
// two round nothing and take away the spread of units that would cost states their accuracy.
//
// Invariants
// 1. Each element of A and C is rounded once from the coefficients (C by double-double).
// 2. Entries of a column that share their denominator share its states; entries 0 have none.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/dense.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

// The transfer matrix, and which entry is being looked at.
typedef struct transfer {
    int n_y, n_u;
    const lw_poly *num, *den;
    lw_error *err;
} transfer;

static const lw_poly *num_at(const transfer *t, int i, int j)
{
    return &t->num[i * t->n_u + j];
}

static const lw_poly *den_at(const transfer *t, int i, int j)
{
    return &t->den[i * t->n_u + j];
}

// ---- checks

// `num` or, of several entries, `num[1][2]`.
static void field_text(const transfer *t, const char *what, int i, int j, char text[32])
{
    if (t->n_y * t->n_u == 1)
        snprintf(text, 32, "%s", what);
    else
        snprintf(text, 32, "%s[%d][%d]", what, i + 1, j + 1);
}

static lw_status check_polynomial(const transfer *t, const lw_poly *p, const char *field)
{
    char element[64];
    if (p->n < 1 || p->c == NULL)
        return lw_error_set(t->err, LW_ERR_ARGUMENT, "%s is empty; permitted 1 coefficient or more",
                            field);
    if (p->n > LW_PLANT_MAX_STATES + 1)
        return lw_error_set(t->err, LW_ERR_ARGUMENT, "%s has %d coefficients; permitted 1 to %d",
                            field, p->n, LW_PLANT_MAX_STATES + 1);
    for (int k = 0; k < p->n; k++) {
        if (isfinite(p->c[k]))
            continue;
        snprintf(element, sizeof element, "%s[%d]", field, k + 1);
        return lw__plant_bad(LW_ERR_NOT_FINITE, element, p->c[k], "a finite number is wanted",
                             t->err);
    }
    if (p->n > 1 && p->c[0] == 0)
        return lw_error_set(t->err, LW_ERR_ARGUMENT,
                            "%s begins with 0; its highest power needs a coefficient", field);
    return LW_OK;
}

static lw_status check_entry(const transfer *t, int i, int j)
{
    char num[32], den[32];
    const lw_poly *n = num_at(t, i, j), *d = den_at(t, i, j);
    field_text(t, "num", i, j, num);
    field_text(t, "den", i, j, den);
    lw_status status = check_polynomial(t, n, num);
    if (status == LW_OK)
        status = check_polynomial(t, d, den);
    if (status != LW_OK)
        return status;
    if (d->c[0] == 0)
        return lw_error_set(t->err, LW_ERR_ARGUMENT, "%s is 0; a polynomial other than 0 is wanted",
                            den);
    if (n->n > d->n)
        return lw_error_set(t->err, LW_ERR_ARGUMENT,
                            "%s over %s has degree %d over degree %d; the first may not be higher",
                            num, den, n->n - 1, d->n - 1);
    return LW_OK;
}

static lw_status check(const transfer *t)
{
    if (t->n_y < 1 || t->n_y > LW_PLANT_MAX_PORTS || t->n_u < 1 || t->n_u > LW_PLANT_MAX_PORTS)
        return lw_error_set(t->err, LW_ERR_SHAPE,
                            "the transfer matrix is %d x %d; permitted 1 x 1 to %d x %d", t->n_y,
                            t->n_u, LW_PLANT_MAX_PORTS, LW_PLANT_MAX_PORTS);
    for (int i = 0; i < t->n_y; i++)
        for (int j = 0; j < t->n_u; j++) {
            lw_status status = check_entry(t, i, j);
            if (status != LW_OK)
                return status;
        }
    return LW_OK;
}

// ---- which entries share states

static int is_zero(const lw_poly *p)
{
    return p->n == 1 && p->c[0] == 0;
}

static int is_equal(const lw_poly *a, const lw_poly *b)
{
    if (a->n != b->n)
        return 0;
    for (int k = 0; k < a->n; k++)
        if (a->c[k] != b->c[k])
            return 0;
    return 1;
}

// First row of column j whose entry is not 0, or n_y.
static int first_entry(const transfer *t, int j)
{
    int i = 0;
    while (i < t->n_y && is_zero(num_at(t, i, j)))
        i++;
    return i;
}

static int column_shares(const transfer *t, int j)
{
    int first = first_entry(t, j);
    for (int i = first + 1; i < t->n_y; i++)
        if (!is_zero(num_at(t, i, j)) && !is_equal(den_at(t, i, j), den_at(t, first, j)))
            return 0;
    return 1;
}

// Whether entry (i, j) brings states of its own; others use those of the first entry above.
static int brings_states(const transfer *t, int i, int j)
{
    return !is_zero(num_at(t, i, j)) && (!column_shares(t, j) || i == first_entry(t, j));
}

static int count_states(const transfer *t)
{
    int n = 0;
    for (int j = 0; j < t->n_u; j++)
        for (int i = 0; i < t->n_y; i++)
            n += brings_states(t, i, j) ? den_at(t, i, j)->n - 1 : 0;
    return n;
}

// ---- matrices

typedef struct matrices {
    int n_x, n_u;
    double *a, *b, *c, *d;
} matrices;

// Powers of two that balance the companion form of `den`, the first being 1.
static void companion_scale(const lw_poly *den, double *work, double *scale)
{
    int n = den->n - 1;
    memset(work, 0, sizeof(double) * (size_t)(n * n));
    for (int k = 0; k < n; k++) {
        work[k] = -(den->c[k + 1] / den->c[0]);
        if (k > 0)
            work[k * n + k - 1] = 1;
    }
    lw__dense_balance(n, work, scale);
    for (int k = n - 1; k >= 0; k--)
        scale[k] /= scale[0];
}

// States at, at + 1, ... driven by input j.
static void put_denominator(matrices *m, const lw_poly *den, int j, int at, const double *scale)
{
    for (int k = 0; k < den->n - 1; k++) {
        m->a[at * m->n_x + at + k] = -(den->c[k + 1] / den->c[0]) * scale[k];
        if (k > 0)
            m->a[(at + k) * m->n_x + at + k - 1] = scale[k - 1] / scale[k];
    }
    if (den->n > 1)
        m->b[at * m->n_u + j] = 1;
}

static void put_numerator(matrices *m, const lw_poly *num, const lw_poly *den, int i, int j, int at,
                          const double *scale)
{
    int missing = den->n - num->n; // powers the numerator lacks
    double b0 = missing == 0 ? num->c[0] : 0;
    lw__dd direct = lw__dd_of_ratio(b0, den->c[0]);
    m->d[i * m->n_u + j] = lw__dd_to_double(direct);
    for (int k = 1; k < den->n; k++) {
        double b = k >= missing ? num->c[k - missing] : 0;
        lw__dd c = lw__dd_from_double(b);
        if (b0 != 0)
            c = lw__dd_sub(c, lw__dd_mul_double(direct, den->c[k]));
        c = lw__dd_div(c, lw__dd_from_double(den->c[0]));
        m->c[i * m->n_x + at + k - 1] = lw__dd_to_double(c) * scale[k - 1];
    }
}

static void fill(const transfer *t, matrices *m, double *work)
{
    double scale[LW_PLANT_MAX_STATES];
    int at = 0, next = 0;
    for (int j = 0; j < t->n_u; j++)
        for (int i = 0; i < t->n_y; i++) {
            const lw_poly *num = num_at(t, i, j), *den = den_at(t, i, j);
            if (brings_states(t, i, j)) {
                at = next;
                next += den->n - 1;
                companion_scale(den, work, scale);
                put_denominator(m, den, j, at, scale);
            }
            if (!is_zero(num))
                put_numerator(m, num, den, i, j, at, scale);
        }
}

lw_status lw_plant_transfer(int n_y, int n_u, const lw_poly *num, const lw_poly *den,
                            const char *const *input_names, const char *const *output_names,
                            lw_plant **out, lw_error *err)
{
    const transfer t = {n_y, n_u, num, den, err};
    lw_status status = check(&t);
    if (status != LW_OK)
        return status;
    int n = count_states(&t);
    if (n > LW_PLANT_MAX_STATES)
        return lw_error_set(err, LW_ERR_SHAPE, "the transfer matrix needs %d states; permitted %d",
                            n, LW_PLANT_MAX_STATES);
    size_t n_numbers = (size_t)(2 * n * n + n * n_u + n_y * n + n_y * n_u);
    double *numbers = lw__alloc(sizeof(double) * n_numbers);
    if (numbers == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    matrices m = {.n_x = n, .n_u = n_u, .a = numbers};
    m.b = m.a + n * n;
    m.c = m.b + n * n_u;
    m.d = m.c + n_y * n;
    fill(&t, &m, m.d + n_y * n_u);
    status = lw_plant_state_space(n, n_u, n_y, m.a, m.b, m.c, m.d, NULL, NULL, input_names,
                                  output_names, out, err);
    lw__free(numbers);
    return status;
}
