#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/impostor.h"

#define POINTS 4000
#define CADENCE 0.01

static double time_of[POINTS], flux_of[POINTS];

/* A fixed sequence that looks like noise: -1 to 1, without a mean. */
static double jitter(size_t i)
{
    return sin(12.9898 * (double)i + 78.233 * sin(0.37 * (double)i));
}

/* Dips of 1 % every 3 d from 1.0 on, flat or V-shaped, 0.2 d long; a second one of its own depth at
 * phase `second`. */
static struct ephemeris_folding star(double ingress_fraction, double second, double depth)
{
    for (size_t i = 0; i < POINTS; i++) {
        time_of[i] = CADENCE * (double)i;
        double since = fabs(remainder(time_of[i] - 1.0, 3.0));
        double other = fabs(remainder(time_of[i] - 1.0 - 3.0 * second, 3.0));
        double inside = (0.1 - since) / (0.2 * ingress_fraction);
        flux_of[i] = 1.0 + 4e-4 * jitter(i) - 0.01 * fmin(fmax(inside, 0.0), 1.0);
        if (other < 0.1)
            flux_of[i] -= depth;
    }
    return (struct ephemeris_folding){.time = time_of,
                                      .flux = flux_of,
                                      .count = POINTS,
                                      .point_error = 3e-4,
                                      .period_d = 3.0,
                                      .epoch_d = 1.0,
                                      .duration_d = 0.2};
}

static void depths_that_alternate_are_told_by_odd_and_even(void **state)
{
    (void)state;
    const double depth[] = {0.010, 0.008, 0.010, 0.008}, error[] = {3e-4, 3e-4, 3e-4, 3e-4};
    const int64_t cycle[] = {-3, -2, 1, 4};
    struct ephemeris_odd_even out;
    ephemeris_odd_even(depth, error, cycle, 4, &out);
    assert_int_equal(out.odds, 2);
    assert_int_equal(out.evens, 2);
    assert_true(fabs(out.odd_depth - 0.010) < 1e-12 && fabs(out.even_depth - 0.008) < 1e-12);
    assert_true(fabs(out.sigma - 0.002 / 3e-4) < 1e-9);
}

static void errors_that_are_too_small_are_widened_by_the_scatter(void **state)
{
    (void)state;
    const double depth[] = {0.012, 0.007, 0.008, 0.009}, error[] = {1e-5, 1e-5, 1e-5, 1e-5};
    const int64_t cycle[] = {0, 1, 2, 3};
    struct ephemeris_odd_even out;
    struct ephemeris_depth_agreement agreement;
    ephemeris_odd_even(depth, error, cycle, 4, &out);
    assert_true(out.sigma < 2.0);
    ephemeris_depth_agreement(depth, error, 4, &agreement);
    assert_true(agreement.p < 1e-6 && fabs(agreement.mean - 0.009) < 1e-12);
}

static void one_dip_or_one_parity_tells_nothing(void **state)
{
    (void)state;
    const double depth[] = {0.010, 0.011}, error[] = {3e-4, 3e-4};
    const int64_t cycle[] = {2, 4};
    struct ephemeris_odd_even out;
    struct ephemeris_depth_agreement agreement;
    ephemeris_odd_even(depth, error, cycle, 2, &out);
    assert_true(isnan(out.sigma) && isnan(out.odd_depth) && out.odds == 0);
    ephemeris_odd_even(depth, error, cycle, 0, &out);
    assert_true(isnan(out.sigma));
    ephemeris_depth_agreement(depth, error, 1, &agreement);
    assert_true(isnan(agreement.p) && agreement.mean == 0.010);
}

