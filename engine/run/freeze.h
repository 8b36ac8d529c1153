// Freezing a rig, as the engine's own tests see it.
#ifndef LATEWOOD_RUN_FREEZE_H
#define LATEWOOD_RUN_FREEZE_H

#include "run/frozen.h"

// As lw_rig_freeze; with `general` set the queue driver runs everything, so that tests can compare.
lw_status lw__freeze(const lw_rig *rig, const lw_watch *watch, lw_tick lasts, int general,
                     lw_frozen **out, lw_error *err);

#endif
