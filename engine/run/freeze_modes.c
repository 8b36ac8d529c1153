// Freezing a group with plants that have modes: each combination of their modes is one linear
// system, formed by connecting the plants as they are in it.
//
// Workload: as many connections as there are combinations, at most MOST_MODES.
//
// Invariants
// 1. Rows: outputs of the plants in order, then the conditions of all switchings, then all states.
//    They have the same numbers in every mode.
// 2. Constants of a mode enter through one more external input, "one", whose columns become the
//    constants of the system.

#include "run/freeze_plants.h"
#include "run/modes.h"

#include "plant/plant.h"

#include <stdio.h>
#include <string.h>

#define MOST_MODES 64
#define WINDOWS 256 // own events of a group that no adc samples, over the length of the run
#define ONE "~one"

typedef struct part_of {
    const lw_modes_def *def; // NULL: linear
    int first_x, first_condition, n_modes;
} part_of;

typedef struct builder {
    lw__freezer *w;
    lw__group *g;
    lw__modes_group *m;
    const lw__joint *j;
    lw__joint all; // with the conditions as outputs and ONE as an input
    part_of parts[LW_PLANT_MAX_STATES];
    lw_plant *plants[LW_PLANT_MAX_STATES]; // of the mode at hand
    int digit[LW_PLANT_MAX_STATES];
    lw__mode *modes;
    const char **names;
    lw__linear first; // of mode 0
} builder;

static lw_status no_memory(builder *b)
{
    return lw__freezer_no_memory(b->w);
}

static const char *keep(builder *b, const char *text)
{
    char *copy = lw__freezer_get(b->w, strlen(text) + 1);
    if (copy != NULL)
        memcpy(copy, text, strlen(text));
    return copy;
}

// ---- what the plants bring

static int conditions_of(const lw_modes_def *def)
{
    int n = def != NULL ? def->n_switchings : 0;
    for (int i = 0; def != NULL && i < def->n_switchings; i++)
        n += def->switchings[i].conditional != 0;
    return n;
}

static lw_status refuse(builder *b, const char *plant, const char *text)
{
    return lw__fail_at(b->g->origin, b->w->err, LW_ERR_ARGUMENT, "plant \"%s\": %s", plant, text);
}

static lw_status read_parts(builder *b)
{
    int n_modes = 1, n_x = 0, n_conditions = 0;
    for (int p = 0; p < b->j->n_parts; p++) {
        lw_plant_view v = lw_plant_look(b->j->parts[p].plant);
        if (v.flow != NULL)
            return refuse(b, b->j->parts[p].name,
                          "a flow cannot be connected to a plant with modes; write the whole as "
                          "one flow");
        int own = v.modes != NULL ? v.modes->n_modes : 1;
        b->parts[p] = (part_of){v.modes, n_x, n_conditions, own};
        n_x += v.n_x;
        n_conditions += conditions_of(v.modes);
        n_modes *= own;
        if (n_modes > MOST_MODES)
            return refuse(b, b->j->parts[p].name,
                          "connected plants have more than 64 combinations of modes");
    }
    if (b->j->n_outputs + n_conditions > LW_PLANT_MAX_PORTS * 4 ||
        b->j->n_inputs >= LW_PLANT_MAX_PORTS)
        return lw__group_too_large(b->w, b->g->origin);
    b->m->system.n_modes = n_modes;
    b->m->system.n_conditions = n_conditions;
    return LW_OK;
}

// Conditions are outputs "~1", "~2", ... of their plants.
static lw_status add_outputs(builder *b, int part)
{
    for (int i = 0; i < conditions_of(b->parts[part].def); i++) {
        char port[260], name[24];
        snprintf(port, sizeof port, "%s.~%d", b->j->parts[part].name, i + 1);
        snprintf(name, sizeof name, "~y%d", b->all.n_outputs);
        const char *own_port = keep(b, port), *own_name = keep(b, name);
        if (own_port == NULL || own_name == NULL)
            return LW_ERR_MEMORY;
        b->all.outputs[b->all.n_outputs++] = (lw_port){own_name, own_port};
    }
    return LW_OK;
}

