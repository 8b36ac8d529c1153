// The coefficients of the integrator against the conditions that define them, its orders, and where
// it puts switchings. Coefficients are read off by integrating flows that answer with unit vectors.

#include "odes.h"
#include "suite.h"

#include "base/alloc.h"
#include "ode/stepper.h"

#include <float.h>
#include <stdint.h>
#include <string.h>

// ---- order conditions (J. Butcher 1963, after Hairer, Norsett, Wanner 1993, II.2)

#define MOST_STAGES 9

typedef struct tableau {
    int n_calls;
    double a[MOST_STAGES][MOST_STAGES], c[MOST_STAGES];
    double b[MOST_STAGES];
    double dense[LW__ODE_DEGREE + 1][MOST_STAGES];
    int degree;
} tableau;

// The flow's m-th call sees the sum of weighted earlier answers, and answers with unit vector m.
static int answer(void *context, double t, const double *x, double *dx)
{
    tableau *table = context;
    int m = table->n_calls++;
    ck_assert_int_lt(m, MOST_STAGES);
    memcpy(table->a[m], x, sizeof table->a[m]);
    table->c[m] = t;
    memset(dx, 0, sizeof(double) * MOST_STAGES);
    dx[m] = 1;
    return 0;
}

static void keep_piece(void *context, const lw__ode_piece *p)
{
    tableau *table = context;
    table->degree = p->degree;
    memcpy(table->dense, p->c, sizeof(double) * (size_t)((p->degree + 1) * p->n));
}

// One step of length 1 from 0, whatever its error.
static tableau read_tableau(void)
{
    tableau table = {0};
    lw__ode_system s = {.n = MOST_STAGES, .flow = answer, .context = &table};
    double atol[MOST_STAGES], memory[32] = {1}, failed; // memory: a step of size 1
    const char *text;
    for (int i = 0; i < MOST_STAGES; i++)
        atol[i] = 1e9;
    double *work = calloc((size_t)lw__ode_work_size(s.n, 0), sizeof(double));
    ck_assert_int_le(lw__ode_memory_size(s.n), 32);
    ck_assert(lw__ode_advance(&s, 1e-3, atol, memory, 0, 1, table.b, keep_piece, &table, work,
                              &failed, &text) == LW_OK);
    free(work);
    return table;
}

// Rooted trees by their order; "(()())" is a root with two leaves.
static const char *const trees[] = {"()",         "(())",         "(()())",      "((()))",
                                    "(()()())",   "((())())",     "((()()))",    "(((())))",
                                    "(()()()())", "(()()(()))",   "((())(()))",  "(()(()()))",
                                    "(()((())))", "((()()()))",   "((()(())))",  "(((()())))",
                                    "((((()))))", "(()()()()())", "(((((())))))"};
#define N_TREES 17 // of order 5 and less; the last two are of order 6

static int order_of(const char *tree)
{
    return (int)strlen(tree) / 2;
}

// Stage by stage the weight of a tree's branches, and its density; returns past the tree.
static const char *weigh(const tableau *t, const char *tree, double *weight, double *density)
{
    const char *at = tree + 1;
    for (int i = 0; i < MOST_STAGES; i++)
        weight[i] = 1;
    *density = 1;
    while (*at == '(') {
        double branch[MOST_STAGES], own;
        at = weigh(t, at, branch, &own);
        *density *= own;
        for (int i = 0; i < MOST_STAGES; i++) {
            double sum = 0;
            for (int j = 0; j < MOST_STAGES; j++)
                sum += t->a[i][j] * branch[j];
            weight[i] *= sum;
        }
    }
    *density *= (double)(at + 1 - tree) / 2;
    return at + 1;
}

// By how much weights b miss the condition of a tree at the share s of a step.
static double miss(const tableau *t, const char *tree, const double *b, double s)
{
    double weight[MOST_STAGES], density, sum = 0, want = 1;
    weigh(t, tree, weight, &density);
    for (int i = 0; i < MOST_STAGES; i++)
        sum += b[i] * weight[i];
    for (int k = 0; k < order_of(tree); k++)
        want *= s;
    return fabs(sum - want / density);
}

// Some tens of roundings of coefficients up to 12.
#define ROUNDING 1e-14

