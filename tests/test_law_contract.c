// What holds of every law: one copy shared by count, purity of a step, lanes, jacobians, messages,
// lack of memory.

#include "laws.h"
#include "suite.h"

#include "base/alloc.h"

#include <latewood/law.h>
#include <string.h>

// ---- every ready law, by number

enum { X = 3, U = 2, Y = 2, W = 2, N_OTHERS = 12, N_LAWS = N_VARIANTS + N_OTHERS };

static lw_status other_law(int i, lw_law **out, lw_error *err)
{
    static const double b[] = {0.5, -0.25, 0.75, 0.1, 0.3},
                        a[] = {1.25, -0.5, 0.3, 0.2, -0.1, 0.05};
    static const double m[] = {0.5, 0.2, -0.3, 0.1, 0.7, 0.4, -0.2, 0.3, 0.6, 1.5, -0.9, 0.8};
    lw_observer o = {.n_x = X,
                     .n_u = U,
                     .n_y = Y,
                     .n_w = W,
                     .a = m,
                     .b = m,
                     .c = m + 1,
                     .l = m + 2,
                     .k = m + 3,
                     .n = m + 4,
                     .start = m,
                     .lo = NAN,
                     .hi = NAN};
    switch (i) {
    case 0:
        return lw_law_lead(1.5, 30, 400, NAN, NAN, out, err);
    case 1:
        return lw_law_lead(-1.5, 0, 40, -0.8, 0.6, out, err);
    case 2:
        return lw_law_z_transfer(1, b, 1, a, NAN, 0.5, out, err);
    case 3:
        return lw_law_z_transfer(2, b, 1, a, NAN, NAN, out, err);
    case 4:
        return lw_law_z_transfer(3, b, 3, a, -0.3, 0.3, out, err);
    case 5:
        return lw_law_z_transfer(5, b, 6, a, -0.5, NAN, out, err);
    case 6:
        return lw_law_state_feedback(1, 1, 0, m, NULL, -0.1, 0.1, out, err);
    case 7:
        return lw_law_state_feedback(1, X, 1, m, m + 5, NAN, NAN, out, err);
    case 8:
        return lw_law_state_feedback(U, X, W, m, m + 5, -0.4, 0.5, out, err);
    case 9:
        return lw_law_observer(&o, out, err);
    case 10:
        o.lo = -0.3;
        o.hi = 0.2;
        return lw_law_observer(&o, out, err);
    default:
        o.n_x = o.n_u = o.n_y = 1;
        o.n_w = 0;
        o.n = o.start = NULL;
        return lw_law_observer(&o, out, err);
    }
}

// Law `i` below N_LAWS, NULL where that number is not a permitted variant.
static lw_law *law_number(int i)
{
    lw_law *law = NULL;
    lw_error err = {LW_OK, ""};
    const char *kind;
    lw_pid p;
    if (i >= N_VARIANTS)
        ck_assert_msg(other_law(i - N_VARIANTS, &law, &err) == LW_OK, "%s", err.text);
    else if (variant(i, &kind, &p))
        ck_assert_msg(lw_law_pid(kind, &p, &law, &err) == LW_OK, "%s", err.text);
    return law;
}

static void fill(int n, double *v, uint64_t *seed)
{
    for (int i = 0; i < n; i++)
        v[i] = 2 * uniform(seed);
}

static lw_law_time some_time(uint64_t *seed)
{
    return (lw_law_time){.nominal = 0.001, .dt = 0.001 + 0.0005 * uniform(seed)};
}

// A state that a run can be in: `started` is 0 or 1.
static void fill_state(const lw_law_def *def, double *state, uint64_t *seed)
{
    fill(def->n_state, state, seed);
    for (int i = 0; i < def->n_state; i++)
        if (strcmp(def->state_names[i], "started") == 0)
            state[i] = state[i] > 0;
}

