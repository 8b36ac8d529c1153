// A rig: the model of plants, converters, loops and their timing, described once and then frozen.
//
// A rig only collects definitions; each `add` copies what it is given and checks what can be
// checked alone. lw_rig_freeze (run.h) resolves names and checks the whole. One namespace holds
// every name of a rig; a name is UTF-8, 1 to 200 bytes, no control characters, no dot.
// `origin` of a definition ("mount.lua:14", may be NULL) begins each message about it.
//
// Signals, wherever one is read or recorded:
//   "axis.current"            output or state of a plant
//   "speed wanted"            a source, a value
//   "current"                 an adc's value; "current.code"; with several channels "current.1",
//                             "current.1.code"
//   "bridge"                  a dac's output; "bridge.asked" before range, slew, dead band and
//                             quantisation, "bridge.limited" after range, "bridge.code",
//                             "bridge.saturated" (0 or 1)
//   "speed loop.out"          a law's outputs and states by name, as of its last step
#ifndef LATEWOOD_RIG_H
#define LATEWOOD_RIG_H

#include <latewood/law.h>
#include <latewood/plant.h>
#include <latewood/status.h>
#include <latewood/time.h>
#include <latewood/timing.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_rig lw_rig;

LW_API lw_status lw_rig_new(const char *name, lw_rig **out, lw_error *err);
LW_API lw_rig *lw_rig_hold(lw_rig *rig);
LW_API void lw_rig_free(lw_rig *rig);

// ---- plants and what drives their inputs

LW_API lw_status lw_rig_add_plant(lw_rig *rig, const char *origin, const char *name,
                                  const lw_plant *plant, lw_error *err);
// Plant input `to` ("axis.load_torque") follows `from`: a source, a value or another plant's
// output. Plants joined by connections form one group and are propagated together. One driver an
// input; an input without driver is zero.
LW_API lw_status lw_rig_connect(lw_rig *rig, const char *origin, const char *from, const char *to,
                                lw_error *err);

// ---- sources: wanted values, disturbances, noise

typedef enum lw_source_kind {
    LW_SOURCE_CONSTANT, // level
    LW_SOURCE_STEP,     // before, from `at` on: level
    LW_SOURCE_RAMP,     // before until `at`, then before + slope (t - at), no further than `level`
                        // where that is not NAN
    LW_SOURCE_SINE,     // before + level sin(2 pi frequency (t - at) + phase) from `at` on
    LW_SOURCE_CHIRP,    // as sine, frequency moving linearly to frequency_end over `sweep`, then
                        // staying; held on the clock `every`
    LW_SOURCE_PULSES,   // before; from `at` on: level for `width` in each `period`
    LW_SOURCE_TABLE,    // value[i] from time[i] on (held), or straight lines between (linear);
                        // outside the first or last value
    LW_SOURCE_NOISE,    // before + level * standard normal (or uniform in +-1), a new draw each
                        // `every`; stream "name.noise"
    LW_SOURCE_FUNCTION  // function(t), held on the clock `every`
} lw_source_kind;

typedef struct lw_source_def {
    const char *origin, *name;
    lw_source_kind kind;
    double before, level, slope, frequency, frequency_end, phase;
    double at, sweep, width; // [s]
    lw_period period;        // of pulses
    lw_period every;         // clock of chirp, noise and function
    int uniform;             // of noise
    int linear;              // of tables
    int n;                   // of tables
    const double *time, *value;
    int (*function)(void *context, double t, double *value); // nonzero: failed
    void *context;
    void (*free_context)(void *context); // taken over by the rig when the add succeeds
} lw_source_def;

LW_API lw_source_def lw_source_default(lw_source_kind kind);
LW_API lw_status lw_rig_add_source(lw_rig *rig, const lw_source_def *def, lw_error *err);

// A variable that loops share.
LW_API lw_status lw_rig_add_value(lw_rig *rig, const char *origin, const char *name, double start,
                                  lw_error *err);

// ---- adc

typedef enum lw_rounding { LW_ROUND_NEAREST, LW_ROUND_FLOOR } lw_rounding;

// LSB = (hi - lo) / 2^bits; code = round(y / LSB), ties to even (or floor), held within lo / LSB
// and hi / LSB - 1. lo is a whole number of LSB. bits 0: no quantisation, code NAN, and range
// (where given) still limits.
typedef struct lw_quantiser {
    int bits;      // 0 to 32
    double lo, hi; // NAN: no range (then bits is 0)
    lw_rounding rounding;
} lw_quantiser;

