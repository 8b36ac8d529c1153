// Composition of plants: identities, algebraic loops, delays that move upstream, what is refused,
// lack of memory.

#include "plants.h"

#include "base/alloc.h"

// ---- parts to join

static lw_plant *gain(double value)
{
    lw_plant *p;
    MADE(p,
         lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &value, NULL, NULL, NULL, NULL, out, err));
    return p;
}

// gain / (s + 1), or with a direct path
static lw_plant *lag(double value)
{
    lw_plant *p;
    MADE(p, lw_plant_first_order(value, 1, out, err));
    return p;
}

static lw_plant *late(lw_plant *plant, double seconds)
{
    lw_plant *p;
    MADE(p, lw_plant_delayed(plant, lw_plant_look(plant).input_names[0], seconds, out, err));
    lw_plant_free(plant);
    return p;
}

// A plant by chance, stable, of 0 to 4 poles.
static lw_plant *chance(uint64_t *seed, int is_proper)
{
    double poles[4][2] = {{0}}, zeros[4][2] = {{0}};
    int n = is_proper + below(seed, 4), n_zeros = n > 0 ? below(seed, n + !is_proper) : 0;
    for (int i = 0; i < n; i++) {
        poles[i][0] = -0.1 - 3 * fabs(uniform(seed));
        zeros[i][0] = 4 * uniform(seed);
    }
    lw_plant *p;
    MADE(p, lw_plant_zeros_poles(n_zeros, (const double(*)[2])zeros, n, (const double(*)[2])poles,
                                 2 * uniform(seed), out, err));
    return p;
}

#define N_OF(list) ((int)(sizeof(list) / sizeof *(list)))
#define CONNECT(parts, links, inputs, outputs)                                                     \
    lw_plant_connect(N_OF(parts), parts, N_OF(links), links, N_OF(inputs), inputs, N_OF(outputs),  \
                     outputs, out, err)

static number at(uint64_t *seed)
{
    return 2 * uniform(seed) + 0.5 + I * 4 * uniform(seed);
}

// ---- identities

// Tolerance of responses: a rounding or two an element, little cancelling at these places.
#define CLOSE 1e-12

START_TEST(series_parallel_and_feedback_follow_their_formulas)
{
    uint64_t seed = 3;
    for (int k = 0; k < 500; k++) {
        double sign = k % 2 ? 1 : -1;
        lw_plant *p[5] = {chance(&seed, 0), chance(&seed, 1)};
        MADE(p[2], lw_plant_series(p[0], p[1], out, err));
        MADE(p[3], lw_plant_parallel(p[0], p[1], sign, out, err));
        MADE(p[4], lw_plant_feedback(p[0], p[1], sign, out, err));
        number s = at(&seed), a = response(p[0], 0, 0, s), b = response(p[1], 0, 0, s);
        ck_response(response(p[2], 0, 0, s), a * b, CLOSE);
        ck_assert(cabs(response(p[3], 0, 0, s) - (a + sign * b)) < CLOSE * (cabs(a) + cabs(b)));
        number loop = 1 - sign * a * b;
        ck_response(response(p[4], 0, 0, s), a / loop, CLOSE * fmax(1, cabs(a * b) / cabs(loop)));
        for (int i = 2; i < 5; i++) {
            ck_assert_str_eq(lw_plant_look(p[i]).input_names[0], "in");
            ck_assert_str_eq(lw_plant_look(p[i]).output_names[0], "out");
        }
        free_plants(5, p);
    }
}
END_TEST

START_TEST(states_are_named_by_part_and_keep_the_order_of_the_parts)
{
    const lw_dc_machine m = {1, 1, 1, NAN, 1, 0};
    const double start[] = {3, 4};
    lw_plant *p[4] = {lag(1)};
    MADE(p[1], lw_plant_dc_machine(&m, out, err));
    MADE(p[2], lw_plant_started(p[1], 2, start, out, err));
    const lw_part parts[] = {{"filter", p[0]}, {"motor", p[2]}};
    const lw_link links[] = {{"motor.speed", "filter.in", 1}};
    const lw_port inputs[] = {{"torque", "motor.load_torque"}, {"voltage", "motor.voltage"}};
    const lw_port outputs[] = {{"seen", "filter.out"}, {"motor_speed", "motor.speed"}};
    MADE(p[3], CONNECT(parts, links, inputs, outputs));
    lw_plant_view v = lw_plant_look(p[3]);
    ck_assert_int_eq(v.n_x * 100 + v.n_u * 10 + v.n_y, 322);
    ck_assert_str_eq(v.state_names[0], "filter_out");
    ck_assert_str_eq(v.state_names[1], "motor_current");
    ck_assert_str_eq(v.state_names[2], "motor_speed");
    ck_assert_str_eq(v.input_names[0], "torque");
    ck_assert_str_eq(v.input_names[1], "voltage");
    ck_assert_str_eq(v.output_names[1], "motor_speed"); // it is that state
    ck_assert(v.start[0] == 0 && v.start[1] == 3 && v.start[2] == 4);
    const double a[] = {-1, 0, 1, 0, -1, -1, 0, 1, -0.0}, b[] = {0, 0, 0, 1, -1, 0};
    for (int i = 0; i < 9; i++)
        ck_assert(v.a[i] == a[i]);
    for (int i = 0; i < 6; i++)
        ck_assert(v.b[i] == b[i]);
    free_plants(4, p);
}
END_TEST