START_TEST(a_step_depends_on_its_arguments_only)
{
    for (int i = 0; i < N_LAWS; i++) {
        lw_law *law = law_number(i);
        if (law == NULL)
            continue;
        const lw_law_def *def = lw_law_look(law);
        uint64_t seed = (uint64_t)i;
        double in[2][LW_LAW_MAX_PORTS], was[2][LW_LAW_MAX_STATES], state[3][LW_LAW_MAX_STATES];
        double out[3][LW_LAW_MAX_PORTS];
        lw_law_time time = some_time(&seed);
        for (int k = 0; k < 3; k++) { // the first again after another
            if (k < 2) {
                fill(def->n_in, in[k], &seed);
                fill_state(def, was[k], &seed);
            }
            memcpy(state[k], was[k % 2], sizeof state[k]);
            memset(out[k], 0x55, sizeof out[k]);
            def->step(def->param, &time, in[k % 2], state[k], out[k]);
        }
        size_t out_size = sizeof(double) * (size_t)def->n_out;
        ck_assert_mem_eq(out[0], out[2], out_size);
        ck_assert_mem_ne(out[0], out[1], out_size);
        if (def->n_state > 0)
            ck_assert_mem_eq(state[0], state[2], sizeof(double) * (size_t)def->n_state);
        lw_law_free(law);
    }
}
END_TEST

// ---- lanes

enum { LANES = 5, STRIDE = 8 };

// Doubles that differ between `LANES` lanes of one law and single steps of another, padding
// included.
static int lane_differences(const lw_law_def *lanes, const lw_law_def *single, uint64_t seed)
{
    double in[LW_LAW_MAX_PORTS * STRIDE], out[LW_LAW_MAX_PORTS * STRIDE];
    double state[LW_LAW_MAX_STATES * STRIDE], want_out[LW_LAW_MAX_PORTS * STRIDE];
    double want_state[LW_LAW_MAX_STATES * STRIDE];
    int n = 0;
    lw_law_time time = some_time(&seed);
    fill(single->n_in * STRIDE, in, &seed);
    memset(out, 0x55, sizeof out);
    memset(want_out, 0x55, sizeof want_out);
    memset(state, 0x55, sizeof state);
    for (int w = 0; w < STRIDE; w++) {
        double one[LW_LAW_MAX_STATES];
        fill_state(single, one, &seed);
        for (int e = 0; e < single->n_state; e++)
            state[e * STRIDE + w] = one[e];
    }
    memcpy(want_state, state, sizeof state);
    for (int w = 0; w < LANES; w++) {
        double one_in[LW_LAW_MAX_PORTS], one[LW_LAW_MAX_STATES], one_out[LW_LAW_MAX_PORTS];
        for (int e = 0; e < single->n_in; e++)
            one_in[e] = in[e * STRIDE + w];
        for (int e = 0; e < single->n_state; e++)
            one[e] = state[e * STRIDE + w];
        single->step(single->param, &time, one_in, one, one_out);
        for (int e = 0; e < single->n_state; e++)
            want_state[e * STRIDE + w] = one[e];
        for (int e = 0; e < single->n_out; e++)
            want_out[e * STRIDE + w] = one_out[e];
    }
    lanes->lanes(lanes->param, &time, in, state, out, LANES, STRIDE);
    for (int e = 0; e < LW_LAW_MAX_PORTS * STRIDE; e++)
        n += !same_bits(out[e], want_out[e]);
    for (int e = 0; e < single->n_state * STRIDE; e++)
        n += !same_bits(state[e], want_state[e]);
    return n;
}

START_TEST(lanes_give_the_bits_of_single_steps_and_touch_nothing_else)
{
    int n_laws = 0;
    for (int i = 0; i < N_LAWS; i++) {
        lw_law *law = law_number(i);
        if (law == NULL)
            continue;
        const lw_law_def *def = lw_law_look(law);
        ck_assert(def->lanes != NULL);
        for (int k = 0; k < 10; k++)
            ck_assert_int_eq(lane_differences(def, def, (uint64_t)(i + 10000 * k)), 0);
        n_laws++;
        lw_law_free(law);
    }
    ck_assert_int_eq(n_laws, 560 + N_OTHERS);
}
END_TEST

