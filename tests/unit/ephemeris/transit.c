#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>

#include "ebbmark/transit.h"

static const double laws[][2] = {{0.0, 0.0}, {0.4, 0.26}, {1.0, 0.0}, {0.0, 1.0}};
#define LAWS (sizeof laws / sizeof laws[0])

static void beside_the_star_nothing_is_hidden(void **state)
{
    (void)state;
    for (size_t i = 0; i < LAWS; i++) {
        assert_true(ephemeris_transit_flux(1.1, 0.1, laws[i][0], laws[i][1]) == 1.0);
        assert_true(ephemeris_transit_flux(40.0, 3.0, laws[i][0], laws[i][1]) == 1.0);
        assert_true(ephemeris_transit_flux(0.0, 0.0, laws[i][0], laws[i][1]) == 1.0);
    }
}

static void a_larger_disc_in_front_hides_everything(void **state)
{
    (void)state;
    for (size_t i = 0; i < LAWS; i++) {
        assert_true(ephemeris_transit_flux(0.0, 1.0, laws[i][0], laws[i][1]) == 0.0);
        assert_true(ephemeris_transit_flux(0.5, 1.6, laws[i][0], laws[i][1]) == 0.0);
        assert_true(fabs(ephemeris_transit_flux(1e-6, 1.0, laws[i][0], laws[i][1])) < 2e-6);
    }
}

/* In the centre the hidden light is the integral of the law over a disc, elementary: with c = mu,
 * 2 pi times the integral of I(c) c dc from sqrt(1 - k^2) to 1. */
static void in_the_centre_the_closed_form_holds(void **state)
{
    (void)state;
    for (size_t i = 0; i < LAWS; i++) {
        double u1 = laws[i][0], u2 = laws[i][1];
        for (double k = 0.05; k < 1.0; k += 0.05) {
            double c = sqrt(1.0 - k * k), lost = 1.0 - c;
            double hidden = k * k - u1 * (lost * lost - 2.0 / 3.0 * lost * lost * lost) -
                            u2 * (2.0 / 3.0 * lost * lost * lost - 0.5 * pow(lost, 4));
            double wanted = 1.0 - hidden / (1.0 - u1 / 3.0 - u2 / 6.0);
            assert_true(fabs(ephemeris_transit_flux(0.0, k, u1, u2) - wanted) < 1e-12);
        }
    }
}

/* The curve is continuous, so one step of the smallest kind across a special place moves nothing.
 */
static void nothing_jumps_at_contacts_nor_where_the_disc_meets_the_centre(void **state)
{
    (void)state;
    const double ratios[] = {1e-3, 0.1, 0.3, 0.5, 0.9, 1.0, 1.5};
    for (size_t i = 0; i < sizeof ratios / sizeof ratios[0]; i++) {
        double k = ratios[i];
        const double places[] = {k, fabs(1.0 - k), 1.0 + k};
        for (size_t j = 0; j < 3; j++)
            for (size_t law = 0; law < LAWS; law++) {
                double u1 = laws[law][0], u2 = laws[law][1];
                double at = ephemeris_transit_flux(places[j], k, u1, u2);
                double over = ephemeris_transit_flux(nextafter(places[j], 9.0), k, u1, u2);
                double under = ephemeris_transit_flux(nextafter(places[j], 0.0), k, u1, u2);
                assert_true(isfinite(at));
                assert_true(fabs(over - at) < 1e-9 && fabs(under - at) < 1e-9);
            }
    }
}

static void not_a_number_stays_one(void **state)
{
    (void)state;
    assert_true(isnan(ephemeris_transit_flux(NAN, 0.1, 0.4, 0.2)));
}

static const struct ephemeris_transit giant = {.period_d = 3.0,
                                               .mid_d = 1.25,
                                               .radius_ratio = 0.1,
                                               .axis_ratio = 8.0,
                                               .impact = 0.3,
                                               .u1 = 0.4,
                                               .u2 = 0.25};

static void the_curve_repeats_with_the_period_and_is_whole_between(void **state)
{
    (void)state;
    const double time[] = {1.25, 1.25 + 300.0, 1.25 - 30.0, 1.25 + 1.5, 2.0};
    double flux[5];
    ephemeris_transit_curve(&giant, time, 5, flux);
    assert_true(flux[0] < 0.99);
    assert_true(fabs(flux[1] - flux[0]) < 1e-12 && fabs(flux[2] - flux[0]) < 1e-12);
    assert_true(flux[3] == 1.0); /* behind the star */
    assert_true(flux[4] == 1.0);
}

