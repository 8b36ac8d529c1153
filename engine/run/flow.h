// A group of plants that holds a flow: what freezing keeps of it, and how it moves.
#ifndef LATEWOOD_RUN_FLOW_H
#define LATEWOOD_RUN_FLOW_H

#include "ode/ode.h"
#include "run/motion.h"

#define LW__FLOW_DEGREE 8 // of the polynomial through an output over a step

// A plant of the group. States, inputs, outputs, modes and switchings of all parts are numbered in
// one row each, part by part.
typedef struct lw__flow_part {
    const char *name;
    lw_plant_view view;
    int first_x, first_u, first_y, first_mode, first_switch;
} lw__flow_part;

// What an input of a part takes.
typedef enum lw__flow_feed_kind {
    LW__FEED_NONE,
    LW__FEED_CHANNEL,
    LW__FEED_OUTPUT
} lw__flow_feed_kind;
typedef struct lw__flow_feed {
    lw__flow_feed_kind kind;
    int index;
} lw__flow_feed;

// Outputs in an order in which each comes after those it depends on.
typedef struct lw__flow_step {
    int part, output; // output of the part; -1: all of them
} lw__flow_step;

typedef struct lw__flow_group {
    int n_parts, n_x, n_u, n_part_u, n_y, n_modes, n_switches, n_steps;
    const lw__flow_part *parts;
    const lw__flow_feed *feeds; // n_part_u
    const lw__flow_step *steps;
    int alone; // one flow, its inputs are the channels in order, nothing moves between events
    double rtol;
    const double *atol;    // n_x
    const double *modes;   // n_modes, at time zero
    lw__ode_system system; // without its context
    // cells
    int mode_cells, side_cells, memory, n_memory;
} lw__flow_group;

extern const struct lw__motion lw__flow_motion;

// Choose how the group is called; returns the doubles of scratch it needs.
int lw__flow_prepare(lw__group *g, lw__flow_group *m);

#endif