START_TEST(the_comparison_of_lanes_notices_another_law)
{
    lw_pid p = lw_pid_default();
    lw_law *pi = NULL, *other = NULL;
    p.kp = 1;
    p.ki = 10;
    ck_assert_int_eq(lw_law_pid("pi", &p, &pi, NULL), LW_OK);
    p.ki = nextafter(p.ki, 11);
    p.kp = nextafter(p.kp, 2);
    ck_assert_int_eq(lw_law_pid("pi", &p, &other, NULL), LW_OK);
    ck_assert_int_gt(lane_differences(lw_law_look(pi), lw_law_look(other), 1), 0);
    lw_law_free(pi);
    lw_law_free(other);
}
END_TEST

// ---- jacobians

enum { MAX_ROWS = LW_LAW_MAX_PORTS + LW_LAW_MAX_STATES };

// A step as one vector function: inputs and states to outputs and next states.
static void call(const lw_law_def *def, const lw_law_time *time, const double *at, double *f)
{
    double state[LW_LAW_MAX_STATES];
    memcpy(state, at + def->n_in, sizeof(double) * (size_t)def->n_state);
    def->step(def->param, time, at, state, f);
    memcpy(f + def->n_out, state, sizeof(double) * (size_t)def->n_state);
}

typedef struct misfit {
    int n, n_compared, n_kinks;
} misfit;

// Entries of a jacobian that differ from differences of a step, at one point.
static void compare_jacobian(const lw_law_def *def, const lw_law_def *exact, uint64_t seed,
                             misfit *m)
{
    // every law is piecewise linear: a wide step has no error but rounding
    const double h = 0x1p-9;
    double at[MAX_ROWS], here[MAX_ROWS], up[MAX_ROWS], down[MAX_ROWS], j[MAX_ROWS * MAX_ROWS];
    int n_columns = def->n_in + def->n_state, n_rows = def->n_out + def->n_state;
    lw_law_time time = some_time(&seed);
    fill(def->n_in, at, &seed);
    fill_state(def, at + def->n_in, &seed);
    exact->jacobian(exact->param, &time, at, at + def->n_in, j);
    call(def, &time, at, here);
    for (int c = 0; c < n_columns; c++) {
        double middle = at[c];
        at[c] = middle + h;
        call(def, &time, at, up);
        at[c] = middle - h;
        call(def, &time, at, down);
        at[c] = middle;
        for (int r = 0; r < n_rows; r++) {
            double rise = (up[r] - here[r]) / h, fall = (here[r] - down[r]) / h;
            double got = j[r * n_columns + c];
            // values up to 1e4 (differences over 0.5 ms) rounded to 1e-12, over h
            double tolerance = 1e-9 * fmax(1, fabs(rise));
            int kink = fabs(rise - fall) > tolerance;
            m->n_kinks += kink;
            m->n += !kink && !(fabs(got - (up[r] - down[r]) / (2 * h)) <= tolerance);
            m->n_compared++;
        }
    }
}

START_TEST(jacobian_equals_central_differences)
{
    misfit all = {0, 0, 0};
    for (int i = 0; i < N_LAWS; i++) {
        lw_law *law = law_number(i);
        if (law == NULL)
            continue;
        const lw_law_def *def = lw_law_look(law);
        ck_assert(def->jacobian != NULL);
        misfit m = {0, 0, 0};
        for (int k = 0; k < 40; k++)
            compare_jacobian(def, def, (uint64_t)(i + 10000 * k), &m);
        ck_assert_msg(m.n == 0, "%s law %d: %d of %d", def->kind, i, m.n, m.n_compared);
        all.n_kinks += m.n_kinks;
        all.n_compared += m.n_compared;
        lw_law_free(law);
    }
    // points next to a kink are left out; they must stay few
    ck_assert_int_lt(all.n_kinks, all.n_compared / 100);
}
END_TEST

START_TEST(the_comparison_of_jacobians_notices_a_forgotten_limit)
{
    lw_law *limited = NULL, *other = NULL;
    misfit m = {0, 0, 0};
    ck_assert_int_eq(lw_law_lead(1.5, 30, 400, -0.5, 0.5, &limited, NULL), LW_OK);
    ck_assert_int_eq(lw_law_lead(1.5, 30, 400, NAN, NAN, &other, NULL), LW_OK);
    for (uint64_t k = 0; k < 40; k++)
        compare_jacobian(lw_law_look(limited), lw_law_look(other), k, &m);
    ck_assert_int_gt(m.n, 0);
    lw_law_free(limited);
    lw_law_free(other);
}
END_TEST

