#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/bls.h"

#define POINTS 2000
#define PERIODS 400
#define CADENCE 0.0137

static double time_of[POINTS], flux_of[POINTS], period_of[PERIODS];
static const double durations[] = {0.1, 0.16};

/* Dips of 1 % and 0.16 d at 1.0 d and every 2.5 d after, and a slow wave of 0.01 %. */
static struct ephemeris_bls_data dips(void)
{
    for (size_t i = 0; i < POINTS; i++) {
        time_of[i] = CADENCE * (double)i;
        flux_of[i] = 1.0 + 1e-4 * sin(time_of[i]);
        if (fabs(remainder(time_of[i] - 1.0, 2.5)) < 0.08)
            flux_of[i] -= 0.01;
    }
    return (struct ephemeris_bls_data){.time = time_of, .flux = flux_of, .count = POINTS};
}

static struct ephemeris_bls_search search(void)
{
    for (size_t i = 0; i < PERIODS; i++)
        period_of[i] = 1.5 + 0.005 * (double)i;
    return (struct ephemeris_bls_search){.period = period_of,
                                         .periods = PERIODS,
                                         .duration = durations,
                                         .durations = 2,
                                         .oversample = 16};
}

static void dips_that_repeat_peak_at_their_period(void **state)
{
    (void)state;
    struct ephemeris_bls_data data = dips();
    struct ephemeris_bls_search wanted = search();
    struct ephemeris_bls_box out[PERIODS];
    struct base_error error = {0};
    for (int objective = EPHEMERIS_BLS_LIKELIHOOD; objective <= EPHEMERIS_BLS_SNR; objective++) {
        wanted.objective = (enum ephemeris_bls_objective)objective;
        assert_true(ephemeris_bls_power(&data, &wanted, NULL, out, &error));
        size_t best = 0;
        for (size_t i = 0; i < PERIODS; i++)
            if (out[i].power > out[best].power)
                best = i;
        assert_true(fabs(period_of[best] - 2.5) < 1e-9);
        assert_true(fabs(out[best].depth - 0.01) < 3e-4);
        assert_true(out[best].duration_d == 0.16 && fabs(out[best].mid_d - 1.0) < 0.011);
    }
}

static void light_that_never_changes_has_no_power(void **state)
{
    (void)state;
    struct ephemeris_bls_search wanted = search();
    struct ephemeris_bls_box out[PERIODS];
    struct base_error error = {0};
    for (size_t i = 0; i < POINTS; i++) {
        time_of[i] = 5.0 + CADENCE * (double)i;
        flux_of[i] = 1.0;
    }
    struct ephemeris_bls_data data = {.time = time_of, .flux = flux_of, .count = POINTS};
    assert_true(ephemeris_bls_power(&data, &wanted, NULL, out, &error));
    for (size_t i = 0; i < PERIODS; i++)
        assert_true(out[i].power == 0.0 && out[i].depth == 0.0 && out[i].mid_d == 5.0);
}

static void the_number_of_threads_changes_no_bit(void **state)
{
    (void)state;
    struct ephemeris_bls_data data = dips();
    struct ephemeris_bls_search wanted = search();
    struct ephemeris_bls_box alone[PERIODS], many[PERIODS];
    struct base_error error = {0};
    assert_true(ephemeris_bls_power(&data, &wanted, NULL, alone, &error));
    for (unsigned threads = 1; threads <= 4; threads++) {
        struct base_pool *pool = NULL;
        memset(many, 0xff, sizeof many);
        assert_true(base_pool_open(&pool, threads, 1, &error));
        assert_true(ephemeris_bls_power(&data, &wanted, pool, many, &error));
        base_pool_close(pool);
        assert_memory_equal(alone, many, sizeof many);
    }
}

static bool after_three(void *context)
{
    return atomic_fetch_add((atomic_int *)context, 1) >= 3;
}

