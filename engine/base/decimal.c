// Decimal numbers. See decimal.h.

#include "base/decimal.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define MOST_DIGITS 28
#define LIMIT ((lw__u128)1 << 126)
#define MOST_EXPONENT 99999

// ---- reading

static int is_digit(char c)
{
    return c >= '0' && c <= '9';
}

// Take a digit into the mantissa, or only its place once that is full.
static void take_digit(lw__decimal *d, char digit, int behind_point, int *n_digits)
{
    if (*n_digits == MOST_DIGITS) {
        d->inexact |= digit != '0';
        d->exponent += !behind_point;
        return;
    }
    d->mantissa = d->mantissa * 10 + (unsigned)(digit - '0');
    d->exponent -= behind_point;
    *n_digits += d->mantissa != 0; // zeros at the head take no room
}

static const char *read_exponent(const char *t, lw__decimal *d)
{
    const char *first = t + 1 + (t[1] == '-' || t[1] == '+');
    if (!is_digit(*first))
        return t;
    int e = 0;
    const char *end = first;
    for (; is_digit(*end); end++)
        e = e < MOST_EXPONENT ? e * 10 + (*end - '0') : e;
    d->exponent += t[1] == '-' ? -e : e;
    return end;
}

int lw__decimal_read(const char **text, lw__decimal *out)
{
    const char *t = *text;
    lw__decimal d = {.negative = *t == '-'};
    int n_digits = 0, any = 0, point = 0;
    t += *t == '-' || *t == '+';
    for (; is_digit(*t) || (*t == '.' && !point); t++) {
        if (*t == '.') {
            point = 1;
            continue;
        }
        any = 1;
        take_digit(&d, *t, point, &n_digits);
    }
    if (!any)
        return 0;
    if (*t == 'e' || *t == 'E')
        t = read_exponent(t, &d);
    *out = d;
    *text = t;
    return 1;
}

// ---- fractions

static lw__u128 common_divisor(lw__u128 a, lw__u128 b)
{
    while (b != 0) {
        lw__u128 r = a % b;
        a = b;
        b = r;
    }
    return a;
}

static const lw__fraction too_long = {0, 0};

lw__fraction lw__fraction_times(lw__fraction f, uint64_t factor)
{
    if (f.den == 0)
        return f;
    lw__u128 shared = common_divisor(f.den, factor), rest = factor / shared;
    if (f.num > (LIMIT - 1) / rest)
        return too_long;
    return (lw__fraction){f.num * rest, f.den / shared};
}

lw__fraction lw__fraction_over(lw__fraction f, uint64_t divisor)
{
    if (f.den == 0)
        return f;
    lw__u128 shared = common_divisor(f.num, divisor), rest = divisor / shared;
    if (f.den > (LIMIT - 1) / rest)
        return too_long;
    return (lw__fraction){f.num / shared, f.den * rest};
}

lw__fraction lw__fraction_inverse(lw__fraction f)
{
    return f.num == 0 || f.den == 0 ? too_long : (lw__fraction){f.den, f.num};
}

lw__fraction lw__fraction_of(const lw__decimal *d, int power)
{
    lw__fraction f = {d->mantissa, 1};
    int exponent = d->mantissa == 0 ? 0 : d->exponent + power;
    for (; exponent > 0 && f.den != 0; exponent--)
        f = lw__fraction_times(f, 10);
    for (; exponent < 0 && f.den != 0; exponent++)
        f = lw__fraction_over(f, 10);
    return f;
}

int lw__fraction_fits(lw__fraction f)
{
    return f.den > 0 && f.den <= INT64_MAX && f.num <= INT64_MAX;
}

lw__fraction lw__fraction_nearest(lw__fraction f)
{
    lw__fraction now = {1, 0}, before = {0, 1};
    while (f.den != 0) {
        lw__u128 whole = f.num / f.den, rest = f.num % f.den;
        if ((now.num != 0 && whole > (INT64_MAX - before.num) / now.num) ||
            (now.den != 0 && whole > (INT64_MAX - before.den) / now.den))
            return now;
        lw__fraction next = {whole * now.num + before.num, whole * now.den + before.den};
        before = now;
        now = next;
        f = (lw__fraction){f.den, rest};
    }
    return now;
}

// The quotient of the numerator, moved up to 127 bits, has at least 63: its lowest bit takes the
// rest, and the conversion to double rounds once.
double lw__fraction_value(lw__fraction f)
{
    int shift = 0;
    if (f.num == 0)
        return 0;
    while (f.num < LIMIT) {
        f.num *= 2;
        shift++;
    }
    lw__u128 quotient = f.num / f.den | (f.num % f.den != 0);
    return ldexp((double)quotient, -shift);
}

// ---- doubles

// By way of text without a decimal point, which every locale reads alike. A digit behind the
// mantissa stands for those that were dropped: it decides ties.
double lw__decimal_value(const lw__decimal *d, int power)
{
    char text[64], *p = text + sizeof text, tail[24];
    lw__u128 m = d->mantissa;
    int exponent = d->exponent + power - (d->inexact != 0);
    size_t length = (size_t)snprintf(tail, sizeof tail, "%se%d", d->inexact ? "1" : "", exponent);
    p -= length + 1;
    memcpy(p, tail, length + 1);
    do {
        *--p = (char)('0' + (int)(m % 10));
        m /= 10;
    } while (m > 0);
    return strtod(p, NULL);
}
