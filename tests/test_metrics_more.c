// Further metrics of the continuous signal: turns, masks, criteria, gaps and ages, against closed
// forms and published coefficients.

#include "loops.h"

#include <latewood/quantity.h>

// One metric of the step response of a plant "plant" with input "in" and output "out".
static double step_metric(lw_plant *plant, lw_metric_def m, lw_tick lasts)
{
    lw_rig *rig = NULL;
    lw_watch *watch = NULL;
    lw_run *run = NULL;
    OK(lw_rig_new("open", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "plant", plant, e));
    lw_plant_free(plant);
    lw_source_def step = lw_source_default(LW_SOURCE_STEP);
    step.name = "step";
    step.level = 1;
    OK(lw_rig_add_source(rig, &step, e));
    OK(lw_rig_connect(rig, NULL, "step", "plant.in", e));
    OK(lw_watch_new(&watch, e));
    m.name = "m";
    m.of = "plant.out";
    m.level = isnan(m.level) ? 1 : m.level;
    OK(lw_watch_metric(watch, &m, e));
    lw_frozen *frozen = freeze_rig(rig, watch, lasts);
    lw_watch_free(watch); // the frozen rig has all it needs
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, lasts), LW_OK);
    lw_run_finish(run);
    double value = lw_run_metric(run, 0, 0);
    lw_run_free(run);
    lw_frozen_free(frozen);
    return value;
}

static double of_kind(lw_plant *plant, lw_metric_kind kind, lw_tick lasts)
{
    return step_metric(plant, lw_metric_default(kind), lasts);
}

static lw_plant *first(double time_constant)
{
    lw_plant *plant = NULL;
    OK(lw_plant_first_order(1, time_constant, &plant, e));
    return plant;
}

static lw_plant *second(double damping)
{
    lw_plant *plant = NULL;
    OK(lw_plant_second_order(1, 1000, damping, &plant, e));
    return plant;
}

// num / (s^n + a[0] s^(n-1) + ...), n coefficients
static lw_plant *transfer(int n_num, const double *num, int n, const double *a)
{
    double den[8] = {1};
    lw_plant *plant = NULL;
    memcpy(den + 1, a, sizeof(double) * (size_t)n);
    lw_poly top = {n_num, num}, bottom = {n + 1, den};
    OK(lw_plant_transfer(1, 1, &top, &bottom, NULL, NULL, &plant, e));
    return plant;
}

// ---- integral criteria

START_TEST(time_weighted_squared_error_of_a_first_order_step)
{
    // M-14, from memory: e = exp(-t/T): ITSE T^2 / 4; with T = 2: IAE 2, ITAE 4, ISE 1, ITSE 1
    ck_near(of_kind(first(0.002), LW_METRIC_ITSE, 120 * MS), 1e-6, 1e-12, 0);
    ck_near(of_kind(first(2), LW_METRIC_ITSE, 120000 * MS), 1, 1e-11, 0);
    ck_near(of_kind(first(2), LW_METRIC_IAE, 120000 * MS), 2, 1e-11, 0);
    ck_near(of_kind(first(2), LW_METRIC_ITAE, 120000 * MS), 4, 1e-11, 0);
    ck_near(of_kind(first(2), LW_METRIC_ISE, 120000 * MS), 1, 1e-11, 0);
}
END_TEST

