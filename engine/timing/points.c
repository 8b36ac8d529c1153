// Points with weights in place of a timing.
//
// Between two neighbouring cuts everything is smooth, so that a Gauss rule there is good to about
// 1e-12. The cuts are the kinks, and quantiles one deviation of a normal apart, so that pieces are
// short where the probability is, however far away the bounds are.

#include "timing/points.h"

#include "base/alloc.h"
#include "timing/family.h"
#include "timing/quadrature.h"

#include <latewood/elementary.h>

#include <math.h>
#include <stdlib.h>

#define NODES 16
#define FAR_UP 1e-9
#define FEW 24    // soft cuts kept of a sum
#define MANY 4096 // sure cuts kept of a sum

void lw__points_add(lw__points *list, double x, double weight, int sure)
{
    if (list->n == list->room) {
        int room = list->room == 0 ? 64 : 2 * list->room;
        lw__point *grown = lw__realloc(list->p, sizeof *grown * (size_t)room);
        if (grown == NULL) {
            list->failed = 1;
            return;
        }
        list->p = grown;
        list->room = room;
    }
    list->p[list->n++] = (lw__point){x, weight, sure};
}

void lw__points_free(lw__points *list)
{
    lw__free(list->p);
    *list = (lw__points){0};
}

static int by_x(const void *a, const void *b)
{
    double x = ((const lw__point *)a)->x, y = ((const lw__point *)b)->x;
    return (x > y) - (x < y);
}

static void sort(lw__points *list)
{
    if (list->n > 0)
        qsort(list->p, (size_t)list->n, sizeof *list->p, by_x);
}

void lw__smooth_cuts(const lw_timing *t, lw__points *out)
{
    double before = t->lo, last = t->lo;
    lw__points_add(out, t->lo, 0, 1);
    for (int z = -7; z <= 7; z++) {
        double u = lw_normal_cdf(z);
        before = last;
        last = lw_timing_quantile(t, &u);
        lw__points_add(out, last, 0, 0);
    }
    // a long upper tail, on which high moments may rest, in pieces that double
    for (double x = last + (last - before); x > last && x < t->hi; x += x - last)
        lw__points_add(out, x, 0, 0);
    lw__points_add(out, t->hi, 0, 1);
}

// One piece. Where no node meets any density, its probability lies at the end towards the bulk.
// Far up, where differences of the cdf have no places left, the density alone gives the weights.
static void add_piece(const lw_timing *t, double from, double to, const double *node,
                      const double *weight, lw__points *out)
{
    double before = lw_timing_cdf(t, from), mass = lw_timing_cdf(t, to) - before, sum = 0;
    double density[NODES];
    for (int i = 0; i < NODES; i++) {
        density[i] = weight[i] * lw_timing_density(t, from + (to - from) * (0.5 + 0.5 * node[i]));
        sum += density[i];
    }
    if (before > 0.5 && mass < FAR_UP)
        mass = sum * 0.5 * (to - from);
    if (mass > 0 && !(sum > 0))
        lw__points_add(out, before > 0.5 ? from : to, mass, 0);
    for (int i = 0; i < NODES && mass > 0 && sum > 0; i++)
        lw__points_add(out, from + (to - from) * (0.5 + 0.5 * node[i]), mass * density[i] / sum, 0);
}

void lw__smooth_points(const lw_timing *t, const lw__how *how, lw__points *out)
{
    double node[NODES], weight[NODES];
    lw__points cuts = {0};
    t->family->cuts(t, &cuts);
    for (int i = 0; how->cuts != NULL && i < how->cuts->n; i++)
        if (how->cuts->p[i].x > t->lo && how->cuts->p[i].x < t->hi)
            lw__points_add(&cuts, how->cuts->p[i].x, 0, 1);
    sort(&cuts);
    int parts = cuts.n > 64 ? 1 : how->parts;
    lw__gauss_legendre(NODES, node, weight);
    for (int i = 0; i + 1 < cuts.n; i++) {
        double from = cuts.p[i].x, step = (cuts.p[i + 1].x - from) / parts;
        for (int k = 0; k < parts && step > 0; k++)
            add_piece(t, from + k * step, k + 1 < parts ? from + (k + 1) * step : cuts.p[i + 1].x,
                      node, weight, out);
    }
    out->failed |= cuts.failed;
    lw__points_free(&cuts);
}

// All sums of a cut of one and a cut of the other that are sure, and a few of the rest.
void lw__sum_cuts(const lw_timing *t, lw__points *out)
{
    lw__points a = {0}, b = {0}, soft = {0};
    int n_sure = 0;
    t->a->family->cuts(t->a, &a);
    t->b->family->cuts(t->b, &b);
    for (int i = 0; i < a.n; i++)
        for (int k = 0; k < b.n && n_sure < MANY && soft.n < MANY; k++) {
            int sure = a.p[i].sure && b.p[k].sure;
            n_sure += sure;
            lw__points_add(sure ? out : &soft, a.p[i].x + b.p[k].x, 0, sure);
        }
    sort(&soft);
    for (int i = 0; i < FEW && soft.n > 0; i++)
        lw__points_add(out, soft.p[(int)((double)i * (soft.n - 1) / (FEW - 1))].x, 0, 0);
    out->failed |= a.failed | b.failed | soft.failed;
    lw__points_free(&a);
    lw__points_free(&b);
    lw__points_free(&soft);
}

double lw__points_moment(const lw_timing *t, int order)
{
    lw__points list = {0};
    double sum = 0;
    t->family->points(t, &(lw__how){NULL, 1, 0}, &list);
    for (int i = 0; i < list.n; i++) {
        double power = list.p[i].weight;
        for (int k = 0; k < order; k++)
            power *= list.p[i].x;
        sum += power;
    }
    int failed = list.failed;
    lw__points_free(&list);
    return failed ? (double)NAN : sum;
}
