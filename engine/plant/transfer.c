// Plants from transfer functions and from zeros, poles and gain.
//
// Transfer functions: each column (input) is realised in controllable canonical form over the
// denominator its entries share, or entry by entry where they differ. With a monic denominator
// s^n + a1 s^(n-1) + ... + an the canonical states are
//     x1' = -a1 x1 - a2 x2 - ... - an xn + u,   x2' = x1, ..., xn' = x(n-1)
// scaled by powers of two so that rows and columns of A have like norms: exact, and widely spread
// poles keep their accuracy.
//
// Zeros and poles: a chain of real sections of first and second order, each with its own zeros, so
// that no polynomial of high degree is formed and repeated poles stay as they are.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/dense.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

// ---- transfer functions

static lw_status check_poly(const char *what, const lw_poly *p, lw_error *err)
{
    if (p->n < 1 || p->n > LW_PLANT_MAX_STATES + 1)
        return lw_error_set(err, LW_ERR_ARGUMENT, "%s has %d coefficients; permitted 1 to %d", what,
                            p->n, LW_PLANT_MAX_STATES + 1);
    for (int i = 0; i < p->n; i++)
        if (!isfinite(p->c[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s coefficient %d is %g; a finite number is wanted", what, i + 1,
                                p->c[i]);
    return LW_OK;
}

// The numerator without leading zeros; one coefficient is kept.
static lw_poly trimmed(lw_poly p)
{
    while (p.n > 1 && p.c[0] == 0) {
        p.n--;
        p.c++;
    }
    return p;
}

static lw_status check_entry(const lw_poly *num, const lw_poly *den, lw_error *err)
{
    lw_status status = check_poly("num", num, err);
    if (status == LW_OK)
        status = check_poly("den", den, err);
    if (status != LW_OK)
        return status;
    if (den->c[0] == 0)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "den begins with 0; its highest power must have a coefficient");
    int degree = trimmed(*num).n - 1;
    if (degree > den->n - 1)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "improper transfer function: degree %d over degree %d; the numerator's "
                            "degree may at most equal the denominator's",
                            degree, den->n - 1);
    return LW_OK;
}

static int same_poly(const lw_poly *a, const lw_poly *b)
{
    return a->n == b->n && memcmp(a->c, b->c, sizeof(double) * (size_t)a->n) == 0;
}

// One block of states: a denominator driven by an input, read by several outputs.
typedef struct growing {
    int n_x, n_u, n_y, room; // room: states the matrices are laid out for
    double *a, *b, *c, *d;
} growing;

static void add_denominator(growing *g, const lw_poly *den, int input)
{
    int n = den->n - 1, at = g->n_x;
    for (int k = 0; k < n; k++)
        g->a[at * g->room + at + k] = -den->c[k + 1] / den->c[0];
    for (int k = 1; k < n; k++)
        g->a[(at + k) * g->room + at + k - 1] = 1;
    if (n > 0)
        g->b[at * g->n_u + input] = 1;
    g->n_x += n;
}

// Output of num / den over the block that begins at state `at`.
static void add_numerator(growing *g, const lw_poly *num, const lw_poly *den, int input, int output,
                          int at)
{
    lw_poly p = trimmed(*num);
    int n = den->n - 1, missing = den->n - p.n; // coefficients above the numerator are zero
    double direct = missing == 0 ? p.c[0] / den->c[0] : 0;
    g->d[output * g->n_u + input] = direct;
    for (int k = 0; k < n; k++) {
        int i = k + 1 - missing; // index in p of the coefficient that belongs to den->c[k + 1]
        double b = i >= 0 ? p.c[i] : 0;
        g->c[output * g->room + at + k] = (b - direct * den->c[k + 1]) / den->c[0];
    }
}

