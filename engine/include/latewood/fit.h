// Plants fitted to a measured step response.
#ifndef LATEWOOD_FIT_H
#define LATEWOOD_FIT_H

#include <latewood/plant.h>
#include <latewood/status.h>

#ifdef __cplusplus
extern "C" {
#endif

// X(name, in words): g(s) of the plant, with s of the Laplace transform
#define LW_FIT_LIST(X)                                                                             \
    X(FIRST_ORDER, "first order")                  /* gain / (time_constant s + 1) */              \
    X(FIRST_ORDER_DELAY, "first order with delay") /* the same, times exp(-delay s) */             \
    X(SECOND_ORDER, "second order")                /* gain w^2 / (s^2 + 2 damping w s + w^2) */    \
    X(SECOND_ORDER_DELAY, "second order with delay")                                               \
    X(INTEGRATOR, "integrator") /* gain / s */                                                     \
    X(INTEGRATOR_DELAY, "integrator with delay")                                                   \
    X(INTEGRATOR_LAG, "integrator with lag") /* gain / (s (time_constant s + 1)) */                \
    X(INTEGRATOR_LAG_DELAY, "integrator with lag and delay")

typedef enum lw_fit_kind {
#define LW_FIT_ENUM(name, words) LW_FIT_##name,
    LW_FIT_LIST(LW_FIT_ENUM)
#undef LW_FIT_ENUM
        LW_N_FIT_KINDS
} lw_fit_kind;

// X(name, in words). The offset is what the output is before the step, estimated too.
#define LW_FIT_PARAMETERS(X)                                                                       \
    X(OFFSET, "offset")                                                                            \
    X(GAIN, "gain")                                                                                \
    X(TIME_CONSTANT, "time_constant")         /* [s] */                                            \
    X(NATURAL_FREQUENCY, "natural_frequency") /* [rad/s] */                                        \
    X(DAMPING, "damping")                                                                          \
    X(DELAY, "delay") /* [s] */

typedef enum lw_fit_parameter {
#define LW_FIT_ENUM(name, words) LW_FIT_##name,
    LW_FIT_PARAMETERS(LW_FIT_ENUM)
#undef LW_FIT_ENUM
        LW_N_FIT_PARAMETERS
} lw_fit_parameter;

typedef struct lw_fit {
    lw_fit_kind kind;
    int n;                             // rows
    double value[LW_N_FIT_PARAMETERS]; // NAN where the kind has none; six digits
    double error[LW_N_FIT_PARAMETERS]; // standard errors; three digits
    double fit;                        // 1 - |y - model| / |y - mean of y|; six digits
    double r_squared;                  // 1 - |y - model|^2 / |y - mean of y|^2; six digits
    double residual_rms;               // six digits
} lw_fit;

LW_API const char *lw_fit_words(lw_fit_kind kind);
LW_API const char *lw_fit_parameter_words(lw_fit_parameter which);

// Fit a plant of a kind to its response to a step of its input, by least squares.
//
//   n, time, value   rows, times [s] rising, finite
//   input            height of the step, not 0
//   at               instant of the step [s]
//   out              results, rounded as stated, so that other builds of the numerical library find
//                    the same; the plant is built from rounded values
//   returns  LW_ERR_ARGUMENT        data or kind that cannot be fitted, in words
//            LW_ERR_FIT             no minimum found, or the data do not determine the parameters
//   method   Levenberg-Marquardt (K. Levenberg 1944, D. Marquardt 1963) from several starts, time
//            constant, frequency and damping by their logarithms, exact derivatives; standard
//            errors from the linearised least squares at the minimum, for residuals independent
//            from row to row and alike in size
LW_API lw_status lw_fit_step(lw_fit_kind kind, int n, const double *time, const double *value,
                             double input, double at, lw_fit *out, lw_error *err);

// What the fitted plant gives at each of n times; model: out, n values.
LW_API void lw_fit_response(const lw_fit *fit, double input, double at, int n, const double *time,
                            double *model);

// The plant of a fit, with its delay. It begins at rest: the offset is no part of it.
LW_API lw_status lw_fit_plant(const lw_fit *fit, lw_plant **out, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
