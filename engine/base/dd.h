// Double-double: an unevaluated sum of two doubles, about 31 decimal digits, by error-free
// transformations only (no fused multiply-add, no long double).
//
// Methods: T. J. Dekker, Numer. Math. 18 (1971) 224-242 (split, product); D. E. Knuth, The Art of
// Computer Programming, vol. 2 (sum); Y. Hida, X. Li, D. Bailey, "Algorithms for quad-double
// precision floating point arithmetic", ARITH-15 (2001) (normalised sum, quotient).
//
// Invariant: |lo| <= half a unit in the last place of hi.
#ifndef LATEWOOD_BASE_DD_H
#define LATEWOOD_BASE_DD_H

#include <math.h>

typedef struct lw__dd {
    double hi, lo;
} lw__dd;

// Sum of any two, and of two with |a| >= |b|.
static inline lw__dd lw__dd_two_sum(double a, double b)
{
    double s = a + b, t = s - a;
    return (lw__dd){s, (a - (s - t)) + (b - t)};
}

static inline lw__dd lw__dd_quick_sum(double a, double b)
{
    double s = a + b;
    return (lw__dd){s, b - (s - a)};
}

static inline lw__dd lw__dd_two_product(double a, double b)
{
    const double split = 134217729.0; // 2^27 + 1
    double p = a * b, ca = split * a, cb = split * b;
    double ah = ca - (ca - a), al = a - ah, bh = cb - (cb - b), bl = b - bh;
    return (lw__dd){p, ((ah * bh - p) + ah * bl + al * bh) + al * bl};
}

static inline lw__dd lw__dd_from_double(double a)
{
    return (lw__dd){a, 0};
}

static inline double lw__dd_to_double(lw__dd a)
{
    return a.hi + a.lo;
}

static inline lw__dd lw__dd_neg(lw__dd a)
{
    return (lw__dd){-a.hi, -a.lo};
}

static inline lw__dd lw__dd_add(lw__dd a, lw__dd b)
{
    lw__dd s = lw__dd_two_sum(a.hi, b.hi), t = lw__dd_two_sum(a.lo, b.lo);
    s = lw__dd_quick_sum(s.hi, s.lo + t.hi);
    return lw__dd_quick_sum(s.hi, s.lo + t.lo);
}

static inline lw__dd lw__dd_sub(lw__dd a, lw__dd b)
{
    return lw__dd_add(a, lw__dd_neg(b));
}

static inline lw__dd lw__dd_mul(lw__dd a, lw__dd b)
{
    lw__dd p = lw__dd_two_product(a.hi, b.hi);
    return lw__dd_quick_sum(p.hi, p.lo + (a.hi * b.lo + a.lo * b.hi));
}

static inline lw__dd lw__dd_mul_double(lw__dd a, double b)
{
    lw__dd p = lw__dd_two_product(a.hi, b);
    return lw__dd_quick_sum(p.hi, p.lo + a.lo * b);
}

static inline lw__dd lw__dd_div(lw__dd a, lw__dd b)
{
    double q1 = a.hi / b.hi;
    lw__dd r = lw__dd_sub(a, lw__dd_mul_double(b, q1));
    double q2 = r.hi / b.hi;
    r = lw__dd_sub(r, lw__dd_mul_double(b, q2));
    double q3 = r.hi / b.hi;
    lw__dd q = lw__dd_quick_sum(q1, q2);
    return lw__dd_add(q, lw__dd_from_double(q3));
}

static inline lw__dd lw__dd_of_ratio(double num, double den)
{
    return lw__dd_div(lw__dd_from_double(num), lw__dd_from_double(den));
}

static inline lw__dd lw__dd_abs(lw__dd a)
{
    return a.hi < 0 ? lw__dd_neg(a) : a;
}

static inline int lw__dd_less(lw__dd a, lw__dd b)
{
    return a.hi < b.hi || (a.hi == b.hi && a.lo < b.lo);
}

// Exact scaling by a power of two.
static inline lw__dd lw__dd_scale(lw__dd a, double power_of_two)
{
    return (lw__dd){a.hi * power_of_two, a.lo * power_of_two};
}

#endif
