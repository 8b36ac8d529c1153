// The sampled loop end to end: facts of the trade about a proportional loop around an integrator,
// latencies of every form, order within an instant.

#include "loops.h"

// Integrator 1/L under u = P (1 - y), normalised gain p = Ts P / L, latency `samples`.
static void coil(double p, double samples, int n, double *y)
{
    const double inductance = 0.004, period = 1e-4;
    lw_latency_entry entry = {samples, 1, LW_FATE_WRITTEN};
    simple_loop s = simple_default();
    s.plant = integrator(1 / inductance);
    s.law = p_law(p * inductance / period);
    s.latency.n_list = 1;
    s.latency.list = &entry;
    lw_frozen *frozen = freeze_rig(simple_rig(&s), NULL, 100 * MS);
    sample_run(frozen, "plant.out", 100 * US, n, y);
    lw_frozen_free(frozen);
}

static double largest(const double *y, int from, int n)
{
    double most = 0;
    for (int k = from; k < n; k++)
        most = fmax(most, fabs(y[k] - 1));
    return most;
}

START_TEST(ideal_loop_obeys_its_recurrence)
{
    double y[40], want = 0;
    coil(0.3, 0, 40, y);
    for (int k = 0; k < 40; k++) {
        // common practice, no source: i[k+1] = i[k] + p (r - i[k])
        ck_near(y[k], want, 1e-13, 1); // 40 roundings
        want += 0.3 * (1 - want);
    }
}
END_TEST

START_TEST(ideal_loop_is_stable_up_to_gain_two)
{
    double y[400];
    // common practice, no source: stable for 0 < p < 2
    coil(1.99, 0, 400, y);
    ck_assert(largest(y, 390, 400) < 0.03);
    coil(2.01, 0, 400, y);
    ck_assert(largest(y, 390, 400) > 30);
}
END_TEST

START_TEST(gain_one_is_dead_beat)
{
    double y[5];
    coil(1, 0, 5, y);
    // common practice, no source: the error is gone after one sample
    for (int k = 1; k < 5; k++)
        ck_near(y[k], 1, 1e-15, 1); // one rounding of a product
}
END_TEST

START_TEST(half_gain_halves_the_error_and_one_and_a_half_alternates)
{
    double y[12];
    coil(0.5, 0, 12, y);
    // common practice, no source
    for (int k = 0; k < 11; k++)
        ck_near(1 - y[k + 1], 0.5 * (1 - y[k]), 1e-12, 1e-3);
    coil(1.5, 0, 12, y);
    for (int k = 0; k < 11; k++)
        ck_assert((1 - y[k]) * (1 - y[k + 1]) < 0);
}
END_TEST

START_TEST(one_sample_of_delay_halves_the_gain_limit)
{
    double y[2000];
    // common practice, no source: eigenvalues of l^2 - l + p = 0, stable for 0 < p < 1
    coil(0.99, 1, 2000, y);
    ck_assert(largest(y, 1980, 2000) < 1e-3);
    coil(1.01, 1, 2000, y);
    ck_assert(largest(y, 1980, 2000) > 1e3);
}
END_TEST

START_TEST(quarter_gain_with_one_delay_has_the_double_root)
{
    double y[30];
    coil(0.25, 1, 30, y);
    // common practice, no source: double root 1/2, so e[k] = (1 + k) / 2^k; within 6.3 % after
    // 7 steps, the 6 to 7 steps of settling
    for (int k = 0; k < 30; k++)
        ck_near(1 - y[k], (1 + k) * pow(0.5, k), 1e-13, 1);
    ck_assert(largest(y, 7, 30) < 0.07);
}
END_TEST

// A lag a / (s + a) behind a hold with latency d: x+ = e^-aT x + (e^-a(T-d) - e^-aT) u_old +
// (1 - e^-a(T-d)) u, the textbook split of a fractional delay.
START_TEST(fractional_latency_splits_the_period)
{
    const double a = 300, period = 1e-3, kp = 2.5;
    double y[60], x = 0, held = 0;
    lw_plant *plant = NULL;
    OK(lw_plant_first_order(1, 1 / a, &plant, e));
    for (int percent = 0; percent <= 100; percent += 10) {
        lw_latency_entry entry = {percent / 100.0, 1, LW_FATE_WRITTEN};
        simple_loop s = simple_default();
        OK(lw_plant_first_order(1, 1 / a, &s.plant, e));
        s.law = p_law(kp);
        s.period = 1000 * US;
        s.latency.n_list = 1;
        s.latency.list = &entry;
        lw_frozen *frozen = freeze_rig(simple_rig(&s), NULL, 100 * MS);
        sample_run(frozen, "plant.out", 1000 * US, 60, y);
        lw_frozen_free(frozen);
        x = held = 0;
        for (int k = 0; k < 60; k++) {
            // K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, sampling
            // with delay (from memory); 60 steps of rounding
            ck_near(y[k], x, 1e-13, 1);
            double u = kp * (1 - x), rest = period * (1 - percent / 100.0);
            x = exp(-a * period) * x + (exp(-a * rest) - exp(-a * period)) * held +
                (1 - exp(-a * rest)) * u;
            held = u;
        }
    }
    lw_plant_free(plant);
}
END_TEST

