// Search for the argument at which a rising function passes a value.
#ifndef LATEWOOD_BATCH_BINOMIAL_H
#define LATEWOOD_BATCH_BINOMIAL_H

#include <latewood/statistics.h>

typedef double (*lw__rising)(const void *context, double x);

// x in [lo, hi], lo >= 0, with f(x) = wanted, to the last digits of x.
double lw__invert(lw__rising f, const void *context, double lo, double hi, double wanted);

lw_status lw__confidence_check(double confidence, lw_error *err);
// The chance that a bound may err with: half of it where both sides are bounded.
double lw__tail(double confidence, lw_side side);

#endif
