// Pulse-width modulated outputs against closed forms: edges where they should be, the exact current
// of a winding between them, means and ripples.

#include "loops.h"

#include <latewood/pwm.h>

#define PERIOD (50 * US) // 20 kHz
#define R 0.8
#define IND 2e-3
#define SUPPLY 24.0

typedef struct rig_of {
    lw_pwm_def pwm;
    double written;   // by a loop that writes a constant at each valley; NAN: none
    lw_tick write_at; // after the valley
} rig_of;

static rig_of usual(double share)
{
    rig_of r = {.pwm = lw_pwm_default(), .written = (double)NAN};
    r.pwm.name = "bridge";
    r.pwm.to = "coil.voltage";
    r.pwm.carrier = lw_period_of_ticks(PERIOD);
    r.pwm.supply = SUPPLY;
    r.pwm.start = share;
    return r;
}

static lw_rig *build(const rig_of *r)
{
    lw_rig *rig = NULL;
    lw_plant *coil = NULL;
    OK(lw_rig_new("pwm", &rig, e));
    OK(lw_plant_winding(R, IND, &coil, e));
    OK(lw_rig_add_plant(rig, NULL, "coil", coil, e));
    lw_plant_free(coil);
    OK(lw_rig_add_pwm(rig, &r->pwm, e));
    if (isnan(r->written))
        return rig;
    static const char *of = "coil.current";
    lw_adc_def adc = lw_adc_default();
    adc.name = "adc";
    adc.of = &of;
    adc.every = r->pwm.carrier;
    OK(lw_rig_add_adc(rig, &adc, e));
    lw_law *law = NULL;
    lw_pid pid = lw_pid_default();
    pid.kp = 1;
    OK(lw_law_pid("p", &pid, &law, e));
    lw_wire in[2] = {{"wanted", NULL, r->written}, {"measured", NULL, 0}};
    lw_wire out = {"out", "bridge", 0};
    lw_latency_entry late = {lw_tick_seconds(r->write_at), 0, LW_FATE_WRITTEN};
    lw_loop_def loop = lw_loop_default();
    loop.name = "loop";
    loop.law = law;
    loop.on = "adc";
    loop.n_inputs = 2;
    loop.inputs = in;
    loop.n_outputs = 1;
    loop.outputs = &out;
    loop.latency.n_list = 1;
    loop.latency.list = &late;
    OK(lw_rig_add_loop(rig, &loop, e));
    lw_law_free(law);
    return rig;
}

static void sampled(const rig_of *r, const char *signal, lw_tick every, int n, double *out)
{
    lw_frozen *frozen = freeze_rig(build(r), NULL, 100 * MS);
    sample_run(frozen, signal, every, n, out);
    lw_frozen_free(frozen);
}

static double metric_of(const rig_of *r, lw_metric_kind kind, const char *of, lw_tick from,
                        lw_tick until)
{
    lw_watch *watch = NULL;
    lw_run *run = NULL;
    OK(lw_watch_new(&watch, e));
    lw_metric_def m = lw_metric_default(kind);
    m.name = "m";
    m.of = of;
    m.from = from;
    m.until = until;
    OK(lw_watch_metric(watch, &m, e));
    lw_frozen *frozen = freeze_rig(build(r), watch, until);
    lw_watch_free(watch);
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, until), LW_OK);
    lw_run_finish(run);
    double value = lw_run_metric(run, 0, 0);
    lw_run_free(run);
    lw_frozen_free(frozen);
    return value;
}

// The current after `t` seconds at `v` volts.
static double on(double i, double v, double t)
{
    return v / R + (i - v / R) * exp(-R / IND * t);
}

// ---- exact between the edges

static double high_until(double share)
{
    return (double)llround(share * PERIOD) * 1e-12;
}

START_TEST(a_sawtooth_gives_the_exact_current)
{
    static const double shares[] = {0.1, 0.37, 0.5, 0.73, 0.98};
    for (int shape = LW_PWM_TRAILING; shape <= LW_PWM_LEADING; shape++)
        for (int s = 0; s < 5; s++) {
            rig_of r = usual(shares[s]);
            r.pwm.shape = (lw_pwm_shape)shape;
            double got[41], i = 0, h = high_until(shares[s]), t = lw_tick_seconds(PERIOD);
            sampled(&r, "coil.current", PERIOD, 41, got);
            for (int k = 0; k < 41; k++) {
                ck_near(got[k], i, 1e-12, 1); // of the scale of the current
                i = shape == LW_PWM_TRAILING ? on(on(i, SUPPLY, h), 0, t - h)
                                             : on(on(i, 0, t - h), SUPPLY, h);
            }
        }
}
END_TEST

