// Construction of single plants: state space, copies, transfer functions, zeros and poles, ready
// plants; what is refused, in which words; lack of memory.

#include "plants.h"

#include "base/alloc.h"

// ---- the object

static const double a2[] = {0, 1, -4, -0.4}, b2[] = {0, 1}, c2[] = {1, 0};

static lw_status swing(const char *const *states, const char *const *outputs, lw_plant **out,
                       lw_error *err)
{
    return lw_plant_state_space(2, 1, 1, a2, b2, c2, NULL, NULL, states, NULL, outputs, out, err);
}

START_TEST(names_left_out_are_numbered_and_lone_ports_are_not)
{
    const double a[4] = {0}, b[6] = {0}, c[4] = {0};
    lw_plant *p;
    MADE(p, lw_plant_state_space(2, 3, 2, a, b, c, NULL, NULL, NULL, NULL, NULL, out, err));
    lw_plant_view v = lw_plant_look(p);
    ck_assert_str_eq(v.state_names[0], "x1");
    ck_assert_str_eq(v.state_names[1], "x2");
    ck_assert_str_eq(v.input_names[0], "in1");
    ck_assert_str_eq(v.input_names[2], "in3");
    ck_assert_str_eq(v.output_names[1], "out2");
    lw_plant_free(p);
    MADE(p, swing(NULL, NULL, out, err));
    v = lw_plant_look(p);
    ck_assert_str_eq(v.input_names[0], "in");
    ck_assert_str_eq(v.output_names[0], "out");
    lw_plant_free(p);
}
END_TEST

START_TEST(a_plant_keeps_its_own_copy_of_everything)
{
    double a[] = {1, 2, 3, 4}, b[] = {5, 6}, c[] = {7, 8}, d[] = {9}, start[] = {10, 11};
    char angle[] = "angle", rate[] = "rate", torque[] = "torque", seen[] = "seen";
    const char *states[] = {angle, rate}, *inputs[] = {torque}, *outputs[] = {seen};
    lw_plant *p;
    MADE(p, lw_plant_state_space(2, 1, 1, a, b, c, d, start, states, inputs, outputs, out, err));
    memset(a, 0, sizeof a);
    memset(b, 0, sizeof b);
    c[0] = c[1] = d[0] = start[0] = start[1] = 0;
    angle[0] = rate[0] = torque[0] = seen[0] = '?';
    states[0] = inputs[0] = outputs[0] = NULL;
    lw_plant_view v = lw_plant_look(p);
    ck_assert_int_eq(v.n_x * 100 + v.n_u * 10 + v.n_y, 211);
    for (int i = 0; i < 4; i++)
        ck_assert(v.a[i] == i + 1);
    for (int i = 0; i < 2; i++)
        ck_assert(v.b[i] == i + 5 && v.c[i] == i + 7 && v.start[i] == i + 10);
    ck_assert(v.d[0] == 9 && v.delay[0] == 0);
    ck_assert_str_eq(v.state_names[0], "angle");
    ck_assert_str_eq(v.state_names[1], "rate");
    ck_assert_str_eq(v.input_names[0], "torque");
    ck_assert_str_eq(v.output_names[0], "seen");
    lw_plant_free(p);
}
END_TEST

START_TEST(a_gain_has_no_states_and_a_free_motion_no_inputs)
{
    const double gain = 3, unit = 1;
    lw_plant *p;
    MADE(p,
         lw_plant_state_space(0, 1, 1, NULL, NULL, NULL, &gain, NULL, NULL, NULL, NULL, out, err));
    ck_assert(lw_plant_look(p).d[0] == 3);
    lw_plant_free(p);
    MADE(p,
         lw_plant_state_space(1, 0, 1, &unit, NULL, &unit, NULL, NULL, NULL, NULL, NULL, out, err));
    ck_assert_int_eq(lw_plant_look(p).n_u, 0);
    lw_plant_free(p);
}
END_TEST

START_TEST(an_output_shares_a_states_name_only_where_it_is_that_state)
{
    static const char *const states[] = {"angle", "rate"}, *const first[] = {"angle"},
                             *const second[] = {"rate"};
    const double c[] = {1, 0}, twice[] = {2, 0}, d = 0.5;
    const char words[] = "an output and a state are both named \"%s\", and the output is not that "
                         "state";
    char text[120];
    lw_plant *p;
    MADE(p, swing(states, first, out, err));
    lw_plant_free(p);
    snprintf(text, sizeof text, words, "rate");
    REFUSED(LW_ERR_DUPLICATE, text, swing(states, second, out, err));
    snprintf(text, sizeof text, words, "angle");
    REFUSED(
        LW_ERR_DUPLICATE, text,
        lw_plant_state_space(2, 1, 1, a2, b2, twice, NULL, NULL, states, NULL, first, out, err));
    REFUSED(LW_ERR_DUPLICATE, text,
            lw_plant_state_space(2, 1, 1, a2, b2, c, &d, NULL, states, NULL, first, out, err));
}
END_TEST

START_TEST(names_of_a_plant_are_checked)
{
    static const char *const twice[] = {"angle", "angle"}, *const dotted[] = {"angle", "a.b"},
                             *const empty[] = {"", "rate"}, *const good[] = {"angle", "rate"};
    REFUSED(LW_ERR_DUPLICATE, "two states are named \"angle\"", swing(twice, NULL, out, err));
    REFUSED(LW_ERR_NAME, "state \"a.b\": a name holds no dot; dots part a thing from its signals",
            swing(dotted, NULL, out, err));
    REFUSED(LW_ERR_NAME, "state: the name is missing or empty", swing(empty, NULL, out, err));
    REFUSED(LW_ERR_NAME, "output: the name is missing or empty", swing(good, empty, out, err));
    REFUSED(LW_ERR_NAME, "output \"a.b\": a name holds no dot; dots part a thing from its signals",
            swing(good, dotted + 1, out, err));
    // an input may be named like an output
    lw_plant *p;
    MADE(p, lw_plant_state_space(2, 1, 1, a2, b2, c2, NULL, NULL, NULL, good, good, out, err));
    lw_plant_free(p);
}
END_TEST

