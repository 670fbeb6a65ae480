#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/injection.h"

#define POINTS 10800 /* 15 d at two minutes */
#define CADENCE (2.0 / 1440.0)
#define DRAWS 2000

static double time_of[POINTS];

/* White noise of 300 ppm a point. */
static double white(const void *context, double duration_d)
{
    (void)context;
    return 3e-4 / sqrt(fmax(duration_d / CADENCE, 1.0));
}

static double given(const void *context, double duration_d)
{
    (void)duration_d;
    return *(const double *)context;
}

static struct ephemeris_injection_host quiet_host(void)
{
    for (size_t i = 0; i < POINTS; i++)
        time_of[i] = 1354.0 + CADENCE * (double)i;
    return (struct ephemeris_injection_host){.time = time_of,
                                             .count = POINTS,
                                             .cadence_d = CADENCE,
                                             .exposure_d = CADENCE,
                                             .density_solar = 1.0,
                                             .u1 = EPHEMERIS_INJECTION_U1,
                                             .u2 = EPHEMERIS_INJECTION_U2,
                                             .noise_of_mean = white};
}

static gsl_rng *seeded(unsigned long seed)
{
    gsl_rng *generator = gsl_rng_alloc(gsl_rng_mt19937);
    assert_non_null(generator);
    gsl_rng_set(generator, seed);
    return generator;
}

static void draw(const struct ephemeris_injection_host *host, gsl_rng *generator,
                 struct ephemeris_injection *out)
{
    struct base_error error = {0};
    if (!ephemeris_injection_draw(host, generator, out, &error))
        fail_msg("%s", error.sentence);
}

static int compare_doubles(const void *left, const void *right)
{
    double a = *(const double *)left, b = *(const double *)right;
    return (a > b) - (a < b);
}

/* The largest distance of the sorted shares from a uniform distribution on [0, 1]. */
static double distance_from_uniform(double *share, size_t n)
{
    double worst = 0.0;
    qsort(share, n, sizeof *share, compare_doubles);
    for (size_t i = 0; i < n; i++)
        worst = fmax(worst, fabs(share[i] - ((double)i + 0.5) / (double)n));
    return worst;
}

/* 1.95 / sqrt(n) is passed by chance once in a thousand (Kolmogorov's distribution). */
static void draws_follow_the_distributions_asked_for(void **state)
{
    (void)state;
    struct ephemeris_injection_host host = quiet_host();
    gsl_rng *generator = seeded(5);
    static double snr[DRAWS], period[DRAWS], impact[DRAWS];
    for (size_t i = 0; i < DRAWS; i++) {
        struct ephemeris_injection drawn;
        draw(&host, generator, &drawn);
        snr[i] = log(drawn.snr / 4.0) / log(10.0);
        period[i] = log(drawn.transit.period_d / 0.5) / log(2.0 * (15.0 - CADENCE) / 0.5);
        impact[i] = drawn.transit.impact / 0.9;
    }
    gsl_rng_free(generator);
    double passed_by_chance = 1.95 / sqrt(DRAWS);
    assert_true(distance_from_uniform(snr, DRAWS) < passed_by_chance);
    assert_true(distance_from_uniform(period, DRAWS) < passed_by_chance);
    assert_true(distance_from_uniform(impact, DRAWS) < passed_by_chance);
}

/* The missing light of one transit, summed over 4,000 instants. */
static double area_of(const struct ephemeris_transit *transit)
{
    struct ephemeris_transit sharp = *transit;
    double area = 0.0, total = ephemeris_transit_duration_d(transit);
    sharp.exposure_d = 0.0;
    for (int i = 0; i < 4000; i++) {
        double at = transit->mid_d + total * ((i + 0.5) / 4000.0 - 0.5), flux;
        ephemeris_transit_curve(&sharp, &at, 1, &flux);
        area += (1.0 - flux) * total / 4000.0;
    }
    return area;
}

static void the_radius_ratio_gives_the_snr_that_was_drawn(void **state)
{
    (void)state;
    struct ephemeris_injection_host host = quiet_host();
    gsl_rng *generator = seeded(6);
    for (int i = 0; i < 300; i++) {
        struct ephemeris_injection drawn;
        draw(&host, generator, &drawn);
        double half = 0.5 * (ephemeris_transit_duration_d(&drawn.transit) +
                             ephemeris_transit_full_duration_d(&drawn.transit));
        assert_true(fabs(area_of(&drawn.transit) / (drawn.depth * half) - 1.0) < 1e-4);
        assert_true(fabs(drawn.depth / white(NULL, half) / drawn.snr - 1.0) < 1e-6);
        assert_true(drawn.duration_d == ephemeris_transit_duration_d(&drawn.transit));
        assert_true(
            fabs(drawn.transit.axis_ratio / ephemeris_axis_ratio(drawn.transit.period_d, 1.0) -
                 1.0) < 1e-12);
    }
    gsl_rng_free(generator);
}

static void the_same_seed_draws_the_same_transit(void **state)
{
    (void)state;
    struct ephemeris_injection_host host = quiet_host();
    gsl_rng *one = seeded(7), *other = seeded(7), *third = seeded(8);
    struct ephemeris_injection first, second, different;
    draw(&host, one, &first);
    draw(&host, other, &second);
    draw(&host, third, &different);
    assert_memory_equal(&first, &second, sizeof first);
    assert_true(first.snr != different.snr && first.transit.mid_d != different.transit.mid_d);
    gsl_rng_free(one);
    gsl_rng_free(other);
    gsl_rng_free(third);
}

