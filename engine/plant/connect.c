// Composition of plants by the names of their signals.
//
// Workload: once a group of plants when a rig is frozen.
//
// Every output is written as a row over all states and all external inputs, each after the outputs
// it depends on, so nothing is solved: with no algebraic loop, substitution ends.
//
// Invariants
// 1. States are those of the parts, in the order of the parts; external inputs in the order in
//    which they are first named.
// 2. An input that neither a link nor an external input feeds is 0.

#include "plant/net.h"
#include "plant/plant.h"

#include <stdio.h>
#include <string.h>

// ---- rows over states and external inputs

typedef struct rows {
    lw__net *net;
    int width;      // n_x of all parts + n_external
    double *output; // n_y x width
} rows;

static void add(double *row, double factor, const double *other, int n)
{
    for (int i = 0; i < n; i++)
        row[i] += factor * other[i];
}

// row += factor * (what feeds `input`)
static void add_input(const rows *r, int input, double factor, double *row)
{
    const lw__net *net = r->net;
    for (int l = 0; l < net->n_links; l++)
        if (net->link[l].to == input)
            add(row, factor * net->link[l].sign, r->output + net->link[l].from * r->width,
                r->width);
    for (int i = 0; i < net->n_feeds; i++)
        if (net->feed[i].to == input)
            row[net->n_x + net->feed[i].external] += factor;
}

// row += states * (states of part p) + inputs * (inputs of part p)
static void add_part(const rows *r, int p, const double *states, const double *inputs, double *row)
{
    const lw__net *net = r->net;
    const lw_plant_view *v = &net->view[p];
    add(row + net->first_x[p], 1, states, v->n_x);
    for (int i = 0; i < v->n_u; i++)
        if (inputs[i] != 0)
            add_input(r, net->first_u[p] + i, inputs[i], row);
}

static lw_status form_outputs(rows *r)
{
    lw__net *net = r->net;
    r->width = net->n_x + net->n_external;
    r->output = lw__net_get(net, (size_t)(net->n_y * r->width), sizeof(double));
    int *order = lw__net_get(net, (size_t)net->n_y, sizeof(int));
    if (r->output == NULL || order == NULL)
        return LW_ERR_MEMORY;
    lw_status status = lw__net_order(net, order);
    for (int k = 0; status == LW_OK && k < net->n_y; k++) {
        int p = net->part_of_y[order[k]], own = order[k] - net->first_y[p];
        const lw_plant_view *v = &net->view[p];
        add_part(r, p, v->c + own * v->n_x, v->d + own * v->n_u, r->output + order[k] * r->width);
    }
    return status;
}

// ---- the whole

// Divide a row into its states and its external inputs.
static void divide(const rows *r, const double *row, double *states, double *inputs)
{
    memcpy(states, row, sizeof(double) * (size_t)r->net->n_x);
    memcpy(inputs, row + r->net->n_x, sizeof(double) * (size_t)r->net->n_external);
}

static lw_status form_matrices(const rows *r, lw_plant_view *whole)
{
    lw__net *net = r->net;
    int n = net->n_x, m = net->n_external, n_y = net->n_shown;
    double *numbers = lw__net_get(net, (size_t)((n + n_y) * (n + m) + n), sizeof(double));
    double *row = lw__net_get(net, (size_t)r->width, sizeof(double));
    if (numbers == NULL || row == NULL)
        return LW_ERR_MEMORY;
    double *a = numbers, *b = a + n * n, *c = b + n * m, *d = c + n_y * n, *start = d + n_y * m;
    for (int p = 0; p < net->n_parts; p++) {
        const lw_plant_view *v = &net->view[p];
        for (int i = 0; i < v->n_x; i++) {
            int k = net->first_x[p] + i;
            memset(row, 0, sizeof(double) * (size_t)r->width);
            add_part(r, p, v->a + i * v->n_x, v->b + i * v->n_u, row);
            divide(r, row, a + k * n, b + k * m);
            start[k] = v->start[i];
        }
    }
    for (int i = 0; i < n_y; i++)
        divide(r, r->output + net->shown[i] * r->width, c + i * n, d + i * m);
    whole->a = a;
    whole->b = b;
    whole->c = c;
    whole->d = d;
    whole->start = start;
    return LW_OK;
}

static lw_status name_states(lw__net *net, lw_plant_view *whole)
{
    const char **names = lw__net_get(net, (size_t)net->n_x, sizeof(char *));
    if (names == NULL)
        return LW_ERR_MEMORY;
    for (int p = 0; p < net->n_parts; p++)
        for (int i = 0; i < net->view[p].n_x; i++) {
            const char *part = net->parts[p].name, *state = net->view[p].state_names[i];
            size_t size = strlen(part) + strlen(state) + 2;
            char *text = lw__net_get(net, size, 1);
            if (text == NULL)
                return LW_ERR_MEMORY;
            snprintf(text, size, "%s_%s", part, state);
            names[net->first_x[p] + i] = text;
        }
    whole->state_names = names;
    return LW_OK;
}

static lw_status name_outputs(lw__net *net, lw_plant_view *whole)
{
    const char **names = lw__net_get(net, (size_t)net->n_shown, sizeof(char *));
    for (int i = 0; names != NULL && i < net->n_shown; i++)
        names[i] = net->shown_port[i].name;
    whole->output_names = names;
    return names != NULL ? LW_OK : LW_ERR_MEMORY;
}

static lw_status assemble(lw__net *net, lw_plant **out)
{
    rows r = {.net = net};
    lw_plant_view whole = {.n_x = net->n_x,
                           .n_u = net->n_external,
                           .n_y = net->n_shown,
                           .delay = net->external_delay,
                           .input_names = net->external_name};
    lw_status status = form_outputs(&r);
    if (status == LW_OK)
        status = form_matrices(&r, &whole);
    if (status == LW_OK)
        status = name_states(net, &whole);
    if (status == LW_OK)
        status = name_outputs(net, &whole);
    return status == LW_OK ? lw__plant_make(&whole, LW__PLANT_MAX_SHOWN, out, net->err) : status;
}

lw_status lw_plant_connect(int n_parts, const lw_part *parts, int n_links, const lw_link *links,
                           int n_inputs, const lw_port *inputs, int n_outputs,
                           const lw_port *outputs, lw_plant **out, lw_error *err)
{
    lw__net net = {.arena = lw__arena_new(), .err = err, .n_parts = n_parts, .parts = parts};
    if (net.arena == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory to connect plants");
    lw_status status = lw__net_read(&net, n_links, links, n_inputs, inputs, n_outputs, outputs);
    for (int p = 0; status == LW_OK && p < n_parts; p++)
        status = lw__plant_refuse_flow(parts[p].plant, "part", parts[p].name, err);
    if (status == LW_OK)
        status = lw__net_move_delays(&net);
    if (status == LW_OK)
        status = assemble(&net, out);
    lw__arena_free(net.arena);
    return status;
}
