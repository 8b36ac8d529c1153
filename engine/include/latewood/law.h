// Control laws: a pure step from inputs and state to outputs and next state.
//
// A lw_law is immutable and shared by reference count; all that changes is the caller's `state`.
#ifndef LATEWOOD_LAW_H
#define LATEWOOD_LAW_H

#include <latewood/status.h>
#include <latewood/time.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_LAW_MAX_PORTS 32
#define LW_LAW_MAX_STATES 64

// What a law knows of time when it steps.
typedef struct lw_law_time {
    double now;     // instant of the step [s]
    double nominal; // nominal period T [s]
    double dt;      // sample instant less that of the previous step [s]; nominal at the first step
    int64_t job;    // sample number, counts missed ones
    int64_t missed; // samples missed since the previous step
} lw_law_time;

// out and state are written in place; `in` is read only; the three do not overlap. 0, or nonzero
// after a failure whose message the law keeps for its owner. A step is a function of its arguments
// alone.
typedef int (*lw_law_step)(const void *param, const lw_law_time *time, const double *in,
                           double *state, double *out);

typedef struct lw_law_def {
    const char *kind; // "pi", in words for describe; copied
    int n_in, n_out, n_state;
    const char *const *in_names; // copied
    const char *const *out_names;
    const char *const *state_names;
    const double *start; // n_state, may be NULL (zeros); copied
    lw_law_step step;
    // Same step over `n` lanes laid side by side (element e of lane w at [e * stride + w]), which
    // share `time`; each lane gets the bits that step gives. NULL: a loop over step.
    int (*lanes)(const void *param, const lw_law_time *time, const double *in, double *state,
                 double *out, int n, int stride);
    // Partial derivatives at a point: (n_out + n_state) x (n_in + n_state), row-major; NULL: by
    // differences.
    int (*jacobian)(const void *param, const lw_law_time *time, const double *in,
                    const double *state, double *j);
    const void *param;               // given to step; owned by the law once it is made
    void (*free_param)(void *param); // NULL: nothing to free
    int needs_serial;                // nonzero: step calls back into one interpreter
} lw_law_def;

typedef struct lw_law lw_law;

// Names follow the rule of every name in a rig (see plant.h); unique among the inputs, and unique
// among outputs and states together. On failure the parameter is not taken over.
// Messages name the field only; the caller names the law (lw_error_prefix).
//   errors  LW_ERR_SHAPE a count out of range; LW_ERR_NAME; LW_ERR_DUPLICATE; LW_ERR_NOT_FINITE a
//           start; LW_ERR_ARGUMENT kind, step or names missing
LW_API lw_status lw_law_new(const lw_law_def *def, lw_law **out, lw_error *err);
LW_API lw_law *lw_law_hold(const lw_law *law);
LW_API void lw_law_free(lw_law *law); // NULL is allowed; the last holder frees
// Names and start are the law's copies; start is never NULL there.
LW_API const lw_law_def *lw_law_look(const lw_law *law);

// The ready laws. Sums and products are formed from left to right as written. `out` is held within
// [lo, hi], lo < hi, NAN: no limit; `unlimited` is the same before the limit. Each has lanes and an
// exact jacobian: through an active limit the derivative is zero; at the limit itself it is that of
// the inside.
//   errors  LW_ERR_ARGUMENT names the field, its value and the permitted range; LW_ERR_SHAPE sizes;
//           LW_ERR_NOT_FINITE a coefficient or an entry of a matrix
typedef enum lw_anti_windup {
    LW_WINDUP_NONE,
    LW_WINDUP_CLAMP,           // I is held within [lo, hi] after it is advanced
    LW_WINDUP_PAUSE,           // I stands still while u > hi and its change would be above 0, and
                               // while u < lo and its change would be below 0
    LW_WINDUP_BACK_CALCULATION // I += T (ki e + kb (sat(u) - u)), or with
                               // ki (e + e_prev) / 2 (trapezoidal)
} lw_anti_windup;
typedef enum lw_integration { LW_FORWARD_EULER, LW_TRAPEZOIDAL } lw_integration;

