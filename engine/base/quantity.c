// Quantities: decimal text with units, kept exactly where 63-bit fractions can hold them.
//
// A quantity is mantissa * 10^exponent * factor * multiplier: the first three are exact, the last
// one is 1 but for units of angle.
//
// Invariants
// 1. No function that depends on the locale sees a decimal point.
// 2. The double is the nearest to the exact value wherever the fraction fits.

#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

__extension__ typedef __int128 wide;

#define DEGREE 0.017453292519943295769
#define RPM 0.10471975511965977462

typedef struct unit {
    const char *name;
    lw_dimension d;
    int power;         // of ten, in SI base units
    int factor;        // whole factor
    double multiplier; // 1 where exact
    int prefixed;      // takes an SI prefix
} unit;

static const unit units[] = {
    {"s", {0, 0, 1, 0, 0}, 0, 1, 1, 1},
    {"min", {0, 0, 1, 0, 0}, 0, 60, 1, 0},
    {"h", {0, 0, 1, 0, 0}, 0, 3600, 1, 0},
    {"m", {1, 0, 0, 0, 0}, 0, 1, 1, 1},
    {"g", {0, 1, 0, 0, 0}, -3, 1, 1, 1},
    {"A", {0, 0, 0, 1, 0}, 0, 1, 1, 1},
    {"K", {0, 0, 0, 0, 1}, 0, 1, 1, 1},
    {"Hz", {0, 0, -1, 0, 0}, 0, 1, 1, 1},
    {"N", {1, 1, -2, 0, 0}, 0, 1, 1, 1},
    {"Pa", {-1, 1, -2, 0, 0}, 0, 1, 1, 1},
    {"J", {2, 1, -2, 0, 0}, 0, 1, 1, 1},
    {"W", {2, 1, -3, 0, 0}, 0, 1, 1, 1},
    {"V", {2, 1, -3, -1, 0}, 0, 1, 1, 1},
    {"ohm", {2, 1, -3, -2, 0}, 0, 1, 1, 1},
    {"\xCE\xA9", {2, 1, -3, -2, 0}, 0, 1, 1, 1},     // Greek capital omega
    {"\xE2\x84\xA6", {2, 1, -3, -2, 0}, 0, 1, 1, 1}, // ohm sign
    {"H", {2, 1, -2, -2, 0}, 0, 1, 1, 1},
    {"F", {-2, -1, 4, 2, 0}, 0, 1, 1, 1},
    {"C", {0, 0, 1, 1, 0}, 0, 1, 1, 1},
    {"T", {0, 1, -2, -1, 0}, 0, 1, 1, 1},
    {"Wb", {2, 1, -2, -1, 0}, 0, 1, 1, 1},
    {"S", {-2, -1, 3, 2, 0}, 0, 1, 1, 1},
    {"rad", {0, 0, 0, 0, 0}, 0, 1, 1, 1},
    {"deg", {0, 0, 0, 0, 0}, 0, 1, DEGREE, 0},
    {"rpm", {0, 0, -1, 0, 0}, 0, 1, RPM, 0},
    {"1", {0, 0, 0, 0, 0}, 0, 1, 1, 0},
};

static const struct {
    const char *name;
    int power;
} prefixes[] = {{"p", -12}, {"n", -9}, {"u", -6}, {"\xC2\xB5", -6}, {"\xCE\xBC", -6}, {"m", -3},
                {"c", -2},  {"k", 3},  {"M", 6},  {"G", 9},         {"T", 12},        {"f", -15}};

#define N_OF(list) (sizeof list / sizeof list[0])

static const struct {
    const char *name, *words, *example;
    lw_dimension d;
} quantities[] = {
    {"s", "a time", "5 ms", {0, 0, 1, 0, 0}},
    {"Hz", "a frequency", "20 kHz", {0, 0, -1, 0, 0}},
    {"A", "a current", "2 A", {0, 0, 0, 1, 0}},
    {"V", "a voltage", "24 V", {2, 1, -3, -1, 0}},
    {"ohm", "a resistance", "0.8 ohm", {2, 1, -3, -2, 0}},
    {"H", "an inductance", "2 mH", {2, 1, -2, -2, 0}},
    {"F", "a capacitance", "10 uF", {-2, -1, 4, 2, 0}},
    {"m", "a length", "3 mm", {1, 0, 0, 0, 0}},
    {"kg", "a mass", "0.2 kg", {0, 1, 0, 0, 0}},
    {"N", "a force", "5 N", {1, 1, -2, 0, 0}},
    {"N m", "a torque or an energy", "0.5 N m", {2, 1, -2, 0, 0}},
    {"W", "a power", "10 W", {2, 1, -3, 0, 0}},
    {"kg m^2", "a moment of inertia", "0.02 kg m^2", {2, 1, 0, 0, 0}},
    {"K", "a temperature", "300 K", {0, 0, 0, 0, 1}},
    {"Wb", "a flux, or volts a radian a second", "0.05 N m/A", {2, 1, -2, -1, 0}},
    {"1", "a plain number", "0.5", {0, 0, 0, 0, 0}},
};

