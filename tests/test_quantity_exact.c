// Quantities in full: each unit, exact fractions and rounding, refusals in words, periods, text.

#include "suite.h"

#include "base/decimal.h"

#include <latewood/draw.h>
#include <latewood/quantity.h>
#include <locale.h>
#include <stdio.h>
#include <string.h>

__extension__ typedef __int128 wide;

#define MICRO "\xC2\xB5" // U+00B5
#define MU "\xCE\xBC"    // U+03BC

static lw_quantity quantity(const char *text)
{
    lw_quantity q = {0};
    lw_error err = {LW_OK, ""};
    lw_status status = lw_quantity_parse(text, &q, &err);
    ck_assert_msg(status == LW_OK, "\"%s\": %s", text, err.text);
    return q;
}

static int has_dimension(lw_dimension d, int m, int kg, int s, int a, int k)
{
    return d.m == m && d.kg == kg && d.s == s && d.a == a && d.k == k;
}

// ---- numbers and units

static const struct {
    const char *text;
    double value; // the compiler rounds these decimals once
    int m, kg, s, a, k;
    int64_t num, den;
} known[] = {
    {"50 us", 50e-6, 0, 0, 1, 0, 0, 1, 20000},
    {"50us", 50e-6, 0, 0, 1, 0, 0, 1, 20000},
    {"50 " MICRO "s", 50e-6, 0, 0, 1, 0, 0, 1, 20000},
    {"50 " MU "s", 50e-6, 0, 0, 1, 0, 0, 1, 20000},
    {"-3.5e-2 ms", -3.5e-5, 0, 0, 1, 0, 0, -7, 200000},
    {"  +.5 s ", 0.5, 0, 0, 1, 0, 0, 1, 2},
    {"5. s", 5, 0, 0, 1, 0, 0, 5, 1},
    {"1E3 s", 1000, 0, 0, 1, 0, 0, 1000, 1},
    {"000000000000000000000000000000000000.1 s", 0.1, 0, 0, 1, 0, 0, 1, 10},
    {"2 min", 120, 0, 0, 1, 0, 0, 120, 1},
    {"1.5 h", 5400, 0, 0, 1, 0, 0, 5400, 1},
    {"30 kHz", 30000, 0, 0, -1, 0, 0, 30000, 1},
    {"1/s", 1, 0, 0, -1, 0, 0, 1, 1},
    {"5 /s", 5, 0, 0, -1, 0, 0, 5, 1},
    {"5 1/s", 5, 0, 0, -1, 0, 0, 5, 1},
    {"5 s^-1", 5, 0, 0, -1, 0, 0, 5, 1},
    {"7/min", 7 / 60.0, 0, 0, -1, 0, 0, 7, 60},
    {"0.1 1/min", 1 / 600.0, 0, 0, -1, 0, 0, 1, 600},
    {"2 mH", 2e-3, 2, 1, -2, -2, 0, 1, 500},
    {"0.8 ohm", 0.8, 2, 1, -3, -2, 0, 4, 5},
    {"0.8 \xCE\xA9", 0.8, 2, 1, -3, -2, 0, 4, 5},     // Greek capital omega
    {"0.8 \xE2\x84\xA6", 0.8, 2, 1, -3, -2, 0, 4, 5}, // ohm sign
    {"0.05 N m/A", 0.05, 2, 1, -2, -1, 0, 1, 20},
    {"0.05 N*m/A", 0.05, 2, 1, -2, -1, 0, 1, 20},
    {"0.05 N\xC2\xB7m / A", 0.05, 2, 1, -2, -1, 0, 1, 20},
    {"0.05 V s/rad", 0.05, 2, 1, -2, -1, 0, 1, 20},
    {"0.05 Wb", 0.05, 2, 1, -2, -1, 0, 1, 20},
    {"4 kg m^2/s^2", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 J", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 W s", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 V A s", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 V C", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 F V^2", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 H A^2", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 Pa m^3", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 T A m^2", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 S V^2 s", 4, 2, 1, -2, 0, 0, 4, 1},
    {"4 V^2 s/ohm", 4, 2, 1, -2, 0, 0, 4, 1},
    {"3 mm^2", 3e-6, 2, 0, 0, 0, 0, 3, 1000000},
    {"300 K", 300, 0, 0, 0, 0, 1, 300, 1},
    {"250 mrad", 0.25, 0, 0, 0, 0, 0, 1, 4},
    {"12", 12, 0, 0, 0, 0, 0, 12, 1},
    {"-0 s", 0, 0, 0, 1, 0, 0, 0, 1},
    {"9.5367431640625e-07 s", 0x1p-20, 0, 0, 1, 0, 0, 1, 1048576},
    {"9223372036854775807", 9223372036854775807.0, 0, 0, 0, 0, 0, INT64_MAX, 1},
    {"9223372036854775808", 9223372036854775808.0, 0, 0, 0, 0, 0, 0, 0},
    {"1e30 Hz", 1e30, 0, 0, -1, 0, 0, 0, 0},
    {"5e-324 m", 5e-324, 1, 0, 0, 0, 0, 0, 0},
    {"0e99999999999", 0, 0, 0, 0, 0, 0, 0, 1},
};
enum { N_KNOWN = sizeof known / sizeof known[0] };

START_TEST(text_gives_value_dimension_and_fraction)
{
    for (int i = 0; i < N_KNOWN; i++) {
        lw_quantity q = quantity(known[i].text);
        ck_assert_msg(q.value == known[i].value, "\"%s\" is %.17g", known[i].text, q.value);
        ck_assert_int_eq(q.kind, LW_UNIT_SI);
        ck_assert_msg(
            has_dimension(q.dimension, known[i].m, known[i].kg, known[i].s, known[i].a, known[i].k),
            "\"%s\": dimension", known[i].text);
        ck_assert_msg(q.num == known[i].num && q.den == known[i].den, "\"%s\" is %lld/%lld",
                      known[i].text, (long long)q.num, (long long)q.den);
    }
}
END_TEST

START_TEST(prefixes_are_powers_of_ten)
{
    static const struct {
        const char *text;
        double value;
    } rows[] = {{"1 fs", 1e-15}, {"1 ps", 1e-12},       {"1 ns", 1e-9}, {"1 us", 1e-6},
                {"1 ms", 1e-3},  {"1 cs", 1e-2},        {"1 ks", 1e3},  {"1 Ms", 1e6},
                {"1 Gs", 1e9},   {"1 Ts", 1e12},        {"1 kg", 1},    {"1 mg", 1e-6},
                {"1 g", 1e-3},   {"1 " MICRO "H", 1e-6}};
    for (size_t i = 0; i < sizeof rows / sizeof rows[0]; i++)
        ck_assert_msg(quantity(rows[i].text).value == rows[i].value, "%s", rows[i].text);
}
END_TEST

START_TEST(units_of_timing_stand_alone)
{
    lw_quantity q = quantity("340 cycles");
    ck_assert(q.kind == LW_UNIT_CYCLES && q.value == 340 && q.num == 340 && q.den == 1);
    q = quantity("37%");
    ck_assert(q.kind == LW_UNIT_PERCENT && q.value == 0.37 && q.num == 37 && q.den == 100);
    q = quantity("1.5 samples");
    ck_assert(q.kind == LW_UNIT_SAMPLES && q.value == 1.5 && q.num == 3 && q.den == 2);
    q = quantity("1 sample");
    ck_assert(q.kind == LW_UNIT_SAMPLES && q.value == 1);
    lw_error err;
    ck_assert_int_eq(lw_quantity_parse("3 kcycles", &q, &err), LW_ERR_UNIT);
    ck_assert_int_eq(lw_quantity_parse("3 cycles/s", &q, &err), LW_ERR_UNIT);
}
END_TEST

// pi/6, 100 pi, pi/180 from memory: 0.523598775598298873077107, 314.159265358979323846264,
// 0.0174532925199432957692369
START_TEST(angles_are_radians)
{
    ck_assert(quantity("180 deg").value == 3.14159265358979323846264338);
    ck_assert(quantity("-30 deg").value == -0.523598775598298873077107);
    ck_assert(quantity("1 deg").value == 0.0174532925199432957692369);
    ck_assert(quantity("3000 rpm").value == 314.159265358979323846264);
    ck_assert(quantity("1.5 rad").value == 1.5 && quantity("1.5 rad").num == 3);
    ck_assert(quantity("1 1/deg").value == 57.2957795130823208767982); // 180/pi, from memory
    ck_assert_int_eq(quantity("180 deg").den, 0);                      // pi is no fraction
    ck_assert(has_dimension(quantity("1 rpm").dimension, 0, 0, -1, 0, 0));
}
END_TEST

// ---- rounding

// Random decimals of 1 to 25 digits with every prefix: the C library's reading of the same digits
// and the sum of the exponents is correctly rounded and knows nothing of fractions.
START_TEST(values_are_the_nearest_doubles)
{
    static const struct {
        const char *name;
        int power;
    } prefixes[] = {{"", 0}, {"m", -3}, {"u", -6}, {"n", -9}, {"p", -12}, {"k", 3}, {"G", 9}};
    for (uint32_t k = 0; k < 100000; k++) {
        uint32_t out[4];
        const uint32_t counter[4] = {k, 1, 0, 0}, key[2] = {9, 0};
        char digits[32], text[64], plain[64];
        lw_philox4x32_10(counter, key, out);
        snprintf(digits, sizeof digits, "%u%09u%09u", out[0], out[1] % 1000000000,
                 out[2] % 1000000000);
        int n = 1 + (int)(out[3] % 25), power = (int)(out[3] / 25 % 40) - 25, p = (int)(k % 7);
        digits[(size_t)n < strlen(digits) ? (size_t)n : strlen(digits)] = 0;
        snprintf(text, sizeof text, "%.1s.%se%d %ss", digits, digits + 1, power, prefixes[p].name);
        snprintf(plain, sizeof plain, "%.1s.%se%d", digits, digits + 1, power + prefixes[p].power);
        lw_quantity q = quantity(text);
        ck_assert_msg(q.value == strtod(plain, NULL), "\"%s\" is %.17g", text, q.value);
    }
}
END_TEST

// n/d is nearer to v than to the neighbours of v if |n - v d| is least for v; the products are
// exact in 128 bits as multiples of 2^-70.
static wide distance(int64_t n, int64_t d, double v)
{
    wide r = ((wide)n << 70) - (wide)(v * 0x1p70) * d;
    return r < 0 ? -r : r;
}

START_TEST(fractions_of_minutes_and_hours_are_the_nearest_doubles)
{
    for (int64_t n = 1; n < 60000; n += 7) {
        char text[40];
        snprintf(text, sizeof text, "%lld /%s", (long long)n, n % 2 ? "min" : "h");
        lw_quantity q = quantity(text);
        int64_t d = n % 2 ? 60 : 3600;
        ck_assert(q.num * d == n * q.den);
        wide here = distance(n, d, q.value);
        ck_assert(here <= distance(n, d, nextafter(q.value, 0)));
        ck_assert(here <= distance(n, d, nextafter(q.value, (double)INFINITY)));
    }
}
END_TEST

// 2^53 + 1 is a tie between two doubles and goes to the even one; a digit far behind decides.
START_TEST(digits_beyond_the_mantissa_decide_ties)
{
    lw_quantity q = quantity("9007199254740993.0000000000000000000000000000000");
    ck_assert(q.value == 0x1p53 && q.num == INT64_C(9007199254740993));
    q = quantity("9007199254740993.0000000000000000000000000000001");
    ck_assert(q.value == 0x1p53 + 2);
    ck_assert_int_eq(q.den, 0); // a dropped digit leaves no exact fraction
}
END_TEST

// 2^52 / (2^53 - 1) = 1/2 + 2^-54 + 2^-107 and so on: next to a tie of which 2^-107 decides.
START_TEST(what_a_quotient_leaves_over_decides_ties)
{
    const lw__fraction above = {(lw__u128)1 << 52, ((lw__u128)1 << 53) - 1};
    const lw__fraction tie = {((lw__u128)1 << 53) + 1, (lw__u128)1 << 54};
    ck_assert(lw__fraction_value(above) == 0.5 + 0x1p-53);
    ck_assert(lw__fraction_value(tie) == 0.5);
}
END_TEST

// ---- what is refused

static const struct {
    const char *text;
    lw_status status;
    const char *part; // of the message
} refused[] = {
    {"", LW_ERR_ARGUMENT, "begin with a number; a quantity is written \"5 ms\""},
    {"ms", LW_ERR_ARGUMENT, "\"ms\" does not begin with a number"},
    {"-", LW_ERR_ARGUMENT, "number"},
    {".", LW_ERR_ARGUMENT, "number"},
    {"nan", LW_ERR_ARGUMENT, "number"},
    {"inf s", LW_ERR_ARGUMENT, "number"},
    {"1e400 s", LW_ERR_ARGUMENT, "beyond the range of numbers"},
    {"1e99999999999 s", LW_ERR_ARGUMENT, "beyond the range of numbers"},
    {"0x10 s", LW_ERR_UNIT, "\"x10\""},
    {"1,5 s", LW_ERR_UNIT, "\",5\""},
    {"1.2.3 s", LW_ERR_UNIT, "\".3\""},
    {"5 e s", LW_ERR_UNIT, "\"e\" is not known"},
    {"5 furlong", LW_ERR_UNIT, "\"5 furlong\": unit \"furlong\" is not known; units are written"},
    {"5 khz", LW_ERR_UNIT, "unit \"khz\" is not known; nearest \"kHz\""},
    {"5 uss", LW_ERR_UNIT, "unit \"uss\" is not known; nearest \"us\""},
    {"5 kmin", LW_ERR_UNIT, "\"kmin\""},
    {"5 degC", LW_ERR_UNIT, "\"degC\""},
    {"5 m/s/s", LW_ERR_UNIT, "at most one \"/\""},
    {"5 m^7", LW_ERR_UNIT, "powers from -6 to 6"},
    {"5 m^0", LW_ERR_UNIT, "powers from -6 to 6"},
    {"5 m^", LW_ERR_UNIT, "powers from -6 to 6"},
    {"5 m^22", LW_ERR_UNIT, "powers from -6 to 6"},
    {"5 m^ 2", LW_ERR_UNIT, "powers from -6 to 6"},
    {"5 m^2s", LW_ERR_UNIT, "ill-formed"},
    {"5 *s", LW_ERR_UNIT, "ill-formed"},
    {"5 s*", LW_ERR_UNIT, "a unit is missing beside a sign"},
    {"5 s**m", LW_ERR_UNIT, "ill-formed"},
    {"5 m/", LW_ERR_UNIT, "a unit is missing beside a sign"},
    {"5 /", LW_ERR_UNIT, "a unit is missing beside a sign"},
    {"5 h^6", LW_ERR_UNIT, "ill-formed"}, // 3600^6 is no 62-bit factor
    {"5 J^6*J^6*J^6*J^6*J^6*J^6*J^6*J^6*J^6", LW_ERR_UNIT, "ill-formed"},
    {"5 m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m m",
     LW_ERR_UNIT, "permitted up to 79"},
};

START_TEST(ill_formed_text_is_refused_in_words_and_leaves_the_quantity_alone)
{
    for (size_t i = 0; i < sizeof refused / sizeof refused[0]; i++) {
        lw_quantity q = {.value = 77};
        lw_error err = {LW_OK, ""};
        lw_status status = lw_quantity_parse(refused[i].text, &q, &err);
        ck_assert_msg(status == refused[i].status, "\"%s\": %s, \"%s\"", refused[i].text,
                      lw_status_name(status), err.text);
        ck_assert_int_eq(err.status, status);
        ck_assert_msg(strstr(err.text, refused[i].part) != NULL, "message: %s", err.text);
        ck_assert(q.value == 77);
        ck_assert_int_eq(lw_quantity_parse(refused[i].text, &q, NULL), status);
    }
}
END_TEST

static const struct {
    const char *text, *unit, *message;
} misfits[] = {
    {"5 V", "s", "\"5 V\" is a voltage; a time is wanted, such as \"5 ms\""},
    {"5 ms", "V", "\"5 ms\" is a time; a voltage is wanted, such as \"24 V\""},
    {"37 %", "s", "\"37 %\" is a percentage; a time is wanted, such as \"5 ms\""},
    {"2 samples", "s", "\"2 samples\" is a number of samples; a time is wanted, such as \"5 ms\""},
    {"340 cycles", "1",
     "\"340 cycles\" is a number of cycles; a plain number is wanted, such as "
     "\"0.5\""},
    {"5", "H", "\"5\" is a plain number; an inductance is wanted, such as \"2 mH\""},
    {"50 Hz", "rad/s",
     "\"50 Hz\" is a frequency; an angular frequency is wanted, such as \"40 rad/s\""},
    {"3000 rpm", "Hz",
     "\"3000 rpm\" is an angular frequency; a frequency is wanted, such as \"20 kHz\""},
    {"37 %", "rad", "\"37 %\" is a percentage; an angle is wanted, such as \"30 deg\""},
    {"5 A", "m^3/s", "\"5 A\" is a current; a quantity in m^3/s is wanted, such as \"2 m^3/s\""},
    {"5 m^3/s", "A", "\"5 m^3/s\" is a quantity in m^3/s; a current is wanted, such as \"2 A\""},
    {"5 1/K", "A", "\"5 1/K\" is a quantity in 1/K; a current is wanted, such as \"2 A\""},
};

START_TEST(a_wrong_dimension_says_what_is_there_and_what_is_wanted)
{
    for (size_t i = 0; i < sizeof misfits / sizeof misfits[0]; i++) {
        double value = 77;
        lw_error err = {LW_OK, ""};
        ck_assert_int_eq(lw_quantity_parse_as(misfits[i].text, misfits[i].unit, &value, &err),
                         LW_ERR_UNIT);
        ck_assert_str_eq(err.text, misfits[i].message);
        ck_assert(value == 77);
    }
}
END_TEST

// Each example a message gives is itself accepted, and by the same unit.
START_TEST(examples_in_messages_are_accepted)
{
    static const char *const units[] = {
        "s",   "Hz",      "rad/s",     "1",   "rad",   "A",   "V",      "ohm", "H",       "F",
        "S",   "C",       "Wb",        "T",   "m",     "m/s", "m/s^2",  "kg",  "N",       "Pa",
        "N m", "N m/rad", "N m s/rad", "N/m", "N s/m", "W",   "kg m^2", "K",   "V s/rad", "m^3/s"};
    for (size_t i = 0; i < sizeof units / sizeof units[0]; i++) {
        lw_error err = {LW_OK, ""};
        double value;
        char example[32];
        ck_assert_int_eq(lw_quantity_parse_as("1 A^5", units[i], &value, &err), LW_ERR_UNIT);
        const char *such = strstr(err.text, "such as \"");
        ck_assert_ptr_nonnull(such);
        ck_assert_int_eq(sscanf(such, "such as \"%31[^\"]", example), 1);
        ck_assert_msg(lw_quantity_parse_as(example, units[i], &value, &err) == LW_OK, "%s",
                      err.text);
    }
}
END_TEST

START_TEST(a_fitting_dimension_is_read)
{
    static const struct {
        const char *text, *unit;
        double value;
    } rows[] = {{"2 mH", "H", 2e-3},       {"0.05 V s", "N m/A", 0.05},
                {"37 %", "1", 0.37},       {"0.25", "1", 0.25},
                {"40 rad/s", "rad/s", 40}, {"40 1/s", "rad/s", 40},
                {"20 kHz", "Hz", 20000},   {"20 1/s", "Hz", 20},
                {"90 N m", "N m/rad", 90}, {"0.1 N m s/rad", "N m s", 0.1}};
    for (size_t i = 0; i < sizeof rows / sizeof rows[0]; i++) {
        double value = 0;
        lw_error err = {LW_OK, ""};
        ck_assert_msg(lw_quantity_parse_as(rows[i].text, rows[i].unit, &value, &err) == LW_OK, "%s",
                      err.text);
        ck_assert(value == rows[i].value);
    }
}
END_TEST

// ---- durations

static const struct {
    const char *text;
    lw_tick tick;
    double exact;
} durations[] = {
    {"50 us", 50000000, 50e-6},
    {"2.4999999999999999 ps", 2, 2.4999999999999999e-12},
    {"2.5 ps", 3, 2.5e-12},
    {"-2.5 ps", -2, -2.5e-12},
    {"-2.51 ps", -3, -2.51e-12},
    {"0.5 ps", 1, 0.5e-12},
    {"-0.5 ps", 0, -0.5e-12},
    {"0 s", 0, 0},
    {"5.000000000000000001 s", 5000000000000, 5},
    {"1e-40 s", 0, 1e-40},
    {"104 h", INT64_C(374400000000000000), 374400},
    {"9000000 s", LW_TICK_MAX, 9e6},
    {"-9000000 s", -LW_TICK_MAX, -9e6},
    {"8999999.9999999999996 s", LW_TICK_MAX, 9e6},
};

START_TEST(durations_round_to_the_nearest_tick_halves_up)
{
    for (size_t i = 0; i < sizeof durations / sizeof durations[0]; i++) {
        lw_tick tick = 77;
        double exact = 77;
        lw_error err = {LW_OK, ""};
        ck_assert_msg(lw_duration_parse(durations[i].text, &tick, &exact, &err) == LW_OK, "%s",
                      err.text);
        ck_assert_msg(tick == durations[i].tick, "\"%s\" is %lld ticks", durations[i].text,
                      (long long)tick);
        ck_assert(exact == durations[i].exact);
        ck_assert_int_eq(lw_duration_parse(durations[i].text, &tick, NULL, NULL), LW_OK);
    }
}
END_TEST

START_TEST(durations_beyond_the_range_and_other_units_are_refused)
{
    lw_tick tick = 77;
    lw_error err;
    ck_assert_int_eq(lw_duration_parse("9000001 s", &tick, NULL, &err), LW_ERR_TIME);
    ck_assert_ptr_nonnull(strstr(err.text, "permitted -9e6 to 9e6 s"));
    ck_assert_int_eq(lw_duration_parse("1e300 s", &tick, NULL, &err), LW_ERR_TIME);
    ck_assert_int_eq(lw_duration_parse("20 kHz", &tick, NULL, &err), LW_ERR_UNIT);
    ck_assert_int_eq(lw_duration_parse("5", &tick, NULL, &err), LW_ERR_UNIT);
    ck_assert_int_eq(tick, 77);
}
END_TEST

// ---- periods

static const struct {
    const char *text;
    int64_t num, den;
} good_periods[] = {
    {"50 us", 50000000, 1},
    {"20 kHz", 50000000, 1},
    {"30 kHz", 100000000, 3},
    {"30.000001 kHz", 1000000000000000, 30000001},
    {"7 /min", 60000000000000, 7},
    {"33.333333333333333 us", 33333333333333333, 1000000000},
    {"1 ps", 1, 1},
    {"1 THz", 1, 1},
    {"1.5 ps", 3, 2},
    {"9000000 s", LW_TICK_MAX, 1},
    {"5.000000000000000001 s", 5000000000000000001, 1000000},
};

START_TEST(periods_are_exact_fractions_in_lowest_terms)
{
    for (size_t i = 0; i < sizeof good_periods / sizeof good_periods[0]; i++) {
        lw_period p = {0, 0};
        lw_error err = {LW_OK, ""};
        ck_assert_msg(lw_period_parse(good_periods[i].text, &p, &err) == LW_OK, "%s", err.text);
        ck_assert_msg(p.num == good_periods[i].num && p.den == good_periods[i].den,
                      "\"%s\" is %lld/%lld", good_periods[i].text, (long long)p.num,
                      (long long)p.den);
    }
}
END_TEST

START_TEST(what_is_no_period_is_refused)
{
    static const struct {
        const char *text;
        lw_status status;
    } rows[] = {{"0 s", LW_ERR_TIME},
                {"-5 us", LW_ERR_TIME},
                {"0 Hz", LW_ERR_TIME},
                {"0.999 ps", LW_ERR_TIME},
                {"1.001 THz", LW_ERR_TIME},
                {"9000000.000000000001 s", LW_ERR_TIME},
                {"9000000.0000000000005 s", LW_ERR_TIME},
                {"1e-7 Hz", LW_ERR_TIME},
                {"1e-300 Hz", LW_ERR_TIME},
                {"1e300 s", LW_ERR_TIME},
                {"5", LW_ERR_UNIT},
                {"37 %", LW_ERR_UNIT},
                {"1 sample", LW_ERR_UNIT},
                {"3000 rpm", LW_ERR_UNIT},
                {"100 rad/s", LW_ERR_UNIT},
                {"5 V", LW_ERR_UNIT}};
    for (size_t i = 0; i < sizeof rows / sizeof rows[0]; i++) {
        lw_period p = {7, 7};
        lw_error err = {LW_OK, ""};
        ck_assert_msg(lw_period_parse(rows[i].text, &p, &err) == rows[i].status, "\"%s\": %s",
                      rows[i].text, err.text);
        ck_assert(p.num == 7 && p.den == 7);
        const char *part = rows[i].status == LW_ERR_TIME ? "permitted 1 ps to 9e6 s"
                                                         : "such as \"50 us\" or \"20 kHz\"";
        ck_assert_msg(strstr(err.text, part) != NULL, "message: %s", err.text);
    }
}
END_TEST

// 3.33.. with 27 digits is no fraction of 63-bit numbers, and 10/3 is nearest.
START_TEST(periods_of_too_many_digits_are_cut_to_the_nearest_fraction)
{
    lw_period p;
    ck_assert_int_eq(lw_period_parse("33.3333333333333333333333333 us", &p, NULL), LW_OK);
    ck_assert(p.num == 100000000 && p.den == 3);
    ck_assert_int_eq(lw_period_parse("0.1234567890123456789012345678 Hz", &p, NULL), LW_OK);
    double exact = 1 / 0.1234567890123456789012345678;
    ck_near((double)p.num / (double)p.den * 1e-12, exact, 5e-16, 0); // a few roundings of doubles
    ck_assert_int_eq(lw_period_parse("3.14159265358979323846264338 us", &p, NULL), LW_OK);
    ck_assert(p.den > 1000000); // not cut to whole ticks
    ck_near((double)p.num / (double)p.den, 3141592.65358979323846, 3e-16, 0);
}
END_TEST

START_TEST(seconds_as_a_number_give_the_period_of_their_decimal)
{
    static const struct {
        double seconds;
        int64_t num, den;
    } rows[] = {{50e-6, 50000000, 1},    {1.1e-6, 1100000, 1},
                {2.5e-12, 5, 2},         {0.1, 100000000000, 1},
                {9e6, LW_TICK_MAX, 1},   {1e-12, 1, 1},
                {33.25e-6, 33250000, 1}, {1 / 30000.0, 6666666666666667, 200000000}};
    for (size_t i = 0; i < sizeof rows / sizeof rows[0]; i++) {
        lw_period p = {0, 0};
        ck_assert_int_eq(lw_period_from_seconds(rows[i].seconds, &p, NULL), LW_OK);
        ck_assert_msg(p.num == rows[i].num && p.den == rows[i].den, "%g s is %lld/%lld",
                      rows[i].seconds, (long long)p.num, (long long)p.den);
    }
    const double bad[] = {0, -1e-6, 0.9e-12, 9000001, (double)INFINITY, (double)NAN};
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        lw_period p = {7, 7};
        lw_error err;
        ck_assert_int_eq(lw_period_from_seconds(bad[i], &p, &err), LW_ERR_TIME);
        ck_assert(p.num == 7 && strstr(err.text, "permitted 1 ps to 9e6 s") != NULL);
    }
}
END_TEST

