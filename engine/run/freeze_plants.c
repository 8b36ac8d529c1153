// Freezing plants: connected plants become groups, each one linear system with its channels, the
// generators of the moving sources that drive it, its anchor grid and its kernel.
//
// Invariants
// 1. What is chosen for a group depends on the group and what drives or samples it only.

#include "run/freeze_plants.h"
#include "run/pwm.h"

#include "base/alloc.h"
#include "io/source.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static int same(const char *a, const char *b)
{
    return strcmp(a, b) == 0;
}

static int find_text(const char *const *list, int n, const char *text, size_t length)
{
    for (int i = 0; i < n; i++)
        if (strlen(list[i]) == length && memcmp(list[i], text, length) == 0)
            return i;
    return -1;
}

// ---- who drives which input

// Split "plant.port" and find the plant; *port points into the text.
static int find_plant(const lw_rig *rig, const char *text, const char **port)
{
    const char *dot = strchr(text, '.');
    *port = dot != NULL ? dot + 1 : "";
    for (int i = 0; dot != NULL && i < rig->n_plants; i++)
        if (strlen(rig->plants[i].name) == (size_t)(dot - text) &&
            memcmp(rig->plants[i].name, text, (size_t)(dot - text)) == 0)
            return i;
    return -1;
}

static lw_status unknown_input(lw__freezer *w, const char *origin, const char *what,
                               const char *text)
{
    const lw_rig *rig = w->rig;
    char near_text[420] = "";
    const char *names[64] = {0};
    char buffer[64][220];
    int n = 0;
    for (int p = 0; p < rig->n_plants; p++) {
        lw_plant_view v = lw_plant_look(rig->plants[p].plant);
        for (int i = 0; i < v.n_u && n < 64; i++) {
            snprintf(buffer[n], sizeof buffer[n], "%.100s.%.100s", rig->plants[p].name,
                     v.input_names[i]);
            names[n] = buffer[n];
            n++;
        }
    }
    const char *near = lw_nearest_name(text, names, n);
    if (near == NULL && n == 1)
        near = names[0];
    if (near != NULL)
        snprintf(near_text, sizeof near_text, "; nearest \"%.200s\"", near);
    return lw__fail_at(origin, w->err, LW_ERR_NAME, "%s: to: no plant input \"%s\"%s", what, text,
                       near_text);
}

static lw_status add_feed(lw__freezer *w, const char *what, const char *to, lw__driver driver)
{
    const char *port;
    int plant = find_plant(w->rig, to, &port);
    int input = -1;
    if (plant >= 0) {
        lw_plant_view v = lw_plant_look(w->rig->plants[plant].plant);
        input = find_text(v.input_names, v.n_u, port, strlen(port));
    }
    if (input < 0)
        return unknown_input(w, driver.origin, what, to);
    for (int i = 0; i < w->n_feeds; i++)
        if (w->feeds[i].plant == plant && w->feeds[i].input == input)
            return lw__fail_at(driver.origin, w->err, LW_ERR_DUPLICATE,
                               "%s: to: plant input \"%s\" already has a driver", what, to);
    w->feeds[w->n_feeds++] = (lw__feed){plant, input, driver, -1, -1};
    return LW_OK;
}

static lw_status find_driver(lw__freezer *w, const lw__connection_item *item, lw__driver *out)
{
    const lw_rig *rig = w->rig;
    *out = (lw__driver){.origin = item->origin};
    for (int i = 0; i < rig->n_sources; i++)
        if (same(rig->sources[i].def.name, item->from)) {
            out->kind = LW__DRIVER_SOURCE;
            out->index = i;
            return LW_OK;
        }
    for (int i = 0; i < rig->n_values; i++)
        if (same(rig->values[i].name, item->from)) {
            out->kind = LW__DRIVER_VALUE;
            out->index = i;
            return LW_OK;
        }
    const char *port;
    int plant = find_plant(rig, item->from, &port);
    if (plant >= 0) {
        lw_plant_view v = lw_plant_look(rig->plants[plant].plant);
        int output = find_text(v.output_names, v.n_y, port, strlen(port));
        if (output >= 0) {
            *out = (lw__driver){LW__DRIVER_PLANT, plant, output, item->origin};
            return LW_OK;
        }
    }
    return lw__fail_at(item->origin, w->err, LW_ERR_NAME,
                       "connection: from: no source, value or plant output \"%s\"", item->from);
}

