#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/lightcurve_measure.h"
#include "measure_support.h"

#define MOST 60000
#define CADENCE (10.0 / 1440.0)
#define SIGMA 1e-3

static double time_of[MOST], flux[MOST], errors[MOST];
static size_t count;
static struct dice dice;

/* White noise about 1 over [0, days]; every test starts from it. */
static void quiet_star(double days, double cadence_d)
{
    dice = (struct dice){31};
    count = (size_t)(days / cadence_d);
    for (size_t i = 0; i < count; i++) {
        time_of[i] = cadence_d * (double)i;
        flux[i] = 1.0 + SIGMA * dice_normal(&dice);
    }
}

/* Take a trapezoid out of the flux. */
static void add_dip(double mid_d, double duration_d, double ingress_fraction, double depth)
{
    struct lightcurve_dip dip = {.mid_d = mid_d,
                                 .duration_d = duration_d,
                                 .ingress_fraction = ingress_fraction,
                                 .depth = depth,
                                 .level = 1.0};
    for (size_t i = 0; i < count; i++)
        flux[i] += lightcurve_dip_model(&dip, time_of[i]) - 1.0;
}

/* Leave out the points in [from, to]. */
static void cut_out(double from, double to)
{
    size_t kept = 0;
    for (size_t i = 0; i < count; i++)
        if (time_of[i] < from || time_of[i] > to) {
            time_of[kept] = time_of[i];
            flux[kept++] = flux[i];
        }
    count = kept;
}

static struct lightcurve_noise white(double cadence_d)
{
    struct lightcurve_noise noise = {.point = SIGMA, .cadence_d = cadence_d};
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        noise.window[w] = SIGMA / sqrt(lightcurve_noise_window_h[w] / 24.0 / cadence_d);
    return noise;
}

static struct lightcurve_dip measured_with(double starts_d, double ends_d,
                                           const struct lightcurve_noise *noise,
                                           const double *given)
{
    struct lightcurve_dip dip;
    struct base_error error = {0};
    assert_true(lightcurve_dip_measure(time_of, flux, given, count, 0.5, starts_d, ends_d, noise,
                                       &dip, &error));
    return dip;
}

static struct lightcurve_dip measured(double starts_d, double ends_d)
{
    struct lightcurve_noise noise = white(CADENCE);
    return measured_with(starts_d, ends_d, &noise, NULL);
}

static void assert_within(double value, double wanted, double error, double sigmas)
{
    if (!(fabs(value - wanted) <= sigmas * error))
        fail_msg("%g is not %g within %g times %g", value, wanted, sigmas, error);
}

static void assert_nothing(const struct lightcurve_dip *dip)
{
    assert_int_equal(dip->shape, LIGHTCURVE_DIP_NONE);
    assert_true(isnan(dip->mid_d) && isnan(dip->depth) && isnan(dip->snr));
    assert_true(isnan(dip->mid_error_d) && isnan(dip->covered) && isnan(dip->asymmetry));
}

static void a_trapezoid_is_measured_within_its_errors(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.013, 0.3, 0.2, 0.008);
    struct lightcurve_dip dip = measured(4.8, 5.2);
    assert_int_equal(dip.shape, LIGHTCURVE_DIP_TRAPEZOID);
    assert_within(dip.mid_d, 5.013, dip.mid_error_d, 3.0);
    assert_within(dip.duration_d, 0.3, dip.duration_error_d, 3.0);
    assert_within(dip.depth, 0.008, dip.depth_error, 3.0);
    assert_within(dip.ingress_fraction, 0.2, 0.05, 1.0);
    assert_true(dip.mid_error_d < 0.01 && dip.duration_error_d < 0.02 && dip.depth_error < 5e-4);
    assert_within(dip.level, 1.0, 2e-4, 1.0);
    assert_true(dip.covered > 0.99 && fabs(dip.asymmetry) < 0.1);
    assert_within(dip.snr, 0.008 / (SIGMA / sqrt(0.3 * 0.8 / CADENCE)), 2.0, 1.0);
    assert_within((double)dip.points_in, 0.3 / CADENCE, 3.0, 1.0);
    assert_true(dip.chi2 < dip.chi2_box && dip.chi2 < 1.5 * (double)dip.points);
    assert_true(dip.v_shape == 2.0 * dip.ingress_fraction);
}

