// Sources in time. See source.h.
//
// Workload: a change now and then; a moving source also at each anchor of a plant it drives.
//
// Invariants
// 1. A value depends on definition, index or tick, and address only.
// 2. Differences of time are formed in ticks, so that they are exact.

#include "io/source.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>

#include <math.h>

#define PI 3.14159265358979323846

static lw_tick ticks(double seconds)
{
    lw_tick t = 0;
    return lw_tick_from_seconds(seconds, &t) == LW_OK ? t : LW_NEVER;
}

int lw__source_moves(const lw_source_def *def)
{
    return def->kind == LW_SOURCE_RAMP || def->kind == LW_SOURCE_SINE ||
           (def->kind == LW_SOURCE_TABLE && def->linear);
}

static lw_tick ramp_change(const lw_source_def *def, int64_t index)
{
    if (index == 0)
        return ticks(def->at);
    if (index > 1 || isnan(def->level) || def->slope == 0)
        return LW_NEVER;
    return ticks(def->at + (def->level - def->before) / def->slope);
}

static lw_tick pulse_change(const lw_source_def *def, int64_t index)
{
    lw_tick edge = lw_period_at(def->period, ticks(def->at), index / 2);
    return edge == LW_NEVER || index % 2 == 0 ? edge : edge + ticks(def->width);
}

lw_tick lw__source_change(const lw_source_def *def, int64_t index)
{
    switch (def->kind) {
    case LW_SOURCE_CONSTANT:
        return LW_NEVER;
    case LW_SOURCE_STEP:
    case LW_SOURCE_SINE:
        return index == 0 ? ticks(def->at) : LW_NEVER;
    case LW_SOURCE_RAMP:
        return ramp_change(def, index);
    case LW_SOURCE_PULSES:
        return pulse_change(def, index);
    case LW_SOURCE_TABLE:
        return index < def->n ? ticks(def->time[index]) : LW_NEVER;
    case LW_SOURCE_CHIRP:
        return lw_period_at(def->every, ticks(def->at), index);
    case LW_SOURCE_NOISE:
    case LW_SOURCE_FUNCTION:
        return lw_period_at(def->every, 0, index);
    }
    return LW_NEVER;
}

double lw__source_first(const lw_source_def *def)
{
    if (def->kind == LW_SOURCE_CONSTANT)
        return def->level;
    return def->kind == LW_SOURCE_TABLE ? def->value[0] : def->before;
}

// Phase of a linear chirp: 2 pi (f0 t + (f1 - f0) t^2 / (2 sweep)), straight on after the sweep.
static double chirp(const lw_source_def *def, double t)
{
    double in = t < def->sweep ? t : def->sweep;
    double turns = def->frequency * in +
                   (def->frequency_end - def->frequency) * in * in / (2 * def->sweep) +
                   def->frequency_end * (t - in);
    turns -= floor(turns);
    return def->before + def->level * lw_sin(2 * PI * turns + def->phase);
}

static double noise(const lw_source_def *def, lw_address at)
{
    double u = lw_draw_uniform(at);
    return def->before + def->level * (def->uniform ? 2 * u - 1 : lw_normal_quantile(u));
}

double lw__source_after(const lw_source_def *def, int64_t index, uint64_t seed, uint64_t run,
                        uint32_t stream, int *failed)
{
    double value = def->level;
    switch (def->kind) {
    case LW_SOURCE_PULSES:
        return index % 2 == 0 ? def->level : def->before;
    case LW_SOURCE_TABLE:
        return def->value[index];
    case LW_SOURCE_CHIRP:
        return chirp(def, lw_tick_seconds(lw__source_change(def, index) - ticks(def->at)));
    case LW_SOURCE_NOISE:
        return noise(def, (lw_address){seed, run, stream, (uint32_t)index});
    case LW_SOURCE_FUNCTION:
        if (def->function(def->context, lw_tick_seconds(lw__source_change(def, index)), &value))
            *failed = 1;
        return value;
    default:
        return value;
    }
}

static double ramp(const lw_source_def *def, lw_tick t)
{
    lw_tick at = ticks(def->at);
    if (t < at)
        return def->before;
    if (t >= ramp_change(def, 1))
        return def->level;
    return def->before + def->slope * lw_tick_seconds(t - at);
}

// Index of the straight line that holds from t on; -1 before the first point.
static int line_of(const lw_source_def *def, lw_tick t)
{
    int low = -1, high = def->n;
    while (high - low > 1) {
        int middle = low + (high - low) / 2;
        if (ticks(def->time[middle]) <= t)
            low = middle;
        else
            high = middle;
    }
    return low;
}

static double line_slope(const lw_source_def *def, int i)
{
    if (i < 0 || i + 1 >= def->n)
        return 0;
    return (def->value[i + 1] - def->value[i]) / (def->time[i + 1] - def->time[i]);
}

double lw__source_value(const lw_source_def *def, lw_tick t)
{
    if (def->kind == LW_SOURCE_RAMP)
        return ramp(def, t);
    if (def->kind == LW_SOURCE_SINE) {
        double sine, cosine;
        lw__source_sine(def, t, &sine, &cosine);
        return def->before + sine;
    }
    int i = line_of(def, t);
    if (i < 0)
        return def->value[0];
    return def->value[i] + line_slope(def, i) * lw_tick_seconds(t - ticks(def->time[i]));
}

double lw__source_slope(const lw_source_def *def, lw_tick t)
{
    if (def->kind == LW_SOURCE_RAMP)
        return t >= ticks(def->at) && t < ramp_change(def, 1) ? def->slope : 0;
    return def->kind == LW_SOURCE_TABLE ? line_slope(def, line_of(def, t)) : 0;
}

double lw__source_turn(const lw_source_def *def)
{
    return 2 * PI * def->frequency;
}

void lw__source_sine(const lw_source_def *def, lw_tick t, double *sine, double *cosine)
{
    *sine = *cosine = 0;
    lw_tick at = ticks(def->at);
    if (t < at)
        return;
    double turns = def->frequency * lw_tick_seconds(t - at);
    turns -= floor(turns);
    double angle = 2 * PI * turns + def->phase;
    *sine = def->level * lw_sin(angle);
    *cosine = def->level * lw_cos(angle);
}
