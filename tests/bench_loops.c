// Speed of whole loops against hand-written C for the one loop, in one run:
//   W1  integrator, P, one sample of delay
//   W2  four-state axis of a mount drive, 12-bit adc, PI with filter and anti-windup, latency 0.37
//   T W3  as W2, latency uniform in 0.2 to 0.9 T
// The plain C has everything of its loop as constants; transitions are formed beforehand in both.
// All parameters are invented.

#include "bench.h"

// Outside a test a failure ends the program.
#define OK(call)                                                                                   \
    do {                                                                                           \
        lw_error err_ = {0}, *e = &err_;                                                           \
        if ((call) != LW_OK) {                                                                     \
            fprintf(stderr, "%s\n", err_.text);                                                    \
            exit(1);                                                                               \
        }                                                                                          \
        (void)e;                                                                                   \
    } while (0)

#include "loops.h"

#include "base/dd.h"
#include "base/dense.h"

#include <latewood/draw.h>

// ---- parameters

#define COIL_L 0.004
#define COIL_T 1e-4
#define COIL_KP 12.0
#define COIL_REF 2.0
#define COIL_HALF 500

#define AXIS_T 5e-5
#define AXIS_REF 12.0
#define AXIS_HALF 2000
#define AXIS_VOLTS 15.0
#define FILTER 0.35
#define KP 2.0
#define KI 0.012
#define KAW 0.03
#define LATENCY 0.37
#define EARLY 0.2
#define LATE 0.9

static const double axis_a[16] = {-1.2 / 0.0018,
                                  -0.11 / 0.0018,
                                  0,
                                  0,
                                  0.11 / 0.00014,
                                  -0.01225 / 0.00014,
                                  -160 / 0.00014,
                                  0.012 / 0.00014,
                                  0,
                                  1,
                                  0,
                                  -1,
                                  0,
                                  0.012 / 0.0009,
                                  160 / 0.0009,
                                  -0.0123 / 0.0009};
static const double axis_b[4] = {1 / 0.0018, 0, 0, 0};

// The controller of W2 and W3: filter, PI, back-calculation.
static inline double control(double *state, double wanted, double measured)
{
    state[0] += FILTER * (measured - state[0]);
    double e = wanted - state[0], p = KP * e + state[1];
    double u = p < -AXIS_VOLTS ? -AXIS_VOLTS : p;
    u = u > AXIS_VOLTS ? AXIS_VOLTS : u;
    state[1] += KI * e + KAW * (u - p);
    return u;
}

// ---- plain C

static double coil_plain(long n)
{
    double i = 0, held = 0, g = COIL_T / COIL_L;
    for (long k = 0; k < n; k += COIL_HALF) {
        double wanted = k / COIL_HALF % 2 ? -COIL_REF : COIL_REF;
        for (long j = 0; j < COIL_HALF; j++) {
            double u = COIL_KP * (wanted - i);
            i += g * held;
            held = u;
        }
    }
    return i;
}

static double phi[4][4], gamma_whole[4], gamma_rest[4]; // over T; over T (1 - latency)
static double series[8][4];                             // Gamma(tau), powers of 2 tau / T - 1

static void transition(double tau, double p[4][4], double g[4])
{
    lw__dd m[25] = {{0, 0}}, e[25];
    for (int i = 0; i < 4; i++) {
        for (int j = 0; j < 4; j++)
            m[5 * i + j] = lw__dd_from_double(axis_a[4 * i + j]);
        m[5 * i + 4] = lw__dd_from_double(axis_b[i]);
    }
    lw__dense_exp_dd(5, m, lw__dd_from_double(tau), e);
    for (int i = 0; i < 4; i++) {
        for (int j = 0; p != NULL && j < 4; j++)
            p[i][j] = lw__dd_to_double(e[5 * i + j]);
        g[i] = lw__dd_to_double(e[5 * i + 4]);
    }
}

