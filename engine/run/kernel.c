// Propagation kernels of linear groups. See kernel.h for the two methods.
//
// Workload: called once an anchor move and once for each look between; n is 1 to 64, usually below
// 8, so that sizes up to 8 have loops of constant length.
//
// Invariants
// 1. What is computed depends on the kernel and on the lengths only: same bytes for every caller.
// 2. Every stored number is the double nearest to its double-double value.
//
// Methods: C. Moler, C. Van Loan, "Nineteen dubious ways to compute the exponential of a matrix",
// SIAM Review 45 (2003) 3-49 (augmented matrix; scaling); A. Al-Mohy, N. Higham, "Computing the
// action of the matrix exponential", SIAM J. Sci. Comput. 33 (2011) 488-511 (Taylor action).

#include "run/kernel.h"

#include "base/alloc.h"
#include "base/dd.h"
#include "base/dense.h"

#include <math.h>
#include <string.h>

#define MAX_DEGREE 24
#define MAX_PIECES 16
#define SUPERPOSED_NORM 12.0 // balanced norm(A) reach up to which pieces are used
#define SECONDS_PER_TICK 1e-12

// ---- building

typedef struct builder {
    lw__arena *arena;
    int n, m, size; // size = n + m of the augmented matrix
    const double *a, *b;
    lw__dd *matrix; // size x size, row-major: [A B; 0 0]
    lw__dd *power;  // scratch of the same size
} builder;

static lw__dd dd_seconds(lw_tick ticks)
{
    // a tick count of up to 63 bits is split so that both halves are exact
    double high = (double)(ticks / 1000000), low = (double)(ticks % 1000000);
    lw__dd whole = lw__dd_mul(lw__dd_from_double(high), lw__dd_from_double(1e6));
    return lw__dd_div(lw__dd_add(whole, lw__dd_from_double(low)), lw__dd_from_double(1e12));
}

// Round the top n rows of an augmented transition into column-major phi and gamma.
static lw_status keep_transition(builder *w, const lw__dd *e, lw_tick length, lw__transition *out,
                                 lw_error *err)
{
    int n = w->n, m = w->m;
    double *phi = lw__arena_get(w->arena, sizeof(double) * (size_t)(n * n + 1));
    double *gamma = lw__arena_get(w->arena, sizeof(double) * (size_t)(n * m + 1));
    if (phi == NULL || gamma == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the transitions of a plant");
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++)
            phi[j * n + i] = lw__dd_to_double(e[i * w->size + j]);
        for (int j = 0; j < m; j++)
            gamma[j * n + i] = lw__dd_to_double(e[i * w->size + n + j]);
    }
    *out = (lw__transition){length, phi, gamma};
    return LW_OK;
}

static lw_status exp_of(builder *w, lw_tick length, lw__dd *out, lw_error *err)
{
    if (lw__dense_exp_dd(w->size, w->matrix, dd_seconds(length), out) != LW_OK)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the exponential of a plant");
    for (int i = 0; i < w->size * w->size; i++)
        if (!isfinite(out[i].hi))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "the plant grows beyond the range of numbers within %g s",
                                (double)length * SECONDS_PER_TICK);
    return LW_OK;
}

static lw_status make_transition(builder *w, lw_tick length, lw__transition *out, lw_error *err)
{
    lw_status status = exp_of(w, length, w->power, err);
    return status != LW_OK ? status : keep_transition(w, w->power, length, out, err);
}

// Least degree at which the Taylor terms beyond it are below 2^-70 of the first, for exp(A s) with
// |s| <= half; the margin covers states that are small in balanced coordinates.
static int degree_for(double norm, double half)
{
    double term = 1;
    for (int k = 1; k <= MAX_DEGREE; k++) {
        term *= norm * half / k;
        if (term < 0x1p-70)
            return k;
    }
    return MAX_DEGREE + 1;
}