START_TEST(a_triangle_gives_the_exact_current)
{
    for (double share = 0.1; share < 1; share += 0.2) {
        rig_of r = usual(share);
        r.pwm.shape = LW_PWM_CENTRE;
        double got[81], i = 0, half = lw_tick_seconds(PERIOD / 2);
        double h = (double)llround(share * (PERIOD / 2)) * 1e-12;
        sampled(&r, "coil.current", PERIOD / 2, 81, got);
        for (int k = 0; k < 81; k++) {
            ck_near(got[k], i, 1e-12, 1);
            i = k % 2 == 0 ? on(on(i, SUPPLY, h), 0, half - h) : on(on(i, 0, half - h), SUPPLY, h);
        }
    }
}
END_TEST

// A period that is no whole number of ticks: edges and valleys at their rounded instants.
START_TEST(a_fractional_carrier_is_exact_at_its_rounded_edges)
{
    rig_of r = usual(0.4);
    r.pwm.carrier = (lw_period){INT64_C(1000000000000), 30000}; // 30 kHz
    double i = 0, got[200];
    lw_frozen *frozen = freeze_rig(build(&r), NULL, 100 * MS);
    lw_run *run = NULL;
    lw_signal at;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    OK(lw_frozen_signal(frozen, "coil.current", &at, e));
    for (int k = 0; k < 200; k++) {
        lw_tick a = lw_period_at(r.pwm.carrier, 0, k), b = lw_period_at(r.pwm.carrier, 0, k + 1);
        ck_assert_int_eq(lw_run_advance(run, a), LW_OK);
        got[k] = lw_run_read(run, 0, at);
        ck_near(got[k], i, 1e-12, 1);
        double h = floor(0.4 * (double)(b - a) + 0.5) * 1e-12;
        i = on(on(i, SUPPLY, h), 0, lw_tick_seconds(b - a) - h);
    }
    lw_run_free(run);
    lw_frozen_free(frozen);
}
END_TEST

START_TEST(bipolar_and_unipolar_bridges_give_the_exact_current)
{
    double m = 0.3, t = lw_tick_seconds(PERIOD), half = t / 2;
    rig_of r = usual(m);
    r.pwm.bridge = LW_PWM_BIPOLAR;
    double got[41], i = 0, h = high_until(0.65);
    sampled(&r, "coil.current", PERIOD, 41, got);
    for (int k = 0; k < 41; k++) {
        ck_near(got[k], i, 1e-12, 1);
        i = on(on(i, SUPPLY, h), -SUPPLY, t - h);
    }
    // legs are high for 0.65 and 0.35 of each half: the level is 0, then the supply between them
    r.pwm.bridge = LW_PWM_UNIPOLAR;
    r.pwm.shape = LW_PWM_CENTRE;
    sampled(&r, "coil.current", PERIOD / 2, 41, got);
    i = 0;
    double a = 0.35 * half, b = 0.65 * half;
    for (int k = 0; k < 41; k++) {
        ck_near(got[k], i, 1e-12, 1);
        double first = k % 2 == 0 ? a : half - b, last = k % 2 == 0 ? half - b : a;
        i = on(on(on(i, 0, first), SUPPLY, b - a), 0, last);
    }
}
END_TEST

// ---- means and ripples

