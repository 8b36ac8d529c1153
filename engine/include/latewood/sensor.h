// Sensors made of the parts of a rig, and white noise on plants.
//
// An encoder or a filter in front of an adc adds parts under names of its own, which `describe`
// shows and records can watch: "axis angle speed", "current analog", "current integral".
#ifndef LATEWOOD_SENSOR_H
#define LATEWOOD_SENSOR_H

#include <latewood/rig.h>

#ifdef __cplusplus
extern "C" {
#endif

// ---- incremental encoder

// Counts are floor((of - zero) counts / turn) at each sample, the same edges both ways; an angle on
// an edge has reached the upper count; no more than 32 bits of them, no index mark. Value in
// counts. Speed by count, where speed_over > 0: the value "NAME speed", turns of the same unit as
// `turn` a second, (counts - counts speed_over samples ago) turn / (counts speed_over T); one count
// more or less is turn / (counts speed_over T). Speed by time, where speed_edges > 0: the edges
// themselves are found on the plant's exact solution and stamped by a clock (rounded down); the
// value "NAME speed" is the way over the time between the last stamp and the one speed_edges
// before (lw_law_edge_speed). Signals: "NAME.span" [s], "NAME.steps" [counts], "NAME.last" [s].
// One of the two speeds only. By time the angle must be a signal of a plant.
typedef struct lw_encoder_def {
    const char *origin, *name;
    const char *of;       // angle
    int counts;           // a turn, all four edges of both tracks counted: 1 to 2^24
    double turn;          // 2 pi, or what the angle goes through in a turn; above 0
    double zero;          // angle of count 0
    lw_period every;      // a sample
    double offset;        // [s] first sample
    int speed_over;       // samples; 0: no speed by count
    int speed_edges;      // 1 to 64; 0: no speed by time
    lw_period edge_clock; // of the stamps; {0, 1}: they are exact
    double zero_after;    // [s] without an edge after which the speed is 0; default 0.1
} lw_encoder_def;

LW_API lw_encoder_def lw_encoder_default(void);
LW_API lw_status lw_rig_add_encoder(lw_rig *rig, const lw_encoder_def *def, lw_error *err);

// ---- what stands before an adc

typedef enum lw_analog_kind {
    LW_ANALOG_NONE,
    LW_ANALOG_RC,
    LW_ANALOG_BUTTERWORTH,
    LW_ANALOG_BESSEL
} lw_analog_kind;

// Analog: a low pass of unit gain at rest whose gain is 1/sqrt 2 at cut_off; propagated exactly,
// with the plant; it starts at 0. RC: equal stages, each without load on the one before.
// Butterworth: S. Butterworth (1930); Bessel: W. E. Thomson (1949), W. H. Kautz (1954), all from
// memory.
// Decimation: an ideal modulator, which gives the exact mean of the signal over each of its clocks,
// without the noise it would shape, then sinc^order; a value every `ratio` clocks. The adc reads it
// one picosecond after it is ready. Group delay: order (ratio - 1) / 2 clocks of the filter, and
// half a clock of the mean.
typedef struct lw_adc_front {
    lw_analog_kind analog;
    int analog_order; // 1 to 8
    double cut_off;   // [Hz]
    int sinc_order;   // 1 to 4; 0: no decimation
    int ratio;        // 2 to 1024
    lw_period clock;  // of the modulator
} lw_adc_front;

// Add an adc of one channel with what stands before it. With decimation its clock is that of the
// filter: neither every, after, offset, nor average may be stated.
LW_API lw_status lw_rig_add_adc_behind(lw_rig *rig, const lw_adc_def *def,
                                       const lw_adc_front *front, lw_error *err);

// ---- white noise

// White noise w on a plant input, on top of what drives it: E[w(t) w(s)] = density delta(t - s),
// density in (unit of the input)^2 s, two-sided. Its effect on the state is drawn at each anchor of
// the group: normal, with the exact covariance of the anchor's step (C. F. Van Loan, IEEE Trans.
// Automatic Control 23 (1978) 395-404), stream "NAME#i" for component i, job the number of the
// anchor. Between anchors the state goes on without noise: metrics of such a group are those of the
// state at anchors. Every adc on the group must sample at its anchors, and nothing else may look at
// it in between; held noise (a source) serves elsewhere.
typedef struct lw_noise_def {
    const char *origin, *name;
    const char *on; // plant input
    double density; // >= 0
} lw_noise_def;

LW_API lw_status lw_rig_add_noise(lw_rig *rig, const lw_noise_def *def, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
