// Composition of plants by signal names.
//
// Every part's ports get a number in one long list; links say which outputs feed which inputs.
// Direct paths (D) among them must not close: then each part's output is formed after the outputs
// it depends on, and the whole is one state space.
//
// Invariants
// 1. States of the whole are those of the parts, in the order of the parts.
// 2. Nothing is solved: a loop of direct paths is an error that names its signals.

#include "plant/plant.h"

#include "base/alloc.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

typedef struct joining {
    int n_parts, n_links, n_inputs, n_outputs;
    const lw_part *parts;
    const lw_link *links;
    const lw_port *inputs, *outputs;
    lw_error *err;
    int n_x, n_u, n_y;            // of all parts together
    int *first_x, *first_u, *first_y;
    int *link_y, *link_u;         // numbers of the ports of each link
    int *port_u, *external;       // of each entry of `inputs`: port, and number of the input
    int n_external;
    const char **external_names;
    double *delay;                // of each external input
    double *y_of;                 // n_y x (n_x + n_external): each output from states and inputs
    char *state;                  // of the search: 0 new, 1 on the path, 2 done
    int *path, path_length;
} joining;

// ---- ports

static int find(const char *const *names, int n, const char *name)
{
    for (int i = 0; i < n; i++)
        if (strcmp(names[i], name) == 0)
            return i;
    return -1;
}

static lw_status find_port(const joining *j, const char *text, int is_input, int *number)
{
    const char *dot = strchr(text, '.');
    for (int p = 0; dot != NULL && p < j->n_parts; p++) {
        if (strlen(j->parts[p].name) != (size_t)(dot - text) ||
            memcmp(j->parts[p].name, text, (size_t)(dot - text)) != 0)
            continue;
        lw_plant_view v = lw_plant_look(j->parts[p].plant);
        int i = is_input ? find(v.input_names, v.n_u, dot + 1)
                         : find(v.output_names, v.n_y, dot + 1);
        if (i >= 0) {
            *number = (is_input ? j->first_u : j->first_y)[p] + i;
            return LW_OK;
        }
        const char *near = lw_nearest_name(dot + 1, is_input ? v.input_names : v.output_names,
                                           is_input ? v.n_u : v.n_y);
        return lw_error_set(j->err, LW_ERR_NAME, "connect: \"%s\": part \"%s\" has no %s \"%s\"%s%s%s",
                            text, j->parts[p].name, is_input ? "input" : "output", dot + 1,
                            near ? "; nearest \"" : "", near ? near : "", near ? "\"" : "");
    }
    return lw_error_set(j->err, LW_ERR_NAME,
                        "connect: no part has the %s \"%s\"; a port is written \"part.port\"",
                        is_input ? "input" : "output", text);
}

static int part_of(const joining *j, const int *first, int number)
{
    int p = 0;
    while (p + 1 < j->n_parts && first[p + 1] <= number)
        p++;
    return p;
}

static void port_name(const joining *j, int is_input, int number, char *text, size_t size)
{
    const int *first = is_input ? j->first_u : j->first_y;
    int p = part_of(j, first, number);
    lw_plant_view v = lw_plant_look(j->parts[p].plant);
    const char *port = (is_input ? v.input_names : v.output_names)[number - first[p]];
    snprintf(text, size, "%s.%s", j->parts[p].name, port);
}

static lw_status number_parts(joining *j)
{
    for (int p = 0; p < j->n_parts; p++) {
        for (int q = 0; q < p; q++)
            if (strcmp(j->parts[p].name, j->parts[q].name) == 0)
                return lw_error_set(j->err, LW_ERR_DUPLICATE,
                                    "connect: two parts are called \"%s\"", j->parts[p].name);
        lw_plant_view v = lw_plant_look(j->parts[p].plant);
        j->first_x[p] = j->n_x;
        j->first_u[p] = j->n_u;
        j->first_y[p] = j->n_y;
        j->n_x += v.n_x;
        j->n_u += v.n_u;
        j->n_y += v.n_y;
    }
    if (j->n_x > LW_PLANT_MAX_STATES)
        return lw_error_set(j->err, LW_ERR_SHAPE,
                            "connect: the parts have %d states together; permitted 0 to %d", j->n_x,
                            LW_PLANT_MAX_STATES);
    return LW_OK;
}

