// Linear plants: the object, state space, and copies with something changed.
//
// Workload: a few a rig, each built once.
//
// Invariants
// 1. A plant never changes after it is made; views of it stay valid as long as it does.
// 2. All its numbers are finite; its names are checked.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/text.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

lw_plant_view lw_plant_look(const lw_plant *plant)
{
    return plant->view;
}

void lw_plant_free(lw_plant *plant)
{
    if (plant == NULL)
        return;
    int n = plant->view.n_x + plant->view.n_u + plant->view.n_y;
    for (int i = 0; plant->names != NULL && i < n; i++)
        lw__free(plant->names[i]);
    lw__free(plant->names);
    lw__free(plant->numbers);
    lw__free(plant);
}

// ---- checks

static lw_status check_sizes(const lw_plant_view *v, int most_outputs, lw_error *err)
{
    if (v->n_x < 0 || v->n_x > LW_PLANT_MAX_STATES)
        return lw_error_set(err, LW_ERR_SHAPE, "a plant has %d states; permitted 0 to %d", v->n_x,
                            LW_PLANT_MAX_STATES);
    if (v->n_u < 0 || v->n_u > LW_PLANT_MAX_PORTS)
        return lw_error_set(err, LW_ERR_SHAPE, "a plant has %d inputs; permitted 0 to %d", v->n_u,
                            LW_PLANT_MAX_PORTS);
    if (v->n_y < 0 || v->n_y > most_outputs)
        return lw_error_set(err, LW_ERR_SHAPE, "a plant has %d outputs; permitted 0 to %d", v->n_y,
                            most_outputs);
    return LW_OK;
}