START_TEST(the_order_of_parts_and_links_permutes_states_and_nothing_else)
{
    uint64_t seed = 9;
    lw_plant *p[5] = {chance(&seed, 1), chance(&seed, 0), chance(&seed, 1)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}};
    const lw_part turned[] = {{"c", p[2]}, {"a", p[0]}, {"b", p[1]}};
    const lw_link links[] = {{"a.out", "b.in", 1}, {"b.out", "c.in", -1}, {"c.out", "a.in", -1}};
    const lw_link shuffled[] = {links[2], links[0], links[1]};
    const lw_port inputs[] = {{"u", "a.in"}, {"u", "c.in"}}, outputs[] = {{"y", "b.out"}};
    MADE(p[3], CONNECT(parts, links, inputs, outputs));
    MADE(p[4], CONNECT(turned, shuffled, inputs, outputs));
    lw_plant_view v = lw_plant_look(p[3]), w = lw_plant_look(p[4]);
    ck_assert_int_eq(v.n_x, w.n_x);
    int place[N_MAX];
    for (int i = 0; i < v.n_x; i++)
        for (int k = 0; k < v.n_x; k++)
            place[i] = strcmp(v.state_names[i], w.state_names[k]) == 0 ? k : place[i];
    for (int i = 0; i < v.n_x; i++) {
        ck_assert(v.b[i] == w.b[place[i]] && v.c[i] == w.c[place[i]]);
        for (int k = 0; k < v.n_x; k++)
            ck_assert(v.a[i * v.n_x + k] == w.a[place[i] * v.n_x + place[k]]);
    }
    number s = 0.3 + 0.7 * I, a = response(p[0], 0, 0, s), b = response(p[1], 0, 0, s),
           c = response(p[2], 0, 0, s);
    ck_response(response(p[3], 0, 0, s), a * b * (1 - c) / (1 - a * b * c), CLOSE);
    free_plants(5, p);
}
END_TEST

START_TEST(an_input_sums_links_and_external_inputs_and_is_zero_without)
{
    const double d[] = {1, 10, 100};
    lw_plant *p[3] = {lag(2)};
    MADE(p[1],
         lw_plant_state_space(0, 3, 1, NULL, NULL, NULL, d, NULL, NULL, NULL, NULL, out, err));
    const lw_part parts[] = {{"a", p[0]}, {"sum", p[1]}};
    const lw_link links[] = {{"a.out", "sum.in1", 1}, {"a.out", "sum.in2", -1}};
    const lw_port inputs[] = {{"u", "a.in"}, {"v", "sum.in1"}, {"u", "sum.in1"}};
    const lw_port outputs[] = {{"y", "sum.out"}};
    MADE(p[2], CONNECT(parts, links, inputs, outputs)); // sum.in3 is fed by nothing
    const number s = I;
    ck_response(response(p[2], 0, 0, s), 1 + (1 - 10) * 2 / (s + 1), CLOSE);
    ck_response(response(p[2], 0, 1, s), 1, CLOSE);
    ck_assert_int_eq(lw_plant_look(p[2]).n_u, 2);
    free_plants(3, p);
}
END_TEST

START_TEST(one_part_alone_keeps_its_numbers)
{
    const lw_two_mass_drive d = {0.8, 2e-3, 0.05, NAN, 4e-4, 0.021, 90, 0.02, 0, 0};
    lw_plant *p[2];
    MADE(p[0], lw_plant_two_mass_drive(&d, out, err));
    const lw_part part = {"axis", p[0]};
    const lw_port inputs[] = {{"u", "axis.voltage"}, {"w", "axis.load_torque"}};
    const lw_port output = {"y", "axis.twist"};
    MADE(p[1], lw_plant_connect(1, &part, 0, NULL, 2, inputs, 1, &output, out, err));
    lw_plant_view v = lw_plant_look(p[0]), w = lw_plant_look(p[1]);
    ck_assert_mem_eq(v.a, w.a, 25 * sizeof(double));
    ck_assert_mem_eq(v.b, w.b, 10 * sizeof(double));
    ck_assert(w.c[2] == 1 && w.c[1] == 0);
    ck_assert_str_eq(w.state_names[4], "axis_load_angle");
    free_plants(2, p);
}
END_TEST

START_TEST(a_connection_shows_up_to_128_outputs_and_may_lack_inputs)
{
    static lw_port outputs[129];
    static char names[129][8];
    lw_plant *p[2] = {lag(1)};
    const lw_part part = {"a", p[0]};
    for (int i = 0; i < 129; i++) {
        snprintf(names[i], sizeof names[i], "y%d", i);
        outputs[i] = (lw_port){names[i], "a.out"};
    }
    MADE(p[1], lw_plant_connect(1, &part, 0, NULL, 0, NULL, 128, outputs, out, err));
    ck_assert_int_eq(lw_plant_look(p[1]).n_u, 0);
    ck_assert(lw_plant_look(p[1]).c[127] == 1);
    lw_plant_free(p[1]);
    MADE(p[1], lw_plant_delayed(p[0], "in", 0, out, err));
    REFUSED(LW_ERR_SHAPE, "number of outputs is 129; permitted 0 to 128",
            lw_plant_connect(1, &part, 0, NULL, 0, NULL, 129, outputs, out, err));
    free_plants(2, p);
}
END_TEST