static lw_status number_ports(joining *j)
{
    for (int i = 0; i < j->n_links; i++) {
        lw_status status = find_port(j, j->links[i].from, 0, &j->link_y[i]);
        if (status == LW_OK)
            status = find_port(j, j->links[i].to, 1, &j->link_u[i]);
        if (status == LW_OK && !isfinite(j->links[i].sign))
            status = lw_error_set(j->err, LW_ERR_ARGUMENT, "connect: sign of \"%s\" is not finite",
                                  j->links[i].from);
        if (status != LW_OK)
            return status;
    }
    for (int i = 0; i < j->n_inputs; i++) {
        lw_status status = find_port(j, j->inputs[i].port, 1, &j->port_u[i]);
        if (status != LW_OK)
            return status;
        int e = 0;
        while (e < j->n_external && strcmp(j->external_names[e], j->inputs[i].name) != 0)
            e++;
        if (e == j->n_external)
            j->external_names[j->n_external++] = j->inputs[i].name;
        j->external[i] = e;
    }
    return LW_OK;
}

// ---- direct paths

// "a.out -> b.in -> b.out -> a.in". The path goes against the signals, from a reader to what it
// reads, and ends where `output` is read again.
static lw_status algebraic_loop(const joining *j, int output)
{
    char text[360] = "";
    int from = 0, source = output;
    while (j->path[from] != output)
        from++;
    for (int k = j->path_length - 1; k >= from; k--) {
        char name[210], input[210] = "";
        port_name(j, 0, source, name, sizeof name);
        for (int l = 0; l < j->n_links; l++)
            if (j->link_y[l] == source &&
                part_of(j, j->first_u, j->link_u[l]) == part_of(j, j->first_y, j->path[k]))
                port_name(j, 1, j->link_u[l], input, sizeof input);
        size_t used = strlen(text);
        snprintf(text + used, sizeof text - used, "%s%s -> %s", used > 0 ? " -> " : "", name,
                 input);
        source = j->path[k];
    }
    return lw_error_set(j->err, LW_ERR_LOOP, "signals depend on themselves without delay: %s",
                        text);
}

// y_of row of an output: C x + D u, u being links and external inputs.
static lw_status form_output(joining *j, int output)
{
    int p = part_of(j, j->first_y, output), width = j->n_x + j->n_external;
    lw_plant_view v = lw_plant_look(j->parts[p].plant);
    int own = output - j->first_y[p];
    double *row = j->y_of + output * width;
    if (j->state[output] == 2)
        return LW_OK;
    if (j->state[output] == 1)
        return algebraic_loop(j, output);
    j->state[output] = 1;
    j->path[j->path_length++] = output;
    for (int k = 0; k < v.n_x; k++)
        row[j->first_x[p] + k] += v.c[own * v.n_x + k];
    for (int u = 0; u < v.n_u; u++) {
        double d = v.d[own * v.n_u + u];
        if (d == 0)
            continue;
        for (int l = 0; l < j->n_links; l++) {
            if (j->link_u[l] != j->first_u[p] + u)
                continue;
            lw_status status = form_output(j, j->link_y[l]);
            if (status != LW_OK)
                return status;
            for (int k = 0; k < width; k++)
                row[k] += d * j->links[l].sign * j->y_of[j->link_y[l] * width + k];
        }
        for (int i = 0; i < j->n_inputs; i++)
            if (j->port_u[i] == j->first_u[p] + u)
                row[j->n_x + j->external[i]] += d;
    }
    j->path_length--;
    j->state[output] = 2;
    return LW_OK;
}

// ---- delays

// Delay that an external input needs, or -1: the delays of the ports it drives must agree.
static lw_status external_delays(joining *j)
{
    for (int e = 0; e < j->n_external; e++)
        j->delay[e] = -1;
    for (int i = 0; i < j->n_inputs; i++) {
        int p = part_of(j, j->first_u, j->port_u[i]);
        double delay = lw_plant_look(j->parts[p].plant).delay[j->port_u[i] - j->first_u[p]];
        double *own = &j->delay[j->external[i]];
        if (*own >= 0 && *own != delay)
            return lw_error_set(j->err, LW_ERR_ARGUMENT,
                                "connect: input \"%s\" would need two delays, %g s and %g s; name "
                                "two inputs",
                                j->inputs[i].name, *own, delay);
        *own = delay;
    }
    return LW_OK;
}

// Nonzero if output `target` depends on part `part` through links (states included).
static int reaches(const joining *j, int part, int target, char *seen)
{
    if (part == target)
        return 1;
    if (seen[part])
        return 0;
    seen[part] = 1;
    for (int l = 0; l < j->n_links; l++)
        if (part_of(j, j->first_y, j->link_y[l]) == part &&
            reaches(j, part_of(j, j->first_u, j->link_u[l]), target, seen))
            return 1;
    return 0;
}

