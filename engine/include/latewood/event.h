// What a plant sets off by itself: comparators, and trips that force an output.
//
// A comparator watches a plant. Its instants are found on the exact continuous solution; what it
// sets off takes the first tick at or after; a condition that a jump at t makes true counts at
// t + 1 tick. Its output, 0 or 1, is a signal of the rig by the comparator's name; the edge chosen
// triggers adcs, tasks and latches that name it (`after`, `released_by`, `latch`).
#ifndef LATEWOOD_EVENT_H
#define LATEWOOD_EVENT_H

#include <latewood/rig.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef enum lw_edge { LW_EDGE_RISES, LW_EDGE_FALLS, LW_EDGE_BOTH } lw_edge;

// Output 1 from where `of` reaches the level, 0 from where it is back by `hysteresis`. With `below`
// it reaches the level from above. `of` or `against` is a signal of a plant; the other may be
// another signal of a plant (both plants are then propagated together), a source, a value, an adc,
// a dac, a law's output.
typedef struct lw_comparator_def {
    const char *origin, *name;
    const char *of;
    const char *against; // signal that is the level; NULL: `level`
    double level;        // used where against is NULL
    int below;           // 0: output 1 at and above the level; 1: at and below
    double hysteresis;   // >= 0
    lw_edge edge;        // of the output: which one triggers others
    int start;           // output at time zero: 0, 1, or -1: what the plant says then
    double delay;        // [s] from the crossing to the output, >= 0
    double blanking;     // [s] after a crossing in which it looks at nothing, >= 0
} lw_comparator_def;

LW_API lw_comparator_def lw_comparator_default(void);
//   errors  LW_ERR_NAME, LW_ERR_DUPLICATE, LW_ERR_ARGUMENT field, value and range
LW_API lw_status lw_rig_add_comparator(lw_rig *rig, const lw_comparator_def *def, lw_error *err);

// How long a trip holds the output. But for LW_TRIP_RUN it never ends while the comparator's output
// is still 1.
typedef enum lw_trip_until {
    LW_TRIP_CLEAR, // the comparator's output falls
    LW_TRIP_LATCH, // the output's next latch edge; of a pwm the next period
    LW_TRIP_TIME,  // `time` after it began
    LW_TRIP_RUN    // the end of the run
} lw_trip_until;

// From the rise of comparator `by` on, `output` takes the value `to`: at once, past range, slew, dead
// band and quantiser of a dac, whatever the legs of a pwm are at (its level then, in the plant's
// unit). Writes meanwhile are kept in its register; when the trip ends, a dac takes the last of
// them, a pwm what its legs are at by then.
typedef struct lw_trip_def {
    const char *origin, *name;
    const char *by, *output;
    double to;
    lw_trip_until until;
    double time; // [s]
} lw_trip_def;

LW_API lw_trip_def lw_trip_default(void);
LW_API lw_status lw_rig_add_trip(lw_rig *rig, const lw_trip_def *def, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