static lw_status collect_feeds(lw__freezer *w)
{
    const lw_rig *rig = w->rig;
    w->feeds = lw__freezer_get(w, sizeof *w->feeds *
                                      (size_t)(rig->n_connections + rig->n_dacs + rig->n_pwms + 1));
    if (w->feeds == NULL)
        return LW_ERR_MEMORY;
    for (int i = 0; i < rig->n_connections; i++) {
        lw__driver driver;
        LW__TRY(find_driver(w, &rig->connections[i], &driver));
        LW__TRY(add_feed(w, "connection", rig->connections[i].to, driver));
    }
    for (int i = 0; i < rig->n_dacs; i++) {
        const lw_dac_def *def = &rig->dacs[i].def;
        char what[240];
        snprintf(what, sizeof what, "dac \"%s\"", def->name);
        if (def->to != NULL)
            LW__TRY(add_feed(w, what, def->to, (lw__driver){LW__DRIVER_DAC, i, 0, def->origin}));
    }
    for (int i = 0; i < rig->n_pwms; i++) {
        const lw_pwm_def *def = &rig->pwms[i].def;
        char what[240];
        snprintf(what, sizeof what, "pwm \"%s\"", def->name);
        LW__TRY(add_feed(w, what, def->to, (lw__driver){LW__DRIVER_PWM, i, 0, def->origin}));
    }
    return LW_OK;
}

// ---- groups

// A comparator between two plants joins them into one group; 1 where that was news.
static int join_compared(lw__freezer *w)
{
    int changed = 0;
    for (int i = 0; i < w->rig->n_comparators; i++) {
        const lw_comparator_def *def = &w->rig->comparators[i].def;
        const char *port;
        int a = find_plant(w->rig, def->of, &port);
        int b = def->against != NULL ? find_plant(w->rig, def->against, &port) : -1;
        if (a < 0 || b < 0 || w->group_of[a] == w->group_of[b])
            continue;
        int least = w->group_of[a] < w->group_of[b] ? w->group_of[a] : w->group_of[b];
        w->group_of[a] = w->group_of[b] = least;
        changed = 1;
    }
    return changed;
}

// Number the groups: plants joined by connections share one.
static lw_status number_groups(lw__freezer *w)
{
    int n = w->rig->n_plants, n_groups = 0, changed = 1;
    w->group_of = lw__freezer_get(w, sizeof(int) * (size_t)(3 * n + 3));
    if (w->group_of == NULL)
        return LW_ERR_MEMORY;
    w->first_row = w->group_of + n + 1;
    w->first_state = w->first_row + n + 1;
    for (int i = 0; i < n; i++)
        w->group_of[i] = i;
    while (changed) {
        changed = join_compared(w);
        for (int i = 0; i < w->n_feeds; i++) {
            const lw__feed *f = &w->feeds[i];
            if (f->driver.kind != LW__DRIVER_PLANT)
                continue;
            int *a = &w->group_of[f->plant], *b = &w->group_of[f->driver.index];
            int least = *a < *b ? *a : *b;
            changed |= *a != *b;
            *a = *b = least;
        }
    }
    for (int i = 0; i < n; i++)
        w->group_of[i] = w->group_of[i] == i ? n_groups++ : w->group_of[w->group_of[i]];
    w->z->n_groups = n_groups;
    w->z->groups = lw__freezer_get(w, sizeof *w->z->groups * (size_t)(n_groups + 1));
    return w->z->groups != NULL ? LW_OK : LW_ERR_MEMORY;
}