START_TEST(sizes_and_numbers_of_a_plant_are_checked)
{
#define SPACE(n_x, n_u, n_y, a, b, c, d, start)                                                    \
    lw_plant_state_space(n_x, n_u, n_y, a, b, c, d, start, NULL, NULL, NULL, out, err)
    const double bad[] = {0, 0, NAN, 0}, endless[] = {0, -INFINITY};
    REFUSED(LW_ERR_SHAPE, "number of states is 65; permitted 0 to 64",
            SPACE(65, 1, 1, a2, b2, c2, NULL, NULL));
    REFUSED(LW_ERR_SHAPE, "number of states is -1; permitted 0 to 64",
            SPACE(-1, 1, 1, a2, b2, c2, NULL, NULL));
    REFUSED(LW_ERR_SHAPE, "number of inputs is 33; permitted 0 to 32",
            SPACE(2, 33, 1, a2, b2, c2, NULL, NULL));
    REFUSED(LW_ERR_SHAPE, "number of outputs is 33; permitted 0 to 32",
            SPACE(2, 1, 33, a2, b2, c2, NULL, NULL));
    REFUSED(LW_ERR_SHAPE, "a plant needs a state or an output",
            SPACE(0, 1, 0, NULL, NULL, NULL, NULL, NULL));
    REFUSED(LW_ERR_ARGUMENT, "B is missing", SPACE(2, 1, 1, a2, NULL, c2, NULL, NULL));
    REFUSED(LW_ERR_NOT_FINITE, "A[2][1] is nan; a finite number is wanted",
            SPACE(2, 1, 1, bad, b2, c2, NULL, NULL));
    REFUSED(LW_ERR_NOT_FINITE, "B[2][1] is -inf; a finite number is wanted",
            SPACE(2, 1, 1, a2, endless, c2, NULL, NULL));
    REFUSED(LW_ERR_NOT_FINITE, "C[1][2] is -inf; a finite number is wanted",
            SPACE(2, 1, 1, a2, b2, endless, NULL, NULL));
    REFUSED(LW_ERR_NOT_FINITE, "D[1][1] is nan; a finite number is wanted",
            SPACE(2, 1, 1, a2, b2, c2, bad + 2, NULL));
    REFUSED(LW_ERR_NOT_FINITE, "start of x2 is -inf; a finite number is wanted",
            SPACE(2, 1, 1, a2, b2, c2, NULL, endless));
    ck_assert_int_eq(
        lw_plant_state_space(65, 1, 1, a2, b2, c2, NULL, NULL, NULL, NULL, NULL, NULL, NULL),
        LW_ERR_SHAPE); // without a place for the message
}
END_TEST

// ---- copies

START_TEST(copies_differ_only_in_what_was_replaced)
{
    static const char *const states[] = {"angle", "rate"}, *const outputs[] = {"seen"};
    const double start[] = {0.1, -0.2};
    lw_plant *p[5];
    MADE(p[0], swing(NULL, NULL, out, err));
    MADE(p[1], lw_plant_delayed(p[0], "in", 1e-3, out, err));
    MADE(p[2], lw_plant_started(p[1], 2, start, out, err));
    MADE(p[3], lw_plant_renamed(p[2], states, NULL, outputs, out, err));
    MADE(p[4], lw_plant_delayed(p[3], "in", 2e-3, out, err));
    lw_plant_view first = lw_plant_look(p[0]), last = lw_plant_look(p[4]);
    ck_assert(first.delay[0] == 0 && first.start[1] == 0);
    ck_assert_str_eq(first.state_names[1], "x2");
    ck_assert(last.delay[0] == 1e-3 + 2e-3); // delays add up
    ck_assert_mem_eq(last.start, start, sizeof start);
    ck_assert_mem_eq(last.a, a2, sizeof a2);
    ck_assert_mem_eq(last.b, b2, sizeof b2);
    ck_assert_mem_eq(last.c, c2, sizeof c2);
    ck_assert_str_eq(last.state_names[1], "rate");
    ck_assert_str_eq(last.input_names[0], "in");
    ck_assert_str_eq(last.output_names[0], "seen");
    free_plants(5, p);
}
END_TEST

