#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/lightcurve.h"

#define MOST 400

/* A light curve of n points at 0.02 d, flux about 1000, that tests then spoil. */
struct sample {
    double time[MOST], flux[MOST], error[MOST];
    int32_t quality[MOST];
    struct lightcurve_raw raw;
};

static struct sample *fresh(struct sample *sample, size_t n)
{
    *sample = (struct sample){0};
    for (size_t i = 0; i < n; i++) {
        sample->time[i] = 10.0 + 0.02 * (double)i;
        sample->flux[i] = 1000.0 + (double)(i % 5) - 2.0;
        sample->error[i] = 3.0;
    }
    sample->raw = (struct lightcurve_raw){.star = {.name = "RB-0001", .ra_deg = 12.5},
                                          .time_reference = "BJD_TDB - 2457000",
                                          .count = n,
                                          .time = sample->time,
                                          .flux = sample->flux,
                                          .error = sample->error,
                                          .quality = sample->quality};
    return sample;
}

static struct lightcurve cleaned(const struct sample *sample, uint32_t mask)
{
    struct lightcurve out;
    struct base_error error = {0};
    if (!lightcurve_clean(&sample->raw, mask, &out, &error))
        fail_msg("%s", error.sentence);
    for (size_t i = 0; i < out.count; i++) {
        assert_true(isfinite(out.time[i]) && isfinite(out.flux[i]));
        assert_true(i == 0 || out.time[i] > out.time[i - 1]);
    }
    return out;
}

static void assert_refused(const struct sample *sample, const char *part)
{
    struct lightcurve out;
    struct base_error error = {0};
    assert_false(lightcurve_clean(&sample->raw, LIGHTCURVE_QUALITY_MASK_DEFAULT, &out, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    if (strstr(error.sentence, part) == NULL)
        fail_msg("\"%s\" does not say \"%s\"", error.sentence, part);
    assert_null(out.time);
    assert_null(out.flux);
    assert_int_equal(out.count, 0);
}

static void clean_flux_has_median_one_and_keeps_what_belongs_to_the_star(void **state)
{
    (void)state;
    struct sample sample;
    struct lightcurve out = cleaned(fresh(&sample, 300), LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 300);
    assert_true(out.median_flux == 1000.0);
    assert_true(out.flux[0] == 0.998 && out.flux[2] == 1.0);
    assert_true(fabs(out.error[7] - 0.003) < 1e-15);
    assert_true(fabs(out.cadence_d - 0.02) < 1e-9);
    assert_string_equal(out.star.name, "RB-0001");
    assert_true(out.star.ra_deg == 12.5);
    assert_string_equal(out.time_reference, "BJD_TDB - 2457000");
    assert_int_equal(out.dropped_nonfinite + out.dropped_flagged + out.dropped_repeats, 0);
    lightcurve_free(&out);
    assert_null(out.time);
}

static void points_without_finite_values_are_dropped_and_counted(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.time[3] = NAN;
    sample.time[4] = INFINITY;
    sample.flux[5] = NAN;
    sample.flux[6] = -INFINITY;
    sample.time[7] = 1e300;
    sample.flux[8] = 1e38; /* a filler value */
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 294);
    assert_int_equal(out.dropped_nonfinite, 6);
    lightcurve_free(&out);
}

static void flagged_points_are_dropped_where_the_mask_says_so(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.quality[10] = 4;
    sample.quality[11] = 1;
    sample.quality[12] = INT32_MIN; /* the top bit */
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 297);
    assert_int_equal(out.dropped_flagged, 3);
    lightcurve_free(&out);
    out = cleaned(&sample, 4);
    assert_int_equal(out.count, 299);
    lightcurve_free(&out);
    out = cleaned(&sample, 0);
    assert_int_equal(out.count, 300);
    lightcurve_free(&out);
}

static void unsorted_times_are_sorted_with_their_flux_and_error(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 301);
    for (size_t i = 0; i < 301; i++) {
        size_t place = (i * 100) % 301; /* 100 and 301 share no factor */
        sample.time[place] = 5.0 + 0.01 * (double)i;
        sample.flux[place] = 500.0 + (double)i;
        sample.error[place] = 1.0 + (double)i;
    }
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 301);
    assert_true(out.median_flux == 650.0);
    for (size_t i = 0; i < 301; i++) {
        assert_true(out.time[i] == 5.0 + 0.01 * (double)i);
        assert_true(out.flux[i] == (500.0 + (double)i) / 650.0);
        assert_true(out.error[i] == (1.0 + (double)i) / 650.0);
    }
    lightcurve_free(&out);
}