// Interpolation of Gamma at 8 Chebyshev nodes, expanded into powers.
static void fit_series(void)
{
    double node[8], table[8][4], poly[8] = {1};
    for (int k = 0; k < 8; k++) {
        node[k] = cos(3.14159265358979323846 * (2 * k + 1) / 16);
        transition(AXIS_T * (node[k] + 1) / 2, NULL, table[k]);
    }
    for (int order = 1; order < 8; order++)
        for (int k = 7; k >= order; k--)
            for (int i = 0; i < 4; i++)
                table[k][i] = (table[k][i] - table[k - 1][i]) / (node[k] - node[k - order]);
    for (int order = 0; order < 8; order++) {
        for (int m = 0; m <= order; m++)
            for (int i = 0; i < 4; i++)
                series[m][i] += table[order][i] * poly[m];
        for (int m = 7; m > 0; m--)
            poly[m] = poly[m - 1] - node[order] * poly[m];
        poly[0] *= -node[order];
    }
}

static inline double adc(double y)
{
    const double magic = 6755399441055744.0, lsb = 80.0 / 4096;
    double c = (y * (1 / lsb) + magic) - magic;
    c = c < -2048 ? -2048 : c;
    c = c > 2047 ? 2047 : c;
    return c * lsb;
}

static double axis_plain(long n)
{
    double x[4] = {0}, state[2] = {0}, held = 0;
    for (long k = 0; k < n; k++) {
        double wanted = k / AXIS_HALF % 2 ? -AXIS_REF : AXIS_REF, t[4];
        double u = control(state, wanted, adc(x[1])), du = u - held;
        for (int i = 0; i < 4; i++)
            t[i] = gamma_whole[i] * held + (phi[i][0] * x[0] + phi[i][1] * x[1]) +
                   (phi[i][2] * x[2] + phi[i][3] * x[3]) + gamma_rest[i] * du;
        memcpy(x, t, sizeof t);
        held = u;
    }
    return x[1];
}

// A generator of random numbers as one would write it for the one loop (D. Blackman, S. Vigna,
// "Scrambled linear pseudorandom number generators", 2018: xoshiro256+).
static inline double plain_uniform(uint64_t s[4])
{
    uint64_t r = s[0] + s[3], t = s[1] << 17;
    s[2] ^= s[0];
    s[3] ^= s[1];
    s[1] ^= s[2];
    s[0] ^= s[3];
    s[2] ^= t;
    s[3] = s[3] << 45 | s[3] >> 19;
    return (double)(r >> 11) * 0x1p-53;
}

static double jitter_plain(long n)
{
    double x[4] = {0}, state[2] = {0}, held = 0;
    uint64_t s[4] = {1, 2, 3, 4};
    for (long k = 0; k < n; k++) {
        double wanted = k / AXIS_HALF % 2 ? -AXIS_REF : AXIS_REF, t[4];
        double u = control(state, wanted, adc(x[1])), du = u - held;
        double rest = 1 - (EARLY + (LATE - EARLY) * plain_uniform(s)), z = 2 * rest - 1;
        for (int i = 0; i < 4; i++) {
            double g = series[7][i];
            for (int m = 6; m >= 0; m--)
                g = g * z + series[m][i];
            t[i] = gamma_whole[i] * held + (phi[i][0] * x[0] + phi[i][1] * x[1]) +
                   (phi[i][2] * x[2] + phi[i][3] * x[3]) + g * du;
        }
        memcpy(x, t, sizeof t);
        held = u;
    }
    return x[1];
}

// ---- the engine

static int axis_step(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out)
{
    (void)param;
    (void)time;
    out[0] = control(state, in[0], in[1]);
    return 0;
}

static lw_law *axis_law(void)
{
    static const char *const in[] = {"wanted", "measured"}, *const out[] = {"out"},
                             *const states[] = {"filtered", "integral"};
    lw_law_def def = {.kind = "filtered pi",
                      .n_in = 2,
                      .n_out = 1,
                      .n_state = 2,
                      .in_names = in,
                      .out_names = out,
                      .state_names = states,
                      .step = axis_step};
    lw_law *law = NULL;
    OK(lw_law_new(&def, &law, e));
    return law;
}