// Common practice, no source: the mean is d V; the ripple of an inductor's current V d (1 - d) T /
// L (resistance small: its time constant is 50 periods here); unipolar switching doubles its
// frequency.
START_TEST(means_and_ripples_are_those_of_the_trade)
{
    lw_tick from = 1500 * PERIOD, until = 1520 * PERIOD;
    double t = lw_tick_seconds(PERIOD);
    for (double d = 0.2; d < 0.9; d += 0.3) {
        rig_of r = usual(d);
        ck_near(metric_of(&r, LW_METRIC_MEAN, "coil.current", from, until), d * SUPPLY / R, 1e-9,
                0);
        ck_near(metric_of(&r, LW_METRIC_RIPPLE, "coil.current", from, until),
                SUPPLY * d * (1 - d) * t / IND, 1e-3, 0);
        ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until), d * SUPPLY, 1e-9, 0);
    }
    rig_of b = usual(0.5), u = usual(0.5);
    b.pwm.shape = u.pwm.shape = LW_PWM_CENTRE;
    b.pwm.bridge = LW_PWM_BIPOLAR;
    u.pwm.bridge = LW_PWM_UNIPOLAR;
    ck_near(metric_of(&b, LW_METRIC_VARIATION, "bridge.level", from, until), 40 * 2 * SUPPLY, 1e-9,
            0);
    ck_near(metric_of(&u, LW_METRIC_VARIATION, "bridge.level", from, until), 80 * SUPPLY, 1e-9, 0);
    double bipolar = metric_of(&b, LW_METRIC_RIPPLE, "coil.current", from, until);
    double unipolar = metric_of(&u, LW_METRIC_RIPPLE, "coil.current", from, until);
    ck_near(bipolar / unipolar, 3, 1e-2, 0); // 2 V (1 - m^2) / 4 against V m (1 - m) / 2
}
END_TEST

// Common practice, no source: at the valley and at the peak of a triangle the sample is the mean of
// the ripple; here its middle, to the curvature of the exponential.
START_TEST(samples_at_valley_and_peak_read_the_mean_of_the_ripple)
{
    rig_of r = usual(0.3);
    r.pwm.shape = LW_PWM_CENTRE;
    double got[3002];
    sampled(&r, "coil.current", PERIOD / 2, 3002, got);
    double mean = 0.3 * SUPPLY / R, ripple = SUPPLY * 0.3 * 0.7 * lw_tick_seconds(PERIOD) / IND;
    ck_assert(fabs(got[3000] - mean) < 0.01 * ripple && fabs(got[3001] - mean) < 0.01 * ripple);
    r.pwm.shape = LW_PWM_TRAILING; // the start of a sawtooth's pulse is the least of the ripple
    sampled(&r, "coil.current", PERIOD / 2, 3002, got);
    ck_assert(fabs(got[3000] - (mean - ripple / 2)) < 0.02 * ripple);
}
END_TEST

START_TEST(averaged_and_switched_agree_as_the_carrier_rises)
{
    double before = 0;
    for (int k = 0; k < 4; k++) {
        rig_of r = usual(0.3);
        double got[2][3];
        r.pwm.carrier = lw_period_of_ticks(PERIOD >> k);
        sampled(&r, "coil.current", MS, 3, got[0]);
        r.pwm.averaged = 1;
        sampled(&r, "coil.current", MS, 3, got[1]);
        double apart = fabs(got[0][2] - got[1][2]);
        ck_assert(apart > 0);
        if (k > 0)
            ck_near(before / apart, 2, 0.05, 0); // with the period
        before = apart;
    }
}
END_TEST

// ---- reloads

static int levels(const rig_of *r, int n, double *out)
{
    sampled(r, "bridge.level", PERIOD / 8, n, out);
    return n;
}

START_TEST(a_value_is_taken_over_where_the_carrier_reloads)
{
    static const struct {
        lw_pwm_reload reload;
        int first; // eighth of a period at which the averaged level changes
    } cases[] = {{LW_PWM_VALLEY, 8}, {LW_PWM_PEAK, 4}, {LW_PWM_BOTH, 4}, {LW_PWM_AT_ONCE, 1}};
    for (int c = 0; c < 4; c++) {
        rig_of r = usual(0.25);
        r.pwm.shape = LW_PWM_CENTRE;
        r.pwm.averaged = 1;
        r.pwm.reload = cases[c].reload;
        r.written = 0.75;
        r.write_at = 6 * US; // just before the first eighth
        double got[16];
        levels(&r, 16, got);
        for (int k = 0; k < 16; k++)
            ck_near(got[k], k < cases[c].first ? 6 : 18, 1e-12, 1);
    }
}
END_TEST