START_TEST(copies_are_refused_by_name_and_value)
{
    static const char *const twice[] = {"a", "a"};
    const double start[] = {0, NAN};
    lw_plant *p;
    MADE(p, lw_plant_winding(1, 1, out, err));
    REFUSED(LW_ERR_NAME, "no input \"voltag\"; nearest \"voltage\"",
            lw_plant_delayed(p, "voltag", 1, out, err));
    REFUSED(LW_ERR_NAME, "no input \"speed\"", lw_plant_delayed(p, "speed", 1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "delay of voltage is -1; permitted 0 to 9e+06 s",
            lw_plant_delayed(p, "voltage", -1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "delay of voltage is nan; permitted 0 to 9e+06 s",
            lw_plant_delayed(p, "voltage", NAN, out, err));
    REFUSED(LW_ERR_ARGUMENT, "delay of voltage is 10000000; permitted 0 to 9e+06 s",
            lw_plant_delayed(p, "voltage", 1e7, out, err));
    REFUSED(LW_ERR_SHAPE, "start has 2 numbers; the plant has 1 states",
            lw_plant_started(p, 2, start, out, err));
    REFUSED(LW_ERR_NOT_FINITE, "start of current is nan; a finite number is wanted",
            lw_plant_started(p, 1, start + 1, out, err));
    lw_plant_free(p);
    MADE(p, swing(NULL, NULL, out, err));
    REFUSED(LW_ERR_DUPLICATE, "two states are named \"a\"",
            lw_plant_renamed(p, twice, NULL, NULL, out, err));
    lw_plant_free(p);
}
END_TEST

// A delay is taken back by nothing: one that is negative is refused also where the sum is not.
START_TEST(a_negative_delay_is_refused_on_top_of_a_larger_one)
{
    lw_plant *p, *late;
    MADE(p, lw_plant_integrator(1, out, err));
    MADE(late, lw_plant_delayed(p, "in", 1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "delay of in is -0.5; permitted 0 to 9e+06 s",
            lw_plant_delayed(late, "in", -0.5, out, err));
    lw_plant_free(p);
    lw_plant_free(late);
}
END_TEST

// ---- transfer functions

static lw_status transfer(int n_num, const double *num, int n_den, const double *den,
                          lw_plant **out, lw_error *err)
{
    const lw_poly top = {n_num, num}, bottom = {n_den, den};
    return lw_plant_transfer(1, 1, &top, &bottom, NULL, NULL, out, err);
}

static int is_power_of_two(double v)
{
    int e;
    return frexp(v, &e) == 0.5;
}

// x1' = -a1 x1 - a2 x2 - a3 x3 + u, x(k+1)' = xk, up to powers of two.
START_TEST(a_transfer_function_is_in_controllable_canonical_form)
{
    const double num[] = {5, 7}, den[] = {2, 6, 8e4, 4e7}, monic[] = {3, 4e4, 2e7};
    const double y[] = {0, 2.5, 3.5};
    lw_plant *p;
    MADE(p, transfer(2, num, 4, den, out, err));
    lw_plant_view v = lw_plant_look(p);
    ck_assert_int_eq(v.n_x, 3);
    double scale = 1; // of state k against the form
    for (int k = 0; k < 3; k++) {
        ck_assert(v.a[k] == -monic[k] * scale && v.c[k] == y[k] * scale);
        ck_assert(v.b[k] == (k == 0 ? 1 : 0));
        if (k == 2)
            continue;
        double below = v.a[(k + 1) * 3 + k]; // old scale over new
        ck_assert(is_power_of_two(below));
        scale /= below;
    }
    for (int k = 3; k < 9; k++)
        ck_assert(k == 3 || k == 7 || v.a[k] == 0);
    ck_assert(scale < 1); // 2e7 is brought down
    ck_assert(v.d[0] == 0);
    lw_plant_free(p);
}
END_TEST

START_TEST(a_transfer_function_may_have_the_degree_of_its_denominator)
{
    const double num[] = {3, 1, 4}, den[] = {2, 6, 8}, gain[] = {6}, unit[] = {4};
    lw_plant *p;
    MADE(p, transfer(3, num, 3, den, out, err));
    ck_assert(lw_plant_look(p).d[0] == 1.5);
    const number s = 3.0 * I;
    ck_response(response(p, 0, 0, s), (3 * s * s + s + 4) / (2 * s * s + 6 * s + 8), 1e-14);
    lw_plant_free(p);
    MADE(p, transfer(1, gain, 1, unit, out, err));
    ck_assert_int_eq(lw_plant_look(p).n_x, 0);
    ck_assert(lw_plant_look(p).d[0] == 1.5);
    lw_plant_free(p);
}
END_TEST

static const double one[] = {1}, two[] = {2}, nought[] = {0}, lag[] = {1, 1}, slow[] = {1, 0.1},
                    pair[] = {1, 0.2, 4};

START_TEST(entries_of_a_column_share_states_where_denominators_are_equal)
{
    const lw_poly num[] = {{1, one}, {1, two}, {1, nought}, {1, one}, {2, lag}, {1, two}};
    const lw_poly den[] = {{3, pair}, {2, lag}, {2, slow}, {2, lag}, {3, pair}, {2, slow}};
    static const char *const inputs[] = {"u", "v"}, *const outputs[] = {"p", "q", "r"};
    const number s = 0.3 + 2 * I, g_pair = 1 / (s * s + 0.2 * s + 4), g_lag = 1 / (s + 1),
                 g_slow = 1 / (s + 0.1);
    // 3 x 2: column u has pair, none (0), pair again; column v has lag, lag, slow
    const number want[] = {g_pair, 2 * g_lag, 0, g_lag, (s + 1) * g_pair, 2 * g_slow};
    lw_plant *p;
    MADE(p, lw_plant_transfer(3, 2, num, den, inputs, outputs, out, err));
    lw_plant_view v = lw_plant_look(p);
    ck_assert_int_eq(v.n_x, 2 + 3); // one pair for u; lag, lag, slow for v
    ck_assert_str_eq(v.state_names[4], "x5");
    ck_assert_str_eq(v.input_names[1], "v");
    ck_assert_str_eq(v.output_names[2], "r");
    ck_assert(v.b[0] == 1 && v.b[2 * 2 + 1] == 1 && v.b[3 * 2 + 1] == 1 && v.b[4 * 2 + 1] == 1);
    for (int k = 0; k < 6; k++) {
        if (want[k] == 0)
            ck_assert(response(p, k / 2, k % 2, s) == 0);
        else
            ck_response(response(p, k / 2, k % 2, s), want[k], 1e-14); // elimination, few states
    }
    lw_plant_free(p);
}
END_TEST

START_TEST(entries_of_a_column_with_one_denominator_have_its_states_once)
{
    const lw_poly num[] = {{1, one}, {2, lag}, {1, nought}},
                  den[] = {{3, pair}, {3, pair}, {2, lag}};
    lw_plant *p;
    MADE(p, lw_plant_transfer(3, 1, num, den, NULL, NULL, out, err));
    ck_assert_int_eq(lw_plant_look(p).n_x, 2);
    const number s = -0.2 + I, g = 1 / (s * s + 0.2 * s + 4);
    ck_response(response(p, 0, 0, s), g, 1e-14);
    ck_response(response(p, 1, 0, s), (s + 1) * g, 1e-14);
    ck_assert(response(p, 2, 0, s) == 0);
    lw_plant_free(p);
}
END_TEST

START_TEST(entries_without_a_numerator_decide_nothing)
{
    const lw_poly num[] = {{1, nought}, {1, two}, {2, lag}},
                  den[] = {{2, slow}, {2, lag}, {3, pair}};
    lw_plant *p;
    MADE(p, lw_plant_transfer(3, 1, num, den, NULL, NULL, out, err));
    ck_assert_int_eq(lw_plant_look(p).n_x, 1 + 2);
    const number s = -0.2 + I;
    ck_assert(response(p, 0, 0, s) == 0);
    ck_response(response(p, 1, 0, s), 2 / (s + 1), 1e-14);
    ck_response(response(p, 2, 0, s), (s + 1) / (s * s + 0.2 * s + 4), 1e-14);
    lw_plant_free(p);
}
END_TEST

START_TEST(transfer_functions_are_refused_by_field)
{
    const double cubic[] = {1, 0, 0, 0}, leading[] = {0, 1}, bad[] = {1, INFINITY};
    REFUSED(LW_ERR_ARGUMENT, "num over den has degree 3 over degree 2; the first may not be higher",
            transfer(4, cubic, 3, pair, out, err));
    REFUSED(LW_ERR_ARGUMENT, "num begins with 0; its highest power needs a coefficient",
            transfer(2, leading, 3, pair, out, err));
    REFUSED(LW_ERR_ARGUMENT, "den begins with 0; its highest power needs a coefficient",
            transfer(1, one, 2, leading, out, err));
    REFUSED(LW_ERR_ARGUMENT, "den is 0; a polynomial other than 0 is wanted",
            transfer(1, one, 1, nought, out, err));
    REFUSED(LW_ERR_ARGUMENT, "num is empty; permitted 1 coefficient or more",
            transfer(0, one, 2, lag, out, err));
    REFUSED(LW_ERR_ARGUMENT, "den is empty; permitted 1 coefficient or more",
            transfer(1, one, 1, NULL, out, err));
    REFUSED(LW_ERR_ARGUMENT, "den has 66 coefficients; permitted 1 to 65",
            transfer(1, one, 66, lag, out, err));
    REFUSED(LW_ERR_NOT_FINITE, "den[2] is inf; a finite number is wanted",
            transfer(1, one, 2, bad, out, err));
    const lw_poly num[] = {{1, one}, {2, bad}}, den[] = {{2, lag}, {2, lag}};
    REFUSED(LW_ERR_NOT_FINITE, "num[1][2][2] is inf; a finite number is wanted",
            lw_plant_transfer(1, 2, num, den, NULL, NULL, out, err));
    REFUSED(LW_ERR_SHAPE, "the transfer matrix is 0 x 1; permitted 1 x 1 to 32 x 32",
            lw_plant_transfer(0, 1, num, den, NULL, NULL, out, err));
}
END_TEST

START_TEST(a_transfer_matrix_of_too_many_states_is_refused)
{
    double long_den[41] = {1};
    lw_poly num[] = {{1, one}, {1, one}}, den[] = {{41, long_den}, {41, long_den}};
    REFUSED(LW_ERR_SHAPE, "the transfer matrix needs 80 states; permitted 64",
            lw_plant_transfer(1, 2, num, den, NULL, NULL, out, err));
    lw_plant *p;
    MADE(p, lw_plant_transfer(2, 1, num, den, NULL, NULL, out, err));
    ck_assert_int_eq(lw_plant_look(p).n_x, 40);
    lw_plant_free(p);
}
END_TEST

START_TEST(coefficients_that_overflow_by_division_are_refused)
{
    const double den[] = {1e-200, 1e200};
    REFUSED(LW_ERR_NOT_FINITE, "A[1][1] is -inf; a finite number is wanted",
            transfer(1, one, 2, den, out, err));
}
END_TEST

// ---- zeros and poles

#define ZEROS_POLES(zeros, poles, gain)                                                            \
    lw_plant_zeros_poles((int)(sizeof(zeros) / sizeof *(zeros)), zeros,                            \
                         (int)(sizeof(poles) / sizeof *(poles)), poles, gain, out, err)

static number product_of(int n, const double (*roots)[2], number s)
{
    number product = 1;
    for (int i = 0; i < n; i++)
        product *= s - (roots[i][0] + I * roots[i][1]);
    return product;
}

START_TEST(poles_stand_on_the_diagonal_in_their_order)
{
    const double poles[][2] = {{-3, 0}, {-1, 4}, {2, 0}, {-1, -4}, {-3, 0}, {0, 0}};
    const double diagonal[] = {-3, -1, -1, 2, -3, 0};
    lw_plant *p;
    MADE(p, lw_plant_zeros_poles(0, NULL, 6, poles, 5, out, err));
    lw_plant_view v = lw_plant_look(p);
    for (int i = 0; i < 6; i++) {
        ck_assert(v.a[i * 6 + i] == diagonal[i]);
        for (int k = i + 1; k < 6; k++) // above it only the pair's own element
            ck_assert(v.a[i * 6 + k] == 0 || (i == 1 && k == 2));
    }
    ck_assert(-v.a[1 * 6 + 2] * v.a[2 * 6 + 1] == 16);
    ck_assert_str_eq(v.state_names[5], "x6");
    ck_assert_str_eq(v.input_names[0], "in");
    ck_assert_str_eq(v.output_names[0], "out");
    lw_plant_free(p);
}
END_TEST

START_TEST(zeros_as_many_as_poles_leave_a_direct_path)
{
    const double zeros[][2] = {{-5, 1}, {-5, -1}}, poles[][2] = {{-1, 0}, {-2, 0}};
    lw_plant *p;
    MADE(p, ZEROS_POLES(zeros, poles, 3));
    ck_assert(lw_plant_look(p).d[0] == 3);
    ck_response(response(p, 0, 0, 0.5 * I),
                3 * product_of(2, zeros, 0.5 * I) / product_of(2, poles, 0.5 * I), 1e-15);
    lw_plant_free(p);
    MADE(p, lw_plant_zeros_poles(0, NULL, 0, NULL, -4, out, err));
    ck_assert(lw_plant_look(p).n_x == 0 && lw_plant_look(p).d[0] == -4);
    lw_plant_free(p);
}
END_TEST

#define MOST_POLES 9

typedef struct roots {
    int n_zeros, n_poles;
    double zeros[MOST_POLES][2], poles[MOST_POLES][2], gain;
} roots;

// Size over four decades, signs and pairs by chance, roots repeated often.
static int scatter(uint64_t *seed, int n, double (*to)[2])
{
    int at = 0;
    while (at < n) {
        double size = pow(10, 2 * uniform(seed)), turn = uniform(seed);
        int is_pair = at + 1 < n && below(seed, 2), repeats = at > 0 && !below(seed, 3);
        to[at][0] = size * turn;
        to[at][1] = is_pair ? size * sqrt(1 - turn * turn) : 0;
        if (repeats && to[at - 1][1] == 0) {
            to[at][0] = to[at - 1][0];
            to[at][1] = is_pair = 0;
        }
        at++;
        if (!is_pair)
            continue;
        to[at][0] = to[at - 1][0];
        to[at][1] = -to[at - 1][1];
        at++;
    }
    return n;
}

static roots scattered(uint64_t *seed)
{
    roots r = {.gain = 4 * uniform(seed)};
    r.n_poles = scatter(seed, 1 + below(seed, MOST_POLES), r.poles);
    r.n_zeros = scatter(seed, below(seed, r.n_poles + 1), r.zeros);
    return r;
}

// What one rounding of each element of A, B, C and D can do to the response at s:
// eps (|C| |R| (|A| |x| + |B|) + |C| |x| + |D|), R = (s I - A)^-1, x = R B (N. Higham, Accuracy
// and Stability of Numerical Algorithms, 2nd ed. 2002, section 7.2).
static double rounding_of(const lw_plant *plant, number s)
{
    lw_plant_view v = lw_plant_look(plant);
    int n = v.n_x;
    number inverse[MOST_POLES][MOST_POLES];
    double sum = fabs(v.d[0]), x[MOST_POLES] = {0};
    for (int k = 0; k < n; k++) {
        double unit[MOST_POLES] = {0};
        wide column[MOST_POLES];
        unit[k] = 1;
        resolve(n, v.a, s, unit, column);
        for (int i = 0; i < n; i++)
            inverse[i][k] = narrow(column[i]);
    }
    for (int i = 0; i < n; i++) {
        number own = 0;
        for (int k = 0; k < n; k++)
            own += inverse[i][k] * v.b[k];
        x[i] = cabs(own);
        sum += fabs(v.c[i]) * x[i];
    }
    for (int k = 0; k < n; k++) {
        double row = fabs(v.b[k]);
        for (int i = 0; i < n; i++)
            row += fabs(v.a[k * n + i]) * x[i];
        for (int i = 0; i < n; i++)
            sum += fabs(v.c[i]) * cabs(inverse[i][k]) * row;
    }
    return 0x1p-53 * sum;
}

typedef struct distance {
    double relative, roundings;
} distance;

// Largest distance of the plant of `built` from the formula of `r` along a slanted line: relative,
// and in roundings of the plant's elements.
static distance off_formula(const roots *built, const roots *r)
{
    distance most = {0, 0};
    lw_plant *p;
    MADE(p, lw_plant_zeros_poles(built->n_zeros, built->zeros, built->n_poles, built->poles,
                                 built->gain, out, err));
    for (double w = 1e-3; w < 1e4; w *= 20) {
        number s = w * (0.02 + I);
        number want =
            r->gain * product_of(r->n_zeros, r->zeros, s) / product_of(r->n_poles, r->poles, s);
        number got = response(p, 0, 0, s);
        most.relative = fmax(most.relative, off(got, want));
        most.roundings = fmax(most.roundings, cabs(got - want) / rounding_of(p, s));
    }
    lw_plant_free(p);
    return most;
}

// An element is rounded once or twice, the product of the formula 20 times, by chance. Most plants
// are as good as their product; those with a zero far below their poles cannot be, since D u and C
// x cancel there.
START_TEST(zeros_and_poles_have_the_response_of_their_product)
{
    uint64_t seed = 1;
    int n_good = 0;
    for (int k = 0; k < 1000; k++) {
        roots r = scattered(&seed);
        distance most = off_formula(&r, &r);
        ck_assert_msg(most.roundings < 6, "case %d is off by %g roundings, relative %g", k,
                      most.roundings, most.relative);
        n_good += most.relative < 1e-12;
    }
    ck_assert_msg(n_good > 900, "%d of 1000 are good", n_good);
}
END_TEST

START_TEST(a_root_moved_by_a_millionth_shows_in_the_response)
{
    uint64_t seed = 1;
    for (int k = 0; k < 300; k++) {
        roots r = scattered(&seed), wrong = r;
        for (int i = 0; i < r.n_poles; i++)
            wrong.poles[i][0] *= 1 + 1e-6;
        ck_assert(off_formula(&wrong, &r).roundings > 100);
    }
}
END_TEST

START_TEST(zeros_and_poles_are_refused_by_field)
{
    const double half[][2] = {{-1, 0}, {-1, 2}, {-1, -2.5}},
                 endless[][2] = {{-1, 0}, {0, -INFINITY}};
    const double full[][2] = {{-1, 0}, {-2, 0}};
    REFUSED(LW_ERR_ARGUMENT, "poles[2] is -1 + 2 i; its conjugate is missing",
            lw_plant_zeros_poles(0, NULL, 3, half, 1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "zeros[1] is -1 - 2.5 i; its conjugate is missing",
            lw_plant_zeros_poles(1, half + 2, 2, full, 1, out, err));
    REFUSED(LW_ERR_NOT_FINITE, "poles[2] imaginary part is -inf; a finite number is wanted",
            lw_plant_zeros_poles(0, NULL, 2, endless, 1, out, err));
    REFUSED(LW_ERR_ARGUMENT,
            "there are 2 zeros and 1 poles; no more zeros than poles are permitted",
            lw_plant_zeros_poles(2, full, 1, full, 1, out, err));
    REFUSED(LW_ERR_SHAPE, "number of poles is 65; permitted 0 to 64",
            lw_plant_zeros_poles(0, NULL, 65, full, 1, out, err));
    REFUSED(LW_ERR_SHAPE, "number of zeros is -1; permitted 0 to 64",
            lw_plant_zeros_poles(-1, NULL, 1, full, 1, out, err));
    REFUSED(LW_ERR_NOT_FINITE, "gain is nan; a finite number is wanted",
            lw_plant_zeros_poles(0, NULL, 1, full, NAN, out, err));
}
END_TEST

// ---- accuracy of realisations: propagated in double-double, so that what is off is the plant

// Step of 1e6 / ((s + 1)(s + 1e6)), by partial fractions.
static double spread_step(double t)
{
    return 1 - (1e6 * exp(-t) - exp(-1e6 * t)) / (1e6 - 1);
}

START_TEST(poles_a_million_apart_keep_both_their_time_scales)
{
    static const double times[] = {1e-7, 1e-6, 1e-4, 0.3, 2, 10};
    const double num[] = {1e6}, den[] = {1, 1000001, 1e6}, poles[][2] = {{-1, 0}, {-1e6, 0}};
    lw_plant *p[2];
    MADE(p[0], transfer(1, num, 3, den, out, err));
    MADE(p[1], lw_plant_zeros_poles(0, NULL, 2, poles, 1e6, out, err));
    for (int i = 0; i < 6; i++)
        for (int k = 0; k < 2; k++)
            // the closed form cancels: it is exact to rounding of 1
            ck_near(step_response(p[k], 0, 0, times[i]), spread_step(times[i]), 4e-16, 1);
    free_plants(2, p);
}
END_TEST

// 1 - e^-x sum over k < n of x^k / k!, for x > 0 by the tail of the series, which does not cancel.
static double repeated_step(int n, double x)
{
    double term = exp(-x), sum = 0;
    for (int k = 1; k < n + 80; k++) {
        term *= x / k;
        sum += k >= n ? term : 0;
    }
    return sum;
}

START_TEST(a_sixfold_pole_keeps_its_response)
{
    static const double times[] = {0.01, 0.5, 3, 9, 20};
    const double den[] = {1, 6, 15, 20, 15, 6, 1};
    const double poles[][2] = {{-1, 0}, {-1, 0}, {-1, 0}, {-1, 0}, {-1, 0}, {-1, 0}};
    lw_plant *p[2];
    MADE(p[0], transfer(1, one, 7, den, out, err));
    MADE(p[1], lw_plant_zeros_poles(0, NULL, 6, poles, 1, out, err));
    for (int i = 0; i < 5; i++)
        for (int k = 0; k < 2; k++)
            // relative, down to 1e-15 of the final value; the reference has rounding of exp and 80
            // terms
            ck_near(step_response(p[k], 0, 0, times[i]), repeated_step(6, times[i]), 3e-14, 0);
    free_plants(2, p);
}
END_TEST

// With a sixfold pole at -0.7, which no coefficient holds exactly, sections are exact still.
START_TEST(a_sixfold_pole_that_is_no_binary_number_keeps_its_response_in_sections)
{
    static const double times[] = {0.01, 0.5, 3, 9, 20};
    const double q = 0.7, poles[][2] = {{-q, 0}, {-q, 0}, {-q, 0}, {-q, 0}, {-q, 0}, {-q, 0}};
    lw_plant *p;
    MADE(p, lw_plant_zeros_poles(0, NULL, 6, poles, q * q * q * q * q * q, out, err));
    for (int i = 0; i < 5; i++)
        ck_near(step_response(p, 0, 0, times[i]), repeated_step(6, q * times[i]), 3e-14, 0);
    lw_plant_free(p);
}
END_TEST

START_TEST(an_unstable_pole_grows_by_its_exponential)
{
    const double poles[][2] = {{3, 0}, {3, 0}}, den[] = {1, -6, 9};
    lw_plant *p[2];
    MADE(p[0], transfer(1, one, 3, den, out, err));
    MADE(p[1], lw_plant_zeros_poles(0, NULL, 2, poles, 1, out, err));
    for (double t = 0.1; t < 20; t *= 3) {
        double want = (1 + exp(3 * t) * (3 * t - 1)) / 9;
        for (int k = 0; k < 2; k++)
            // glibc's exponential is good to an ulp; 0.1: the form cancels twenty to one
            ck_near(step_response(p[k], 0, 0, t), want, 2e-15, 0.05);
    }
    free_plants(2, p);
}
END_TEST

// A pair about to become a double real pole must not blow up, as it does with eigenvectors.
START_TEST(a_pair_near_the_real_axis_goes_over_into_a_double_pole)
{
    const double real[][2] = {{-2, 0}, {-2, 0}}, zeros[][2] = {{-1, 0}};
    lw_plant *p[2];
    MADE(p[0], ZEROS_POLES(zeros, real, 4));
    for (double im = 1e-4; im > 1e-300; im *= 1e-4) {
        const double near[][2] = {{-2, im}, {-2, -im}};
        MADE(p[1], ZEROS_POLES(zeros, near, 4));
        double limit = step_response(p[0], 0, 0, 0.8), got = step_response(p[1], 0, 0, 0.8);
        ck_assert(fabs(got - limit) <= im * im + 1e-15); // even in im
        for (int i = 0; i < 2; i++)
            ck_assert(fabs(lw_plant_look(p[1]).c[i]) < 10);
        lw_plant_free(p[1]);
    }
    lw_plant_free(p[0]);
}
END_TEST

// ---- ready plants

START_TEST(ready_plants_bear_the_names_of_the_header)
{
    const lw_two_mass_drive d = {1, 1, 1, NAN, 1, 1, 1, 0, 0, 0};
    static const char *const states[] = {"current", "motor_speed", "twist", "load_speed",
                                         "load_angle"};
    lw_plant *p[5];
    MADE(p[0], lw_plant_two_mass_drive(&d, out, err));
    MADE(p[1], lw_plant_second_order(1, 1, 1, out, err));
    MADE(p[2], lw_plant_winding(1, 1, out, err));
    MADE(p[3], lw_plant_integrator(1, out, err));
    MADE(p[4], lw_plant_first_order(1, 1, out, err));
    lw_plant_view v = lw_plant_look(p[0]);
    for (int i = 0; i < 5; i++) {
        ck_assert_str_eq(v.state_names[i], states[i]);
        ck_assert_str_eq(v.output_names[i], states[i]);
    }
    ck_assert_str_eq(v.input_names[0], "voltage");
    ck_assert_str_eq(v.input_names[1], "load_torque");
    ck_assert_str_eq(lw_plant_look(p[1]).state_names[0], "out");
    ck_assert_str_eq(lw_plant_look(p[1]).state_names[1], "rate");
    ck_assert_str_eq(lw_plant_look(p[2]).input_names[0], "voltage");
    ck_assert_str_eq(lw_plant_look(p[2]).output_names[0], "current");
    ck_assert_str_eq(lw_plant_look(p[3]).state_names[0], "out");
    ck_assert_str_eq(lw_plant_look(p[4]).output_names[0], "out");
    free_plants(5, p);
}
END_TEST

START_TEST(a_back_emf_constant_left_out_is_the_torque_constant)
{
    lw_dc_machine m = {0.8, 2e-3, 0.05, NAN, 4e-4, 1e-5};
    lw_plant *p[2];
    MADE(p[0], lw_plant_dc_machine(&m, out, err));
    m.back_emf_constant = 0.05;
    MADE(p[1], lw_plant_dc_machine(&m, out, err));
    ck_assert_mem_eq(lw_plant_look(p[0]).a, lw_plant_look(p[1]).a, 4 * sizeof(double));
    free_plants(2, p);
}
END_TEST

START_TEST(parameters_of_ready_plants_are_refused_by_name_value_and_range)
{
    const lw_dc_machine good = {1, 1, 1, NAN, 1, 0};
    lw_dc_machine m = good;
    REFUSED(LW_ERR_ARGUMENT, "gain is inf; a finite number is wanted",
            lw_plant_integrator(INFINITY, out, err));
    REFUSED(LW_ERR_ARGUMENT, "time_constant is 0; permitted above 0",
            lw_plant_first_order(1, 0, out, err));
    REFUSED(LW_ERR_ARGUMENT, "natural_frequency is -2; permitted above 0",
            lw_plant_second_order(1, -2, 0, out, err));
    REFUSED(LW_ERR_ARGUMENT, "damping is nan; a finite number is wanted",
            lw_plant_second_order(1, 2, NAN, out, err));
    REFUSED(LW_ERR_ARGUMENT, "resistance is -1; permitted 0 or more",
            lw_plant_winding(-1, 1, out, err));
    REFUSED(LW_ERR_ARGUMENT, "inductance is inf; permitted above 0",
            lw_plant_winding(1, INFINITY, out, err));
    m.inertia = -4e-4;
    REFUSED(LW_ERR_ARGUMENT, "inertia is -0.0004; permitted above 0",
            lw_plant_dc_machine(&m, out, err));
    m = good;
    m.torque_constant = NAN;
    REFUSED(LW_ERR_ARGUMENT, "torque_constant is nan; a finite number is wanted",
            lw_plant_dc_machine(&m, out, err));
    m = good;
    m.back_emf_constant = INFINITY;
    REFUSED(LW_ERR_ARGUMENT, "back_emf_constant is inf; a finite number is wanted",
            lw_plant_dc_machine(&m, out, err));
}
END_TEST

START_TEST(each_parameter_of_the_two_mass_drive_is_checked)
{
    static const struct {
        size_t at;
        const char *name, *permitted;
    } list[] = {
        {offsetof(lw_two_mass_drive, resistance), "resistance", "permitted 0 or more"},
        {offsetof(lw_two_mass_drive, inductance), "inductance", "permitted above 0"},
        {offsetof(lw_two_mass_drive, motor_inertia), "motor_inertia", "permitted above 0"},
        {offsetof(lw_two_mass_drive, load_inertia), "load_inertia", "permitted above 0"},
        {offsetof(lw_two_mass_drive, stiffness), "stiffness", "permitted 0 or more"},
        {offsetof(lw_two_mass_drive, damping), "damping", "permitted 0 or more"},
        {offsetof(lw_two_mass_drive, motor_friction), "motor_friction", "permitted 0 or more"},
        {offsetof(lw_two_mass_drive, load_friction), "load_friction", "permitted 0 or more"},
    };
    lw_two_mass_drive d = {1, 1, 1, NAN, 1, 1, 1, 0, 0, 0};
    char text[100];
    const double bad = -2;
    memcpy((char *)&d + list[_i].at, &bad, sizeof bad);
    snprintf(text, sizeof text, "%s is -2; %s", list[_i].name, list[_i].permitted);
    REFUSED(LW_ERR_ARGUMENT, text, lw_plant_two_mass_drive(&d, out, err));
}
END_TEST

// ---- lack of memory

#define N_CALLS 7

static lw_status call(int i, const lw_plant *plant, lw_plant **out, lw_error *err)
{
    static const double poles[][2] = {{-1, 1}, {-1, -1}};
    static const lw_two_mass_drive drive = {1, 1, 1, 1, 1, 1, 1, 0, 0, 0};
    switch (i) {
    case 0:
        return swing(NULL, NULL, out, err);
    case 1:
        return transfer(1, one, 3, pair, out, err);
    case 2:
        return lw_plant_zeros_poles(0, NULL, 2, poles, 1, out, err);
    case 3:
        return lw_plant_two_mass_drive(&drive, out, err);
    case 4:
        return lw_plant_delayed(plant, "in", 1, out, err);
    case 5:
        return lw_plant_started(plant, 2, NULL, out, err);
    default:
        return lw_plant_renamed(plant, NULL, NULL, NULL, out, err);
    }
}

START_TEST(lack_of_memory_is_said_and_leaves_nothing_behind)
{
    lw_plant *plant;
    MADE(plant, swing(NULL, NULL, out, err));
    for (int i = 0; i < N_CALLS; i++) {
        lw_plant *made = NULL;
        long n = 1; // the allocation that fails first
        for (; n < 10; n++) {
            lw_error err = {LW_OK, ""};
            lw__alloc_fail_after(n);
            lw_status status = call(i, plant, &made, &err);
            lw__alloc_fail_after(-1);
            if (status == LW_OK)
                break;
            ck_assert_int_eq(status, LW_ERR_MEMORY);
            ck_assert_str_eq(err.text, "no memory for a plant");
            ck_assert_ptr_null(made);
        }
        ck_assert(n >= 2 && n < 10);
        lw_plant_free(made);
    }
    lw_plant_free(plant);
    lw_plant_free(NULL);
}
END_TEST

static void add_object(TCase *t)
{
    tcase_add_test(t, names_left_out_are_numbered_and_lone_ports_are_not);
    tcase_add_test(t, a_plant_keeps_its_own_copy_of_everything);
    tcase_add_test(t, a_gain_has_no_states_and_a_free_motion_no_inputs);
    tcase_add_test(t, an_output_shares_a_states_name_only_where_it_is_that_state);
    tcase_add_test(t, names_of_a_plant_are_checked);
    tcase_add_test(t, sizes_and_numbers_of_a_plant_are_checked);
    tcase_add_test(t, copies_differ_only_in_what_was_replaced);
    tcase_add_test(t, copies_are_refused_by_name_and_value);
    tcase_add_test(t, a_negative_delay_is_refused_on_top_of_a_larger_one);
    tcase_add_test(t, lack_of_memory_is_said_and_leaves_nothing_behind);
}

static void add_transfer(TCase *t)
{
    tcase_add_test(t, a_transfer_function_is_in_controllable_canonical_form);
    tcase_add_test(t, a_transfer_function_may_have_the_degree_of_its_denominator);
    tcase_add_test(t, entries_of_a_column_share_states_where_denominators_are_equal);
    tcase_add_test(t, entries_of_a_column_with_one_denominator_have_its_states_once);
    tcase_add_test(t, entries_without_a_numerator_decide_nothing);
    tcase_add_test(t, transfer_functions_are_refused_by_field);
    tcase_add_test(t, a_transfer_matrix_of_too_many_states_is_refused);
    tcase_add_test(t, coefficients_that_overflow_by_division_are_refused);
}

static void add_sections(TCase *t)
{
    tcase_add_test(t, poles_stand_on_the_diagonal_in_their_order);
    tcase_add_test(t, zeros_as_many_as_poles_leave_a_direct_path);
    tcase_add_test(t, zeros_and_poles_have_the_response_of_their_product);
    tcase_add_test(t, a_root_moved_by_a_millionth_shows_in_the_response);
    tcase_add_test(t, zeros_and_poles_are_refused_by_field);
    tcase_add_test(t, poles_a_million_apart_keep_both_their_time_scales);
    tcase_add_test(t, a_sixfold_pole_keeps_its_response);
    tcase_add_test(t, a_sixfold_pole_that_is_no_binary_number_keeps_its_response_in_sections);
    tcase_add_test(t, an_unstable_pole_grows_by_its_exponential);
    tcase_add_test(t, a_pair_near_the_real_axis_goes_over_into_a_double_pole);
}

int main(void)
{
    Suite *suite = suite_create("plant");
    TCase *object = tcase_create("object"), *functions = tcase_create("transfer"),
          *sections = tcase_create("sections"), *ready = tcase_create("ready");
    add_object(object);
    add_transfer(functions);
    add_sections(sections);
    tcase_add_test(ready, ready_plants_bear_the_names_of_the_header);
    tcase_add_test(ready, a_back_emf_constant_left_out_is_the_torque_constant);
    tcase_add_test(ready, parameters_of_ready_plants_are_refused_by_name_value_and_range);
    tcase_add_loop_test(ready, each_parameter_of_the_two_mass_drive_is_checked, 0, 8);
    suite_add_tcase(suite, object);
    suite_add_tcase(suite, functions);
    suite_add_tcase(suite, sections);
    suite_add_tcase(suite, ready);
    return run_suite(suite);
}
