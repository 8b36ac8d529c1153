// What every Check program of the tests shares: one way to run a suite and to compare numbers.
#ifndef LATEWOOD_TESTS_SUITE_H
#define LATEWOOD_TESTS_SUITE_H

#include <check.h>
#include <math.h>
#include <stdlib.h>

// Run the suite, print Check's closing lines, return the exit code.
static inline int run_suite(Suite *suite)
{
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_ENV);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed ? EXIT_FAILURE : EXIT_SUCCESS;
}

// |got - want| <= tolerance * max(|want|, scale), and got is a number.
#define ck_near(got, want, tolerance, scale)                                                       \
    do {                                                                                           \
        double got_ = (got), want_ = (want), scale_ = fmax(fabs(want_), (scale));                  \
        ck_assert_msg(fabs(got_ - want_) <= (tolerance)*scale_, "%s is %.17g, wanted %.17g", #got, \
                      got_, want_);                                                                \
    } while (0)

#endif
