// Initial value problems with published end values.
//
// DETEST: T. E. Hull, W. H. Enright, B. M. Fellen, A. E. Sedgwick, SIAM J. Numer. Anal. 9 (1972)
// 603-637; class F: W. H. Enright, J. D. Pryce, ACM TOMS 13 (1987) 1-27. End values at t = 20 as in
// a public non-stiff demonstration program (read), but for those recomputed, which say so.
// The stiff problems: F. Mazzia, C. Magherini, Test Set for IVP Solvers, Bari 2008 (read).
#ifndef LATEWOOD_TESTS_ODES_H
#define LATEWOOD_TESTS_ODES_H

#include <latewood/elementary.h>
#include <math.h>
#include <stddef.h>

#define ODE_MOST 28

typedef struct problem {
    const char *name;
    int n, n_want; // the first n_want entries are compared
    double end;
    double start[ODE_MOST], want[ODE_MOST];
    int (*flow)(void *context, double t, const double *x, double *dx);
    int (*switches)(void *context, double t, const double *x, double *g); // one
    double scale; // an absolute scale of the comparison; 0: each entry's own
} problem;

#define FLOW(name) static inline int name(void *z, double t, const double *y, double *d)

FLOW(a1)
{
    (void)z, (void)t;
    d[0] = -y[0];
    return 0;
}
FLOW(a2)
{
    (void)z, (void)t;
    d[0] = -y[0] * y[0] * y[0] / 2;
    return 0;
}
FLOW(a3)
{
    (void)z;
    d[0] = y[0] * lw_cos(t);
    return 0;
}
FLOW(a4)
{
    (void)z, (void)t;
    d[0] = y[0] / 4 * (1 - y[0] / 20);
    return 0;
}
FLOW(a5)
{
    (void)z;
    d[0] = (y[0] - t) / (y[0] + t);
    return 0;
}
FLOW(b1)
{
    (void)z, (void)t;
    d[0] = 2 * (y[0] - y[0] * y[1]);
    d[1] = -(y[1] - y[0] * y[1]);
    return 0;
}
FLOW(b2)
{
    (void)z, (void)t;
    d[0] = -y[0] + y[1];
    d[1] = y[0] - 2 * y[1] + y[2];
    d[2] = y[1] - y[2];
    return 0;
}
FLOW(b3)
{
    (void)z, (void)t;
    d[0] = -y[0];
    d[1] = y[0] - y[1] * y[1];
    d[2] = y[1] * y[1];
    return 0;
}
FLOW(b4)
{
    (void)z, (void)t;
    double r = sqrt(y[0] * y[0] + y[1] * y[1]);
    d[0] = -y[1] - y[0] * y[2] / r;
    d[1] = y[0] - y[1] * y[2] / r;
    d[2] = y[0] / r;
    return 0;
}
FLOW(b5)
{
    (void)z, (void)t;
    d[0] = y[1] * y[2];
    d[1] = -y[0] * y[2];
    d[2] = -.51 * y[0] * y[1];
    return 0;
}
FLOW(c1)
{
    (void)z, (void)t;
    d[0] = -y[0];
    for (int i = 1; i < 9; i++)
        d[i] = y[i - 1] - y[i];
    d[9] = y[8];
    return 0;
}
FLOW(c3)
{
    (void)z, (void)t;
    for (int i = 0; i < 10; i++)
        d[i] = (i > 0 ? y[i - 1] : 0) - 2 * y[i] + (i < 9 ? y[i + 1] : 0);
    return 0;
}
FLOW(orbit)
{
    (void)z, (void)t;
    double r = sqrt(y[0] * y[0] + y[1] * y[1]);
    d[0] = y[2];
    d[1] = y[3];
    d[2] = -y[0] / (r * r * r);
    d[3] = -y[1] / (r * r * r);
    return 0;
}
FLOW(e1)
{
    (void)z;
    d[0] = y[1];
    d[1] = -(y[1] / (t + 1) + (1 - .25 / ((t + 1) * (t + 1))) * y[0]);
    return 0;
}
FLOW(e2)
{
    (void)z, (void)t;
    d[0] = y[1];
    d[1] = (1 - y[0] * y[0]) * y[1] - y[0];
    return 0;
}
FLOW(e3)
{
    (void)z;
    d[0] = y[1];
    d[1] = y[0] * y[0] * y[0] / 6 - y[0] + 2 * lw_sin(2.78535 * t);
    return 0;
}
FLOW(e4)
{
    (void)z, (void)t;
    d[0] = y[1];
    d[1] = .032 - .4 * y[1] * y[1];
    return 0;
}
FLOW(e5)
{
    (void)z;
    d[0] = y[1];
    d[1] = sqrt(1 + y[1] * y[1]) / (25 - t);
    return 0;
}
// Seconds since the start are even or odd: the sign of sin(pi t).
FLOW(seconds)
{
    (void)z, (void)y;
    d[0] = lw_sin(3.14159265358979323846 * t);
    return 0;
}
FLOW(ten)
{
    (void)z, (void)y;
    d[0] = t - 10;
    return 0;
}
static inline int even(double t)
{
    return fmod(floor(t), 2) == 0;
}
FLOW(f1)
{
    (void)z;
    d[0] = y[1];
    d[1] = .2 * y[1] - (9.869604401089358 + .01) * y[0] + (even(t) ? 1 : -1);
    return 0;
}
FLOW(f2)
{
    (void)z;
    d[0] = 55 - (even(t) ? 1.5 : .5) * y[0];
    return 0;
}
FLOW(f3)
{
    (void)z;
    d[0] = y[1];
    d[1] = .01 * y[1] * (1 - y[0] * y[0]) - y[0] - fabs(lw_sin(3.14159265358979323846 * t));
    return 0;
}
FLOW(f4)
{
    (void)z;
    double u = 1 + 4 * (t - 5) * (t - 5), v = u * u * u * u;
    d[0] = t <= 10 ? -2.0 / 21 - 120 * (t - 5) / (v * v * v * v) : -2 * y[0];
    return 0;
}
FLOW(brusselator)
{
    (void)z, (void)t;
    d[0] = 1 - 4 * y[0] + y[0] * y[0] * y[1];
    d[1] = 3 * y[0] - y[0] * y[0] * y[1];
    return 0;
}
FLOW(pleiades)
{
    (void)z, (void)t;
    for (int i = 0; i < 7; i++) {
        d[i] = y[14 + i];
        d[7 + i] = y[21 + i];
        d[14 + i] = d[21 + i] = 0;
        for (int j = 0; j < 7; j++) {
            double dx = y[j] - y[i], dy = y[7 + j] - y[7 + i], r = sqrt(dx * dx + dy * dy);
            if (j == i)
                continue;
            d[14 + i] += (j + 1) * dx / (r * r * r);
            d[21 + i] += (j + 1) * dy / (r * r * r);
        }
    }
    return 0;
}
FLOW(arenstorf)
{
    (void)z, (void)t;
    const double m = 0.012277471;
    double a = sqrt((y[0] + m) * (y[0] + m) + y[1] * y[1]);
    double b = sqrt((y[0] - 1 + m) * (y[0] - 1 + m) + y[1] * y[1]);
    a = a * a * a;
    b = b * b * b;
    d[0] = y[2];
    d[1] = y[3];
    d[2] = y[0] + 2 * y[3] - (1 - m) * (y[0] + m) / a - m * (y[0] - 1 + m) / b;
    d[3] = y[1] - 2 * y[2] - (1 - m) * y[1] / a - m * y[1] / b;
    return 0;
}
FLOW(van_der_pol)
{
    (void)z, (void)t;
    d[0] = y[1];
    d[1] = 1e3 * (1 - y[0] * y[0]) * y[1] - y[0];
    return 0;
}
FLOW(robertson)
{
    (void)z, (void)t;
    d[0] = -.04 * y[0] + 1e4 * y[1] * y[2];
    d[2] = 3e7 * y[1] * y[1];
    d[1] = -d[0] - d[2];
    return 0;
}
FLOW(hires)
{
    (void)z, (void)t;
    d[0] = -1.71 * y[0] + .43 * y[1] + 8.32 * y[2] + .0007;
    d[1] = 1.71 * y[0] - 8.75 * y[1];
    d[2] = -10.03 * y[2] + .43 * y[3] + .035 * y[4];
    d[3] = 8.32 * y[1] + 1.71 * y[2] - 1.12 * y[3];
    d[4] = -1.745 * y[4] + .43 * y[5] + .43 * y[6];
    d[5] = -280 * y[5] * y[7] + .69 * y[3] + 1.71 * y[4] - .43 * y[5] + .69 * y[6];
    d[6] = 280 * y[5] * y[7] - 1.81 * y[6];
    d[7] = -d[6];
    return 0;
}
FLOW(oregonator)
{
    (void)z, (void)t;
    d[0] = 77.27 * (y[1] + y[0] * (1 - 8.375e-6 * y[0] - y[1]));
    d[1] = (y[2] - (1 + y[0]) * y[1]) / 77.27;
    d[2] = .161 * (y[0] - y[2]);
    return 0;
}