// A value finished at the very edge makes it.
START_TEST(a_value_written_at_the_reload_makes_it)
{
    rig_of r = usual(0.25);
    r.pwm.averaged = 1;
    r.written = 0.75;
    r.write_at = PERIOD;
    double got[17];
    levels(&r, 17, got);
    ck_near(got[7], 6, 1e-12, 1);
    ck_near(got[8], 18, 1e-12, 1);
}
END_TEST

// Within one stretch a leg switches once: written low after its rise it falls now, written high
// after its fall it stays low until the next period.
START_TEST(values_that_act_at_once_switch_once)
{
    rig_of r = usual(0.8);
    r.pwm.reload = LW_PWM_AT_ONCE;
    r.written = 0.1;
    r.write_at = 25 * US; // high until 40 us; 0.1 has passed at 5 us: falls at once
    double got[16];
    levels(&r, 16, got);
    for (int k = 0; k < 8; k++)
        ck_near(got[k], k < 4 ? SUPPLY : 0, 0, 1);
    r.pwm.start = 0.1;
    r.written = 0.8; // low since 5 us: it stays so, and the next period has 0.8
    levels(&r, 16, got);
    for (int k = 0; k < 16; k++)
        ck_near(got[k], k == 0 || (k >= 8 && k < 8 + 7) ? SUPPLY : 0, 0, 1);
}
END_TEST

// ---- the timer's steps, short pulses, dead time

START_TEST(pulses_have_the_steps_of_the_timer)
{
    rig_of r = usual(0.123);
    r.pwm.counts = 100;
    lw_tick from = 100 * PERIOD, until = 110 * PERIOD;
    ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until), 0.12 * SUPPLY, 1e-9, 0);
    r.pwm.start = 0.125; // ties to even
    ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until), 0.12 * SUPPLY, 1e-9, 0);
    r.pwm.counts = 0;
    r.pwm.start = 0.01;
    r.pwm.least_pulse = 1e-6; // 0.5 us is shorter
    ck_assert(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until) == 0);
    r.pwm.start = 0.99;
    ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until), SUPPLY, 1e-12, 0);
    r.pwm.start = 0.03;
    ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until), 0.03 * SUPPLY, 1e-9, 0);
}
END_TEST

// Common practice, no source: each dead time takes V td / T from the mean where the current flows
// out of the leg all the time, and gives as much where it flows in.
START_TEST(dead_time_takes_its_share)
{
    double td = 1e-6, t = lw_tick_seconds(PERIOD);
    lw_tick from = 1000 * PERIOD, until = 1010 * PERIOD;
    for (int averaged = 0; averaged < 2; averaged++)
        for (int shape = 0; shape < 3; shape++) {
            rig_of r = usual(0.5);
            r.pwm.averaged = averaged;
            r.pwm.shape = (lw_pwm_shape)shape;
            r.pwm.dead_time = td;
            r.pwm.current = "coil.current";
            ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until),
                    SUPPLY * (0.5 - td / t), 1e-7, 0);
            r.pwm.bridge = LW_PWM_BIPOLAR;
            r.pwm.start = -0.5;
            ck_near(metric_of(&r, LW_METRIC_MEAN, "bridge.level", from, until),
                    SUPPLY * (-0.5 + 2 * td / t), 1e-7, 0);
        }
}
END_TEST

// ---- blocks, watching, bad definitions

static void same_bytes_side_by_side(const rig_of *r)
{
    lw_frozen *z = freeze_rig(build(r), NULL, 10 * MS);
    lw_run *wide = NULL, *alone = NULL;
    OK(lw_run_new(z, 5, 1, 0, &wide, e));
    OK(lw_run_new(z, 1, 1, 0, &alone, e));
    ck_assert_int_eq(lw_run_advance(wide, 7 * MS), LW_OK);
    for (lw_tick t = 0; t <= 7 * MS; t += 777777)
        ck_assert_int_eq(lw_run_advance(alone, t), LW_OK);
    ck_assert_int_eq(lw_run_advance(alone, 7 * MS), LW_OK);
    unsigned char *lane = malloc(lw_run_lane_size(wide));
    for (int k = 0; k < 5; k++) {
        lw_run_lane(wide, k, lane);
        ck_assert(memcmp(lane, lw_run_block(alone), lw_run_lane_size(wide)) == 0);
    }
    free(lane);
    lw_run_free(wide);
    lw_run_free(alone);
    lw_frozen_free(z);
}

