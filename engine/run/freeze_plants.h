// What freezing a group of plants shares among its kinds: one linear system, flows.
#ifndef LATEWOOD_RUN_FREEZE_PLANTS_H
#define LATEWOOD_RUN_FREEZE_PLANTS_H

#include "run/freezer.h"

// The plants of one group as parts, what links them, and the feeds its external inputs stand for.
typedef struct lw__joint {
    int n_parts, n_links, n_inputs, n_outputs;
    lw_part parts[LW_PLANT_MAX_STATES];
    lw_link links[LW_PLANT_MAX_PORTS];
    lw_port inputs[LW_PLANT_MAX_PORTS];
    lw_port outputs[LW_PLANT_MAX_PORTS * 4];
    lw__feed *feed[LW_PLANT_MAX_PORTS];
} lw__joint;

// Fill it; rows are the outputs of the plants in order, then their states.
lw_status lw__join_group(lw__freezer *w, int group, lw__joint *j);
// Note channel i for external input i, and where each plant's states stand.
void lw__note_feeds(lw__freezer *w, int group, const lw__joint *j);
lw_status lw__group_too_large(lw__freezer *w, const char *origin);
const char *lw__port_text(lw__freezer *w, int plant, const char *port);
double lw__first_of(const lw__freezer *w, const lw__driver *driver);
// A source delayed at one input is a copy with its instants moved, so that its kinks stay exact.
lw_status lw__delayed_source(lw__freezer *w, const lw__source_item **item, double delay);
// The anchor grid where an adc or a latch fixes it; num stays 0 where none does.
lw_status lw__choose_grid(lw__freezer *w, lw__group *g, int group);
lw_status lw__delay_cells(lw__freezer *w, lw__channel *c);

// One linear system of a group. Plant states first, then the states of generators; channels:
// external inputs first (a moving source's column carries its constant part), then slopes.
typedef struct lw__linear {
    int n, m;
    double *a, *b; // row-major, n x n and n x m
    double *c, *d; // rows x n, rows x m
    double *start, *u_start;
} lw__linear;
// Augment the connected plant; sets what the group knows of its sizes, channels and generators.
lw_status lw__make_linear(lw__freezer *w, lw__group *g, const lw__joint *j, const lw_plant *plant,
                          lw__linear *s);
lw_status lw__make_rows(lw__freezer *w, lw__group *g, const lw__linear *s);

// A group with plants that have modes: see freeze_modes.c. Name and origin are set.
lw_status lw__freeze_modes(lw__freezer *w, int group, const lw__joint *j);
// A group with flows: see freeze_flow.c. Name and origin are set.
lw_status lw__freeze_flow(lw__freezer *w, int group, const lw__joint *j);

#endif
