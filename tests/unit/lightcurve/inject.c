#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>

#include "ebbmark/lightcurve_inject.h"

static void an_injected_transit_takes_its_share_of_what_is_there(void **state)
{
    (void)state;
    const double flux[] = {1.0, 0.5, 1.02, -0.1}, model[] = {1.0, 0.98, 0.99, 0.9};
    double out[4];
    lightcurve_inject(flux, model, 4, out);
    assert_true(out[0] == 1.0 && fabs(out[1] - 0.49) < 1e-15);
    assert_true(fabs(out[2] - 1.0098) < 1e-15 && fabs(out[3] + 0.09) < 1e-15);
}

static void where_the_model_is_one_nothing_changes_at_all(void **state)
{
    (void)state;
    const double model[] = {1.0, 1.0, 1.0};
    double flux[] = {0.1, 1.0 / 3.0, 1.7};
    lightcurve_inject(flux, model, 3, flux);
    assert_true(flux[0] == 0.1 && flux[1] == 1.0 / 3.0 && flux[2] == 1.7);
}

static void a_dip_turned_over_is_a_bump_about_the_trend(void **state)
{
    (void)state;
    const double flux[] = {1.0, 0.97, 1.2, 1.16}, trend[] = {1.0, 1.0, 1.2, 1.2};
    double out[4];
    lightcurve_invert(flux, trend, 4, out);
    assert_true(out[0] == 1.0 && fabs(out[1] - 1.03) < 1e-15);
    assert_true(fabs(out[2] - 1.2) < 1e-15 && fabs(out[3] - 1.24) < 1e-15);
    lightcurve_invert(flux, NULL, 2, out);
    assert_true(out[0] == 1.0 && fabs(out[1] - 1.03) < 1e-15);
}

static void turning_over_twice_gives_the_flux_back(void **state)
{
    (void)state;
    double flux[] = {1.0, 0.97, 1.2, 1.16};
    const double trend[] = {1.0, 1.01, 1.2, 1.19};
    lightcurve_invert(flux, trend, 4, flux);
    lightcurve_invert(flux, trend, 4, flux);
    assert_true(fabs(flux[0] - 1.0) < 1e-15 && fabs(flux[1] - 0.97) < 1e-15);
    assert_true(fabs(flux[2] - 1.2) < 1e-15 && fabs(flux[3] - 1.16) < 1e-15);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(an_injected_transit_takes_its_share_of_what_is_there),
        cmocka_unit_test(where_the_model_is_one_nothing_changes_at_all),
        cmocka_unit_test(a_dip_turned_over_is_a_bump_about_the_trend),
        cmocka_unit_test(turning_over_twice_gives_the_flux_back),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
