// Reading a connection: names to numbers, each complaint in the user's words.
//
// Workload: once a group of plants when a rig is frozen, at most 64 parts.
//
// Invariants
// 1. After lw__net_read every number is within its row, and signs are +1 or -1.
// 2. A part's name holds no dot, so the first dot of "part.port" divides it.

#include "plant/net.h"

#include "plant/plant.h"

#include "base/text.h"

#include <stdint.h>
#include <string.h>

void *lw__net_get(lw__net *net, size_t n, size_t n_bytes)
{
    void *piece = lw__arena_get(net->arena, n * n_bytes);
    if (piece == NULL)
        lw_error_set(net->err, LW_ERR_MEMORY, "no memory to connect plants");
    return piece;
}

const char *lw__net_part_of_input(const lw__net *net, int input)
{
    return net->parts[net->part_of_u[input]].name;
}

const char *lw__net_input(const lw__net *net, int input)
{
    int p = net->part_of_u[input];
    return net->view[p].input_names[input - net->first_u[p]];
}

const char *lw__net_part_of_output(const lw__net *net, int output)
{
    return net->parts[net->part_of_y[output]].name;
}

const char *lw__net_output(const lw__net *net, int output)
{
    int p = net->part_of_y[output];
    return net->view[p].output_names[output - net->first_y[p]];
}

double lw__net_delay(const lw__net *net, int input)
{
    int p = net->part_of_u[input];
    return net->view[p].delay[input - net->first_u[p]];
}

// ---- parts

static lw_status check_part(const lw__net *net, int p)
{
    const lw_part *part = &net->parts[p];
    lw_status status = lw__name_check("part", part->name, 0, net->err);
    if (status != LW_OK)
        return status;
    for (int q = 0; q < p; q++)
        if (strcmp(net->parts[q].name, part->name) == 0)
            return lw_error_set(net->err, LW_ERR_DUPLICATE, "two parts are named \"%s\"",
                                part->name);
    if (part->plant == NULL)
        return lw_error_set(net->err, LW_ERR_ARGUMENT, "part \"%s\": its plant is missing",
                            part->name);
    return LW_OK;
}

static void count(lw__net *net)
{
    for (int p = 0; p < net->n_parts; p++) {
        net->view[p] = lw_plant_look(net->parts[p].plant);
        net->first_x[p] = net->n_x;
        net->first_u[p] = net->n_u;
        net->first_y[p] = net->n_y;
        net->n_x += net->view[p].n_x;
        net->n_u += net->view[p].n_u;
        net->n_y += net->view[p].n_y;
    }
}

static int *number_ports(lw__net *net, int n, const int *first)
{
    int *part_of = lw__net_get(net, (size_t)n, sizeof(int));
    for (int i = 0, p = -1; part_of != NULL && i < n; i++) {
        while (p + 1 < net->n_parts && first[p + 1] <= i)
            p++;
        part_of[i] = p;
    }
    return part_of;
}

static lw_status read_parts(lw__net *net)
{
    if (net->n_parts < 1 || net->n_parts > LW_PLANT_MAX_STATES)
        return lw_error_set(net->err, LW_ERR_SHAPE, "number of parts is %d; permitted 1 to %d",
                            net->n_parts, LW_PLANT_MAX_STATES);
    size_t n = (size_t)net->n_parts;
    net->view = lw__net_get(net, n, sizeof *net->view);
    net->first_x = lw__net_get(net, n, sizeof(int));
    net->first_u = lw__net_get(net, n, sizeof(int));
    net->first_y = lw__net_get(net, n, sizeof(int));
    if (!net->view || !net->first_x || !net->first_u || !net->first_y)
        return LW_ERR_MEMORY;
    for (int p = 0; p < net->n_parts; p++) {
        lw_status status = check_part(net, p);
        if (status != LW_OK)
            return status;
    }
    count(net);
    if (net->n_x > LW_PLANT_MAX_STATES)
        return lw_error_set(net->err, LW_ERR_SHAPE,
                            "the parts have %d states together; permitted 0 to %d", net->n_x,
                            LW_PLANT_MAX_STATES);
    net->part_of_u = number_ports(net, net->n_u, net->first_u);
    net->part_of_y = number_ports(net, net->n_y, net->first_y);
    return net->part_of_u && net->part_of_y ? LW_OK : LW_ERR_MEMORY;
}

