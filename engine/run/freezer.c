// What the parts of the freezer share: memory, cells and timers, sets of operations, signals by
// name.

#include "run/freezer.h"
#include "run/pwm.h"

#include "run/comparator.h"
#include "run/edges.h"
#include "run/schedule.h"

#include "base/alloc.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

// ---- memory and cells

lw_status lw__freezer_no_memory(lw__freezer *w)
{
    return lw_error_set(w->err, LW_ERR_MEMORY, "no memory to freeze rig \"%s\"", w->rig->name);
}

void *lw__freezer_get(lw__freezer *w, size_t size)
{
    void *p = lw__arena_get(w->arena, size > 0 ? size : 1);
    if (p == NULL)
        lw__freezer_no_memory(w);
    return p;
}

int lw__freezer_cells(lw__freezer *w, lw__cells cells)
{
    lw_frozen *z = w->z;
    if (z->n_slices == w->slices_room) {
        int room = w->slices_room == 0 ? 64 : 2 * w->slices_room;
        lw_slice *grown = lw__freezer_get(w, sizeof *grown * (size_t)room);
        if (grown == NULL)
            return -1;
        if (z->n_slices > 0)
            memcpy(grown, z->slices, sizeof *grown * (size_t)z->n_slices);
        z->slices = grown;
        w->slices_room = room;
    }
    int *next = cells.is_integer ? &z->n_i : &z->n_f, at = *next;
    z->slices[z->n_slices++] = (lw_slice){cells.owner,      cells.name, cells.unit, cells.kind,
                                          cells.is_integer, at,         cells.count};
    *next += cells.count;
    return at;
}

int lw__freezer_double(lw__freezer *w, const char *owner, const char *name, lw_slice_kind kind,
                       int count)
{
    return lw__freezer_cells(w, (lw__cells){owner, name, "", kind, 0, count});
}

int lw__freezer_integer(lw__freezer *w, const char *owner, const char *name, lw_slice_kind kind,
                        int count)
{
    return lw__freezer_cells(w, (lw__cells){owner, name, "", kind, 1, count});
}

int lw__freezer_timer(lw__freezer *w)
{
    return w->z->n_timers++;
}

// ---- signals

static int same(const char *a, const char *b)
{
    return strcmp(a, b) == 0;
}

static int owns(const char *owner, const char *name, const char **rest)
{
    size_t length = strlen(owner);
    if (strncmp(owner, name, length) != 0 || (name[length] != 0 && name[length] != '.'))
        return 0;
    *rest = name[length] == '.' ? name + length + 1 : name + length;
    return 1;
}

static lw_signal cell(int offset)
{
    return (lw_signal){LW__SIGNAL_CELL, offset, 0};
}

static int plant_signal(const lw__plant_place *p, const char *rest, lw_signal *out)
{
    for (int i = 0; i < p->view.n_y; i++)
        if (same(p->view.output_names[i], rest)) {
            *out = (lw_signal){LW__SIGNAL_ROW, p->group, p->first_row + i};
            return 1;
        }
    for (int i = 0; i < p->view.n_x; i++)
        if (same(p->view.state_names[i], rest)) {
            *out = (lw_signal){LW__SIGNAL_ROW, p->group, p->first_state + i};
            return 1;
        }
    return 0;
}

static int adc_signal(const lw__adc *a, const char *rest, lw_signal *out)
{
    int channel = 0;
    if (a->n_channels > 1) {
        char *end;
        channel = (int)strtol(rest, &end, 10) - 1;
        if (end == rest || channel < 0 || channel >= a->n_channels || (*end != 0 && *end != '.'))
            return 0;
        rest = *end == '.' ? end + 1 : end;
    }
    if (*rest == 0)
        *out = (lw_signal){LW__SIGNAL_ADC, a->index, channel};
    else if (same(rest, "code"))
        *out = cell(a->code + channel);
    else if (same(rest, "input"))
        *out = cell(a->input + channel);
    else
        return 0;
    return 1;
}