// ---- numbers as text

static const struct {
    double value;
    const char *text;
} shortest[] = {
    {0, "0"},
    {-0.0, "-0"},
    {0.1, "0.1"},
    {-0.1, "-0.1"},
    {1e-5, "1e-05"},
    {100, "100"},
    {1e15, "1e+15"},
    {123456.789, "123456.789"},
    {0.1 + 0.2, "0.30000000000000004"},
    {1 / 3.0, "0.3333333333333333"},
    {9007199254740993.0, "9007199254740992"},
    {1.7976931348623157e308, "1.7976931348623157e+308"},
    // subnormal numbers need few digits
    {5e-324, "5e-324"},
    {0x1p-1050, "8.289046e-317"},
    // powers of two whose 16-digit decimal is not the nearest one; digits as Python's repr has them
    {0x1p-1017, "7.120236347223045e-307"},
    {0x1p-652, "5.351097043477547e-197"},
    {(double)INFINITY, "inf"},
    {-(double)INFINITY, "-inf"},
    {(double)NAN, "nan"},
};

START_TEST(numbers_are_written_as_short_as_they_read_back)
{
    char buffer[32];
    for (size_t i = 0; i < sizeof shortest / sizeof shortest[0]; i++) {
        ck_assert_ptr_eq(lw_double_format(shortest[i].value, buffer), buffer);
        ck_assert_str_eq(buffer, shortest[i].text);
    }
}
END_TEST

