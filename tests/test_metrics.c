// Metrics of the continuous signal against closed forms and handbook tables: step responses of
// first- and second-order plants driven open loop, where every value is known.

#include "loops.h"

#include "run/poly.h"

// ---- rigs

static lw_rig *open_loop(lw_plant *plant, double at)
{
    lw_rig *rig = NULL;
    OK(lw_rig_new("open", &rig, e));
    OK(lw_rig_add_plant(rig, NULL, "plant", plant, e));
    lw_plant_free(plant);
    lw_source_def step = lw_source_default(LW_SOURCE_STEP);
    step.name = "step";
    step.at = at;
    step.level = 1;
    OK(lw_rig_add_source(rig, &step, e));
    OK(lw_rig_connect(rig, NULL, "step", "plant.in", e));
    return rig;
}

static lw_plant *first_order(double time_constant)
{
    lw_plant *plant = NULL;
    OK(lw_plant_first_order(1, time_constant, &plant, e));
    return plant;
}

static lw_plant *second_order(double frequency, double damping)
{
    lw_plant *plant = NULL;
    OK(lw_plant_second_order(1, frequency, damping, &plant, e));
    return plant;
}

// One metric of the step response over `lasts`; the window begins with the step.
static double metric_of(lw_plant *plant, lw_metric_def m, double at, lw_tick lasts)
{
    lw_rig *rig = open_loop(plant, at);
    lw_watch *watch = NULL;
    lw_frozen *frozen = NULL;
    lw_run *run = NULL;
    OK(lw_watch_new(&watch, e));
    m.name = "m";
    m.of = "plant.out";
    if (m.against == NULL && isnan(m.level))
        m.level = 1;
    OK(lw_tick_from_seconds(at, &m.from) == LW_OK ? lw_watch_metric(watch, &m, e) : LW_ERR_TIME);
    OK(lw_rig_freeze(rig, watch, lasts, &frozen, e));
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, lasts), LW_OK);
    lw_run_finish(run);
    double value = lw_run_metric(run, 0, 0);
    lw_run_free(run);
    lw_frozen_free(frozen);
    lw_watch_free(watch);
    lw_rig_free(rig);
    return value;
}

static double of_first(lw_metric_kind kind)
{
    // 60 time constants: exp(-60) is below the tolerance
    return metric_of(first_order(0.002), lw_metric_default(kind), 0, 120 * MS);
}

static double of_second(lw_metric_kind kind, double damping)
{
    return metric_of(second_order(1000, damping), lw_metric_default(kind), 0, 400 * MS);
}

// ---- first order

START_TEST(first_order_rise_and_settling)
{
    // M-04, from memory: ln 9, ln 50, ln 20 time constants
    ck_near(of_first(LW_METRIC_RISE), 0.002 * log(9), 1e-12, 0);
    ck_near(of_first(LW_METRIC_SETTLING), 0.002 * log(50), 1e-12, 0);
    lw_metric_def m = lw_metric_default(LW_METRIC_SETTLING);
    m.band = 0.05;
    ck_near(metric_of(first_order(0.002), m, 0, 120 * MS), 0.002 * log(20), 1e-12, 0);
}
END_TEST

START_TEST(first_order_integrals_of_the_error)
{
    double t = 0.002;
    // M-14, from memory: e = exp(-t/T): IAE T, ITAE T^2, ISE T/2
    ck_near(of_first(LW_METRIC_IAE), t, 1e-12, 0);
    ck_near(of_first(LW_METRIC_ITAE), t * t, 1e-12, 0);
    ck_near(of_first(LW_METRIC_ISE), t / 2, 1e-12, 0);
    // mean and rms over 60 T: 1 - 1/60, sqrt(1 - 2/60 + 1/120)
    ck_near(of_first(LW_METRIC_MEAN), 1 - 1 / 60.0, 1e-12, 0);
    ck_near(of_first(LW_METRIC_RMS), sqrt(1 - 2 / 60.0 + 1 / 120.0), 1e-12, 0);
    ck_near(of_first(LW_METRIC_FINAL), 1, 1e-15, 0);
    ck_near(of_first(LW_METRIC_ERROR_PEAK), 1, 1e-15, 0);
    ck_near(of_first(LW_METRIC_ERROR_RMS), sqrt(1 / 120.0), 1e-12, 0);
    ck_assert(of_first(LW_METRIC_OVERSHOOT) == 0);
}
END_TEST

