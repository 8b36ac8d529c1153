// Quantities, durations and periods from text.
//
// The number and the unit are joined as an exact fraction in 128 bits; only then is anything
// rounded, once.
//
// Invariants
// 1. No function that depends on the locale sees a decimal point.
// 2. The double is the nearest to the exact value wherever the fraction fits 63 bits.

#include <latewood/quantity.h>

#include "base/dd.h"
#include "base/decimal.h"
#include "base/text.h"
#include "base/unit.h"

#include <math.h>
#include <string.h>

#define MOST_UNIT_BYTES 79

// A text as read: the quantity, its unit, and its size as a fraction in SI units but for pi.
typedef struct reading {
    lw_quantity q;
    lw__unit unit;
    lw__fraction size;
    int negative;
} reading;

// Arguments of "%.*s" for the user's text: not all of it if it is long.
#define SHOWN(text) shown_bytes(text), text

static int shown_bytes(const char *text)
{
    size_t length = strlen(text);
    return (int)(length > 60 ? lw__utf8_cut(text, 60) : length);
}

// ---- values

static lw__dd dd_of_whole(lw__u128 whole)
{
    double high = (double)whole;
    return lw__dd_two_sum(high, (double)((int64_t)whole - (int64_t)(lw__u128)high));
}

// value * pi^turns, rounded once where the fraction holds the value.
static double turned(double value, const lw__fraction *size, int turns)
{
    const lw__dd pi = {0x1.921fb54442d18p+1, 0x1.1a62633145c07p-53};
    lw__dd v = lw__dd_from_double(value);
    if (lw__fraction_fits(*size) && size->num < (lw__u128)1 << 62)
        v = lw__dd_div(dd_of_whole(size->num), dd_of_whole(size->den));
    for (; turns > 0; turns--)
        v = lw__dd_mul(v, pi);
    for (; turns < 0; turns++)
        v = lw__dd_div(v, pi);
    return lw__dd_to_double(v);
}

static void set_value(reading *r, const lw__decimal *d)
{
    const lw__unit *u = &r->unit;
    lw__fraction f = lw__fraction_of(d, u->power);
    r->size = lw__fraction_over(lw__fraction_times(f, u->factor), u->divisor);
    r->negative = d->negative && d->mantissa != 0;
    int fits = lw__fraction_fits(r->size) && !d->inexact;
    double value = fits ? lw__fraction_value(r->size)
                        : lw__decimal_value(d, u->power) * (double)u->factor / (double)u->divisor;
    if (u->turns != 0 && isfinite(value))
        value = turned(value, &r->size, u->turns);
    r->q.value = r->negative ? -value : value;
    if (fits && u->turns == 0) {
        r->q.num = r->negative ? -(int64_t)r->size.num : (int64_t)r->size.num;
        r->q.den = (int64_t)r->size.den;
    }
}

// ---- reading

// Units of timing stand alone and take no prefix.
static int timing_unit(const char *text, reading *r)
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
    for (size_t i = 0; i < sizeof kinds / sizeof kinds[0]; i++)
        if (strcmp(kinds[i].name, text) == 0) {
            r->q.kind = kinds[i].kind;
            r->unit.power = kinds[i].power;
            return 1;
        }
    return 0;
}

// The unit behind the number, `text` up to its end.
static lw_status read_unit(const char *text, reading *r, lw_error *err)
{
    char unit[MOST_UNIT_BYTES + 1];
    size_t length = strlen(text);
    while (length > 0 && text[length - 1] == ' ')
        length--;
    if (length > MOST_UNIT_BYTES)
        return lw_error_set(err, LW_ERR_UNIT, "the unit has %zu bytes; permitted up to %d", length,
                            MOST_UNIT_BYTES);
    memcpy(unit, text, length);
    unit[length] = 0;
    if (length == 0 || timing_unit(unit, r))
        return LW_OK;
    lw_status status = lw__unit_parse(unit, &r->unit, err);
    r->q.dimension = r->unit.d;
    return status;
}

static lw_status read_quantity(const char *text, reading *r, lw_error *err)
{
    const char *t = text;
    lw__decimal d;
    *r = (reading){.q = {.kind = LW_UNIT_SI}, .unit = lw__unit_none};
    while (*t == ' ')
        t++;
    if (!lw__decimal_read(&t, &d))
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "\"%.*s\" does not begin with a number; a quantity is written \"5 ms\"",
                            SHOWN(text));
    while (*t == ' ')
        t++;
    lw_status status = read_unit(t, r, err);
    if (status != LW_OK) {
        lw_error_prefix(err, "\"%.*s\": ", SHOWN(text));
        return status;
    }
    set_value(r, &d);
    if (!isfinite(r->q.value))
        return lw_error_set(err, LW_ERR_ARGUMENT, "\"%.*s\" is beyond the range of numbers",
                            SHOWN(text));
    return LW_OK;
}

lw_status lw_quantity_parse(const char *text, lw_quantity *out, lw_error *err)
{
    reading r;
    lw_status status = read_quantity(text, &r, err);
    if (status == LW_OK)
        *out = r.q;
    return status;
}

// ---- what is wanted

static const char *words_of(const reading *r, char buffer[LW__UNIT_WORDS])
{
    switch (r->q.kind) {
    case LW_UNIT_CYCLES:
        return "a number of cycles";
    case LW_UNIT_PERCENT:
        return "a percentage";
    case LW_UNIT_SAMPLES:
        return "a number of samples";
    case LW_UNIT_SI:
        break;
    }
    return lw__unit_words(&r->unit, buffer);
}