static int digits_of(const char *text)
{
    int n = 0, zeros = 0;
    for (const char *c = text; *c != 0 && *c != 'e'; c++) {
        if (*c < '0' || *c > '9' || (n == 0 && *c == '0'))
            continue;
        zeros = *c == '0' ? zeros + 1 : 0;
        n++;
    }
    return n - zeros;
}

START_TEST(numbers_read_back_and_no_shorter_decimal_does)
{
    for (uint32_t k = 0; k < 100000; k++) {
        uint32_t out[4];
        const uint32_t counter[4] = {k, 2, 0, 0}, key[2] = {9, 0};
        char buffer[32], shorter[40];
        double v;
        lw_philox4x32_10(counter, key, out);
        if (k % 8 == 0)
            out[1] &= 0x800fffff; // subnormal
        memcpy(&v, out, sizeof v);
        if (!isfinite(v))
            continue;
        ck_assert_msg(strtod(lw_double_format(v, buffer), NULL) == v, "%a as %s", v, buffer);
        int n = digits_of(buffer);
        if (n > 1) {
            snprintf(shorter, sizeof shorter, "%.*e", n - 2, v);
            ck_assert_msg(strtod(shorter, NULL) != v, "%s is as good as %s", shorter, buffer);
        }
    }
}
END_TEST

