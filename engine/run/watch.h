// What a watch holds before it is frozen.
#ifndef LATEWOOD_RUN_WATCH_H
#define LATEWOOD_RUN_WATCH_H

#include "base/arena.h"

#include <latewood/watch.h>

typedef struct lw__record_item {
    lw_record_def def;
    int is_events; // of an adc, dac or loop named by def.signal
} lw__record_item;

struct lw_watch {
    lw__arena *arena;
    int n_records, n_metrics;
    lw__record_item *records;
    lw_metric_def *metrics;
};

#endif
