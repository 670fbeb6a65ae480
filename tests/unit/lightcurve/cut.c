#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve.h"
#include "measure_support.h"

#define MOST 40000

static double time_of[MOST];
static struct lightcurve curve;

/* Begin a light curve of the given cadence; then add stretches. */
static void begin(double cadence_d)
{
    curve = (struct lightcurve){.time = time_of, .cadence_d = cadence_d};
}

static void stretch(double starts_d, double ends_d)
{
    for (double t = starts_d; t <= ends_d && curve.count < MOST; t += curve.cadence_d)
        time_of[curve.count++] = t;
}

struct cut {
    struct lightcurve_span *spans;
    size_t count, dropped;
};

/* Cut, and check what must hold of every cut: spans within the data, in order, at least one new
 * point each, of sane length, and every point in a span or counted as dropped. */
static struct cut cut_by(const struct lightcurve_cut_settings *settings)
{
    struct cut cut;
    struct base_error error = {0};
    if (!lightcurve_cut(&curve, settings, &cut.spans, &cut.count, &cut.dropped, &error))
        fail_msg("%s", error.sentence);
    unsigned char *held = calloc(curve.count + 1, 1);
    assert_non_null(held);
    double longest_step = 0.0;
    for (size_t i = 1; i < curve.count; i++)
        if (time_of[i] - time_of[i - 1] <= fmax(settings->length_d, curve.cadence_d * 10.0))
            longest_step = fmax(longest_step, time_of[i] - time_of[i - 1]);
    size_t reached = 0, outside = 0;
    for (size_t s = 0; s < cut.count; s++) {
        const struct lightcurve_span *span = &cut.spans[s];
        assert_true(span->count > 0 && span->first + span->count <= curve.count);
        assert_true(span->starts_d == time_of[span->first]);
        assert_true(span->ends_d == time_of[span->first + span->count - 1]);
        assert_true(span->ends_d - span->starts_d <= 1.5 * settings->length_d + longest_step);
        assert_true(span->first + span->count > reached);
        assert_true(s == 0 || span->first > cut.spans[s - 1].first);
        reached = span->first + span->count;
        for (size_t i = span->first; i < reached; i++)
            held[i] = 1;
    }
    for (size_t i = 0; i < curve.count; i++)
        outside += held[i] == 0;
    free(held);
    assert_int_equal(outside, cut.dropped);
    return cut;
}

static struct cut cut_by_default(void)
{
    struct lightcurve_cut_settings settings = LIGHTCURVE_CUT_DEFAULT;
    return cut_by(&settings);
}

static void a_gap_is_half_a_day_or_ten_cadences(void **state)
{
    (void)state;
    assert_true(lightcurve_gap_d(2.0 / 1440.0) == 0.5);
    assert_true(fabs(lightcurve_gap_d(0.1) - 1.0) < 1e-12);
}

static void a_long_unbroken_curve_is_cut_evenly_with_the_overlap(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 90.0);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 6);
    for (size_t s = 0; s < cut.count; s++) {
        double length = cut.spans[s].ends_d - cut.spans[s].starts_d;
        assert_true(length > 11.0 && length < 18.75);
        if (s > 0)
            assert_true(fabs(cut.spans[s - 1].ends_d - cut.spans[s].starts_d - 0.75) < 0.05);
    }
    free(cut.spans);
}

static void a_gap_near_the_boundary_takes_the_cut_and_needs_no_overlap(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 12.5);
    stretch(13.9, 27.4);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 2);
    assert_true(cut.spans[0].ends_d < 12.6 && cut.spans[1].starts_d > 13.8);
    assert_int_equal(cut.spans[0].first + cut.spans[0].count, cut.spans[1].first);
    assert_int_equal(cut.dropped, 0);
    free(cut.spans);
}

static void a_gap_far_from_the_boundary_stays_inside_a_segment(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 5.0);
    stretch(6.0, 29.0);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 2);
    assert_true(cut.spans[0].ends_d > 14.0);
    assert_true(cut.spans[1].starts_d < cut.spans[0].ends_d);
    free(cut.spans);
}

static void a_gap_longer_than_a_segment_always_parts(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 10.0);
    stretch(30.0, 40.0);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 2);
    assert_true(cut.spans[0].ends_d < 10.1 && cut.spans[1].starts_d > 29.9);
    free(cut.spans);
}

