// Ten thousand further task sets against the unit-step scheduler.

#include "loops.h"
#include "schedule_reference.h"

static ref_result engine, reference;

START_TEST(ten_thousand_more_sets_run_as_the_unit_step_scheduler_runs_them)
{
    char text[600];
    for (uint32_t k = 10000; k < 20000; k++) {
        ref_set set = ref_random(k);
        ref_run(&set, REF_RIGHT, &reference);
        ref_engine(&set, &engine);
        ck_assert_msg(!ref_differs(&set, &engine, &reference, text, sizeof text), "set %u: %s", k,
                      text);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("long schedule");
    TCase *sets = tcase_create("unit step");
    tcase_add_test(sets, ten_thousand_more_sets_run_as_the_unit_step_scheduler_runs_them);
    suite_add_tcase(suite, sets);
    return run_suite(suite);
}