// A delay on a linked input moves upstream: every input of the part that feeds it is delayed
// instead. That is exact where the chain is open, the feeding part has no other reader and starts
// at rest.
static lw_status move_delay(joining *j, int link, double delay)
{
    int to = part_of(j, j->first_u, j->link_u[link]), from = part_of(j, j->first_y, j->link_y[link]);
    char seen[LW_PLANT_MAX_STATES + 1] = {0}, text[210];
    port_name(j, 1, j->link_u[link], text, sizeof text);
    if (reaches(j, to, from, seen))
        return lw_error_set(j->err, LW_ERR_LOOP,
                            "connect: input \"%s\" has a delay inside continuous feedback", text);
    lw_plant_view v = lw_plant_look(j->parts[from].plant);
    int others = 0;
    for (int l = 0; l < j->n_links; l++)
        others += l != link && part_of(j, j->first_y, j->link_y[l]) == from;
    for (int o = 0; o < j->n_outputs; o++) {
        int number;
        if (find_port(j, j->outputs[o].port, 0, &number) != LW_OK)
            return LW_ERR_NAME;
        others += part_of(j, j->first_y, number) == from;
    }
    for (int k = 0; k < v.n_x; k++)
        others += v.start[k] != 0;
    if (others > 0)
        return lw_error_set(j->err, LW_ERR_ARGUMENT,
                            "connect: the delay of input \"%s\" cannot move upstream of part "
                            "\"%s\", whose signals are used elsewhere or which does not start at "
                            "rest; state the delay at an external input",
                            text, j->parts[from].name);
    for (int i = 0; i < j->n_inputs; i++)
        if (part_of(j, j->first_u, j->port_u[i]) == from)
            j->delay[j->external[i]] += delay;
    for (int l = 0; l < j->n_links; l++)
        if (part_of(j, j->first_u, j->link_u[l]) == from) {
            lw_status status = move_delay(j, l, delay);
            if (status != LW_OK)
                return status;
        }
    return LW_OK;
}

static lw_status move_delays(joining *j)
{
    lw_status status = external_delays(j);
    for (int l = 0; status == LW_OK && l < j->n_links; l++) {
        int p = part_of(j, j->first_u, j->link_u[l]);
        double delay = lw_plant_look(j->parts[p].plant).delay[j->link_u[l] - j->first_u[p]];
        if (delay > 0)
            status = move_delay(j, l, delay);
    }
    for (int e = 0; e < j->n_external; e++)
        j->delay[e] = j->delay[e] > 0 ? j->delay[e] : 0;
    return status;
}

// ---- the whole

// Rows of the whole: x' = A x + B u with u replaced by links and external inputs.
static void form_rates(const joining *j, double *a, double *b)
{
    int width = j->n_x + j->n_external;
    for (int p = 0; p < j->n_parts; p++) {
        lw_plant_view v = lw_plant_look(j->parts[p].plant);
        for (int r = 0; r < v.n_x; r++) {
            int row = j->first_x[p] + r;
            for (int k = 0; k < v.n_x; k++)
                a[row * j->n_x + j->first_x[p] + k] += v.a[r * v.n_x + k];
            for (int u = 0; u < v.n_u; u++) {
                double gain = v.b[r * v.n_u + u];
                for (int l = 0; l < j->n_links; l++) {
                    if (j->link_u[l] != j->first_u[p] + u)
                        continue;
                    const double *y = j->y_of + j->link_y[l] * width;
                    for (int k = 0; k < j->n_x; k++)
                        a[row * j->n_x + k] += gain * j->links[l].sign * y[k];
                    for (int e = 0; e < j->n_external; e++)
                        b[row * j->n_external + e] += gain * j->links[l].sign * y[j->n_x + e];
                }
                for (int i = 0; i < j->n_inputs; i++)
                    if (j->port_u[i] == j->first_u[p] + u)
                        b[row * j->n_external + j->external[i]] += gain;
            }
        }
    }
}

static lw_status form_outputs(const joining *j, double *c, double *d, const char **names)
{
    int width = j->n_x + j->n_external;
    for (int o = 0; o < j->n_outputs; o++) {
        int number;
        lw_status status = find_port(j, j->outputs[o].port, 0, &number);
        if (status != LW_OK)
            return status;
        const double *y = j->y_of + number * width;
        memcpy(c + o * j->n_x, y, sizeof(double) * (size_t)j->n_x);
        memcpy(d + o * j->n_external, y + j->n_x, sizeof(double) * (size_t)j->n_external);
        names[o] = j->outputs[o].name;
    }
    return LW_OK;
}