// Replace the constant wanted value by a square wave.
static lw_frozen *with_square_wave(simple_loop *s, double level, lw_tick half)
{
    lw_rig *rig = NULL;
    const char *of = "plant.y";
    OK(lw_rig_new("bench", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "plant", s->plant, e));
    lw_source_def wanted = lw_source_default(LW_SOURCE_PULSES);
    wanted.name = "wanted";
    wanted.before = -level;
    wanted.level = level;
    wanted.period = lw_period_of_ticks(2 * half);
    wanted.width = lw_tick_seconds(half);
    OK(lw_rig_add_source(rig, &wanted, e));
    lw_adc_def adc_def = lw_adc_default();
    adc_def.name = "adc";
    adc_def.of = &of;
    adc_def.every = lw_period_of_ticks(s->period);
    adc_def.quantiser = s->adc;
    OK(lw_rig_add_adc(rig, &adc_def, e));
    lw_dac_def dac = lw_dac_default();
    dac.name = "dac";
    dac.to = "plant.in";
    OK(lw_rig_add_dac(rig, &dac, e));
    lw_wire in[2] = {{"wanted", "wanted", 0}, {"measured", "adc", 0}}, out = {"out", "dac", 0};
    lw_loop_def loop = lw_loop_default();
    loop.name = "loop";
    loop.law = s->law;
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency = s->latency;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_plant_free(s->plant);
    lw_law_free(s->law);
    return freeze_rig(rig, NULL, LW_TICKS_PER_SECOND);
}

static lw_frozen *coil, *axis, *jittered;

static double engine(lw_frozen *frozen, lw_tick period, long n)
{
    lw_run *run = NULL;
    lw_signal y;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    OK(lw_frozen_signal(frozen, "plant.y", &y, e));
    lw_run_advance(run, n * period - 1);
    lw_run_advance(run, n * period);
    double end = lw_run_read(run, 0, y);
    lw_run_free(run);
    return end;
}

static double coil_engine(long n)
{
    return engine(coil, 100 * US, n);
}

static double axis_engine(long n)
{
    return engine(axis, 50 * US, n);
}

static double jitter_engine(long n)
{
    return engine(jittered, 50 * US, n);
}

static void build(void)
{
    static const char *const y[] = {"y"};
    static const lw_latency_entry one = {1, 1, LW_FATE_WRITTEN},
                                  part = {LATENCY, 1, LW_FATE_WRITTEN};
    double zero = 0, gain = 1 / COIL_L, unit = 1, c[4] = {0, 1, 0, 0};
    lw_timing *timing = NULL;
    simple_loop s = simple_default();
    OK(lw_plant_state_space(1, 1, 1, &zero, &gain, &unit, NULL, NULL, NULL, NULL, y, &s.plant, e));
    s.law = p_law(COIL_KP);
    s.latency.n_list = 1;
    s.latency.list = &one;
    coil = with_square_wave(&s, COIL_REF, COIL_HALF * 100 * US);
    OK(lw_timing_uniform(EARLY * AXIS_T, LATE * AXIS_T, &timing, e));
    for (int k = 0; k < 2; k++) {
        s = simple_default();
        OK(lw_plant_state_space(4, 1, 1, axis_a, axis_b, c, NULL, NULL, NULL, NULL, y, &s.plant,
                                e));
        s.law = axis_law();
        s.period = 50 * US;
        s.adc = (lw_quantiser){12, -40, 40, LW_ROUND_NEAREST};
        s.latency.n_list = k == 0;
        s.latency.list = &part;
        s.latency.timing = k == 0 ? NULL : timing;
        *(k == 0 ? &axis : &jittered) = with_square_wave(&s, AXIS_REF, AXIS_HALF * 50 * US);
    }
    lw_timing_free(timing);
    transition(AXIS_T, phi, gamma_whole);
    transition(AXIS_T * (1 - LATENCY), NULL, gamma_rest);
    fit_series();
}

int main(void)
{
    build();
    bench_pair("W1", 1000000, coil_engine, coil_plain);
    bench_pair("W2", 1000000, axis_engine, axis_plain);
    bench_pair("W3", 1000000, jitter_engine, jitter_plain);
    lw_frozen_free(coil);
    lw_frozen_free(axis);
    lw_frozen_free(jittered);
    return 0;
}