static int dac_signal(const lw__dac *d, const char *rest, lw_signal *out)
{
    const struct {
        const char *name;
        int at;
    } parts[] = {{"", d->held},
                 {"asked", d->asked},
                 {"limited", d->limited},
                 {"code", d->code},
                 {"saturated", d->saturated}};
    for (size_t i = 0; i < sizeof parts / sizeof parts[0]; i++)
        if (same(parts[i].name, rest)) {
            *out = cell(parts[i].at);
            return 1;
        }
    return 0;
}

// "bridge.level", "bridge.duty": of the pwm that a dac came with.
static int pwm_signal(const lw_frozen *z, const lw__dac *d, const char *rest, lw_signal *out)
{
    for (int i = 0; i < z->n_pwms; i++)
        if (z->pwms[i].dac == d && (same(rest, "level") || same(rest, "duty"))) {
            *out = cell(same(rest, "level") ? z->pwms[i].level : z->pwms[i].duty);
            return 1;
        }
    return 0;
}

// "axis angle.span", "axis angle.steps", "axis angle.last": of an encoder whose edges are found.
static int edges_signal(const lw_frozen *z, const lw__adc *a, const char *rest, lw_signal *out)
{
    for (int i = 0; i < z->n_edges; i++) {
        const lw__edges *e = &z->edges[i];
        int at = same(rest, "span")    ? e->span
                 : same(rest, "steps") ? e->steps
                 : same(rest, "last")  ? e->last
                                       : -1;
        if (e->adc == a && at >= 0) {
            *out = cell(at);
            return 1;
        }
    }
    return 0;
}

static int loop_signal(const lw__loop *l, const char *rest, lw_signal *out)
{
    for (int i = 0; i < l->law->n_out; i++)
        if (same(l->law->out_names[i], rest)) {
            *out = cell(l->outs + i);
            return 1;
        }
    for (int i = 0; i < l->law->n_state; i++)
        if (same(l->law->state_names[i], rest)) {
            *out = cell(l->state + i);
            return 1;
        }
    return 0;
}

static int find_signal(const lw_frozen *z, const char *name, lw_signal *out)
{
    const char *rest;
    for (int i = 0; i < z->n_plants; i++)
        if (owns(z->plants[i].name, name, &rest))
            return plant_signal(&z->plants[i], rest, out);
    for (int i = 0; i < z->n_sources; i++)
        if (same(z->sources[i].item->def.name, name)) {
            *out = z->sources[i].moving ? (lw_signal){LW__SIGNAL_SOURCE, i, 0}
                                        : cell(z->sources[i].held);
            return 1;
        }
    for (int i = 0; i < z->n_values; i++)
        if (same(z->values[i].name, name)) {
            *out = cell(z->values[i].held);
            return 1;
        }
    for (int i = 0; i < z->n_adcs; i++)
        if (owns(z->adcs[i].item->def.name, name, &rest))
            return adc_signal(&z->adcs[i], rest, out) || edges_signal(z, &z->adcs[i], rest, out);
    for (int i = 0; i < z->n_dacs; i++)
        if (owns(z->dacs[i].item->def.name, name, &rest))
            return dac_signal(&z->dacs[i], rest, out) || pwm_signal(z, &z->dacs[i], rest, out);
    for (int i = 0; i < z->n_loops; i++)
        if (z->loops[i].law != NULL && owns(z->loops[i].item->def.name, name, &rest))
            return loop_signal(&z->loops[i], rest, out);
    for (int i = 0; i < z->n_tasks; i++)
        if (z->tasks[i].has_law && owns(z->tasks[i].name, name, &rest))
            return loop_signal(&z->tasks[i].law, rest, out);
    for (int i = 0; i < z->n_comparators; i++)
        if (z->comparators[i].name != NULL && same(z->comparators[i].name, name)) {
            *out = cell(z->comparators[i].out);
            return 1;
        }
    return 0;
}

// Every name a signal may have, for the nearest one in an error.
typedef struct name_list {
    int n, room;
    char (*text)[220];
    const char **at;
} name_list;