static void add_column(growing *g, const lw_poly *num, const lw_poly *den, int input)
{
    int shared = 1;
    for (int i = 1; i < g->n_y; i++)
        shared &= same_poly(&den[i * g->n_u + input], &den[input]);
    for (int i = 0; i < g->n_y; i++) {
        if (i == 0 || !shared)
            add_denominator(g, &den[i * g->n_u + input], input);
        const lw_poly *own = &den[i * g->n_u + input];
        add_numerator(g, &num[i * g->n_u + input], own, input, i, g->n_x - (own->n - 1));
    }
}

// Scale states by powers of two towards a balanced A, and drop the unused columns.
static void balance_and_pack(growing *g)
{
    int n = g->n_x;
    double scale[LW_PLANT_MAX_STATES];
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n; k++)
            g->a[i * n + k] = g->a[i * g->room + k]; // rows move towards the front
    for (int i = 0; i < g->n_y; i++)
        for (int k = 0; k < n; k++)
            g->c[i * n + k] = g->c[i * g->room + k];
    lw__dense_balance(n, g->a, scale);
    for (int i = 0; i < n; i++) {
        for (int k = 0; k < n; k++)
            g->a[i * n + k] *= scale[k] / scale[i];
        for (int u = 0; u < g->n_u; u++)
            g->b[i * g->n_u + u] /= scale[i];
        for (int y = 0; y < g->n_y; y++)
            g->c[y * n + i] *= scale[i];
    }
}