static lw_status check_matrix(const char *name, int rows, int columns, const double *m,
                              lw_error *err)
{
    for (int i = 0; m != NULL && i < rows * columns; i++)
        if (!isfinite(m[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "%s row %d column %d is %g; a finite number is wanted", name,
                                i / columns + 1, i % columns + 1, m[i]);
    return LW_OK;
}

static lw_status check_numbers(const lw_plant_view *v, lw_error *err)
{
    lw_status status = check_matrix("A", v->n_x, v->n_x, v->a, err);
    if (status == LW_OK)
        status = check_matrix("B", v->n_x, v->n_u, v->b, err);
    if (status == LW_OK)
        status = check_matrix("C", v->n_y, v->n_x, v->c, err);
    if (status == LW_OK)
        status = check_matrix("D", v->n_y, v->n_u, v->d, err);
    if (status == LW_OK)
        status = check_matrix("start", v->n_x, 1, v->start, err);
    for (int i = 0; status == LW_OK && v->delay != NULL && i < v->n_u; i++)
        if (!(v->delay[i] >= 0 && v->delay[i] <= 9e6))
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "delay of input %d is %g s; permitted 0 to 9e6 s", i + 1,
                                v->delay[i]);
    return status;
}

static lw_status check_unique(const char *what, int n, char *const *names, lw_error *err)
{
    for (int i = 0; i < n; i++) {
        lw_status status = lw__name_check(what, names[i], 0, err);
        if (status != LW_OK)
            return status;
        for (int j = 0; j < i; j++)
            if (strcmp(names[i], names[j]) == 0)
                return lw_error_set(err, LW_ERR_DUPLICATE, "%s \"%s\": the name is taken twice",
                                    what, names[i]);
    }
    return LW_OK;
}

// ---- making

static void copy_or_zero(double **next, const double **view, const double *from, int n)
{
    if (from != NULL && n > 0)
        memcpy(*next, from, sizeof(double) * (size_t)n);
    *view = *next;
    *next += n;
}

static int copy_numbers(lw_plant *plant, const lw_plant_view *v)
{
    int n_x = v->n_x, n_u = v->n_u, n_y = v->n_y;
    int n = n_x * n_x + n_x * n_u + n_y * n_x + n_y * n_u + n_x + n_u;
    plant->numbers = lw__alloc(sizeof(double) * (size_t)(n + 1));
    if (plant->numbers == NULL)
        return 0;
    double *next = plant->numbers;
    copy_or_zero(&next, &plant->view.a, v->a, n_x * n_x);
    copy_or_zero(&next, &plant->view.b, v->b, n_x * n_u);
    copy_or_zero(&next, &plant->view.c, v->c, n_y * n_x);
    copy_or_zero(&next, &plant->view.d, v->d, n_y * n_u);
    copy_or_zero(&next, &plant->view.start, v->start, n_x);
    copy_or_zero(&next, &plant->view.delay, v->delay, n_u);
    return 1;
}

// Given names, or stem1, stem2, ...; the number is left out where `lone` and n is 1.
static int copy_names(char **to, int n, const char *const *from, const char *stem, int lone)
{
    for (int i = 0; i < n; i++) {
        char made[32];
        const char *name = from != NULL ? from[i] : made;
        if (from == NULL && lone && n == 1)
            snprintf(made, sizeof made, "%s", stem);
        else if (from == NULL)
            snprintf(made, sizeof made, "%s%d", stem, i + 1);
        size_t size = name != NULL ? strlen(name) + 1 : 1;
        to[i] = lw__alloc(size);
        if (to[i] == NULL)
            return 0;
        if (name != NULL)
            memcpy(to[i], name, size);
    }
    return 1;
}

static int set_names(lw_plant *plant, const lw_plant_view *v)
{
    int n_x = v->n_x, n_u = v->n_u, n_y = v->n_y;
    plant->names = lw__alloc(sizeof(char *) * (size_t)(n_x + n_u + n_y + 1));
    if (plant->names == NULL)
        return 0;
    char **states = plant->names, **inputs = states + n_x, **outputs = inputs + n_u;
    plant->view.state_names = (const char *const *)states;
    plant->view.input_names = (const char *const *)inputs;
    plant->view.output_names = (const char *const *)outputs;
    return copy_names(states, n_x, v->state_names, "x", 0) &&
           copy_names(inputs, n_u, v->input_names, "in", 1) &&
           copy_names(outputs, n_y, v->output_names, "out", 1);
}

lw_status lw__plant_make(int most_outputs, const lw_plant_view *from, lw_plant **out,
                         lw_error *err)
{
    lw_status status = check_sizes(from, most_outputs, err);
    if (status == LW_OK)
        status = check_numbers(from, err);
    if (status != LW_OK)
        return status;
    lw_plant *plant = lw__alloc(sizeof *plant);
    if (plant == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    plant->view.n_x = from->n_x;
    plant->view.n_u = from->n_u;
    plant->view.n_y = from->n_y;
    if (!copy_numbers(plant, from) || !set_names(plant, from))
        status = lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    int n_x = from->n_x, n_u = from->n_u, n_y = from->n_y;
    if (status == LW_OK)
        status = check_unique("state", n_x, plant->names, err);
    if (status == LW_OK)
        status = check_unique("input", n_u, plant->names + n_x, err);
    if (status == LW_OK)
        status = check_unique("output", n_y, plant->names + n_x + n_u, err);
    if (status != LW_OK) {
        lw_plant_free(plant);
        return status;
    }
    *out = plant;
    return LW_OK;
}

lw_status lw_plant_state_space(int n_x, int n_u, int n_y, const double *a, const double *b,
                               const double *c, const double *d, const double *start,
                               const char *const *state_names, const char *const *input_names,
                               const char *const *output_names, lw_plant **out, lw_error *err)
{
    lw_plant_view v = {n_x, n_u,   n_y,  a,           b,           c,
                       d,   start, NULL, state_names, input_names, output_names};
    return lw__plant_make(LW_PLANT_MAX_PORTS, &v, out, err);
}

// ---- copies

lw_status lw_plant_delayed(const lw_plant *plant, const char *input, double seconds,
                           lw_plant **out, lw_error *err)
{
    lw_plant_view v = plant->view;
    double delay[LW_PLANT_MAX_PORTS];
    for (int i = 0; i < v.n_u; i++) {
        delay[i] = v.delay[i];
        if (strcmp(v.input_names[i], input) != 0)
            continue;
        delay[i] += seconds;
        if (!(seconds >= 0 && delay[i] <= 9e6))
            return lw_error_set(err, LW_ERR_ARGUMENT,
                                "delay of input \"%s\" is %g s; permitted 0 to 9e6 s", input,
                                seconds);
        for (int k = i + 1; k < v.n_u; k++)
            delay[k] = v.delay[k];
        v.delay = delay;
        return lw__plant_make(LW__PLANT_MAX_OUTPUTS, &v, out, err);
    }
    const char *near = lw_nearest_name(input, v.input_names, v.n_u);
    return lw_error_set(err, LW_ERR_NAME, "delay: no input \"%s\"%s%s%s", input,
                        near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
}

lw_status lw_plant_started(const lw_plant *plant, int n, const double *start, lw_plant **out,
                           lw_error *err)
{
    lw_plant_view v = plant->view;
    if (n != v.n_x)
        return lw_error_set(err, LW_ERR_SHAPE, "start has %d values; the plant has %d states", n,
                            v.n_x);
    v.start = start;
    return lw__plant_make(LW__PLANT_MAX_OUTPUTS, &v, out, err);
}

lw_status lw_plant_renamed(const lw_plant *plant, const char *const *state_names,
                           const char *const *input_names, const char *const *output_names,
                           lw_plant **out, lw_error *err)
{
    lw_plant_view v = plant->view;
    v.state_names = state_names != NULL ? state_names : v.state_names;
    v.input_names = input_names != NULL ? input_names : v.input_names;
    v.output_names = output_names != NULL ? output_names : v.output_names;
    return lw__plant_make(LW__PLANT_MAX_OUTPUTS, &v, out, err);
}