const char *lw__port_text(lw__freezer *w, int plant, const char *port)
{
    const char *name = w->rig->plants[plant].name;
    size_t size = strlen(name) + strlen(port) + 2;
    char *text = lw__freezer_get(w, size);
    if (text != NULL)
        snprintf(text, size, "%s.%s", name, port);
    return text;
}

static const char *numbered(lw__freezer *w, char letter, int n)
{
    char *text = lw__freezer_get(w, 16);
    if (text != NULL)
        snprintf(text, 16, "%c%d", letter, n);
    return text;
}

lw_status lw__group_too_large(lw__freezer *w, const char *origin)
{
    return lw__fail_at(origin, w->err, LW_ERR_SHAPE,
                       "connected plants have too many parts, inputs or outputs; permitted 64 "
                       "states, 32 inputs, 32 links, 128 outputs");
}

static lw_status join_plant(lw__freezer *w, lw__joint *j, int plant)
{
    const lw__plant_item *item = &w->rig->plants[plant];
    lw_plant_view v = lw_plant_look(item->plant);
    if (j->n_parts == LW_PLANT_MAX_STATES || j->n_outputs + v.n_y > LW_PLANT_MAX_PORTS * 4)
        return lw__group_too_large(w, item->origin);
    j->parts[j->n_parts++] = (lw_part){item->name, item->plant};
    w->first_row[plant] = j->n_outputs;
    for (int i = 0; i < v.n_y; i++) {
        const char *port = lw__port_text(w, plant, v.output_names[i]);
        const char *name = numbered(w, 'y', j->n_outputs);
        if (port == NULL || name == NULL)
            return LW_ERR_MEMORY;
        j->outputs[j->n_outputs++] = (lw_port){name, port};
    }
    return LW_OK;
}

static lw_status join_feed(lw__freezer *w, lw__joint *j, lw__feed *f)
{
    lw_plant_view v = lw_plant_look(w->rig->plants[f->plant].plant);
    const char *to = lw__port_text(w, f->plant, v.input_names[f->input]);
    if (to == NULL)
        return LW_ERR_MEMORY;
    if (f->driver.kind == LW__DRIVER_PLANT) {
        lw_plant_view from = lw_plant_look(w->rig->plants[f->driver.index].plant);
        const char *text = lw__port_text(w, f->driver.index, from.output_names[f->driver.port]);
        if (text == NULL)
            return LW_ERR_MEMORY;
        if (j->n_links == LW_PLANT_MAX_PORTS)
            return lw__group_too_large(w, f->driver.origin);
        j->links[j->n_links++] = (lw_link){text, to, 1};
        return LW_OK;
    }
    if (j->n_inputs == LW_PLANT_MAX_PORTS)
        return lw__group_too_large(w, f->driver.origin);
    const char *name = numbered(w, 'u', j->n_inputs);
    if (name == NULL)
        return LW_ERR_MEMORY;
    j->feed[j->n_inputs] = f;
    j->inputs[j->n_inputs++] = (lw_port){name, to};
    return LW_OK;
}

lw_status lw__join_group(lw__freezer *w, int group, lw__joint *j)
{
    for (int p = 0; p < w->rig->n_plants; p++)
        if (w->group_of[p] == group)
            LW__TRY(join_plant(w, j, p));
    for (int i = 0; i < w->n_feeds; i++)
        if (w->group_of[w->feeds[i].plant] == group)
            LW__TRY(join_feed(w, j, &w->feeds[i]));
    return LW_OK;
}

static const char *group_name(lw__freezer *w, int group)
{
    for (int p = 0; p < w->rig->n_plants; p++)
        if (w->group_of[p] == group)
            return w->rig->plants[p].name;
    return "";
}

static const char *group_origin(lw__freezer *w, int group)
{
    for (int i = 0; i < w->n_feeds; i++)
        if (w->group_of[w->feeds[i].plant] == group && w->feeds[i].driver.kind == LW__DRIVER_PLANT)
            return w->feeds[i].driver.origin;
    for (int p = 0; p < w->rig->n_plants; p++)
        if (w->group_of[p] == group)
            return w->rig->plants[p].origin;
    return NULL;
}

