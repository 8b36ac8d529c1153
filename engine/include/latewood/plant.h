// Plants: linear ones, x' = A x + B u, y = C x + D u, and flows, x' = f(t, x, u), with named
// inputs, outputs and states.
//
// A lw_plant is built once and then only read. Matrices are row-major. Names follow the rule of
// every name in a rig: UTF-8, 1 to 200 bytes, no control characters, no dot; unique among the
// inputs, and unique among outputs and states together. Where an output simply is a state, both
// may carry the same name.
#ifndef LATEWOOD_PLANT_H
#define LATEWOOD_PLANT_H

#include <latewood/status.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_PLANT_MAX_STATES 64
#define LW_PLANT_MAX_PORTS 32

typedef struct lw_plant lw_plant;

// Sizes and borrowed views of a plant's parts; valid as long as the plant.
typedef struct lw_plant_view {
    int n_x, n_u, n_y;
    const double *a;     // n_x x n_x
    const double *b;     // n_x x n_u
    const double *c;     // n_y x n_x
    const double *d;     // n_y x n_u
    const double *start; // n_x, state at time zero
    const double *delay; // n_u, input delays [s], >= 0
    const char *const *state_names;
    const char *const *input_names;
    const char *const *output_names;
    const struct lw_flow_def *flow; // NULL: linear. Of a flow A, B, C and D say nothing; names and
                                    // start are those above
    const struct lw_modes_def *modes; // not NULL: linear between switchings (modes.h); the matrices
                                      // above are those of the first mode
} lw_plant_view;

LW_API lw_plant_view lw_plant_look(const lw_plant *plant);
LW_API void lw_plant_free(lw_plant *plant);

// State space. Any name list may be NULL: states x1.., inputs in or in1.., outputs out or out1...
// (without number if there is one). d and start may be NULL (zeros). n_x may be 0 (a gain), n_u
// too; a plant has a state or an output.
//   errors  LW_ERR_SHAPE sizes out of range; LW_ERR_NOT_FINITE names matrix, row and column, or
//           the state whose start it is; LW_ERR_NAME, LW_ERR_DUPLICATE
LW_API lw_status lw_plant_state_space(int n_x, int n_u, int n_y, const double *a, const double *b,
                                      const double *c, const double *d, const double *start,
                                      const char *const *state_names,
                                      const char *const *input_names,
                                      const char *const *output_names, lw_plant **out,
                                      lw_error *err);

// A polynomial in s, highest power first.
typedef struct lw_poly {
    int n;
    const double *c;
} lw_poly;

// Transfer functions: entry (i, j) of the n_y x n_u arrays `num` and `den` is output i from input
// j; each must be proper. States x1, x2, ... are column by column, within a column row by row; all
// start at 0. Where the denominators of a column are equal, coefficient by coefficient, its entries
// share their states; otherwise each brings its own. An entry of numerator 0 has no states and its
// denominator counts for nothing.
//   form    controllable canonical: with s^n + a1 s^(n-1) + ... + an the monic denominator and
//           b0 s^n + ... + bn the numerator by the same divisor,
//               x1' = -a1 x1 - ... - an xn + u,  x(k+1)' = xk,  y = sum (bk - b0 ak) xk + b0 u,
//           each state divided by a power of two: x1 by 1, the others such that A is balanced
//   errors  LW_ERR_ARGUMENT improper ("degree 3 over degree 2"), leading zero, empty;
//           LW_ERR_NOT_FINITE; LW_ERR_SHAPE more states than a plant may have
LW_API lw_status lw_plant_transfer(int n_y, int n_u, const lw_poly *num, const lw_poly *den,
                                   const char *const *input_names, const char *const *output_names,
                                   lw_plant **out, lw_error *err);

// Zeros, poles (complex as re, im pairs, conjugates both present) and gain: k prod(s - z) /
// prod(s - p), in -> out. Realised as a chain of real first- and second-order sections in the order
// of `poles`, so that repeated and widely spread poles keep their accuracy: A is block triangular
// and holds the poles themselves.
//   errors  LW_ERR_ARGUMENT more zeros than poles, a conjugate that is missing;
//           LW_ERR_NOT_FINITE; LW_ERR_SHAPE
LW_API lw_status lw_plant_zeros_poles(int n_zeros, const double (*zeros)[2], int n_poles,
                                      const double (*poles)[2], double gain, lw_plant **out,
                                      lw_error *err);