// M-15: D. Graham, R. C. Lathrop, AIEE Trans. 72 II (1953) 273-288, standard forms (list read),
// with the values of the criterion recomputed; and forms found again by digital optimisation (Y.
// Cao, coefficients from memory). The standard forms are not optimal.
START_TEST(standard_forms_have_the_known_time_weighted_error)
{
    static const struct {
        int n;
        double a[6], itae;
    } forms[] = {{2, {1.4, 1}, 1.98963},
                 {2, {1.505, 1}, 1.95186},
                 {3, {1.75, 2.15, 1}, 3.14324},
                 {4, {2.1, 3.4, 2.7, 1}, 4.62627},
                 {5, {2.8, 5.0, 5.5, 3.4, 1}, 7.15438},
                 {6, {3.25, 6.60, 8.60, 7.45, 3.95, 1}, 9.56491},
                 {3, {1.783, 2.172, 1}, 3.13826},
                 {4, {1.953, 3.347, 2.648, 1}, 4.59127},
                 {5, {2.068, 4.499, 4.675, 3.257, 1}, 6.32143},
                 {6, {2.152, 5.629, 6.934, 6.792, 3.740, 1}, 8.33253}};
    int k = _i;
    static const double one = 1;
    double itae = of_kind(transfer(1, &one, forms[k].n, forms[k].a), LW_METRIC_ITAE, 100000 * MS);
    ck_near(itae, forms[k].itae, k < 8 ? 2e-5 : 2e-3, 0); // coefficients to four digits
}
END_TEST

// M-20 to M-22, from memory: G. Newton, L. Gould, J. Kaiser, Analytical Design of Linear Feedback
// Controls (1957): integral of the squared impulse response of c(s) / d(s); here of the step
// response of s c(s) / d(s), which is the same signal.
START_TEST(squared_responses_have_parsevals_integral)
{
    // c0 / (d0 + d1 s): c0^2 / (2 d0 d1)
    double d0 = 3, d1 = 2, d2 = 1.5, d3 = 1, c0 = 1.25, c1 = -0.5, c2 = 0.75;
    lw_metric_def m = lw_metric_default(LW_METRIC_EFFORT);
    double one =
        step_metric(transfer(2, (double[]){c0 / d1, 0}, 1, (double[]){d0 / d1}), m, 60000 * MS);
    ck_near(one, c0 * c0 / (2 * d0 * d1), 1e-10, 0);
    // (c0 + c1 s) / (d0 + d1 s + d2 s^2)
    double two =
        step_metric(transfer(3, (double[]){c1 / d2, c0 / d2, 0}, 2, (double[]){d1 / d2, d0 / d2}),
                    m, 100000 * MS);
    ck_near(two, (c1 * c1 * d0 + c0 * c0 * d2) / (2 * d0 * d1 * d2), 1e-10, 0);
    double three = step_metric(transfer(4, (double[]){c2 / d3, c1 / d3, c0 / d3, 0}, 3,
                                        (double[]){4 * d2 / d3, 4 * d1 / d3, d0 / d3}),
                               m, 200000 * MS);
    double e1 = 4 * d1, e2 = 4 * d2;
    ck_near(three,
            (c2 * c2 * d0 * e1 + (c1 * c1 - 2 * c0 * c2) * d0 * d3 + c0 * c0 * e2 * d3) /
                (2 * d0 * d3 * (e1 * e2 - d0 * d3)),
            1e-10, 0);
}
END_TEST

START_TEST(mean_errors_are_those_of_their_part)
{
    double t = 0.002;
    lw_metric_def m = lw_metric_default(LW_METRIC_STEADY_ERROR);
    m.last = 4 * MS; // of 20 ms
    double want = -t * (exp(-16 / 2.0) - exp(-20 / 2.0)) / 0.004;
    ck_near(step_metric(first(t), m, 20 * MS), want, 1e-10, 0);
    m.last = 0; // a tenth
    want = -t * (exp(-18 / 2.0) - exp(-20 / 2.0)) / 0.002;
    ck_near(step_metric(first(t), m, 20 * MS), want, 1e-9, 0);
    m.kind = LW_METRIC_MEAN_ERROR;
    ck_near(step_metric(first(t), m, 20 * MS), -t * (1 - exp(-10)) / 0.02, 1e-12, 0);
}
END_TEST

// ---- turns

