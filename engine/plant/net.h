// Parts, links and ports of a connection, with names resolved to numbers.
//
// All inputs of all parts are numbered in one row, all outputs in another, all states in a third,
// part by part in the order of the parts.
#ifndef LATEWOOD_PLANT_NET_H
#define LATEWOOD_PLANT_NET_H

#include "base/arena.h"

#include <latewood/plant.h>

typedef struct lw__net_link {
    int from, to; // output, input
    double sign;
} lw__net_link;

typedef struct lw__net_feed {
    int external, to; // external input, input of a part
} lw__net_feed;

typedef struct lw__net {
    lw__arena *arena;
    lw_error *err;
    int n_parts;
    const lw_part *parts;
    lw_plant_view *view;              // n_parts
    int n_x, n_u, n_y;                // of all parts together
    int *first_x, *first_u, *first_y; // n_parts
    int *part_of_u, *part_of_y;       // n_u, n_y
    int n_links;
    lw__net_link *link;
    int n_feeds;
    lw__net_feed *feed;
    int n_external;
    const char **external_name; // n_external
    double *external_delay;     // n_external, by lw__net_move_delays
    int n_shown;
    const lw_port *shown_port;
    int *shown; // n_shown outputs
} lw__net;

// Memory from the net's arena, or NULL with the message set.
void *lw__net_get(lw__net *net, size_t n, size_t n_bytes);

// Names of an input or output as the user writes them, for `%s.%s`.
const char *lw__net_part_of_input(const lw__net *net, int input);
const char *lw__net_input(const lw__net *net, int input);
const char *lw__net_part_of_output(const lw__net *net, int output);
const char *lw__net_output(const lw__net *net, int output);
double lw__net_delay(const lw__net *net, int input);

lw_status lw__net_read(lw__net *net, int n_links, const lw_link *links, int n_inputs,
                       const lw_port *inputs, int n_outputs, const lw_port *outputs);

// Move delays of linked inputs upstream to the external inputs; see delays.c.
lw_status lw__net_move_delays(lw__net *net);

// Outputs in an order in which each comes after those it depends on without delay; the error of an
// algebraic loop otherwise. `order` n_y, out. Every delay of a link in a ring is known to be 0.
lw_status lw__net_order(lw__net *net, int *order);

#endif
