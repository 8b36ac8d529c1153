// The compiled driver of a core whose jobs only take time.
#ifndef LATEWOOD_RUN_DASH_H
#define LATEWOOD_RUN_DASH_H

#include "run/schedule.h"

// Ranks of the tasks it can serve.
uint64_t lw__dash_tasks(const lw__core *c);
// Serve instants up to `until` that are all its own, for a block of one run; their number.
int64_t lw__dash_run(lw__lane *s, const lw__core *c, lw_tick until);

#endif
