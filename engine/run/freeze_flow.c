// Freezing a group that holds a flow: its parts stay what they are, linear ones give A x + B u, and
// outputs are put in an order in which each follows those it depends on.
//
// Invariants
// 1. Channel i is external input i; a moving source stands in its channel as a function of time, so
//    that the group has no states but those of its plants.
// 2. Rows are those of any group: outputs of the plants in order, then their states.

#include "run/flow.h"
#include "run/freeze_plants.h"

#include "io/source.h"
#include "plant/net.h"

#include <math.h>
#include <string.h>

#define WINDOWS 256 // own events of a group that no adc samples, over the length of the run

// ---- parts and their wiring

static lw_status refuse_delay(lw__freezer *w, const lw__net *net, int input)
{
    return lw__fail_at(NULL, w->err, LW_ERR_ARGUMENT,
                       "plant \"%s\": input \"%s\" is delayed and another plant of a nonlinear "
                       "group feeds it; a delay is possible where a dac, a value or a source does",
                       lw__net_part_of_input(net, input), lw__net_input(net, input));
}

static lw_status wire(lw__freezer *w, lw__net *net, lw__flow_group *m)
{
    lw__flow_feed *feeds = lw__freezer_get(w, sizeof *feeds * (size_t)(net->n_u + 1));
    if (feeds == NULL)
        return LW_ERR_MEMORY;
    for (int l = 0; l < net->n_links; l++) {
        int to = net->link[l].to;
        if (lw__net_delay(net, to) > 0)
            return refuse_delay(w, net, to);
        feeds[to] = (lw__flow_feed){LW__FEED_OUTPUT, net->link[l].from};
    }
    for (int i = 0; i < net->n_feeds; i++)
        feeds[net->feed[i].to] = (lw__flow_feed){LW__FEED_CHANNEL, net->feed[i].external};
    m->feeds = feeds;
    m->n_part_u = net->n_u;
    return LW_OK;
}

// The state that an output is; -1 where it is another combination.
static int state_of(const lw_plant_view *v, int output)
{
    int state = -1, others = 0;
    for (int k = 0; k < v->n_x; k++)
        if (v->c[output * v->n_x + k] == 1 && state < 0)
            state = k;
        else
            others |= v->c[output * v->n_x + k] != 0;
    for (int k = 0; k < v->n_u; k++)
        others |= v->d[output * v->n_u + k] != 0;
    return others ? -1 : state;
}

// All outputs of a flow's function come at once, with the first of them.
static lw_status order_outputs(lw__freezer *w, lw__net *net, lw__flow_group *m)
{
    int *order = lw__net_get(net, (size_t)net->n_y + 1, sizeof(int));
    lw__flow_step *steps = lw__freezer_get(w, sizeof *steps * (size_t)(net->n_y + 1));
    char *done = lw__net_get(net, (size_t)net->n_parts, 1);
    if (order == NULL || steps == NULL || done == NULL)
        return LW_ERR_MEMORY;
    LW__TRY(lw__net_order(net, order));
    for (int k = 0; k < net->n_y; k++) {
        int p = net->part_of_y[order[k]], output = order[k] - net->first_y[p];
        int whole = net->view[p].flow != NULL && state_of(&net->view[p], output) < 0;
        if (whole && done[p])
            continue;
        done[p] = (char)(done[p] || whole);
        steps[m->n_steps++] = (lw__flow_step){p, whole ? -1 : output};
    }
    m->steps = steps;
    m->n_y = net->n_y;
    return LW_OK;
}

static lw_status take_parts(lw__freezer *w, const lw__net *net, lw__flow_group *m)
{
    lw__flow_part *parts = lw__freezer_get(w, sizeof *parts * (size_t)net->n_parts);
    if (parts == NULL)
        return LW_ERR_MEMORY;
    for (int p = 0; p < net->n_parts; p++) {
        const lw_flow_def *def = net->view[p].flow;
        parts[p] =
            (lw__flow_part){net->parts[p].name, net->view[p], net->first_x[p], net->first_u[p],
                            net->first_y[p],    m->n_modes,   m->n_switches};
        m->n_modes += def != NULL ? def->n_modes : 0;
        m->n_switches += def != NULL ? def->n_switches : 0;
    }
    m->parts = parts;
    m->n_parts = net->n_parts;
    m->n_x = net->n_x;
    return LW_OK;
}