START_TEST(the_pair_satisfies_the_order_conditions)
{
    tableau t = read_tableau();
    double fourth[MOST_STAGES];
    for (int i = 0; i < MOST_STAGES; i++) {
        fourth[i] = t.b[i] - (i < 7 ? lw__ode_pair_error[i] : 0);
        double sum = 0;
        for (int j = 0; j < MOST_STAGES; j++)
            sum += t.a[i][j];
        ck_near(sum, t.c[i], ROUNDING, 1);
    }
    int missed = 0;
    for (int k = 0; k < N_TREES; k++) {
        ck_assert_msg(miss(&t, trees[k], t.b, 1) < ROUNDING, "%s", trees[k]);
        if (order_of(trees[k]) <= 4)
            ck_assert_msg(miss(&t, trees[k], fourth, 1) < ROUNDING, "%s, order 4", trees[k]);
        else
            missed += miss(&t, trees[k], fourth, 1) > 1e-5;
    }
    ck_assert_int_gt(missed, 0); // the lower one is of order 4 only
    ck_assert(miss(&t, "(()()()()())", t.b, 1) > 1e-5);
}
END_TEST

START_TEST(a_coefficient_off_by_a_billionth_is_noticed)
{
    for (int j = 0; j < 5; j++) {
        tableau t = read_tableau();
        t.a[5][j] += 1e-9;
        double worst = 0;
        for (int k = 0; k < N_TREES; k++)
            worst = fmax(worst, miss(&t, trees[k], t.b, 1));
        ck_assert(worst > 1e-11);
    }
}
END_TEST

START_TEST(dense_output_satisfies_the_order_conditions_all_along_a_step)
{
    tableau t = read_tableau();
    ck_assert_int_eq(t.degree, 5);
    double worst_of_sixth = 0;
    for (double s = 0; s <= 1; s += 0.0625) {
        double b[MOST_STAGES];
        for (int i = 0; i < MOST_STAGES; i++) {
            b[i] = 0;
            for (int k = t.degree; k >= 0; k--)
                b[i] = b[i] * s + t.dense[k][i];
        }
        for (int k = 0; k < N_TREES; k++) // ten roundings of weights up to 42
            ck_assert_msg(miss(&t, trees[k], b, s) < 20 * ROUNDING, "%s at %g", trees[k], s);
        worst_of_sixth = fmax(worst_of_sixth, miss(&t, trees[N_TREES + 1], b, s));
    }
    ck_assert(worst_of_sixth > 1e-5);
}
END_TEST

// ---- Radau IIA

FLOW(decay)
{
    (void)t;
    d[0] = *(const double *)z * y[0];
    return 0;
}

// On x' = q x one step gives Pade's quotient (Hairer, Wanner 1996, IV.5)
// (1 + 2 q / 5 + q^2 / 20) / (1 - 3 q / 5 + 3 q^2 / 20 - q^3 / 60), from memory.
START_TEST(a_stiff_step_is_pades_quotient)
{
    static const double rate[] = {-1e-3, -0.3, -2, -17, -1e3, -1e6, 0.4};
    for (int k = 0; k < 7; k++) {
        double q = rate[k], x = 1, memory[8] = {1, 1}, atol = 1e9, work[100], failed;
        const char *text;
        lw__ode_system s = {.n = 1, .flow = decay, .context = &q};
        ck_assert_int_le(lw__ode_work_size(1, 0), 100);
        ck_assert(lw__ode_advance(&s, 1e-12, &atol, memory, 0, 1, &x, NULL, NULL, work, &failed,
                                  &text) == LW_OK);
        double want = (1 + 0.4 * q + q * q / 20) / (1 - 0.6 * q + 0.15 * q * q - q * q * q / 60);
        ck_near(x, want, 1e-8, 1e-3); // differences for the Jacobian; Newton repairs the rest
    }
}
END_TEST

// ---- orders

typedef struct course {
    double worst;
} course;

static void against_closed_form(void *context, const lw__ode_piece *p)
{
    course *c = context;
    for (int k = 0; k <= 16; k++) {
        double x[ODE_MOST], s = k / 16.0;
        lw__ode_piece_value(p, s, x);
        c->worst = fmax(c->worst, fabs(x[0] - lw_exp(lw_sin(p->t + s * p->h))));
    }
}

