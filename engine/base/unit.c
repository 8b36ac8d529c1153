// Units as text. See unit.h and quantity.h.
//
// Invariant: powers and factors of what was parsed are far inside their types.

#include "base/unit.h"

#include "base/text.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define N_OF(list) (sizeof list / sizeof list[0])
#define MOST_POWER 6     // of one unit
#define MOST_EXPONENT 99 // of a base unit
#define MOST_FACTOR (UINT64_C(1) << 62)

// ---- tables

typedef struct name {
    const char *name;
    lw__unit unit;
    int prefixed; // takes an SI prefix
} name;

#define PLAIN(text, m, kg, s, a, k, power)                                                         \
    {                                                                                              \
        text, {{m, kg, s, a, k}, power, 0, 1, 1, 0, 0}, 1                                          \
    }

static const name names[] = {
    PLAIN("s", 0, 0, 1, 0, 0, 0),
    PLAIN("m", 1, 0, 0, 0, 0, 0),
    PLAIN("g", 0, 1, 0, 0, 0, -3),
    PLAIN("A", 0, 0, 0, 1, 0, 0),
    PLAIN("K", 0, 0, 0, 0, 1, 0),
    PLAIN("N", 1, 1, -2, 0, 0, 0),
    PLAIN("Pa", -1, 1, -2, 0, 0, 0),
    PLAIN("J", 2, 1, -2, 0, 0, 0),
    PLAIN("W", 2, 1, -3, 0, 0, 0),
    PLAIN("V", 2, 1, -3, -1, 0, 0),
    PLAIN("ohm", 2, 1, -3, -2, 0, 0),
    PLAIN("\xCE\xA9", 2, 1, -3, -2, 0, 0),     // Greek capital omega
    PLAIN("\xE2\x84\xA6", 2, 1, -3, -2, 0, 0), // ohm sign
    PLAIN("H", 2, 1, -2, -2, 0, 0),
    PLAIN("F", -2, -1, 4, 2, 0, 0),
    PLAIN("C", 0, 0, 1, 1, 0, 0),
    PLAIN("T", 0, 1, -2, -1, 0, 0),
    PLAIN("Wb", 2, 1, -2, -1, 0, 0),
    PLAIN("S", -2, -1, 3, 2, 0, 0),
    {"Hz", {{0, 0, -1, 0, 0}, 0, 0, 1, 1, 1, 0}, 1},
    {"rad", {{0, 0, 0, 0, 0}, 0, 0, 1, 1, 0, 1}, 1},
    {"min", {{0, 0, 1, 0, 0}, 0, 0, 60, 1, 0, 0}, 0},
    {"h", {{0, 0, 1, 0, 0}, 0, 0, 3600, 1, 0, 0}, 0},
    {"deg", {{0, 0, 0, 0, 0}, 0, 1, 1, 180, 0, 1}, 0},
    {"rpm", {{0, 0, -1, 0, 0}, 0, 1, 1, 30, 0, 1}, 0},
    {"1", {{0, 0, 0, 0, 0}, 0, 0, 1, 1, 0, 0}, 0},
};

static const struct {
    const char *name;
    int power;
} prefixes[] = {{"f", -15}, {"p", -12}, {"n", -9}, {"u", -6}, {"\xC2\xB5", -6}, {"\xCE\xBC", -6},
                {"m", -3},  {"c", -2},  {"k", 3},  {"M", 6},  {"G", 9},         {"T", 12}};

// What slips are compared with.
static const char *const common[] = {
    "s",    "ms",  "us", "ns", "ps", "min",    "h",      "Hz",     "kHz", "MHz", "GHz", "rad",
    "deg",  "rpm", "A",  "mA", "uA", "V",      "mV",     "kV",     "W",   "mW",  "kW",  "ohm",
    "kohm", "H",   "mH", "uH", "F",  "mF",     "uF",     "nF",     "pF",  "m",   "mm",  "um",
    "cm",   "km",  "g",  "kg", "N",  "kN",     "Pa",     "kPa",    "J",   "kJ",  "K",   "Wb",
    "T",    "mT",  "C",  "S",  "%",  "cycles", "sample", "samples"};

