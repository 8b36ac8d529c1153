// The law as an object: a checked copy of its definition, shared by count.
//
// Workload: a handful a rig, made once; the steps themselves are called through the definition.
//
// Invariants
// 1. A law does not change after it is made, except for the count of its holders.
// 2. Law, names and start are one block; the parameter is the only other thing it owns.
// 3. A law that could not be made has not taken over the parameter.

#include "law/ready.h"

#include "base/alloc.h"
#include "base/text.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

struct lw_law {
    lw_law_def def;
    int n_holders;
};

// One list of names under checking: "input", "output" or "state".
typedef struct name_list {
    const char *what;
    int n, most;
    const char *const *names;
} name_list;

static lw_status check_count(const name_list *list, lw_error *err)
{
    if (list->n < 0 || list->n > list->most)
        return lw_error_set(err, LW_ERR_SHAPE, "number of %ss is %d; permitted 0 to %d", list->what,
                            list->n, list->most);
    if (list->n > 0 && list->names == NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT, "names of %ss are missing", list->what);
    return LW_OK;
}

static int stands_before(const name_list *list, int end, const char *name)
{
    for (int i = 0; i < end; i++)
        if (strcmp(list->names[i], name) == 0)
            return 1;
    return 0;
}

static lw_status check_names(const name_list *list, const name_list *other, lw_error *err)
{
    for (int i = 0; i < list->n; i++) {
        const char *name = list->names[i];
        lw_status status = lw__name_check(list->what, name, 0, err);
        if (status != LW_OK)
            return status;
        if (stands_before(list, i, name))
            return lw_error_set(err, LW_ERR_DUPLICATE, "two %ss are named \"%s\"", list->what,
                                name);
        if (other != NULL && stands_before(other, other->n, name))
            return lw_error_set(err, LW_ERR_DUPLICATE, "an %s and a %s are both named \"%s\"",
                                other->what, list->what, name);
    }
    return LW_OK;
}

static lw_status check_start(const lw_law_def *def, lw_error *err)
{
    for (int i = 0; def->start != NULL && i < def->n_state; i++)
        if (!isfinite(def->start[i]))
            return lw_error_set(err, LW_ERR_NOT_FINITE,
                                "start of %s is %.12g; a finite number is wanted",
                                def->state_names[i], def->start[i]);
    return LW_OK;
}

static lw_status check(const lw_law_def *def, lw_error *err)
{
    if (def->kind == NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT, "kind is missing");
    if (def->step == NULL)
        return lw_error_set(err, LW_ERR_ARGUMENT, "step is missing");
    const name_list lists[] = {
        {"input", def->n_in, LW_LAW_MAX_PORTS, def->in_names},
        {"output", def->n_out, LW_LAW_MAX_PORTS, def->out_names},
        {"state", def->n_state, LW_LAW_MAX_STATES, def->state_names},
    };
    for (int i = 0; i < 3; i++) {
        lw_status status = check_count(&lists[i], err);
        if (status != LW_OK)
            return status;
    }
    for (int i = 0; i < 3; i++) {
        lw_status status = check_names(&lists[i], i == 2 ? &lists[1] : NULL, err);
        if (status != LW_OK)
            return status;
    }
    return check_start(def, err);
}

static size_t text_size(int n, const char *const *names)
{
    size_t size = 0;
    for (int i = 0; i < n; i++)
        size += strlen(names[i]) + 1;
    return size;
}

// Where the next copy goes within the block.
typedef struct cursor {
    const char **name;
    char *text;
} cursor;

static const char *copy_text(cursor *to, const char *text)
{
    size_t size = strlen(text) + 1;
    char *copy = memcpy(to->text, text, size);
    to->text += size;
    return copy;
}

static const char *const *copy_names(cursor *to, int n, const char *const *names)
{
    const char **copy = to->name;
    for (int i = 0; i < n; i++)
        copy[i] = copy_text(to, names[i]);
    to->name += n;
    return copy;
}