// P, PI, PD and PID. Inputs: wanted, measured; e = wanted - measured. Outputs: out (within the
// limits) and unlimited (u). Per step, T the nominal period or the measured dt (use_measured_dt),
// T > 0:
//   d   = derivative of e (or of -measured: derivative_on_measured), first-order filtered:
//         backward Euler  d = (tf d + (x - x_prev)) / (tf + T), x = e or -measured, tf >= 0;
//         the first step sees x_prev = x, so no kick
//   u   = kp e + I + kd d          (output_first: I is the sum up to the previous step)
//   I  += ki T e                   (forward Euler)  or  ki T (e + e_prev) / 2  (trapezoidal; the
//         first step takes e_prev = e)
//   out = u held within [lo, hi]
// A term that the kind does not have is left out. With update_first I is advanced before u is
// formed; anti-windup then judges the u formed with the old I. An anti-windup needs lo or hi, clamp
// a start within them, back-calculation kb > 0; without it kb is 0. States in this order, only
// those the kind has: integral, previous_error (trapezoidal), derivative, previous_input (x_prev),
// started (0 before the first step, then 1; read as set above 0.5; only where there is a
// previous_error or previous_input).
typedef struct lw_pid {
    double kp, ki, kd;
    double filter; // tf [s]
    double lo, hi; // limits; NAN: none
    lw_anti_windup anti_windup;
    double kb; // back-calculation gain [1/s]
    lw_integration integration;
    int update_first, use_measured_dt, derivative_on_measured;
    double start; // I at the start
} lw_pid;
LW_API lw_pid lw_pid_default(void);
// kind: "p", "pi", "pd" or "pid". Fields of a part that the kind does not have are zero: of the
// integral ki, anti_windup, kb, integration, update_first, start; of the derivative kd, filter,
// derivative_on_measured.
LW_API lw_status lw_law_pid(const char *kind, const lw_pid *p, lw_law **out, lw_error *err);

// Lead (or lag): gain (s + zero) / (s + pole) through Tustin with the nominal period at each step,
// zero and pole in rad/s, pole > 0. Input: error as wanted - measured. Outputs out, unlimited.
//   a = 2/T:  u_k = ((a - p) u_{k-1} + g ((a + z) e_k + (z - a) e_{k-1})) / (a + p)
// u is `unlimited`: the limit acts on `out` only. States previous_error, previous_output (u_{k-1}),
// both 0 at the start.
LW_API lw_status lw_law_lead(double gain, double zero, double pole, double lo, double hi,
                             lw_law **out, lw_error *err);
// One biquad or any proper z-transfer function on e = wanted - measured, powers of z^-1:
//   H(z) = (b0 + b1 z^-1 + ...) / (a0 + a1 z^-1 + ...), a0 != 0; transposed direct form II.
// All coefficients are divided by a0 first; the shorter list is continued with zeros up to
// order = max(n_b, n_a) - 1 <= 64. States s1.. (s_order+1 = 0), 0 at the start; each step
//   u = b0 e + s1;  s_i = s_i+1 + b_i e - a_i u, i = 1..order
// The limit acts on `out` only.
LW_API lw_status lw_law_z_transfer(int n_b, const double *b, int n_a, const double *a, double lo,
                                   double hi, lw_law **out, lw_error *err);
// State feedback: u = N wanted - K measured; n_u x n_x gain, n_u x n_w feed-forward. Inputs:
// wanted (or wanted1..), measured1.. (or measured): a name has no number where it is the only one.
// n_w may be 0, n is then NULL. Outputs: out (or out1..), then unlimited (or unlimited1..). A sum
// begins at 0, adds the terms of N in order, then takes off those of K in order.
LW_API lw_status lw_law_state_feedback(int n_u, int n_x, int n_w, const double *k, const double *n,
                                       double lo, double hi, lw_law **out, lw_error *err);
// Observer with state feedback: a discrete model x^[k+1] = A x^ + B u + L (y - C x^), current
// output u = N wanted - K x^ (limited: the model is given the limited u), states estimate1... (with
// a number also where it is the only one). Inputs wanted.., then measured.. (y); outputs as above.
// v = y - C x^ takes off its terms in order; x^ adds the terms of A, then B, then L, in order.
typedef struct lw_observer {
    int n_x, n_u, n_y, n_w;
    const double *a, *b, *c, *l, *k, *n; // row-major, discrete
    const double *start;                 // n_x, may be NULL
    double lo, hi;
} lw_observer;
LW_API lw_status lw_law_observer(const lw_observer *p, lw_law **out, lw_error *err);

// Laws of sensors. The decimation filter sinc^order behind an ideal modulator: steps once a clock
// of the modulator on the integral of what is measured; the mean over each clock is weighed by the
// convolution of `order` boxes of `ratio` clocks (E. B. Hogenauer, IEEE Trans. ASSP 29 (1981)
// 155-162, from memory). Input integral, output out: new every `ratio` clocks, 0 before.
LW_API lw_status lw_law_sinc(int order, int ratio, lw_law **out, lw_error *err);
// Speed from counts: (counts - counts `window` samples ago) per_count / (window T), over the
// samples there are at the start. Input counts, output out.
LW_API lw_status lw_law_count_speed(int window, double per_count, lw_law **out, lw_error *err);
// Speed by the time between stamped edges: inputs span [s], steps (counts within it) and last [s,
// the last stamp] give steps per_count / span; where more time than a count took has passed since
// the last edge, at most per_count over that time (less than a count was gone in it); 0 where
// zero_after [s] or more has passed, and before there is a span.
LW_API lw_status lw_law_edge_speed(double per_count, double zero_after, lw_law **out,
                                   lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