// A locale that writes another decimal point: one that is installed, or one made for the test.
static int other_locale(void)
{
    static const char *const names[] = {"de_DE.UTF-8", "fr_FR.UTF-8", "de_DE.utf8", "fr_FR.utf8"};
    char path[512], command[1200];
    for (int i = 0; i < 4; i++)
        if (setlocale(LC_ALL, names[i]) != NULL)
            return 1;
    const char *folder = getenv("TMPDIR");
    snprintf(path, sizeof path, "%s/latewood-locale", folder != NULL ? folder : "/tmp");
    snprintf(command, sizeof command,
             "mkdir -p '%s' && localedef -i de_DE -f UTF-8 '%s/de_DE.UTF-8' 2>/dev/null", path,
             path);
    if (system(command) != 0)
        return 0;
    setenv("LOCPATH", path, 1);
    return setlocale(LC_ALL, "de_DE.UTF-8") != NULL;
}

START_TEST(the_locale_changes_nothing)
{
    char buffer[32];
    if (!other_locale()) {
        printf("no locale with another decimal point can be had here\n");
        return;
    }
    snprintf(buffer, sizeof buffer, "%.1f", 0.5);
    ck_assert_str_eq(buffer, "0,5"); // the locale is at work
    for (size_t i = 0; i < sizeof shortest / sizeof shortest[0]; i++)
        ck_assert_str_eq(lw_double_format(shortest[i].value, buffer), shortest[i].text);
    ck_assert(quantity("-3.5e-2 ms").value == -3.5e-5);
    ck_assert(quantity("1.00000000000000011102230246251565404236316680908203125").value == 1);
    lw_quantity q;
    ck_assert_int_eq(lw_quantity_parse("3,5 ms", &q, NULL), LW_ERR_UNIT);
    ck_assert_str_eq(lw_tick_format(1000003000, buffer), "1.000003 ms");
}
END_TEST