static void a_short_stretch_joins_its_neighbour(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 14.0);
    stretch(15.5, 16.5); /* 1 d, a gap before it where the cut would like to be */
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 1);
    assert_int_equal(cut.dropped, 0);
    assert_true(cut.spans[0].ends_d > 16.4);
    free(cut.spans);
    begin(0.02);
    stretch(0.0, 14.0);
    stretch(15.5, 28.0);
    stretch(29.0, 30.0);
    cut = cut_by_default();
    assert_int_equal(cut.count, 2);
    assert_true(cut.spans[1].ends_d > 29.9);
    free(cut.spans);
}

static void an_isolated_short_stretch_is_dropped_and_its_points_counted(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 10.0);
    size_t before = curve.count;
    stretch(40.0, 41.0);
    size_t lone = curve.count - before;
    stretch(80.0, 92.0);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 2);
    assert_int_equal(cut.dropped, lone);
    free(cut.spans);
}

static void a_curve_shorter_than_the_least_gives_one_segment(void **state)
{
    (void)state;
    begin(0.002);
    stretch(0.0, 1.0);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 1);
    assert_int_equal(cut.spans[0].count, curve.count);
    free(cut.spans);
}

static void where_every_stretch_is_too_short_the_longest_is_kept(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 0.5);
    stretch(40.0, 41.0);
    stretch(80.0, 80.7);
    struct cut cut = cut_by_default();
    assert_int_equal(cut.count, 1);
    assert_true(cut.spans[0].starts_d == 40.0);
    free(cut.spans);
}

static void points_scattered_at_random_are_all_placed(void **state)
{
    (void)state;
    struct dice dice = {7};
    for (int turn = 0; turn < 300; turn++) {
        begin(0.02);
        double t = 0.0;
        size_t n = 1 + (size_t)(dice_uniform(&dice) * 600.0);
        for (size_t i = 0; i < n; i++) {
            t += pow(10.0, -3.0 + 4.5 * dice_uniform(&dice));
            time_of[curve.count++] = t;
        }
        curve.cadence_d = pow(10.0, -3.0 + 3.0 * dice_uniform(&dice));
        double length = 1.0 + 30.0 * dice_uniform(&dice);
        struct lightcurve_cut_settings settings = {length, length * 0.5 * dice_uniform(&dice),
                                                   length * dice_uniform(&dice)};
        struct cut cut = cut_by(&settings);
        assert_true(cut.count > 0);
        free(cut.spans);
    }
}

static void times_that_reach_across_millions_of_years_do_not_make_it_hang(void **state)
{
    (void)state;
    begin(1e5);
    stretch(-1e9, 1e9);
    struct cut cut = cut_by_default();
    assert_true(cut.count > 0 && cut.count <= curve.count);
    free(cut.spans);
}

static void settings_out_of_range_are_refused_by_name(void **state)
{
    (void)state;
    begin(0.02);
    stretch(0.0, 20.0);
    const struct {
        struct lightcurve_cut_settings settings;
        const char *field;
    } cases[] = {{{0.5, 0.1, 0.2}, "length_d"},    {{1001.0, 0.1, 2.0}, "length_d"},
                 {{NAN, 0.1, 2.0}, "length_d"},    {{15.0, 8.0, 2.0}, "overlap_d"},
                 {{15.0, -0.1, 2.0}, "overlap_d"}, {{15.0, 0.75, NAN}, "least_d"},
                 {{15.0, 0.75, 16.0}, "least_d"}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct lightcurve_span *spans;
        size_t count, dropped;
        struct base_error error = {0};
        assert_false(lightcurve_cut(&curve, &cases[i].settings, &spans, &count, &dropped, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_string_equal(error.field, cases[i].field);
        assert_null(spans);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_gap_is_half_a_day_or_ten_cadences),
        cmocka_unit_test(a_long_unbroken_curve_is_cut_evenly_with_the_overlap),
        cmocka_unit_test(a_gap_near_the_boundary_takes_the_cut_and_needs_no_overlap),
        cmocka_unit_test(a_gap_far_from_the_boundary_stays_inside_a_segment),
        cmocka_unit_test(a_gap_longer_than_a_segment_always_parts),
        cmocka_unit_test(a_short_stretch_joins_its_neighbour),
        cmocka_unit_test(an_isolated_short_stretch_is_dropped_and_its_points_counted),
        cmocka_unit_test(a_curve_shorter_than_the_least_gives_one_segment),
        cmocka_unit_test(where_every_stretch_is_too_short_the_longest_is_kept),
        cmocka_unit_test(points_scattered_at_random_are_all_placed),
        cmocka_unit_test(times_that_reach_across_millions_of_years_do_not_make_it_hang),
        cmocka_unit_test(settings_out_of_range_are_refused_by_name),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
