// What parent, keeper and workers of a crew share: pipes, one page of shared memory, frames.
#ifndef LATEWOOD_BATCH_CREW_SHARED_H
#define LATEWOOD_BATCH_CREW_SHARED_H

#include <latewood/crew.h>
#include <limits.h>
#include <sys/types.h>

// A frame is at most what a pipe takes at once, so that a worker lost in mid-write leaves a whole
// frame or none.
#define LW__FRAME 4096
#if defined(PIPE_BUF) && PIPE_BUF < LW__FRAME
#error "pipes of this system take less than a frame at once"
#endif

typedef enum lw__frame_kind {
    LW__FRAME_ROWS,  // n rows: run, status, instant, values
    LW__FRAME_ENDED, // one row that ended early, with its text
    LW__FRAME_DONE,  // the block is complete
    LW__FRAME_WRONG  // the study is wrong: its text
} lw__frame_kind;

typedef struct lw__frame_head {
    uint32_t length; // of the frame, head included
    uint32_t sum;    // checksum of what follows this field
    int32_t kind, n;
    int64_t point;
} lw__frame_head;

typedef struct lw__frame_row {
    int64_t run, status;
    double instant;
} lw__frame_row;

// Shared page: what each worker is at.
typedef struct lw__crew_word {
    _Atomic int64_t run;
    _Atomic int64_t process;
} lw__crew_word;

typedef struct lw__crew_ends {
    int request[2], result[2]; // parent writes requests, worker writes results
} lw__crew_ends;

typedef struct lw__crew_pipes {
    int n;
    lw__crew_ends slot[LW_CREW_MOST];
    int notice[2];  // keeper -> parent: a worker was lost
    int control[2]; // parent -> keeper: replace it
} lw__crew_pipes;

typedef struct lw__crew_notice {
    int32_t slot, status;
} lw__crew_notice;

uint32_t lw__frame_sum(const void *bytes, size_t n);
int lw__write_all(int fd, const void *bytes, size_t n); // 0 done
// In the keeper's process: does not return.
void lw__crew_keep(const lw_crew_def *def, lw__crew_pipes *pipes, lw__crew_word *words);
// In a worker's process: does not return.
void lw__crew_serve(const lw_crew_def *def, const lw__crew_ends *ends, lw__crew_word *word);

#endif
