// Plants from zeros, poles and gain: a chain of real sections of first and second order.
//
// Workload: a few a rig; repeated, widely spread, lightly damped and unstable poles are all used.
//
// Realisation: no polynomial is formed, since a polynomial of high degree no longer knows its
// repeated roots. A is block triangular with the poles themselves on its diagonal:
//     real pole p           x' = p x + g u
//     pair re +- i im       x1' = re x1 + h x2,  x2' = -(im^2 / h) x1 + re x2 + g u
// g and h are the powers of two next below the size of the pole, so that every section's output
// has about the size of its input. Each zero goes to the nearest section that has room (L. B.
// Jackson, Bell System Tech. J. 49 (1970) 159-184, keeps the gain of single sections small so);
// a pair of zeros takes a pair of poles, or two real poles.
//
// Invariants
// 1. Sections, and within them states, are in the order of their first pole.
// 2. The eigenvalues of A are the poles: real ones exactly, pairs to one rounding of im^2.
// 3. The gain enters at the output only, together with the powers of two.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/dd.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

// ---- roots as real ones and pairs

// im > 0: a conjugate pair; 0: one real root.
typedef struct root {
    double re, im;
} root;

typedef struct root_list {
    const char *field;
    int n_given;
    const double (*given)[2];
    int n;
    root root[LW_PLANT_MAX_STATES];
} root_list;

static lw_status check_finite(const root_list *list, lw_error *err)
{
    char element[32];
    for (int i = 0; i < list->n_given; i++)
        for (int part = 0; part < 2; part++) {
            if (isfinite(list->given[i][part]))
                continue;
            snprintf(element, sizeof element, "%s[%d]%s", list->field, i + 1,
                     part ? " imaginary part" : "");
            return lw__plant_bad(LW_ERR_NOT_FINITE, element, list->given[i][part],
                                 "a finite number is wanted", err);
        }
    return LW_OK;
}

// The first root not yet used that is the conjugate of number i, or -1.
static int conjugate_of(const root_list *list, int i, const char *used)
{
    for (int k = i + 1; k < list->n_given; k++)
        if (!used[k] && list->given[k][0] == list->given[i][0] &&
            list->given[k][1] == -list->given[i][1])
            return k;
    return -1;
}

static lw_status gather(root_list *list, lw_error *err)
{
    char used[LW_PLANT_MAX_STATES] = {0};
    lw_status status = check_finite(list, err);
    for (int i = 0; status == LW_OK && i < list->n_given; i++) {
        double re = list->given[i][0], im = list->given[i][1];
        if (used[i])
            continue;
        list->root[list->n++] = (root){re, fabs(im)};
        if (im == 0)
            continue;
        int other = conjugate_of(list, i, used);
        if (other < 0)
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "%s[%d] is %.12g %c %.12g i; its conjugate is missing", list->field,
                                i + 1, re, im < 0 ? '-' : '+', fabs(im));
        used[other] = 1;
    }
    return status;
}

// ---- sections

// Poles: one real, a pair, or two real ones (n_poles 2, is_pair 0). Zeros: up to n_poles real ones
// or, where the first has im > 0, a pair.
typedef struct section {
    int n_poles, n_zeros, is_pair;
    root pole[2], zero[2];
} section;

typedef struct section_list {
    int n;
    section section[LW_PLANT_MAX_STATES];
} section_list;

static void sections_of(const root_list *poles, section_list *list)
{
    list->n = poles->n;
    for (int i = 0; i < poles->n; i++) {
        int is_pair = poles->root[i].im > 0;
        list->section[i] =
            (section){.n_poles = is_pair ? 2 : 1, .is_pair = is_pair, .pole = {poles->root[i]}};
    }
}

// Square of the distance; infinite is as good as far.
static double distance(root a, root b)
{
    double re = a.re - b.re, im = a.im - b.im;
    return re * re + im * im;
}

