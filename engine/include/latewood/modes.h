// Plants that are linear between switchings: in each mode x' = A x + B u + k and y = C x + D u + o,
// and from mode to mode where a condition linear in states and inputs comes true. Converters with
// diodes, end stops, backlash, relays.
//
// Between switchings the plant is carried along exactly, and a switching happens at its real
// instant, not at a tick. Conditions that a change of inputs makes true switch at that instant;
// changes of several inputs at one tick count together.
#ifndef LATEWOOD_MODES_H
#define LATEWOOD_MODES_H

#include <latewood/plant.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_MODES_MAX 16
#define LW_MODES_MAX_SWITCHINGS 48

typedef struct lw_mode {
    const char *name;
    const double *a;        // n_x x n_x
    const double *b;        // n_x x n_u; NULL: zeros
    const double *constant; // n_x; NULL: zeros
    const double *c;        // n_y x n_x
    const double *d;        // n_y x n_u; NULL: zeros
    const double *offset;   // n_y; NULL: zeros
} lw_mode;

// x . states + u . inputs + offset >= 0; a NULL list is zeros.
typedef struct lw_condition {
    const double *x; // n_x
    const double *u; // n_u
    double offset;
} lw_condition;

// From mode `from` (NULL: from every mode but `to`) to `to` as soon as `when` holds, and `only_if`
// where `conditional`; it holds at the start where a mode is entered with it. Where several hold at
// one instant the first declared is taken. With `reset` the states jump: x -> reset x +
// reset_offset.
typedef struct lw_switching {
    const char *from, *to;
    lw_condition when, only_if;
    int conditional;
    const double *reset;        // n_x x n_x; NULL: no jump
    const double *reset_offset; // n_x; NULL: zeros
} lw_switching;

typedef struct lw_modes_def {
    int n_x, n_u, n_y, n_modes, n_switchings;
    const char *const *state_names;
    const char *const *input_names;
    const char *const *output_names;
    const double *start;  // n_x; NULL: zeros
    const lw_mode *modes; // the first is that at time zero
    const lw_switching *switchings;
} lw_modes_def;

// Everything is copied. In a rig the plant connects to linear plants and to others of its kind;
// functions that combine plants refuse it. Copies of it (lw_plant_renamed, ...) are taken.
//   errors  LW_ERR_SHAPE a count out of range; LW_ERR_ARGUMENT a matrix is missing; LW_ERR_NAME no
//           mode of that name; LW_ERR_DUPLICATE; LW_ERR_NOT_FINITE
LW_API lw_status lw_plant_modes(const lw_modes_def *def, lw_plant **out, lw_error *err);

// Ready ones. A switch is closed while `gate` is at or above 0.5. Outputs are states and bear their
// names; `mode` is the place of the mode, from 1.
//   buck_switched   supply, gate, load_current -> current, voltage, mode (on, diode, off, back):
//                   on:    L i' = supply - (rs + rl) i - v      diode: L i' = -vd - rl i - v
//                   off:   i = 0                                back:  L i' = supply + vd - rl i -
//                   v C v' = i - v / R - load_current. back: the switch's own diode feeds the
//                   supply
//   boost_switched  the same inputs -> current, voltage, mode (on, diode, off):
//                   on:    L i' = supply - (rs + rl) i,  C v' = -v / R - load_current
//                   diode: L i' = supply - vd - rl i - v, C v' = i - v / R - load_current
//                   off:   i = 0,                        C v' = -v / R - load_current
// L, C > 0; resistances and the diode's drop vd >= 0; load resistance R > 0, INFINITY: none.
typedef struct lw_switched_converter {
    double inductance, capacitance, load_resistance;
    double winding_resistance, switch_resistance, diode_drop;
} lw_switched_converter;
LW_API lw_switched_converter lw_switched_converter_default(void);
LW_API lw_status lw_plant_buck_switched(const lw_switched_converter *p, lw_plant **out,
                                        lw_error *err);
LW_API lw_status lw_plant_boost_switched(const lw_switched_converter *p, lw_plant **out,
                                         lw_error *err);

// A linear plant whose state `position` is held within lo and hi (INFINITY: no stop there). At a
// stop the state `velocity` turns to -restitution times itself; where that is below `rest_below` it
// becomes 0 and the position rests at the stop, other states going on, until velocity' points away.
//   errors  LW_ERR_NAME no such state; LW_ERR_ARGUMENT restitution outside 0 to 1, rest_below not
//           above 0 where restitution is, a start outside the stops, both stops missing
typedef struct lw_end_stop {
    const char *position, *velocity;
    double lo, hi;
    double restitution;
    double rest_below;
} lw_end_stop;
LW_API lw_status lw_plant_end_stop(const lw_plant *plant, const lw_end_stop *stop, lw_plant **out,
                                   lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
