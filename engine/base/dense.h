// Small dense linear algebra, row-major: what freezing a rig needs.
#ifndef LATEWOOD_BASE_DENSE_H
#define LATEWOOD_BASE_DENSE_H

#include "base/dd.h"

#include <latewood/status.h>

// Powers of two `scale` (n) such that rows and columns of D^-1 A D, D = diag(scale), have like
// norms. Method: B. Parlett, C. Reinsch, Numer. Math. 13 (1969) 293-304, without permutations.
void lw__dense_balance(int n, const double *a, double *scale);

double lw__dense_norm_inf(int n, const double *a);

// out = exp(M h) in double-double, n x n; may be `m`. Elements that overflow are infinite, or no
// number where infinities of both signs meet.
//   method  balanced, scaled to a norm of at most 1/4, Taylor, squared back (C. Moler, C. Van
//           Loan, SIAM Review 45 (2003) 3-49)
//   error   about 1e-30 n times the norm of M h, each state on its own scale
lw_status lw__dense_exp_dd(int n, const lw__dd *m, lw__dd h, lw__dd *out);

// Solve A X = B in place of B (n x n_rhs); A is destroyed. 0 if A is singular or holds no numbers.
int lw__dense_solve_dd(int n, int n_rhs, lw__dd *a, lw__dd *b);

// Eigenvalues of a general real matrix through GSL's Hessenberg-QR, whose error handler is put
// back. LW_ERR_NOT_FINITE if an element is not finite or the iteration does not converge.
lw_status lw__dense_eigen(int n, const double *a, double *re, double *im, lw_error *err);

#endif
