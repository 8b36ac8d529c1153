// What a rig holds before it is frozen: copies of the definitions, in order of declaration.
#ifndef LATEWOOD_RUN_RIG_H
#define LATEWOOD_RUN_RIG_H

#include "base/arena.h"

#include <latewood/cpu.h>
#include <latewood/event.h>
#include <latewood/pwm.h>
#include <latewood/rig.h>
#include <latewood/sensor.h>

typedef struct lw__plant_item {
    const char *origin, *name;
    lw_plant *plant;
    int place; // order of declaration in the whole rig
} lw__plant_item;

typedef struct lw__connection_item {
    const char *origin, *from, *to;
    int place;
} lw__connection_item;

typedef struct lw__source_item {
    lw_source_def def; // texts and lists are copies
    int place;
} lw__source_item;

typedef struct lw__value_item {
    const char *origin, *name;
    double start;
    int place;
} lw__value_item;

typedef struct lw__adc_item {
    lw_adc_def def;
    int place;
} lw__adc_item;

typedef struct lw__dac_item {
    lw_dac_def def;
    int place;
    int is_pwm; // 0: no; 1: the register of a pwm, taken over at reloads; 2: at once
} lw__dac_item;

typedef struct lw__pwm_item {
    lw_pwm_def def;
    int dac, place; // dac: the one that came with it
} lw__pwm_item;

typedef struct lw__loop_item {
    lw_loop_def def;
    lw_law *law;
    lw_timing *timing;
    int place;
} lw__loop_item;

// A core, or a bus: a core of `rate` cycles a second whose tasks are frames.
typedef struct lw__core_item {
    lw_core_def def;
    int is_bus;
    int place;
} lw__core_item;

// A task, or a frame.
typedef struct lw__task_item {
    lw_task_def def;
    lw_law *law;
    lw_timing *takes, *arrives, *jitter;
    int is_frame;
    int place;
} lw__task_item;

typedef struct lw__comparator_item {
    lw_comparator_def def;
    int place;
} lw__comparator_item;

typedef struct lw__trip_item {
    lw_trip_def def;
    int place;
} lw__trip_item;

typedef struct lw__noise_item {
    lw_noise_def def;
    int place;
} lw__noise_item;

typedef struct lw__edges_item {
    lw_encoder_def def;
    int adc;
    int place;
} lw__edges_item;

struct lw_rig {
    int references;
    lw__arena *arena;
    const char *name;
    int n_places;
    int n_plants, n_connections, n_sources, n_values, n_adcs, n_dacs, n_loops;
    int n_cores, n_tasks;
    int n_comparators, n_trips;
    lw__plant_item *plants;
    lw__connection_item *connections;
    lw__source_item *sources;
    lw__value_item *values;
    lw__adc_item *adcs;
    lw__dac_item *dacs;
    int n_pwms;
    lw__pwm_item *pwms;
    lw__loop_item *loops;
    lw__core_item *cores;
    lw__task_item *tasks;
    lw__comparator_item *comparators;
    lw__trip_item *trips;
    int n_noises;
    lw__noise_item *noises;
    int n_edges; // encoders whose edges are found
    lw__edges_item *edges;
    int frozen; // a frozen rig refers to it: no more additions
};

// Put "origin: " before a message, where there is an origin.
lw_status lw__fail_at(const char *origin, lw_error *err, lw_status status, const char *format, ...)
    LW_PRINTF(4, 5);
lw_status lw__blame(const char *origin, lw_error *err, lw_status status);

// Laws, timings and lists of cores and tasks.
void lw__rig_free_cpu(lw_rig *rig);
// Lists of comparators and trips; which of them has the name, in words, or NULL.
void lw__rig_free_events(lw_rig *rig);
const char *lw__rig_event_thing(const lw_rig *rig, const char *name);

#endif
