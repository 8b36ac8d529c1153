// Delays of linked inputs move upstream, to the external inputs.
//
// A delay stands at an input. Where that input is linked, the part behind the link has to put out
// its signals late; so all of this part is described late: its states are those of a moment
// earlier, and each of its own inputs has to be late by as much, further up the chain, until only
// external inputs are left to carry delays. That is exact while the late parts are at rest before
// time zero.
//
// A part moves as a whole. It must not be late where its signals are seen in time: as an external
// output, or because nothing comes after it.
//
// Invariants
// 1. late[p] >= 0, and late[p] = late[q] + delay for every link from part p to part q.
// 2. A part that is shown, or that links to no other part, is not late.

#include "plant/net.h"

#include <math.h>

// What says how late a part is.
typedef struct reason {
    enum { UNKNOWN, SHOWN, LAST, LINKED } kind;
    int number; // output of the net, or link
} reason;

// reaches: n_parts x n_parts, whether a chain of links leads from row to column.
typedef struct mover {
    lw__net *net;
    unsigned char *reaches;
    double *late; // n_parts
    reason *why;  // n_parts
} mover;

static int from_part(const lw__net *net, int link)
{
    return net->part_of_y[net->link[link].from];
}

static int to_part(const lw__net *net, int link)
{
    return net->part_of_u[net->link[link].to];
}

// Equal but for the rounding of sums.
static int same_delay(double a, double b)
{
    return fabs(a - b) <= 1e-14 * (a + b);
}

// ---- rings

// Method: S. Warshall, J. ACM 9 (1962) 11-12.
static void find_reach(mover *m)
{
    int n = m->net->n_parts;
    for (int l = 0; l < m->net->n_links; l++)
        m->reaches[from_part(m->net, l) * n + to_part(m->net, l)] = 1;
    for (int k = 0; k < n; k++)
        for (int i = 0; i < n; i++)
            for (int j = 0; m->reaches[i * n + k] && j < n; j++)
                m->reaches[i * n + j] |= m->reaches[k * n + j];
}

static lw_status refuse_in_rings(const mover *m)
{
    const lw__net *net = m->net;
    for (int l = 0; l < net->n_links; l++) {
        int input = net->link[l].to;
        double delay = lw__net_delay(net, input);
        if (delay == 0 || !m->reaches[to_part(net, l) * net->n_parts + from_part(net, l)])
            continue;
        return lw_error_set(net->err, LW_ERR_LOOP,
                            "part \"%s\": input \"%s\" has a delay of %.12g s inside continuous "
                            "feedback; permitted in an open chain",
                            lw__net_part_of_input(net, input), lw__net_input(net, input), delay);
    }
    return LW_OK;
}

// ---- how late each part is

static void settle(mover *m, int part, double late, reason why)
{
    if (m->why[part].kind != UNKNOWN)
        return;
    m->late[part] = late;
    m->why[part] = why;
}

// From each part that is settled to those that feed it.
static void spread(mover *m)
{
    const lw__net *net = m->net;
    for (int changed = 1; changed;) {
        changed = 0;
        for (int l = 0; l < net->n_links; l++) {
            int p = from_part(net, l), q = to_part(net, l);
            if (m->why[p].kind != UNKNOWN || m->why[q].kind == UNKNOWN)
                continue;
            settle(m, p, m->late[q] + lw__net_delay(net, net->link[l].to), (reason){LINKED, l});
            changed = 1;
        }
    }
}

// Whether every part that `part` reaches reaches it back.
static int is_last(const mover *m, int part)
{
    int n = m->net->n_parts;
    for (int q = 0; q < n; q++)
        if (m->reaches[part * n + q] && !m->reaches[q * n + part])
            return 0;
    return 1;
}

static void settle_all(mover *m)
{
    const lw__net *net = m->net;
    for (int i = 0; i < net->n_shown; i++)
        settle(m, net->part_of_y[net->shown[i]], 0, (reason){SHOWN, i});
    spread(m);
    for (int p = 0; p < net->n_parts; p++) {
        if (m->why[p].kind != UNKNOWN || !is_last(m, p))
            continue;
        settle(m, p, 0, (reason){LAST, 0});
        spread(m);
    }
}