// ---- the augmented system of a group

static int count_generators(const lw__freezer *w, const lw__joint *j, int *slopes)
{
    int n = 0;
    *slopes = 0;
    for (int i = 0; i < j->n_inputs; i++) {
        const lw__feed *f = j->feed[i];
        if (f->driver.kind != LW__DRIVER_SOURCE)
            continue;
        const lw_source_def *def = &w->rig->sources[f->driver.index].def;
        if (!lw__source_moves(def))
            continue;
        n++;
        *slopes += def->kind != LW_SOURCE_SINE;
    }
    return n;
}

// Bring in one moving source at external input `column`: states, slope channel, couplings.
static void add_generator(lw__linear *s, const lw_plant_view *v, int column,
                          const lw_source_def *def, const lw__generator *g)
{
    int n = s->n, m = s->m;
    for (int i = 0; i < v->n_x; i++)
        s->a[i * n + g->state] = v->b[i * v->n_u + column];
    for (int r = 0; r < v->n_y; r++)
        s->c[r * n + g->state] = v->d[r * v->n_u + column];
    if (g->is_sine) {
        double turn = lw__source_turn(def);
        s->a[g->state * n + g->state + 1] = turn;
        s->a[(g->state + 1) * n + g->state] = -turn;
        s->u_start[column] = def->before;
    } else {
        s->b[g->state * m + g->slope] = 1;
        s->start[g->state] = lw__source_first(def);
    }
}

double lw__first_of(const lw__freezer *w, const lw__driver *driver)
{
    switch (driver->kind) {
    case LW__DRIVER_SOURCE:
        return lw__source_first(&w->rig->sources[driver->index].def);
    case LW__DRIVER_VALUE:
        return w->rig->values[driver->index].start;
    case LW__DRIVER_DAC:
        return w->rig->dacs[driver->index].def.start;
    case LW__DRIVER_PWM:
        return lw__pwm_first(&w->rig->pwms[driver->index]);
    default:
        return 0;
    }
}

lw_status lw__delayed_source(lw__freezer *w, const lw__source_item **item, double delay)
{
    if (delay == 0)
        return LW_OK;
    lw__source_item *copy = lw__freezer_get(w, sizeof *copy);
    double *time = lw__freezer_get(w, sizeof(double) * (size_t)((*item)->def.n + 1));
    if (copy == NULL || time == NULL)
        return LW_ERR_MEMORY;
    *copy = **item;
    copy->def.at += delay;
    for (int i = 0; i < copy->def.n; i++)
        time[i] = copy->def.time[i] + delay;
    copy->def.time = time;
    *item = copy;
    return LW_OK;
}

static lw_status fill_inputs(lw__freezer *w, const lw__joint *j, const lw_plant_view *v,
                             lw__linear *s, lw__generator *generators, lw__channel *channels)
{
    int state = v->n_x, slope = v->n_u, next = 0;
    for (int i = 0; i < j->n_inputs; i++) {
        const lw__feed *f = j->feed[i];
        lw_plant_view own = lw_plant_look(w->rig->plants[f->plant].plant);
        channels[i].name = lw__port_text(w, f->plant, own.input_names[f->input]);
        if (channels[i].name == NULL)
            return LW_ERR_MEMORY;
        lw_tick_from_seconds(v->delay[i], &channels[i].delay);
        s->u_start[i] = lw__first_of(w, &f->driver);
        if (f->driver.kind != LW__DRIVER_SOURCE)
            continue;
        const lw__source_item *item = &w->rig->sources[f->driver.index];
        if (!lw__source_moves(&item->def))
            continue;
        LW__TRY(lw__delayed_source(w, &item, v->delay[i]));
        lw__generator *gen = &generators[next++];
        *gen = (lw__generator){.source = f->driver.index,
                               .def = &item->def,
                               .state = state,
                               .slope = -1,
                               .is_sine = item->def.kind == LW_SOURCE_SINE};
        s->u_start[i] = 0;
        channels[i].delay = 0;
        if (gen->is_sine) {
            state += 2;
        } else {
            channels[slope].name = channels[i].name;
            gen->slope = slope++;
            state++;
        }
        add_generator(s, v, i, &item->def, gen);
    }
    return LW_OK;
}