static void dips_with_sharp_sides_are_mostly_kept_as_boxes(void **state)
{
    (void)state;
    quiet_star(42.0, CADENCE);
    int boxes = 0;
    for (double mid = 1.003; mid < 41.0; mid += 1.0)
        add_dip(mid, 0.3, 0.0, 0.005);
    for (double mid = 1.003; mid < 41.0; mid += 1.0) {
        struct lightcurve_dip dip = measured(mid - 0.1, mid + 0.2);
        assert_within(dip.mid_d, mid, 2.0 * CADENCE, 1.0);
        assert_within(dip.depth, 0.005, dip.depth_error, 4.0);
        if (dip.shape != LIGHTCURVE_DIP_BOX)
            continue;
        boxes++;
        assert_true(dip.ingress_fraction == 0.0 && dip.v_shape == 0.0);
        assert_true(dip.chi2 == dip.chi2_box);
        assert_within(dip.duration_d, 0.3, 2.5 * CADENCE, 1.0);
        assert_true(dip.mid_error_d > 0.1 * CADENCE && dip.mid_error_d < 2.0 * CADENCE);
    }
    assert_true(boxes >= 25); /* of 40; noise makes some look sloped */
}

static void a_v_is_told_from_a_flat_bottom(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.4, 0.5, 0.02);
    struct lightcurve_dip dip = measured(4.8, 5.2);
    assert_int_equal(dip.shape, LIGHTCURVE_DIP_TRAPEZOID);
    assert_true(dip.v_shape > 0.85);
    assert_within(dip.mid_d, 5.0, 0.005, 1.0);
    assert_within(dip.depth, 0.02, 0.002, 1.0);
}

static void a_bump_has_negative_depth_and_snr(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, -0.008);
    struct lightcurve_dip dip = measured(4.85, 5.15);
    assert_within(dip.depth, -0.008, dip.depth_error, 4.0);
    assert_true(dip.depth_error > 0.0 && dip.snr < -20.0);
    assert_within(dip.mid_d, 5.0, 0.01, 1.0);
}

static void a_dip_beside_a_flare_is_the_dip(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.2, 0.2, 0.008);
    add_dip(5.2, 0.1, 0.3, -0.02);
    struct lightcurve_dip dip = measured(4.9, 5.1);
    assert_true(dip.depth > 0.006 && fabs(dip.mid_d - 5.0) < 0.02);
}

static void a_deep_dip_nearby_does_not_pull_a_shallow_one(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.1, 0.1, 0.004);
    add_dip(5.32, 0.2, 0.1, 0.2);
    struct lightcurve_dip dip = measured(4.95, 5.05);
    assert_within(dip.mid_d, 5.0, 0.02, 1.0);
    assert_within(dip.depth, 0.004, dip.depth_error, 3.5);
}

static void single_high_points_are_left_out_and_low_ones_are_not(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, 0.008);
    struct lightcurve_dip clean = measured(4.85, 5.15);
    for (size_t i = 650; i < 800; i += 20)
        flux[i] += 0.1;
    struct lightcurve_dip struck = measured(4.85, 5.15);
    assert_within(struck.depth, clean.depth, 2.0 * clean.depth_error, 1.0);
    assert_within(struck.mid_d, clean.mid_d, 2.0 * clean.mid_error_d, 1.0);
    quiet_star(10.0, CADENCE);
    flux[718] = flux[719] = 0.97; /* two points: an event for all that is known */
    struct lightcurve_dip brief = measured(4.95, 5.03);
    assert_true(brief.depth > 0.02);
}