// The block holds the law, its start, the lists of names, then all text.
static lw_law *copy(const lw_law_def *def)
{
    size_t n_names = (size_t)(def->n_in + def->n_out + def->n_state);
    size_t start_size = sizeof(double) * (size_t)def->n_state;
    size_t size = sizeof(lw_law) + start_size + sizeof(char *) * n_names + strlen(def->kind) + 1 +
                  text_size(def->n_in, def->in_names) + text_size(def->n_out, def->out_names) +
                  text_size(def->n_state, def->state_names);
    lw_law *law = lw__alloc(size);
    if (law == NULL)
        return NULL;
    double *start = (double *)(law + 1);
    if (def->start != NULL && def->n_state > 0)
        memcpy(start, def->start, start_size);
    cursor to = {.name = (const char **)(start + def->n_state)};
    to.text = (char *)(to.name + n_names);
    law->def = *def;
    law->def.start = start;
    law->def.kind = copy_text(&to, def->kind);
    law->def.in_names = copy_names(&to, def->n_in, def->in_names);
    law->def.out_names = copy_names(&to, def->n_out, def->out_names);
    law->def.state_names = copy_names(&to, def->n_state, def->state_names);
    law->n_holders = 1;
    return law;
}

lw_status lw_law_new(const lw_law_def *def, lw_law **out, lw_error *err)
{
    lw_status status = check(def, err);
    if (status != LW_OK)
        return status;
    lw_law *law = copy(def);
    if (law == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a law");
    *out = law;
    return LW_OK;
}

lw_law *lw_law_hold(const lw_law *law)
{
    // what a holder sees is constant; the count is not part of it
    lw_law *own = (lw_law *)law;
    own->n_holders++;
    return own;
}

void lw_law_free(lw_law *law)
{
    if (law == NULL || --law->n_holders > 0)
        return;
    if (law->def.free_param != NULL)
        law->def.free_param((void *)law->def.param);
    lw__free(law);
}

const lw_law_def *lw_law_look(const lw_law *law)
{
    return &law->def;
}

lw_status lw__law_bad(const char *field, double value, const char *permitted, lw_error *err)
{
    return lw_error_set(err, LW_ERR_ARGUMENT, "%s is %.12g; %s", field, value, permitted);
}

lw_status lw__law_field(const char *field, double value, lw_error *err)
{
    return isfinite(value) ? LW_OK : lw__law_bad(field, value, "a finite number is wanted", err);
}

lw_status lw__law_limits(double lo, double hi, lw__limits *out, lw_error *err)
{
    lw__limits limits = {isnan(lo) ? -INFINITY : lo, isnan(hi) ? INFINITY : hi};
    if (!(limits.lo < limits.hi))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "limits are %.12g and %.12g; the first must be below the second",
                            limits.lo, limits.hi);
    *out = limits;
    return LW_OK;
}

void lw__ports_add(lw__ports *ports, const char *stem, int count, int numbered)
{
    for (int i = 0; i < count; i++) {
        char *text = ports->text[ports->n];
        if (count > 1 || numbered)
            snprintf(text, sizeof ports->text[0], "%s%d", stem, i + 1);
        else
            snprintf(text, sizeof ports->text[0], "%s", stem);
        ports->name[ports->n++] = text;
    }
}

void *lw__law_param(size_t n_bytes, lw_error *err)
{
    void *param = lw__alloc(n_bytes);
    if (param == NULL)
        lw_error_set(err, LW_ERR_MEMORY, "no memory for a law");
    return param;
}

lw_status lw__law_finish(lw_law_def *def, void *param, lw_law **out, lw_error *err)
{
    def->param = param;
    def->free_param = lw__free;
    lw_status status = lw_law_new(def, out, err);
    if (status != LW_OK)
        lw__free(param);
    return status;
}
