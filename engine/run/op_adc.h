// Operations of adcs: samples and conversions. Part of the driver.
#ifndef LATEWOOD_RUN_OP_ADC_H
#define LATEWOOD_RUN_OP_ADC_H

#include "run/op_dac.h"
#include "run/op_signal.h"

#include <latewood/draw.h>
#include <latewood/elementary.h>

#include <math.h>

static inline void log_conversion(lw__lane *s, const lw__adc *a, int W, int L)
{
    double row[2 + 3 * LW_ADC_MAX_CHANNELS];
    row[0] = lw__seconds(LW__I(a->sampled_at));
    row[1] = lw__seconds(s->now);
    for (int c = 0; c < a->n_channels; c++) {
        row[2 + 3 * c] = LW__F(a->input + c);
        row[3 + 3 * c] = LW__F(a->value + c);
        row[4 + 3 * c] = LW__F(a->code + c);
    }
    lw__table_add(s, a->log, row);
}

// The end of a conversion: quantise, and make due what waits for it.
LW__INLINE void op_convert(LW__CONTEXT, const lw__adc *a)
{
    int c = 0;
    do {
        double y = LW__F(a->taken + c), code;
        LW__F(a->input + c) = y;
        LW__F(a->value + c) = quantise(&a->ladder, y, &code);
        LW__F(a->code + c) = code;
        LW__I(a->reads + c) = 0;
    } while (++c < a->n_channels);
    LW__I(a->result) = LW__I(a->sampled_at);
    if (a->takes > 0)
        LW__I(s->z->due + a->done_timer) = LW_NEVER;
    if (a->log >= 0)
        log_conversion(s, a, W, L);
    lw__tell(p, &a->observers, N);
    lw__make_all_due(p, &a->after, N);
}

static inline double noise_and_average(lw__lane *s, const lw__adc *a, int channel, double y,
                                       int64_t number, int W, int L)
{
    const lw_adc_def *def = &a->item->def;
    if (def->noise > 0)
        y += def->noise * lw_normal_quantile(lw_draw_uniform(
                              (lw_address){s->seed, s->run, a->noise_stream, (uint32_t)number}));
    if (def->average > 1) {
        y += LW__F(a->sum + channel);
        LW__F(a->sum + channel) = y;
        y *= a->inverse_average;
    }
    return y;
}

// One sample of one channel; `number` counts the samples of the adc.
LW__INLINE void take_sample(lw__lane *s, const lw__adc *a, int channel, int64_t number, int W,
                            int L)
{
    const lw__reference *of = &a->of[channel];
    if (of->at.kind == LW__SIGNAL_ROW && s->z->groups[of->at.index].motion != NULL)
        move_anchor(s, &s->z->groups[of->at.index], W, L); // a sample is an own event
    double y = read_signal(s, of, W, L) * a->gain + a->bias;
    if (!a->plain)
        y = noise_and_average(s, a, channel, y, number, W, L);
    if (!(fabs(y) <= 1.79e308))
        lw__end_lane(s, LW_ERR_NOT_FINITE, a->item->def.of[channel],
                     "the sampled value is not finite");
    LW__F(a->taken + channel) = y;
}

// After the last sample of a conversion.
LW__INLINE void begin_conversion(LW__CONTEXT, const lw__adc *a, int64_t k)
{
    LW__I(a->sample) = k;
    if (!a->plain)
        for (int c = 0; c < a->n_channels; c++)
            LW__F(a->sum + c) = 0;
    if (a->takes > 0 && LW__I(a->sampled_at) + a->takes > s->now)
        LW__I(s->z->due + a->done_timer) = LW__I(a->sampled_at) + a->takes;
    else
        lw__make_due(p, a->convert_op, N);
    if (a->has_clock)
        LW__I(s->z->due + a->timer) = lw__grid_at(a->period, a->offset, k);
    else if (a->timer >= 0)
        LW__I(s->z->due + a->timer) = LW_NEVER;
}

// Sampling instants after the trigger: skewed channels, samples to average.
static inline int sample_in_steps(lw__lane *s, const lw__adc *a, int W, int L)
{
    int64_t step = LW__I(a->step), first = LW__I(a->sample) * a->n_steps;
    if (step == 0)
        LW__I(a->sampled_at) = s->now;
    lw_tick began = LW__I(a->sampled_at);
    for (; step < a->n_steps && began + a->steps[step].at <= s->now; step++)
        take_sample(s, a, a->steps[step].channel, first + step, W, L);
    LW__I(a->step) = step < a->n_steps ? step : 0;
    if (step < a->n_steps)
        LW__I(s->z->due + a->timer) = began + a->steps[step].at;
    return step == a->n_steps;
}

// A conversion, or the samples of one, is under way at a trigger.
static inline int adc_is_busy(const lw__lane *s, const lw__adc *a, int W, int L)
{
    if (a->done_timer >= 0 && LW__I(s->z->due + a->done_timer) != LW_NEVER)
        return 1;
    return LW__I(a->step) != 0 && a->timer >= 0 && LW__I(s->z->due + a->timer) != s->now;
}

LW__INLINE void op_sample(LW__CONTEXT, const lw__adc *a)
{
    if (a->sporadic && adc_is_busy(s, a, W, L))
        return;
    if (a->at_once) {
        LW__I(a->sampled_at) = s->now;
        take_sample(s, a, 0, LW__I(a->sample), W, L);
    } else if (!sample_in_steps(s, a, W, L)) {
        return;
    }
    begin_conversion(LW__HERE, a, LW__I(a->sample) + 1);
}

#endif