static void a_second_dip_is_found_where_it_is(void **state)
{
    (void)state;
    struct ephemeris_secondary half, best;
    struct base_error error = {0};
    struct ephemeris_folding folding = star(0.1, 0.5, 1e-3);
    assert_true(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_true(half.sigma > 8.0 && fabs(half.depth - 1e-3) < 1e-4 && half.chance < 1e-6);
    assert_true(fabs(best.phase - 0.5) < 0.02);
    folding = star(0.1, 0.31, 1e-3);
    assert_true(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_true(half.sigma < 3.0);
    assert_true(best.sigma > 8.0 && fabs(best.phase - 0.31) < 0.02 && best.chance < 1e-6);
    folding = star(0.1, 0.5, 0.0);
    assert_true(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_true(half.sigma < 3.0 && best.chance > 0.01);
}

static void phases_without_data_have_no_second_dip(void **state)
{
    (void)state;
    struct ephemeris_secondary half, best;
    struct base_error error = {0};
    struct ephemeris_folding folding = star(0.1, 0.5, 0.0);
    size_t kept = 0;
    for (size_t i = 0; i < POINTS; i++)
        if (fabs(remainder(time_of[i] - 2.5, 3.0)) > 0.1) {
            time_of[kept] = time_of[i];
            flux_of[kept++] = flux_of[i];
        }
    folding.count = kept;
    assert_true(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_true(isnan(half.depth) && isnan(half.chance) && isfinite(best.sigma));
    folding.count = 0;
    assert_true(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_true(isnan(half.depth) && isnan(best.depth));
    struct ephemeris_shape shape;
    ephemeris_shape_fit(&folding, &shape);
    assert_true(isnan(shape.v_shape));
}

static void a_period_of_three_durations_is_refused(void **state)
{
    (void)state;
    struct ephemeris_secondary half, best;
    struct base_error error = {0};
    struct ephemeris_folding folding = star(0.1, 0.5, 0.0);
    folding.period_d = 0.6;
    assert_false(ephemeris_secondary_find(&folding, &half, &best, &error));
    assert_int_equal(error.kind, BASE_INVALID);
}

static void a_flat_dip_and_a_v_have_their_shapes(void **state)
{
    (void)state;
    struct ephemeris_shape shape;
    struct ephemeris_folding folding = star(0.1, 0.5, 0.0);
    ephemeris_shape_fit(&folding, &shape);
    assert_true(shape.v_shape < 0.35 && shape.v_worse_sigma > 8.0);
    assert_true(fabs(shape.depth - 0.01) < 3e-4 && fabs(shape.duration_d - 0.2) < 0.015);
    folding = star(0.5, 0.5, 0.0);
    ephemeris_shape_fit(&folding, &shape);
    assert_true(shape.high > 0.9 && shape.v_worse_sigma < 2.0);
    assert_true(shape.low <= shape.v_shape && shape.v_shape <= shape.high);
}

static void a_known_ephemeris_is_matched_at_ratios_of_small_numbers(void **state)
{
    (void)state;
    const struct ephemeris_known known[] = {
        {.period_d = NAN}, {.period_d = 5.0, .epoch_d = 50.0}, {.period_d = 3.0, .epoch_d = 10.0}};
    struct ephemeris_line line = {.period_d = 3.0, .period_error_d = 1e-5, .epoch_d = 310.0};
    const struct ephemeris_match_rules *usual = &ephemeris_match_rules_usual;
    struct ephemeris_match match;
    assert_true(ephemeris_known_match(&line, known, 3, usual, &match));
    assert_true(match.index == 2 && match.times == 1 && match.of == 1);
    assert_true(fabs(match.phase_off_d) < 1e-9 && match.phase_chance < 0.05);
    line.period_d = 1.5;
    assert_true(ephemeris_known_match(&line, known, 3, usual, &match));
    assert_true(match.index == 2 && match.times == 1 && match.of == 2);
    assert_true(fabs(match.period_ratio - 0.5) < 1e-12);
    line.epoch_d = 310.7;
    assert_false(ephemeris_known_match(&line, known, 3, usual, &match));
    assert_false(ephemeris_known_match(&line, known, 0, usual, &match));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(depths_that_alternate_are_told_by_odd_and_even),
        cmocka_unit_test(errors_that_are_too_small_are_widened_by_the_scatter),
        cmocka_unit_test(one_dip_or_one_parity_tells_nothing),
        cmocka_unit_test(a_second_dip_is_found_where_it_is),
        cmocka_unit_test(phases_without_data_have_no_second_dip),
        cmocka_unit_test(a_period_of_three_durations_is_refused),
        cmocka_unit_test(a_flat_dip_and_a_v_have_their_shapes),
        cmocka_unit_test(a_known_ephemeris_is_matched_at_ratios_of_small_numbers),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