// Ready plants. All parameters in SI; LW_ERR_ARGUMENT names the parameter, its value and range.
// Outputs are states and bear their names. Resistances, frictions, stiffness and damping of a shaft
// are >= 0, inductances and inertias > 0; constants and gains may have either sign.
//   integrator    in -> out: gain / s
//   first order   in -> out: gain / (time_constant s + 1), time_constant > 0
//   second order  in -> out: gain w^2 / (s^2 + 2 damping w s + w^2), w > 0 [rad/s];
//                 states out, rate
//   winding       voltage -> current: L i' = v - R i, R >= 0, L > 0
//   DC machine    voltage, load_torque -> current, speed:
//                 L i' = v - R i - ke w;  J w' = kt i - friction w - load_torque
//   two-mass      voltage, load_torque -> current, motor_speed, twist, load_speed, load_angle:
//   drive         as DC machine on the motor side; twist' = wm - wl;
//                 Jm wm' = kt i - fm wm - k twist - c (wm - wl)
//                 Jl wl' = k twist + c (wm - wl) - fl wl - load_torque;  load_angle' = wl
// back_emf_constant NAN means equal to the torque constant.
typedef struct lw_dc_machine {
    double resistance, inductance, torque_constant, back_emf_constant, inertia, friction;
} lw_dc_machine;
typedef struct lw_two_mass_drive {
    double resistance, inductance, torque_constant, back_emf_constant;
    double motor_inertia, load_inertia, stiffness, damping, motor_friction, load_friction;
} lw_two_mass_drive;

