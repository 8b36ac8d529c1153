// The frozen rig: flat, immutable, one arena. Shared by the freezer, the operations, the drivers
// and the readers of a run; nothing outside engine/run sees it.
//
// Words: a cell is one double or one int64 of the state block, found at (offset + e) * width +
// lane. A channel is one input column of a group. A row is one output line of a group. A timer is
// a cell that holds the tick at which its operations become due.
#ifndef LATEWOOD_RUN_FROZEN_H
#define LATEWOOD_RUN_FROZEN_H

#include "base/arena.h"
#include "run/kernel.h"
#include "run/rig.h"

#include <latewood/run.h>

#define LW__LIST_CAPACITY 16 // input changes between two moves of an anchor
#define LW__MAX_PASSES 1000

typedef enum lw__signal_kind {
    LW__SIGNAL_CELL,   // index: double cell that holds the value
    LW__SIGNAL_ROW,    // index: group, part: row
    LW__SIGNAL_SOURCE, // index: source that moves between its changes
    LW__SIGNAL_ADC,    // index: adc, part: channel (reads count, staleness applies)
    LW__SIGNAL_CONSTANT
} lw__signal_kind;

typedef struct lw__reference {
    lw_signal at;
    double constant;
} lw__reference;

// A set of operations: one bit each. `first` is the first word, all of it in most rigs.
typedef struct lw__set {
    uint64_t first;
    uint64_t *words; // n_words; NULL: empty
} lw__set;

// What makes operations of other things due (event.h).
typedef enum lw__event_kind {
    LW__EVENT_NONE,
    LW__EVENT_ADC,       // the end of a conversion
    LW__EVENT_TASK,      // the finish of a task's job
    LW__EVENT_COMPARATOR // an edge of its output
} lw__event_kind;

typedef struct lw__event {
    lw__event_kind kind;
    int index; // of the thing that triggers
} lw__event;

// An input of a group that a held value drives; `delay` ticks later when not 0.
typedef struct lw__drive {
    const struct lw__group *group;
    int channel;
    lw_tick delay;
} lw__drive;

typedef struct lw__drives {
    int n;
    const lw__drive *list;
} lw__drives;

typedef struct lw__row {
    const double *c; // n_x
    const double *d; // n_u
    int state;       // index where the row is exactly one state, else -1
    int feeds;       // some d is not 0
} lw__row;

// Extra states of a group that follow a moving source exactly: ramps and lines (value; slope is a
// channel) or sines (sine and cosine part). Set in closed form at each anchor.
typedef struct lw__generator {
    int source, state, is_sine;
    int slope;                // channel of the slope, -1 for a sine
    const lw_source_def *def; // the source, its instants moved by the delay of the input
    int timer, count;         // integer cell: index of the next change
} lw__generator;

typedef struct lw__channel {
    const char *name; // the plant input, for messages
    lw_tick delay;
    int timer, queue_f, queue_i, capacity; // changes in flight where delay is not 0
} lw__channel;

typedef struct lw__group {
    const char *name, *origin;
    lw__kernel kernel;
    int n_x, n_u, n_rows, n_generators, n_plant_states;
    const double *start;   // n_x
    const double *u_start; // n_u
    const lw__row *rows;
    lw__generator *generators;
    lw__channel *channels;
    lw__set observers; // operations of phase 8 that want to know of a change
    // not one linear system: how it moves (motion.h), what that keeps, who follows its stretches
    const struct lw__motion *motion; // NULL: by the kernel
    void *moves;
    int n_white; // white noises, drawn at instants of the grid (white.h)
    const struct lw__white *white;
    int n_watchers;
    const struct lw__watcher {
        int is_record, index; // of the track or record
    } * watchers;
    // cells
    int x, u_anchor, u_now, list_du;             // doubles
    int anchor, list_n, list_tick, list_channel; // integers
    // the anchor grid
    lw_period grid;
    lw_tick grid_offset;
    const char *grid_of; // what fixed it, for describe
    int grid_adc;        // index of that adc, -1
    int64_t first;       // index of the first instant of the grid at or after zero
    int timer;           // -1: moved by the timer of the adc that fixes the grid
    int count;           // integer cell: next index on the grid
} lw__group;

typedef struct lw__source {
    const lw__source_item *item;
    int held;          // double cell: present value (of moving sources: value at last change)
    int count;         // integer cell: index of the next change
    int timer, moving; // moving: value changes between its changes (ramp, sine, lines)
    uint32_t stream;
    lw__drives drives;
    lw__set observers;
} lw__source;

