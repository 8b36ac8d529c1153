// The course of initial value problems against a second library: SUNDIALS' multistep method (BDF).
// Where that library is absent only the comparison itself is tried out, and it is said.

#include "odes.h"
#include "suite.h"

#include "ode/ode.h"

#include <stdint.h>
#include <stdio.h>
#include <string.h>

#if defined __has_include
#if __has_include(<cvode/cvode.h>)
#define HAVE_SUNDIALS 1
#include <cvode/cvode.h>
#include <nvector/nvector_serial.h>
#include <sunlinsol/sunlinsol_dense.h>
#include <sunmatrix/sunmatrix_dense.h>
#endif
#endif

#define N_LOOKS 8

typedef struct looks {
    double x[N_LOOKS][ODE_MOST];
} looks;

static const problem *problem_of(int k)
{
    return k < N_SMOOTH ? &smooth[k] : &stiff[k - N_SMOOTH];
}

static double size_of(const problem *p, int i)
{
    return fmax(p->scale, fabs(p->want[i]));
}

static looks by_ours(const problem *p, double rtol, double nudge)
{
    lw__ode_system s = {.n = p->n, .flow = p->flow};
    double atol[ODE_MOST], memory[64] = {0}, x[ODE_MOST], failed;
    const char *text = "";
    looks l = {0};
    double *work = calloc((size_t)lw__ode_work_size(p->n, 0), sizeof(double));
    memcpy(x, p->start, sizeof x);
    x[0] += nudge;
    for (int i = 0; i < p->n; i++)
        atol[i] = rtol * 0.01 * size_of(p, i);
    for (int m = 0; m < N_LOOKS; m++) {
        ck_assert_msg(lw__ode_advance(&s, rtol, atol, memory, p->end * m / N_LOOKS,
                                      p->end * (m + 1) / N_LOOKS, x, NULL, NULL, work, &failed,
                                      &text) == LW_OK,
                      "%s: %s", p->name, text);
        memcpy(l.x[m], x, sizeof x);
    }
    free(work);
    return l;
}

// Largest difference at the instants, each state against the largest it has been there.
static double difference(const problem *p, const looks *a, const looks *b)
{
    double worst = 0;
    for (int i = 0; i < p->n; i++) {
        double size = p->scale;
        for (int m = 0; m < N_LOOKS; m++)
            size = fmax(size, fabs(b->x[m][i]));
        for (int m = 0; m < N_LOOKS; m++)
            worst = fmax(worst, fabs(a->x[m][i] - b->x[m][i]) / size);
    }
    return worst;
}

START_TEST(a_nudged_start_is_noticed)
{
    const problem *p = &smooth[2]; // A3: the end is proportional to the start
    looks a = by_ours(p, 1e-10, 0), b = by_ours(p, 1e-10, 1e-5);
    ck_assert(difference(p, &a, &b) > 5e-6);
}
END_TEST

#ifdef HAVE_SUNDIALS

static int flow_for_sundials(realtype t, N_Vector x, N_Vector dx, void *context)
{
    const problem *p = context;
    return p->flow(NULL, t, N_VGetArrayPointer(x), N_VGetArrayPointer(dx));
}

static looks by_sundials(const problem *p, double rtol)
{
    SUNContext context;
    looks l = {0};
    ck_assert(SUNContext_Create(NULL, &context) == 0);
    N_Vector x = N_VNew_Serial(p->n, context), atol = N_VNew_Serial(p->n, context);
    for (int i = 0; i < p->n; i++) {
        N_VGetArrayPointer(x)[i] = p->start[i];
        N_VGetArrayPointer(atol)[i] = rtol * 0.01 * size_of(p, i);
    }
    SUNMatrix matrix = SUNDenseMatrix(p->n, p->n, context);
    SUNLinearSolver solver = SUNLinSol_Dense(x, matrix, context);
    void *method = CVodeCreate(CV_BDF, context);
    ck_assert(CVodeInit(method, flow_for_sundials, 0, x) == CV_SUCCESS);
    ck_assert(CVodeSVtolerances(method, rtol, atol) == CV_SUCCESS);
    ck_assert(CVodeSetLinearSolver(method, solver, matrix) == CV_SUCCESS);
    CVodeSetMaxNumSteps(method, 1000000);
    CVodeSetUserData(method, (void *)(uintptr_t)p);
    for (int m = 0; m < N_LOOKS; m++) {
        double t, end = p->end * (m + 1) / N_LOOKS;
        CVodeSetStopTime(method, end);
        ck_assert(CVode(method, end, x, &t, CV_NORMAL) >= 0);
        memcpy(l.x[m], N_VGetArrayPointer(x), sizeof(double) * (size_t)p->n);
    }
    CVodeFree(&method);
    SUNLinSolFree(solver);
    SUNMatDestroy(matrix);
    N_VDestroy(x);
    N_VDestroy(atol);
    SUNContext_Free(&context);
    return l;
}

// Both at 1e-11; what remains is the multistep method's, whose error builds up over thousands of
// steps to some hundred tolerances, and on orbits, where neighbouring courses part, to some hundred
// thousand (ours are held by published ends).
START_TEST(courses_are_those_of_a_second_library)
{
    const problem *p = problem_of(_i);
    if (p->switches != NULL) // it would have to be stopped at each jump
        return;
    looks ours = by_ours(p, 1e-11, 0), theirs = by_sundials(p, 1e-11);
    double worst = difference(p, &ours, &theirs), most = p->flow == orbit ? 5e-6 : 2e-8;
    ck_assert_msg(worst < most, "%s: they differ by %g", p->name, worst);
    printf("%s: %.1e\n", p->name, worst);
}
END_TEST

#endif

int main(void)
{
    Suite *suite = suite_create("long ode");
    TCase *c = tcase_create("second library");
    tcase_set_timeout(c, 300);
    tcase_add_test(c, a_nudged_start_is_noticed);
#ifdef HAVE_SUNDIALS
    tcase_add_loop_test(c, courses_are_those_of_a_second_library, 0, N_SMOOTH + N_STIFF);
#else
    puts("long_ode_sundials: SUNDIALS (Debian package libsundials-dev) is absent: the comparison "
         "with it is left out");
#endif
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