static lw_status build_transfer(growing *g, const lw_poly *num, const lw_poly *den,
                                const char *const *input_names, const char *const *output_names,
                                lw_plant **out, lw_error *err)
{
    int n = g->room, m = g->n_u, r = g->n_y;
    double *numbers = lw__alloc(sizeof(double) * (size_t)(n * n + n * m + r * n + r * m + 1));
    if (numbers == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a transfer function");
    g->a = numbers;
    g->b = g->a + n * n;
    g->c = g->b + n * m;
    g->d = g->c + r * n;
    for (int j = 0; j < m; j++)
        add_column(g, num, den, j);
    balance_and_pack(g);
    lw_status status = lw_plant_state_space(g->n_x, m, r, g->a, g->b, g->c, g->d, NULL, NULL,
                                            input_names, output_names, out, err);
    lw__free(numbers);
    return status;
}

lw_status lw_plant_transfer(int n_y, int n_u, const lw_poly *num, const lw_poly *den,
                            const char *const *input_names, const char *const *output_names,
                            lw_plant **out, lw_error *err)
{
    if (n_y < 1 || n_y > LW_PLANT_MAX_PORTS || n_u < 1 || n_u > LW_PLANT_MAX_PORTS)
        return lw_error_set(err, LW_ERR_SHAPE,
                            "a transfer function has %d outputs and %d inputs; permitted 1 to %d",
                            n_y, n_u, LW_PLANT_MAX_PORTS);
    growing g = {.n_u = n_u, .n_y = n_y};
    for (int i = 0; i < n_y * n_u; i++) {
        lw_status status = check_entry(&num[i], &den[i], err);
        if (status != LW_OK) {
            if (n_y * n_u > 1)
                lw_error_prefix(err, "output %d, input %d: ", i / n_u + 1, i % n_u + 1);
            return status;
        }
        g.room += den[i].n - 1;
    }
    if (g.room > 4096)
        return lw_error_set(err, LW_ERR_SHAPE, "the transfer functions have more than %d states",
                            LW_PLANT_MAX_STATES);
    g.room = g.room > 0 ? g.room : 1;
    return build_transfer(&g, num, den, input_names, output_names, out, err);
}

// ---- zeros and poles

// Real sections: 1 is one real root, 2 a pair (conjugate or two real ones) as s^2 + p s + q.
typedef struct section {
    int order;
    double p, q; // order 1: s + q
} section;

static int by_size(const double (*roots)[2], int i, int j)
{
    double a = hypot(roots[i][0], roots[i][1]), b = hypot(roots[j][0], roots[j][1]);
    return a < b || (a == b && i < j);
}

// Sort indices by size, so that sections of like speed come together.
static void order_roots(int n, const double (*roots)[2], int *order)
{
    for (int i = 0; i < n; i++) {
        int at = i;
        for (; at > 0 && by_size(roots, i, order[at - 1]); at--)
            order[at] = order[at - 1];
        order[at] = i;
    }
}

static int partner_of(int n, const double (*roots)[2], const char *used, int i)
{
    for (int k = 0; k < n; k++)
        if (!used[k] && k != i && roots[k][0] == roots[i][0] && roots[k][1] == -roots[i][1])
            return k;
    return -1;
}

// Roots as sections; conjugates must both be there.
static lw_status make_sections(const char *what, int n, const double (*roots)[2], section *out,
                               int *n_out, lw_error *err)
{
    int order[LW_PLANT_MAX_STATES];
    char used[LW_PLANT_MAX_STATES] = {0};
    *n_out = 0;
    for (int i = 0; i < n; i++)
        if (!isfinite(roots[i][0]) || !isfinite(roots[i][1]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s %d is %g, %g; finite numbers are wanted", what, i + 1,
                                roots[i][0], roots[i][1]);
    order_roots(n, roots, order);
    for (int k = 0; k < n; k++) {
        int i = order[k];
        if (used[i])
            continue;
        used[i] = 1;
        double re = roots[i][0], im = roots[i][1];
        if (im == 0) {
            out[(*n_out)++] = (section){1, 0, -re};
            continue;
        }
        int partner = partner_of(n, roots, used, i);
        if (partner < 0)
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "%s %d is %g, %g; its conjugate is missing", what, i + 1, re, im);
        used[partner] = 1;
        out[(*n_out)++] = (section){2, -2 * re, re * re + im * im};
    }
    return LW_OK;
}

// One link of the chain: the section num / den, num of no higher order.
static lw_status section_plant(const section *num, const section *den, double gain,
                               lw_plant **out, lw_error *err)
{
    // second order: x1' = x2, x2' = -q x1 - p x2 + u in scaled states; first order: x' = -q x + u
    int n = den->order, m = num->order;
    double b2 = m == 2 ? 1 : 0, b1 = m == 2 ? num->p : m == 1 ? 1 : 0,
           b0 = m == 0 ? 1 : num->q;
    if (n == 1) {
        double a = -den->q, b = 1, d = gain * b1, c = gain * (b0 - b1 * den->q);
        return lw_plant_state_space(1, 1, 1, &a, &b, &c, &d, NULL, NULL, NULL, NULL, out, err);
    }
    double w = sqrt(fabs(den->q)), unit = 1;
    for (; w > 0 && unit < w / 2 && unit < 0x1p500; unit *= 2)
        ;
    for (; w > 0 && unit > w * 2 && unit > 0x1p-500; unit /= 2)
        ;
    double a[] = {0, unit, -den->q / unit, -den->p}, b[] = {0, 1 / unit}, d = gain * b2;
    double c[] = {gain * (b0 - b2 * den->q), gain * (b1 - b2 * den->p) * unit};
    return lw_plant_state_space(2, 1, 1, a, b, c, &d, NULL, NULL, NULL, NULL, out, err);
}

static lw_status append(lw_plant **chain, lw_plant *link, lw_error *err)
{
    if (*chain == NULL) {
        *chain = link;
        return LW_OK;
    }
    lw_plant *longer = NULL;
    lw_status status = lw_plant_series(*chain, link, &longer, err);
    lw_plant_free(link);
    if (status == LW_OK) {
        lw_plant_free(*chain);
        *chain = longer;
    }
    return status;
}

// Two real sections of first order as one of second, where a pair of zeros needs room.
static section merged(section a, section b)
{
    return (section){2, a.q + b.q, a.q * b.q};
}

// Give each section of poles its zeros: pairs of zeros to pairs of poles first, then the rest.
static lw_status spread_zeros(int *n_poles, section *poles, int n_zeros, const section *zeros,
                              section *own, lw_error *err)
{
    for (int z = 0; z < n_zeros; z++) {
        if (zeros[z].order != 2)
            continue;
        int at = 0;
        while (at < *n_poles && (poles[at].order != 2 || own[at].order != 0))
            at++;
        if (at == *n_poles) { // make a pair of two real poles that are still free
            int first = -1, second = -1;
            for (int k = *n_poles - 1; k >= 0; k--)
                if (poles[k].order == 1 && own[k].order == 0) {
                    second = second < 0 ? k : second;
                    first = k != second && first < 0 ? k : first;
                }
            if (first < 0)
                return lw_error_set(err, LW_ERR_INTERNAL, "no section is left for two zeros");
            poles[first] = merged(poles[first], poles[second]);
            for (int k = second; k + 1 < *n_poles; k++) {
                poles[k] = poles[k + 1];
                own[k] = own[k + 1];
            }
            --*n_poles;
            at = first;
        }
        own[at] = zeros[z];
    }
    for (int z = 0; z < n_zeros; z++) {
        if (zeros[z].order != 1)
            continue;
        int at = 0;
        while (at < *n_poles && own[at].order >= poles[at].order)
            at++;
        own[at] = own[at].order == 0 ? zeros[z] : merged(own[at], zeros[z]);
    }
    return LW_OK;
}

static lw_status build_chain(int n_poles, const section *poles, const section *zeros, double gain,
                             lw_plant **out, lw_error *err)
{
    static const char *const in[] = {"in"}, *const shown[] = {"out"};
    lw_plant *chain = NULL;
    lw_status status = LW_OK;
    if (n_poles == 0)
        return lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &gain, NULL, NULL, in, shown, out,
                                    err);
    for (int k = 0; status == LW_OK && k < n_poles; k++) {
        lw_plant *link = NULL;
        status = section_plant(&zeros[k], &poles[k], k == 0 ? gain : 1, &link, err);
        if (status == LW_OK)
            status = append(&chain, link, err);
    }
    if (status == LW_OK) {
        lw_plant_view v = lw_plant_look(chain); // states are numbered through
        status = lw_plant_state_space(v.n_x, 1, 1, v.a, v.b, v.c, v.d, NULL, NULL, in, shown, out,
                                      err);
    }
    lw_plant_free(chain);
    return status;
}