// Tolerances and modes of all parts; a linear part takes the strictest of the flows.
static lw_status take_numbers(lw__freezer *w, lw__flow_group *m, double *start)
{
    double *atol = lw__freezer_get(w, sizeof(double) * (size_t)(m->n_x + m->n_modes + 1));
    double *modes = atol + m->n_x;
    if (atol == NULL)
        return LW_ERR_MEMORY;
    m->rtol = 1;
    for (int p = 0; p < m->n_parts; p++)
        if (m->parts[p].view.flow != NULL)
            m->rtol = fmin(m->rtol, m->parts[p].view.flow->rtol);
    for (int p = 0; p < m->n_parts; p++) {
        const lw__flow_part *part = &m->parts[p];
        const lw_flow_def *def = part->view.flow;
        for (int i = 0; i < part->view.n_x; i++) {
            atol[part->first_x + i] = def != NULL ? def->atol[i] : m->rtol / 100;
            start[part->first_x + i] = part->view.start[i];
        }
        for (int i = 0; def != NULL && i < def->n_modes; i++)
            modes[part->first_mode + i] = def->modes[i];
    }
    m->atol = atol;
    m->modes = modes;
    return LW_OK;
}

static lw_status read_net(lw__freezer *w, lw__group *g, const lw__joint *j, lw__flow_group *m)
{
    lw__net net = {.arena = w->arena, .err = w->err, .n_parts = j->n_parts, .parts = j->parts};
    lw_status status = lw__net_read(&net, j->n_links, j->links, j->n_inputs, j->inputs, 0, NULL);
    if (status == LW_OK)
        status = wire(w, &net, m);
    if (status == LW_OK)
        status = order_outputs(w, &net, m);
    if (status == LW_OK)
        status = take_parts(w, &net, m);
    return status == LW_OK ? LW_OK : lw__blame(g->origin, w->err, status);
}

// ---- channels and moving sources

static lw_status take_channels(lw__freezer *w, lw__group *g, const lw__joint *j, double *u_start)
{
    g->channels = lw__freezer_get(w, sizeof *g->channels * (size_t)(j->n_inputs + 1));
    g->generators = lw__freezer_get(w, sizeof *g->generators * (size_t)(j->n_inputs + 1));
    if (g->channels == NULL || g->generators == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < j->n_inputs; i++) {
        const lw__feed *f = j->feed[i];
        lw_plant_view own = lw_plant_look(w->rig->plants[f->plant].plant);
        lw__channel *c = &g->channels[i];
        c->name = lw__port_text(w, f->plant, own.input_names[f->input]);
        if (c->name == NULL)
            return LW_ERR_MEMORY;
        u_start[i] = lw__first_of(w, &f->driver);
        lw_tick_from_seconds(own.delay[f->input], &c->delay);
        if (f->driver.kind != LW__DRIVER_SOURCE)
            continue;
        const lw__source_item *item = &w->rig->sources[f->driver.index];
        if (!lw__source_moves(&item->def))
            continue;
        LW__TRY(lw__delayed_source(w, &item, own.delay[f->input]));
        c->delay = 0;
        g->generators[g->n_generators++] =
            (lw__generator){.source = f->driver.index,
                            .state = i, // the channel it stands in
                            .slope = -1,
                            .is_sine = item->def.kind == LW_SOURCE_SINE,
                            .def = &item->def};
    }
    return LW_OK;
}

// ---- rows