static lw_status extend_joint(builder *b)
{
    b->all = *b->j;
    for (int p = 0; p < b->j->n_parts; p++)
        LW__TRY(add_outputs(b, p));
    return LW_OK;
}

// Every plant with modes takes ONE; the list of inputs is one of names and ports.
static lw_status list_inputs(builder *b, lw_port *inputs, int *n)
{
    *n = b->j->n_inputs;
    memcpy(inputs, b->j->inputs, sizeof *inputs * (size_t)*n);
    for (int p = 0; p < b->j->n_parts; p++) {
        char port[260];
        if (b->parts[p].def == NULL)
            continue;
        snprintf(port, sizeof port, "%s." ONE, b->j->parts[p].name);
        const char *own = keep(b, port);
        if (own == NULL)
            return LW_ERR_MEMORY;
        inputs[(*n)++] = (lw_port){ONE, own};
    }
    return LW_OK;
}

// ---- a plant in one of its modes

typedef struct sheet {
    double b[LW_PLANT_MAX_STATES * LW_PLANT_MAX_PORTS];
    double c[LW_PLANT_MAX_PORTS * 4 * LW_PLANT_MAX_STATES];
    double d[LW_PLANT_MAX_PORTS * 4 * LW_PLANT_MAX_PORTS];
    double delay[LW_PLANT_MAX_PORTS];
    char text[LW_PLANT_MAX_PORTS * 4][16];
    const char *inputs[LW_PLANT_MAX_PORTS], *outputs[LW_PLANT_MAX_PORTS * 4];
} sheet;

// One more column at the right.
static void widen(const double *from, int rows, int columns, const double *column, double *to)
{
    for (int i = 0; i < rows; i++) {
        memcpy(to + i * (columns + 1), from + i * columns, sizeof(double) * (size_t)columns);
        to[i * (columns + 1) + columns] = column[i];
    }
}

static void add_condition(const lw_plant_view *v, const lw_condition *c, int row, sheet *s)
{
    memcpy(s->c + row * v->n_x, c->x, sizeof(double) * (size_t)v->n_x);
    memcpy(s->d + row * (v->n_u + 1), c->u, sizeof(double) * (size_t)v->n_u);
    s->d[row * (v->n_u + 1) + v->n_u] = c->offset;
}

static lw_status plant_in_mode(builder *b, int part, int mode, sheet *s)
{
    lw_plant_view v = lw_plant_look(b->j->parts[part].plant);
    const lw_modes_def *def = v.modes;
    const lw_mode *m = &def->modes[mode];
    int row = v.n_y;
    memset(s, 0, sizeof *s);
    widen(m->b, v.n_x, v.n_u, m->constant, s->b);
    memcpy(s->c, m->c, sizeof(double) * (size_t)(v.n_y * v.n_x));
    widen(m->d, v.n_y, v.n_u, m->offset, s->d);
    for (int i = 0; i < def->n_switchings; i++) {
        add_condition(&v, &def->switchings[i].when, row++, s);
        if (def->switchings[i].conditional)
            add_condition(&v, &def->switchings[i].only_if, row++, s);
    }
    memcpy(s->delay, v.delay, sizeof(double) * (size_t)v.n_u);
    memcpy(s->inputs, v.input_names, sizeof(char *) * (size_t)v.n_u);
    memcpy(s->outputs, v.output_names, sizeof(char *) * (size_t)v.n_y);
    s->inputs[v.n_u] = ONE;
    for (int i = v.n_y; i < row; i++) {
        snprintf(s->text[i], sizeof s->text[i], "~%d", i - v.n_y + 1);
        s->outputs[i] = s->text[i];
    }
    v = (lw_plant_view){v.n_x,   v.n_u + 1, row,           m->a,      s->b,       s->c, s->d,
                        v.start, s->delay,  v.state_names, s->inputs, s->outputs, NULL, NULL};
    return lw__plant_make(&v, LW__PLANT_MAX_SHOWN, &b->plants[part], b->w->err);
}