lw_status lw_plant_zeros_poles(int n_zeros, const double (*zeros)[2], int n_poles,
                               const double (*poles)[2], double gain, lw_plant **out,
                               lw_error *err)
{
    section pole_sections[LW_PLANT_MAX_STATES], zero_sections[LW_PLANT_MAX_STATES],
        own[LW_PLANT_MAX_STATES] = {{0, 0, 0}};
    int n_pole_sections = 0, n_zero_sections = 0;
    if (n_poles < 0 || n_poles > LW_PLANT_MAX_STATES || n_zeros < 0)
        return lw_error_set(err, LW_ERR_SHAPE, "there are %d poles; permitted 0 to %d", n_poles,
                            LW_PLANT_MAX_STATES);
    if (n_zeros > n_poles)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "improper: %d zeros over %d poles; at most as many zeros as poles are "
                            "permitted",
                            n_zeros, n_poles);
    if (!isfinite(gain))
        return lw_error_set(err, LW_ERR_NOT_FINITE, "gain is %g; a finite number is wanted", gain);
    lw_status status =
        make_sections("pole", n_poles, poles, pole_sections, &n_pole_sections, err);
    if (status == LW_OK)
        status = make_sections("zero", n_zeros, zeros, zero_sections, &n_zero_sections, err);
    if (status == LW_OK)
        status = spread_zeros(&n_pole_sections, pole_sections, n_zero_sections, zero_sections, own,
                              err);
    if (status != LW_OK)
        return status;
    return build_chain(n_pole_sections, pole_sections, own, gain, out, err);
}