static lw_status take_rows(lw__freezer *w, lw__group *g, const lw__flow_group *m)
{
    lw__row *rows = lw__freezer_get(w, sizeof *rows * (size_t)(m->n_y + m->n_x + 1));
    if (rows == NULL)
        return LW_ERR_MEMORY;
    for (int p = 0; p < m->n_parts; p++) {
        const lw__flow_part *part = &m->parts[p];
        const lw_plant_view *v = &part->view;
        for (int i = 0; i < v->n_y; i++) {
            lw__row *row = &rows[part->first_y + i];
            int state = state_of(v, i);
            row->state = state >= 0 ? part->first_x + state : -1;
            for (int k = 0; k < v->n_u; k++)
                row->feeds |= v->d[i * v->n_u + k] != 0;
        }
    }
    for (int k = 0; k < m->n_x; k++)
        rows[m->n_y + k].state = k;
    g->rows = rows;
    g->n_rows = m->n_y + m->n_x;
    return LW_OK;
}

// ---- own events

// Where no adc and no latch does, the group's windows are set by the length of the run.
static lw_status take_grid(lw__freezer *w, lw__group *g, int group)
{
    LW__TRY(lw__choose_grid(w, g, group));
    if (g->grid.num == 0) {
        lw_tick window = w->z->lasts / WINDOWS;
        g->grid = lw_period_of_ticks(window > 1 ? window : 1);
    }
    lw_tick shortest, longest;
    lw__grid_steps(g->grid, &shortest, &longest);
    g->first = -(g->grid_offset / longest);
    return LW_OK;
}

static lw_status take_cells(lw__freezer *w, lw__group *g, lw__flow_group *m)
{
    const char *name = g->name;
    g->x = lw__freezer_double(w, name, "state at anchor", LW_SLICE_PLANT, g->n_x);
    g->u_anchor = g->u_now = lw__freezer_double(w, name, "inputs", LW_SLICE_PLANT, g->n_u);
    m->mode_cells = lw__freezer_double(w, name, "modes", LW_SLICE_PLANT, m->n_modes);
    m->side_cells =
        lw__freezer_double(w, name, "sides of switchings", LW_SLICE_PLANT, m->n_switches);
    m->memory = lw__freezer_double(w, name, "memory of the method", LW_SLICE_PLANT, m->n_memory);
    g->anchor = lw__freezer_integer(w, name, "anchor", LW_SLICE_PLANT, 1);
    g->count = lw__freezer_integer(w, name, "anchors so far", LW_SLICE_PLANT, 1);
    g->list_n = g->list_tick = g->list_channel = g->count; // never used: changes move the anchor
    for (int i = 0; i < g->n_generators; i++) {
        g->generators[i].timer = lw__freezer_timer(w);
        g->generators[i].count =
            lw__freezer_integer(w, name, "changes of a moving source", LW_SLICE_PLANT, 1);
        if (g->generators[i].count < 0)
            return LW_ERR_MEMORY;
    }
    for (int c = 0; c < g->n_u; c++)
        LW__TRY(lw__delay_cells(w, &g->channels[c]));
    return g->count >= 0 ? LW_OK : LW_ERR_MEMORY;
}

lw_status lw__freeze_flow(lw__freezer *w, int group, const lw__joint *j)
{
    lw__group *g = &w->z->groups[group];
    lw__flow_group *m = lw__freezer_get(w, sizeof *m);
    if (m == NULL)
        return LW_ERR_MEMORY;
    lw__note_feeds(w, group, j);
    LW__TRY(read_net(w, g, j, m));
    double *start = lw__freezer_get(w, sizeof(double) * (size_t)(m->n_x + j->n_inputs + 1));
    if (start == NULL)
        return LW_ERR_MEMORY;
    g->n_x = g->n_plant_states = m->n_x;
    g->n_u = m->n_u = j->n_inputs;
    g->start = start;
    g->u_start = start + m->n_x;
    g->motion = &lw__flow_motion;
    g->moves = m;
    LW__TRY(take_numbers(w, m, start));
    LW__TRY(take_channels(w, g, j, start + m->n_x));
    LW__TRY(take_rows(w, g, m));
    LW__TRY(take_grid(w, g, group));
    int work = lw__flow_prepare(g, m);
    LW__TRY(take_cells(w, g, m));
    w->z->motion_work = work > w->z->motion_work ? work : w->z->motion_work;
    return LW_OK;
}