#define KEPLER(name, e, far, a, b, c, d)                                                           \
    {                                                                                              \
        name, 4, 4, 20, {1 - (e), 0, 0, far}, {a, b, c, d}, orbit, NULL, 1                         \
    }

static const problem smooth[] = {
    // recomputed: e^-20; the circulating end value of A1 is wrong in its eighth digit
    {"A1", 1, 1, 20, {1}, {2.061153622438558e-09}, a1, NULL, 1},
    {"A2", 1, 1, 20, {1}, {0.2182178902359887}, a2, NULL, 0},
    {"A3", 1, 1, 20, {1}, {2.491650271850414}, a3, NULL, 0},
    {"A4", 1, 1, 20, {1}, {17.73016648131483}, a4, NULL, 0},
    {"A5", 1, 1, 20, {4}, {-0.7887826688964196}, a5, NULL, 0},
    {"B1", 2, 2, 20, {1, 3}, {0.6761876008576667, 0.1860816099640036}, b1, NULL, 0},
    {"B2", 3, 3, 20, {2, 0, 1}, {1.000000001030576, 1, 0.9999999989694235}, b2, NULL, 0},
    {"B3", 3, 3, 20, {1, 0, 0}, {2.061e-9, 0.05257228022048349, 0.9474277177183630}, b3, NULL, 1},
    {"B4",
     3,
     3,
     20,
     {3, 0, 0},
     {0.9826950928005993, 2.198447081694832, 0.9129452507276399},
     b4,
     NULL,
     0},
    {"B5",
     3,
     3,
     20,
     {0, 1, 1},
     {-0.9396570798729192, -0.3421177754000779, 0.7414126596199957},
     b5,
     NULL,
     0},
    // entries 2 to 10 of C1 are published; the first, e^-20, is recomputed
    {"C1",
     10,
     10,
     20,
     {1},
     {2.061153622438558e-09, 4.122307244619555e-08, 4.122307244716968e-07, 2.748204829855288e-06,
      1.374102414941961e-05, 5.496409659803266e-05, 1.832136553274552e-04, 5.234675866508716e-04,
      1.308668966628220e-03, 9.979127409508656e-01},
     c1,
     NULL,
     1},
    {"C3",
     10,
     10,
     20,
     {1},
     {2.948119211022058e-03, 5.635380154844266e-03, 7.829072515926013e-03, 9.348257908594937e-03,
      1.007943610301970e-02, 9.982674171429909e-03, 9.088693332766085e-03, 7.489115195185912e-03,
      5.322964130953349e-03, 2.762434379029886e-03},
     c3,
     NULL,
     1},
    // far: sqrt((1 + e) / (1 - e))
    KEPLER("D1", .1, 1.1055415967851332, 2.198835352008397e-01, 9.427076846341813e-01,
           -9.787659841058176e-01, 3.287977990962036e-01),
    KEPLER("D2", .3, 1.3627702877384937, -1.777027357140412e-01, 9.467784719905892e-01,
           -1.030294163192969, 1.211074890053952e-01),
    KEPLER("D3", .5, 1.7320508075688772, -5.780432953035361e-01, 8.633840009194193e-01,
           -9.595083730380727e-01, -6.504915126712089e-02),
    KEPLER("D4", .7, 2.3804761428476167, -9.538990293416394e-01, 6.907409024219432e-01,
           -8.212674270877433e-01, -1.539574259125825e-01),
    KEPLER("D5", .9, 4.358898943540674, -1.295266250987574, 4.003938963792321e-01,
           -6.775390924707566e-01, -1.270838154278686e-01),
    // recomputed: E1 is J_1/2(21)
    {"E1",
     2,
     2,
     20,
     {.79788456080286536 * .84147098480789651, .79788456080286536 * .11956681346419146},
     {0.1456723600728308, -0.09883500195574063},
     e1,
     NULL,
     1},
    {"E2", 2, 2, 20, {2, 0}, {2.008149762174948, -0.04250887527320057}, e2, NULL, 1},
    {"E3", 2, 2, 20, {0, 0}, {-0.1004178858647128, 0.2411400132095954}, e3, NULL, 1},
    {"E4", 2, 2, 20, {30, 0}, {33.95091444646555, 0.2767822659672869}, e4, NULL, 1},
    {"E5", 2, 2, 20, {0, 0}, {14.11797390542629, 2.4}, e5, NULL, 1},
    {"F1", 2, 2, 20, {0, 0}, {-12.94460621213470, 0}, f1, seconds, 10},
    {"F2", 1, 1, 20, {110}, {70.03731057008607}, f2, seconds, 0},
    {"F3", 2, 2, 20, {0, 0}, {-0.3726957553088175, -0.6230137949234190}, f3, seconds, 1},
    // e^-20 / 21, from values of order 1
    {"F4", 1, 1, 20, {1}, {9.815017249707434e-11}, f4, ten, 1},
    // two copies of a run with 32 digits (read)
    {"Brusselator",
     2,
     2,
     20,
     {1.5, 3},
     {0.4986370712683478, 4.596780349452011},
     brusselator,
     NULL,
     1}};

