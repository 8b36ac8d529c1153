// Pulse-width modulated outputs: what loops and tasks write sets the width of pulses.
//
// A carrier of fixed frequency runs from the valley (the start of its period) on. What is written
// is kept in a register, as of a dac, and taken over at the carrier's reload instants.
//
//   trailing  high from the start of the period for a share d of it (a rising sawtooth)
//   leading   high for the last share d of the period
//   centre    a triangle, lowest at the valley, highest in the middle (the peak): high while it is
//             below d, that is for d/2 of the period from the valley on, and for d/2 before the
//             next
//
// Averaged, the output is the mean of the pulses, held from reload to reload. Switched, it has
// their edges, each at the tick nearest to its instant, and is exact between them. In one stretch
// (a period; of a triangle, half of one) a leg switches once at most: a value written at once that
// would have switched already acts now, one that would switch back acts in the next stretch.
//
// Peak-current control: the leg goes high at each valley, and low at the first tick at or after the
// instant at which current >= wanted - slope t, t counted from the valley; not within the blanking
// time (what is true at its end switches then), never within the first tick, and at the latest at
// the greatest share. Nobody writes to it.
//
// Signals: those of a dac ("bridge", "bridge.asked", "bridge.saturated", ...: what was asked for
// and taken over), "bridge.level", the output itself, and "bridge.duty": the share for which the
// (first) leg is high, before dead time; under peak-current control that of the last pulse.
#ifndef LATEWOOD_PWM_H
#define LATEWOOD_PWM_H

#include <latewood/rig.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef enum lw_pwm_shape { LW_PWM_TRAILING, LW_PWM_LEADING, LW_PWM_CENTRE } lw_pwm_shape;

// With s the supply: a half bridge gives 0 or s; a full bridge switched bipolar -s or s; unipolar,
// its two legs compared with the value and its negative, -s, 0 or s, with twice as many edges.
typedef enum lw_pwm_bridge { LW_PWM_HALF, LW_PWM_BIPOLAR, LW_PWM_UNIPOLAR } lw_pwm_bridge;

typedef enum lw_pwm_reload {
    LW_PWM_VALLEY,
    LW_PWM_PEAK, // of a triangle
    LW_PWM_BOTH, // of a triangle
    LW_PWM_AT_ONCE
} lw_pwm_reload;

typedef struct lw_pwm_peak {
    const char *current;   // signal of a plant; NULL: no peak-current control
    const char *wanted_of; // signal, read all the time; NULL: the number
    double wanted;
    double blanking; // [s]
    double slope;    // of the compensation, at least 0 [unit of current / s]
    double most;     // greatest share, above 0, at most 1 (default 1)
} lw_pwm_peak;

typedef struct lw_pwm_def {
    const char *origin, *name;
    const char *to; // plant input
    lw_period carrier;
    double offset; // [s] first valley, 0 <= offset < one period
    lw_pwm_shape shape;
    lw_pwm_bridge bridge;
    lw_pwm_reload reload;
    int averaged;
    double supply;         // above 0
    const char *supply_of; // signal read at the start of each stretch in its place, or NULL
    int writes_level;      // 0: a share is written, 0..1 (half) or -1..1; 1: the wanted mean level
    int64_t counts;        // steps of the pulse width in a period; 0: none
    double least_pulse;    // [s] shorter pulses are left out, shorter gaps closed
    double dead_time;      // [s] both switches of a leg off at each change: see `current`
    const char *current;   // signal, out of the output: its sign says which diode conducts in the
                           // dead time; needed where dead_time is not 0
    double start;          // as written
    int on_missed;         // as of a dac
    double missed;
    lw_pwm_peak peak; // trailing; half or bipolar
} lw_pwm_def;

LW_API lw_pwm_def lw_pwm_default(void);
//   errors  LW_ERR_NAME, LW_ERR_DUPLICATE, LW_ERR_ARGUMENT field, value and range
LW_API lw_status lw_rig_add_pwm(lw_rig *rig, const lw_pwm_def *def, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