// The k-th extreme of a second-order step response is 1 - (-q)^k with q = exp(-pi z / sqrt(1 -
// z^2)).
START_TEST(ways_and_turns_of_a_second_order_step)
{
    for (double z = 0.1; z < 0.9; z += 0.2) {
        double q = exp(-M_PI * z / sqrt(1 - z * z));
        ck_near(of_kind(second(z), LW_METRIC_VARIATION, 500 * MS), (1 + q) / (1 - q), 1e-9, 0);
        ck_near(of_kind(second(z), LW_METRIC_RIPPLE, 500 * MS), 1 + q, 1e-11, 0);
        lw_metric_def m = lw_metric_default(LW_METRIC_REVERSALS);
        m.step = 0.01;
        int turns = 0;
        for (double swing = q * (1 + q); swing > 0.01; swing *= q)
            turns++;
        ck_near(step_metric(second(z), m, 500 * MS), turns, 0, 1);
        m.kind = LW_METRIC_CHATTER;
        ck_near(step_metric(second(z), m, 500 * MS), turns / 0.5, 1e-12, 1);
    }
}
END_TEST

// (1 - a s) / (1 + s)^2 goes to 1 - (1 + a) exp(-a / (1 + a)) first.
START_TEST(a_zero_in_the_right_half_plane_undershoots)
{
    for (double a = 0.5; a < 4; a += 0.5) {
        double want = (1 + a) * exp(-a / (1 + a)) - 1;
        ck_near(of_kind(transfer(2, (double[]){-a, 1}, 2, (double[]){2, 1}), LW_METRIC_UNDERSHOOT,
                        40000 * MS),
                want, 1e-10, 0);
    }
    ck_assert(of_kind(second(0.3), LW_METRIC_UNDERSHOOT, 500 * MS) == 0);
}
END_TEST

// ---- levels in place of shares

START_TEST(bands_and_levels_may_be_values)
{
    double t = 0.002;
    lw_metric_def m = lw_metric_default(LW_METRIC_SETTLING);
    m.band_value = 0.1;
    ck_near(step_metric(first(t), m, 60 * MS), t * log(10), 1e-11, 0);
    m = lw_metric_default(LW_METRIC_RISE);
    m.low_value = 0.25;
    m.high_value = 0.75;
    ck_near(step_metric(first(t), m, 60 * MS), t * log(3), 1e-11, 0);
}
END_TEST

// ---- masks

START_TEST(masks_are_exact_between_their_corners)
{
    double t = 0.002;
    static const double time[] = {0, 0.02}, none[] = {NAN, NAN}, high[] = {0.5, 0.5};
    lw_metric_def m = lw_metric_default(LW_METRIC_MASK_VIOLATION);
    m.n_mask = 2;
    m.mask_time = time;
    m.mask_low = none;
    m.mask_high = high;
    ck_near(step_metric(first(t), m, 30 * MS), 0.5 - exp(-10), 1e-11, 0);
    m.kind = LW_METRIC_MASK_FIRST;
    ck_near(step_metric(first(t), m, 30 * MS), t * log(2), 1e-11, 0);
    m.kind = LW_METRIC_MASK_TIME; // after the last corner nothing is asked for
    ck_near(step_metric(first(t), m, 30 * MS), 0.02 - t * log(2), 1e-11, 0);
    // a sloping floor from 0 to 1 within one time constant: 1 - exp(-x) stays below x... not above,
    // so that a response above the line is inside
    static const double short_time[] = {0, 0.002}, slope[] = {0, 1};
    m.mask_time = short_time;
    m.mask_low = slope;
    m.mask_high = none;
    m.kind = LW_METRIC_MASK_VIOLATION;
    ck_near(step_metric(first(t), m, 30 * MS), exp(-1), 1e-11, 0); // at the end: 1 - (1 - 1/e)
    static const double wide[] = {-1, -1}, roof[] = {2, 2};
    m.mask_low = wide;
    m.mask_high = roof;
    ck_assert(step_metric(first(t), m, 30 * MS) == 0);
    m.kind = LW_METRIC_MASK_FIRST;
    ck_assert(isnan(step_metric(first(t), m, 30 * MS)));
}
END_TEST

