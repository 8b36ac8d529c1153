// Decimal numbers as text, as exact fractions in 128 bits, and as the nearest doubles.
//
// Invariants
// 1. A fraction is in lowest terms, both numbers below 2^126, den > 0.
// 2. Nothing here depends on the locale.
#ifndef LATEWOOD_BASE_DECIMAL_H
#define LATEWOOD_BASE_DECIMAL_H

#include <stdint.h>

__extension__ typedef unsigned __int128 lw__u128;

// mantissa * 10^exponent, at most 28 digits.
typedef struct lw__decimal {
    lw__u128 mantissa;
    int exponent;
    int negative;
    int inexact; // digits other than 0 were dropped
} lw__decimal;

// num / den, without a sign. den is 0 where 126 bits do not hold it.
typedef struct lw__fraction {
    lw__u128 num, den;
} lw__fraction;

// Read a decimal number ("-3.5e-2") at *text and move *text behind it; 0 if there is none.
int lw__decimal_read(const char **text, lw__decimal *out);

// The size of the decimal times 10^power; times and over a whole number > 0; 1 / f.
lw__fraction lw__fraction_of(const lw__decimal *d, int power);
lw__fraction lw__fraction_times(lw__fraction f, uint64_t factor);
lw__fraction lw__fraction_over(lw__fraction f, uint64_t divisor);
lw__fraction lw__fraction_inverse(lw__fraction f);
// Nonzero if both numbers are below 2^63.
int lw__fraction_fits(lw__fraction f);
// The last of its continued fraction whose numbers are below 2^63, for f < 2^63.
lw__fraction lw__fraction_nearest(lw__fraction f);
// Nearest double, ties to even; f fits 63 bits.
double lw__fraction_value(lw__fraction f);

// Nearest double to the size of the decimal times 10^power, also where no fraction holds it.
double lw__decimal_value(const lw__decimal *d, int power);

#endif
