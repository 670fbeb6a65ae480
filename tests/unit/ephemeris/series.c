#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/series.h"

#define CADENCE 0.02
#define POINTS 1350 /* 27 d */

static double time_of[POINTS];
static struct base_arena *arena;

static int open_arena(void **state)
{
    (void)state;
    arena = base_arena_new(0);
    for (size_t i = 0; i < POINTS; i++)
        time_of[i] = 100.0 + CADENCE * (double)i;
    return arena == NULL;
}

static int free_arena(void **state)
{
    (void)state;
    base_arena_free(arena);
    return 0;
}

static const struct ephemeris_watch whole = {
    .time = time_of, .count = POINTS, .cadence_d = CADENCE};

static struct ephemeris_event dip_at(double mid_d)
{
    return (struct ephemeris_event){.mid_d = mid_d,
                                    .mid_error_d = 0.003,
                                    .depth = 0.01,
                                    .depth_error = 3e-4,
                                    .duration_d = 0.15,
                                    .duration_error_d = 0.01,
                                    .probability = 0.95};
}

static struct ephemeris_linked linked(const struct ephemeris_event *event, size_t count)
{
    struct ephemeris_linked out;
    struct base_error error = {0};
    if (!ephemeris_series_link(event, count, &whole, &ephemeris_link_rules_usual, arena, &out,
                               &error))
        fail_msg("%s", error.sentence);
    return out;
}

static void a_line_through_exact_times_has_no_scatter(void **state)
{
    (void)state;
    const double mid[] = {103.0, 105.5, 113.0}, sigma[] = {0.01, 0.01, 0.02};
    const int64_t cycle[] = {10, 11, 14};
    struct ephemeris_line line;
    int64_t origin;
    ephemeris_line_fit(mid, sigma, cycle, 3, &line, &origin);
    assert_true(fabs(line.period_d - 2.5) < 1e-12 && line.chi2 < 1e-18 && line.freedom == 1);
    assert_int_equal(origin, 11);
    assert_true(fabs(line.epoch_d - 105.5) < 1e-12);
    assert_true(fabs(ephemeris_line_mid_d(&line, 3) - 113.0) < 1e-12);
    assert_true(ephemeris_line_mid_error_d(&line, 40) > ephemeris_line_mid_error_d(&line, 0));
}

static void dips_that_repeat_are_one_series(void **state)
{
    (void)state;
    const struct ephemeris_event event[] = {dip_at(119.001), dip_at(101.0), dip_at(113.002),
                                            dip_at(124.999), dip_at(106.999)};
    struct ephemeris_linked found = linked(event, 5);
    const size_t order[] = {1, 4, 2, 0, 3};
    assert_int_equal(found.count, 1);
    assert_int_equal(found.series[0].members, 5);
    assert_memory_equal(found.series[0].member, order, sizeof order);
    for (size_t i = 0; i < 5; i++)
        assert_int_equal(found.series[0].cycle[i], (int)i - 2);
    assert_int_equal(found.series[0].surviving, 1);
    assert_true(fabs(found.series[0].alias[0].line.period_d - 6.0) < 0.001);
    assert_true(fabs(found.series[0].alias[0].line.epoch_d - 113.0) < 0.003);
    assert_int_equal(found.series[0].alias[0].missing, 0);
    assert_true(found.series[0].alias[0].share == 1.0);
}

static void a_missed_dip_is_counted_and_the_period_kept(void **state)
{
    (void)state;
    const struct ephemeris_event event[] = {dip_at(102.0), dip_at(107.0), dip_at(112.0),
                                            dip_at(122.0)};
    struct ephemeris_linked found = linked(event, 4);
    assert_int_equal(found.count, 1);
    assert_true(fabs(found.series[0].alias[0].line.period_d - 5.0) < 0.001);
    assert_int_equal(found.series[0].alias[0].missing, 1);
}