typedef struct lw__value {
    const char *name;
    int held, job; // double, integer cell
    lw__drives drives;
    double start;
    lw__set observers;
} lw__value;

// A quantiser with its constants formed once.
typedef struct lw__ladder {
    double per_lsb, lsb, lowest, highest; // per_lsb: 1 / lsb where that is exact, else 0
    double lo, hi;                        // range, -inf..inf where there is none
    int bits, floors;
} lw__ladder;

typedef struct lw__adc {
    const lw__adc_item *item;
    int n_channels, n_steps; // steps: sampling instants of one conversion
    const lw__reference *of; // n_channels
    const struct lw__adc_step {
        lw_tick at;
        int channel;
    } * steps;
    lw_period period;
    lw_tick offset, takes;
    int has_clock, index;
    lw__event trigger; // where it has no clock
    int watches_reads; // a second read or an old sample reads otherwise
    int at_once;       // one channel, one sample, at the trigger
    int plain;         // neither noise nor average
    int sporadic;      // its trigger has no period: one that comes while it is busy is passed over
    double gain, bias;
    lw__ladder ladder;
    double inverse_average;
    uint32_t noise_stream;
    // cells: channel values, codes and inputs as read; sums while sampling; inputs under conversion
    int value, code, input, sum, taken;  // doubles, n_channels each
    int sample, sampled_at, step, reads; // integers (reads: n_channels)
    int result;                          // integer: instant of the sample whose value stands
    int timer, done_timer, sample_op, convert_op;
    lw__set after; // operations that the end of conversion makes due
    lw__set observers;
    lw_tick stale_after;
    int log; // record of events, -1
} lw__adc;

typedef struct lw__dac {
    const lw__dac_item *item;
    int asked, limited, held, code, saturated;  // double cells
    int pending, late;                          // double cells: registers before a latch
    int fresh, late_fresh, job, changed_at;     // integer cells
    int sampled, pending_sampled, late_sampled; // of values at the output and in the registers
    int observed;                               // a metric wants to know of each output
    int acts_at_once;                           // a fresh output makes `written` due
    lw__set written;
    int latch_count, timer;
    int tripped;          // integer cell: trips that hold the output; -1: none can
    lw__event latched_by; // an event that latches, in place of a clock
    lw_period latch;
    lw_tick latch_offset, set_up, phase[4];
    int n_phases;
    lw__ladder ladder;
    double slew; // inf: none
    int plain;   // neither slew nor dead band
    int gaps;    // a metric wants the time between outputs
    lw__drives drives;
    int newest;
    lw__set observers;
    int log;
} lw__dac;

typedef struct lw__target {
    int output;
    const lw__dac *dac; // NULL: a value
    const lw__value *value;
} lw__target;

typedef struct lw__latency {
    int n_list;
    const struct lw__latency_step {
        lw_tick ticks; // used where whole is < 0
        int64_t whole; // >= 0: whole samples on the adc's grid
        lw_fate fate;
    } * list;
    const lw_timing *timing;
    double scale; // of the timing, to ticks
    int n_streams, n_state;
    const uint32_t *streams;
    double lost, missed;
    int by_chance; // lost or missed is above 0
    uint32_t lost_stream, missed_stream;
    lw_tick lowest, highest;
} lw__latency;

typedef struct lw__loop {
    const char *what; // "loop", or "task": the law of one (schedule.h)
    const lw__loop_item *item;
    const lw_law_def *law;
    lw_law_step step; // the law's, at hand
    const void *param;
    int n_in, n_out, index;
    const lw__adc *adc;
    const lw__reference *inputs; // law order
    int n_targets;
    const lw__target *targets;
    lw__latency latency;
    int in_phase_1;
    int newest;   // arrival rule of values; dacs have their own
    int observed; // a metric wants its latencies
    int capacity; // power of two
    double nominal;
    // cells
    int state, outs, memory;                  // doubles: law state, outputs, timing state
    int flight_out;                           // doubles: capacity * n_out
    int flight_tick, flight_job, head, count; // integers
    int flight_sampled;
    int stepped_at, missed, jobs, n_lost, n_missed; // integers; stepped_at < 0: never
    int timer;
    lw__set observers;
    int log;
} lw__loop;

typedef struct lw__record {
    const char *name;
    int n_columns;
    const char *const *columns;
    int64_t limit;
    // of a signal at instants
    lw__reference of;
    int is_signal;
    int64_t n;
    const lw_tick *at;
    lw_period every;
    lw_tick from, until;
    int timer, count;
    const lw__group *moving; // of a row of a group with a motion: rows come as it moves
    int served;              // integer cell: index of the next instant without a row
} lw__record;