// ---- algebraic loops

START_TEST(an_algebraic_loop_names_its_signals_in_order)
{
    lw_plant *p[2] = {gain(0.5), gain(0.25)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}};
    const lw_link links[] = {{"a.out", "b.in", 1}, {"b.out", "a.in", -1}};
    const lw_port in = {"u", "a.in"}, shown = {"y", "b.out"};
    REFUSED(LW_ERR_LOOP,
            "signals depend on themselves without delay: a.out -> b.in -> b.out -> a.in",
            lw_plant_connect(2, parts, 2, links, 1, &in, 1, &shown, out, err));
    REFUSED(LW_ERR_LOOP,
            "signals depend on themselves without delay: a.out -> b.in -> b.out -> a.in",
            lw_plant_feedback(p[0], p[1], -1, out, err));
    const lw_link self = {"b.out", "b.in", 1};
    REFUSED(LW_ERR_LOOP, "signals depend on themselves without delay: b.out -> b.in",
            lw_plant_connect(2, parts, 1, &self, 1, &in, 1, &shown, out, err));
    free_plants(2, p);
}
END_TEST

START_TEST(a_loop_is_told_from_its_first_part_whatever_leads_into_it)
{
    lw_plant *p[5] = {gain(1), gain(1), gain(1), gain(1), lag(1)};
    // "in" leads into the ring c -> d -> b, entering at d; "x" hangs on it behind a state
    const lw_part parts[] = {{"in", p[0]}, {"b", p[1]}, {"c", p[2]}, {"d", p[3]}, {"x", p[4]}};
    const lw_link links[] = {{"in.out", "d.in", 1}, {"c.out", "d.in", 1}, {"d.out", "x.in", 1},
                             {"d.out", "b.in", 1},  {"b.out", "c.in", 1}, {"x.out", "c.in", 1}};
    const lw_port inputs[] = {{"u", "in.in"}}, outputs[] = {{"y", "x.out"}};
    REFUSED(LW_ERR_LOOP,
            "signals depend on themselves without delay: b.out -> c.in -> c.out -> d.in -> d.out "
            "-> b.in",
            CONNECT(parts, links, inputs, outputs));
    free_plants(5, p);
}
END_TEST

START_TEST(a_state_in_the_ring_or_a_direct_path_beside_it_is_no_loop)
{
    // the crossed gain leads in1 to out2 and in2 to out1 only
    const double crossed[] = {0, 2, 3, 0};
    lw_plant *p[4] = {lag(1), gain(0.5)};
    MADE(p[2], lw_plant_feedback(p[1], p[0], -1, out, err));
    number s = 0.2 + I;
    ck_response(response(p[2], 0, 0, s), 0.5 / (1 + 0.5 / (s + 1)), CLOSE);
    lw_plant_free(p[2]);
    MADE(p[2], lw_plant_state_space(0, 2, 2, NULL, NULL, NULL, crossed, NULL, NULL, NULL, NULL, out,
                                    err));
    const lw_part part = {"x", p[2]};
    const lw_link straight = {"x.out1", "x.in1", 1}, back = {"x.out2", "x.in1", 1};
    const lw_port in = {"u", "x.in2"}, shown = {"y", "x.out2"};
    MADE(p[3], lw_plant_connect(1, &part, 1, &straight, 1, &in, 1, &shown, out, err));
    ck_assert(lw_plant_look(p[3]).d[0] == 6);
    REFUSED(LW_ERR_LOOP, "signals depend on themselves without delay: x.out2 -> x.in1",
            lw_plant_connect(1, &part, 1, &back, 1, &in, 1, &shown, out, err));
    free_plants(4, p);
}
END_TEST

// Rings of gains by chance: refused exactly where links close a ring, by a second search.
START_TEST(a_loop_is_found_exactly_where_there_is_one)
{
    uint64_t seed = 5;
    int n_loops = 0;
    static const char *const names[] = {"a", "b", "c", "d", "e", "f"};
    static const char *const out_ports[] = {"a.out", "b.out", "c.out", "d.out", "e.out", "f.out"};
    static const char *const in_ports[] = {"a.in", "b.in", "c.in", "d.in", "e.in", "f.in"};
    lw_plant *plants[] = {gain(1), gain(2), lag(3), gain(4), gain(5), gain(6)};
    for (int k = 0; k < 2000; k++) {
        lw_part parts[6];
        lw_link links[7];
        int leads[6][6] = {{0}}, ring = 0, n = 0;
        for (int i = 0; i < 6; i++)
            parts[i] = (lw_part){names[i], plants[i]};
        for (int i = 0; i < 7; i++) {
            int from = below(&seed, 6), to = below(&seed, 6);
            if (leads[from][to])
                continue;
            links[n++] = (lw_link){out_ports[from], in_ports[to], 1};
            leads[from][to] = 1;
        }
        for (int i = 0; i < 6; i++)
            leads[i][2] = leads[2][i] = 0; // the lag passes nothing on at once
        for (int m = 0; m < 6; m++)
            for (int i = 0; i < 6; i++)
                for (int j = 0; j < 6; j++)
                    leads[i][j] |= leads[i][m] && leads[m][j];
        for (int i = 0; i < 6; i++)
            ring |= leads[i][i];
        const lw_port in = {"u", "a.in"}, shown = {"y", "f.out"};
        lw_plant *made = NULL;
        lw_status status = lw_plant_connect(6, parts, n, links, 1, &in, 1, &shown, &made, NULL);
        ck_assert_int_eq(status, ring ? LW_ERR_LOOP : LW_OK);
        n_loops += ring;
        lw_plant_free(made);
    }
    ck_assert(n_loops > 200 && n_loops < 1800);
    free_plants(6, plants);
}
END_TEST