// ---- times as text

static const struct {
    lw_tick tick;
    const char *text;
} times[] = {
    {0, "0 s"},
    {50000000, "50 us"},
    {1000003000, "1.000003 ms"},
    {1, "1 ps"},
    {-1, "-1 ps"},
    {999, "999 ps"},
    {1000, "1 ns"},
    {-1500, "-1.5 ns"},
    {33333333, "33.333333 us"},
    {LW_TICKS_PER_SECOND, "1 s"},
    {90 * LW_TICKS_PER_SECOND + 1, "90.000000000001 s"},
    {LW_TICK_MAX, "9000000 s"},
    {INT64_MIN, "-9223372.036854775808 s"},
};

START_TEST(times_are_written_with_a_fitting_unit)
{
    char buffer[40];
    for (size_t i = 0; i < sizeof times / sizeof times[0]; i++) {
        ck_assert_ptr_eq(lw_tick_format(times[i].tick, buffer), buffer);
        ck_assert_str_eq(buffer, times[i].text);
    }
}
END_TEST

START_TEST(times_read_back_to_the_tick)
{
    for (uint32_t k = 0; k < 50000; k++) {
        double u[2];
        char buffer[40];
        lw_tick t, back = 0;
        lw_draw_pair((lw_address){21, 0, 0, k}, u);
        t = (lw_tick)((u[0] - 0.5) * ldexp(1, (int)(u[1] * 63)));
        ck_assert_int_eq(lw_duration_parse(lw_tick_format(t, buffer), &back, NULL, NULL), LW_OK);
        ck_assert_int_eq(back, t);
    }
}
END_TEST

