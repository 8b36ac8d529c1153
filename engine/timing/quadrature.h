// Quadrature over timings.
#ifndef LATEWOOD_TIMING_QUADRATURE_H
#define LATEWOOD_TIMING_QUADRATURE_H

#include <latewood/timing.h>

// n nodes on [-1, 1] and weights that add to 2.
void lw__gauss_legendre(int n, double *x, double *weight);

#endif