/* Points only in the first and the last day of fifteen. */
static void a_transit_falls_where_there_are_data(void **state)
{
    (void)state;
    struct ephemeris_injection_host host = quiet_host();
    for (size_t i = 720; i < 1440; i++)
        time_of[i] += 13.0;
    host.count = 1440;
    gsl_rng *generator = seeded(9);
    for (int i = 0; i < 200; i++) {
        struct ephemeris_injection drawn;
        draw(&host, generator, &drawn);
        double first, half = 0.5 * drawn.duration_d;
        size_t transits =
            ephemeris_transits_within(&drawn.transit, time_of[0], time_of[host.count - 1], &first);
        assert_int_equal(transits, drawn.transits);
        size_t most = 0;
        for (size_t t = 0; t < transits; t++) {
            double mid = first + (double)t * drawn.transit.period_d;
            size_t held = 0;
            for (size_t p = 0; p < host.count; p++)
                held += fabs(time_of[p] - mid) <= half ? 1 : 0;
            most = held > most ? held : most;
        }
        assert_true((double)most >= 0.5 * drawn.duration_d / CADENCE);
    }
    gsl_rng_free(generator);
}

static void an_unknown_density_is_that_of_the_sun_and_a_giants_transits_are_longer(void **state)
{
    (void)state;
    const double unknown[] = {NAN, 0.0, -1.0, INFINITY};
    struct ephemeris_injection_host host = quiet_host();
    gsl_rng *generator = seeded(10);
    struct ephemeris_injection sun, drawn;
    draw(&host, generator, &sun);
    for (size_t i = 0; i < sizeof unknown / sizeof unknown[0]; i++) {
        host.density_solar = unknown[i];
        gsl_rng_set(generator, 10);
        draw(&host, generator, &drawn);
        assert_memory_equal(&drawn, &sun, sizeof sun);
    }
    host.density_solar = 0.003;
    for (int i = 0; i < 100; i++) {
        draw(&host, generator, &drawn);
        assert_true(drawn.transit.axis_ratio >= EPHEMERIS_INJECTION_AXIS_LEAST);
        assert_true(drawn.transit.axis_ratio <
                    0.2 * ephemeris_axis_ratio(drawn.transit.period_d, 1.0));
    }
    gsl_rng_free(generator);
}

static void a_noisy_star_gets_only_transits_of_possible_size(void **state)
{
    (void)state;
    double noise = 0.02;
    struct ephemeris_injection_host host = quiet_host();
    host.noise_of_mean = given;
    host.context = &noise;
    gsl_rng *generator = seeded(11);
    for (int i = 0; i < 200; i++) {
        struct ephemeris_injection drawn;
        draw(&host, generator, &drawn);
        assert_true(drawn.transit.radius_ratio <= EPHEMERIS_INJECTION_RATIO_MOST);
        assert_true(drawn.snr < 20.0);
    }
    gsl_rng_free(generator);
}

static void where_no_transit_fits_it_says_so_and_ends(void **state)
{
    (void)state;
    const double noises[] = {NAN, 0.0, -1.0, INFINITY, 1.0};
    gsl_rng *generator = seeded(12);
    for (size_t i = 0; i < sizeof noises / sizeof noises[0]; i++) {
        struct ephemeris_injection_host host = quiet_host();
        struct ephemeris_injection drawn;
        struct base_error error = {0};
        host.noise_of_mean = given;
        host.context = &noises[i];
        assert_false(ephemeris_injection_draw(&host, generator, &drawn, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_non_null(strstr(error.sentence, "take another"));
    }
    struct ephemeris_injection_host host = quiet_host();
    struct ephemeris_injection drawn;
    struct base_error error = {0};
    host.density_solar = 1e-9;
    assert_false(ephemeris_injection_draw(&host, generator, &drawn, &error));
    host = quiet_host();
    host.count = 1;
    assert_false(ephemeris_injection_draw(&host, generator, &drawn, &error));
    gsl_rng_free(generator);
}

static void transits_within_an_interval_are_counted(void **state)
{
    (void)state;
    struct ephemeris_transit transit = {.period_d = 3.0, .mid_d = 100.5};
    double first;
    assert_int_equal(ephemeris_transits_within(&transit, 0.0, 10.0, &first), 3);
    assert_true(fabs(first - 1.5) < 1e-9);
    assert_int_equal(ephemeris_transits_within(&transit, 100.5, 103.5, &first), 2);
    assert_int_equal(ephemeris_transits_within(&transit, 101.0, 103.0, &first), 0);
    assert_int_equal(ephemeris_transits_within(&transit, 202.0, 203.0, &first), 1);
    assert_true(fabs(first - 202.5) < 1e-9);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(draws_follow_the_distributions_asked_for),
        cmocka_unit_test(the_radius_ratio_gives_the_snr_that_was_drawn),
        cmocka_unit_test(the_same_seed_draws_the_same_transit),
        cmocka_unit_test(a_transit_falls_where_there_are_data),
        cmocka_unit_test(an_unknown_density_is_that_of_the_sun_and_a_giants_transits_are_longer),
        cmocka_unit_test(a_noisy_star_gets_only_transits_of_possible_size),
        cmocka_unit_test(where_no_transit_fits_it_says_so_and_ends),
        cmocka_unit_test(transits_within_an_interval_are_counted),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
