// Elementary functions by SLEEF's family without fused multiply-add: the same bits on every
// processor and for every compiler. See elementary.h.
//
// SLEEF leaves out the ends of some ranges: sums and logarithms of the largest numbers overflow,
// the least numbers become 0. Those arguments, and no others, take a way of their own here.

#include <latewood/elementary.h>

#include <math.h>
#include <sleef.h>

// SLEEF's lanes hold the bits of its scalar functions and need two thirds of their time, even for
// one number in both.
#ifdef __SSE2__
#include <emmintrin.h>
#define SLEEF_1(name, suffix, x) _mm_cvtsd_f64(Sleef_cinz_##name##d2_##suffix##sse2(_mm_set1_pd(x)))
#define SLEEF_2(name, suffix, x, y)                                                                \
    _mm_cvtsd_f64(Sleef_cinz_##name##d2_##suffix##sse2(_mm_set1_pd(x), _mm_set1_pd(y)))
#else
#define SLEEF_1(name, suffix, x) Sleef_cinz_##name##d1_##suffix##purec(x)
#define SLEEF_2(name, suffix, x, y) Sleef_cinz_##name##d1_##suffix##purec(x, y)
#endif

#define BY_SLEEF_1(name, suffix)                                                                   \
    double lw_##name(double x)                                                                     \
    {                                                                                              \
        return SLEEF_1(name, suffix, x);                                                           \
    }
#define BY_SLEEF_2(name, suffix)                                                                   \
    double lw_##name(double x, double y)                                                           \
    {                                                                                              \
        return SLEEF_2(name, suffix, x, y);                                                        \
    }

BY_SLEEF_1(exp2, u10)
BY_SLEEF_1(log, u10)
BY_SLEEF_1(log2, u10)
BY_SLEEF_1(log10, u10)
BY_SLEEF_1(sin, u10)
BY_SLEEF_1(cos, u10)
BY_SLEEF_1(asin, u10)
BY_SLEEF_1(acos, u10)
BY_SLEEF_1(atan, u10)
BY_SLEEF_1(tanh, u10)
BY_SLEEF_1(atanh, u10)
BY_SLEEF_1(cbrt, u10)
BY_SLEEF_1(erf, u10)
BY_SLEEF_1(erfc, u15)
BY_SLEEF_2(atan2, u10)
BY_SLEEF_2(hypot, u05)

#define LEAST 0x1p-1000         // below it, odd functions with slope 1 are their argument
#define ROOT_OF_LARGEST 0x1p512 // where SLEEF's squares overflow

// share * exp(x) where exp(x) is near the largest number or above it: e^709 times the rest, whose
// argument is exact.
static double large_exp(double x, double share)
{
    const double e709 = 0x1.d422d2be5dc9bp+1022;
    return share * e709 * SLEEF_1(exp, u10, x - 709);
}

double lw_exp(double x)
{
    double y = SLEEF_1(exp, u10, x);
    return isinf(y) ? large_exp(x, 1) : y;
}

double lw_expm1(double x)
{
    double y = SLEEF_1(expm1, u10, x);
    return isinf(y) ? large_exp(x, 1) : y;
}

double lw_sinh(double x)
{
    double y = SLEEF_1(sinh, u10, x);
    return isinf(y) ? copysign(large_exp(fabs(x), 0.5), x) : y;
}

double lw_cosh(double x)
{
    double y = SLEEF_1(cosh, u10, x);
    return isinf(y) ? large_exp(fabs(x), 0.5) : y;
}

double lw_tan(double x)
{
    return fabs(x) < LEAST ? x : SLEEF_1(tan, u10, x);
}

double lw_log1p(double x)
{
    if (fabs(x) < LEAST)
        return x;
    return x > 1e300 ? lw_log(x) : SLEEF_1(log1p, u10, x);
}

// log(2 x), also where 2 x is too large.
static double log_of_twice(double x)
{
    return x < 0x1p1023 ? lw_log(2 * x) : lw_log(x) + 0.69314718055994530942;
}

double lw_asinh(double x)
{
    if (fabs(x) < LEAST)
        return x;
    return fabs(x) >= ROOT_OF_LARGEST ? copysign(log_of_twice(fabs(x)), x) : SLEEF_1(asinh, u10, x);
}

double lw_acosh(double x)
{
    return x >= ROOT_OF_LARGEST ? log_of_twice(x) : SLEEF_1(acosh, u10, x);
}

// SLEEF overflows a little below the largest number; the square of the half power does not.
double lw_pow(double x, double y)
{
    double power = SLEEF_2(pow, u10, x, y);
    if (!isinf(power) || y == 1)
        return y == 1 ? x : power;
    double half = SLEEF_2(pow, u10, fabs(x), 0.5 * y);
    return copysign(half * half, power);
}

double lw_normal_cdf(double x)
{
    return 0.5 * lw_erfc(-x / 1.41421356237309504880);
}

static double ratio(const double *a, const double *b, double r)
{
    double p = a[7], q = b[7];
    for (int k = 6; k >= 0; k--) {
        p = p * r + a[k];
        q = q * r + b[k];
    }
    return p / q;
}

double lw_normal_quantile(double p)
{
    static const double a[8] = {3.3871328727963666080e0,  1.3314166789178437745e+2,
                                1.9715909503065514427e+3, 1.3731693765509461125e+4,
                                4.5921953931549871457e+4, 6.7265770927008700853e+4,
                                3.3430575583588128105e+4, 2.5090809287301226727e+3};
    static const double b[8] = {1.0,
                                4.2313330701600911252e+1,
                                6.8718700749205790830e+2,
                                5.3941960214247511077e+3,
                                2.1213794301586595867e+4,
                                3.9307895800092710610e+4,
                                2.8729085735721942674e+4,
                                5.2264952788528545610e+3};
    static const double c[8] = {1.42343711074968357734e0,  4.63033784615654529590e0,
                                5.76949722146069140550e0,  3.64784832476320460504e0,
                                1.27045825245236838258e0,  2.41780725177450611770e-1,
                                2.27238449892691845833e-2, 7.74545014278341407640e-4};
    static const double d[8] = {1.0,
                                2.05319162663775882187e0,
                                1.67638483018380384940e0,
                                6.89767334985100004550e-1,
                                1.48103976427480074590e-1,
                                1.51986665636164571966e-2,
                                5.47593808499534494600e-4,
                                1.05075007164441684324e-9};
    static const double e[8] = {6.65790464350110377720e0,  5.46378491116411436990e0,
                                1.78482653991729133580e0,  2.96560571828504891230e-1,
                                2.65321895265761230930e-2, 1.24266094738807843860e-3,
                                2.71155556874348757815e-5, 2.01033439929228813265e-7};
    static const double f[8] = {1.0,
                                5.99832206555887937690e-1,
                                1.36929880922735805310e-1,
                                1.48753612908506148525e-2,
                                7.86869131145613259100e-4,
                                1.84631831751005468180e-5,
                                1.42151175831644588870e-7,
                                2.04426310338993978564e-15};
    double q = p - 0.5;
    if (fabs(q) <= 0.425)
        return q * ratio(a, b, 0.180625 - q * q);
    double tail = q < 0 ? p : 1 - p;
    if (!(tail > 0))
        return tail == 0 ? (q < 0 ? -(double)INFINITY : (double)INFINITY) : (double)NAN;
    double r = sqrt(-lw_log(tail));
    double x = r <= 5 ? ratio(c, d, r - 1.6) : ratio(e, f, r - 5);
    return q < 0 ? -x : x;
}