// ---- what cannot be

static lw_status two_delays(const mover *m, int link, double wanted)
{
    const lw__net *net = m->net;
    int p = from_part(net, link), input = net->link[link].to;
    const char *part = net->parts[p].name, *to = lw__net_part_of_input(net, input),
               *port = lw__net_input(net, input);
    if (m->why[p].kind == SHOWN) {
        int shown = net->shown[m->why[p].number];
        return lw_error_set(net->err, LW_ERR_ARGUMENT,
                            "part \"%s\" would need two delays: %.12g s for \"%s.%s\" and none "
                            "where \"%s.%s\" is shown",
                            part, wanted, to, port, part, lw__net_output(net, shown));
    }
    int other = net->link[m->why[p].number].to;
    return lw_error_set(net->err, LW_ERR_ARGUMENT,
                        "part \"%s\" would need two delays: %.12g s for \"%s.%s\" and %.12g s for "
                        "\"%s.%s\"",
                        part, m->late[p], lw__net_part_of_input(net, other),
                        lw__net_input(net, other), wanted, to, port);
}

static lw_status check_links(const mover *m)
{
    for (int l = 0; l < m->net->n_links; l++) {
        double wanted = m->late[to_part(m->net, l)] + lw__net_delay(m->net, m->net->link[l].to);
        if (!same_delay(m->late[from_part(m->net, l)], wanted))
            return two_delays(m, l, wanted);
    }
    return LW_OK;
}

static lw_status check_starts(const mover *m)
{
    for (int p = 0; p < m->net->n_parts; p++) {
        const lw_plant_view *v = &m->net->view[p];
        for (int i = 0; m->late[p] > 0 && i < v->n_x; i++)
            if (v->start[i] != 0)
                return lw_error_set(m->net->err, LW_ERR_ARGUMENT,
                                    "part \"%s\": start of %s is %.12g; permitted 0 before a delay "
                                    "of %.12g s",
                                    m->net->parts[p].name, v->state_names[i], v->start[i],
                                    m->late[p]);
    }
    return LW_OK;
}

// ---- external inputs

// Delay an external input needs for what it feeds first, second, ...: all must agree.
static lw_status delay_externals(const lw__net *net, const double *late)
{
    for (int i = 0; i < net->n_feeds; i++) {
        int e = net->feed[i].external, to = net->feed[i].to, first = 0;
        double delay = late[net->part_of_u[to]] + lw__net_delay(net, to);
        while (net->feed[first].external != e)
            first++;
        if (first == i)
            net->external_delay[e] = delay;
        else if (!same_delay(net->external_delay[e], delay))
            return lw_error_set(net->err, LW_ERR_ARGUMENT,
                                "input \"%s\" would need two delays: %.12g s for \"%s.%s\" and "
                                "%.12g s for \"%s.%s\"",
                                net->external_name[e], net->external_delay[e],
                                lw__net_part_of_input(net, net->feed[first].to),
                                lw__net_input(net, net->feed[first].to), delay,
                                lw__net_part_of_input(net, to), lw__net_input(net, to));
    }
    return LW_OK;
}

static lw_status move(mover *m)
{
    find_reach(m);
    lw_status status = refuse_in_rings(m);
    if (status != LW_OK)
        return status;
    settle_all(m);
    status = check_links(m);
    return status == LW_OK ? check_starts(m) : status;
}

lw_status lw__net_move_delays(lw__net *net)
{
    size_t n = (size_t)net->n_parts;
    mover m = {.net = net,
               .reaches = lw__net_get(net, n * n, 1),
               .late = lw__net_get(net, n, sizeof(double)),
               .why = lw__net_get(net, n, sizeof(reason))};
    int moves = 0;
    for (int l = 0; l < net->n_links; l++)
        moves |= lw__net_delay(net, net->link[l].to) > 0;
    if (m.reaches == NULL || m.late == NULL || m.why == NULL)
        return LW_ERR_MEMORY;
    lw_status status = moves ? move(&m) : LW_OK;
    return status == LW_OK ? delay_externals(net, m.late) : status;
}
