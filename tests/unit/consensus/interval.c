#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <gsl/gsl_cdf.h>
#include <math.h>

#include "../../../server/consensus/interval.h"

static void a_quantile_has_its_share_below(void **state)
{
    (void)state;
    static const double shapes[] = {1e-3, 0.02, 0.3, 1.0, 4.0, 50.0, 3000.0};
    static const double shares[] = {0.05, 0.5, 0.95};
    for (size_t i = 0; i < 7; i++)
        for (size_t k = 0; k < 7; k++)
            for (size_t s = 0; s < 3; s++) {
                double at = interval_beta_quantile(shares[s], shapes[i], shapes[k]);
                double below = at * (1.0 - 1e-9) - 1e-11, above = at * (1.0 + 1e-9) + 1e-11;
                assert_true(at >= 0.0 && at <= 1.0);
                assert_true(below <= 0.0 ||
                            gsl_cdf_beta_P(below, shapes[i], shapes[k]) <= shares[s] + 1e-9);
                assert_true(above >= 1.0 ||
                            gsl_cdf_beta_P(above, shapes[i], shapes[k]) >= shares[s] - 1e-9);
            }
}

/* With a = b = 1 the distribution is uniform; with b = 1 its quantile is p^(1/a). */
static void closed_forms_hold(void **state)
{
    (void)state;
    assert_true(fabs(interval_beta_quantile(0.05, 1.0, 1.0) - 0.05) < 1e-11);
    assert_true(fabs(interval_beta_quantile(0.95, 3.0, 1.0) - cbrt(0.95)) < 1e-11);
}

static void large_counts_meet_the_small_ones(void **state)
{
    (void)state;
    double just_below = interval_beta_quantile(0.05, 9999.0, 9999.0);
    double just_above = interval_beta_quantile(0.05, 10001.0, 10001.0);
    assert_true(fabs(just_below - just_above) < 1e-5);
    double huge = interval_beta_quantile(0.95, 4e6, 6e6);
    assert_true(huge > 0.4 && huge < 0.401);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_quantile_has_its_share_below),
        cmocka_unit_test(closed_forms_hold),
        cmocka_unit_test(large_counts_meet_the_small_ones),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