// ---- numbers

typedef struct decimal {
    wide mantissa;
    int exponent;
    int exact; // no digit was dropped
} decimal;

// Parse a decimal at *text; 0 if there is none.
static int parse_decimal(const char **text, decimal *out)
{
    const char *t = *text;
    int negative = *t == '-', digits = 0, point = 0;
    if (*t == '-' || *t == '+')
        t++;
    *out = (decimal){0, 0, 1};
    for (; (*t >= '0' && *t <= '9') || (*t == '.' && !point); t++) {
        if (*t == '.') {
            point = 1;
            continue;
        }
        digits++;
        if (out->mantissa < (wide)1000000000000000000 * 10) {
            out->mantissa = out->mantissa * 10 + (*t - '0');
            out->exponent -= point;
        } else {
            out->exact &= *t == '0';
            out->exponent += !point;
        }
    }
    if (digits == 0)
        return 0;
    if (*t == 'e' || *t == 'E') {
        char *end;
        long e = strtol(t + 1, &end, 10);
        if (end > t + 1 && ((t[1] >= '0' && t[1] <= '9') || t[1] == '-' || t[1] == '+')) {
            out->exponent += (int)(e > 9999 ? 9999 : e < -9999 ? -9999 : e);
            t = end;
        }
    }
    out->mantissa = negative ? -out->mantissa : out->mantissa;
    *text = t;
    return 1;
}

// Nearest double to mantissa * 10^exponent, by text without a decimal point.
static double decimal_value(wide mantissa, int exponent)
{
    char digits[64], *p = digits + sizeof digits;
    int negative = mantissa < 0;
    wide m = negative ? -mantissa : mantissa;
    char tail[16];
    snprintf(tail, sizeof tail, "e%d", exponent);
    size_t length = strlen(tail) + 1;
    p -= length;
    memcpy(p, tail, length);
    do {
        *--p = (char)('0' + (int)(m % 10));
        m /= 10;
    } while (m > 0);
    if (negative)
        *--p = '-';
    return strtod(p, NULL);
}

// As num / den in lowest terms; den 0 where 63 bits do not hold it.
static void fraction(wide mantissa, int exponent, int64_t *num, int64_t *den)
{
    wide n = mantissa, d = 1, limit = INT64_MAX;
    *num = *den = 0;
    while (exponent < 0 && n != 0 && n % 10 == 0) {
        n /= 10;
        exponent++;
    }
    if (n == 0)
        exponent = 0;
    for (; exponent > 0 && n <= limit && n >= -limit; exponent--)
        n *= 10;
    for (; exponent < 0 && d <= limit; exponent++)
        d *= 10;
    if (exponent != 0)
        return;
    for (int k = 0; k < 2; k++)
        for (int prime = k == 0 ? 2 : 5; d % prime == 0 && n % prime == 0 && n != 0;) {
            d /= prime;
            n /= prime;
        }
    if (n > limit || n < -limit || d > limit)
        return;
    *num = (int64_t)n;
    *den = (int64_t)d;
}

// ---- units

typedef struct scale {
    lw_dimension d;
    int power;
    wide factor, divisor;
    double multiplier;
} scale;

static const unit *find_unit(const char *name, size_t length, int *power)
{
    for (size_t i = 0; i < N_OF(units); i++)
        if (strlen(units[i].name) == length && memcmp(units[i].name, name, length) == 0) {
            *power = units[i].power;
            return &units[i];
        }
    for (size_t p = 0; p < N_OF(prefixes); p++) {
        size_t head = strlen(prefixes[p].name);
        if (head >= length || memcmp(prefixes[p].name, name, head) != 0)
            continue;
        for (size_t i = 0; i < N_OF(units); i++)
            if (units[i].prefixed && strlen(units[i].name) == length - head &&
                memcmp(units[i].name, name + head, length - head) == 0) {
                *power = units[i].power + prefixes[p].power;
                return &units[i];
            }
    }
    return NULL;
}

