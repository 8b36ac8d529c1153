// What the parts of the freezer share.
#ifndef LATEWOOD_RUN_FREEZER_H
#define LATEWOOD_RUN_FREEZER_H

#include "run/definition.h"
#include "run/frozen.h"
#include "run/watch.h"

// Where the inputs of a plant come from.
typedef enum lw__driver_kind {
    LW__DRIVER_NONE,
    LW__DRIVER_SOURCE,
    LW__DRIVER_VALUE,
    LW__DRIVER_DAC,
    LW__DRIVER_PWM,
    LW__DRIVER_PLANT
} lw__driver_kind;

typedef struct lw__driver {
    lw__driver_kind kind;
    int index, port; // port: output of a plant
    const char *origin;
} lw__driver;

// One plant input that something drives, with its group and channel once known.
typedef struct lw__feed {
    int plant, input;
    lw__driver driver;
    int group, channel;
} lw__feed;

typedef struct lw__freezer {
    const lw_rig *rig;
    const lw_watch *watch;
    lw_frozen *z;
    lw__arena *arena;
    lw_error *err;
    int n_feeds;
    lw__feed *feeds;
    int *group_of;    // plant -> group
    int *first_row;   // plant -> its first row in the group
    int *first_state; // plant -> its first state row in the group
    int slices_room;
    int general; // no compiled driver: for tests that compare
} lw__freezer;

void *lw__freezer_get(lw__freezer *w, size_t size); // zeroed; NULL sets w->err
lw_status lw__freezer_no_memory(lw__freezer *w);

// Reserve cells and note them in the slice table; the first cell, or -1 for lack of memory.
typedef struct lw__cells {
    const char *owner, *name, *unit;
    lw_slice_kind kind;
    int is_integer;
    int count;
} lw__cells;
int lw__freezer_cells(lw__freezer *w, lw__cells cells);
int lw__freezer_double(lw__freezer *w, const char *owner, const char *name, lw_slice_kind kind,
                       int count);
int lw__freezer_integer(lw__freezer *w, const char *owner, const char *name, lw_slice_kind kind,
                        int count);
int lw__freezer_timer(lw__freezer *w);

// Parts, in this order.
lw_status lw__freeze_plants(lw__freezer *w);     // groups, rows, channels, kernels, anchors
lw_status lw__freeze_converters(lw__freezer *w); // sources, values, adcs, dacs
// Groups and channels that a driver feeds; a moving source reaches them by its generators.
lw_status lw__find_drives(lw__freezer *w, lw__driver_kind kind, int index, lw__drives *out);
lw_status lw__freeze_loops(lw__freezer *w);
lw_status lw__freeze_clocks(lw__freezer *w); // of cores and tasks; before the converters
lw_status lw__freeze_cores(lw__freezer *w);
lw_status lw__freeze_streams(lw__freezer *w); // collisions refused
void lw__freeze_anchors(lw__freezer *w);      // whose timer moves each anchor
lw_status lw__freeze_records(lw__freezer *w);
lw_status lw__freeze_watch(lw__freezer *w); // records, tracks, metrics
lw_status lw__freeze_order(lw__freezer *w); // operations, timers, sets

// Inputs and outputs of a law, `l->what`, item and law known.
lw_status lw__freeze_wires(lw__freezer *w, lw__loop *l, const lw_loop_def *def);

// The observers of what changes a signal of this name; NULL where nothing does.
lw__set *lw__signal_observers(lw_frozen *z, const char *name);
// Have a track's operation told of changes to what it follows.
struct lw__track;
lw_status lw__track_watch(lw__freezer *w, struct lw__track *t, int op);

// A name of a signal that must exist; failure names origin, thing, field.
lw_status lw__freezer_signal(lw__freezer *w, const char *origin, const char *what,
                             const char *owner, const char *field, const char *name,
                             lw__reference *out);
// Put an operation into a set, which gets its memory on first use; -1 only gets memory.
lw_status lw__set_put(lw__freezer *w, lw__set *set, int op);
void lw__ladder_make(const lw_quantiser *q, lw__ladder *out);

// Rational grids: shortest and longest step between neighbours [ticks].
void lw__grid_steps(lw_period p, lw_tick *shortest, lw_tick *longest);

#endif