// ---- delays

START_TEST(a_delay_at_an_external_input_stays_there)
{
    lw_plant *p[3] = {late(lag(1), 0.25), lag(2)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}};
    const lw_link links[] = {{"a.out", "b.in", 1}};
    const lw_port inputs[] = {{"u", "a.in"}, {"v", "b.in"}}, outputs[] = {{"y", "b.out"}};
    MADE(p[2], CONNECT(parts, links, inputs, outputs));
    ck_assert(lw_plant_look(p[2]).delay[0] == 0.25 && lw_plant_look(p[2]).delay[1] == 0);
    free_plants(3, p);
}
END_TEST

START_TEST(delays_along_an_open_chain_add_up_at_its_beginning)
{
    lw_plant *p[4] = {late(lag(1), 0.125), late(gain(3), 0.25), late(lag(2), 0.5)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}};
    const lw_link links[] = {{"a.out", "b.in", 1}, {"b.out", "c.in", -1}};
    const lw_port inputs[] = {{"u", "a.in"}, {"v", "b.in"}, {"w", "c.in"}};
    const lw_port outputs[] = {{"y", "c.out"}};
    MADE(p[3], CONNECT(parts, links, inputs, outputs));
    lw_plant_view v = lw_plant_look(p[3]);
    ck_assert(v.delay[0] == 0.875 && v.delay[1] == 0.75 && v.delay[2] == 0.5);
    const number s = 0.3 + 0.9 * I;
    ck_response(response(p[3], 0, 0, s), -6 / ((s + 1) * (s + 1)), CLOSE);
    lw_plant_free(p[3]);
    MADE(p[3], lw_plant_series(p[0], p[2], out, err));
    ck_assert(lw_plant_look(p[3]).delay[0] == 0.625);
    free_plants(4, p);
}
END_TEST

// What each part of an open net sees is late by the delays along every path to it: the plant made
// with delays times e^(-s delay) is the plant without, with e^(-s d) at each input.
START_TEST(a_moved_delay_leaves_every_path_as_late_as_before)
{
    uint64_t seed = 11;
    const double d = 0.2, e = 0.7;
    lw_plant *p[6] = {chance(&seed, 1), late(chance(&seed, 1), d), late(chance(&seed, 1), d),
                      late(gain(1), e), chance(&seed, 1)};
    // a feeds b and c, which join at sum; a ring of m and a without delay is moved as a whole
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}, {"sum", p[3]}, {"m", p[4]}};
    const lw_link links[] = {{"a.out", "b.in", 1},   {"a.out", "c.in", -1}, {"b.out", "sum.in", 1},
                             {"c.out", "sum.in", 1}, {"a.out", "m.in", 1},  {"m.out", "a.in", -1}};
    const lw_port inputs[] = {{"u", "a.in"}, {"v", "sum.in"}}, outputs[] = {{"y", "sum.out"}};
    MADE(p[5], CONNECT(parts, links, inputs, outputs));
    const lw_plant_view v = lw_plant_look(p[5]);
    const number s = 0.1 + 1.3 * I, a = response(p[0], 0, 0, s), m = response(p[4], 0, 0, s);
    const number ring = a / (1 + a * m);
    const number want =
        ring * cexp(-s * d) * (response(p[1], 0, 0, s) - response(p[2], 0, 0, s)) * cexp(-s * e);
    ck_response(response(p[5], 0, 0, s) * cexp(-s * v.delay[0]), want, CLOSE);
    ck_response(response(p[5], 0, 1, s) * cexp(-s * v.delay[1]), cexp(-s * e), CLOSE);
    free_plants(6, p);
}
END_TEST

START_TEST(sums_of_delays_agree_despite_their_rounding)
{
    lw_plant *p[5] = {lag(1), late(gain(1), 0.1), late(gain(1), 0.2), late(gain(1), 0.3), gain(1)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}, {"d", p[3]}, {"sum", p[4]}};
    const lw_link links[] = {{"a.out", "b.in", 1},
                             {"b.out", "c.in", 1},
                             {"c.out", "sum.in", 1},
                             {"a.out", "d.in", 1},
                             {"d.out", "sum.in", 1}};
    const lw_port inputs[] = {{"u", "a.in"}}, outputs[] = {{"y", "sum.out"}};
    lw_plant *whole;
    ck_assert(0.1 + 0.2 != 0.3);
    MADE(whole, CONNECT(parts, links, inputs, outputs));
    ck_near(lw_plant_look(whole).delay[0], 0.3, 1e-15, 0); // a rounding
    lw_plant_free(whole);
    free_plants(5, p);
}
END_TEST