// One dimension may have several names: the first row of it that fits the angle serves.
static const struct {
    lw_dimension d;
    int n_angles;
    const char *words, *example;
} quantities[] = {
    {{0, 0, 1, 0, 0}, 0, "a time", "5 ms"},
    {{0, 0, -1, 0, 0}, 0, "a frequency", "20 kHz"},
    {{0, 0, -1, 0, 0}, 1, "an angular frequency", "40 rad/s"},
    {{0, 0, 0, 0, 0}, 0, "a plain number", "0.5"},
    {{0, 0, 0, 0, 0}, 1, "an angle", "30 deg"},
    {{0, 0, 0, 1, 0}, 0, "a current", "2 A"},
    {{2, 1, -3, -1, 0}, 0, "a voltage", "24 V"},
    {{2, 1, -3, -2, 0}, 0, "a resistance", "0.8 ohm"},
    {{2, 1, -2, -2, 0}, 0, "an inductance", "2 mH"},
    {{-2, -1, 4, 2, 0}, 0, "a capacitance", "10 uF"},
    {{-2, -1, 3, 2, 0}, 0, "a conductance", "0.1 S"},
    {{0, 0, 1, 1, 0}, 0, "a charge", "3 mC"},
    {{2, 1, -2, -1, 0}, 0, "a flux or a torque constant", "0.05 N m/A"},
    {{2, 1, -2, -1, 0}, -1, "a flux or a torque constant", "0.05 V s/rad"},
    {{0, 1, -2, -1, 0}, 0, "a flux density", "0.4 T"},
    {{1, 0, 0, 0, 0}, 0, "a length", "3 mm"},
    {{1, 0, -1, 0, 0}, 0, "a speed", "0.2 m/s"},
    {{1, 0, -2, 0, 0}, 0, "an acceleration", "1.5 m/s^2"},
    {{0, 0, -2, 0, 0}, 1, "an angular acceleration", "10 rad/s^2"},
    {{0, 1, 0, 0, 0}, 0, "a mass", "0.2 kg"},
    {{1, 1, -2, 0, 0}, 0, "a force", "5 N"},
    {{-1, 1, -2, 0, 0}, 0, "a pressure", "2 kPa"},
    {{2, 1, -2, 0, 0}, 0, "a torque or an energy", "0.5 N m"},
    {{2, 1, -2, 0, 0}, -1, "a torsional stiffness", "90 N m/rad"},
    {{2, 1, -1, 0, 0}, 0, "a rotary friction", "0.02 N m s"},
    {{2, 1, -1, 0, 0}, -1, "a rotary friction", "0.02 N m s/rad"},
    {{0, 1, -2, 0, 0}, 0, "a stiffness", "200 N/m"},
    {{0, 1, -1, 0, 0}, 0, "a friction", "3 N s/m"},
    {{2, 1, -3, 0, 0}, 0, "a power", "10 W"},
    {{2, 1, 0, 0, 0}, 0, "a moment of inertia", "0.02 kg m^2"},
    {{0, 0, 0, 0, 1}, 0, "a temperature", "300 K"},
};

const lw__unit lw__unit_none = {{0, 0, 0, 0, 0}, 0, 0, 1, 1, 0, 0};

// ---- parsing

static const lw__unit *find(const char *text, size_t length, int *power)
{
    *power = 0;
    for (size_t i = 0; i < N_OF(names); i++)
        if (strlen(names[i].name) == length && memcmp(names[i].name, text, length) == 0)
            return &names[i].unit;
    for (size_t p = 0; p < N_OF(prefixes); p++) {
        size_t head = strlen(prefixes[p].name), rest = length - head;
        if (head >= length || memcmp(prefixes[p].name, text, head) != 0)
            continue;
        *power = prefixes[p].power;
        for (size_t i = 0; i < N_OF(names); i++)
            if (names[i].prefixed && strlen(names[i].name) == rest &&
                memcmp(names[i].name, text + head, rest) == 0)
                return &names[i].unit;
    }
    return NULL;
}