static lw_status wrong_unit(const char *text, const reading *r, const char *unit_text,
                            const lw__unit *unit, lw_error *err)
{
    char given[LW__UNIT_WORDS], wanted[LW__UNIT_WORDS];
    const char *example = lw__unit_example(unit);
    if (example == NULL)
        return lw_error_set(err, LW_ERR_UNIT,
                            "\"%.*s\" is %s; a quantity in %s is wanted, such as \"2 %s\"",
                            SHOWN(text), words_of(r, given), unit_text, unit_text);
    return lw_error_set(err, LW_ERR_UNIT, "\"%.*s\" is %s; %s is wanted, such as \"%s\"",
                        SHOWN(text), words_of(r, given), lw__unit_words(unit, wanted), example);
}

// Read a quantity and require the unit's dimension, or a percentage where the unit is a plain 1.
static lw_status read_as(const char *text, const char *unit_text, reading *r, lw_error *err)
{
    lw__unit unit;
    lw_status status = lw__unit_parse(unit_text, &unit, err);
    if (status == LW_OK)
        status = read_quantity(text, r, err);
    if (status != LW_OK)
        return status;
    int fits = lw__unit_fits(&r->unit, &unit) &&
               (r->q.kind == LW_UNIT_SI || (r->q.kind == LW_UNIT_PERCENT && unit.n_angles == 0));
    return fits ? LW_OK : wrong_unit(text, r, unit_text, &unit, err);
}

lw_status lw_quantity_parse_as(const char *text, const char *unit, double *value, lw_error *err)
{
    reading r;
    lw_status status = read_as(text, unit, &r, err);
    if (status == LW_OK)
        *value = r.q.value;
    return status;
}

// ---- durations

// A size in seconds, in ticks rounded half up; 0 if out of range.
static int to_ticks(const reading *r, lw_tick *tick)
{
    lw__fraction t = lw__fraction_times(r->size, (uint64_t)LW_TICKS_PER_SECOND);
    if (t.den == 0)
        return lw_tick_from_seconds(r->q.value, tick) == LW_OK;
    lw__u128 half_up = r->negative ? t.den - 1 : t.den; // of the size: a negative half goes to 0
    lw__u128 whole = (2 * t.num + half_up) / (2 * t.den);
    if (whole > (lw__u128)LW_TICK_MAX)
        return 0;
    *tick = r->negative ? -(lw_tick)whole : (lw_tick)whole;
    return 1;
}

lw_status lw_duration_parse(const char *text, lw_tick *tick, double *exact, lw_error *err)
{
    reading r;
    lw_status status = read_as(text, "s", &r, err);
    if (status != LW_OK)
        return status;
    if (!to_ticks(&r, tick))
        return lw_error_set(err, LW_ERR_TIME,
                            "\"%.*s\" is beyond the range of time; permitted -9e6 to 9e6 s",
                            SHOWN(text));
    if (exact != NULL)
        *exact = r.q.value;
    return LW_OK;
}

// ---- periods

// A period in seconds or a frequency in hertz as a fraction of ticks; den 0 if 128 bits are short.
static lw__fraction ticks_of_period(const reading *r, int is_time)
{
    const uint64_t second = (uint64_t)LW_TICKS_PER_SECOND;
    if (is_time)
        return lw__fraction_times(r->size, second);
    return lw__fraction_inverse(lw__fraction_over(r->size, second));
}

static int is_period(lw__fraction t)
{
    lw__u128 whole = t.den != 0 ? t.num / t.den : 0;
    return whole >= 1 && (whole < (lw__u128)LW_TICK_MAX ||
                          (whole == (lw__u128)LW_TICK_MAX && t.num % t.den == 0));
}

lw_status lw_period_parse(const char *text, lw_period *out, lw_error *err)
{
    reading r;
    char words[LW__UNIT_WORDS];
    lw__unit time, rate;
    lw_status status = read_quantity(text, &r, err);
    if (status == LW_OK)
        status = lw__unit_parse("s", &time, err);
    if (status == LW_OK)
        status = lw__unit_parse("Hz", &rate, err);
    if (status != LW_OK)
        return status;
    int is_time = lw__unit_fits(&r.unit, &time), is_rate = lw__unit_fits(&r.unit, &rate);
    if (r.q.kind != LW_UNIT_SI || !(is_time || is_rate))
        return lw_error_set(err, LW_ERR_UNIT,
                            "\"%.*s\" is %s; a period is wanted, such as \"50 us\" or \"20 kHz\"",
                            SHOWN(text), words_of(&r, words));
    lw__fraction ticks = ticks_of_period(&r, is_time);
    double seconds = is_time ? r.q.value : 1 / r.q.value;
    if (ticks.den == 0 && seconds >= 1e-12 && seconds <= 9e6)
        return lw_period_from_seconds(seconds, out, err);
    if (r.negative || !is_period(ticks))
        return lw_error_set(err, LW_ERR_TIME, "\"%.*s\" is no period; permitted 1 ps to 9e6 s",
                            SHOWN(text));
    ticks = lw__fraction_nearest(ticks);
    *out = (lw_period){(int64_t)ticks.num, (int64_t)ticks.den};
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