START_TEST(a_delay_inside_feedback_is_refused_by_part_and_input)
{
    lw_plant *p[3] = {lag(1), late(lag(1), 1e-3), late(gain(1), 2e-3)};
    REFUSED(LW_ERR_LOOP,
            "part \"b\": input \"in\" has a delay of 0.001 s inside continuous feedback; permitted "
            "in an open chain",
            lw_plant_feedback(p[0], p[1], -1, out, err));
    REFUSED(LW_ERR_LOOP,
            "part \"a\": input \"in\" has a delay of 0.001 s inside continuous feedback; permitted "
            "in an open chain",
            lw_plant_feedback(p[1], p[0], -1, out, err));
    // a delay in a ring of direct paths is a delay, not an algebraic loop
    const lw_part part = {"hold", p[2]};
    const lw_link self = {"hold.out", "hold.in", 1};
    const lw_port shown = {"y", "hold.out"};
    REFUSED(LW_ERR_LOOP,
            "part \"hold\": input \"in\" has a delay of 0.002 s inside continuous feedback; "
            "permitted in an open chain",
            lw_plant_connect(1, &part, 1, &self, 0, NULL, 1, &shown, out, err));
    free_plants(3, p);
}
END_TEST

START_TEST(a_part_that_would_need_two_delays_is_refused_with_both)
{
    lw_plant *p[4] = {lag(1), late(lag(1), 1e-3), late(lag(1), 3e-3), lag(1)};
    const lw_part parts[] = {{"motor", p[0]}, {"b", p[1]}, {"c", p[2]}, {"d", p[3]}};
    const lw_link both[] = {{"motor.out", "b.in", 1}, {"motor.out", "c.in", 1}};
    const lw_link beside[] = {{"motor.out", "b.in", 1}, {"motor.out", "d.in", 1}};
    const lw_port in[] = {{"u", "motor.in"}}, last[] = {{"y", "b.out"}, {"z", "c.out"}};
    const lw_port early[] = {{"y", "b.out"}, {"speed", "motor.out"}};
    REFUSED(LW_ERR_ARGUMENT,
            "part \"motor\" would need two delays: 0.001 s for \"b.in\" and 0.003 s for \"c.in\"",
            CONNECT(parts, both, in, last));
    REFUSED(LW_ERR_ARGUMENT,
            "part \"motor\" would need two delays: 0.001 s for \"b.in\" and 0 s for \"d.in\"",
            CONNECT(parts, beside, in, last));
    const lw_link single[] = {{"motor.out", "b.in", 1}};
    REFUSED(LW_ERR_ARGUMENT,
            "part \"motor\" would need two delays: 0.001 s for \"b.in\" and none where "
            "\"motor.out\" is shown",
            CONNECT(parts, single, in, early));
    free_plants(4, p);
}
END_TEST

START_TEST(an_input_that_would_need_two_delays_is_refused_with_both)
{
    lw_plant *p[3] = {late(lag(1), 1e-3), lag(1), late(lag(1), 2e-3)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}};
    const lw_link links[] = {{"b.out", "c.in", 1}};
    const lw_port inputs[] = {{"u", "a.in"}, {"v", "b.in"}, {"u", "b.in"}};
    const lw_port outputs[] = {{"y", "c.out"}, {"z", "a.out"}};
    REFUSED(LW_ERR_ARGUMENT,
            "input \"u\" would need two delays: 0.001 s for \"a.in\" and 0.002 s for \"b.in\"",
            CONNECT(parts, links, inputs, outputs));
    REFUSED(LW_ERR_ARGUMENT,
            "input \"in\" would need two delays: 0.001 s for \"a.in\" and 0 s for \"b.in\"",
            lw_plant_parallel(p[0], p[1], 1, out, err));
    free_plants(3, p);
}
END_TEST

START_TEST(a_part_before_a_delay_must_start_at_rest)
{
    const double start = 3;
    lw_plant *p[4] = {lag(1), late(lag(1), 1e-3)};
    MADE(p[2], lw_plant_started(p[0], 1, &start, out, err));
    REFUSED(LW_ERR_ARGUMENT, "part \"a\": start of out is 3; permitted 0 before a delay of 0.001 s",
            lw_plant_series(p[2], p[1], out, err));
    MADE(p[3], lw_plant_series(p[2], p[0], out, err)); // without a delay it may
    ck_assert(lw_plant_look(p[3]).start[0] == 3);
    free_plants(4, p);
}
END_TEST