// Latency by a list with whole samples, lost and missed ones, in both arrival rules, against a
// list of writes sorted by hand.
static void listed(lw_arrival arrival, double *y, int n)
{
    static const lw_latency_entry list[] = {{2.3, 1, LW_FATE_WRITTEN}, {20e-6, 0, LW_FATE_WRITTEN},
                                            {0, 0, LW_FATE_LOST},      {1, 1, LW_FATE_WRITTEN},
                                            {0, 0, LW_FATE_MISSED},    {0.5, 1, LW_FATE_WRITTEN}};
    simple_loop s = simple_default();
    s.plant = integrator(250);
    s.law = p_law(10);
    s.latency.n_list = 6;
    s.latency.list = list;
    s.latency.arrival = arrival;
    lw_frozen *frozen = freeze_rig(simple_rig(&s), NULL, 100 * MS);
    sample_run(frozen, "plant.out", 100 * US, n, y);
    lw_frozen_free(frozen);
}

typedef struct write_at {
    double t, u;
    int k;
} write_at;

static void listed_by_hand(lw_arrival arrival, double *y, int n)
{
    const double latency[] = {230e-6, 20e-6, -1, 100e-6, -2, 50e-6};
    write_at w[400];
    int n_writes = 0, standing = -1;
    double x = 0, u = 0, t = 0;
    for (int k = 0; k < n; k++) {
        double until = k * 1e-4;
        for (;;) { // the next write at or before this sample
            int best = -1;
            for (int i = 0; i < n_writes; i++)
                if (w[i].t <= until + 1e-12 && (best < 0 || w[i].t < w[best].t - 1e-13 ||
                                                (w[i].t < w[best].t + 1e-13 && w[i].k < w[best].k)))
                    best = i;
            if (best < 0)
                break;
            write_at now = w[best];
            w[best] = w[--n_writes];
            x += 250 * u * (now.t - t);
            t = now.t;
            if (arrival == LW_ARRIVAL_NEWEST && now.k < standing)
                continue;
            u = now.u;
            standing = now.k;
        }
        x += 250 * u * (until - t);
        t = until;
        y[k] = x;
        if (latency[k % 6] >= 0)
            w[n_writes++] = (write_at){until + latency[k % 6], 10 * (1 - x), k};
    }
}

START_TEST(listed_latencies_arrive_as_stated)
{
    double got[200], want[200];
    for (int rule = 0; rule < 2; rule++) {
        listed(rule ? LW_ARRIVAL_NEWEST : LW_ARRIVAL_ORDER, got, 200);
        listed_by_hand(rule ? LW_ARRIVAL_NEWEST : LW_ARRIVAL_ORDER, want, 200);
        for (int k = 0; k < 200; k++)
            ck_near(got[k], want[k], 1e-12, 1); // the hand loop rounds its times
    }
    // the two rules differ here, so that taking one for the other would be seen
    listed(LW_ARRIVAL_ORDER, got, 200);
    double most = 0;
    for (int k = 0; k < 200; k++)
        most = fmax(most, fabs(got[k] - want[k]));
    ck_assert(most > 1e-3);
}
END_TEST

START_TEST(latency_below_the_conversion_is_refused)
{
    lw_latency_entry entry = {1e-6, 0, LW_FATE_WRITTEN};
    simple_loop s = simple_default();
    lw_frozen *frozen = NULL;
    lw_error err;
    s.plant = integrator(1);
    s.law = p_law(1);
    s.takes = 2 * US;
    s.latency.n_list = 1;
    s.latency.list = &entry;
    lw_rig *rig = simple_rig(&s);
    ck_assert_int_eq(lw_rig_freeze(rig, NULL, MS, &frozen, &err), LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text,
                     "loop \"loop\": latency is 1e-06 s; it includes the conversion and is "
                     "at least 2e-06 s");
    lw_rig_free(rig);
}
END_TEST

START_TEST(a_run_that_grows_without_bound_ends_with_its_instant)
{
    simple_loop s = simple_default();
    s.plant = integrator(250);
    s.law = p_law(-4e6); // wrong sign, large
    lw_frozen *frozen = freeze_rig(simple_rig(&s), NULL, 1000 * MS);
    lw_run *run = NULL;
    lw_error err;
    OK(lw_run_new(frozen, 1, 1, 0, &run, e));
    ck_assert_int_eq(lw_run_advance(run, 1000 * MS), LW_STOPPED);
    ck_assert_int_eq(lw_run_status(run, 0, &err), LW_ERR_NOT_FINITE);
    ck_assert(strstr(err.text, "plant.out") != NULL || strstr(err.text, "loop") != NULL);
    ck_assert(lw_run_now(run, 0) < 1000 * MS);
    lw_run_free(run);
    lw_frozen_free(frozen);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("loop");
    TCase *facts = tcase_create("facts");
    tcase_add_test(facts, ideal_loop_obeys_its_recurrence);
    tcase_add_test(facts, ideal_loop_is_stable_up_to_gain_two);
    tcase_add_test(facts, gain_one_is_dead_beat);
    tcase_add_test(facts, half_gain_halves_the_error_and_one_and_a_half_alternates);
    tcase_add_test(facts, one_sample_of_delay_halves_the_gain_limit);
    tcase_add_test(facts, quarter_gain_with_one_delay_has_the_double_root);
    tcase_add_test(facts, fractional_latency_splits_the_period);
    suite_add_tcase(suite, facts);
    TCase *latency = tcase_create("latency");
    tcase_add_test(latency, listed_latencies_arrive_as_stated);
    tcase_add_test(latency, latency_below_the_conversion_is_refused);
    tcase_add_test(latency, a_run_that_grows_without_bound_ends_with_its_instant);
    suite_add_tcase(suite, latency);
    return run_suite(suite);
}