// A3 in n steps of one size; errors at the ends of steps and along the way. Steps are taken
// whatever the method says to their error; the tolerance holds the stiff method's iteration only.
static void fixed_steps(int stiffly, int n, double *at_end, double *along)
{
    double x[1] = {1}, f[1], x_new[1], f_new[1], atol[1] = {1e-11}, c[6], k[100];
    lw__ode_system s = {.n = 1, .flow = a3};
    lw__ode_memory memory = {0};
    lw__ode_state o = {.system = &s,
                       .n = 1,
                       .rtol = 1e-11,
                       .atol = atol,
                       .x = x,
                       .f = f,
                       .x_new = x_new,
                       .f_new = f_new,
                       .c = c,
                       .k = k};
    course seen = {0};
    double h = 10.0 / n, next;
    ck_assert_int_le(lw__ode_stiff_work(1), 100);
    *at_end = 0;
    for (int step = 0; step < n; step++) {
        o.t = h * step;
        o.jacobian_known = 0;
        a3(NULL, o.t, x, f);
        lw__ode_outcome outcome = stiffly ? lw__ode_stiff(&o, &memory, h, &next)
                                          : lw__ode_explicit(&o, &memory, h, 0, h, &next);
        ck_assert(outcome != LW__ODE_FAILED);
        (stiffly ? lw__ode_stiff_dense : lw__ode_explicit_dense)(&o, h);
        lw__ode_piece p = {o.t, h, 1, o.degree, c};
        p.degree += !stiffly && lw__ode_explicit_refine(&o, h) == 0;
        against_closed_form(&seen, &p);
        x[0] = x_new[0];
        *at_end = fmax(*at_end, fabs(x[0] - lw_exp(lw_sin(h * (step + 1)))));
    }
    *along = seen.worst;
}

// Errors halve by powers of the order: log2 of their ratio, in the range where neither rounding nor
// higher terms count. The cubic of the stiff method's stages misses by h^4.
START_TEST(errors_shrink_with_the_order)
{
    static const double want[2][2] = {{5, 5}, {5, 4}};
    for (int stiffly = 0; stiffly < 2; stiffly++) {
        double end[3], along[3];
        for (int k = 0; k < 3; k++)
            fixed_steps(stiffly, 80 << k, &end[k], &along[k]);
        for (int k = 0; k < 2; k++) {
            double p = log2(end[k] / end[k + 1]), q = log2(along[k] / along[k + 1]);
            ck_assert_msg(fabs(p - want[stiffly][0]) < 0.3, "method %d: %g", stiffly, p);
            ck_assert_msg(fabs(q - want[stiffly][1]) < 0.3, "dense %d: %g", stiffly, q);
        }
    }
}
END_TEST

// ---- tolerance

static lw_status solve(const problem *p, double rtol, double end, double *x, lw__ode_sink sink,
                       void *context)
{
    lw__ode_system s = {
        .n = p->n, .n_switches = p->switches != NULL, .flow = p->flow, .switches = p->switches};
    double atol[ODE_MOST], memory[64] = {0}, failed;
    const char *text;
    for (int i = 0; i < p->n; i++)
        atol[i] = rtol;
    memcpy(x, p->start, sizeof(double) * ODE_MOST);
    double *work = calloc((size_t)lw__ode_work_size(p->n, 1), sizeof(double));
    lw_status status =
        lw__ode_advance(&s, rtol, atol, memory, 0, end, x, sink, context, work, &failed, &text);
    free(work);
    return status;
}

#define N_LOOKS 8

// Largest error at eight instants, against a run at 1e-13 (whose end the published values hold).
static double error_along(const problem *p, double rtol, double end, double ref[][ODE_MOST])
{
    double worst = 0, x[ODE_MOST];
    for (int m = 0; m < N_LOOKS; m++) {
        ck_assert(solve(p, rtol, end * (m + 1) / N_LOOKS, x, NULL, NULL) == LW_OK);
        for (int i = 0; i < p->n; i++)
            worst = fmax(worst, fabs(x[i] - ref[m][i]));
    }
    return worst;
}

// Slope of the error over the tolerance, both in powers of ten, from 1e-4 to 1e-9. D1 is looked at
// over its first 2 s: over whole turns of so round an orbit the error of its energy, which shrinks
// with h^6, has the upper hand.
START_TEST(errors_are_proportional_to_the_tolerance)
{
    const problem *p = &smooth[_i];
    double end = strcmp(p->name, "D1") == 0 ? 2 : p->end, ref[N_LOOKS][ODE_MOST];
    double n = 0, sx = 0, sy = 0, sxx = 0, sxy = 0;
    for (int m = 0; m < N_LOOKS; m++)
        ck_assert(solve(p, 1e-13, end * (m + 1) / N_LOOKS, ref[m], NULL, NULL) == LW_OK);
    for (double power = -4; power >= -9; power -= 0.25) {
        double y = log10(error_along(p, lw_pow(10, power), end, ref));
        n++;
        sx += power;
        sy += y;
        sxx += power * power;
        sxy += power * y;
    }
    double slope = (n * sxy - sx * sy) / (n * sxx - sx * sx);
    ck_assert_msg(slope > 0.8 && slope < 1.2, "%s: slope %g", p->name, slope);
}
END_TEST