// ---- a mode of the group

// Take the last input of a plant off again: its columns are constants.
static lw_status strip(builder *b, const lw_plant *whole, double *k, double *e, lw_plant **out)
{
    lw_plant_view v = lw_plant_look(whole);
    int n_u = v.n_u - 1;
    double *own = lw__freezer_get(b->w, sizeof(double) * (size_t)((v.n_x + v.n_y) * n_u + 1));
    if (own == NULL)
        return LW_ERR_MEMORY;
    double *d = own + v.n_x * n_u;
    for (int i = 0; i < v.n_x; i++) {
        memcpy(own + i * n_u, v.b + i * v.n_u, sizeof(double) * (size_t)n_u);
        k[i] = v.b[i * v.n_u + n_u];
    }
    for (int i = 0; i < v.n_y; i++) {
        memcpy(d + i * n_u, v.d + i * v.n_u, sizeof(double) * (size_t)n_u);
        e[i] = v.d[i * v.n_u + n_u];
    }
    v.b = own;
    v.d = d;
    v.n_u = n_u;
    return lw__plant_make(&v, LW__PLANT_MAX_SHOWN, out, b->w->err);
}

static const double *by_columns(builder *b, int rows, int columns, const double *from)
{
    double *to = lw__freezer_get(b->w, sizeof(double) * (size_t)(rows * columns + 1));
    for (int i = 0; to != NULL && i < rows; i++)
        for (int j = 0; j < columns; j++)
            to[j * rows + i] = from[i * columns + j];
    return to;
}

static lw_status take_system(builder *b, const lw_plant *whole, lw__mode *mode, lw__linear *s)
{
    size_t most = LW__KERNEL_MAX + LW_PLANT_MAX_PORTS * 4;
    double *k = lw__freezer_get(b->w, sizeof(double) * 2 * most), norm = 0;
    lw_plant *plain = NULL;
    if (k == NULL)
        return LW_ERR_MEMORY;
    lw_status status = strip(b, whole, k, k + most, &plain);
    if (status == LW_OK)
        status = lw__make_linear(b->w, b->g, &b->all, plain, s);
    lw_plant_free(plain);
    if (status == LW_OK)
        status = lw__kernel_norm(s->n, s->a, &norm, b->w->err);
    if (status != LW_OK)
        return status;
    mode->a = by_columns(b, s->n, s->n, s->a);
    mode->b = by_columns(b, s->n, s->m, s->b);
    mode->k = k;
    mode->c = s->c;
    mode->d = s->d;
    mode->e = k + most;
    mode->piece = norm > 0 ? LW__SWITCHED_REACH / norm : 1e3;
    return mode->a != NULL && mode->b != NULL ? LW_OK : LW_ERR_MEMORY;
}

static int find_mode(const lw_modes_def *def, const char *name)
{
    int i = 0;
    while (strcmp(def->modes[i].name, name) != 0)
        i++;
    return i;
}

// The mode of the group in which plant `part` is in its mode `digit`, the others as they are.
static int mode_with(const builder *b, int part, int digit)
{
    int mode = 0;
    for (int p = 0; p < b->j->n_parts; p++)
        mode = mode * b->parts[p].n_modes + (p == part ? digit : b->digit[p]);
    return mode;
}

static void add_switchings(builder *b, int part, lw__switching *list, int *n)
{
    const part_of *p = &b->parts[part];
    int row = b->j->n_outputs + p->first_condition;
    for (int i = 0; p->def != NULL && i < p->def->n_switchings; i++) {
        const lw_switching *w = &p->def->switchings[i];
        int to = find_mode(p->def, w->to), when = row++, only_if = w->conditional ? row++ : -1;
        int applies =
            w->from != NULL ? find_mode(p->def, w->from) == b->digit[part] : to != b->digit[part];
        if (applies)
            list[(*n)++] = (lw__switching){.row = when,
                                           .only_if = only_if,
                                           .to = mode_with(b, part, to),
                                           .first_x = p->first_x,
                                           .n_x = w->reset != NULL ? p->def->n_x : 0,
                                           .r = w->reset,
                                           .r0 = w->reset_offset};
    }
}