START_TEST(runs_side_by_side_are_runs_alone)
{
    rig_of r = usual(0.4);
    r.pwm.shape = LW_PWM_CENTRE;
    r.pwm.bridge = LW_PWM_UNIPOLAR;
    r.pwm.dead_time = 1e-6;
    r.pwm.current = "coil.current";
    r.written = 0.2;
    r.write_at = 20 * US;
    same_bytes_side_by_side(&r);
    r = usual(0);
    r.pwm.peak = (lw_pwm_peak){"coil.current", NULL, 12, 3e-7, 4e3, 0.9};
    same_bytes_side_by_side(&r);
}
END_TEST

// What is recorded and measured changes no other cell: the search for peaks comes after each
// change of the group, told or not.
START_TEST(watching_a_peak_changes_nothing)
{
    rig_of r = usual(0);
    r.pwm.peak = (lw_pwm_peak){"coil.current", NULL, 12, 3e-7, 4e3, 0.9};
    lw_tick from = 2 * MS, until = 5 * MS;
    double bare[2], got[2];
    sampled(&r, "coil.current", until, 2, bare);
    ck_assert(metric_of(&r, LW_METRIC_MEAN, "bridge.duty", from, until) > 0);
    sampled(&r, "coil.current", until, 2, got);
    ck_assert(memcmp(bare, got, sizeof got) == 0);
    double fine[501]; // read at many instants in between
    sampled(&r, "coil.current", until / 500, 501, fine);
    ck_assert(fine[500] == bare[1]);
}
END_TEST

static void refused(const lw_pwm_def *def, const char *text)
{
    lw_rig *rig = NULL;
    lw_error err;
    OK(lw_rig_new("bad", &rig, e));
    ck_assert(lw_rig_add_pwm(rig, def, &err) < 0);
    ck_assert_str_eq(err.text, text);
    lw_rig_free(rig);
}

START_TEST(bad_definitions_are_named)
{
    lw_pwm_def d = usual(0).pwm;
    d.reload = LW_PWM_PEAK;
    refused(&d, "pwm \"bridge\": reload: a sawtooth has no peak to reload at; \"valley\" or "
                "\"at once\"");
    d = usual(0).pwm;
    d.supply = -1;
    refused(&d, "pwm \"bridge\": supply is -1; above 0 is wanted");
    d = usual(0).pwm;
    d.dead_time = 1e-6;
    refused(&d,
            "pwm \"bridge\": dead_time: current is missing; its sign says which diode conducts");
    d.dead_time = 20e-6;
    d.current = "coil.current";
    refused(&d, "pwm \"bridge\": dead_time is 2e-05; at most a quarter of a period");
    d = usual(0).pwm;
    d.carrier.num = 0;
    refused(&d, "pwm \"bridge\": carrier is missing or below one tick of 1 ps");
    d = usual(0).pwm;
    d.offset = 1;
    refused(&d, "pwm \"bridge\": offset is 1; below one period of the carrier is wanted");
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("pwm");
    TCase *c = tcase_create("pwm");
    tcase_add_test(c, a_sawtooth_gives_the_exact_current);
    tcase_add_test(c, a_triangle_gives_the_exact_current);
    tcase_add_test(c, a_fractional_carrier_is_exact_at_its_rounded_edges);
    tcase_add_test(c, bipolar_and_unipolar_bridges_give_the_exact_current);
    tcase_add_test(c, means_and_ripples_are_those_of_the_trade);
    tcase_add_test(c, samples_at_valley_and_peak_read_the_mean_of_the_ripple);
    tcase_add_test(c, averaged_and_switched_agree_as_the_carrier_rises);
    tcase_add_test(c, a_value_is_taken_over_where_the_carrier_reloads);
    tcase_add_test(c, a_value_written_at_the_reload_makes_it);
    tcase_add_test(c, values_that_act_at_once_switch_once);
    tcase_add_test(c, pulses_have_the_steps_of_the_timer);
    tcase_add_test(c, dead_time_takes_its_share);
    tcase_add_test(c, runs_side_by_side_are_runs_alone);
    tcase_add_test(c, watching_a_peak_changes_nothing);
    tcase_add_test(c, bad_definitions_are_named);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
