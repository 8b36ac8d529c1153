// Polynomials on [0, 1], constant term first: what metrics need of a piece of a signal.
#ifndef LATEWOOD_RUN_POLY_H
#define LATEWOOD_RUN_POLY_H

#define LW__POLY_MAX 24 // highest degree, products excluded

double lw__poly_value(int degree, const double *c, double s);
// Roots in [0, 1] in rising order, at most `degree`; a touching root is given once. A polynomial
// that is zero throughout has none.
int lw__poly_roots(int degree, const double *c, double *roots);
// Integral over [0, 1] of p q.
double lw__poly_product_integral(int degree_p, const double *p, int degree_q, const double *q);
// Integral over [a, b] of p.
double lw__poly_integral(int degree, const double *c, double a, double b);
// p on [a, b] written as a polynomial on [0, 1], in its place.
void lw__poly_part(int degree, double *c, double a, double b);
// Bound of |p - p(0)| on [0, 1].
double lw__poly_swing(int degree, const double *c);

#endif
