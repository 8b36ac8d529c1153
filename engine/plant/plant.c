// The plant as an object, state space, and copies with something replaced.
//
// Workload: a few a rig, each made once and read when the rig is frozen.
//
// Invariants
// 1. A plant does not change after it is made; views of it stay valid as long as it lives.
// 2. View, numbers, lists of names and text are one block.
// 3. Every number is finite, delays are within the range of time, names are checked.

#include "plant/plant.h"

#include "base/alloc.h"
#include "base/text.h"

#include <latewood/time.h>
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>

lw_plant_view lw_plant_look(const lw_plant *plant)
{
    return plant->view;
}

void lw_plant_free(lw_plant *plant)
{
    if (plant != NULL) {
        lw__flow_release(plant->flow);
        lw__modes_release(plant->modes);
    }
    lw__free(plant);
}

lw_status lw__plant_bad(lw_status status, const char *field, double value, const char *permitted,
                        lw_error *err)
{
    double shown = isnan(value) ? fabs(value) : value; // the sign of a NaN says nothing
    return lw_error_set(err, status, "%s is %.12g; %s", field, shown, permitted);
}

// ---- names as given or made up

typedef struct name_list {
    const char *what, *stem;
    int lone; // a single one has no number
    int n;
    const char *const *given;
} name_list;

#define MADE_BYTES 16

// Name i of the list; `made` holds it where it is made up.
static const char *name_at(const name_list *list, int i, char made[MADE_BYTES])
{
    if (list->given != NULL)
        return list->given[i];
    if (list->lone && list->n == 1)
        snprintf(made, MADE_BYTES, "%s", list->stem);
    else
        snprintf(made, MADE_BYTES, "%s%d", list->stem, i + 1);
    return made;
}

enum { STATES, INPUTS, OUTPUTS, N_LISTS };

static void lists_of(const lw_plant_view *v, name_list lists[N_LISTS])
{
    lists[STATES] = (name_list){"state", "x", 0, v->n_x, v->state_names};
    lists[INPUTS] = (name_list){"input", "in", 1, v->n_u, v->input_names};
    lists[OUTPUTS] = (name_list){"output", "out", 1, v->n_y, v->output_names};
}

// Place of `name` among the first n of the list, or -1.
static int place_of(const name_list *list, int n, const char *name)
{
    char made[MADE_BYTES];
    for (int i = 0; i < n; i++)
        if (strcmp(name_at(list, i, made), name) == 0)
            return i;
    return -1;
}

static lw_status check_list(const name_list *list, lw_error *err)
{
    char made[MADE_BYTES];
    for (int i = 0; i < list->n; i++) {
        const char *name = name_at(list, i, made);
        lw_status status = lw__name_check(list->what, name, 0, err);
        if (status != LW_OK)
            return status;
        if (place_of(list, i, name) >= 0)
            return lw_error_set(err, LW_ERR_DUPLICATE, "two %ss are named \"%s\"", list->what,
                                name);
    }
    return LW_OK;
}

static int output_is_state(const lw_plant_view *v, int output, int state)
{
    for (int i = 0; i < v->n_x; i++)
        if (v->c[output * v->n_x + i] != (i == state ? 1.0 : 0.0))
            return 0;
    for (int i = 0; v->d != NULL && i < v->n_u; i++)
        if (v->d[output * v->n_u + i] != 0)
            return 0;
    return 1;
}

static lw_status check_names(const lw_plant_view *v, lw_error *err)
{
    char made[MADE_BYTES];
    name_list lists[N_LISTS];
    lists_of(v, lists);
    for (int i = 0; i < N_LISTS; i++) {
        lw_status status = check_list(&lists[i], err);
        if (status != LW_OK)
            return status;
    }
    for (int i = 0; i < v->n_y; i++) {
        const char *name = name_at(&lists[OUTPUTS], i, made);
        int state = place_of(&lists[STATES], v->n_x, name);
        if (state >= 0 && !output_is_state(v, i, state))
            return lw_error_set(err, LW_ERR_DUPLICATE,
                                "an output and a state are both named \"%s\", and the output is "
                                "not that state",
                                name);
    }
    return LW_OK;
}

// ---- sizes and numbers

static lw_status check_size(const char *what, int n, int most, lw_error *err)
{
    if (n >= 0 && n <= most)
        return LW_OK;
    return lw_error_set(err, LW_ERR_SHAPE, "number of %s is %d; permitted 0 to %d", what, n, most);
}