static const problem stiff[] = {
    {"Van der Pol, mu = 1000",
     2,
     2,
     2000,
     {2, 0},
     {1.706167732170469, -0.8928097010248125e-3},
     van_der_pol,
     NULL,
     0},
    {"Robertson",
     3,
     3,
     1e11,
     {1, 0, 0},
     {2.083340149701255e-8, 8.333360770334713e-14, 0.9999999791665050},
     robertson,
     NULL,
     0},
    // as in the source of a demonstration program of SUNDIALS (read), good to 8.5e-7; recomputed
    {"Robertson, t = 4e10",
     3,
     3,
     4e10,
     {1, 0, 0},
     {5.208345176798e-8, 2.083338177925e-13, 0.99999994791629776},
     robertson,
     NULL,
     0},
    {"HIRES",
     8,
     8,
     321.8122,
     {1, 0, 0, 0, 0, 0, 0, .0057},
     {.7371312573325668e-3, .1442485726316185e-3, .5888729740967575e-4, .1175651343283149e-2,
      .2386356198831331e-2, .6238968252742796e-2, .2849998395185769e-2, .2850001604814231e-2},
     hires,
     NULL,
     0},
    {"Oregonator",
     3,
     3,
     360,
     {1, 2, 3},
     {1.000814870318523, 1228.178521549917, 132.0554942846706},
     oregonator,
     NULL,
     0}};

#define N_SMOOTH ((int)(sizeof smooth / sizeof *smooth))
#define N_STIFF ((int)(sizeof stiff / sizeof *stiff))

#endif