static void apply(scale *s, const unit *u, int power, int times)
{
    s->d.m = (signed char)(s->d.m + times * u->d.m);
    s->d.kg = (signed char)(s->d.kg + times * u->d.kg);
    s->d.s = (signed char)(s->d.s + times * u->d.s);
    s->d.a = (signed char)(s->d.a + times * u->d.a);
    s->d.k = (signed char)(s->d.k + times * u->d.k);
    s->power += times * power;
    for (int i = 0; i < abs(times); i++) {
        if (times > 0)
            s->factor *= u->factor;
        else
            s->divisor *= u->factor;
        s->multiplier = times > 0 ? s->multiplier * u->multiplier : s->multiplier / u->multiplier;
    }
}

static lw_status unknown_unit(const char *name, size_t length, lw_error *err)
{
    return lw_error_set(err, LW_ERR_UNIT, "unit \"%.*s\" is not known", (int)length, name);
}

// One product of units up to `end`; sign is +1 above the stroke, -1 below.
static lw_status parse_product(const char *t, const char *end, int sign, scale *s, lw_error *err)
{
    int any = 0;
    while (t < end) {
        if (*t == ' ' || *t == '*') {
            t++;
            continue;
        }
        if (end - t >= 2 && memcmp(t, "\xC2\xB7", 2) == 0) {
            t += 2;
            continue;
        }
        const char *name = t;
        while (t < end && *t != ' ' && *t != '*' && *t != '^' && memcmp(t, "\xC2\xB7", 2) != 0)
            t++;
        size_t length = (size_t)(t - name);
        int power, times = 1;
        const unit *u = find_unit(name, length, &power);
        if (u == NULL)
            return unknown_unit(name, length, err);
        if (t < end && *t == '^') {
            char *after;
            long n = strtol(t + 1, &after, 10);
            if (after == t + 1 || n < -6 || n > 6 || n == 0)
                return unknown_unit(name, (size_t)(end - name), err);
            times = (int)n;
            t = after;
        }
        apply(s, u, power, sign * times);
        any = 1;
    }
    return any ? LW_OK : unknown_unit(t, 0, err);
}

static lw_status parse_unit(const char *text, scale *s, lw_error *err)
{
    *s = (scale){.factor = 1, .divisor = 1, .multiplier = 1};
    const char *end = text + strlen(text), *stroke = strchr(text, '/');
    if (stroke != NULL && strchr(stroke + 1, '/') != NULL)
        return unknown_unit(text, strlen(text), err);
    lw_status status = parse_product(text, stroke != NULL ? stroke : end, 1, s, err);
    if (status == LW_OK && stroke != NULL)
        status = parse_product(stroke + 1, end, -1, s, err);
    return status;
}

// ---- quantities

static void set_value(lw_quantity *q, const decimal *d, const scale *s)
{
    wide mantissa = d->mantissa;
    int small = mantissa < ((wide)1 << 90) && mantissa > -((wide)1 << 90) && s->factor < 1000000000;
    if (small)
        mantissa *= s->factor;
    q->value = decimal_value(mantissa, d->exponent + s->power);
    if (!small)
        q->value *= (double)s->factor;
    if (s->divisor != 1)
        q->value /= (double)s->divisor;
    q->value *= s->multiplier;
    if (d->exact && small && s->divisor == 1 && s->multiplier == 1)
        fraction(mantissa, d->exponent + s->power, &q->num, &q->den);
}

static int timing_unit(const char *text, lw_quantity *q, const decimal *d)
{
    static const struct {
        const char *name;
        lw_unit_kind kind;
        int power;
    } kinds[] = {{"cycles", LW_UNIT_CYCLES, 0},
                 {"cycle", LW_UNIT_CYCLES, 0},
                 {"%", LW_UNIT_PERCENT, -2},
                 {"samples", LW_UNIT_SAMPLES, 0},
                 {"sample", LW_UNIT_SAMPLES, 0}};
    for (size_t i = 0; i < N_OF(kinds); i++)
        if (strcmp(kinds[i].name, text) == 0) {
            scale s = {.power = kinds[i].power, .factor = 1, .divisor = 1, .multiplier = 1};
            q->kind = kinds[i].kind;
            set_value(q, d, &s);
            return 1;
        }
    return 0;
}