static void constant_flux_is_a_box_without_depth(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    for (size_t i = 0; i < count; i++)
        flux[i] = 1.0;
    struct lightcurve_noise noise = {.point = 0.0, .cadence_d = CADENCE};
    struct lightcurve_dip dip = measured_with(4.9, 5.1, &noise, NULL);
    assert_int_equal(dip.shape, LIGHTCURVE_DIP_BOX);
    assert_true(dip.depth == 0.0 && isnan(dip.snr) && isnan(dip.depth_error));
    assert_true(fabs(dip.mid_d - 5.0) < 1e-9 && fabs(dip.duration_d - 0.2) < 1e-9);
    noise = white(CADENCE);
    dip = measured_with(4.9, 5.1, &noise, NULL);
    assert_true(dip.depth == 0.0 && dip.snr == 0.0);
}

static void a_dip_without_noise_is_measured_but_has_no_errors(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    for (size_t i = 0; i < count; i++)
        flux[i] = 1.0;
    add_dip(5.0, 0.3, 0.2, 0.01);
    struct lightcurve_noise noise = {.point = NAN, .cadence_d = CADENCE};
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        noise.window[w] = NAN;
    struct lightcurve_dip dip = measured_with(4.8, 5.2, &noise, NULL);
    assert_within(dip.mid_d, 5.0, 1e-4, 1.0);
    assert_within(dip.depth, 0.01, 1e-4, 1.0);
    assert_within(dip.duration_d, 0.3, 1e-3, 1.0);
    assert_true(isnan(dip.snr) && isnan(dip.mid_error_d) && isnan(dip.depth_error));
}

static void too_little_data_measures_nothing(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    struct lightcurve_dip dip = measured(5.0, 5.0 + 1.5 * CADENCE); /* two points */
    assert_nothing(&dip);
    dip = measured(20.0, 21.0);
    assert_nothing(&dip);
    dip = measured(5.2, 5.1);
    assert_nothing(&dip);
    dip = measured(NAN, 5.1);
    assert_nothing(&dip);
    dip = measured(-INFINITY, INFINITY);
    assert_nothing(&dip);
    count = 9;
    dip = measured(0.0, 0.05);
    assert_nothing(&dip);
    count = 0;
    dip = measured(0.0, 1.0);
    assert_nothing(&dip);
}

static void a_dip_at_the_edge_of_the_data_is_measured_from_what_is_there(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(0.0, 0.6, 0.1, 0.008); /* its first half is before the data */
    struct lightcurve_dip dip = measured(0.0, 0.3);
    assert_true(dip.depth > 0.006 && dip.depth < 0.01 && dip.snr > 20.0);
    assert_within(dip.mid_d + 0.5 * dip.duration_d, 0.28, 0.03, 1.0);
    assert_true(dip.gap_distance_d < 0.05);
    assert_true(dip.slope == 0.0);
    assert_true(isfinite(dip.mid_error_d) && isfinite(dip.duration_error_d));
}

static void a_dip_beside_a_gap_says_how_near_the_gap_is_and_how_much_is_covered(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.4, 0.1, 0.008);
    cut_out(5.05, 6.4);
    struct lightcurve_dip dip = measured(4.8, 5.2);
    assert_true(dip.depth > 0.006 && dip.snr > 20.0);
    assert_true(dip.gap_distance_d < 0.02);
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.4, 0.1, 0.008);
    cut_out(4.95, 5.15); /* too short for a gap, but half the dip is not there */
    dip = measured(4.8, 5.2);
    assert_within(dip.covered, 0.5, 0.05, 1.0);
    assert_true(dip.gap_distance_d > 4.0);
    assert_within(dip.mid_d, 5.0, 0.02, 1.0);
}

static void data_beyond_a_gap_do_not_count(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.4, 0.1, 0.008);
    struct lightcurve_dip before = measured(4.8, 5.2);
    for (size_t i = 0; i < count; i++)
        if (time_of[i] > 5.5)
            flux[i] += 0.05;
    cut_out(5.5, 6.2);
    struct lightcurve_dip after = measured(4.8, 5.2);
    assert_true(after.points < before.points);
    assert_within(after.depth, before.depth, before.depth_error, 1.5);
    assert_within(after.gap_distance_d, 0.3, 0.05, 1.0);
}