static void dips_of_unlike_depth_are_no_series(void **state)
{
    (void)state;
    struct ephemeris_event event[] = {dip_at(105.0), dip_at(115.0)};
    event[1].depth = 0.03;
    struct ephemeris_linked found = linked(event, 2);
    assert_int_equal(found.count, 2);
    for (size_t i = 0; i < 2; i++) {
        assert_int_equal(found.series[i].members, 1);
        assert_int_equal(found.series[i].member[0], i);
        assert_int_equal(found.series[i].aliases, 0);
        assert_true(found.series[i].ranges > 0);
    }
}

static void a_single_dip_excludes_periods_that_would_show_another(void **state)
{
    (void)state;
    const struct ephemeris_event event = dip_at(110.0);
    struct ephemeris_linked found = linked(&event, 1);
    assert_int_equal(found.count, 1);
    /* 110 d is 17 d from the end of the data: any period below puts a dip on them. */
    assert_int_equal(found.series[0].ranges, 1);
    assert_true(fabs(found.series[0].range[0].from_d - 17.0) < 0.15);
    assert_true(isinf(found.series[0].range[0].to_d));
}

static void without_data_a_single_dip_may_have_any_period(void **state)
{
    (void)state;
    const struct ephemeris_watch none = {.cadence_d = CADENCE};
    const struct ephemeris_event event = dip_at(110.0);
    struct ephemeris_linked found;
    struct base_error error = {0};
    assert_true(ephemeris_series_link(&event, 1, &none, &ephemeris_link_rules_usual, arena, &found,
                                      &error));
    assert_int_equal(found.series[0].ranges, 1);
    assert_true(found.series[0].range[0].from_d == 0.3);
}

static void a_dip_whose_time_is_not_known_is_left_out(void **state)
{
    (void)state;
    struct ephemeris_event event[] = {dip_at(105.0), dip_at(NAN), dip_at(115.0), dip_at(108.0),
                                      dip_at(109.0)};
    event[3].mid_error_d = NAN;
    event[4].depth = -0.01;
    struct ephemeris_linked found = linked(event, 5);
    assert_int_equal(found.count, 1);
    assert_int_equal(found.series[0].members, 2);
    assert_int_equal(found.series[0].member[1], 2);
    assert_int_equal(linked(event, 0).count, 0);
}

static void numbers_at_the_ends_of_their_range_do_no_harm(void **state)
{
    (void)state;
    const double ends[] = {-INFINITY, -1e308, -1e9, -1.0,  0.0,     1e-308,
                           1e-9,      1.0,    1e9,  1e308, INFINITY};
    enum { ENDS = sizeof ends / sizeof ends[0] };
    struct ephemeris_event event[ENDS * 6];
    for (size_t i = 0; i < ENDS; i++) {
        for (size_t k = 0; k < 6; k++)
            event[6 * i + k] = dip_at(105.0 + (double)k);
        event[6 * i].mid_d = ends[i];
        event[6 * i + 1].mid_error_d = ends[i];
        event[6 * i + 2].depth = ends[i];
        event[6 * i + 3].depth_error = ends[i];
        event[6 * i + 4].duration_d = ends[i];
        event[6 * i + 5].duration_error_d = ends[i];
    }
    struct ephemeris_linked found = linked(event, ENDS * 6);
    assert_true(found.count > 0);
    for (size_t i = 0; i < found.count; i++) {
        for (size_t k = 0; k < found.series[i].aliases; k++)
            assert_true(found.series[i].alias[k].line.period_d > 0.0 &&
                        isfinite(found.series[i].alias[k].line.period_error_d) &&
                        isfinite(found.series[i].alias[k].evidence));
        for (size_t k = 0; k < found.series[i].ranges; k++)
            assert_true(found.series[i].range[k].from_d > 0.0 &&
                        found.series[i].range[k].to_d > found.series[i].range[k].from_d);
    }
}

