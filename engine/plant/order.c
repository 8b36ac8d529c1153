// The order in which outputs follow from each other without delay, or the loop that forbids one.
//
// Method: depth-first search over direct paths: output -> link -> input -> every output of that
// part with an element of D other than 0 (R. Tarjan, SIAM J. Computing 1 (1972) 146-160). Outputs
// are finished before those they lead from; the reverse of that is the order.
//
// Invariants
// 1. Outputs on the path are open, outputs left for good are done; a direct path to an open output
//    closes a loop.
// 2. Searched in the order of parts and links, so the loop found and its wording are always the
//    same.

#include "plant/net.h"

#include <stdio.h>
#include <string.h>

enum { NEW, OPEN, DONE };

typedef struct search {
    const lw__net *net;
    unsigned char *state; // n_y
    int *path, *by;       // n_y: outputs, and the input each leads to the next by
    int depth;
    int *order; // filled from its end
    int left;   // places in it
} search;

// `a.out -> b.in -> b.out -> a.in`, beginning at its first output.
static lw_status name_loop(const search *s, int again)
{
    char text[2 * LW_ERROR_TEXT] = "";
    const lw__net *net = s->net;
    int from = 0;
    while (s->path[from] != again)
        from++;
    int n = s->depth - from, first = 0;
    for (int i = 1; i < n; i++)
        first = s->path[from + i] < s->path[from + first] ? i : first;
    for (int i = 0; i < n; i++) {
        int k = from + (first + i) % n;
        size_t used = strlen(text);
        snprintf(text + used, sizeof text - used, "%s%s.%s -> %s.%s", i > 0 ? " -> " : "",
                 lw__net_part_of_output(net, s->path[k]), lw__net_output(net, s->path[k]),
                 lw__net_part_of_input(net, s->by[k]), lw__net_input(net, s->by[k]));
    }
    return lw_error_set(net->err, LW_ERR_LOOP, "signals depend on themselves without delay: %s",
                        text);
}

static lw_status visit(search *s, int output);

// On from `input` to the outputs of its part that it acts on at once.
static lw_status pass_through(search *s, int input)
{
    const lw__net *net = s->net;
    int p = net->part_of_u[input], column = input - net->first_u[p];
    const lw_plant_view *v = &net->view[p];
    s->by[s->depth - 1] = input;
    for (int i = 0; i < v->n_y; i++) {
        if (v->d[i * v->n_u + column] == 0)
            continue;
        lw_status status = visit(s, net->first_y[p] + i);
        if (status != LW_OK)
            return status;
    }
    return LW_OK;
}

static lw_status visit(search *s, int output)
{
    if (s->state[output] == DONE)
        return LW_OK;
    if (s->state[output] == OPEN)
        return name_loop(s, output);
    s->state[output] = OPEN;
    s->path[s->depth++] = output;
    for (int l = 0; l < s->net->n_links; l++) {
        if (s->net->link[l].from != output)
            continue;
        lw_status status = pass_through(s, s->net->link[l].to);
        if (status != LW_OK)
            return status;
    }
    s->depth--;
    s->state[output] = DONE;
    s->order[--s->left] = output;
    return LW_OK;
}

lw_status lw__net_order(lw__net *net, int *order)
{
    size_t n = (size_t)net->n_y;
    search s = {.net = net,
                .state = lw__net_get(net, n, sizeof *s.state),
                .path = lw__net_get(net, n, sizeof(int)),
                .by = lw__net_get(net, n, sizeof(int)),
                .order = order,
                .left = net->n_y};
    if (s.state == NULL || s.path == NULL || s.by == NULL)
        return LW_ERR_MEMORY;
    lw_status status = LW_OK;
    for (int y = 0; status == LW_OK && y < net->n_y; y++)
        status = visit(&s, y);
    return status;
}
