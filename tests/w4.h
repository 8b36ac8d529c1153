// W4 in plain C: the four-state axis of a mount drive with smooth friction, drag and a load that
// hangs to one side (five states), 12-bit adc, PI with filter and anti-windup, latency 0.37 T,
// integrated at rtol 1e-8 by a Dormand-Prince pair (J. Dormand, P. Prince, J. Comp. Appl. Math. 6
// (1980) 19-26) written for this one plant. All parameters are invented.
#ifndef LATEWOOD_TESTS_W4_H
#define LATEWOOD_TESTS_W4_H

#include <math.h>
#include <string.h>

#define W4_T 5e-5
#define W4_LATENCY 0.37
#define W4_REF 12.0
#define W4_HALF 2000
#define W4_VOLTS 15.0
#define W4_RTOL 1e-8
#define W4_ATOL 1e-10

static inline double w4_adc(double y)
{
    const double magic = 6755399441055744.0, lsb = 80.0 / 4096;
    double c = (y * (1 / lsb) + magic) - magic;
    c = c < -2048 ? -2048 : c;
    c = c > 2047 ? 2047 : c;
    return c * lsb;
}

static inline double w4_control(double *state, double wanted, double measured)
{
    state[0] += 0.35 * (measured - state[0]);
    double e = wanted - state[0], p = 2.0 * e + state[1];
    double u = p < -W4_VOLTS ? -W4_VOLTS : p;
    u = u > W4_VOLTS ? W4_VOLTS : u;
    state[1] += 0.012 * e + 0.03 * (u - p);
    return u;
}

// Elementary functions of the plain C, unless stated before.
#ifndef W4_TANH
#define W4_TANH tanh
#define W4_SIN sin
#endif

// Current, motor speed, twist, load speed, load angle; TANH and SIN are those of the caller.
#define W4_FLOW(x, u, dx, TANH, SIN)                                                               \
    do {                                                                                           \
        double shaft_ = 160.0 * (x)[2] + 0.012 * ((x)[1] - (x)[3]);                                \
        double load_ = 0.015 * TANH((x)[3] * (1 / 0.4)) + 0.00006 * (x)[3] * fabs((x)[3]) +        \
                       0.05 * SIN((x)[4] + 0.3);                                                   \
        (dx)[0] = ((u)-1.2 * (x)[0] - 0.11 * (x)[1]) * (1 / 0.0018);                               \
        (dx)[1] = (0.11 * (x)[0] - 0.00025 * (x)[1] - shaft_) * (1 / 0.00014);                     \
        (dx)[2] = (x)[1] - (x)[3];                                                                 \
        (dx)[3] = (shaft_ - 0.0003 * (x)[3] - load_) * (1 / 0.0009);                               \
        (dx)[4] = (x)[3];                                                                          \
    } while (0)

static const double w4_a[7][6] = {
    {0},
    {1. / 5},
    {3. / 40, 9. / 40},
    {44. / 45, -56. / 15, 32. / 9},
    {19372. / 6561, -25360. / 2187, 64448. / 6561, -212. / 729},
    {9017. / 3168, -355. / 33, 46732. / 5247, 49. / 176, -5103. / 18656},
    {35. / 384, 0, 500. / 1113, 125. / 192, -2187. / 6784, 11. / 84}};
static const double w4_e[7] = {71. / 57600,      0,         -71. / 16695, 71. / 1920,
                               -17253. / 339200, 22. / 525, -1. / 40};

// One step of length h from x to y; k[0] is the slope at x, k[6] that at y. The square of the error
// against the tolerance.
static inline double w4_step(const double *x, double u, double h, double k[7][5], double *y)
{
    double sum = 0;
#pragma GCC unroll 7
    for (int s = 1; s < 7; s++) {
#pragma GCC unroll 5
        for (int j = 0; j < 5; j++) {
            double a = w4_a[s][0] * k[0][j];
#pragma GCC unroll 7
            for (int m = 1; m < s; m++)
                if (w4_a[s][m] != 0)
                    a += w4_a[s][m] * k[m][j];
            y[j] = x[j] + h * a;
        }
        W4_FLOW(y, u, k[s], W4_TANH, W4_SIN);
    }
    for (int j = 0; j < 5; j++) {
        double e = 0, m = fmax(fabs(x[j]), fabs(y[j]));
        for (int s = 0; s < 7; s++)
            e += w4_e[s] * k[s][j];
        e = h * e / (W4_ATOL + W4_RTOL * m);
        sum += e * e;
    }
    return sum / 5;
}

static inline void w4_integrate(double *carried, double *x, double u, double length)
{
    double t = 0, k[7][5], y[5];
    W4_FLOW(x, u, k[0], W4_TANH, W4_SIN);
    for (;;) {
        int last = *carried >= (length - t) * 0.999999;
        double h = last ? length - t : *carried;
        double error = w4_step(x, u, h, k, y);
        if (error > 1) {
            *carried = h * fmax(0.2, 0.9 * pow(error, -0.1));
            continue;
        }
        memcpy(x, y, sizeof y);
        memcpy(k[0], k[6], sizeof k[0]);
        t += h;
        if (!last || h * 5 > *carried) { // no power where it cannot matter
            double next = error < 3.7e-8 ? 5 * h : h * 0.9 * pow(error, -0.1);
            *carried = !last || next > *carried ? next : *carried;
        }
        if (last)
            return;
    }
}

static inline double w4_plain(long n)
{
    double x[5] = {0}, state[2] = {0}, held = 0, carried = 1;
    for (long k = 0; k < n; k++) {
        double wanted = k / W4_HALF % 2 ? -W4_REF : W4_REF;
        double u = w4_control(state, wanted, w4_adc(x[1]));
        w4_integrate(&carried, x, held, W4_T * W4_LATENCY);
        w4_integrate(&carried, x, u, W4_T * (1 - W4_LATENCY));
        held = u;
    }
    return x[1];
}

#endif