static void add_name(name_list *list, const char *owner, const char *part)
{
    if (list->n == list->room)
        return;
    char *text = list->text[list->n];
    if (part == NULL)
        snprintf(text, sizeof list->text[0], "%.200s", owner);
    else
        snprintf(text, sizeof list->text[0], "%.100s.%.100s", owner, part);
    list->at[list->n] = text;
    list->n++;
}

static void list_names(const lw_frozen *z, name_list *list)
{
    for (int i = 0; i < z->n_plants; i++) {
        const lw__plant_place *p = &z->plants[i];
        for (int k = 0; k < p->view.n_y; k++)
            add_name(list, p->name, p->view.output_names[k]);
        for (int k = 0; k < p->view.n_x; k++)
            add_name(list, p->name, p->view.state_names[k]);
    }
    for (int i = 0; i < z->n_sources; i++)
        add_name(list, z->sources[i].item->def.name, NULL);
    for (int i = 0; i < z->n_values; i++)
        add_name(list, z->values[i].name, NULL);
    for (int i = 0; i < z->n_adcs; i++)
        add_name(list, z->adcs[i].item->def.name, z->adcs[i].n_channels > 1 ? "1" : NULL);
    for (int i = 0; i < z->n_dacs; i++)
        add_name(list, z->dacs[i].item->def.name, NULL);
    for (int i = 0; i < z->n_loops && z->loops[i].law != NULL; i++)
        for (int k = 0; k < z->loops[i].law->n_out; k++)
            add_name(list, z->loops[i].item->def.name, z->loops[i].law->out_names[k]);
    for (int i = 0; i < z->n_tasks; i++)
        for (int k = 0; z->tasks[i].has_law && k < z->tasks[i].law.law->n_out; k++)
            add_name(list, z->tasks[i].name, z->tasks[i].law.law->out_names[k]);
    for (int i = 0; i < z->n_comparators; i++)
        if (z->comparators[i].name != NULL)
            add_name(list, z->comparators[i].name, NULL);
}

lw_status lw__signal_find(const lw_frozen *z, const char *name, lw_signal *out, lw_error *err)
{
    if (find_signal(z, name, out))
        return LW_OK;
    enum { ROOM = 512 };
    name_list list = {0, ROOM, lw__alloc(ROOM * sizeof list.text[0]),
                      lw__alloc(ROOM * sizeof list.at[0])};
    const char *near = NULL;
    if (list.text != NULL && list.at != NULL) {
        list_names(z, &list);
        near = lw_nearest_name(name, list.at, list.n);
    }
    lw_error_set(err, LW_ERR_NAME, "no signal \"%s\"%s%s%s", name, near ? "; nearest \"" : "",
                 near ? near : "", near ? "\"" : "");
    lw__free(list.text);
    lw__free(list.at);
    return LW_ERR_NAME;
}

lw_status lw_frozen_signal(const lw_frozen *frozen, const char *name, lw_signal *out, lw_error *err)
{
    return lw__signal_find(frozen, name, out, err);
}

lw_status lw__freezer_signal(lw__freezer *w, const char *origin, const char *what,
                             const char *owner, const char *field, const char *name,
                             lw__reference *out)
{
    lw_status status = lw__signal_find(w->z, name, &out->at, w->err);
    if (status == LW_OK)
        return LW_OK;
    lw_error_prefix(w->err, "%s \"%s\": %s: ", what, owner, field);
    return lw__blame(origin, w->err, status);
}

// ---- sets

lw_status lw__set_put(lw__freezer *w, lw__set *set, int op)
{
    if (set->words == NULL)
        set->words = lw__freezer_get(w, sizeof(uint64_t) * (size_t)w->z->n_words);
    if (set->words == NULL)
        return LW_ERR_MEMORY;
    if (op >= 0)
        set->words[op / 64] |= UINT64_C(1) << (op % 64);
    set->first = set->words[0];
    return LW_OK;
}

// ---- grids

void lw__grid_steps(lw_period p, lw_tick *shortest, lw_tick *longest)
{
    *shortest = p.num / p.den;
    *longest = *shortest + (p.num % p.den != 0);
}
