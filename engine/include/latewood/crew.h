// A crew: processes that compute runs in parallel, and survive one another.
//
// lw_crew_start forks a keeper, which forks the workers and, when one is lost, its replacement.
// What the calling process has built by then (rigs, a Lua state) the workers inherit. Open no
// ledger and no connection before that call.
//
// A worker takes a block of runs, says which run it is at, and returns rows. When it is lost
// (crash, kill, limit), the rows it had returned stay, the run it was at is tried again, and after
// the third loss counts as ended early; the other runs of the block are computed again.
#ifndef LATEWOOD_CREW_H
#define LATEWOOD_CREW_H

#include <latewood/ledger.h>

#ifdef __cplusplus
extern "C" {
#endif

#define LW_CREW_MOST 64

typedef struct lw_crew lw_crew;
typedef struct lw_crew_desk lw_crew_desk;

// Runs 64 block + k of a point, for each bit k of mask.
typedef struct lw_block {
    int64_t point, block;
    uint64_t mask;
} lw_block;

typedef struct lw_crew_def {
    int jobs;     // workers, 1 to LW_CREW_MOST
    int n_values; // of a row, 0 to LW_LEDGER_MOST_METRICS
    // In a worker: compute a block. Calls lw_crew_begin before each run, lw_crew_put after it.
    // Nonzero: the study is wrong (message of at most LW_ERROR_TEXT bytes); the batch ends.
    int (*compute)(void *context, const lw_block *block, lw_crew_desk *desk, char *message);
    void *context;
} lw_crew_def;

//   errors  LW_ERR_ARGUMENT, LW_ERR_MEMORY; LW_ERR_PROCESS no pipe or process to be had
LW_API lw_status lw_crew_start(const lw_crew_def *def, lw_crew **out, lw_error *err);
// End the processes and forget them. NULL is allowed.
LW_API void lw_crew_free(lw_crew *crew);

// ---- in a worker

LW_API void lw_crew_begin(lw_crew_desk *desk, int64_t run);
LW_API void lw_crew_put(lw_crew_desk *desk, const lw_ledger_row *row);

// ---- in the process that started it

typedef struct lw_crew_orders {
    // The next block to compute; nonzero: there is none (for now: asked again after each block).
    int (*next)(void *context, lw_block *block);
    // A row came; nonzero: stop.
    int (*take)(void *context, const lw_ledger_row *row);
    // All rows of a block came; nonzero: stop. May be NULL.
    int (*finished)(void *context, const lw_block *block);
    // Looked at about ten times a second; nonzero: stop. May be NULL.
    int (*pause)(void *context);
    void *context;
} lw_crew_orders;

// Have blocks computed until `next` has none and all are back.
//   returns  LW_OK       all computed
//            LW_STOPPED  a function asked to stop; blocks in flight are abandoned
//            LW_ERR_LAW  the study is wrong: its message
//            LW_ERR_PROCESS  the keeper, or too many workers in a row, were lost
LW_API lw_status lw_crew_work(lw_crew *crew, const lw_crew_orders *orders, lw_error *err);
// Workers lost so far.
LW_API int lw_crew_n_lost(const lw_crew *crew);
// Process of the keeper and of a worker as last heard of, for tests that take them away.
LW_API long lw_crew_keeper(const lw_crew *crew);
LW_API long lw_crew_worker(const lw_crew *crew, int index);

#ifdef __cplusplus
}
#endif
#endif