lw_status lw_quantity_parse(const char *text, lw_quantity *out, lw_error *err)
{
    const char *t = text;
    char unit_text[80];
    decimal d;
    lw_quantity q = {.kind = LW_UNIT_SI};
    while (*t == ' ')
        t++;
    if (!parse_decimal(&t, &d))
        return lw_error_set(
            err, LW_ERR_ARGUMENT,
            "\"%.60s\" does not begin with a number; a quantity is written \"5 ms\"", text);
    while (*t == ' ')
        t++;
    size_t length = strlen(t);
    while (length > 0 && t[length - 1] == ' ')
        length--;
    if (length >= sizeof unit_text)
        return unknown_unit(t, 60, err);
    memcpy(unit_text, t, length);
    unit_text[length] = 0;
    scale s = {.factor = 1, .divisor = 1, .multiplier = 1};
    if (length > 0 && timing_unit(unit_text, &q, &d)) {
        *out = q;
        return LW_OK;
    }
    if (length > 0) {
        lw_status status = parse_unit(unit_text, &s, err);
        if (status != LW_OK) {
            lw_error_prefix(err, "\"%.60s\": ", text);
            return status;
        }
    }
    q.dimension = s.d;
    set_value(&q, &d, &s);
    if (!isfinite(q.value))
        return lw_error_set(err, LW_ERR_ARGUMENT, "\"%.60s\" is beyond the range of numbers", text);
    *out = q;
    return LW_OK;
}

static int same_dimension(lw_dimension a, lw_dimension b)
{
    return a.m == b.m && a.kg == b.kg && a.s == b.s && a.a == b.a && a.k == b.k;
}

static const char *words_of(const lw_quantity *q)
{
    if (q->kind == LW_UNIT_CYCLES)
        return "a number of cycles";
    if (q->kind == LW_UNIT_PERCENT)
        return "a percentage";
    if (q->kind == LW_UNIT_SAMPLES)
        return "a number of samples";
    for (size_t i = 0; i < N_OF(quantities); i++)
        if (same_dimension(quantities[i].d, q->dimension))
            return quantities[i].words;
    return "something else";
}

static lw_status wrong_unit(const char *text, const lw_quantity *q, const char *wanted,
                            lw_dimension d, lw_error *err)
{
    for (size_t i = 0; i < N_OF(quantities); i++)
        if (same_dimension(quantities[i].d, d))
            return lw_error_set(err, LW_ERR_UNIT, "\"%.60s\" is %s; %s is wanted, such as \"%s\"",
                                text, words_of(q), quantities[i].words, quantities[i].example);
    return lw_error_set(err, LW_ERR_UNIT, "\"%.60s\" is %s; a quantity in %s is wanted", text,
                        words_of(q), wanted);
}

lw_status lw_quantity_parse_as(const char *text, const char *unit_text, double *value,
                               lw_error *err)
{
    lw_quantity q;
    scale s;
    lw_status status = parse_unit(unit_text, &s, err);
    if (status == LW_OK)
        status = lw_quantity_parse(text, &q, err);
    if (status != LW_OK)
        return status;
    int plain = same_dimension(s.d, (lw_dimension){0, 0, 0, 0, 0});
    int fits = q.kind == LW_UNIT_SI ? same_dimension(q.dimension, s.d)
                                    : q.kind == LW_UNIT_PERCENT && plain;
    if (!fits)
        return wrong_unit(text, &q, unit_text, s.d, err);
    *value = q.value;
    return LW_OK;
}

// num / den seconds in ticks, rounded half up; 0 if out of range.
static int to_ticks(int64_t num, int64_t den, lw_tick *tick)
{
    if (num > INT64_MAX / 2 || num < -(INT64_MAX / 2))
        return 0;
    wide n = 2 * (wide)num * LW_TICKS_PER_SECOND + den, d = 2 * (wide)den;
    wide t = n / d - (n % d < 0);
    if (t > LW_TICK_MAX || t < -LW_TICK_MAX)
        return 0;
    *tick = (lw_tick)t;
    return 1;
}

lw_status lw_duration_parse(const char *text, lw_tick *tick, double *exact, lw_error *err)
{
    lw_quantity q;
    lw_status status = lw_quantity_parse(text, &q, err);
    if (status != LW_OK)
        return status;
    if (q.kind != LW_UNIT_SI || !same_dimension(q.dimension, (lw_dimension){0, 0, 1, 0, 0}))
        return wrong_unit(text, &q, "s", (lw_dimension){0, 0, 1, 0, 0}, err);
    int done =
        q.den > 0 ? to_ticks(q.num, q.den, tick) : lw_tick_from_seconds(q.value, tick) == LW_OK;
    if (!done)
        return lw_error_set(err, LW_ERR_TIME, "\"%.60s\" is beyond the range of time, 9e6 s", text);
    if (exact != NULL)
        *exact = q.value;
    return LW_OK;
}