static void many_dips_at_one_time_are_linked_without_harm(void **state)
{
    (void)state;
    enum { MANY = 200 };
    struct ephemeris_event event[MANY];
    for (size_t i = 0; i < MANY; i++)
        event[i] = dip_at(105.0 + (double)(i % 3));
    struct ephemeris_linked found = linked(event, MANY);
    size_t members = 0;
    for (size_t i = 0; i < found.count; i++)
        members += found.series[i].members;
    assert_int_equal(members, MANY);
}

static void refused(const struct ephemeris_event *event, size_t count,
                    const struct ephemeris_watch *watch, const struct ephemeris_link_rules *rules,
                    enum base_error_kind kind)
{
    struct ephemeris_linked out;
    struct base_error error = {0};
    assert_false(ephemeris_series_link(event, count, watch, rules, arena, &out, &error));
    assert_int_equal(error.kind, kind);
    assert_int_equal(out.count, 0);
}

static void numbers_out_of_range_are_refused(void **state)
{
    (void)state;
    static struct ephemeris_event many[EPHEMERIS_EVENTS_MOST + 1];
    for (size_t i = 0; i <= EPHEMERIS_EVENTS_MOST; i++)
        many[i] = dip_at(105.0);
    const struct ephemeris_link_rules *usual = &ephemeris_link_rules_usual;
    refused(many, EPHEMERIS_EVENTS_MOST + 1, &whole, usual, BASE_TOO_LARGE);
    many[1].probability = 1.1;
    refused(many, 2, &whole, usual, BASE_INVALID);
    many[1].probability = NAN;
    refused(many, 2, &whole, usual, BASE_INVALID);
    const double back[] = {3.0, 2.0}, missing[] = {3.0, NAN};
    refused(many, 1, &(struct ephemeris_watch){back, 2, CADENCE}, usual, BASE_INVALID);
    refused(many, 1, &(struct ephemeris_watch){missing, 2, CADENCE}, usual, BASE_INVALID);
    refused(many, 1, &(struct ephemeris_watch){time_of, 2, 0.0}, usual, BASE_INVALID);
    struct ephemeris_link_rules rules = *usual;
    rules.chance_missed = 0.0;
    refused(many, 1, &whole, &rules, BASE_INVALID);
    rules = *usual;
    rules.period_least_d = NAN;
    refused(many, 1, &whole, &rules, BASE_INVALID);
}

static void too_little_memory_is_an_error(void **state)
{
    (void)state;
    const struct ephemeris_event event[] = {dip_at(105.0), dip_at(115.0), dip_at(125.0)};
    struct base_error error = {0};
    bool ok = false;
    int failures = 0;
    for (size_t limit = 64; !ok && limit < 65536; limit += 64) {
        struct base_arena *small = base_arena_new(limit);
        struct ephemeris_linked out;
        assert_non_null(small);
        ok = ephemeris_series_link(event, 3, &whole, &ephemeris_link_rules_usual, small, &out,
                                   &error);
        if (!ok) {
            assert_int_equal(error.kind, BASE_MEMORY);
            failures++;
        }
        base_arena_free(small);
    }
    assert_true(ok && failures > 3);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_line_through_exact_times_has_no_scatter),
        cmocka_unit_test(dips_that_repeat_are_one_series),
        cmocka_unit_test(a_missed_dip_is_counted_and_the_period_kept),
        cmocka_unit_test(dips_of_unlike_depth_are_no_series),
        cmocka_unit_test(a_single_dip_excludes_periods_that_would_show_another),
        cmocka_unit_test(without_data_a_single_dip_may_have_any_period),
        cmocka_unit_test(a_dip_whose_time_is_not_known_is_left_out),
        cmocka_unit_test(numbers_at_the_ends_of_their_range_do_no_harm),
        cmocka_unit_test(many_dips_at_one_time_are_linked_without_harm),
        cmocka_unit_test(numbers_out_of_range_are_refused),
        cmocka_unit_test(too_little_memory_is_an_error),
    };
    return cmocka_run_group_tests(tests, open_arena, free_arena);
}