// ---- second order

static const struct {
    double damping, overshoot, rise;
} table[] = {
    // M-01: overshoot in percent, formula read in a source, values from memory;
    // M-03: N. Nise, Control Systems Engineering, normalised 10-90 % rise time
    {0.1, 72.9, 1.104}, {0.2, 52.7, 1.203}, {0.3, 37.2, 1.321},
    {0.4, 25.4, 1.463}, {0.5, 16.3, 1.638}, {0.6, 9.48, 1.854},
    {0.7, 4.60, 2.126}, {0.8, 1.52, 2.467}, {0.9, 0.15, 2.883},
};

START_TEST(second_order_overshoot_and_rise_table)
{
    double z = table[_i].damping, root = sqrt(1 - z * z);
    double overshoot = of_second(LW_METRIC_OVERSHOOT, z);
    ck_near(overshoot, exp(-M_PI * z / root), 1e-11, 0.01); // closed form
    ck_near(100 * overshoot, table[_i].overshoot, 1, 0.05); // half a unit of the printed digits
    ck_near(of_second(LW_METRIC_PEAK_TIME, z), M_PI / (1000 * root), 1e-7, 0); // flat top
    ck_near(of_second(LW_METRIC_PEAK, z), 1 + exp(-M_PI * z / root), 1e-12, 0);
    ck_assert(fabs(1000 * of_second(LW_METRIC_RISE, z) - table[_i].rise) < 1e-3);
}
END_TEST

START_TEST(second_order_damping_of_small_overshoots)
{
    // M-06, from memory: 2 % at 0.7797, 5 % at 0.6901; 5e-5 of damping are 2.1e-5 of overshoot
    ck_assert(fabs(of_second(LW_METRIC_OVERSHOOT, 0.7797) - 0.02) < 2.1e-5);
    ck_assert(fabs(of_second(LW_METRIC_OVERSHOOT, 0.6901) - 0.05) < 2.1e-5);
    ck_assert(fabs(of_second(LW_METRIC_OVERSHOOT, 0.70) - 0.05) > 1e-3); // the twin
}
END_TEST

START_TEST(second_order_settling)
{
    // M-05, derived: exact 2 % settling, normalised
    static const double want[][2] = {{0.2, 19.6019}, {0.4, 8.4093}, {0.6, 5.9430}, {0.7, 5.9788}};
    for (int k = 0; k < 4; k++)
        ck_assert(fabs(1000 * of_second(LW_METRIC_SETTLING, want[k][0]) - want[k][1]) < 1e-4);
}
END_TEST

START_TEST(second_order_integral_criteria)
{
    for (double z = 0.2; z < 1; z += 0.2)
        // M-10, from memory: ISE of the step error is (1 + 4 z^2) / (4 z) over the frequency
        ck_near(1000 * of_second(LW_METRIC_ISE, z), (1 + 4 * z * z) / (4 * z), 1e-10, 0);
    // M-12, M-13, from memory: least IAE 1.60514 at 0.66254, least ITAE 1.95186 at 0.75244
    ck_assert(fabs(1000 * of_second(LW_METRIC_IAE, 0.66254) - 1.60514) < 1e-5);
    ck_assert(fabs(1e6 * of_second(LW_METRIC_ITAE, 0.75244) - 1.95186) < 1e-5);
}
END_TEST

// ---- windows, levels, what is hidden

START_TEST(time_counts_from_the_window)
{
    lw_metric_def m = lw_metric_default(LW_METRIC_SETTLING);
    m.against = "step";
    ck_near(metric_of(first_order(0.002), m, 0.0125, 200 * MS), 0.002 * log(50), 1e-12, 0);
    m.kind = LW_METRIC_OVERSHOOT;
    m.level = 0.5; // a level below where the signal goes
    ck_near(metric_of(first_order(0.002), m, 0.0125, 200 * MS), 1, 1e-12, 0);
}
END_TEST

START_TEST(a_response_outside_its_band_has_no_settling_time)
{
    lw_metric_def m = lw_metric_default(LW_METRIC_SETTLING);
    ck_assert(isnan(metric_of(first_order(0.002), m, 0, 4 * MS)));
    ck_assert(!isnan(metric_of(first_order(0.002), m, 0, 8 * MS)));
}
END_TEST