static int64_t common_divisor(wide a, wide b)
{
    while (b != 0) {
        wide r = a % b;
        a = b;
        b = r;
    }
    return (int64_t)a;
}

// num / den seconds as a period in lowest terms.
static lw_status make_period(const char *text, int64_t num, int64_t den, lw_period *out,
                             lw_error *err)
{
    wide d = den, n = num;
    int64_t shared = common_divisor(LW_TICKS_PER_SECOND, d);
    d /= shared;
    n *= LW_TICKS_PER_SECOND / shared;
    if (n <= 0 || n < d || n / d > LW_TICK_MAX || n > INT64_MAX)
        return lw_error_set(err, LW_ERR_TIME, "\"%.60s\" is no period; permitted 1 ps to 9e6 s",
                            text);
    int64_t more = common_divisor(n, d);
    *out = (lw_period){(int64_t)(n / more), (int64_t)(d / more)};
    return LW_OK;
}

lw_status lw_period_parse(const char *text, lw_period *out, lw_error *err)
{
    lw_quantity q;
    lw_status status = lw_quantity_parse(text, &q, err);
    if (status != LW_OK)
        return status;
    int time = same_dimension(q.dimension, (lw_dimension){0, 0, 1, 0, 0});
    int rate = same_dimension(q.dimension, (lw_dimension){0, 0, -1, 0, 0});
    if (q.kind != LW_UNIT_SI || !(time || rate))
        return lw_error_set(err, LW_ERR_UNIT,
                            "\"%.60s\" is %s; a period is wanted, such as \"50 us\" or \"20 kHz\"",
                            text, words_of(&q));
    if (q.den > 0 && q.num > 0)
        return time ? make_period(text, q.num, q.den, out, err)
                    : make_period(text, q.den, q.num, out, err);
    lw_tick ticks = 0;
    double seconds = time ? q.value : 1 / q.value;
    if (!(seconds > 0) || lw_tick_from_seconds(seconds, &ticks) != LW_OK || ticks < 1)
        return lw_error_set(err, LW_ERR_TIME, "\"%.60s\" is no period; permitted 1 ps to 9e6 s",
                            text);
    *out = lw_period_of_ticks(ticks);
    return LW_OK;
}

lw_status lw_period_from_seconds(double seconds, lw_period *out, lw_error *err)
{
    char text[48];
    lw_double_format(seconds, text);
    if (!isfinite(seconds))
        return lw_error_set(err, LW_ERR_TIME, "%s s is no period; permitted 1 ps to 9e6 s", text);
    memcpy(text + strlen(text), " s", 3);
    return lw_period_parse(text, out, err);
}

// ---- writing

char *lw_double_format(double value, char *buffer)
{
    if (isnan(value)) {
        memcpy(buffer, "nan", 4);
        return buffer;
    }
    if (isinf(value)) {
        memcpy(buffer, value < 0 ? "-inf" : "inf", value < 0 ? 5 : 4);
        return buffer;
    }
    for (int digits = 15; digits <= 17; digits++) {
        snprintf(buffer, 32, "%.*g", digits, value);
        if (strtod(buffer, NULL) == value)
            break;
    }
    for (char *c = buffer; *c != 0; c++) // a locale may write another decimal point
        if (*c == ',')
            *c = '.';
    return buffer;
}

char *lw_tick_format(lw_tick tick, char *buffer)
{
    static const struct {
        int64_t ticks;
        const char *name;
    } steps[] = {
        {LW_TICKS_PER_SECOND, "s"}, {1000000000, "ms"}, {1000000, "us"}, {1000, "ns"}, {1, "ps"}};
    size_t k = 0;
    int64_t size = tick < 0 ? -tick : tick;
    while (k < 4 && size < steps[k].ticks)
        k++;
    if (tick == 0)
        k = 0;
    int64_t whole = size / steps[k].ticks, part = size % steps[k].ticks;
    int digits = 0;
    for (int64_t t = steps[k].ticks; t > 1; t /= 10)
        digits++;
    int length = snprintf(buffer, 40, "%s%lld", tick < 0 ? "-" : "", (long long)whole);
    if (part != 0) {
        length += snprintf(buffer + length, 20, ".%0*lld", digits, (long long)part);
        while (buffer[length - 1] == '0')
            length--;
    }
    snprintf(buffer + length, 8, " %s", steps[k].name);
    return buffer;
}
