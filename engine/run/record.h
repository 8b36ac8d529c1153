// Records: rows written while a run goes on. They read a run and never change it.
#ifndef LATEWOOD_RUN_RECORD_H
#define LATEWOOD_RUN_RECORD_H

#include "run/motion.h"

// The operation of a signal record: take its value at the present instant.
void lw__record_take(lw__lane *s, int record);
// Rows of a group with a motion: the instants before `limit` that lie in an accepted stretch; those
// that are left once the group has come to the present tick.
void lw__record_stretch(lw__lane *s, int record, const lw__stretch *stretch, lw_tick limit);
void lw__record_rest(lw__lane *s, int record, lw_tick limit);
// First instant of a signal record, LW_NEVER where it has none.
lw_tick lw__record_first(const lw__record *r);

#endif