static void given_errors_weigh_the_points(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, 0.008);
    struct lightcurve_dip without = measured(4.85, 5.15);
    for (size_t i = 0; i < count; i++)
        errors[i] = 7.0; /* only ratios count */
    struct lightcurve_noise noise = white(CADENCE);
    struct lightcurve_dip same = measured_with(4.85, 5.15, &noise, errors);
    assert_within(same.depth, without.depth, 1e-9, 1.0);
    assert_within(same.depth_error, without.depth_error, 1e-9, 1.0);
    for (size_t i = 710; i < 720; i++) {
        flux[i] -= 0.05;
        errors[i] = 7000.0;
    }
    struct lightcurve_dip weighed = measured_with(4.85, 5.15, &noise, errors);
    assert_within(weighed.depth, 0.008, 6e-4, 1.0);
}

static void correlated_noise_makes_errors_larger_and_snr_smaller(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, 0.008);
    struct lightcurve_noise noise = white(CADENCE);
    struct lightcurve_dip plain = measured_with(4.85, 5.15, &noise, NULL);
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        noise.window[w] *= 3.0;
    struct lightcurve_dip heavy = measured_with(4.85, 5.15, &noise, NULL);
    assert_within(heavy.snr, plain.snr / 3.0, 0.1 * plain.snr, 1.0);
    assert_within(heavy.mid_error_d, 3.0 * plain.mid_error_d, 0.5 * plain.mid_error_d, 1.0);
    assert_true(heavy.mid_d == plain.mid_d && heavy.depth == plain.depth);
}

static void a_sloping_star_is_measured_against_its_slope(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, 0.008);
    for (size_t i = 0; i < count; i++)
        flux[i] *= 1.0 + 0.02 * (time_of[i] - 5.0);
    struct lightcurve_dip dip = measured(4.85, 5.15);
    assert_within(dip.slope, 0.02, 0.002, 1.0);
    assert_within(dip.depth, 0.008, dip.depth_error, 3.5);
    assert_within(dip.mid_d, 5.0, dip.mid_error_d, 4.0);
}

static void depth_is_relative_to_the_local_level(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.3, 0.2, 0.01);
    for (size_t i = 0; i < count; i++)
        flux[i] *= 0.5;
    struct lightcurve_dip dip = measured(4.85, 5.15);
    assert_within(dip.level, 0.5, 2e-4, 1.0);
    assert_within(dip.depth, 0.01, 4e-4, 1.0);
    for (size_t i = 0; i < count; i++)
        flux[i] -= 0.6;
    dip = measured(4.85, 5.15);
    assert_nothing(&dip); /* a level below 0 has no relative depth */
}

static void a_lopsided_dip_is_said_to_be_lopsided(void **state)
{
    (void)state;
    quiet_star(10.0, CADENCE);
    add_dip(5.0, 0.4, 0.05, 0.01);
    for (size_t i = 0; i < count; i++)
        if (time_of[i] > 5.0 && time_of[i] < 5.2)
            flux[i] += 0.005;
    struct lightcurve_dip dip = measured(4.8, 5.2);
    assert_true(dip.asymmetry > 0.25);
}

static void the_model_follows_its_numbers(void **state)
{
    (void)state;
    struct lightcurve_dip dip = {.mid_d = 2.0,
                                 .duration_d = 1.0,
                                 .ingress_fraction = 0.25,
                                 .depth = 0.1,
                                 .level = 2.0,
                                 .slope = 0.4};
    assert_true(fabs(lightcurve_dip_model(&dip, 1.0) - 1.6) < 1e-12);
    assert_true(fabs(lightcurve_dip_model(&dip, 2.0) - 1.8) < 1e-12);
    assert_true(fabs(lightcurve_dip_model(&dip, 1.625) - (2.0 - 0.15 - 0.1)) < 1e-12);
    dip.ingress_fraction = 0.0;
    assert_true(fabs(lightcurve_dip_model(&dip, 1.51) - (2.0 - 0.196 - 0.2)) < 1e-12);
}

