#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve_measure.h"
#include "measure_support.h"

#define MOST 30000

static double time_of[MOST], flux[MOST], trend[MOST];

static void find_trend(size_t n, double window_d, double gap_d)
{
    struct base_error error = {0};
    assert_true(lightcurve_trend(time_of, flux, n, window_d, gap_d, trend, &error));
    for (size_t i = 0; i < n; i++)
        assert_true(isfinite(trend[i]));
}

/* Two-minute points over days. */
static size_t two_minutes(double days)
{
    size_t n = (size_t)(days * 720.0);
    for (size_t i = 0; i < n; i++)
        time_of[i] = (double)i / 720.0;
    return n;
}

static void a_constant_star_has_a_constant_trend(void **state)
{
    (void)state;
    size_t n = two_minutes(5.0);
    for (size_t i = 0; i < n; i++)
        flux[i] = 1.25;
    find_trend(n, 1.5, 0.5);
    for (size_t i = 0; i < n; i++)
        assert_true(fabs(trend[i] - 1.25) < 1e-15);
}

static void a_star_that_brightens_steadily_is_followed_up_to_the_ends(void **state)
{
    (void)state;
    struct dice dice = {1};
    size_t n = two_minutes(8.0);
    for (size_t i = 0; i < n; i++)
        flux[i] = 1.0 + 0.01 * time_of[i] + 1e-4 * dice_normal(&dice);
    find_trend(n, 1.5, 0.5);
    for (size_t i = 0; i < n; i++)
        assert_true(fabs(trend[i] - 1.0 - 0.01 * time_of[i]) < 1e-4);
}

/* Each place in turn: start, middle, just before and after a gap, end. */
static void dips_are_not_followed_at_ends_nor_beside_gaps(void **state)
{
    (void)state;
    const double middles[] = {0.125, 5.0, 9.875, 11.125, 19.875};
    for (size_t m = 0; m < sizeof middles / sizeof middles[0]; m++) {
        struct dice dice = {2};
        size_t n = 0;
        for (double t = 0.0; t < 20.0; t += 1.0 / 144.0) {
            if (t > 10.0 && t < 11.0)
                continue;
            time_of[n] = t;
            flux[n] = 1.0 + 2e-4 * dice_normal(&dice);
            if (fabs(t - middles[m]) < 0.13)
                flux[n] -= 0.01;
            n++;
        }
        find_trend(n, 1.5, 0.5);
        for (size_t i = 0; i < n; i++)
            assert_true(fabs(trend[i] - 1.0) < 5e-4);
    }
}

static void the_trend_is_broken_at_gaps(void **state)
{
    (void)state;
    size_t n = two_minutes(6.0), first = 250; /* a third of a day, then a gap of a fifth */
    for (size_t i = 0; i < n; i++) {
        if (i >= first)
            time_of[i] += 0.2;
        flux[i] = i < first ? 1.0 : 1.5;
    }
    find_trend(n, 1.5, 0.1);
    assert_true(trend[0] == 1.0 && trend[first - 1] == 1.0);
    assert_true(trend[first] == 1.5 && trend[n - 1] == 1.5);
    find_trend(n, 1.5, 0.5);
    assert_true(trend[first - 1] > 1.3); /* one window over both, most of it at 1.5 */
}

static void short_and_lone_stretches_get_their_own_level(void **state)
{
    (void)state;
    const double times[] = {0.0, 5.0, 5.01, 9.0, 9.01, 9.02, 9.03, 9.04, 9.05};
    const double fluxes[] = {2.0, 1.0, 3.0, 1.0, 1.0, 1.0, 1.0, 1.0, 0.2};
    size_t n = sizeof times / sizeof times[0];
    for (size_t i = 0; i < n; i++) {
        time_of[i] = times[i];
        flux[i] = fluxes[i];
    }
    find_trend(n, 1.5, 0.5);
    assert_true(trend[0] == 2.0);
    assert_true(trend[1] == 2.0 && trend[2] == 2.0);
    for (size_t i = 3; i < n; i++)
        assert_true(trend[i] == 1.0);
    find_trend(0, 1.5, 0.5);
    find_trend(1, 1.5, 0.5);
    assert_true(trend[0] == 2.0);
}

static void wild_values_and_uneven_steps_leave_it_finite(void **state)
{
    (void)state;
    struct dice dice = {4};
    for (int turn = 0; turn < 200; turn++) {
        size_t n = 1 + (size_t)(dice_uniform(&dice) * 300.0);
        double t = -100.0;
        for (size_t i = 0; i < n; i++) {
            t += pow(10.0, -4.0 + 5.0 * dice_uniform(&dice));
            time_of[i] = t;
            flux[i] = dice_uniform(&dice) < 0.2 ? 1e9 * dice_normal(&dice) : dice_normal(&dice);
        }
        find_trend(n, pow(10.0, -2.0 + 4.0 * dice_uniform(&dice)), 0.5);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_constant_star_has_a_constant_trend),
        cmocka_unit_test(a_star_that_brightens_steadily_is_followed_up_to_the_ends),
        cmocka_unit_test(dips_are_not_followed_at_ends_nor_beside_gaps),
        cmocka_unit_test(the_trend_is_broken_at_gaps),
        cmocka_unit_test(short_and_lone_stretches_get_their_own_level),
        cmocka_unit_test(wild_values_and_uneven_steps_leave_it_finite),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