static lw_status unknown(const char *text, size_t length, lw_error *err)
{
    char copy[24];
    const char *near = NULL;
    if (length > 1 && length < sizeof copy) {
        memcpy(copy, text, length);
        copy[length] = 0;
        near = lw_nearest_name(copy, common, (int)N_OF(common));
    }
    if (near != NULL)
        return lw_error_set(err, LW_ERR_UNIT, "unit \"%s\" is not known; nearest \"%s\"", copy,
                            near);
    return lw_error_set(err, LW_ERR_UNIT,
                        "unit \"%.*s\" is not known; units are written such as \"ms\", \"kHz\" or "
                        "\"N m/A\"",
                        (int)length, text);
}

static lw_status ill_formed(const char *text, size_t length, lw_error *err)
{
    if (length == 0)
        return lw_error_set(err, LW_ERR_UNIT,
                            "a unit is missing beside a sign; units are written such as \"N m/A\"");
    return lw_error_set(err, LW_ERR_UNIT,
                        "unit \"%.*s\" is ill-formed; units are written such as \"kg m^2\", with "
                        "powers from -%d to %d and at most one \"/\"",
                        (int)length, text, MOST_POWER, MOST_POWER);
}

// The sum of two powers of a base unit; 0 and `*ok` cleared where it is out of range.
static signed char power_sum(int a, int b, int *ok)
{
    int sum = a + b;
    *ok &= abs(sum) <= MOST_EXPONENT;
    return (signed char)(abs(sum) <= MOST_EXPONENT ? sum : 0);
}

static int scale_by(uint64_t *product, uint64_t factor)
{
    if (*product > MOST_FACTOR / factor)
        return 0;
    *product *= factor;
    return 1;
}

// Multiply by the unit, with a prefix, to the power of `times`; 0 if that is out of range.
static int apply(lw__unit *to, const lw__unit *u, int prefix, int times)
{
    int ok = 1;
    to->d.m = power_sum(to->d.m, times * u->d.m, &ok);
    to->d.kg = power_sum(to->d.kg, times * u->d.kg, &ok);
    to->d.s = power_sum(to->d.s, times * u->d.s, &ok);
    to->d.a = power_sum(to->d.a, times * u->d.a, &ok);
    to->d.k = power_sum(to->d.k, times * u->d.k, &ok);
    to->power += times * (u->power + prefix);
    to->turns += times * u->turns;
    to->n_hertz += times * u->n_hertz;
    to->n_angles += times * u->n_angles;
    for (int i = 0; i < abs(times); i++)
        ok &= scale_by(times > 0 ? &to->factor : &to->divisor, u->factor) &&
              scale_by(times > 0 ? &to->divisor : &to->factor, u->divisor);
    return ok;
}

// Bytes of a sign of multiplication at t; 0 if there is none.
static size_t times_sign(const char *t, const char *end)
{
    if (t < end && *t == '*')
        return 1;
    return end - t >= 2 && memcmp(t, "\xC2\xB7", 2) == 0 ? 2 : 0;
}

static const char *skip_spaces(const char *t, const char *end)
{
    while (t < end && *t == ' ')
        t++;
    return t;
}

// A power at *t: "^", a sign perhaps, one digit from 1 to 6. 0 if it is ill-formed; 1 if none.
static int read_power(const char **t, const char *end)
{
    if (*t == end || **t != '^')
        return 1;
    const char *p = *t + 1;
    int negative = p < end && *p == '-';
    p += negative;
    if (p == end || *p < '1' || *p > '0' + MOST_POWER)
        return 0;
    *t = p + 1;
    return negative ? '0' - *p : *p - '0';
}

