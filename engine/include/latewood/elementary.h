// Elementary functions that return the same bits on every processor and for every compiler.
//
// They are SLEEF's `cinz_*_u10` family (at most 1 ulp; erfc 1.5), which uses no fused
// multiply-add. Nothing on the path of a result calls the C library's versions.
#ifndef LATEWOOD_ELEMENTARY_H
#define LATEWOOD_ELEMENTARY_H

#include <latewood/status.h>

#ifdef __cplusplus
extern "C" {
#endif

// X(name): one argument.
// clang-format off
#define LW_ELEMENTARY_1(X)                                                                         \
    X(exp) X(expm1) X(exp2) X(log) X(log1p) X(log2) X(log10) X(sin) X(cos) X(tan) X(asin) X(acos)  \
    X(atan) X(sinh) X(cosh) X(tanh) X(asinh) X(acosh) X(atanh) X(cbrt) X(erf) X(erfc)
// clang-format on
// X(name): two arguments.
#define LW_ELEMENTARY_2(X) X(pow) X(atan2) X(hypot)

#define LW_ELEMENTARY_DECLARE_1(name) LW_API double lw_##name(double x);
#define LW_ELEMENTARY_DECLARE_2(name) LW_API double lw_##name(double x, double y);
LW_ELEMENTARY_1(LW_ELEMENTARY_DECLARE_1)
LW_ELEMENTARY_2(LW_ELEMENTARY_DECLARE_2)

// Inverse of the standard normal distribution function, 0 < p < 1.
// Method: M. J. Wichura, "Algorithm AS 241", Applied Statistics 37 (1988) 477-484, PPND16.
LW_API double lw_normal_quantile(double p);
// Standard normal distribution function, by erfc.
LW_API double lw_normal_cdf(double x);

#ifdef __cplusplus
}
#endif
#endif