// ---- fractions

START_TEST(fractions_that_do_not_fit_say_so)
{
    const lw__decimal one = {1, 0, 0, 0};
    lw__fraction f = lw__fraction_of(&one, 37);
    ck_assert(f.den == 1 && !lw__fraction_fits(f));
    ck_assert(lw__fraction_of(&one, 38).den == 0); // 10^38 > 2^126
    ck_assert(lw__fraction_times(lw__fraction_of(&one, 38), 3).den == 0);
    ck_assert(lw__fraction_over(lw__fraction_of(&one, -37), 100).den == 0);
    ck_assert(lw__fraction_inverse((lw__fraction){0, 1}).den == 0);
    // factors in common go first
    f = lw__fraction_times(lw__fraction_of(&one, -37), 1000);
    ck_assert(f.num == 1 && f.den == lw__fraction_of(&one, 34).num);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("quantity exact");
    TCase *parse = tcase_create("parse"), *time = tcase_create("time"),
          *text = tcase_create("text");
    tcase_add_test(parse, text_gives_value_dimension_and_fraction);
    tcase_add_test(parse, prefixes_are_powers_of_ten);
    tcase_add_test(parse, units_of_timing_stand_alone);
    tcase_add_test(parse, angles_are_radians);
    tcase_add_test(parse, values_are_the_nearest_doubles);
    tcase_add_test(parse, fractions_of_minutes_and_hours_are_the_nearest_doubles);
    tcase_add_test(parse, digits_beyond_the_mantissa_decide_ties);
    tcase_add_test(parse, what_a_quotient_leaves_over_decides_ties);
    tcase_add_test(parse, ill_formed_text_is_refused_in_words_and_leaves_the_quantity_alone);
    tcase_add_test(parse, a_wrong_dimension_says_what_is_there_and_what_is_wanted);
    tcase_add_test(parse, examples_in_messages_are_accepted);
    tcase_add_test(parse, a_fitting_dimension_is_read);
    tcase_add_test(parse, fractions_that_do_not_fit_say_so);
    tcase_add_test(time, durations_round_to_the_nearest_tick_halves_up);
    tcase_add_test(time, durations_beyond_the_range_and_other_units_are_refused);
    tcase_add_test(time, periods_are_exact_fractions_in_lowest_terms);
    tcase_add_test(time, what_is_no_period_is_refused);
    tcase_add_test(time, periods_of_too_many_digits_are_cut_to_the_nearest_fraction);
    tcase_add_test(time, seconds_as_a_number_give_the_period_of_their_decimal);
    tcase_add_test(text, numbers_are_written_as_short_as_they_read_back);
    tcase_add_test(text, numbers_read_back_and_no_shorter_decimal_does);
    tcase_add_test(text, the_locale_changes_nothing);
    tcase_add_test(text, times_are_written_with_a_fitting_unit);
    tcase_add_test(text, times_read_back_to_the_tick);
    suite_add_tcase(suite, parse);
    suite_add_tcase(suite, time);
    suite_add_tcase(suite, text);
    return run_suite(suite);
}
