// Sources in time: when they change and what they are, in closed form.
//
// A source is a list of changes by index. Between changes it stands still (held) or moves by a
// stated law (moving: ramp, sine, straight lines).
#ifndef LATEWOOD_IO_SOURCE_H
#define LATEWOOD_IO_SOURCE_H

#include <latewood/rig.h>

int lw__source_moves(const lw_source_def *def);
// Tick of change `index` (from 0), LW_NEVER after the last.
lw_tick lw__source_change(const lw_source_def *def, int64_t index);
// Value before the first change.
double lw__source_first(const lw_source_def *def);
// Value from change `index` on, of a held source; *failed is set if a function failed.
double lw__source_after(const lw_source_def *def, int64_t index, uint64_t seed, uint64_t run,
                        uint32_t stream, int *failed);
// Value and slope of a moving source at tick t (right limit).
double lw__source_value(const lw_source_def *def, lw_tick t);
double lw__source_slope(const lw_source_def *def, lw_tick t);
// Of a sine: its moving part and the part a quarter turn ahead, both 0 before `at`.
void lw__source_sine(const lw_source_def *def, lw_tick t, double *sine, double *cosine);
// Angular frequency [rad/s].
double lw__source_turn(const lw_source_def *def);

#endif