// The section nearest to `zero` among those of `n_poles` poles (1, 2; 0: any) with `room`, -1:
// none.
static int nearest(const section_list *list, root zero, int n_poles, int room)
{
    int best = -1;
    for (int i = 0; i < list->n; i++) {
        const section *s = &list->section[i];
        if ((n_poles != 0 && s->n_poles != n_poles) || s->n_poles - s->n_zeros < room)
            continue;
        if (best < 0 || distance(s->pole[0], zero) < distance(list->section[best].pole[0], zero))
            best = i;
    }
    return best;
}

// Make one section of the two nearest sections of one real pole and no zero.
static int join_real_poles(section_list *list, root zero)
{
    int first = nearest(list, zero, 1, 1);
    list->section[first].n_zeros = 1; // out of the way of the second search
    int second = nearest(list, zero, 1, 1);
    int kept = first < second ? first : second, gone = first < second ? second : first;
    section *s = &list->section[kept];
    s->n_poles = 2;
    s->n_zeros = 0;
    s->pole[1] = list->section[gone].pole[0];
    memmove(&list->section[gone], &list->section[gone + 1],
            sizeof(section) * (size_t)(list->n - gone - 1));
    list->n--;
    return kept;
}

// Pairs first: while no real zero is placed, n_zeros <= n_poles leaves room for each pair.
static void place_zeros(section_list *list, const root_list *zeros)
{
    for (int i = 0; i < zeros->n; i++) {
        if (zeros->root[i].im == 0)
            continue;
        int at = nearest(list, zeros->root[i], 2, 2);
        at = at >= 0 ? at : join_real_poles(list, zeros->root[i]);
        list->section[at].zero[0] = zeros->root[i];
        list->section[at].n_zeros = 2;
    }
    for (int i = 0; i < zeros->n; i++) {
        if (zeros->root[i].im != 0)
            continue;
        section *s = &list->section[nearest(list, zeros->root[i], 0, 1)];
        s->zero[s->n_zeros++] = zeros->root[i];
    }
}

// ---- the states of one section

// x' = a x + b u, y = c x + d u realises 2^exponent times the section.
typedef struct block {
    int n, exponent;
    double a[2][2], b[2], c[2], d;
} block;

// Exponent e with 2^e <= |v| < 2^(e + 1), 0 for 0.
static int exponent_of(double v)
{
    int e = 1;
    if (v != 0)
        frexp(v, &e);
    return e - 1;
}

static block first_order(const section *s)
{
    double p = s->pole[0].re;
    int e = exponent_of(p);
    double g = ldexp(1, e);
    block k = {.n = 1, .exponent = e, .a = {{p}}, .b = {g}, .c = {1}};
    if (s->n_zeros == 1) { // (s - z) / (s - p) = 1 + (p - z) / (s - p)
        k.exponent = 0;
        k.c[0] = (p - s->zero[0].re) / g;
        k.d = 1;
    }
    return k;
}

// a b + c d, rounded once.
static double sum_of_products(double a, double b, double c, double d)
{
    return lw__dd_to_double(lw__dd_add(lw__dd_two_product(a, b), lw__dd_two_product(c, d)));
}

// With t = s - re the denominator is t^2 + im^2; x1 = g h u / (t^2 + im^2), x2 = t x1 / h.
static block pair_of_poles(const section *s)
{
    double re = s->pole[0].re, im = s->pole[0].im;
    int e = exponent_of(fabs(re) > im ? re : im);
    double g = ldexp(1, e), from_first = re - s->zero[0].re, from_second = re - s->zero[1].re;
    block k = {.n = 2, .a = {{re, g}, {-(im / g) * im, re}}, .b = {0, g}};
    if (s->n_zeros == 0) {
        k.exponent = 2 * e;
        k.c[0] = 1;
    } else if (s->n_zeros == 1) { // the numerator is t + from_first
        k.exponent = e;
        k.c[0] = from_first / g;
        k.c[1] = 1;
    } else { // 1 + (linear in t) / (t^2 + im^2)
        double up = s->zero[0].im;
        double constant = up > 0 ? sum_of_products(from_first, from_first, up - im, up + im)
                                 : sum_of_products(from_first, from_second, -im, im);
        k.c[0] = constant / g / g;
        k.c[1] = (up > 0 ? 2 * from_first : from_first + from_second) / g;
        k.d = 1;
    }
    return k;
}

