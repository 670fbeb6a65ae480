#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>

#include "ebbmark/lightcurve_measure.h"
#include "measure_support.h"

#define MOST 30000
#define CADENCE (2.0 / 1440.0)

static double time_of[MOST], flat[MOST];

static struct lightcurve_noise measured(size_t n, double cadence_d, double gap_d)
{
    struct lightcurve_noise noise;
    struct base_error error = {0};
    assert_true(lightcurve_noise_measure(time_of, flat, n, cadence_d, gap_d, &noise, &error));
    return noise;
}

/* White noise of one sigma 0.001 at two minutes. */
static size_t white(double days)
{
    struct dice dice = {21};
    size_t n = (size_t)(days / CADENCE);
    for (size_t i = 0; i < n; i++) {
        time_of[i] = CADENCE * (double)i;
        flat[i] = 1.0 + 1e-3 * dice_normal(&dice);
    }
    return n;
}

static void white_noise_is_measured_and_falls_with_the_root_of_the_window(void **state)
{
    (void)state;
    struct lightcurve_noise noise = measured(white(27.0), CADENCE, 0.5);
    assert_true(fabs(noise.point / 1e-3 - 1.0) < 0.03);
    assert_true(noise.cadence_d == CADENCE);
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++) {
        double points = lightcurve_noise_window_h[w] / 24.0 / CADENCE;
        assert_true(fabs(noise.window[w] / (1e-3 / sqrt(points)) - 1.0) < 0.25);
    }
}

static void a_step_across_a_gap_is_no_noise(void **state)
{
    (void)state;
    size_t n = white(10.0);
    double before = measured(n, CADENCE, 0.5).point;
    for (size_t i = 0; i < n; i++) {
        time_of[i] += (double)(i / 2); /* every other step is a gap of a day */
        flat[i] += 0.1 * (double)(i / 2 % 7);
    }
    double after = measured(n, CADENCE, 0.5).point;
    assert_true(fabs(after / before - 1.0) < 0.05);
}

static void flares_do_not_raise_the_windows(void **state)
{
    (void)state;
    size_t n = white(20.0);
    struct lightcurve_noise quiet = measured(n, CADENCE, 0.5);
    for (size_t i = 0; i < n; i += 100)
        flat[i] += 0.5;
    struct lightcurve_noise flaring = measured(n, CADENCE, 0.5);
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        assert_true(fabs(flaring.window[w] / quiet.window[w] - 1.0) < 0.1);
}

static void windows_that_are_too_few_or_shorter_than_a_cadence_are_not_measured(void **state)
{
    (void)state;
    struct lightcurve_noise noise = measured(white(1.0), CADENCE, 0.5);
    assert_true(isfinite(noise.window[0]) && isnan(noise.window[3]));
    for (size_t i = 0; i < 500; i++)
        time_of[i] = 0.1 * (double)i;
    noise = measured(500, 0.1, 1.0);
    assert_true(isnan(noise.window[0]) && isfinite(noise.window[1]));
}

static void nothing_to_measure_gives_no_number(void **state)
{
    (void)state;
    white(1.0);
    for (size_t n = 0; n < 3; n++) {
        struct lightcurve_noise noise = measured(n, CADENCE, 0.5);
        assert_true(isnan(noise.point));
        assert_true(isnan(lightcurve_noise_of_mean(&noise, 0.1, 10)));
    }
    struct lightcurve_noise noise = measured(700, NAN, 0.5);
    assert_true(isfinite(noise.point) && isnan(noise.window[0]));
}

static void constant_flux_has_no_noise(void **state)
{
    (void)state;
    size_t n = white(10.0);
    for (size_t i = 0; i < n; i++)
        flat[i] = 1.0;
    struct lightcurve_noise noise = measured(n, CADENCE, 0.5);
    assert_true(noise.point == 0.0 && noise.window[2] == 0.0);
    assert_true(lightcurve_noise_of_mean(&noise, 0.2, 100) == 0.0);
}

static void the_error_of_a_mean_lies_between_its_windows(void **state)
{
    (void)state;
    struct lightcurve_noise noise = {
        .point = 1e-3, .cadence_d = CADENCE, .window = {4e-4, 2e-4, 1e-4, 1e-4}};
    double between = lightcurve_noise_of_mean(&noise, sqrt(3.0 * 6.0) / 24.0, 10000);
    assert_true(fabs(between - sqrt(2e-4 * 1e-4)) < 1e-12); /* half way in both logarithms */
    assert_true(fabs(lightcurve_noise_of_mean(&noise, 3.0 / 24.0, 10000) - 2e-4) < 1e-15);
}

static void the_error_of_a_mean_is_never_below_white_noise(void **state)
{
    (void)state;
    struct lightcurve_noise noise = {
        .point = 1e-3, .cadence_d = CADENCE, .window = {1e-5, 1e-5, 1e-5, 1e-5}};
    for (double hours = 0.1; hours < 40.0; hours *= 1.3)
        assert_true(lightcurve_noise_of_mean(&noise, hours / 24.0, 25) >= 1e-3 / 5.0);
}

/* Beyond the windows the correlated part stays: sigma^2 = red^2 + white^2 / n, elementary. */
static void correlated_noise_stays_beyond_the_windows(void **state)
{
    (void)state;
    struct lightcurve_noise noise = {.point = 1e-3, .cadence_d = CADENCE};
    const double red = 3e-4;
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        noise.window[w] = sqrt(red * red + 1e-6 / (lightcurve_noise_window_h[w] / 24.0 / CADENCE));
    assert_true(fabs(lightcurve_noise_of_mean(&noise, 2.0, 1440) -
                     sqrt(red * red + 1e-6 / 1440.0)) < 1e-12);
    assert_true(fabs(lightcurve_noise_of_mean(&noise, 10 * CADENCE, 10) -
                     sqrt(red * red + 1e-6 / 10.0)) < 1e-12);
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        noise.window[w] = NAN;
    assert_true(fabs(lightcurve_noise_of_mean(&noise, 0.1, 25) - 2e-4) < 1e-15);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(white_noise_is_measured_and_falls_with_the_root_of_the_window),
        cmocka_unit_test(a_step_across_a_gap_is_no_noise),
        cmocka_unit_test(flares_do_not_raise_the_windows),
        cmocka_unit_test(windows_that_are_too_few_or_shorter_than_a_cadence_are_not_measured),
        cmocka_unit_test(nothing_to_measure_gives_no_number),
        cmocka_unit_test(constant_flux_has_no_noise),
        cmocka_unit_test(the_error_of_a_mean_lies_between_its_windows),
        cmocka_unit_test(the_error_of_a_mean_is_never_below_white_noise),
        cmocka_unit_test(correlated_noise_stays_beyond_the_windows),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
