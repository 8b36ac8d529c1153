// Two plants of one input and one output in series, in parallel or in feedback.
//
// Each is a connection of parts "a" and "b", so that states, delays and algebraic loops are
// treated as there.

#include "plant/plant.h"

#include <stdio.h>

#define PORT_BYTES 208 // "a." and a name

typedef struct pair {
    lw_part parts[3];
    char in[2][PORT_BYTES], out[2][PORT_BYTES];
} pair;

static lw_status take(pair *two, int i, const char *name, const lw_plant *plant, lw_error *err)
{
    lw_plant_view v = lw_plant_look(plant);
    if (v.n_u != 1 || v.n_y != 1)
        return lw_error_set(err, LW_ERR_SHAPE,
                            "plant %d has %d inputs and %d outputs; permitted 1 and 1", i + 1,
                            v.n_u, v.n_y);
    two->parts[i] = (lw_part){name, plant};
    snprintf(two->in[i], PORT_BYTES, "%s.%s", name, v.input_names[0]);
    snprintf(two->out[i], PORT_BYTES, "%s.%s", name, v.output_names[0]);
    return LW_OK;
}

static lw_status take_both(pair *two, const lw_plant *a, const lw_plant *b, double sign,
                           lw_error *err)
{
    if (sign != 1 && sign != -1)
        return lw__plant_bad(LW_ERR_ARGUMENT, "sign", sign, "permitted are 1 and -1", err);
    lw_status status = take(two, 0, "a", a, err);
    return status == LW_OK ? take(two, 1, "b", b, err) : status;
}

lw_status lw_plant_series(const lw_plant *a, const lw_plant *b, lw_plant **out, lw_error *err)
{
    pair two;
    lw_status status = take_both(&two, a, b, 1, err);
    const lw_link link = {two.out[0], two.in[1], 1};
    const lw_port in = {"in", two.in[0]}, shown = {"out", two.out[1]};
    return status == LW_OK ? lw_plant_connect(2, two.parts, 1, &link, 1, &in, 1, &shown, out, err)
                           : status;
}

lw_status lw_plant_parallel(const lw_plant *a, const lw_plant *b, double sign, lw_plant **out,
                            lw_error *err)
{
    static const char *const in_names[] = {"a", "b"};
    const double d[] = {1, sign};
    pair two;
    lw_plant *sum = NULL;
    lw_status status = take_both(&two, a, b, sign, err);
    if (status == LW_OK)
        status = lw_plant_state_space(0, 2, 1, NULL, NULL, NULL, d, NULL, NULL, in_names, NULL,
                                      &sum, err);
    if (status != LW_OK)
        return status;
    two.parts[2] = (lw_part){"sum", sum};
    const lw_link links[] = {{two.out[0], "sum.a", 1}, {two.out[1], "sum.b", 1}};
    const lw_port in[] = {{"in", two.in[0]}, {"in", two.in[1]}}, shown = {"out", "sum.out"};
    status = lw_plant_connect(3, two.parts, 2, links, 2, in, 1, &shown, out, err);
    lw_plant_free(sum);
    return status;
}

lw_status lw_plant_feedback(const lw_plant *a, const lw_plant *b, double sign, lw_plant **out,
                            lw_error *err)
{
    pair two;
    lw_status status = take_both(&two, a, b, sign, err);
    const lw_link links[] = {{two.out[0], two.in[1], 1}, {two.out[1], two.in[0], sign}};
    const lw_port in = {"in", two.in[0]}, shown = {"out", two.out[0]};
    return status == LW_OK ? lw_plant_connect(2, two.parts, 2, links, 1, &in, 1, &shown, out, err)
                           : status;
}