START_TEST(jacobian_is_zero_through_a_limit_and_that_of_the_inside_at_it)
{
    lw_pid p = lw_pid_default();
    p.kp = 2;
    p.ki = 8;
    p.lo = -1;
    p.hi = 1;
    p.anti_windup = LW_WINDUP_PAUSE;
    lw_law *law = NULL;
    ck_assert_int_eq(lw_law_pid("pi", &p, &law, NULL), LW_OK);
    const lw_law_def *def = lw_law_look(law);
    const lw_law_time time = {.nominal = 0.25, .dt = 0.25};
    // rows out, unlimited, integral; columns wanted, measured, integral
    const struct {
        double wanted, j[9];
    } at[] = {{0.25, {2, -2, 1, 2, -2, 1, 2, -2, 1}},
              {0.5, {2, -2, 1, 2, -2, 1, 2, -2, 1}}, // u = hi
              {0.75, {0, 0, 0, 2, -2, 1, 0, 0, 1}}};
    for (int i = 0; i < 3; i++) {
        const double in[2] = {at[i].wanted, 0}, state[1] = {0};
        double j[9];
        ck_assert_int_eq(def->jacobian(def->param, &time, in, state, j), 0);
        for (int k = 0; k < 9; k++)
            ck_assert_double_eq(j[k], at[i].j[k]);
    }
    lw_law_free(law);
}
END_TEST

// ---- names of ports and states

static void check_names(lw_law *law, const char *ins, const char *outs, const char *states)
{
    const lw_law_def *def = lw_law_look(law);
    const char *const *lists[] = {def->in_names, def->out_names, def->state_names};
    const int n[] = {def->n_in, def->n_out, def->n_state};
    const char *want[] = {ins, outs, states};
    for (int i = 0; i < 3; i++) {
        char joined[400] = "";
        for (int k = 0; k < n[i]; k++) {
            strcat(joined, k > 0 ? " " : "");
            strcat(joined, lists[i][k]);
        }
        ck_assert_str_eq(joined, want[i]);
    }
    lw_law_free(law);
}

START_TEST(pid_has_the_states_of_its_kind_only_and_begins_with_start)
{
    const struct {
        const char *kind;
        lw_integration integration;
        const char *states;
    } at[] = {
        {"p", LW_FORWARD_EULER, ""},
        {"pi", LW_FORWARD_EULER, "integral"},
        {"pi", LW_TRAPEZOIDAL, "integral previous_error started"},
        {"pd", LW_FORWARD_EULER, "derivative previous_input started"},
        {"pid", LW_FORWARD_EULER, "integral derivative previous_input started"},
        {"pid", LW_TRAPEZOIDAL, "integral previous_error derivative previous_input started"},
    };
    for (int i = 0; i < 6; i++) {
        lw_pid p = lw_pid_default();
        p.integration = at[i].integration;
        p.start = strchr(at[i].kind, 'i') != NULL ? 7 : 0;
        lw_law *law = NULL;
        ck_assert_int_eq(lw_law_pid(at[i].kind, &p, &law, NULL), LW_OK);
        ck_assert_str_eq(lw_law_look(law)->kind, at[i].kind);
        for (int k = 0; k < lw_law_look(law)->n_state; k++)
            ck_assert_double_eq(lw_law_look(law)->start[k], k == 0 ? p.start : 0);
        check_names(law, "wanted measured", "out unlimited", at[i].states);
    }
}
END_TEST

START_TEST(ports_have_a_number_only_where_there_are_several)
{
    const char *const ins[] = {[0] = "wanted measured",
                               [5] = "wanted measured",
                               [6] = "measured",
                               [7] = "wanted measured1 measured2 measured3",
                               [8] = "wanted1 wanted2 measured1 measured2 measured3",
                               [9] = "wanted1 wanted2 measured1 measured2",
                               [11] = "measured"};
    const char *const states[] = {[0] = "previous_error previous_output",
                                  [5] = "s1 s2 s3 s4 s5",
                                  [6] = "",
                                  [7] = "",
                                  [8] = "",
                                  [9] = "estimate1 estimate2 estimate3",
                                  [11] = "estimate1"};
    for (int i = 0; i < 12; i++)
        if (ins[i] != NULL)
            check_names(law_number(N_VARIANTS + i), ins[i],
                        i == 8 || i == 9 ? "out1 out2 unlimited1 unlimited2" : "out unlimited",
                        states[i]);
}
END_TEST