static void long_dips_in_dense_data_are_measured_too(void **state)
{
    (void)state;
    double cadence = 20.0 / 86400.0;
    quiet_star(12.0, cadence);
    add_dip(6.0, 2.0, 0.2, 0.002);
    struct lightcurve_noise noise = white(cadence);
    struct lightcurve_dip dip = measured_with(5.0, 7.0, &noise, NULL);
    assert_true(dip.points > 20000);
    assert_within(dip.mid_d, 6.0, dip.mid_error_d, 4.0);
    assert_within(dip.duration_d, 2.0, dip.duration_error_d, 4.0);
    assert_within(dip.depth, 0.002, dip.depth_error, 4.0);
    assert_within((double)dip.points_in, dip.duration_d / cadence, 2.0, 1.0);
}

/* Nothing is known of the data but that they are finite and in order. */
static void whatever_the_numbers_it_ends_and_gives_sane_ones(void **state)
{
    (void)state;
    dice = (struct dice){77};
    for (int turn = 0; turn < 1500; turn++) {
        count = (size_t)(dice_uniform(&dice) * 120.0);
        double t = 0.0;
        for (size_t i = 0; i < count; i++) {
            t += pow(10.0, -3.0 + 2.5 * dice_uniform(&dice));
            time_of[i] = t;
            double kind = dice_uniform(&dice);
            flux[i] = kind < 0.1 ? 1e9 * dice_normal(&dice) : kind < 0.5 ? 1.0 : dice_normal(&dice);
            errors[i] = pow(10.0, 6.0 * dice_uniform(&dice) - 3.0);
        }
        struct lightcurve_noise noise = white(0.01);
        if (turn % 5 == 0)
            noise.point = 0.0;
        double starts = t * dice_uniform(&dice), length = t * pow(dice_uniform(&dice), 3.0);
        struct lightcurve_dip dip =
            measured_with(starts, starts + length, &noise, turn % 2 == 0 ? errors : NULL);
        if (dip.shape == LIGHTCURVE_DIP_NONE)
            continue;
        assert_true(isfinite(dip.mid_d) && isfinite(dip.depth) && dip.duration_d > 0.0);
        assert_true(dip.covered >= 0.0 && dip.covered <= 1.0 && dip.gap_distance_d >= 0.0);
        assert_true(dip.ingress_fraction >= 0.0 && dip.ingress_fraction <= 0.5);
        assert_true(isnan(dip.mid_error_d) || dip.mid_error_d >= 0.0);
        assert_true(isnan(dip.depth_error) || dip.depth_error >= 0.0);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_trapezoid_is_measured_within_its_errors),
        cmocka_unit_test(dips_with_sharp_sides_are_mostly_kept_as_boxes),
        cmocka_unit_test(a_v_is_told_from_a_flat_bottom),
        cmocka_unit_test(a_bump_has_negative_depth_and_snr),
        cmocka_unit_test(a_dip_beside_a_flare_is_the_dip),
        cmocka_unit_test(a_deep_dip_nearby_does_not_pull_a_shallow_one),
        cmocka_unit_test(single_high_points_are_left_out_and_low_ones_are_not),
        cmocka_unit_test(constant_flux_is_a_box_without_depth),
        cmocka_unit_test(a_dip_without_noise_is_measured_but_has_no_errors),
        cmocka_unit_test(too_little_data_measures_nothing),
        cmocka_unit_test(a_dip_at_the_edge_of_the_data_is_measured_from_what_is_there),
        cmocka_unit_test(a_dip_beside_a_gap_says_how_near_the_gap_is_and_how_much_is_covered),
        cmocka_unit_test(data_beyond_a_gap_do_not_count),
        cmocka_unit_test(given_errors_weigh_the_points),
        cmocka_unit_test(correlated_noise_makes_errors_larger_and_snr_smaller),
        cmocka_unit_test(a_sloping_star_is_measured_against_its_slope),
        cmocka_unit_test(depth_is_relative_to_the_local_level),
        cmocka_unit_test(a_lopsided_dip_is_said_to_be_lopsided),
        cmocka_unit_test(the_model_follows_its_numbers),
        cmocka_unit_test(long_dips_in_dense_data_are_measured_too),
        cmocka_unit_test(whatever_the_numbers_it_ends_and_gives_sane_ones),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