LW_API lw_quantiser lw_quantiser_default(void);
LW_API lw_status lw_quantiser_check(const lw_quantiser *q, lw_error *err);
// The quantised value of y; *code (may be NULL) its code, NAN where bits is 0.
LW_API double lw_quantise(const lw_quantiser *q, double y, double *code);

#define LW_ADC_MAX_CHANNELS 16

typedef struct lw_adc_def {
    const char *origin, *name;
    int n_channels;        // 1 to 16
    const char *const *of; // signal of each channel
    const double *skew;    // [s] sample instant after the trigger; may be NULL (zeros)
    lw_period every;       // own clock; num 0: triggered
    double offset;         // [s] first sample, 0 <= offset
    const char *after;     // triggered by what has this name (every.num == 0): the end of an adc's
                           // conversion, of a task's job, the edge of a comparator
    double nominal;        // [s] period to reckon with where the trigger has none; NAN: not stated.
                           // A trigger that comes during a conversion is then passed over
    double takes;          // [s] trigger to end of conversion, >= last sample, <= period
    int average;           // samples averaged, >= 1
    double average_every;  // [s] spacing
    lw_quantiser quantiser;
    double gain, bias;  // y -> gain y + bias, before noise and quantisation
    double noise;       // standard deviation of normal noise a sample; stream "name.noise"
    double start;       // value before the first conversion
    double reread;      // what a second read of one sample gives; NAN: the sample again
    double stale_after; // [s] a sample older than this gives `stale`; NAN: never
    double stale;
    const char *note; // a line more for `describe`; may be NULL
} lw_adc_def;

LW_API lw_adc_def lw_adc_default(void);
LW_API lw_status lw_rig_add_adc(lw_rig *rig, const lw_adc_def *def, lw_error *err);

// ---- dac

typedef struct lw_dac_def {
    const char *origin, *name;
    const char *to;         // plant input, or NULL
    lw_period latch;        // num 0: changes when written
    const char *latched_by; // or: latched at each trigger instant of this adc's own clock, at each
                            // chosen edge of this comparator, at each finish of this task
    double phase[4];        // [s] latch instants within a latch period
    int n_phases;           // 1 to 4 with a latch
    double set_up;          // [s] a value written later than this before an edge waits for the next
    lw_quantiser quantiser;
    double slew;      // largest change a second since the last output change; NAN: none
    double dead_band; // |v| below this gives 0; 0: none
    double start;     // output before the first write, not quantised
    int on_missed;    // 0 keep, 1 output `missed` when the loop that writes here misses a sample
    double missed;
} lw_dac_def;

LW_API lw_dac_def lw_dac_default(void);
LW_API lw_status lw_rig_add_dac(lw_rig *rig, const lw_dac_def *def, lw_error *err);

// ---- a loop whose latency is stated directly

typedef enum lw_fate {
    LW_FATE_WRITTEN,
    LW_FATE_LOST,  // stepped, not written
    LW_FATE_MISSED // not stepped; job number and missed count advance
} lw_fate;

typedef enum lw_arrival {
    LW_ARRIVAL_ORDER, // the last to arrive stands
    LW_ARRIVAL_NEWEST // a value older than the one standing is dropped
} lw_arrival;

typedef struct lw_latency_entry {
    double value; // [s], or in samples where in_samples
    int in_samples;
    lw_fate fate;
} lw_latency_entry;

// Sample k of the triggering adc, taken at t: the law reads and steps at the end of conversion;
// its outputs are written at t + latency(k), which includes the conversion. Whole samples fall on
// the adc's own grid. Either `list` (entry k mod n; one entry: constant) or `timing`.
typedef struct lw_latency {
    int n_list;
    const lw_latency_entry *list;
    const lw_timing *timing; // stream "name.latency"
    int timing_in_samples;   // the timing is in periods, not in seconds
    double lost, missed;     // chances a sample; streams "name.lost", "name.missed"
    lw_arrival arrival;
    int capacity; // writes in flight; 0: chosen from the largest latency
} lw_latency;

// One input of the law: a signal, or a constant where signal is NULL.
typedef struct lw_wire {
    const char *port; // name of the law's input or output
    const char *signal;
    double constant;
} lw_wire;

typedef struct lw_loop_def {
    const char *origin, *name;
    const lw_law *law;
    const char *on; // adc whose end of conversion steps the law; NULL: the first adc among inputs
    int n_inputs;
    const lw_wire *inputs;
    int n_outputs;
    const lw_wire *outputs; // law output -> dac or value
    lw_latency latency;
} lw_loop_def;

LW_API lw_loop_def lw_loop_default(void);
LW_API lw_status lw_rig_add_loop(lw_rig *rig, const lw_loop_def *def, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