// A pair of zeros over (s - p)(s - q) = 1 + slope / (s - p) + constant / ((s - p)(s - q)).
static block two_real_poles(const section *s)
{
    double p = s->pole[0].re, q = s->pole[1].re, re = s->zero[0].re, im = s->zero[0].im;
    double g = ldexp(1, exponent_of(p)), h = ldexp(1, exponent_of(q));
    double slope = (p - re) + (q - re), constant = sum_of_products(q - re, q - re, im, im);
    return (block){
        .n = 2, .a = {{p, 0}, {h, q}}, .b = {g, 0}, .c = {slope / g, constant / g / h}, .d = 1};
}

static block block_of(const section *s)
{
    if (s->n_poles == 1)
        return first_order(s);
    return s->is_pair ? pair_of_poles(s) : two_real_poles(s);
}

// ---- the chain

// What the chain so far puts out: c x + d u, times 2^-exponent.
typedef struct chain {
    int n, n_x; // states so far, and in all
    double *a, *b, *c, d;
    int exponent;
} chain;

static void append(chain *ch, const block *k)
{
    int at = ch->n, n_x = ch->n_x;
    for (int r = 0; r < k->n; r++) {
        double *row = ch->a + (at + r) * n_x;
        for (int i = 0; i < at; i++)
            row[i] = k->b[r] * ch->c[i];
        for (int i = 0; i < k->n; i++)
            row[at + i] = k->a[r][i];
        ch->b[at + r] = k->b[r] * ch->d;
    }
    for (int i = 0; i < at; i++)
        ch->c[i] *= k->d;
    for (int i = 0; i < k->n; i++)
        ch->c[at + i] = k->c[i];
    ch->d *= k->d;
    ch->n += k->n;
    ch->exponent += k->exponent;
}

static lw_status build(const section_list *list, int n_x, double gain, lw_plant **out,
                       lw_error *err)
{
    double *numbers = lw__alloc(sizeof(double) * (size_t)(n_x * n_x + 2 * n_x));
    if (numbers == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    chain ch = {.n_x = n_x, .a = numbers, .d = 1};
    ch.b = ch.a + n_x * n_x;
    ch.c = ch.b + n_x;
    for (int i = 0; i < list->n; i++) {
        block k = block_of(&list->section[i]);
        append(&ch, &k);
    }
    for (int i = 0; i < n_x; i++)
        ch.c[i] = ldexp(gain * ch.c[i], -ch.exponent);
    ch.d = ldexp(gain * ch.d, -ch.exponent);
    lw_status status =
        lw_plant_state_space(n_x, 1, 1, ch.a, ch.b, ch.c, &ch.d, NULL, NULL, NULL, NULL, out, err);
    lw__free(numbers);
    return status;
}

lw_status lw_plant_zeros_poles(int n_zeros, const double (*zeros)[2], int n_poles,
                               const double (*poles)[2], double gain, lw_plant **out, lw_error *err)
{
    root_list z = {.field = "zeros", .n_given = n_zeros, .given = zeros};
    root_list p = {.field = "poles", .n_given = n_poles, .given = poles};
    section_list list;
    if (n_poles < 0 || n_poles > LW_PLANT_MAX_STATES || n_zeros < 0)
        return lw_error_set(err, LW_ERR_SHAPE, "number of %s is %d; permitted 0 to %d",
                            n_zeros < 0 ? "zeros" : "poles", n_zeros < 0 ? n_zeros : n_poles,
                            LW_PLANT_MAX_STATES);
    if (n_zeros > n_poles)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "there are %d zeros and %d poles; no more zeros than poles are "
                            "permitted",
                            n_zeros, n_poles);
    if (!isfinite(gain))
        return lw__plant_bad(LW_ERR_NOT_FINITE, "gain", gain, "a finite number is wanted", err);
    lw_status status = gather(&z, err);
    if (status == LW_OK)
        status = gather(&p, err);
    if (status != LW_OK)
        return status;
    sections_of(&p, &list);
    place_zeros(&list, &z);
    return build(&list, n_poles, gain, out, err);
}