// "part_state", cut to the length of a name; a number is added where that is taken.
static void state_name(const joining *j, int part, int state, char (*names)[202], int n)
{
    lw_plant_view v = lw_plant_look(j->parts[part].plant);
    if (j->n_parts == 1)
        snprintf(names[n], sizeof names[n], "%s", v.state_names[state]);
    else
        snprintf(names[n], sizeof names[n], "%.95s_%.95s", j->parts[part].name,
                 v.state_names[state]);
    for (int k = 0; k < n; k++)
        if (strcmp(names[k], names[n]) == 0)
            snprintf(names[n], sizeof names[n], "state_%d", n + 1);
}

static lw_status assemble(joining *j, double *numbers, const char **names, char (*states)[202],
                          lw_plant **out)
{
    int n = j->n_x, m = j->n_external, r = j->n_outputs;
    double *a = numbers, *b = a + n * n, *c = b + n * m, *d = c + r * n, *start = d + r * m;
    const char **state_names = names + r;
    form_rates(j, a, b);
    lw_status status = form_outputs(j, c, d, names);
    if (status != LW_OK)
        return status;
    for (int p = 0, k = 0; p < j->n_parts; p++) {
        lw_plant_view v = lw_plant_look(j->parts[p].plant);
        for (int s = 0; s < v.n_x; s++, k++) {
            state_name(j, p, s, states, k);
            state_names[k] = states[k];
            start[k] = v.start[s];
        }
    }
    lw_plant_view v = {n, m, r, a, b, c, d, start, j->delay, state_names, j->external_names, names};
    return lw__plant_make(LW__PLANT_MAX_OUTPUTS, &v, out, j->err);
}

static lw_status join(joining *j, lw_plant **out)
{
    lw_status status = number_ports(j);
    if (status != LW_OK)
        return status;
    int n = j->n_x, m = j->n_external, r = j->n_outputs;
    size_t cells = (size_t)(n * n + n * m + r * n + r * m + n);
    j->y_of = lw__alloc(sizeof(double) * (size_t)(j->n_y * (n + m) + 1));
    j->state = lw__alloc((size_t)j->n_y + 1);
    j->path = lw__alloc(sizeof(int) * (size_t)(j->n_y + 1));
    double *numbers = lw__alloc(sizeof(double) * (cells + 1));
    const char **names = lw__alloc(sizeof(char *) * (size_t)(n + r + 1));
    char(*states)[202] = lw__alloc(sizeof states[0] * (size_t)(n + 1));
    if (!j->y_of || !j->state || !j->path || !numbers || !names || !states)
        status = lw_error_set(j->err, LW_ERR_MEMORY, "no memory to connect plants");
    for (int y = 0; status == LW_OK && y < j->n_y; y++)
        status = form_output(j, y);
    if (status == LW_OK)
        status = move_delays(j);
    if (status == LW_OK)
        status = assemble(j, numbers, names, states, out);
    lw__free(j->y_of);
    lw__free(j->state);
    lw__free(j->path);
    lw__free(numbers);
    lw__free(names);
    lw__free(states);
    return status;
}

lw_status lw_plant_connect(int n_parts, const lw_part *parts, int n_links, const lw_link *links,
                           int n_inputs, const lw_port *inputs, int n_outputs,
                           const lw_port *outputs, lw_plant **out, lw_error *err)
{
    if (n_parts < 1 || n_parts > LW_PLANT_MAX_STATES)
        return lw_error_set(err, LW_ERR_SHAPE, "connect: there are %d parts; permitted 1 to %d",
                            n_parts, LW_PLANT_MAX_STATES);
    size_t n_int = (size_t)(3 * n_parts + 2 * n_links + 2 * n_inputs + 1);
    int *ints = lw__alloc(sizeof(int) * n_int);
    const char **names = lw__alloc(sizeof(char *) * (size_t)(n_inputs + 1));
    double *delay = lw__alloc(sizeof(double) * (size_t)(n_inputs + 1));
    lw_status status = LW_OK;
    if (ints == NULL || names == NULL || delay == NULL) {
        status = lw_error_set(err, LW_ERR_MEMORY, "no memory to connect plants");
    } else {
        joining j = {.n_parts = n_parts, .n_links = n_links, .n_inputs = n_inputs,
                     .n_outputs = n_outputs, .parts = parts, .links = links, .inputs = inputs,
                     .outputs = outputs, .err = err, .first_x = ints, .first_u = ints + n_parts,
                     .first_y = ints + 2 * n_parts, .link_y = ints + 3 * n_parts,
                     .link_u = ints + 3 * n_parts + n_links,
                     .port_u = ints + 3 * n_parts + 2 * n_links,
                     .external = ints + 3 * n_parts + 2 * n_links + n_inputs,
                     .external_names = names, .delay = delay};
        status = number_parts(&j);
        if (status == LW_OK)
            status = join(&j, out);
    }
    lw__free(ints);
    lw__free(names);
    lw__free(delay);
    return status;
}

