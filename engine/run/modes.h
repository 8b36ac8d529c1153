// A group with plants that have modes: what freezing keeps of it, and how it moves.
#ifndef LATEWOOD_RUN_MODES_H
#define LATEWOOD_RUN_MODES_H

#include "run/motion.h"
#include "run/switched.h"

// The modes of the group are all combinations of those of its plants.
typedef struct lw__modes_group {
    lw__switched system;
    int n_switchings;
    const char *const *names; // of the modes, "on", or "on, resting" where several plants have some
    // cells
    int noise;                                 // doubles
    int mode, switched_at, in_a_row, n_so_far; // integers
} lw__modes_group;

extern const struct lw__motion lw__modes_motion;

// Doubles of scratch that the motion needs.
int lw__modes_work(const lw__switched *q);

#endif
