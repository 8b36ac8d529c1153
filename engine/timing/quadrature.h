// Quadrature over timings.
#ifndef LATEWOOD_TIMING_QUADRATURE_H
#define LATEWOOD_TIMING_QUADRATURE_H

#include <latewood/timing.h>

// Raw moment of a continuous timing from its density and cdf.
double lw__quadrature_moment(const lw_timing *t, int order);
// n nodes on [-1, 1] and weights that add to 2.
void lw__gauss_legendre(int n, double *x, double *weight);

#endif
