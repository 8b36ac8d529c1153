// Records: rows written while a run goes on. They read a run and never change it.
#ifndef LATEWOOD_RUN_RECORD_H
#define LATEWOOD_RUN_RECORD_H

#include "run/state.h"

// The operation of a signal record: take its value at the present instant.
void lw__record_take(lw__lane *s, int record);
// First instant of a signal record, LW_NEVER where it has none.
lw_tick lw__record_first(const lw__record *r);

#endif