START_TEST(observer_begins_with_its_start)
{
    const lw_law_def *def;
    lw_law *law = law_number(N_VARIANTS + 9);
    def = lw_law_look(law);
    ck_assert_double_eq(def->start[0], 0.5);
    ck_assert_double_eq(def->start[1], 0.2);
    ck_assert_double_eq(def->start[2], -0.3);
    lw_law_free(law);
}
END_TEST

// ---- the object

static int n_freed;

static void count_freed(void *param)
{
    ck_assert_int_eq(*(int *)param, 5);
    n_freed++;
}

static int double_it(const void *param, const lw_law_time *time, const double *in, double *state,
                     double *out)
{
    (void)param;
    (void)time;
    out[0] = 2 * in[0] + state[0];
    return 0;
}

static const int five = 5;
static const char *const some_ins[] = {"angle"}, *const some_outs[] = {"torque"};
static const char *const some_states[] = {"sum"};

static lw_law_def some_def(void)
{
    return (lw_law_def){.kind = "doubling",
                        .n_in = 1,
                        .n_out = 1,
                        .n_state = 1,
                        .in_names = some_ins,
                        .out_names = some_outs,
                        .state_names = some_states,
                        .step = double_it,
                        .param = &five,
                        .free_param = count_freed,
                        .needs_serial = 1};
}

START_TEST(law_is_a_copy_and_its_last_holder_frees_the_parameter)
{
    char kind[] = "doubling", in[] = "angle";
    const char *ins[] = {in};
    double start[] = {4};
    lw_law_def def = some_def();
    def.kind = kind;
    def.in_names = ins;
    def.start = start;
    lw_law *law = NULL;
    n_freed = 0;
    ck_assert_int_eq(lw_law_new(&def, &law, NULL), LW_OK);
    kind[0] = in[0] = 'X';
    ins[0] = NULL;
    start[0] = 0;
    const lw_law_def *look = lw_law_look(law);
    ck_assert_str_eq(look->kind, "doubling");
    ck_assert_str_eq(look->in_names[0], "angle");
    ck_assert_str_eq(look->out_names[0], "torque");
    ck_assert_str_eq(look->state_names[0], "sum");
    ck_assert_double_eq(look->start[0], 4);
    ck_assert_int_eq(look->needs_serial, 1);
    ck_assert_ptr_eq(look->param, &five);
    ck_assert_ptr_eq(lw_law_hold(law), law);
    lw_law_free(law);
    ck_assert_int_eq(n_freed, 0);
    lw_law_free(law);
    ck_assert_int_eq(n_freed, 1);
    lw_law_free(NULL);
}
END_TEST

START_TEST(start_is_zero_unless_stated)
{
    lw_law_def def = some_def();
    lw_law *law = NULL;
    ck_assert_int_eq(lw_law_new(&def, &law, NULL), LW_OK);
    ck_assert_ptr_nonnull(lw_law_look(law)->start);
    ck_assert_double_eq(lw_law_look(law)->start[0], 0);
    lw_law_free(law);
}
END_TEST

// ---- messages

// The call fails with `status`, says `text` and leaves the law untouched.
#define CK_FAILS(call, status_, text_)                                                             \
    do {                                                                                           \
        lw_error err_ = {LW_OK, ""}, *err = &err_;                                                 \
        lw_law *made_ = NULL, **out = &made_;                                                      \
        ck_assert_int_eq((call), (status_));                                                       \
        ck_assert_str_eq(err_.text, (text_));                                                      \
        ck_assert_int_eq(err_.status, (status_));                                                  \
        ck_assert_ptr_null(made_);                                                                 \
    } while (0)