// The part that nothing reads, and the ring that nothing leaves, are seen by their states: in time.
START_TEST(what_ends_in_states_alone_is_not_late)
{
    lw_plant *p[4] = {lag(1), late(lag(2), 0.5), lag(3)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}, {"c", p[2]}};
    const lw_link links[] = {{"a.out", "b.in", 1}, {"b.out", "c.in", 1}, {"c.out", "b.in", -1}};
    const lw_port inputs[] = {{"u", "a.in"}};
    // b.in is late and in a ring: refused; without the ring the delay moves to u
    REFUSED(
        LW_ERR_LOOP,
        "part \"b\": input \"in\" has a delay of 0.5 s inside continuous feedback; permitted in "
        "an open chain",
        lw_plant_connect(3, parts, 3, links, 1, inputs, 0, NULL, out, err));
    MADE(p[3], lw_plant_connect(3, parts, 2, links, 1, inputs, 0, NULL, out, err));
    ck_assert(lw_plant_look(p[3]).delay[0] == 0.5);
    lw_plant_free(p[3]);
    const lw_part turned[] = {{"b", p[0]}, {"c", p[2]}, {"a", p[0]}, {"late", p[1]}};
    const lw_link ring[] = {{"a.out", "late.in", 1},
                            {"late.out", "b.in", 1},
                            {"b.out", "c.in", 1},
                            {"c.out", "b.in", -1}};
    MADE(p[3], lw_plant_connect(4, turned, 4, ring, 1, inputs, 0, NULL, out, err));
    ck_assert(lw_plant_look(p[3]).delay[0] == 0.5);
    free_plants(4, p);
}
END_TEST

// ---- what is refused

START_TEST(ports_that_are_not_there_are_offered_the_nearest)
{
    lw_plant *p[2] = {lag(1)};
    MADE(p[1], lw_plant_winding(1, 1, out, err));
    const lw_part parts[] = {{"filter", p[0]}, {"coil", p[1]}};
    const lw_port in[] = {{"u", "coil.voltage"}}, shown[] = {{"y", "filter.out"}};
#define LINK(from, to, message)                                                                    \
    do {                                                                                           \
        const lw_link link_[] = {{from, to, 1}};                                                   \
        REFUSED(LW_ERR_NAME, message, CONNECT(parts, link_, in, shown));                           \
    } while (0)
    LINK("coil.curent", "filter.in",
         "link from: no output \"coil.curent\"; nearest \"coil.current\"");
    LINK("coil.voltage", "filter.in", "link from: no output \"coil.voltage\"");
    LINK("coil.current", "filter.int", "link to: no input \"filter.int\"; nearest \"filter.in\"");
    LINK("coil.current", "filtr.in", "link to: no part \"filtr\"; nearest \"filter\"");
    LINK("wheel.out", "filter.in", "link from: no part \"wheel\"");
    LINK("coil", "filter.in", "link from: a port is written \"part.port\", not \"coil\"");
    LINK(NULL, "filter.in", "link from: a port is written \"part.port\", not \"\"");
    LINK("", "filter.in", "link from: a port is written \"part.port\", not \"\"");
    const lw_port no_in[] = {{"u", "coil.volt"}}, no_out[] = {{"y", "filter.outt"}};
    REFUSED(LW_ERR_NAME, "input \"u\": no input \"coil.volt\"",
            lw_plant_connect(2, parts, 0, NULL, 1, no_in, 1, shown, out, err));
    REFUSED(LW_ERR_NAME, "output \"y\": no output \"filter.outt\"; nearest \"filter.out\"",
            lw_plant_connect(2, parts, 0, NULL, 1, in, 1, no_out, out, err));
    free_plants(2, p);
}
END_TEST

START_TEST(a_very_long_name_of_a_part_that_is_not_there_is_cut_between_characters)
{
    char port[1000];
    lw_plant *p = lag(1);
    const lw_part part = {"a", p};
    for (int i = 0; i < 450; i++)
        memcpy(port + 2 * i, "\xc3\xb6", 2);
    memcpy(port + 900, ".out", 5);
    const lw_port shown = {"y", port};
    lw_error err = {LW_OK, ""};
    lw_plant *made = NULL;
    ck_assert_int_eq(lw_plant_connect(1, &part, 0, NULL, 0, NULL, 1, &shown, &made, &err),
                     LW_ERR_NAME);
    ck_assert_msg(strncmp(err.text, "output \"y\": no part \"\xc3\xb6", 22) == 0, "%s", err.text);
    ck_assert(err.text[strlen(err.text) - 1] == '"');
    ck_assert_msg((strlen(err.text) - 22) % 2 == 0, "%s", err.text);
    lw_plant_free(p);
}
END_TEST

