// Frozen rigs and their runs.
//
// A frozen rig is immutable: one arena, shared by reference. All mutable state of a run is one
// flat block of doubles and 64-bit integers in named slices, laid out for `width` runs side by
// side; copying the block copies the runs.
#ifndef LATEWOOD_RUN_H
#define LATEWOOD_RUN_H

#include <latewood/rig.h>
#include <latewood/watch.h>

#ifdef __cplusplus
extern "C" {
#endif

typedef struct lw_frozen lw_frozen;

// Validate, copy and flatten. `watch` may be NULL. `lasts` is the length of a run [ticks]: the end
// of windows and records that state none. On failure *out is untouched and err names origin,
// thing, field, value and range.
LW_API lw_status lw_rig_freeze(const lw_rig *rig, const lw_watch *watch, lw_tick lasts,
                               lw_frozen **out, lw_error *err);
LW_API lw_frozen *lw_frozen_hold(lw_frozen *frozen);
LW_API void lw_frozen_free(lw_frozen *frozen);
LW_API lw_tick lw_frozen_lasts(const lw_frozen *frozen);

// The rig in words, one line at a time (no newline), in order: what it is made of, defaults taken,
// roundings of more than a thousandth of a tick, write/read pairs at one tick and who sees what,
// how each group is propagated. Stops early if `line` returns nonzero.
LW_API void lw_frozen_describe(const lw_frozen *frozen,
                               int (*line)(void *context, const char *text), void *context);

// ---- the state block

typedef enum lw_slice_kind {
    LW_SLICE_PLANT,
    LW_SLICE_LAW,
    LW_SLICE_HELD,
    LW_SLICE_IN_FLIGHT,
    LW_SLICE_SCHEDULE,
    LW_SLICE_METRIC
} lw_slice_kind;

// Element e of lane w stands at cell (offset + e) * width + w of the block's integers or doubles.
typedef struct lw_slice {
    const char *owner; // name of the thing it belongs to
    const char *name;  // what it holds
    const char *unit;  // "" where none is known
    lw_slice_kind kind;
    int is_integer;
    int64_t offset, count;
} lw_slice;

LW_API int lw_frozen_n_slices(const lw_frozen *frozen);
LW_API lw_slice lw_frozen_slice(const lw_frozen *frozen, int index);

// ---- runs

typedef struct lw_run lw_run;

#define LW_RUN_MAX_WIDTH 64

// `width` runs side by side with numbers first_run, first_run + 1, ...
LW_API lw_status lw_run_new(lw_frozen *frozen, int width, uint64_t seed, uint64_t first_run,
                            lw_run **out, lw_error *err);
LW_API void lw_run_free(lw_run *run);
// Back to time zero with other numbers; records are emptied.
LW_API void lw_run_restart(lw_run *run, uint64_t seed, uint64_t first_run);

// Advance every lane to `until`, handling every event with time <= until; LW_TICK_MAX at most.
//   returns  LW_OK       all lanes reached `until`
//            LW_STOPPED  some lanes ended earlier; lw_run_status tells which and why
LW_API lw_status lw_run_advance(lw_run *run, lw_tick until);
// No releases of tasks from now on; go on in each lane until every job has finished. Jobs that
// finishing jobs release are finished as well. Lanes end at different instants.
//   returns  as lw_run_advance; LW_STOPPED also where a job can never finish
LW_API lw_status lw_run_drain(lw_run *run);
// Close metrics' windows at the present time. Further advancing is an error.
LW_API void lw_run_finish(lw_run *run);

LW_API lw_tick lw_run_now(const lw_run *run, int lane);
// LW_OK, or why the lane ended; err (may be NULL) receives the message with instant and signal.
LW_API lw_status lw_run_status(const lw_run *run, int lane, lw_error *err);
LW_API int lw_run_width(const lw_run *run);

// Value of a signal now (right limit). The handle is found once by name.
typedef struct lw_signal {
    int kind, index, part;
} lw_signal;
LW_API lw_status lw_frozen_signal(const lw_frozen *frozen, const char *name, lw_signal *out,
                                  lw_error *err);
LW_API double lw_run_read(const lw_run *run, int lane, lw_signal signal);

// Metrics by their order in the watch; complete after lw_run_finish.
LW_API int lw_frozen_n_metrics(const lw_frozen *frozen);
LW_API const char *lw_frozen_metric_name(const lw_frozen *frozen, int metric);
LW_API double lw_run_metric(const lw_run *run, int lane, int metric);

// Records by their order in the watch (signal records and event records in one order).
LW_API int lw_frozen_n_records(const lw_frozen *frozen);
LW_API const char *lw_frozen_record_name(const lw_frozen *frozen, int record);
LW_API int lw_frozen_record_n_columns(const lw_frozen *frozen, int record);
LW_API const char *lw_frozen_record_column(const lw_frozen *frozen, int record, int column);
LW_API int64_t lw_run_record_rows(const lw_run *run, int lane, int record);
LW_API double lw_run_record_cell(const lw_run *run, int lane, int record, int64_t row, int column);

// The block itself: bytes to compare, copy or keep.
LW_API size_t lw_run_block_size(const lw_run *run);
LW_API const void *lw_run_block(const lw_run *run);
// Copy the state of `from` into `to` (same frozen rig, same width). Records are not copied.
LW_API lw_status lw_run_copy(lw_run *to, const lw_run *from);
// The bytes of one lane as a block of width 1 has them; out holds lw_run_lane_size bytes.
LW_API size_t lw_run_lane_size(const lw_run *run);
LW_API void lw_run_lane(const lw_run *run, int lane, void *out);

// Count of instants and operations handled so far in a lane.
LW_API int64_t lw_run_n_instants(const lw_run *run, int lane);

#ifdef __cplusplus
}
#endif
#endif