// A mask of many corners around a second-order response against a fine scan: 1e-6 apart in time.
START_TEST(masks_agree_with_a_fine_scan)
{
    static const double time[] = {0, 0.002, 0.003, 0.005, 0.009},
                        low[] = {-0.1, 0.4, 0.9, 0.8, 0.95}, high[] = {0.5, 1.2, 1.4, 1.1, 1.02};
    lw_metric_def m = lw_metric_default(LW_METRIC_MASK_VIOLATION);
    m.n_mask = 5;
    m.mask_time = time;
    m.mask_low = low;
    m.mask_high = high;
    double z = 0.2, root = sqrt(1 - z * z), worst = 0, outside = 0;
    for (int k = 0; k < 9000; k++) {
        double x = 1e-6 * (k + 0.5), y = 1 - exp(-1000 * z * x) * (cos(1000 * root * x) +
                                                                   z / root * sin(1000 * root * x));
        int i = 0;
        while (x > time[i + 1])
            i++;
        double s = (x - time[i]) / (time[i + 1] - time[i]);
        double over = fmax(y - (high[i] + s * (high[i + 1] - high[i])),
                           low[i] + s * (low[i + 1] - low[i]) - y);
        worst = fmax(worst, over);
        outside += over > 0 ? 1e-6 : 0;
    }
    ck_near(step_metric(second(z), m, 20 * MS), worst, 1e-5, 0); // by the distance of the scan
    m.kind = LW_METRIC_MASK_TIME;
    ck_near(step_metric(second(z), m, 20 * MS), outside, 2e-3, 0); // ends of four stretches
}
END_TEST

// ---- gaps and ages

static double output_metric(lw_metric_kind kind, int n, const lw_latency_entry *list)
{
    simple_loop s = simple_default();
    s.plant = integrator(250);
    s.law = p_law(4);
    s.latency.n_list = n;
    s.latency.list = list;
    lw_watch *watch = NULL;
    OK(lw_watch_new(&watch, e));
    lw_metric_def m = lw_metric_default(kind);
    m.name = "m";
    m.of = "dac";
    m.from = MS; // after the first outputs
    OK(lw_watch_metric(watch, &m, e));
    lw_frozen *frozen = freeze_rig(simple_rig(&s), watch, 9 * MS);
    lw_watch_free(watch);
    lw_run *run = NULL;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, 9 * MS), LW_OK);
    lw_run_finish(run);
    double value = lw_run_metric(run, 0, 0);
    lw_run_free(run);
    lw_frozen_free(frozen);
    return value;
}

// Period 100 us. What stands at the output is as old as the latency when it comes, and a period
// more when the next one replaces it.
START_TEST(outputs_have_gaps_and_ages)
{
    static const lw_latency_entry constant = {30e-6, 0, LW_FATE_WRITTEN};
    ck_near(output_metric(LW_METRIC_GAP, 1, &constant), 100e-6, 1e-12, 0);
    ck_near(output_metric(LW_METRIC_OUTPUT_AGE, 1, &constant), 130e-6, 1e-12, 0);
    ck_near(output_metric(LW_METRIC_OUTPUT_AGE_MEAN, 1, &constant), 80e-6, 1e-12, 0);
    static const lw_latency_entry lossy[] = {{30e-6, 0, LW_FATE_WRITTEN}, {0, 0, LW_FATE_LOST}};
    ck_near(output_metric(LW_METRIC_GAP, 2, lossy), 200e-6, 1e-12, 0);
    ck_near(output_metric(LW_METRIC_OUTPUT_AGE, 2, lossy), 230e-6, 1e-12, 0);
    ck_near(output_metric(LW_METRIC_OUTPUT_AGE_MEAN, 2, lossy), 130e-6, 1e-12, 0);
    static const lw_latency_entry swinging[] = {{10e-6, 0, LW_FATE_WRITTEN},
                                                {70e-6, 0, LW_FATE_WRITTEN}};
    ck_near(output_metric(LW_METRIC_GAP, 2, swinging), 160e-6, 1e-12, 0);
    ck_near(output_metric(LW_METRIC_OUTPUT_AGE, 2, swinging), 170e-6, 1e-12, 0);
}
END_TEST