lw_status lw__make_linear(lw__freezer *w, lw__group *g, const lw__joint *j, const lw_plant *plant,
                          lw__linear *s)
{
    lw_plant_view v = lw_plant_look(plant);
    int slopes, n_gen = count_generators(w, j, &slopes);
    s->n = v.n_x + 2 * n_gen - slopes;
    s->m = v.n_u + slopes;
    size_t n = (size_t)s->n, m = (size_t)s->m, rows = (size_t)(v.n_y + v.n_x);
    if (s->n > LW__KERNEL_MAX)
        return lw__group_too_large(w, g->origin);
    s->a = lw__freezer_get(w, sizeof(double) * (n * n + n * m + rows * (n + m) + n + m + 1));
    lw__generator *generators = lw__freezer_get(w, sizeof *generators * (size_t)(n_gen + 1));
    lw__channel *channels = lw__freezer_get(w, sizeof *channels * (m + 1));
    if (s->a == NULL || generators == NULL || channels == NULL)
        return LW_ERR_MEMORY;
    s->b = s->a + n * n;
    s->c = s->b + n * m;
    s->d = s->c + rows * n;
    s->start = s->d + rows * m;
    s->u_start = s->start + n;
    for (int i = 0; i < v.n_x; i++) {
        memcpy(s->a + (size_t)i * n, v.a + i * v.n_x, sizeof(double) * (size_t)v.n_x);
        memcpy(s->b + (size_t)i * m, v.b + i * v.n_u, sizeof(double) * (size_t)v.n_u);
        s->c[((size_t)(v.n_y + i)) * n + (size_t)i] = 1;
        s->start[i] = v.start[i];
    }
    for (int r = 0; r < v.n_y; r++) {
        memcpy(s->c + (size_t)r * n, v.c + r * v.n_x, sizeof(double) * (size_t)v.n_x);
        memcpy(s->d + (size_t)r * m, v.d + r * v.n_u, sizeof(double) * (size_t)v.n_u);
    }
    g->n_x = s->n;
    g->n_u = s->m;
    g->n_rows = v.n_y + v.n_x;
    g->n_plant_states = v.n_x;
    g->n_generators = n_gen;
    g->generators = generators;
    g->channels = channels;
    g->start = s->start;
    g->u_start = s->u_start;
    return fill_inputs(w, j, &v, s, generators, channels);
}

lw_status lw__make_rows(lw__freezer *w, lw__group *g, const lw__linear *s)
{
    lw__row *rows = lw__freezer_get(w, sizeof *rows * (size_t)(g->n_rows + 1));
    if (rows == NULL)
        return LW_ERR_MEMORY;
    for (int r = 0; r < g->n_rows; r++) {
        lw__row *row = &rows[r];
        row->c = s->c + r * s->n;
        row->d = s->d + r * s->m;
        row->state = -1;
        int others = 0;
        for (int i = 0; i < s->n; i++)
            if (row->c[i] == 1 && row->state < 0)
                row->state = i;
            else
                others |= row->c[i] != 0;
        for (int i = 0; i < s->m; i++)
            row->feeds |= row->d[i] != 0;
        if (others || row->feeds)
            row->state = -1;
    }
    g->rows = rows;
    return LW_OK;
}

// ---- the anchor grid

static int samples_group(const lw__freezer *w, const lw_adc_def *def, int group)
{
    for (int c = 0; c < def->n_channels; c++) {
        const char *port;
        int plant = find_plant(w->rig, def->of[c], &port);
        if (plant >= 0 && w->group_of[plant] == group)
            return 1;
    }
    return 0;
}