typedef enum lw__op_kind {
    LW__OP_ANCHOR,  // phase 0
    LW__OP_TURN,    // phase 0: a generator changes its slope
    LW__OP_SOURCE,  // phase 0
    LW__OP_CROSS,   // phase 0: a comparator's input comes to its level
    LW__OP_EDGE,    // phase 0: a delayed edge of a comparator
    LW__OP_COUNT,   // phase 0: an edge of an encoder
    LW__OP_CONVERT, // phase 1, conversions that took time; phase 4 the others
    LW__OP_LOGICAL, // phase 1: writes of a task with logical execution time
    LW__OP_WRITES,  // phase 1: a core's job reaches points that write, unlock or end it
    LW__OP_ARRIVE,  // phase 1: delayed writes of a loop
    LW__OP_DELAYED, // phase 1: delayed changes of a channel
    LW__OP_READS,   // phase 1: a core's job reaches points that lock or read, and on from there
    LW__OP_STEP,    // phase 1 after a conversion that took time, phase 7 otherwise
    LW__OP_TRIP,    // phase 1: forces an output
    LW__OP_RELEASE_TRIP, // phase 1
    LW__OP_LATCH_TRIP,   // phase 2, before the edge latches
    LW__OP_LATCH,        // phase 2
    LW__OP_PWM_STRETCH,  // phase 2: of pulse-width modulated outputs
    LW__OP_PWM_EDGE,     // phase 1
    LW__OP_PWM_WRITTEN,  // phase 1
    LW__OP_SAMPLE,       // phase 3
    LW__OP_RELEASES,     // phase 5: releases of a core's tasks by clock, arrival and slot; stalls
    LW__OP_RELEASE,      // phase 5: release of a task by an event
    LW__OP_DISPATCH,     // phase 6
    LW__OP_READ,         // phase 7: a task reads at its release
    LW__OP_POINTS,       // phase 7: points of a core's job with no work before them
    LW__OP_SEARCH,       // phase 8: where a comparator next comes to its level
    LW__OP_PWM_SEARCH,   // phase 8: where a current next comes to its peak
    LW__OP_COUNT_SEARCH, // phase 8: where an encoder's next edge is
    LW__OP_TRACK,        // phase 8: metrics
    LW__OP_RECORD        // phase 8
} lw__op_kind;

typedef struct lw__op {
    lw__op_kind kind;
    int index; // of the thing it serves
    int part;  // channel of LW__OP_DELAYED, generator of LW__OP_TURN
    int phase;
    const void *thing;
} lw__op;

// Where the signals of one plant stand within its group.
typedef struct lw__plant_place {
    const char *name;
    lw_plant_view view;
    int group, first_row, first_state;
} lw__plant_place;

struct lw_frozen {
    int references;
    lw__arena *arena;
    lw_rig *rig; // keeps laws, timings and names alive
    const char *name;
    lw_tick lasts;

    int n_plants, n_groups, n_sources, n_values, n_adcs, n_dacs, n_loops;
    int n_cores, n_tasks;
    int n_comparators, n_trips;
    lw__plant_place *plants;
    lw__group *groups;
    lw__source *sources;
    lw__value *values;
    lw__adc *adcs;
    lw__dac *dacs;
    int n_pwms;
    struct lw__pwm *pwms;
    lw__loop *loops;
    struct lw__core *cores;
    struct lw__task *tasks;
    struct lw__comparator *comparators;
    struct lw__trip *trips;
    int n_edges;
    struct lw__edges *edges;
    int n_records, n_tracks, n_metrics;
    lw__record *records;
    struct lw__track *tracks;
    struct lw__metric *metrics;

    // operations in their total order; bit b of a set is operation b
    int n_ops, n_words;
    lw__op *ops;
    lw__set phase_8;                 // operations of phase 8
    lw__set no_ops;                  // the empty set
    const struct lw__sprint *sprint; // the rig's one plain loop, NULL where there is none
    int n_timers, n_model_timers;    // those of observers come last
    int due;                         // integer cells, one a timer
    lw__set *timer_ops;              // operations of each timer

    int n_f, n_i; // cells a lane
    int n_slices;
    lw_slice *slices;
    int now;            // integer cell
    int most_x, most_u; // largest sizes, for scratch
    int motion_work;    // doubles of scratch that motions need
};

// Find a signal by name; LW_ERR_NAME gives the nearest.
lw_status lw__signal_find(const lw_frozen *z, const char *name, lw_signal *out, lw_error *err);

#endif