static lw_status check_sizes(const lw_plant_view *v, int most_outputs, lw_error *err)
{
    lw_status status = check_size("states", v->n_x, LW_PLANT_MAX_STATES, err);
    if (status == LW_OK)
        status = check_size("inputs", v->n_u, LW_PLANT_MAX_PORTS, err);
    if (status == LW_OK)
        status = check_size("outputs", v->n_y, most_outputs, err);
    if (status == LW_OK && v->n_x + v->n_y == 0)
        status = lw_error_set(err, LW_ERR_SHAPE, "a plant needs a state or an output");
    return status;
}

typedef struct matrix {
    const char *name;
    int n_rows, n_columns, may_lack;
    const double *v;
} matrix;

static lw_status check_matrix(const matrix *m, lw_error *err)
{
    char element[32];
    int n = m->n_rows * m->n_columns;
    if (m->v == NULL && n > 0 && !m->may_lack)
        return lw_error_set(err, LW_ERR_ARGUMENT, "%s is missing", m->name);
    for (int i = 0; m->v != NULL && i < n; i++) {
        if (isfinite(m->v[i]))
            continue;
        snprintf(element, sizeof element, "%s[%d][%d]", m->name, i / m->n_columns + 1,
                 i % m->n_columns + 1);
        return lw__plant_bad(LW_ERR_NOT_FINITE, element, m->v[i], "a finite number is wanted", err);
    }
    return LW_OK;
}

static lw_status check_matrices(const lw_plant_view *v, lw_error *err)
{
    const matrix list[] = {{"A", v->n_x, v->n_x, 0, v->a},
                           {"B", v->n_x, v->n_u, 0, v->b},
                           {"C", v->n_y, v->n_x, 0, v->c},
                           {"D", v->n_y, v->n_u, 1, v->d}};
    for (int i = 0; i < 4; i++) {
        lw_status status = check_matrix(&list[i], err);
        if (status != LW_OK)
            return status;
    }
    return LW_OK;
}

// After the names are known to be good: the messages use them.
static lw_status check_vectors(const lw_plant_view *v, lw_error *err)
{
    char made[MADE_BYTES], field[256];
    name_list lists[N_LISTS];
    lists_of(v, lists);
    for (int i = 0; v->start != NULL && i < v->n_x; i++) {
        snprintf(field, sizeof field, "start of %s", name_at(&lists[STATES], i, made));
        if (!isfinite(v->start[i]))
            return lw__plant_bad(LW_ERR_NOT_FINITE, field, v->start[i], "a finite number is wanted",
                                 err);
    }
    for (int i = 0; v->delay != NULL && i < v->n_u; i++) {
        lw_tick tick;
        snprintf(field, sizeof field, "delay of %s", name_at(&lists[INPUTS], i, made));
        if (!(v->delay[i] >= 0) || lw_tick_from_seconds(v->delay[i], &tick) != LW_OK)
            return lw__plant_bad(LW_ERR_ARGUMENT, field, v->delay[i], "permitted 0 to 9e+06 s",
                                 err);
    }
    return LW_OK;
}

static lw_status check(const lw_plant_view *v, int most_outputs, lw_error *err)
{
    lw_status status = check_sizes(v, most_outputs, err);
    if (status == LW_OK)
        status = check_matrices(v, err);
    if (status == LW_OK)
        status = check_names(v, err);
    return status == LW_OK ? check_vectors(v, err) : status;
}

// ---- the copy

// Where the next copies go within the block.
typedef struct cursor {
    double *number;
    const char **name;
    char *text;
} cursor;

static const double *copy_numbers(cursor *to, const double *from, int n)
{
    double *copy = to->number;
    if (from != NULL && n > 0)
        memcpy(copy, from, sizeof(double) * (size_t)n);
    to->number += n;
    return copy;
}

static const char *const *copy_names(cursor *to, const name_list *list)
{
    char made[MADE_BYTES];
    const char **copy = to->name;
    for (int i = 0; i < list->n; i++) {
        const char *name = name_at(list, i, made);
        size_t size = strlen(name) + 1;
        copy[i] = memcpy(to->text, name, size);
        to->text += size;
    }
    to->name += list->n;
    return copy;
}

static size_t text_bytes(const name_list lists[N_LISTS])
{
    char made[MADE_BYTES];
    size_t size = 0;
    for (int k = 0; k < N_LISTS; k++)
        for (int i = 0; i < lists[k].n; i++)
            size += strlen(name_at(&lists[k], i, made)) + 1;
    return size;
}

