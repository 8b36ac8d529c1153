// The compiled driver of a plain loop: its instants in their fixed order, nothing looked up.
#ifndef LATEWOOD_RUN_SPRINT_H
#define LATEWOOD_RUN_SPRINT_H

#include "run/state.h"

// A loop whose order of instants cannot change while no other timer is due: sample, conversion and
// step at one tick, one write in flight that arrives by the next sample, one dac that drives one
// input of the group that is sampled.
typedef struct lw__sprint {
    const lw__group *group;
    const lw__row *row;
    const lw__adc *adc;
    const lw__loop *loop;
    const lw__dac *dac;
    int channel, output;
} lw__sprint;

// Handle instants of the loop up to `until` while no other timer is due. Returns their number,
// 0 where the present timers do not allow a start. The block ends as the queue driver leaves it.
int64_t lw__sprint_run(lw__lane *s, const lw__sprint *sprint, lw_tick until);

#endif