START_TEST(definition_that_cannot_be_a_law_is_refused_and_its_parameter_left)
{
    static const char *const twice[] = {"sum", "sum"}, *const torque[] = {"torque"};
    static const char *const dotted[] = {"a.b"};
    const double bad[] = {INFINITY};
    n_freed = 0;
    lw_law_def d = some_def();
    d.kind = NULL;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_ARGUMENT, "kind is missing");
    d = some_def();
    d.step = NULL;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_ARGUMENT, "step is missing");
    d = some_def();
    d.n_in = 33;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_SHAPE, "number of inputs is 33; permitted 0 to 32");
    d = some_def();
    d.n_state = -1;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_SHAPE, "number of states is -1; permitted 0 to 64");
    d = some_def();
    d.out_names = NULL;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_ARGUMENT, "names of outputs are missing");
    d = some_def();
    d.n_in = 2;
    d.in_names = twice;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_DUPLICATE, "two inputs are named \"sum\"");
    d = some_def();
    d.state_names = torque;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_DUPLICATE,
             "an output and a state are both named \"torque\"");
    d = some_def();
    d.start = bad;
    CK_FAILS(lw_law_new(&d, out, err), LW_ERR_NOT_FINITE,
             "start of sum is inf; a finite number is wanted");
    d = some_def();
    d.in_names = dotted;
    lw_error err = {LW_OK, ""};
    lw_law *law = NULL;
    ck_assert_int_eq(lw_law_new(&d, &law, &err), LW_ERR_NAME);
    ck_assert_msg(strncmp(err.text, "input \"a.b\"", 11) == 0, "%s", err.text);
    ck_assert_int_eq(n_freed, 0);
}
END_TEST

// A PID of this kind with fields set, by an expression.
#define CK_PID_FAILS(kind, set, text)                                                              \
    do {                                                                                           \
        lw_pid p = lw_pid_default();                                                               \
        set;                                                                                       \
        CK_FAILS(lw_law_pid(kind, &p, out, err), LW_ERR_ARGUMENT, text);                           \
    } while (0)

START_TEST(pid_says_which_field_is_wrong_and_what_is_permitted)
{
    lw_pid none = lw_pid_default();
    CK_FAILS(lw_law_pid("pip", &none, out, err), LW_ERR_NAME,
             "kind is \"pip\"; permitted \"p\", \"pi\", \"pd\" or \"pid\"");
    CK_PID_FAILS("p", p.kp = NAN, "kp is nan; a finite number is wanted");
    CK_PID_FAILS("p", p.ki = 2, "ki is 2; permitted 0, the law has no integral");
    CK_PID_FAILS("pd", p.start = 1, "start is 1; permitted 0, the law has no integral");
    CK_PID_FAILS("pd", p.update_first = 1,
                 "update_first is 1; permitted 0, the law has no integral");
    CK_PID_FAILS("p", p.integration = LW_TRAPEZOIDAL,
                 "integration is 1; permitted 0, the law has no integral");
    CK_PID_FAILS("pi", p.kd = 0.5, "kd is 0.5; permitted 0, the law has no derivative");
    CK_PID_FAILS("pi", p.filter = 1e-3, "filter is 0.001; permitted 0, the law has no derivative");
    CK_PID_FAILS("pi", p.derivative_on_measured = 1,
                 "derivative_on_measured is 1; permitted 0, the law has no derivative");
    CK_PID_FAILS("pid", p.filter = -1e-3, "filter is -0.001; permitted from 0 on");
    CK_PID_FAILS("pid", p.integration = (lw_integration)2,
                 "integration is 2; permitted 0 (forward Euler) and 1 (trapezoidal)");
    CK_PID_FAILS("pi", (p.lo = 2, p.hi = 2),
                 "limits are 2 and 2; the first must be below the second");
    CK_PID_FAILS("pi", p.lo = INFINITY,
                 "limits are inf and inf; the first must be below the second");
}
END_TEST