// One unit with its power at *t.
static lw_status read_one(const char **t, const char *end, int sign, lw__unit *out, lw_error *err)
{
    const char *head = *t, *tail = head;
    while (tail < end && *tail != ' ' && *tail != '^' && times_sign(tail, end) == 0)
        tail++;
    if (tail == head)
        return ill_formed(head, (size_t)(end - head), err);
    int prefix;
    const lw__unit *u = find(head, (size_t)(tail - head), &prefix);
    if (u == NULL)
        return unknown(head, (size_t)(tail - head), err);
    int times = read_power(&tail, end);
    int joined = tail < end && *tail != ' ' && times_sign(tail, end) == 0;
    if (times == 0 || joined || !apply(out, u, prefix, sign * times))
        return ill_formed(head, (size_t)(end - head), err);
    *t = tail;
    return LW_OK;
}

// A product up to `end`; sign is 1 above the stroke, -1 below.
static lw_status read_product(const char *t, const char *end, int sign, lw__unit *out,
                              lw_error *err)
{
    t = skip_spaces(t, end);
    for (;;) {
        lw_status status = read_one(&t, end, sign, out, err);
        if (status != LW_OK)
            return status;
        t = skip_spaces(t, end);
        if (t == end)
            return LW_OK;
        t = skip_spaces(t + times_sign(t, end), end);
    }
}

lw_status lw__unit_parse(const char *text, lw__unit *out, lw_error *err)
{
    lw__unit u = lw__unit_none;
    const char *end = text + strlen(text), *stroke = strchr(text, '/');
    lw_status status = LW_OK;
    if (stroke != NULL && strchr(stroke + 1, '/') != NULL)
        return ill_formed(text, (size_t)(end - text), err);
    if (stroke == NULL || skip_spaces(text, stroke) != stroke) // "/s" is 1/s
        status = read_product(text, stroke != NULL ? stroke : end, 1, &u, err);
    if (status == LW_OK && stroke != NULL)
        status = read_product(stroke + 1, end, -1, &u, err);
    if (status == LW_OK)
        *out = u;
    return status;
}

// ---- words

static int same(lw_dimension a, lw_dimension b)
{
    return a.m == b.m && a.kg == b.kg && a.s == b.s && a.a == b.a && a.k == b.k;
}

int lw__unit_fits(const lw__unit *given, const lw__unit *wanted)
{
    int mixed = (given->n_hertz != 0 && wanted->n_angles != 0) ||
                (given->n_angles != 0 && wanted->n_hertz != 0);
    return same(given->d, wanted->d) && !mixed;
}

static size_t row_of(const lw__unit *unit)
{
    size_t first = N_OF(quantities);
    for (size_t i = N_OF(quantities); i-- > 0;)
        if (same(quantities[i].d, unit->d)) {
            if (quantities[i].n_angles == unit->n_angles)
                return i;
            first = i;
        }
    return first;
}

// The base units with a power of that sign, joined by spaces.
static int write_powers(const lw_dimension *d, int sign, char *to, size_t size)
{
    const int powers[] = {d->kg, d->m, d->s, d->a, d->k};
    const char *const base[] = {"kg", "m", "s", "A", "K"};
    int n = 0;
    to[0] = 0;
    for (int i = 0; i < 5; i++) {
        int power = sign * powers[i];
        if (power <= 0)
            continue;
        n += snprintf(to + n, size - (size_t)n, "%s%s", n > 0 ? " " : "", base[i]);
        if (power > 1)
            n += snprintf(to + n, size - (size_t)n, "^%d", power);
    }
    return n;
}

const char *lw__unit_words(const lw__unit *unit, char buffer[LW__UNIT_WORDS])
{
    char above[32], below[32];
    size_t row = row_of(unit);
    if (row < N_OF(quantities))
        return quantities[row].words;
    int any_above = write_powers(&unit->d, 1, above, sizeof above);
    int any_below = write_powers(&unit->d, -1, below, sizeof below);
    snprintf(buffer, LW__UNIT_WORDS, "a quantity in %s%s%s", any_above ? above : "1",
             any_below ? "/" : "", below);
    return buffer;
}

const char *lw__unit_example(const lw__unit *unit)
{
    size_t row = row_of(unit);
    return row < N_OF(quantities) ? quantities[row].example : NULL;
}