static void a_search_that_is_cancelled_stops_soon(void **state)
{
    (void)state;
    struct ephemeris_bls_data data = dips();
    struct ephemeris_bls_search wanted = search();
    struct ephemeris_bls_box out[PERIODS];
    struct base_error error = {0};
    atomic_int asked = 0;
    wanted.cancelled = after_three;
    wanted.context = &asked;
    assert_false(ephemeris_bls_power(&data, &wanted, NULL, out, &error));
    assert_int_equal(error.kind, BASE_CANCELLED);
    assert_int_equal(asked, 4);
}

static void refused(const struct ephemeris_bls_data *data,
                    const struct ephemeris_bls_search *wanted, enum base_error_kind kind)
{
    struct ephemeris_bls_box out[PERIODS];
    struct base_error error = {0};
    assert_false(ephemeris_bls_power(data, wanted, NULL, out, &error));
    assert_int_equal(error.kind, kind);
    assert_true(strlen(error.sentence) > 0);
}

static void numbers_that_make_no_search_are_refused(void **state)
{
    (void)state;
    struct ephemeris_bls_data data = dips();
    struct ephemeris_bls_search wanted = search();
    const double bad[] = {NAN, INFINITY, 0.0, -1.0, 0.16};
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        period_of[7] = bad[i];
        refused(&data, &wanted, BASE_INVALID);
    }
    wanted = search();
    for (size_t i = 0; i < 4; i++) {
        const double duration[] = {0.1, bad[i]};
        wanted.duration = duration;
        refused(&data, &wanted, BASE_INVALID);
        wanted = search();
    }
    flux_of[9] = NAN;
    refused(&data, &wanted, BASE_INVALID);
    data = dips();
    time_of[9] = INFINITY;
    refused(&data, &wanted, BASE_INVALID);
    data = dips();
    data.count = 1;
    refused(&data, &wanted, BASE_INVALID);
    data = dips();
    wanted.oversample = 0;
    refused(&data, &wanted, BASE_INVALID);
    wanted = search();
    period_of[PERIODS - 1] = 1e9;
    refused(&data, &wanted, BASE_TOO_LARGE);
    wanted = search();
    time_of[3] = 1e12;
    refused(&data, &wanted, BASE_TOO_LARGE);
}

static void two_points_at_one_time_are_searched_without_harm(void **state)
{
    (void)state;
    const double time[] = {3.0, 3.0}, flux[] = {0.9, 1.1};
    struct ephemeris_bls_data data = {.time = time, .flux = flux, .count = 2};
    struct ephemeris_bls_search wanted = search();
    struct ephemeris_bls_box out[PERIODS];
    struct base_error error = {0};
    assert_true(ephemeris_bls_power(&data, &wanted, NULL, out, &error));
    for (size_t i = 0; i < PERIODS; i++)
        assert_true(out[i].power == 0.0);
}

static void a_step_of_the_grid_moves_the_last_dip_by_a_third_of_its_length(void **state)
{
    (void)state;
    size_t count = ephemeris_bls_grid(0.5, 14.0, 0.1, 27.0, NULL, 0);
    double *period = calloc(count, sizeof *period);
    assert_non_null(period);
    assert_int_equal(ephemeris_bls_grid(0.5, 14.0, 0.1, 27.0, period, count), count);
    assert_true(period[0] == 0.5 && period[count - 1] == 14.0);
    for (size_t i = 1; i < count; i++) {
        double moved = (period[i] - period[i - 1]) * 27.0 / period[i - 1];
        assert_true(moved <= 0.33 * 0.1 * 1.0001 && moved > 0.32 * 0.1);
    }
    free(period);
    assert_int_equal(ephemeris_bls_grid(1e-3, 1e4, 1e-6, 1e6, NULL, 0), EPHEMERIS_BLS_PERIODS_MOST);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(dips_that_repeat_peak_at_their_period),
        cmocka_unit_test(light_that_never_changes_has_no_power),
        cmocka_unit_test(the_number_of_threads_changes_no_bit),
        cmocka_unit_test(a_search_that_is_cancelled_stops_soon),
        cmocka_unit_test(numbers_that_make_no_search_are_refused),
        cmocka_unit_test(two_points_at_one_time_are_searched_without_harm),
        cmocka_unit_test(a_step_of_the_grid_moves_the_last_dip_by_a_third_of_its_length),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