static void count_stiff(void *context, const lw__ode_piece *p)
{
    *(int *)context += p->degree == 3;
}

START_TEST(problems_that_are_not_stiff_stay_with_the_explicit_method)
{
    for (int k = 0; k < N_SMOOTH; k++)
        for (double rtol = 1e-5; rtol > 1e-13; rtol *= 0.1) {
            double x[ODE_MOST];
            int n_stiff = 0;
            ck_assert(solve(&smooth[k], rtol, 20, x, count_stiff, &n_stiff) == LW_OK);
            ck_assert_msg(n_stiff == 0, "%s: %d at %g", smooth[k].name, n_stiff, rtol);
        }
}
END_TEST

// Tight tolerances leave the explicit method just inside its border of stability.
START_TEST(stiffness_is_noticed_at_tight_tolerances)
{
    double x[ODE_MOST];
    int n_stiff = 0;
    ck_assert(solve(&stiff[0], 1e-12, 2000, x, count_stiff, &n_stiff) == LW_OK);
    ck_assert_int_gt(n_stiff, 1000);
    ck_near(x[0], stiff[0].want[0], 1e-10, 0);
    ck_near(x[1], stiff[0].want[1], 1e-9, 0);
}
END_TEST

// ---- bits, memory

// All end values at two tolerances; the same on every compiler and optimisation (FNV-1a, from
// memory).
START_TEST(end_values_have_the_same_bits_everywhere)
{
    uint64_t hash = 14695981039346656037u;
    for (int k = 0; k < N_SMOOTH + N_STIFF; k++)
        for (double rtol = 1e-5; rtol > 1e-9; rtol *= 1e-3) {
            const problem *p = k < N_SMOOTH ? &smooth[k] : &stiff[k - N_SMOOTH];
            double x[ODE_MOST];
            ck_assert(solve(p, rtol, p->end, x, NULL, NULL) == LW_OK);
            unsigned char byte[sizeof(double) * ODE_MOST];
            memcpy(byte, x, sizeof byte);
            for (size_t i = 0; i < sizeof(double) * (size_t)p->n; i++)
                hash = (hash ^ byte[i]) * 1099511628211u;
        }
    ck_assert_msg(hash == 0x542d5bf29c4b7bbeu, "hash %016llx", (unsigned long long)hash);
}
END_TEST

START_TEST(nothing_is_allocated_while_advancing)
{
    const problem *p = &stiff[4];
    lw__ode_system s = {.n = p->n, .flow = p->flow};
    double atol[3] = {1e-10, 1e-10, 1e-10}, memory[16] = {0}, x[ODE_MOST], work[300], failed;
    const char *text;
    memcpy(x, p->start, sizeof x);
    ck_assert_int_le(lw__ode_work_size(3, 0), 300);
    lw__alloc_fail_after(0);
    lw_status status = lw__ode_advance(&s, 1e-8, atol, memory, 0, 360, x, count_stiff, &(int){0},
                                       work, &failed, &text);
    lw__alloc_fail_after(-1);
    ck_assert(status == LW_OK);
}
END_TEST

// ---- switchings

typedef struct told {
    int n, which[8], rising[8];
    double t[8];
} told;

static int tell(void *context, double t, double *x, int which, int rising)
{
    told *list = context;
    (void)x;
    ck_assert_int_lt(list->n, 8);
    list->which[list->n] = which;
    list->rising[list->n] = rising;
    list->t[list->n++] = t;
    return 0;
}
FLOW(steady)
{
    (void)z, (void)t, (void)y;
    d[0] = 1;
    return 0;
}
FLOW(at_one_place_and_another)
{
    (void)z, (void)t;
    d[0] = y[0] - 0.7;
    d[1] = 0.3 - y[0];
    d[2] = (y[0] - 0.45) * (0.55 - y[0]); // there and back within one step
    return 0;
}