static int shorter(lw_period a, lw_period b)
{
    return b.num == 0 || (double)a.num / (double)a.den < (double)b.num / (double)b.den;
}

// The fastest periodic adc on the group, else a latch that drives it, else a length within which
// the group moves by about its own norm.
lw_status lw__choose_grid(lw__freezer *w, lw__group *g, int group)
{
    const lw_rig *rig = w->rig;
    double offset = 0;
    g->grid_adc = -1;
    g->grid_of = "chosen";
    for (int i = 0; i < rig->n_adcs; i++) {
        const lw_adc_def *def = &rig->adcs[i].def;
        if (def->every.num > 0 && samples_group(w, def, group) && shorter(def->every, g->grid)) {
            g->grid = def->every;
            offset = def->offset;
            g->grid_of = def->name;
            g->grid_adc = i;
        }
    }
    for (int i = 0; g->grid_adc < 0 && i < w->n_feeds; i++) {
        const lw__feed *f = &w->feeds[i];
        if (w->group_of[f->plant] != group || f->driver.kind != LW__DRIVER_DAC)
            continue;
        const lw_dac_def *def = &rig->dacs[f->driver.index].def;
        if (def->latch.num > 0 && shorter(def->latch, g->grid)) {
            g->grid = def->latch;
            offset = def->phase[0];
            g->grid_of = def->name;
        }
    }
    for (int i = 0; g->grid.num == 0 && i < w->n_feeds; i++)
        if (w->group_of[w->feeds[i].plant] == group && w->feeds[i].driver.kind == LW__DRIVER_PWM) {
            const lw_pwm_def *def = &rig->pwms[w->feeds[i].driver.index].def;
            g->grid = def->carrier;
            offset = def->offset;
            g->grid_of = def->name;
        }
    return lw_tick_from_seconds(offset, &g->grid_offset);
}

static lw_status build_kernel(lw__freezer *w, lw__group *g, const lw__linear *s)
{
    if (g->grid.num == 0) {
        double norm = 0, span = lw_tick_seconds(w->z->lasts);
        LW__TRY(lw__kernel_norm(s->n, s->a, &norm, w->err));
        double length = norm * span > 1 ? 1 / norm : span;
        lw_tick ticks = 0;
        lw_tick_from_seconds(length, &ticks);
        g->grid = lw_period_of_ticks(ticks > 1 ? ticks : 1);
    }
    lw_tick steps[2];
    lw__grid_steps(g->grid, &steps[0], &steps[1]);
    g->first = -(g->grid_offset / steps[1]);
    lw_status status = lw__kernel_build(w->arena, s->n, s->m, s->a, s->b, steps[1],
                                        steps[0] == steps[1] ? 1 : 2, steps, &g->kernel, w->err);
    if (status != LW_OK && w->err != NULL) {
        lw_error_prefix(w->err, "plant \"%s\": ", g->name);
        lw__blame(g->origin, w->err, status);
    }
    return status;
}

// ---- cells