LW_API lw_status lw_plant_integrator(double gain, lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_first_order(double gain, double time_constant, lw_plant **out,
                                      lw_error *err);
LW_API lw_status lw_plant_second_order(double gain, double natural_frequency, double damping,
                                       lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_winding(double resistance, double inductance, lw_plant **out,
                                  lw_error *err);
LW_API lw_status lw_plant_dc_machine(const lw_dc_machine *p, lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_two_mass_drive(const lw_two_mass_drive *p, lw_plant **out, lw_error *err);

// A plant that is an ordinary differential equation. Its functions are pure: the same arguments
// give the same numbers, and nothing else changes. Times are seconds since the start of the run,
// inputs are held or move smoothly between two calls of `happened`. Each function returns 0;
// anything else ends the run with LW_ERR_LAW.
//
//   x   n_x states, then n_modes modes, numbers that stand still but for `happened`, then
//       n_switches sides: -1 or 1, where each switching stands (0: at zero so far). They change at
//       the ends of steps only: a flow that jumps takes its branch from them, so that it is smooth
//       within a step
//   u   n_u inputs
//   flow      dx: n_x derivatives
//   outputs   y: n_y outputs. Of u it may read the inputs in `direct` only; the others hold NAN
//             there. An output that bears the name of a state is that state, whatever is put in its
//             place. NULL: all outputs are such.
//   switches  g: n_switches numbers, continuous in t and x. Where one changes its sign the flow may
//             have a kink or a jump: the instant is found and a step ends there. NULL where
//             n_switches is 0. Without them error control alone sees a kink, in many small steps.
//   jacobian  j: n_x x n_x, row-major, of the flow by x; for the stiff method. NULL: by differences
//   happened  switching `which` has passed through zero, rising (1) or falling (0), on its way or
//   by
//             a jump of an input or of the state: may change states and modes. NULL: nothing
//             changes by itself.
//   method    Dormand-Prince 5(4) (J. Dormand, P. Prince, J. Comp. Appl. Math. 6 (1980) 19-26) with
//             step-size control; each step's error is held within atol + rtol |x|, state by state.
//             A stiff flow is noticed and goes on by Radau IIA of order 5 (E. Hairer, G. Wanner,
//             Solving Ordinary Differential Equations II (1996) IV.8); see engine/ode/ode.h.
typedef struct lw_flow_def {
    int n_x, n_u, n_y;
    const char *const *state_names; // all names, start and atol are copied
    const char *const *input_names;
    const char *const *output_names; // NULL where outputs is NULL: all states, n_y is n_x then
    const double *start;             // n_x, may be NULL (zeros)
    int (*flow)(void *context, double t, const double *x, const double *u, double *dx);
    int (*outputs)(void *context, double t, const double *x, const double *u, double *y);
    uint32_t direct; // bit i: some output depends on input i without delay; all by default
    int n_switches;
    int (*switches)(void *context, double t, const double *x, const double *u, double *g);
    int (*jacobian)(void *context, double t, const double *x, const double *u, double *j);
    int n_modes;
    const double *modes; // n_modes, at time zero; may be NULL (zeros)
    int (*happened)(void *context, double t, double *x, const double *u, int which, int rising);
    double rtol;        // 1e-8 by default; permitted 1e-13 to 0.1
    const double *atol; // n_x, above 0, in the unit of each state; NULL: rtol / 100 each
    void *context;      // given to every function; owned by the plant once it is made
    void (*free_context)(void *context); // NULL: nothing to free
    int needs_serial;                    // nonzero: calls back into one interpreter
} lw_flow_def;

#define LW_FLOW_MAX_SWITCHES 64
#define LW_FLOW_MAX_MODES 16

LW_API lw_flow_def lw_flow_default(void);
// Make a plant of it. In a rig it connects like any other; functions of this header that combine
// plants refuse it. lw_plant_delayed, lw_plant_started and lw_plant_renamed take it.
//   errors  LW_ERR_SHAPE a count out of range; LW_ERR_ARGUMENT flow, names or switches missing,
//           rtol, atol; LW_ERR_NOT_FINITE a start or mode; LW_ERR_NAME, LW_ERR_DUPLICATE names. On
//           failure the context is not taken over.
LW_API lw_status lw_plant_flow(const lw_flow_def *def, lw_plant **out, lw_error *err);

// A copy of `plant` with an input delay of `seconds` >= 0 added to input `input`, with the state
// at time zero replaced (n values), or with inputs, outputs, states renamed (NULL list: keep).
//   errors  LW_ERR_NAME no such input, with the nearest; LW_ERR_ARGUMENT a delay that is negative
//           or beyond the range of time; LW_ERR_SHAPE n is not the number of states
LW_API lw_status lw_plant_delayed(const lw_plant *plant, const char *input, double seconds,
                                  lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_started(const lw_plant *plant, int n, const double *start, lw_plant **out,
                                  lw_error *err);
LW_API lw_status lw_plant_renamed(const lw_plant *plant, const char *const *state_names,
                                  const char *const *input_names, const char *const *output_names,
                                  lw_plant **out, lw_error *err);

// Composition by signal names. `parts`, 1 to 64, carry a name each; a port is "part.port".
//   links    output port -> input port, sign +1 or -1; several links may feed one input (summed),
//            each pair of ports once
//   inputs   external inputs: a name and the input port it drives; one external input may drive
//            several ports (repeat the name) and may be summed with links
//   outputs  external outputs: a name and the output port it shows; up to 4 LW_PLANT_MAX_PORTS
// An input port that nothing feeds is 0. States are named "part_state", in the order of the parts;
// inputs are in the order in which their names first stand. An algebraic loop is LW_ERR_LOOP and
// names its signals in order:
// `signals depend on themselves without delay: a.out -> b.in -> b.out -> a.in`.
//
// Input delays: a delay on an external input is kept; a delay on a linked input moves upstream to
// the external inputs when the chain is open, otherwise LW_ERR_LOOP names the part and input
// (a delay inside continuous feedback). The parts it moves past are described late: their states
// are those of that much earlier, exact if these parts rest until time zero (their start must be
// 0, and what drives them should be). A part as a whole is late by one delay, and not at all if an
// output shows it or no link leads on from it; an external input has one delay: where two would be
// needed, LW_ERR_ARGUMENT names both.
typedef struct lw_part {
    const char *name;
    const lw_plant *plant;
} lw_part;
typedef struct lw_link {
    const char *from, *to;
    double sign;
} lw_link;
typedef struct lw_port {
    const char *name, *port;
} lw_port;

LW_API lw_status lw_plant_connect(int n_parts, const lw_part *parts, int n_links,
                                  const lw_link *links, int n_inputs, const lw_port *inputs,
                                  int n_outputs, const lw_port *outputs, lw_plant **out,
                                  lw_error *err);

// Single input and output shorthands: b after a; a + sign b; a / (1 - sign a b), sign -1 being
// negative feedback. Ports are named in and out, states as in a connection of parts "a" and "b".
LW_API lw_status lw_plant_series(const lw_plant *a, const lw_plant *b, lw_plant **out,
                                 lw_error *err);
LW_API lw_status lw_plant_parallel(const lw_plant *a, const lw_plant *b, double sign,
                                   lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_feedback(const lw_plant *a, const lw_plant *b, double sign,
                                   lw_plant **out, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