// ---- ports by name

// A port as the user wrote it, and where: `link from`, or `input "voltage"` by what and name.
typedef struct wanted {
    const char *what, *name; // name may be NULL
    const char *text;
    int is_input;
} wanted;

// Put before the message what was being read.
static lw_status where(const lw__net *net, const wanted *w, lw_status status)
{
    if (w->name != NULL)
        lw_error_prefix(net->err, "%s \"%.200s\": ", w->what, w->name);
    else
        lw_error_prefix(net->err, "%s: ", w->what);
    return status;
}

// Number of the part whose name is the first `length` bytes of the text, or -1.
static int find_part(const lw__net *net, const char *text, size_t length)
{
    for (int p = 0; p < net->n_parts; p++)
        if (strlen(net->parts[p].name) == length && memcmp(net->parts[p].name, text, length) == 0)
            return p;
    return -1;
}

static lw_status no_part(const lw__net *net, const wanted *w, size_t length)
{
    char part[256];
    const char *names[LW_PLANT_MAX_STATES];
    for (int p = 0; p < net->n_parts; p++)
        names[p] = net->parts[p].name;
    length = length < sizeof part ? length : lw__utf8_cut(w->text, sizeof part - 1);
    memcpy(part, w->text, length);
    part[length] = 0;
    const char *near = lw_nearest_name(part, names, net->n_parts);
    lw_error_set(net->err, LW_ERR_NAME, "no part \"%s\"%s%s%s", part, near ? "; nearest \"" : "",
                 near ? near : "", near ? "\"" : "");
    return where(net, w, LW_ERR_NAME);
}

static lw_status no_port(const lw__net *net, const wanted *w, const char *near, int p)
{
    const char *kind = w->is_input ? "input" : "output";
    if (near != NULL)
        lw_error_set(net->err, LW_ERR_NAME, "no %s \"%.200s\"; nearest \"%s.%s\"", kind, w->text,
                     net->parts[p].name, near);
    else
        lw_error_set(net->err, LW_ERR_NAME, "no %s \"%.200s\"", kind, w->text);
    return where(net, w, LW_ERR_NAME);
}

static lw_status find_port(const lw__net *net, const wanted *w, int *number)
{
    const char *dot = w->text != NULL ? strchr(w->text, '.') : NULL;
    if (dot == NULL) {
        lw_error_set(net->err, LW_ERR_NAME, "a port is written \"part.port\", not \"%.200s\"",
                     w->text != NULL ? w->text : "");
        return where(net, w, LW_ERR_NAME);
    }
    int p = find_part(net, w->text, (size_t)(dot - w->text));
    if (p < 0)
        return no_part(net, w, (size_t)(dot - w->text));
    const lw_plant_view *v = &net->view[p];
    const char *const *names = w->is_input ? v->input_names : v->output_names;
    int n = w->is_input ? v->n_u : v->n_y, first = (w->is_input ? net->first_u : net->first_y)[p];
    for (int i = 0; i < n; i++)
        if (strcmp(names[i], dot + 1) == 0) {
            *number = first + i;
            return LW_OK;
        }
    return no_port(net, w, lw_nearest_name(dot + 1, names, n), p);
}

// ---- links, external inputs, external outputs

static lw_status read_link(lw__net *net, const lw_link *link, int i)
{
    lw__net_link *own = &net->link[i];
    const wanted from = {"link from", NULL, link->from, 0}, to = {"link to", NULL, link->to, 1};
    lw_status status = find_port(net, &from, &own->from);
    if (status == LW_OK)
        status = find_port(net, &to, &own->to);
    if (status != LW_OK)
        return status;
    own->sign = link->sign;
    if (link->sign != 1 && link->sign != -1)
        return lw_error_set(net->err, LW_ERR_ARGUMENT,
                            "link from \"%s\" to \"%s\": sign is %.12g; permitted are 1 and -1",
                            link->from, link->to, link->sign);
    for (int k = 0; k < i; k++)
        if (net->link[k].from == own->from && net->link[k].to == own->to)
            return lw_error_set(net->err, LW_ERR_DUPLICATE,
                                "link from \"%s\" to \"%s\" is stated twice", link->from, link->to);
    return LW_OK;
}