// ---- single input and output

static lw_status single(const lw_plant *a, const char *which, lw_error *err)
{
    lw_plant_view v = lw_plant_look(a);
    if (v.n_u == 1 && v.n_y == 1)
        return LW_OK;
    return lw_error_set(err, LW_ERR_SHAPE,
                        "the %s plant has %d inputs and %d outputs; one each is wanted, or connect",
                        which, v.n_u, v.n_y);
}

// Two parts "a" and "b" under the ports of a single plant; links by port letters.
static lw_status two(const lw_plant *a, const lw_plant *b, int n_links, const int (*ends)[2],
                     const double *signs, int n_inputs, const int *inputs, int output,
                     lw_plant **out, lw_error *err)
{
    lw_status status = single(a, "first", err);
    if (status == LW_OK)
        status = single(b, "second", err);
    if (status != LW_OK)
        return status;
    char ports[2][2][210]; // part, input or output
    const lw_plant *both[2] = {a, b};
    static const char *const letters[2] = {"a", "b"};
    for (int p = 0; p < 2; p++) {
        lw_plant_view v = lw_plant_look(both[p]);
        snprintf(ports[p][0], sizeof ports[p][0], "%s.%s", letters[p], v.input_names[0]);
        snprintf(ports[p][1], sizeof ports[p][1], "%s.%s", letters[p], v.output_names[0]);
    }
    lw_part parts[2] = {{"a", a}, {"b", b}};
    lw_link links[2];
    lw_port in[2], shown = {"out", ports[output][1]};
    for (int l = 0; l < n_links; l++)
        links[l] = (lw_link){ports[ends[l][0]][1], ports[ends[l][1]][0], signs[l]};
    for (int i = 0; i < n_inputs; i++)
        in[i] = (lw_port){"in", ports[inputs[i]][0]};
    return lw_plant_connect(2, parts, n_links, links, n_inputs, in, 1, &shown, out, err);
}

lw_status lw_plant_series(const lw_plant *a, const lw_plant *b, lw_plant **out, lw_error *err)
{
    const int ends[1][2] = {{0, 1}}, input = 0;
    const double sign = 1;
    return two(a, b, 1, ends, &sign, 1, &input, 1, out, err);
}

lw_status lw_plant_parallel(const lw_plant *a, const lw_plant *b, double sign, lw_plant **out,
                            lw_error *err)
{
    // a third part adds the two outputs
    static const char *const adders[] = {"a", "b"};
    const double gains[2] = {1, sign};
    lw_plant *sum = NULL;
    lw_status status = single(a, "first", err);
    if (status == LW_OK)
        status = single(b, "second", err);
    if (status == LW_OK)
        status = lw_plant_state_space(0, 2, 1, NULL, NULL, NULL, gains, NULL, NULL, adders, NULL,
                                      &sum, err);
    if (status != LW_OK)
        return status;
    char port[4][210];
    lw_plant_view va = lw_plant_look(a), vb = lw_plant_look(b);
    snprintf(port[0], sizeof port[0], "a.%s", va.input_names[0]);
    snprintf(port[1], sizeof port[1], "b.%s", vb.input_names[0]);
    snprintf(port[2], sizeof port[2], "a.%s", va.output_names[0]);
    snprintf(port[3], sizeof port[3], "b.%s", vb.output_names[0]);
    lw_part parts[3] = {{"a", a}, {"b", b}, {"sum", sum}};
    lw_link links[2] = {{port[2], "sum.a", 1}, {port[3], "sum.b", 1}};
    lw_port in[2] = {{"in", port[0]}, {"in", port[1]}}, shown = {"out", "sum.out"};
    status = lw_plant_connect(3, parts, 2, links, 2, in, 1, &shown, out, err);
    lw_plant_free(sum);
    return status;
}

lw_status lw_plant_feedback(const lw_plant *a, const lw_plant *b, double sign, lw_plant **out,
                            lw_error *err)
{
    const int ends[2][2] = {{0, 1}, {1, 0}}, input = 0;
    const double signs[2] = {1, sign};
    return two(a, b, 2, ends, signs, 1, &input, 0, out, err);
}