static told pass_places(int n_pieces)
{
    told list = {0};
    lw__ode_system s = {.n = 1,
                        .n_switches = 3,
                        .flow = steady,
                        .switches = at_one_place_and_another,
                        .happened = tell,
                        .context = &list};
    double x = 0, atol = 1e-10, memory[8] = {0}, work[120], failed;
    const char *text;
    ck_assert_int_le(lw__ode_work_size(1, 3), 120);
    for (int k = 0; k < n_pieces; k++)
        ck_assert(lw__ode_advance(&s, 1e-8, &atol, memory, (double)k / n_pieces,
                                  (k + 1.0) / n_pieces, &x, NULL, NULL, work, &failed,
                                  &text) == LW_OK);
    ck_near(x, 1, 1e-14, 1);
    return list;
}

// x = t, so places are instants; each is met from above within a few roundings of t.
START_TEST(switchings_within_one_step_come_earliest_first)
{
    static const int which[] = {1, 2, 2, 0}, rising[] = {0, 1, 0, 1};
    static const double at[] = {0.3, 0.45, 0.55, 0.7};
    for (int n_pieces = 1; n_pieces < 5; n_pieces++) {
        told list = pass_places(n_pieces);
        ck_assert_int_eq(list.n, 4);
        for (int k = 0; k < 4; k++) {
            ck_assert(list.which[k] == which[k] && list.rising[k] == rising[k]);
            ck_near(list.t[k], at[k], 8 * DBL_EPSILON, 0);
        }
    }
}
END_TEST

static int n_calls;

static int counted_f2(void *context, double t, const double *x, double *dx)
{
    n_calls++;
    return f2(context, t, x, dx);
}

// The flow of F2 jumps at each whole second. Where the jumps are declared a step ends just before
// each: a few evaluations a jump, not a hundred.
START_TEST(declared_jumps_of_the_flow_cost_few_steps)
{
    problem p = smooth[23];
    ck_assert_str_eq(p.name, "F2");
    p.flow = counted_f2;
    int calls[2];
    for (int declared = 0; declared < 2; declared++) {
        double x[ODE_MOST];
        n_calls = 0;
        p.switches = declared ? seconds : NULL;
        ck_assert(solve(&p, 1e-8, 20, x, NULL, NULL) == LW_OK);
        ck_near(x[0], p.want[0], 1e-6, 0); // one wrong second would be off by 1
        calls[declared] = n_calls;
    }
    ck_assert_int_lt(calls[1], 2500);
    ck_assert_int_lt(calls[1], calls[0]);
}
END_TEST

// Pieces given to a sink leave no gap and no jump, over switchings too.
typedef struct seam {
    double t, x;
    int n;
} seam;

static void follow(void *context, const lw__ode_piece *p)
{
    seam *s = context;
    double x[ODE_MOST];
    lw__ode_piece_value(p, 0, x);
    if (s->n++ > 0) {
        ck_assert(p->t == s->t);
        ck_near(x[0], s->x, 1e-13, 1);
    }
    lw__ode_piece_value(p, 1, x);
    s->t = p->t + p->h;
    s->x = x[0];
}

START_TEST(pieces_join_over_switchings)
{
    for (int k = 22; k < 26; k++) {
        double x[ODE_MOST];
        seam s = {0};
        ck_assert(smooth[k].name[0] == 'F');
        ck_assert(solve(&smooth[k], 1e-9, 20, x, follow, &s) == LW_OK);
        ck_assert(s.t == 20 && s.n > 20);
        ck_near(s.x, x[0], 1e-13, 1);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("ode orders");
    TCase *c = tcase_create("ode orders");
    tcase_set_timeout(c, 120);
    tcase_add_test(c, the_pair_satisfies_the_order_conditions);
    tcase_add_test(c, a_coefficient_off_by_a_billionth_is_noticed);
    tcase_add_test(c, dense_output_satisfies_the_order_conditions_all_along_a_step);
    tcase_add_test(c, a_stiff_step_is_pades_quotient);
    tcase_add_test(c, errors_shrink_with_the_order);
    tcase_add_loop_test(c, errors_are_proportional_to_the_tolerance, 0, N_SMOOTH);
    tcase_add_test(c, problems_that_are_not_stiff_stay_with_the_explicit_method);
    tcase_add_test(c, stiffness_is_noticed_at_tight_tolerances);
    tcase_add_test(c, end_values_have_the_same_bits_everywhere);
    tcase_add_test(c, nothing_is_allocated_while_advancing);
    tcase_add_test(c, switchings_within_one_step_come_earliest_first);
    tcase_add_test(c, declared_jumps_of_the_flow_cost_few_steps);
    tcase_add_test(c, pieces_join_over_switchings);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