static lw_status take_switchings(builder *b, lw__mode *mode)
{
    int n = 0;
    for (int p = 0; p < b->j->n_parts; p++)
        n += b->parts[p].def != NULL ? b->parts[p].def->n_switchings : 0;
    lw__switching *list = lw__freezer_get(b->w, sizeof *list * (size_t)(n + 1));
    if (list == NULL)
        return LW_ERR_MEMORY;
    for (int p = 0; p < b->j->n_parts; p++)
        add_switchings(b, p, list, &mode->n_switchings);
    mode->switchings = list;
    b->m->n_switchings = n;
    return LW_OK;
}

static lw_status take_name(builder *b, int mode)
{
    char text[400] = "";
    for (int p = 0; p < b->j->n_parts; p++)
        if (b->parts[p].def != NULL) {
            size_t at = strlen(text);
            snprintf(text + at, sizeof text - at, "%s%.60s", at > 0 ? ", " : "",
                     b->parts[p].def->modes[b->digit[p]].name);
        }
    b->names[mode] = keep(b, text);
    return b->names[mode] != NULL ? LW_OK : LW_ERR_MEMORY;
}

static lw_status connect_mode(builder *b, sheet *s, lw_plant **whole)
{
    lw_part parts[LW_PLANT_MAX_STATES];
    lw_port inputs[LW_PLANT_MAX_PORTS + LW_PLANT_MAX_STATES];
    int n_inputs = 0;
    LW__TRY(list_inputs(b, inputs, &n_inputs));
    for (int p = 0; p < b->j->n_parts; p++) {
        parts[p] = b->j->parts[p];
        if (b->parts[p].def == NULL)
            continue;
        LW__TRY(plant_in_mode(b, p, b->digit[p], s));
        parts[p].plant = b->plants[p];
    }
    return lw_plant_connect(b->j->n_parts, parts, b->j->n_links, b->j->links, n_inputs, inputs,
                            b->all.n_outputs, b->all.outputs, whole, b->w->err);
}

static void free_plants(builder *b)
{
    for (int p = 0; p < b->j->n_parts; p++) {
        lw_plant_free(b->plants[p]);
        b->plants[p] = NULL;
    }
}

static lw_status build_mode(builder *b, int mode, sheet *s, lw__linear *linear)
{
    lw_plant *whole = NULL;
    for (int p = b->j->n_parts - 1, rest = mode; p >= 0; p--) {
        b->digit[p] = rest % b->parts[p].n_modes;
        rest /= b->parts[p].n_modes;
    }
    lw_status status = connect_mode(b, s, &whole);
    if (status == LW_OK)
        status = take_system(b, whole, &b->modes[mode], linear);
    lw_plant_free(whole);
    free_plants(b);
    if (status != LW_OK)
        return lw__blame(b->g->origin, b->w->err, status);
    LW__TRY(take_switchings(b, &b->modes[mode]));
    return take_name(b, mode);
}

// ---- rows

// A row is read from its state's cell only where it is that state in every mode and nothing jumps.
static void check_states(builder *b)
{
    lw__row *rows = (lw__row *)b->g->rows; // made by lw__make_rows just now
    int n = b->g->n_x;
    for (int r = 0; r < b->g->n_rows; r++)
        for (int i = 0; i < b->m->system.n_modes && rows[r].state >= 0; i++) {
            const lw__mode *m = &b->modes[i];
            int same = memcmp(m->c + r * n, b->modes[0].c + r * n, sizeof(double) * (size_t)n) == 0;
            for (int k = 0; k < b->g->n_u; k++)
                same &= m->d[r * b->g->n_u + k] == 0;
            same &= m->e[r] == 0;
            for (int k = 0; k < m->n_switchings; k++)
                same &= m->switchings[k].n_x == 0;
            if (!same)
                rows[r].state = -1;
        }
}