static void the_contacts_are_where_the_flux_begins_to_fall(void **state)
{
    (void)state;
    double half = 0.5 * ephemeris_transit_duration_d(&giant);
    const double time[] = {1.25 - half - 1e-6, 1.25 - half + 1e-4};
    double flux[2];
    ephemeris_transit_curve(&giant, time, 2, flux);
    assert_true(flux[0] == 1.0);
    assert_true(flux[1] < 1.0);
    assert_true(ephemeris_transit_full_duration_d(&giant) < 2.0 * half);
}

static void a_disc_that_passes_by_leaves_the_flux_whole(void **state)
{
    (void)state;
    struct ephemeris_transit passes = giant;
    passes.impact = 1.2;
    passes.exposure_d = 0.02;
    const double time[] = {1.25, 1.3};
    double flux[2];
    ephemeris_transit_curve(&passes, time, 2, flux);
    assert_true(flux[0] == 1.0 && flux[1] == 1.0);
    assert_true(ephemeris_transit_duration_d(&passes) == 0.0);
}

static void a_grazing_transit_has_no_full_phase(void **state)
{
    (void)state;
    struct ephemeris_transit grazing = giant;
    grazing.impact = 0.95;
    assert_true(ephemeris_transit_duration_d(&grazing) > 0.0);
    assert_true(ephemeris_transit_full_duration_d(&grazing) == 0.0);
}

/* Averaging moves light about but loses none: the area under the curve stays. */
static void the_exposure_smears_the_dip_and_keeps_its_area(void **state)
{
    (void)state;
    struct ephemeris_transit smeared = giant;
    smeared.exposure_d = 0.0625;
    double sharp_area = 0.0, smeared_area = 0.0, sharp_least = 1.0, smeared_least = 1.0;
    const double step = 1.0 / 16384.0;
    for (int i = -8192; i <= 8192; i++) {
        double time = 1.25 + i * step, sharp, smooth;
        ephemeris_transit_curve(&giant, &time, 1, &sharp);
        ephemeris_transit_curve(&smeared, &time, 1, &smooth);
        sharp_area += (1.0 - sharp) * step;
        smeared_area += (1.0 - smooth) * step;
        sharp_least = fmin(sharp_least, sharp);
        smeared_least = fmin(smeared_least, smooth);
    }
    assert_true(sharp_area > 1e-4);
    assert_true(fabs(smeared_area / sharp_area - 1.0) < 1e-6);
    assert_true(smeared_least > sharp_least);
}

static void an_exposure_of_whole_periods_gives_the_mean_flux(void **state)
{
    (void)state;
    struct ephemeris_transit once = giant, thrice = giant;
    once.exposure_d = giant.period_d;
    thrice.exposure_d = 3.0 * giant.period_d;
    double time = 17.0, mean, mean_of_three;
    ephemeris_transit_curve(&once, &time, 1, &mean);
    ephemeris_transit_curve(&thrice, &time, 1, &mean_of_three);
    assert_true(mean < 0.9999);
    assert_true(fabs(mean - mean_of_three) < 1e-9);
}

/* Earth: P = 1 yr, a = 1 au = 215.03 nominal solar radii (IAU 2012 B2, IAU 2015 B3). */
static void the_axis_ratio_of_the_earth_follows_from_the_year(void **state)
{
    (void)state;
    assert_true(fabs(ephemeris_axis_ratio(365.25636, 1.0) - 215.03) < 0.01);
    double dense = ephemeris_axis_ratio(365.25636, 8.0);
    assert_true(fabs(dense / ephemeris_axis_ratio(365.25636, 1.0) - 2.0) < 1e-12);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(beside_the_star_nothing_is_hidden),
        cmocka_unit_test(a_larger_disc_in_front_hides_everything),
        cmocka_unit_test(in_the_centre_the_closed_form_holds),
        cmocka_unit_test(nothing_jumps_at_contacts_nor_where_the_disc_meets_the_centre),
        cmocka_unit_test(not_a_number_stays_one),
        cmocka_unit_test(the_curve_repeats_with_the_period_and_is_whole_between),
        cmocka_unit_test(the_contacts_are_where_the_flux_begins_to_fall),
        cmocka_unit_test(a_disc_that_passes_by_leaves_the_flux_whole),
        cmocka_unit_test(a_grazing_transit_has_no_full_phase),
        cmocka_unit_test(the_exposure_smears_the_dip_and_keeps_its_area),
        cmocka_unit_test(an_exposure_of_whole_periods_gives_the_mean_flux),
        cmocka_unit_test(the_axis_ratio_of_the_earth_follows_from_the_year),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
