// Small rigs that several tests build: one plant, one adc, one law with a stated latency, one dac.
#ifndef LATEWOOD_TESTS_LOOPS_H
#define LATEWOOD_TESTS_LOOPS_H

#include "suite.h"

#include <latewood/run.h>

#include <stdio.h>
#include <string.h>

#ifndef OK // measurements have their own
#define OK(call)                                                                                   \
    do {                                                                                           \
        lw_error err_ = {0}, *e = &err_;                                                           \
        lw_status status_ = (call);                                                                \
        ck_assert_msg(status_ == LW_OK, "%s: %s", #call, err_.text);                               \
        (void)e;                                                                                   \
    } while (0)
#endif

#define US INT64_C(1000000)
#define MS INT64_C(1000000000)

// A loop as a table: plant `p`, law `l`, and what differs from the plainest loop.
typedef struct simple_loop {
    lw_plant *plant;      // taken over
    lw_law *law;          // taken over
    const char *measured; // plant signal, "plant.out" where NULL
    double wanted;
    lw_tick period, takes;
    lw_latency latency;
    lw_quantiser adc, dac;
} simple_loop;

static inline simple_loop simple_default(void)
{
    simple_loop s = {.period = 100 * US, .wanted = 1};
    s.adc = s.dac = lw_quantiser_default();
    return s;
}

static inline lw_rig *simple_rig(const simple_loop *s)
{
    lw_rig *rig = NULL;
    const char *of = s->measured != NULL ? s->measured : "plant.out";
    OK(lw_rig_new("simple", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "plant", s->plant, e));
    lw_adc_def adc = lw_adc_default();
    adc.name = "adc";
    adc.of = &of;
    adc.every = lw_period_of_ticks(s->period);
    adc.takes = lw_tick_seconds(s->takes);
    adc.quantiser = s->adc;
    OK(lw_rig_add_adc(rig, &adc, e));
    lw_dac_def dac = lw_dac_default();
    dac.name = "dac";
    dac.to = "plant.in";
    dac.quantiser = s->dac;
    OK(lw_rig_add_dac(rig, &dac, e));
    lw_wire in[2] = {{"wanted", NULL, s->wanted}, {"measured", "adc", 0}};
    lw_wire out = {"out", "dac", 0};
    lw_loop_def loop = lw_loop_default();
    loop.name = "loop";
    loop.law = s->law;
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency = s->latency;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_plant_free(s->plant);
    lw_law_free(s->law);
    return rig;
}

static inline lw_law *p_law(double kp)
{
    lw_law *law = NULL;
    lw_pid pid = lw_pid_default();
    pid.kp = kp;
    OK(lw_law_pid("p", &pid, &law, e));
    return law;
}

static inline lw_plant *integrator(double gain)
{
    lw_plant *plant = NULL;
    OK(lw_plant_integrator(gain, &plant, e));
    return plant;
}

// Freeze and give up the rig.
static inline lw_frozen *freeze_rig(lw_rig *rig, const lw_watch *watch, lw_tick lasts)
{
    lw_frozen *frozen = NULL;
    OK(lw_rig_freeze(rig, watch, lasts, &frozen, e));
    lw_rig_free(rig);
    return frozen;
}

// Values of a signal at k * every, k = 0..n-1, by advancing and reading.
static inline void sample_run(lw_frozen *frozen, const char *signal, lw_tick every, int n,
                              double *out)
{
    lw_run *run = NULL;
    lw_signal at;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    OK(lw_frozen_signal(frozen, signal, &at, e));
    for (int k = 0; k < n; k++) {
        ck_assert_int_eq(lw_run_advance(run, k * every), LW_OK);
        out[k] = lw_run_read(run, 0, at);
    }
    lw_run_free(run);
}

#endif