// ---- quantisation

// M-30, read in tutorials: a full-scale sine in N bits has 6.02 N + 1.76 dB over the error of
// quantisation, exactly 20 log10(2^N sqrt 1.5); M-31: the error has LSB / sqrt 12 rms.
START_TEST(quantisers_have_the_ideal_noise)
{
    for (int bits = 8; bits <= 12; bits += 4) {
        lw_quantiser q = {.bits = bits, .lo = -1, .hi = 1};
        double lsb = ldexp(2, -bits), signal = 0, noise = 0;
        for (int k = 0; k < 200000; k++) {
            double y = (1 - lsb) * sin(0.1234567 * k), d = lw_quantise(&q, y, NULL) - y;
            signal += y * y;
            noise += d * d;
        }
        ck_near(sqrt(noise / 200000), lsb / sqrt(12), 0.03, 0);
        ck_assert(fabs(10 * log10(signal / noise) - 20 * log10(ldexp(1, bits) * sqrt(1.5))) < 0.15);
        ck_assert(fabs(20 * log10(ldexp(1, bits) * sqrt(1.5)) - (bits == 8 ? 49.92 : 74.0)) <
                  0.012);
    }
}
END_TEST

// ---- bad definitions

START_TEST(masks_that_are_none_are_refused)
{
    static const double back[] = {0, 2, 1}, low[] = {0, 0, 0}, high[] = {1, -1, 1};
    lw_watch *watch = NULL;
    lw_error err;
    OK(lw_watch_new(&watch, e));
    lw_metric_def m = lw_metric_default(LW_METRIC_MASK_TIME);
    m.name = "m";
    m.of = "x";
    ck_assert(lw_watch_metric(watch, &m, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "metric \"m\": mask is missing");
    m.n_mask = 3;
    m.mask_time = back;
    m.mask_low = low;
    m.mask_high = high;
    ck_assert(lw_watch_metric(watch, &m, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "metric \"m\": mask: low is 0; at most high, and finite, is wanted");
    m.n_mask = 3;
    m.mask_high = (double[]){1, 1, 1};
    ck_assert(lw_watch_metric(watch, &m, &err) == LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "metric \"m\": mask: time is 1; times rise, from 0 on");
    m.kind = LW_METRIC_MEAN;
    ck_assert(lw_watch_metric(watch, &m, &err) == LW_ERR_ARGUMENT);
    lw_watch_free(watch);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("metrics, further");
    TCase *c = tcase_create("metrics");
    tcase_set_timeout(c, 60);
    tcase_add_test(c, time_weighted_squared_error_of_a_first_order_step);
    tcase_add_loop_test(c, standard_forms_have_the_known_time_weighted_error, 0, 10);
    tcase_add_test(c, squared_responses_have_parsevals_integral);
    tcase_add_test(c, mean_errors_are_those_of_their_part);
    tcase_add_test(c, ways_and_turns_of_a_second_order_step);
    tcase_add_test(c, a_zero_in_the_right_half_plane_undershoots);
    tcase_add_test(c, bands_and_levels_may_be_values);
    tcase_add_test(c, masks_are_exact_between_their_corners);
    tcase_add_test(c, masks_agree_with_a_fine_scan);
    tcase_add_test(c, outputs_have_gaps_and_ages);
    tcase_add_test(c, quantisers_have_the_ideal_noise);
    tcase_add_test(c, masks_that_are_none_are_refused);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