START_TEST(anti_windup_that_cannot_act_is_refused)
{
    CK_PID_FAILS("pi", p.anti_windup = (lw_anti_windup)4,
                 "anti_windup is 4; permitted 0 (none) to 3 (back-calculation)");
    CK_PID_FAILS("pd", p.anti_windup = LW_WINDUP_PAUSE,
                 "anti_windup is \"pause\"; permitted \"none\", the law has no integral");
    CK_PID_FAILS("pi", p.anti_windup = LW_WINDUP_CLAMP,
                 "anti_windup is \"clamp\"; without a limit \"none\" is permitted");
    CK_PID_FAILS("pi", (p.anti_windup = LW_WINDUP_CLAMP, p.lo = -1, p.hi = 1, p.start = 1.5),
                 "start is 1.5; permitted -1 to 1, where clamp holds the integral");
    CK_PID_FAILS("pi", (p.anti_windup = LW_WINDUP_BACK_CALCULATION, p.hi = 1),
                 "kb is 0; permitted above 0 with back-calculation");
    CK_PID_FAILS("pi", (p.anti_windup = LW_WINDUP_PAUSE, p.hi = 1, p.kb = 9),
                 "kb is 9; permitted 0 without back-calculation");
}
END_TEST

START_TEST(filters_say_which_coefficient_is_wrong)
{
    const double one[] = {1}, zero[] = {0}, tiny[] = {1e-200}, huge[] = {1, 1e200};
    const double bad[] = {1, NAN};
    CK_FAILS(lw_law_lead(INFINITY, 1, 1, NAN, NAN, out, err), LW_ERR_ARGUMENT,
             "gain is inf; a finite number is wanted");
    CK_FAILS(lw_law_lead(1, NAN, 1, NAN, NAN, out, err), LW_ERR_ARGUMENT,
             "zero is nan; a finite number is wanted");
    CK_FAILS(lw_law_lead(1, 1, 0, NAN, NAN, out, err), LW_ERR_ARGUMENT,
             "pole is 0; permitted above 0");
    CK_FAILS(lw_law_lead(1, 1, 2, 3, -3, out, err), LW_ERR_ARGUMENT,
             "limits are 3 and -3; the first must be below the second");
    CK_FAILS(lw_law_z_transfer(0, one, 1, one, NAN, NAN, out, err), LW_ERR_SHAPE,
             "b has 0 coefficients; permitted 1 to 65");
    CK_FAILS(lw_law_z_transfer(1, one, 66, one, NAN, NAN, out, err), LW_ERR_SHAPE,
             "a has 66 coefficients; permitted 1 to 65");
    CK_FAILS(lw_law_z_transfer(1, one, 1, zero, NAN, NAN, out, err), LW_ERR_ARGUMENT,
             "a0 is 0; any other number is permitted");
    CK_FAILS(lw_law_z_transfer(2, bad, 1, one, NAN, NAN, out, err), LW_ERR_NOT_FINITE,
             "b1 is nan; a finite number is wanted");
    CK_FAILS(lw_law_z_transfer(1, one, 2, bad, NAN, NAN, out, err), LW_ERR_NOT_FINITE,
             "a1 is nan; a finite number is wanted");
    CK_FAILS(lw_law_z_transfer(2, huge, 1, tiny, NAN, NAN, out, err), LW_ERR_NOT_FINITE,
             "b1 / a0 is 1e+200 / 1e-200, beyond the range of numbers");
}
END_TEST

