// Ledgers: the file a batch leaves, one SQLite database.
//
// A ledger says what was computed (facts: study, modules, inputs, arguments, points, metrics) and
// holds one row a run. Everything but the table `provenance` depends on the facts alone: the same
// study leaves the same content for any number of workers, shards or interruptions.
//
//   fact        section, name, value: what the batch is, in order
//   point       number, name, and the parameters in words
//   metric      number, name, unit, and the column of table `run` that holds it
//   run         point, run, status (0: reached its end), v1, v2, ... (NULL: undefined)
//   ended       point, run, instant [s], text: runs that ended early, and why
//   done        point, block, mask: which runs of each 64 are computed
//   tally       point, name, count: runs, runs that ended early, runs that miss a limit
//   provenance  session, name, value: where and when it was computed
//   view runs   `run` with the points' and metrics' names, for any client
//
// A ledger is untrusted input: opened for reading it is read only, its schema is not trusted, and
// nothing in it is run.
#ifndef LATEWOOD_LEDGER_H
#define LATEWOOD_LEDGER_H

#include <latewood/status.h>
#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_LEDGER_MOST_METRICS 400
#define LW_LEDGER_BLOCK 64 // runs of one row of table `done`

typedef struct lw_ledger lw_ledger;

typedef struct lw_fact {
    const char *section, *name, *value;
} lw_fact;

typedef enum lw_keep {
    LW_KEEP_ALL,      // a row each run
    LW_KEEP_FAILURES, // rows of runs that ended early or miss a limit; counts of all
    LW_KEEP_COUNTS    // counts only
} lw_keep;

typedef struct lw_ledger_metric {
    const char *name, *unit;
} lw_ledger_metric;

typedef enum lw_limit_kind {
    LW_LIMIT_AT_MOST, // missed where the value is larger, undefined, or the run ended early
    LW_LIMIT_AT_LEAST,
    LW_LIMIT_DEFINED // missed where a run that reached its end has no value
} lw_limit_kind;

// What runs are counted against: column `metric` and `limit`.
typedef struct lw_ledger_limit {
    const char *name;
    int metric;
    lw_limit_kind kind;
    double limit;
} lw_ledger_limit;

typedef struct lw_ledger_def {
    const char *path; // NULL: in memory, gone when closed
    int n_facts;
    const lw_fact *facts;
    int n_metrics; // 0 to LW_LEDGER_MOST_METRICS
    const lw_ledger_metric *metrics;
    int n_limits;
    const lw_ledger_limit *limits;
    lw_keep keep;
} lw_ledger_def;

// One run of one point. values: n_metrics, NAN where undefined or where the run ended early.
typedef struct lw_ledger_row {
    int64_t point, run;
    lw_status status; // LW_OK: reached its end
    double instant;   // of an early end [s]
    const char *text; // of an early end
    const double *values;
} lw_ledger_row;

// Make a new ledger: written under a temporary name, synchronised, then given its own.
//   errors  LW_ERR_DUPLICATE a file of that name exists; LW_ERR_OUTPUT it cannot be written
LW_API lw_status lw_ledger_create(const lw_ledger_def *def, lw_error *err);
// Open to go on: locked for others. `def` must be what the ledger was made for.
//   errors  LW_ERR_INPUT no ledger, damaged, or of a later version; LW_ERR_OUTPUT locked or not
//           writable; LW_ERR_ARGUMENT another batch: the message shows the first difference
LW_API lw_status lw_ledger_resume(const lw_ledger_def *def, lw_ledger **out, lw_error *err);
// Open to read.
LW_API lw_status lw_ledger_open(const char *path, lw_ledger **out, lw_error *err);
// Close; rows not yet committed are dropped. NULL is allowed.
LW_API void lw_ledger_close(lw_ledger *ledger);

// ---- writing

// Name a point; asking again with the same name and text is allowed, with another text an error.
LW_API lw_status lw_ledger_point(lw_ledger *ledger, int64_t number, const char *name,
                                 const char *text, lw_error *err);
// Take up a row; it is safe after the next commit. A run already done must have the same content:
// LW_ERR_DUPLICATE otherwise.
LW_API lw_status lw_ledger_add(lw_ledger *ledger, const lw_ledger_row *row, lw_error *err);
LW_API lw_status lw_ledger_commit(lw_ledger *ledger, lw_error *err);
// Note where and how this session computed; kept apart from the results.
LW_API lw_status lw_ledger_provenance(lw_ledger *ledger, const char *name, const char *value,
                                      lw_error *err);

// ---- reading

// Which runs of block `block` (runs 64 block and up) of a point are done: bit k is run
// 64 block + k.
LW_API lw_status lw_ledger_done(lw_ledger *ledger, int64_t point, int64_t block, uint64_t *mask,
                                lw_error *err);
LW_API int lw_ledger_n_metrics(const lw_ledger *ledger);
LW_API lw_keep lw_ledger_kept(const lw_ledger *ledger);
// Each row kept of a point, in order of run, until `take` returns nonzero. `row` is valid during
// the call only.
LW_API lw_status lw_ledger_rows(lw_ledger *ledger, int64_t point,
                                int (*take)(void *context, const lw_ledger_row *row), void *context,
                                lw_error *err);
// A count of a point: "runs", "ended early", or the name of a limit (runs that miss it).
LW_API lw_status lw_ledger_tally(lw_ledger *ledger, int64_t point, const char *name, int64_t *count,
                                 lw_error *err);
// Facts in order, until `take` returns nonzero.
LW_API lw_status lw_ledger_facts(lw_ledger *ledger, int (*take)(void *context, const lw_fact *fact),
                                 void *context, lw_error *err);
// Points in order of number.
LW_API lw_status lw_ledger_points(lw_ledger *ledger,
                                  int (*take)(void *context, int64_t number, const char *name,
                                              const char *text),
                                  void *context, lw_error *err);
// Metrics as facts: name and unit.
LW_API lw_status lw_ledger_metrics(lw_ledger *ledger,
                                   int (*take)(void *context, const lw_ledger_metric *metric),
                                   void *context, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