static int external_number(lw__net *net, const char *name)
{
    int e = 0;
    while (e < net->n_external && strcmp(net->external_name[e], name) != 0)
        e++;
    net->external_name[e] = name;
    net->n_external += e == net->n_external;
    return e;
}

static lw_status read_input(lw__net *net, const lw_port *input, int i)
{
    lw__net_feed *own = &net->feed[i];
    lw_status status = lw__name_check("input", input->name, 0, net->err);
    const wanted to = {"input", input->name, input->port, 1};
    if (status == LW_OK)
        status = find_port(net, &to, &own->to);
    if (status != LW_OK)
        return status;
    own->external = external_number(net, input->name);
    for (int k = 0; k < i; k++)
        if (net->feed[k].external == own->external && net->feed[k].to == own->to)
            return lw_error_set(net->err, LW_ERR_DUPLICATE, "input \"%s\" drives \"%s\" twice",
                                input->name, input->port);
    return LW_OK;
}

static lw_status read_output(lw__net *net, const lw_port *output, int i)
{
    lw_status status = lw__name_check("output", output->name, 0, net->err);
    const wanted from = {"output", output->name, output->port, 0};
    return status == LW_OK ? find_port(net, &from, &net->shown[i]) : status;
}

static lw_status check_counts(const lw__net *net, int n_links, int n_inputs, int n_outputs)
{
    const struct {
        const char *what;
        int n, most;
    } list[] = {{"links", n_links, INT16_MAX},
                {"inputs", n_inputs, INT16_MAX},
                {"outputs", n_outputs, LW__PLANT_MAX_SHOWN}};
    for (int i = 0; i < 3; i++)
        if (list[i].n < 0 || list[i].n > list[i].most)
            return lw_error_set(net->err, LW_ERR_SHAPE, "number of %s is %d; permitted 0 to %d",
                                list[i].what, list[i].n, list[i].most);
    return LW_OK;
}

static lw_status make_room(lw__net *net, int n_links, int n_inputs, int n_outputs)
{
    net->link = lw__net_get(net, (size_t)n_links, sizeof *net->link);
    net->feed = lw__net_get(net, (size_t)n_inputs, sizeof *net->feed);
    net->external_name = lw__net_get(net, (size_t)n_inputs, sizeof(char *));
    net->external_delay = lw__net_get(net, (size_t)n_inputs, sizeof(double));
    net->shown = lw__net_get(net, (size_t)n_outputs, sizeof(int));
    return net->link && net->feed && net->external_name && net->external_delay && net->shown
               ? LW_OK
               : LW_ERR_MEMORY;
}

lw_status lw__net_read(lw__net *net, int n_links, const lw_link *links, int n_inputs,
                       const lw_port *inputs, int n_outputs, const lw_port *outputs)
{
    lw_status status = check_counts(net, n_links, n_inputs, n_outputs);
    if (status == LW_OK)
        status = read_parts(net);
    if (status == LW_OK)
        status = make_room(net, n_links, n_inputs, n_outputs);
    net->n_links = n_links;
    net->n_feeds = n_inputs;
    net->n_shown = n_outputs;
    net->shown_port = outputs;
    for (int i = 0; status == LW_OK && i < n_links; i++)
        status = read_link(net, &links[i], i);
    for (int i = 0; status == LW_OK && i < n_inputs; i++)
        status = read_input(net, &inputs[i], i);
    for (int i = 0; status == LW_OK && i < n_outputs; i++)
        status = read_output(net, &outputs[i], i);
    if (status == LW_OK && net->n_external > LW_PLANT_MAX_PORTS)
        status = lw_error_set(net->err, LW_ERR_SHAPE, "number of inputs is %d; permitted 0 to %d",
                              net->n_external, LW_PLANT_MAX_PORTS);
    return status;
}