START_TEST(feedback_says_which_matrix_or_size_is_wrong)
{
    const double m[] = {1, 2, 3, 4}, bad[] = {1, 2, 3, -INFINITY};
    CK_FAILS(lw_law_state_feedback(17, 1, 1, m, m, NAN, NAN, out, err), LW_ERR_SHAPE,
             "number of outputs is 17; permitted 1 to 16");
    CK_FAILS(lw_law_state_feedback(1, 0, 1, m, m, NAN, NAN, out, err), LW_ERR_SHAPE,
             "number of measured states is 0; permitted 1 to 32");
    CK_FAILS(lw_law_state_feedback(1, 30, 3, m, m, NAN, NAN, out, err), LW_ERR_SHAPE,
             "number of wanted values is 3; permitted 0 to 2");
    CK_FAILS(lw_law_state_feedback(1, 2, 1, m, NULL, NAN, NAN, out, err), LW_ERR_ARGUMENT,
             "N is missing");
    CK_FAILS(lw_law_state_feedback(2, 2, 0, bad, NULL, NAN, NAN, out, err), LW_ERR_NOT_FINITE,
             "K is -inf in row 2, column 2; a finite number is wanted");
    CK_FAILS(lw_law_state_feedback(1, 2, 0, m, NULL, 1, 0, out, err), LW_ERR_ARGUMENT,
             "limits are 1 and 0; the first must be below the second");
    lw_observer o = {
        .n_x = 2, .n_u = 1, .n_y = 1, .a = m, .b = m, .c = m, .l = m, .k = m, .lo = NAN, .hi = NAN};
    o.n_x = 65;
    CK_FAILS(lw_law_observer(&o, out, err), LW_ERR_SHAPE,
             "number of states is 65; permitted 1 to 64");
    o.n_x = 2;
    o.n_y = 0;
    CK_FAILS(lw_law_observer(&o, out, err), LW_ERR_SHAPE,
             "number of measured values is 0; permitted 1 to 32");
    o.n_y = 1;
    o.n_w = 32;
    CK_FAILS(lw_law_observer(&o, out, err), LW_ERR_SHAPE,
             "number of wanted values is 32; permitted 0 to 31");
    o.n_w = 0;
    o.c = NULL;
    CK_FAILS(lw_law_observer(&o, out, err), LW_ERR_ARGUMENT, "C is missing");
    o.c = m;
    o.start = bad + 2;
    CK_FAILS(lw_law_observer(&o, out, err), LW_ERR_NOT_FINITE,
             "start of estimate2 is -inf; a finite number is wanted");
}
END_TEST

START_TEST(lack_of_memory_is_said_and_leaves_nothing_behind)
{
    lw_pid p = lw_pid_default();
    for (int i = -1; i < N_OTHERS; i++) {
        lw_law *law = NULL;
        long n = 1; // the allocation that fails first
        for (; n < 10; n++) {
            lw_error err = {LW_OK, ""};
            lw__alloc_fail_after(n);
            lw_status status = i < 0 ? lw_law_pid("pid", &p, &law, &err) : other_law(i, &law, &err);
            lw__alloc_fail_after(-1);
            if (status == LW_OK)
                break;
            ck_assert_int_eq(status, LW_ERR_MEMORY);
            ck_assert_int_eq(err.status, LW_ERR_MEMORY);
            ck_assert_str_eq(err.text, "no memory for a law");
            ck_assert_ptr_null(law);
        }
        ck_assert_int_eq(n, 3); // after parameter and law
        lw_law_free(law);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("law contract");
    TCase *steps = tcase_create("steps"), *object = tcase_create("object");
    TCase *messages = tcase_create("messages");
    tcase_add_test(steps, a_step_depends_on_its_arguments_only);
    tcase_add_test(steps, lanes_give_the_bits_of_single_steps_and_touch_nothing_else);
    tcase_add_test(steps, the_comparison_of_lanes_notices_another_law);
    tcase_add_test(steps, jacobian_equals_central_differences);
    tcase_add_test(steps, the_comparison_of_jacobians_notices_a_forgotten_limit);
    tcase_add_test(steps, jacobian_is_zero_through_a_limit_and_that_of_the_inside_at_it);
    tcase_add_test(object, pid_has_the_states_of_its_kind_only_and_begins_with_start);
    tcase_add_test(object, ports_have_a_number_only_where_there_are_several);
    tcase_add_test(object, observer_begins_with_its_start);
    tcase_add_test(object, law_is_a_copy_and_its_last_holder_frees_the_parameter);
    tcase_add_test(object, start_is_zero_unless_stated);
    tcase_add_test(messages, definition_that_cannot_be_a_law_is_refused_and_its_parameter_left);
    tcase_add_test(messages, pid_says_which_field_is_wrong_and_what_is_permitted);
    tcase_add_test(messages, anti_windup_that_cannot_act_is_refused);
    tcase_add_test(messages, filters_say_which_coefficient_is_wrong);
    tcase_add_test(messages, feedback_says_which_matrix_or_size_is_wrong);
    tcase_add_test(messages, lack_of_memory_is_said_and_leaves_nothing_behind);
    suite_add_tcase(suite, steps);
    suite_add_tcase(suite, object);
    suite_add_tcase(suite, messages);
    return run_suite(suite);
}
