// The queue driver: what is next, and the passes of an instant.
#ifndef LATEWOOD_RUN_DRIVER_H
#define LATEWOOD_RUN_DRIVER_H

#include "run/state.h"

// Handle every instant up to and including `until`; afterwards the lane's now is `until`, or the
// instant at which it ended. Returns the number of instants handled.
int64_t lw__drive_lane(lw__lane *s, lw_tick until);

#endif