START_TEST(connections_are_refused_by_field)
{
    lw_plant *p[1] = {lag(1)};
    const lw_part parts[] = {{"a", p[0]}, {"b", p[0]}}, twice[] = {{"a", p[0]}, {"a", p[0]}};
    const lw_part dotted[] = {{"a.b", p[0]}}, empty[] = {{"a", NULL}};
    const lw_link half[] = {{"a.out", "b.in", 0.5}};
    const lw_link same[] = {{"a.out", "b.in", 1}, {"a.out", "b.in", -1}}, *none = NULL;
    const lw_port in[] = {{"u", "a.in"}}, shown[] = {{"y", "b.out"}};
    const lw_port in_twice[] = {{"u", "a.in"}, {"u", "a.in"}}, in_dotted[] = {{"u.v", "a.in"}};
    const lw_port out_twice[] = {{"y", "a.out"}, {"y", "b.out"}}, out_empty[] = {{"", "a.out"}};
    const lw_port clash[] = {{"a_out", "b.out"}};
    REFUSED(LW_ERR_DUPLICATE, "two parts are named \"a\"",
            lw_plant_connect(2, twice, 0, none, 1, in, 1, shown, out, err));
    REFUSED(LW_ERR_NAME, "part \"a.b\": a name holds no dot; dots part a thing from its signals",
            lw_plant_connect(1, dotted, 0, none, 1, in, 1, shown, out, err));
    REFUSED(LW_ERR_ARGUMENT, "part \"a\": its plant is missing",
            lw_plant_connect(1, empty, 0, none, 1, in, 1, shown, out, err));
    REFUSED(LW_ERR_SHAPE, "number of parts is 0; permitted 1 to 64",
            lw_plant_connect(0, parts, 0, none, 1, in, 1, shown, out, err));
    REFUSED(LW_ERR_SHAPE, "number of links is -1; permitted 0 to 32767",
            lw_plant_connect(2, parts, -1, none, 1, in, 1, shown, out, err));
    REFUSED(LW_ERR_ARGUMENT, "link from \"a.out\" to \"b.in\": sign is 0.5; permitted are 1 and -1",
            CONNECT(parts, half, in, shown));
    REFUSED(LW_ERR_DUPLICATE, "link from \"a.out\" to \"b.in\" is stated twice",
            CONNECT(parts, same, in, shown));
    REFUSED(LW_ERR_DUPLICATE, "input \"u\" drives \"a.in\" twice",
            lw_plant_connect(2, parts, 0, none, 2, in_twice, 1, shown, out, err));
    REFUSED(LW_ERR_NAME, "input \"u.v\": a name holds no dot; dots part a thing from its signals",
            lw_plant_connect(2, parts, 0, none, 1, in_dotted, 1, shown, out, err));
    REFUSED(LW_ERR_DUPLICATE, "two outputs are named \"y\"",
            lw_plant_connect(2, parts, 0, none, 1, in, 2, out_twice, out, err));
    REFUSED(LW_ERR_NAME, "output: the name is missing or empty",
            lw_plant_connect(2, parts, 0, none, 1, in, 1, out_empty, out, err));
    REFUSED(LW_ERR_DUPLICATE,
            "an output and a state are both named \"a_out\", and the output is not that state",
            lw_plant_connect(2, parts, 0, none, 1, in, 1, clash, out, err));
    free_plants(1, p);
}
END_TEST

START_TEST(too_many_states_and_inputs_are_refused)
{
    static lw_port inputs[33];
    static char names[33][8];
    static double unit[64 * 64];
    lw_plant *p[2] = {lag(1)};
    MADE(p[1],
         lw_plant_state_space(64, 1, 1, unit, unit, unit, NULL, NULL, NULL, NULL, NULL, out, err));
    const lw_part parts[] = {{"a", p[0]}, {"b", p[1]}};
    const lw_port shown = {"y", "a.out"};
    for (int i = 0; i < 33; i++) {
        snprintf(names[i], sizeof names[i], "u%d", i);
        inputs[i] = (lw_port){names[i], "a.in"};
    }
    REFUSED(LW_ERR_SHAPE, "the parts have 65 states together; permitted 0 to 64",
            lw_plant_connect(2, parts, 0, NULL, 1, inputs, 1, &shown, out, err));
    REFUSED(LW_ERR_SHAPE, "number of inputs is 33; permitted 0 to 32",
            lw_plant_connect(1, parts, 0, NULL, 33, inputs, 1, &shown, out, err));
    free_plants(2, p);
}
END_TEST