lw_status lw__kernel_norm(int n, const double *a, double *norm, lw_error *err)
{
    double *scale = lw__alloc(sizeof(double) * (size_t)(n + 1));
    if (scale == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory to balance a plant");
    lw__dense_balance(n, a, scale);
    *norm = 0;
    for (int i = 0; i < n; i++) {
        double row = 0;
        for (int j = 0; j < n; j++)
            row += fabs(a[i * n + j]) * scale[j] / scale[i];
        *norm = row > *norm ? row : *norm;
    }
    lw__free(scale);
    return LW_OK;
}

// Fewest pieces (a power of two) whose degree is at most 8, else the number with the least degree.
static void choose_pieces(double norm, lw_tick reach, int *n_pieces, int *degree)
{
    for (int n = 1; n <= MAX_PIECES; n *= 2) {
        *n_pieces = n;
        *degree = degree_for(norm, (double)reach * SECONDS_PER_TICK / (2 * n));
        if (*degree <= 8)
            return;
    }
}

// Taylor coefficients of Gamma about the centre of a piece: g_0 = Gamma(c) and
// g_k = half^k / k! A^(k-1) Phi(c) B, from the augmented transition `e` to the centre.
static void gamma_series(const builder *w, const lw__dd *e, double half, int degree, int channel,
                         double *out)
{
    int n = w->n;
    lw__dd v[LW__KERNEL_MAX], next[LW__KERNEL_MAX], h = lw__dd_from_double(half);
    for (int i = 0; i < n; i++) {
        out[i] = lw__dd_to_double(e[i * w->size + n + channel]);
        v[i] = lw__dd_from_double(0);
        for (int j = 0; j < n; j++)
            v[i] =
                lw__dd_add(v[i], lw__dd_mul_double(e[i * w->size + j], w->b[j * w->m + channel]));
        v[i] = lw__dd_mul(v[i], h);
    }
    for (int k = 1; k <= degree; k++) {
        lw__dd factor = lw__dd_div(h, lw__dd_from_double(k + 1));
        for (int i = 0; i < n; i++)
            out[k * n + i] = lw__dd_to_double(v[i]);
        for (int i = 0; i < n; i++) {
            next[i] = lw__dd_from_double(0);
            for (int j = 0; j < n; j++)
                if (w->a[i * n + j] != 0)
                    next[i] = lw__dd_add(next[i], lw__dd_mul_double(v[j], w->a[i * n + j]));
            next[i] = lw__dd_mul(next[i], factor);
        }
        memcpy(v, next, sizeof(lw__dd) * (size_t)n);
    }
}

// Pieces of equal length over (0, n_pieces * piece]: transition to each centre and the series.
static lw_status build_pieces(builder *w, lw__kernel *k, lw_error *err)
{
    size_t series = (size_t)(k->degree + 1) * (size_t)(w->n + 1);
    lw__transition *centre = lw__arena_get(w->arena, sizeof *centre * (size_t)k->n_pieces);
    double *polynomial =
        lw__arena_get(w->arena, sizeof(double) * series * (size_t)k->n_pieces * (size_t)(w->m + 1));
    if (centre == NULL || polynomial == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the polynomials of a plant");
    k->centre = centre;
    k->polynomial = polynomial;
    for (int p = 0; p < k->n_pieces; p++) {
        lw_tick at = k->piece * p + k->piece / 2;
        lw_status status = make_transition(w, at, &centre[p], err);
        if (status != LW_OK)
            return status;
        for (int c = 0; c < w->m; c++)
            gamma_series(w, w->power, (double)k->piece * 0.5 * SECONDS_PER_TICK, k->degree, c,
                         polynomial + ((size_t)p * (size_t)w->m + (size_t)c) *
                                          (size_t)(k->degree + 1) * (size_t)w->n);
    }
    return LW_OK;
}

// Rungs q, 2 q, 4 q, ... up to `reach`, by squaring in double-double.
static lw_status build_rungs(builder *w, lw__kernel *k, lw_error *err)
{
    int n = 0;
    while (n < 62 && (k->piece << n) <= k->reach)
        n++;
    lw__transition *rung = lw__arena_get(w->arena, sizeof *rung * (size_t)(n + 1));
    if (rung == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the transitions of a plant");
    k->rung = rung;
    k->n_rungs = n;
    for (int r = 0; r < n; r++) {
        lw_status status = make_transition(w, k->piece << r, &rung[r], err);
        if (status != LW_OK)
            return status;
    }
    return LW_OK;
}

static lw_status begin(builder *w, const double *a, const double *b, lw_error *err)
{
    size_t cells = (size_t)w->size * (size_t)w->size + 1;
    w->matrix = lw__alloc(sizeof(lw__dd) * cells);
    w->power = lw__alloc(sizeof(lw__dd) * cells);
    if (w->matrix == NULL || w->power == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory to form the transitions of a plant");
    for (int i = 0; i < w->n; i++) {
        for (int j = 0; j < w->n; j++)
            w->matrix[i * w->size + j] = lw__dd_from_double(a[i * w->n + j]);
        for (int j = 0; j < w->m; j++)
            w->matrix[i * w->size + w->n + j] = lw__dd_from_double(b[i * w->m + j]);
    }
    return LW_OK;
}

static const double *by_columns(lw__arena *arena, int rows, int columns, const double *from)
{
    double *to = lw__arena_get(arena, sizeof(double) * (size_t)(rows * columns + 1));
    for (int i = 0; to != NULL && i < rows; i++)
        for (int j = 0; j < columns; j++)
            to[j * rows + i] = from[i * columns + j];
    return to;
}

static lw_status choose_method(lw__kernel *k)
{
    double span = (double)k->reach * SECONDS_PER_TICK;
    if (k->norm * span <= SUPERPOSED_NORM) {
        k->method = LW__SUPERPOSED;
        choose_pieces(k->norm, k->reach, &k->n_pieces, &k->degree);
        k->piece = k->reach / k->n_pieces + 1;
        k->piece += k->piece & 1; // an even length has a centre on a tick
    } else {
        k->method = LW__LADDER;
        double q = 0.5 / k->norm / SECONDS_PER_TICK;
        k->piece = q < 2 ? 2 : (lw_tick)q & ~(lw_tick)1;
        k->n_pieces = 1;
        k->degree = degree_for(k->norm, (double)k->piece * 0.5 * SECONDS_PER_TICK);
    }
    k->per_half = 2.0 / (double)k->piece;
    return k->degree <= MAX_DEGREE ? LW_OK : LW_ERR_TIME;
}

static lw_status build_all(builder *w, lw__kernel *k, int n_grid, const lw_tick *grid,
                           lw_error *err)
{
    lw_status status = begin(w, w->a, w->b, err);
    for (int i = 0; status == LW_OK && i < n_grid; i++)
        status = make_transition(w, grid[i], &k->grid[i], err);
    k->n_grid = n_grid;
    if (status == LW_OK)
        status = build_pieces(w, k, err);
    if (status == LW_OK && k->method == LW__LADDER)
        status = build_rungs(w, k, err);
    return status;
}

lw_status lw__kernel_build(lw__arena *arena, int n, int m, const double *a, const double *b,
                           lw_tick reach, int n_grid, const lw_tick *grid, lw__kernel *out,
                           lw_error *err)
{
    lw__kernel k = {.n = n, .m = m, .reach = reach > 1 ? reach : 1};
    k.a = by_columns(arena, n, n, a);
    k.b = by_columns(arena, n, m, b);
    if (k.a == NULL || k.b == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for the matrices of a plant");
    lw_status status = lw__kernel_norm(n, a, &k.norm, err);
    if (status != LW_OK)
        return status;
    if (choose_method(&k) != LW_OK)
        return lw_error_set(err, LW_ERR_TIME,
                            "the plant moves at %g /s, too fast for a tick of 1 ps", k.norm);
    builder w = {.arena = arena, .n = n, .m = m, .size = n + m, .a = a, .b = b};
    status = build_all(&w, &k, n_grid, grid, err);
    lw__free(w.matrix);
    lw__free(w.power);
    if (status == LW_OK)
        *out = k;
    return status;
}

// ---- evaluation

// out += matrix (n x n, by columns) v, summed over columns in order.
static inline __attribute__((always_inline)) void
add_product(int n, int columns, const double *matrix, const double *v, double *out)
{
    for (int j = 0; j < columns; j++)
        for (int i = 0; i < n; i++)
            out[i] += matrix[j * n + i] * v[j];
}

static inline __attribute__((always_inline)) void
carry_of(int n, int m, const lw__transition *t, const double *x, const double *u, double *out)
{
    for (int i = 0; i < n; i++)
        out[i] = t->phi[i] * x[0];
    add_product(n, n - 1, t->phi + n, x + 1, out);
    add_product(n, m, t->gamma, u, out);
}

// The piece that holds tau.
static inline int piece_of(const lw__kernel *k, lw_tick tau)
{
    return k->n_pieces == 1 ? 0 : (int)((tau - 1) / k->piece);
}

// out += Gamma(tau) du by Horner on the piece that holds tau.
static inline __attribute__((always_inline)) void kick_of(int n, const lw__kernel *k, lw_tick tau,
                                                          int64_t channel, double du, double *out)
{
    int p = piece_of(k, tau);
    double s = (double)(tau - (k->piece * p + k->piece / 2)) * k->per_half;
    int64_t stride = (int64_t)(k->degree + 1) * n;
    const double *g = k->polynomial + (p * k->m + channel) * stride;
    double acc[LW__KERNEL_MAX];
    for (int i = 0; i < n; i++)
        acc[i] = g[k->degree * n + i];
    for (int power = k->degree - 1; power >= 0; power--)
        for (int i = 0; i < n; i++)
            acc[i] = acc[i] * s + g[power * n + i];
    for (int i = 0; i < n; i++)
        out[i] += acc[i] * du;
}

// Move x over a time s from a piece's centre by the Taylor action of the exponential.
static void action(const lw__kernel *k, double s, const double *u, double *x, double *work)
{
    int n = k->n;
    double *term = work, *next = work + n;
    for (int i = 0; i < n; i++)
        term[i] = 0;
    add_product(n, n, k->a, x, term);
    add_product(n, k->m, k->b, u, term);
    for (int i = 0; i < n; i++)
        term[i] *= s;
    for (int power = 1;; power++) {
        for (int i = 0; i < n; i++)
            x[i] += term[i];
        if (power == k->degree)
            return;
        for (int i = 0; i < n; i++)
            next[i] = 0;
        add_product(n, n, k->a, term, next);
        double factor = s / (power + 1);
        for (int i = 0; i < n; i++)
            term[i] = next[i] * factor;
    }
}

// x over tau with constant inputs, away from the lengths of the grid. work: 2 n.
static void between(const lw__kernel *k, lw_tick tau, const double *x, const double *u, double *out,
                    double *work)
{
    const lw__transition *centre = &k->centre[piece_of(k, tau)];
    carry_of(k->n, k->m, centre, x, u, out);
    action(k, (double)(tau - centre->length) * SECONDS_PER_TICK, u, out, work);
}

static inline const lw__transition *of_grid(const lw__kernel *k, lw_tick tau)
{
    if (k->n_grid > 0 && tau == k->grid[0].length)
        return &k->grid[0];
    return k->n_grid > 1 && tau == k->grid[1].length ? &k->grid[1] : NULL;
}

static inline __attribute__((always_inline)) void
superpose_of(int n, const lw__kernel *k, lw_tick anchor, const double *x, const double *u,
             const lw__changes *c, lw_tick now, double *out, double *work)
{
    const lw__transition *t = of_grid(k, now - anchor);
    if (t != NULL)
        carry_of(n, k->m, t, x, u, out);
    else
        between(k, now - anchor, x, u, out, work);
    for (int64_t j = 0; j < c->n; j++)
        if (c->tick[j] < now)
            kick_of(n, k, now - c->tick[j], c->channel[j], c->du[j], out);
}

// Loops of constant length for the sizes that matter.
static inline __attribute__((always_inline)) void
superpose_by_size(const lw__kernel *k, lw_tick anchor, double *x, const double *u,
                  const lw__changes *c, lw_tick now, double *work)
{
#define OF_SIZE(size)                                                                              \
    case size: {                                                                                   \
        double out[size];                                                                          \
        superpose_of(size, k, anchor, x, u, c, now, out, work);                                    \
        for (int i = 0; i < size; i++)                                                             \
            x[i] = out[i];                                                                         \
        return;                                                                                    \
    }
    switch (k->n) {
        OF_SIZE(1)
        OF_SIZE(2)
        OF_SIZE(3)
        OF_SIZE(4)
        OF_SIZE(5)
        OF_SIZE(6)
    default:
        superpose_of(k->n, k, anchor, x, u, c, now, work, work + k->n);
        memcpy(x, work, sizeof(double) * (size_t)k->n);
    }
#undef OF_SIZE
}

static void superpose(const lw__kernel *k, lw_tick anchor, const double *x, const double *u,
                      const lw__changes *c, lw_tick now, double *out, double *work)
{
    superpose_of(k->n, k, anchor, x, u, c, now, out, work);
}

// One stretch of the ladder with constant inputs. work: 3 n.
static void climb(const lw__kernel *k, lw_tick tau, double *x, const double *u, double *work)
{
    size_t size = sizeof(double) * (size_t)k->n;
    double *moved = work;
    const lw__transition *t = of_grid(k, tau);
    if (t != NULL) {
        carry_of(k->n, k->m, t, x, u, moved);
        memcpy(x, moved, size);
        return;
    }
    for (int r = k->n_rungs - 1; r >= 0; r--)
        while (tau >= k->rung[r].length) {
            carry_of(k->n, k->m, &k->rung[r], x, u, moved);
            memcpy(x, moved, size);
            tau -= k->rung[r].length;
        }
    if (tau > 0) {
        between(k, tau, x, u, moved, work + k->n);
        memcpy(x, moved, size);
    }
}

// Changes are walked through one after the other.
static void walk(const lw__kernel *k, lw_tick anchor, const double *x, const double *u,
                 const lw__changes *c, lw_tick now, double *out, double *work)
{
    double *level = work;
    work += k->m;
    memcpy(level, u, sizeof(double) * (size_t)k->m);
    memcpy(out, x, sizeof(double) * (size_t)k->n);
    for (int64_t j = 0; j < c->n; j++) {
        if (c->tick[j] > anchor)
            climb(k, c->tick[j] - anchor, out, level, work);
        anchor = c->tick[j];
        level[c->channel[j]] += c->du[j];
    }
    if (now > anchor)
        climb(k, now - anchor, out, level, work);
}

void lw__kernel_value(const lw__kernel *k, lw_tick anchor, const double *x, const double *u,
                      const lw__changes *changes, lw_tick now, double *out, double *work)
{
    if (k->n == 0)
        return;
    if (now == anchor)
        memcpy(out, x, sizeof(double) * (size_t)k->n);
    else if (k->method == LW__LADDER)
        walk(k, anchor, x, u, changes, now, out, work);
    else
        superpose(k, anchor, x, u, changes, now, out, work);
}

void lw__kernel_advance(const lw__kernel *k, lw_tick anchor, double *x, const double *u,
                        const lw__changes *changes, lw_tick now, double *work)
{
    if (k->n == 0 || now == anchor)
        return;
    if (k->method == LW__SUPERPOSED) {
        superpose_by_size(k, anchor, x, u, changes, now, work);
        return;
    }
    walk(k, anchor, x, u, changes, now, work, work + k->n);
    memcpy(x, work, sizeof(double) * (size_t)k->n);
}