static lw_plant *copy(const lw_plant_view *v)
{
    name_list lists[N_LISTS];
    lists_of(v, lists);
    int n_x = v->n_x, n_u = v->n_u, n_y = v->n_y;
    size_t n_numbers = (size_t)(n_x * n_x + n_x * n_u + n_y * n_x + n_y * n_u + n_x + n_u);
    size_t n_names = (size_t)(n_x + n_u + n_y);
    lw_plant *plant = lw__alloc(sizeof *plant + n_numbers * sizeof(double) +
                                n_names * sizeof(char *) + text_bytes(lists));
    if (plant == NULL)
        return NULL;
    cursor to = {.number = (double *)(plant + 1)};
    to.name = (const char **)(to.number + n_numbers);
    to.text = (char *)(to.name + n_names);
    plant->view =
        (lw_plant_view){.n_x = n_x, .n_u = n_u, .n_y = n_y, .flow = v->flow, .modes = v->modes};
    plant->flow = (lw__flow *)(uintptr_t)v->flow;
    if (plant->flow != NULL)
        plant->flow->references++;
    plant->modes = (lw__modes *)(uintptr_t)v->modes;
    if (plant->modes != NULL)
        plant->modes->references++;
    plant->view.a = copy_numbers(&to, v->a, n_x * n_x);
    plant->view.b = copy_numbers(&to, v->b, n_x * n_u);
    plant->view.c = copy_numbers(&to, v->c, n_y * n_x);
    plant->view.d = copy_numbers(&to, v->d, n_y * n_u);
    plant->view.start = copy_numbers(&to, v->start, n_x);
    plant->view.delay = copy_numbers(&to, v->delay, n_u);
    plant->view.state_names = copy_names(&to, &lists[STATES]);
    plant->view.input_names = copy_names(&to, &lists[INPUTS]);
    plant->view.output_names = copy_names(&to, &lists[OUTPUTS]);
    return plant;
}

lw_status lw__plant_make(const lw_plant_view *from, int most_outputs, lw_plant **out, lw_error *err)
{
    lw_status status = check(from, most_outputs, err);
    if (status != LW_OK)
        return status;
    lw_plant *plant = copy(from);
    if (plant == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a plant");
    *out = plant;
    return LW_OK;
}

lw_status lw_plant_state_space(int n_x, int n_u, int n_y, const double *a, const double *b,
                               const double *c, const double *d, const double *start,
                               const char *const *state_names, const char *const *input_names,
                               const char *const *output_names, lw_plant **out, lw_error *err)
{
    const lw_plant_view v = {.n_x = n_x,
                             .n_u = n_u,
                             .n_y = n_y,
                             .a = a,
                             .b = b,
                             .c = c,
                             .d = d,
                             .start = start,
                             .state_names = state_names,
                             .input_names = input_names,
                             .output_names = output_names};
    return lw__plant_make(&v, LW_PLANT_MAX_PORTS, out, err);
}

// ---- copies with something replaced

lw_status lw_plant_delayed(const lw_plant *plant, const char *input, double seconds, lw_plant **out,
                           lw_error *err)
{
    lw_plant_view v = plant->view;
    double delay[LW_PLANT_MAX_PORTS] = {0};
    char field[256];
    name_list lists[N_LISTS];
    lists_of(&v, lists);
    int at = input != NULL ? place_of(&lists[INPUTS], v.n_u, input) : -1;
    if (at < 0) {
        const char *near = input != NULL ? lw_nearest_name(input, v.input_names, v.n_u) : NULL;
        return lw_error_set(err, LW_ERR_NAME, "no input \"%.200s\"%s%s%s", input ? input : "",
                            near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
    }
    if (!(seconds >= 0)) { // the sum might hide it
        snprintf(field, sizeof field, "delay of %s", input);
        return lw__plant_bad(LW_ERR_ARGUMENT, field, seconds, "permitted 0 to 9e+06 s", err);
    }
    memcpy(delay, v.delay, sizeof(double) * (size_t)v.n_u);
    delay[at] += seconds;
    v.delay = delay;
    return lw__plant_make(&v, LW__PLANT_MAX_SHOWN, out, err);
}

lw_status lw_plant_started(const lw_plant *plant, int n, const double *start, lw_plant **out,
                           lw_error *err)
{
    lw_plant_view v = plant->view;
    if (n != v.n_x)
        return lw_error_set(err, LW_ERR_SHAPE, "start has %d numbers; the plant has %d states", n,
                            v.n_x);
    v.start = start;
    return lw__plant_make(&v, LW__PLANT_MAX_SHOWN, out, err);
}

lw_status lw_plant_renamed(const lw_plant *plant, const char *const *state_names,
                           const char *const *input_names, const char *const *output_names,
                           lw_plant **out, lw_error *err)
{
    lw_plant_view v = plant->view;
    v.state_names = state_names != NULL ? state_names : v.state_names;
    v.input_names = input_names != NULL ? input_names : v.input_names;
    v.output_names = output_names != NULL ? output_names : v.output_names;
    return lw__plant_make(&v, LW__PLANT_MAX_SHOWN, out, err);
}
