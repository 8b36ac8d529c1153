// Plants with modes: the definition, checked and copied. How they move is in engine/run.
//
// Workload: a few a rig, each made once.
//
// Invariants
// 1. Copies of a plant with other names, start or delays share one definition; the last frees it.
// 2. The matrices of the plant's own view are those of the first mode.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/arena.h"
#include "base/text.h"

#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>

void lw__modes_release(lw__modes *modes)
{
    if (modes != NULL && --modes->references == 0)
        lw__arena_free(modes->arena);
}

// ---- checks

static lw_status check_count(const char *what, int n, int least, int most, lw_error *err)
{
    if (n >= least && n <= most)
        return LW_OK;
    return lw_error_set(err, LW_ERR_SHAPE, "number of %s is %d; permitted %d to %d", what, n, least,
                        most);
}

static lw_status check_numbers(const char *owner, const char *name, const double *v, int rows,
                               int columns, lw_error *err)
{
    for (int i = 0; v != NULL && i < rows * columns; i++)
        if (!isfinite(v[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s: %s, row %d, column %d is %g; a finite number is wanted", owner,
                                name, i / columns + 1, i % columns + 1, v[i]);
    return LW_OK;
}

static lw_status check_mode(const lw_modes_def *def, int i, lw_error *err)
{
    const lw_mode *m = &def->modes[i];
    char owner[240];
    lw_status status = lw__name_check("mode", m->name, 1, err);
    if (status != LW_OK)
        return status;
    snprintf(owner, sizeof owner, "mode \"%.200s\"", m->name);
    for (int k = 0; k < i; k++)
        if (strcmp(def->modes[k].name, m->name) == 0)
            return lw_error_set(err, LW_ERR_DUPLICATE, "%s is stated twice", owner);
    if ((m->a == NULL && def->n_x > 0) || (m->c == NULL && def->n_y > 0 && def->n_x > 0))
        return lw_error_set(err, LW_ERR_ARGUMENT, "%s: %s is missing", owner,
                            m->a == NULL ? "A" : "C");
    const struct {
        const char *name;
        const double *v;
        int rows, columns;
    } list[] = {{"A", m->a, def->n_x, def->n_x},        {"B", m->b, def->n_x, def->n_u},
                {"constant", m->constant, def->n_x, 1}, {"C", m->c, def->n_y, def->n_x},
                {"D", m->d, def->n_y, def->n_u},        {"offset", m->offset, def->n_y, 1}};
    for (size_t k = 0; status == LW_OK && k < sizeof list / sizeof *list; k++)
        status = check_numbers(owner, list[k].name, list[k].v, list[k].rows, list[k].columns, err);
    return status;
}

static lw_status find_mode(const lw_modes_def *def, int switching, const char *field,
                           const char *name, lw_error *err)
{
    const char *names[LW_MODES_MAX];
    for (int i = 0; i < def->n_modes; i++) {
        names[i] = def->modes[i].name;
        if (name != NULL && strcmp(names[i], name) == 0)
            return LW_OK;
    }
    const char *near = name != NULL ? lw_nearest_name(name, names, def->n_modes) : NULL;
    return lw_error_set(err, LW_ERR_NAME, "switching %d: %s: no mode \"%.200s\"%s%s%s",
                        switching + 1, field, name != NULL ? name : "", near ? "; nearest \"" : "",
                        near ? near : "", near ? "\"" : "");
}

static lw_status check_condition(const lw_modes_def *def, const char *owner, const lw_condition *c,
                                 lw_error *err)
{
    lw_status status = check_numbers(owner, "states of the condition", c->x, 1, def->n_x, err);
    if (status == LW_OK)
        status = check_numbers(owner, "inputs of the condition", c->u, 1, def->n_u, err);
    return status == LW_OK ? check_numbers(owner, "the condition's level", &c->offset, 1, 1, err)
                           : status;
}

static lw_status check_switching(const lw_modes_def *def, int i, lw_error *err)
{
    const lw_switching *w = &def->switchings[i];
    char owner[40];
    snprintf(owner, sizeof owner, "switching %d", i + 1);
    lw_status status = find_mode(def, i, "to", w->to, err);
    if (status == LW_OK && w->from != NULL)
        status = find_mode(def, i, "from", w->from, err);
    if (status == LW_OK)
        status = check_condition(def, owner, &w->when, err);
    if (status == LW_OK && w->conditional)
        status = check_condition(def, owner, &w->only_if, err);
    if (status == LW_OK)
        status = check_numbers(owner, "reset", w->reset, def->n_x, def->n_x, err);
    if (status == LW_OK)
        status = check_numbers(owner, "offset of the reset", w->reset_offset, def->n_x, 1, err);
    return status;
}

static lw_status check(const lw_modes_def *def, lw_error *err)
{
    lw_status status = check_count("states", def->n_x, 0, LW_PLANT_MAX_STATES, err);
    if (status == LW_OK)
        status = check_count("inputs", def->n_u, 0, LW_PLANT_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_count("outputs", def->n_y, 0, LW_PLANT_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_count("modes", def->n_modes, 1, LW_MODES_MAX, err);
    if (status == LW_OK)
        status = check_count("switchings", def->n_switchings, 0, LW_MODES_MAX_SWITCHINGS, err);
    for (int i = 0; status == LW_OK && i < def->n_modes; i++)
        status = check_mode(def, i, err);
    for (int i = 0; status == LW_OK && i < def->n_switchings; i++)
        status = check_switching(def, i, err);
    return status;
}

// ---- copies

typedef struct copier {
    lw__arena *arena;
    int failed;
} copier;

static const double *numbers(copier *to, const double *from, int n)
{
    double *copy = lw__arena_get(to->arena, sizeof(double) * (size_t)(n + 1));
    if (copy != NULL && from != NULL && n > 0)
        memcpy(copy, from, sizeof(double) * (size_t)n);
    to->failed |= copy == NULL;
    return copy;
}

static const char *text(copier *to, const char *from)
{
    const char *copy = from != NULL ? lw__arena_text(to->arena, from) : NULL;
    to->failed |= from != NULL && copy == NULL;
    return copy;
}

static void copy_mode(copier *to, const lw_modes_def *def, const lw_mode *from, lw_mode *m)
{
    m->name = text(to, from->name);
    m->a = numbers(to, from->a, def->n_x * def->n_x);
    m->b = numbers(to, from->b, def->n_x * def->n_u);
    m->constant = numbers(to, from->constant, def->n_x);
    m->c = numbers(to, from->c, def->n_y * def->n_x);
    m->d = numbers(to, from->d, def->n_y * def->n_u);
    m->offset = numbers(to, from->offset, def->n_y);
}

static void copy_switching(copier *to, const lw_modes_def *def, const lw_switching *from,
                           lw_switching *w)
{
    *w = *from;
    w->from = text(to, from->from);
    w->to = text(to, from->to);
    w->when.x = numbers(to, from->when.x, def->n_x);
    w->when.u = numbers(to, from->when.u, def->n_u);
    w->only_if.x = numbers(to, from->only_if.x, def->n_x);
    w->only_if.u = numbers(to, from->only_if.u, def->n_u);
    if (from->reset == NULL)
        return;
    w->reset = numbers(to, from->reset, def->n_x * def->n_x);
    w->reset_offset = numbers(to, from->reset_offset, def->n_x);
}

// The definition with its own copies; names and start are the plant's.
static lw__modes *own_definition(const lw_modes_def *def)
{
    copier to = {lw__arena_new(), 0};
    if (to.arena == NULL)
        return NULL;
    lw__modes *own = lw__arena_get(to.arena, sizeof *own);
    lw_mode *modes = lw__arena_get(to.arena, sizeof *modes * (size_t)def->n_modes);
    lw_switching *switchings =
        lw__arena_get(to.arena, sizeof *switchings * (size_t)(def->n_switchings + 1));
    to.failed |= own == NULL || modes == NULL || switchings == NULL;
    for (int i = 0; !to.failed && i < def->n_modes; i++)
        copy_mode(&to, def, &def->modes[i], &modes[i]);
    for (int i = 0; !to.failed && i < def->n_switchings; i++)
        copy_switching(&to, def, &def->switchings[i], &switchings[i]);
    if (to.failed) {
        lw__arena_free(to.arena);
        return NULL;
    }
    *own = (lw__modes){*def, to.arena, 1};
    own->def.modes = modes;
    own->def.switchings = switchings;
    own->def.state_names = own->def.input_names = own->def.output_names = NULL;
    own->def.start = NULL;
    return own;
}

lw_status lw_plant_modes(const lw_modes_def *def, lw_plant **out, lw_error *err)
{
    lw_status status = check(def, err);
    if (status != LW_OK)
        return status;
    lw__modes *own = own_definition(def);
    if (own == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    const lw_mode *first = own->def.modes;
    lw_plant_view v = {.n_x = def->n_x,
                       .n_u = def->n_u,
                       .n_y = def->n_y,
                       .a = first->a,
                       .b = first->b,
                       .c = first->c,
                       .d = first->d,
                       .start = def->start,
                       .state_names = def->state_names,
                       .input_names = def->input_names,
                       .output_names = def->output_names,
                       .modes = &own->def};
    status = lw__plant_make(&v, LW_PLANT_MAX_PORTS, out, err);
    lw__modes_release(own); // the plant holds it now
    return status;
}