START_TEST(shorthands_take_plants_of_one_input_and_output)
{
    const lw_dc_machine m = {1, 1, 1, NAN, 1, 0};
    lw_plant *p[2] = {lag(1)};
    MADE(p[1], lw_plant_dc_machine(&m, out, err));
    REFUSED(LW_ERR_SHAPE, "plant 2 has 2 inputs and 2 outputs; permitted 1 and 1",
            lw_plant_series(p[0], p[1], out, err));
    REFUSED(LW_ERR_SHAPE, "plant 1 has 2 inputs and 2 outputs; permitted 1 and 1",
            lw_plant_parallel(p[1], p[0], 1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "sign is 0; permitted are 1 and -1",
            lw_plant_feedback(p[0], p[0], 0, out, err));
    free_plants(2, p);
}
END_TEST

// ---- lack of memory

// A chain of n parts by turns without and with a delay, each output shown.
static lw_status chain(int n, lw_plant *const *p, lw_plant **out, lw_error *err)
{
    static char part[64][8], in[64][16], shown[64][16];
    lw_part parts[64];
    lw_link links[64];
    for (int i = 0; i < n; i++) {
        snprintf(part[i], sizeof part[i], "p%d", i);
        snprintf(in[i], sizeof in[i], "p%d.in", i);
        snprintf(shown[i], sizeof shown[i], "p%d.out", i);
        parts[i] = (lw_part){part[i], p[i % 2]};
        if (i > 0)
            links[i - 1] = (lw_link){shown[i - 1], in[i], 1};
    }
    const lw_port input = {"u", in[0]}, outputs[] = {{"y", shown[n - 1]}, {"z", shown[n - 1]}};
    return lw_plant_connect(n, parts, n - 1, links, 1, &input, 2, outputs, out, err);
}

static lw_status join(int i, lw_plant *const *p, lw_plant **out, lw_error *err)
{
    switch (i) {
    case 0:
        return chain(3, p, out, err);
    case 1:
        return chain(64, p, out, err);
    case 2:
        return lw_plant_series(p[0], p[1], out, err);
    case 3:
        return lw_plant_parallel(p[0], p[2], -1, out, err);
    default:
        return lw_plant_feedback(p[0], p[2], -1, out, err);
    }
}

START_TEST(a_long_chain_adds_up_all_its_delays)
{
    lw_plant *p[3] = {lag(1), late(lag(1), 0.5)};
    MADE(p[2], chain(64, p, out, err));
    ck_assert_int_eq(lw_plant_look(p[2]).n_x, 64);
    ck_assert(lw_plant_look(p[2]).delay[0] == 16);
    free_plants(3, p);
}
END_TEST

START_TEST(lack_of_memory_is_said_and_leaves_nothing_behind)
{
    lw_plant *p[3] = {lag(1), late(lag(1), 1), lag(2)};
    for (int i = 0; i < 5; i++) {
        lw_plant *made = NULL;
        long n = 1; // the allocation that fails first
        for (; n < 40; n++) {
            lw_error err = {LW_OK, ""};
            lw__alloc_fail_after(n);
            lw_status status = join(i, p, &made, &err);
            lw__alloc_fail_after(-1);
            if (status == LW_OK)
                break;
            ck_assert_int_eq(status, LW_ERR_MEMORY);
            ck_assert_int_eq(err.status, LW_ERR_MEMORY);
            ck_assert(strcmp(err.text, "no memory to connect plants") == 0 ||
                      strcmp(err.text, "no memory for a plant") == 0);
            ck_assert_ptr_null(made);
        }
        ck_assert(n > 3 && n < 40);
        lw_plant_free(made);
    }
    free_plants(3, p);
}
END_TEST

static void add_delays(TCase *t)
{
    tcase_add_test(t, a_delay_at_an_external_input_stays_there);
    tcase_add_test(t, delays_along_an_open_chain_add_up_at_its_beginning);
    tcase_add_test(t, a_moved_delay_leaves_every_path_as_late_as_before);
    tcase_add_test(t, a_long_chain_adds_up_all_its_delays);
    tcase_add_test(t, sums_of_delays_agree_despite_their_rounding);
    tcase_add_test(t, a_delay_inside_feedback_is_refused_by_part_and_input);
    tcase_add_test(t, a_part_that_would_need_two_delays_is_refused_with_both);
    tcase_add_test(t, an_input_that_would_need_two_delays_is_refused_with_both);
    tcase_add_test(t, a_part_before_a_delay_must_start_at_rest);
    tcase_add_test(t, what_ends_in_states_alone_is_not_late);
}

static void add_refusals(TCase *t)
{
    tcase_add_test(t, ports_that_are_not_there_are_offered_the_nearest);
    tcase_add_test(t, a_very_long_name_of_a_part_that_is_not_there_is_cut_between_characters);
    tcase_add_test(t, connections_are_refused_by_field);
    tcase_add_test(t, too_many_states_and_inputs_are_refused);
    tcase_add_test(t, shorthands_take_plants_of_one_input_and_output);
    tcase_add_test(t, lack_of_memory_is_said_and_leaves_nothing_behind);
}

int main(void)
{
    Suite *suite = suite_create("plant connect");
    TCase *whole = tcase_create("whole"), *loops = tcase_create("loops"),
          *delays = tcase_create("delays"), *refusals = tcase_create("refusals");
    tcase_add_test(whole, series_parallel_and_feedback_follow_their_formulas);
    tcase_add_test(whole, states_are_named_by_part_and_keep_the_order_of_the_parts);
    tcase_add_test(whole, the_order_of_parts_and_links_permutes_states_and_nothing_else);
    tcase_add_test(whole, an_input_sums_links_and_external_inputs_and_is_zero_without);
    tcase_add_test(whole, one_part_alone_keeps_its_numbers);
    tcase_add_test(whole, a_connection_shows_up_to_128_outputs_and_may_lack_inputs);
    tcase_add_test(loops, an_algebraic_loop_names_its_signals_in_order);
    tcase_add_test(loops, a_loop_is_told_from_its_first_part_whatever_leads_into_it);
    tcase_add_test(loops, a_state_in_the_ring_or_a_direct_path_beside_it_is_no_loop);
    tcase_add_test(loops, a_loop_is_found_exactly_where_there_is_one);
    add_delays(delays);
    add_refusals(refusals);
    suite_add_tcase(suite, whole);
    suite_add_tcase(suite, loops);
    suite_add_tcase(suite, delays);
    suite_add_tcase(suite, refusals);
    return run_suite(suite);
}