static lw_status take_rows(builder *b)
{
    lw__switched *q = &b->m->system;
    int *condition_row = lw__freezer_get(b->w, sizeof(int) * (size_t)(q->n_conditions + 1));
    if (condition_row == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < q->n_conditions; i++)
        condition_row[i] = b->j->n_outputs + i;
    q->condition_row = condition_row;
    q->n = b->g->n_x;
    q->m = b->g->n_u;
    q->n_rows = b->g->n_rows;
    q->modes = b->modes;
    LW__TRY(lw__make_rows(b->w, b->g, &b->first));
    check_states(b);
    return LW_OK;
}

// ---- cells and own events

static lw_status take_cells(builder *b)
{
    lw__freezer *w = b->w;
    lw__group *g = b->g;
    lw__modes_group *m = b->m;
    const char *name = g->name;
    g->x = lw__freezer_double(w, name, "state at anchor", LW_SLICE_PLANT, g->n_x);
    g->u_anchor = g->u_now = lw__freezer_double(w, name, "inputs", LW_SLICE_PLANT, g->n_u);
    m->noise = lw__freezer_double(w, name, "rounding of conditions", LW_SLICE_PLANT,
                                  m->system.n_conditions);
    m->mode = lw__freezer_integer(w, name, "mode", LW_SLICE_PLANT, 1);
    m->switched_at = lw__freezer_integer(w, name, "last switching", LW_SLICE_PLANT, 1);
    m->in_a_row = lw__freezer_integer(w, name, "quick switchings in a row", LW_SLICE_PLANT, 1);
    m->n_so_far = lw__freezer_integer(w, name, "switchings so far", LW_SLICE_PLANT, 1);
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
    return g->count >= 0 && m->noise >= 0 ? LW_OK : LW_ERR_MEMORY;
}

static lw_status take_grid(builder *b, int group)
{
    lw__group *g = b->g;
    LW__TRY(lw__choose_grid(b->w, g, group));
    if (g->grid.num == 0) {
        lw_tick window = b->w->z->lasts / WINDOWS;
        g->grid = lw_period_of_ticks(window > 1 ? window : 1);
    }
    lw_tick shortest, longest;
    lw__grid_steps(g->grid, &shortest, &longest);
    g->first = -(g->grid_offset / longest);
    return LW_OK;
}

static lw_status build_modes(builder *b)
{
    sheet *s = lw__freezer_get(b->w, sizeof *s);
    size_t n = (size_t)b->m->system.n_modes;
    b->modes = lw__freezer_get(b->w, sizeof *b->modes * n);
    b->names = lw__freezer_get(b->w, sizeof *b->names * n);
    if (s == NULL || b->modes == NULL || b->names == NULL)
        return no_memory(b);
    for (int i = 0; i < b->m->system.n_modes; i++) {
        lw__linear linear = {0};
        LW__TRY(build_mode(b, i, s, &linear));
        if (i == 0)
            b->first = linear;
    }
    b->m->names = b->names;
    return LW_OK;
}

lw_status lw__freeze_modes(lw__freezer *w, int group, const lw__joint *j)
{
    builder *b = lw__freezer_get(w, sizeof *b);
    lw__modes_group *m = lw__freezer_get(w, sizeof *m);
    if (b == NULL || m == NULL)
        return LW_ERR_MEMORY;
    b->w = w;
    b->g = &w->z->groups[group];
    b->m = m;
    b->j = j;
    b->g->motion = &lw__modes_motion;
    b->g->moves = m;
    LW__TRY(read_parts(b));
    LW__TRY(extend_joint(b));
    lw__note_feeds(w, group, &b->all);
    LW__TRY(build_modes(b));
    LW__TRY(take_rows(b));
    LW__TRY(take_grid(b, group));
    LW__TRY(take_cells(b));
    int work = lw__modes_work(&m->system);
    w->z->motion_work = work > w->z->motion_work ? work : w->z->motion_work;
    return LW_OK;
}