static lw_status group_cells(lw__freezer *w, lw__group *g)
{
    const char *name = g->name;
    g->x = lw__freezer_double(w, name, "state at anchor", LW_SLICE_PLANT, g->n_x);
    g->u_anchor = lw__freezer_double(w, name, "inputs at anchor", LW_SLICE_PLANT, g->n_u);
    g->u_now = lw__freezer_double(w, name, "inputs", LW_SLICE_PLANT, g->n_u);
    g->list_du = lw__freezer_double(w, name, "input changes", LW_SLICE_PLANT, LW__LIST_CAPACITY);
    g->anchor = lw__freezer_integer(w, name, "anchor", LW_SLICE_PLANT, 1);
    g->list_n = lw__freezer_integer(w, name, "number of input changes", LW_SLICE_PLANT, 1);
    g->list_tick = lw__freezer_integer(w, name, "instants of input changes", LW_SLICE_PLANT,
                                       LW__LIST_CAPACITY);
    g->list_channel = lw__freezer_integer(w, name, "channels of input changes", LW_SLICE_PLANT,
                                          LW__LIST_CAPACITY);
    g->count = lw__freezer_integer(w, name, "anchors so far", LW_SLICE_PLANT, 1);
    for (int i = 0; i < g->n_generators; i++) {
        g->generators[i].timer = lw__freezer_timer(w);
        g->generators[i].count =
            lw__freezer_integer(w, name, "changes of a moving source", LW_SLICE_PLANT, 1);
        if (g->generators[i].count < 0)
            return LW_ERR_MEMORY;
    }
    return g->count >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// A delayed channel keeps its changes in flight: as many as its driver can make within the delay.
lw_status lw__delay_cells(lw__freezer *w, lw__channel *c)
{
    if (c->delay == 0)
        return LW_OK;
    c->capacity = 256;
    c->queue_f = lw__freezer_double(w, c->name, "delayed values", LW_SLICE_IN_FLIGHT, c->capacity);
    c->queue_i = lw__freezer_integer(w, c->name, "instants of delayed values", LW_SLICE_IN_FLIGHT,
                                     c->capacity + 2); // then head and count
    c->timer = lw__freezer_timer(w);
    return c->queue_f >= 0 && c->queue_i >= 0 ? LW_OK : LW_ERR_MEMORY;
}

// ---- all of it

void lw__note_feeds(lw__freezer *w, int group, const lw__joint *j)
{
    for (int i = 0; i < j->n_inputs; i++) {
        j->feed[i]->group = group;
        j->feed[i]->channel = i;
    }
    int state = 0;
    for (int p = 0; p < w->rig->n_plants; p++)
        if (w->group_of[p] == group) {
            w->first_state[p] = j->n_outputs + state;
            state += lw_plant_look(w->rig->plants[p].plant).n_x;
        }
}

static int has_modes(const lw__joint *j)
{
    for (int p = 0; p < j->n_parts; p++)
        if (lw_plant_look(j->parts[p].plant).modes != NULL)
            return 1;
    return 0;
}

static int has_flow(const lw__joint *j)
{
    for (int p = 0; p < j->n_parts; p++)
        if (lw_plant_look(j->parts[p].plant).flow != NULL)
            return 1;
    return 0;
}

static lw_status freeze_group(lw__freezer *w, int group)
{
    lw__group *g = &w->z->groups[group];
    lw__joint j = {0};
    lw_plant *plant = NULL;
    lw__linear s = {0};
    g->name = group_name(w, group);
    g->origin = group_origin(w, group);
    LW__TRY(lw__join_group(w, group, &j));
    if (has_modes(&j))
        return lw__freeze_modes(w, group, &j);
    if (has_flow(&j))
        return lw__freeze_flow(w, group, &j);
    LW__TRY(lw__blame(g->origin, w->err,
                      lw_plant_connect(j.n_parts, j.parts, j.n_links, j.links, j.n_inputs, j.inputs,
                                       j.n_outputs, j.outputs, &plant, w->err)));
    lw__note_feeds(w, group, &j);
    lw_status status = lw__make_linear(w, g, &j, plant, &s);
    lw_plant_free(plant);
    if (status == LW_OK)
        status = lw__make_rows(w, g, &s);
    if (status == LW_OK)
        status = lw__choose_grid(w, g, group);
    if (status == LW_OK)
        status = build_kernel(w, g, &s);
    if (status == LW_OK)
        status = group_cells(w, g);
    for (int c = 0; status == LW_OK && c < g->n_u; c++)
        status = lw__delay_cells(w, &g->channels[c]);
    return status;
}

lw_status lw__freeze_plants(lw__freezer *w)
{
    LW__TRY(collect_feeds(w));
    LW__TRY(number_groups(w));
    for (int i = 0; i < w->z->n_groups; i++)
        LW__TRY(freeze_group(w, i));
    return LW_OK;
}