static void of_repeated_times_the_first_in_the_file_is_kept(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.time[250] = sample.time[20];
    sample.flux[250] = 1.0;
    sample.time[251] = sample.time[20];
    sample.flux[251] = 2.0;
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 298);
    assert_int_equal(out.dropped_repeats, 2);
    assert_true(out.flux[20] == sample.flux[20] / out.median_flux);
    lightcurve_free(&out);
}

static void low_points_stay_however_low(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.flux[50] = 0.0;
    sample.flux[51] = -40.0;
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_int_equal(out.count, 300);
    assert_true(out.flux[50] == 0.0 && out.flux[51] == -0.04);
    lightcurve_free(&out);
}

static void a_missing_error_becomes_the_median_of_the_others(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.error[0] = NAN;
    sample.error[1] = -1.0;
    sample.error[2] = 0.0;
    sample.error[3] = 100.0;
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_true(out.error[0] == out.error[9] && out.error[1] == out.error[9]);
    assert_true(out.error[2] == out.error[9] && out.error[3] == 0.1);
    lightcurve_free(&out);
    for (size_t i = 0; i < 300; i++)
        sample.error[i] = NAN;
    out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_null(out.error);
    lightcurve_free(&out);
    sample.raw.error = NULL;
    sample.raw.quality = NULL;
    out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_null(out.error);
    lightcurve_free(&out);
}

static void what_cannot_be_used_is_refused_with_its_reason(void **state)
{
    (void)state;
    struct sample sample;
    assert_refused(fresh(&sample, 0), "no points");
    assert_refused(fresh(&sample, 99), "at least 100");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.flux[i] = NAN;
    assert_refused(&sample, "All values are missing");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.quality[i] = 1 << 7;
    assert_refused(&sample, "300 flagged");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.time[i] = 4.0;
    assert_refused(&sample, "do not increase");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.flux[i] = -sample.flux[i];
    assert_refused(&sample, "median");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.flux[i] = 0.0;
    assert_refused(&sample, "median");
    fresh(&sample, 300);
    for (size_t i = 0; i < 300; i++)
        sample.flux[i] = 5e-324;
    assert_refused(&sample, "median");
}

static void too_many_points_are_refused_before_they_are_touched(void **state)
{
    (void)state;
    struct sample sample;
    fresh(&sample, 300);
    sample.raw.count = LIGHTCURVE_POINTS_MAX + 1;
    struct lightcurve out;
    struct base_error error = {0};
    assert_false(lightcurve_clean(&sample.raw, 0, &out, &error));
    assert_int_equal(error.kind, BASE_TOO_LARGE);
    assert_non_null(strstr(error.sentence, "5000000"));
}

static void the_raw_light_curve_is_left_as_it_was(void **state)
{
    (void)state;
    struct sample sample, before;
    fresh(&sample, 300);
    sample.time[200] = 0.5;
    sample.flux[100] = NAN;
    before = sample;
    struct lightcurve out = cleaned(&sample, LIGHTCURVE_QUALITY_MASK_DEFAULT);
    assert_memory_equal(sample.time, before.time, sizeof sample.time);
    assert_memory_equal(sample.flux, before.flux, sizeof sample.flux);
    lightcurve_free(&out);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(clean_flux_has_median_one_and_keeps_what_belongs_to_the_star),
        cmocka_unit_test(points_without_finite_values_are_dropped_and_counted),
        cmocka_unit_test(flagged_points_are_dropped_where_the_mask_says_so),
        cmocka_unit_test(unsorted_times_are_sorted_with_their_flux_and_error),
        cmocka_unit_test(of_repeated_times_the_first_in_the_file_is_kept),
        cmocka_unit_test(low_points_stay_however_low),
        cmocka_unit_test(a_missing_error_becomes_the_median_of_the_others),
        cmocka_unit_test(what_cannot_be_used_is_refused_with_its_reason),
        cmocka_unit_test(too_many_points_are_refused_before_they_are_touched),
        cmocka_unit_test(the_raw_light_curve_is_left_as_it_was),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