// A loop whose samples all lie at the wanted value while the plant swings between them.
START_TEST(an_overshoot_between_samples_is_found)
{
    lw_plant *plant = second_order(2 * M_PI * 1000, 0.0);
    lw_metric_def m = lw_metric_default(LW_METRIC_MAXIMUM);
    // undamped: 1 - cos; at multiples of the period the signal is 0, between it reaches 2
    ck_near(metric_of(plant, m, 0, 5 * MS), 2, 1e-12, 0);
}
END_TEST

START_TEST(saturation_time_counts_held_commands)
{
    lw_rig *rig = NULL;
    lw_watch *watch = NULL;
    lw_frozen *frozen = NULL;
    lw_run *run = NULL;
    simple_loop s = simple_default();
    s.plant = integrator(250);
    s.law = p_law(40);
    s.wanted = 2;
    s.dac = (lw_quantiser){0, -10, 10, LW_ROUND_NEAREST};
    rig = simple_rig(&s);
    OK(lw_watch_new(&watch, e));
    lw_metric_def m = lw_metric_default(LW_METRIC_SATURATION_TIME);
    m.name = "saturated";
    m.of = "dac";
    OK(lw_watch_metric(watch, &m, e));
    OK(lw_rig_freeze(rig, watch, 20 * MS, &frozen, e));
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    lw_run_advance(run, 20 * MS);
    lw_run_finish(run);
    // 0.25 a period while 40 (2 - y) > 10, that is until y reaches 1.75: 7 periods
    ck_near(lw_run_metric(run, 0, 0), 7e-4, 1e-12, 0);
    lw_run_free(run);
    lw_frozen_free(frozen);
    lw_watch_free(watch);
    lw_rig_free(rig);
}
END_TEST

// ---- polynomials

START_TEST(roots_of_known_polynomials_are_found)
{
    static const double roots[] = {0, 0.125, 0.3, 0.3000001, 0.5, 0.875, 0.96875};
    double c[8] = {1}, found[8];
    for (int k = 0; k < 7; k++) { // multiply by (s - root)
        for (int i = k + 1; i > 0; i--)
            c[i] = c[i - 1] - roots[k] * c[i];
        c[0] *= -roots[k];
    }
    ck_assert_int_eq(lw__poly_roots(7, c, found), 7);
    for (int k = 0; k < 7; k++)
        ck_assert(fabs(found[k] - roots[k]) < 1e-6); // rounding 1e-16 over a slope of 4e-10
}
END_TEST

START_TEST(integrals_of_polynomials)
{
    const double p[] = {1, -2, 3}, q[] = {0.5, 4};
    // by hand: 1 - 1 + 1; (1 - 2 s + 3 s^2)(0.5 + 4 s) = 0.5 + 3 s - 6.5 s^2 + 12 s^3
    ck_near(lw__poly_integral(2, p, 0, 1), 1, 1e-15, 0);
    ck_near(lw__poly_integral(2, p, 0.5, 1), 1 - (0.5 - 0.25 + 0.125), 1e-15, 0);
    ck_near(lw__poly_product_integral(2, p, 1, q), 0.5 + 1.5 - 6.5 / 3 + 3, 1e-15, 0);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("metrics");
    TCase *tests = tcase_create("metrics");
    tcase_set_timeout(tests, 30);
    tcase_add_test(tests, first_order_rise_and_settling);
    tcase_add_test(tests, first_order_integrals_of_the_error);
    tcase_add_loop_test(tests, second_order_overshoot_and_rise_table, 0,
                        (int)(sizeof table / sizeof table[0]));
    tcase_add_test(tests, second_order_damping_of_small_overshoots);
    tcase_add_test(tests, second_order_settling);
    tcase_add_test(tests, second_order_integral_criteria);
    tcase_add_test(tests, time_counts_from_the_window);
    tcase_add_test(tests, a_response_outside_its_band_has_no_settling_time);
    tcase_add_test(tests, an_overshoot_between_samples_is_found);
    tcase_add_test(tests, saturation_time_counts_held_commands);
    tcase_add_test(tests, roots_of_known_polynomials_are_found);
    tcase_add_test(tests, integrals_of_polynomials);
    suite_add_tcase(suite, tests);
    return run_suite(suite);
}
