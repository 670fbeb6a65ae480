#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/lightcurve_pack.h"
#include "measure_support.h"

#define POINTS 2000
#define SIZE (LIGHTCURVE_PACK_HEAD + 8 * POINTS)

/* 27 d of points, as packed. */
static void sample(double *time, double *flux, unsigned char *body)
{
    struct dice dice = {3};
    for (size_t i = 0; i < POINTS; i++) {
        time[i] = 1354.114 + 0.0135 * (double)i;
        flux[i] = 1.0 + 1e-3 * dice_normal(&dice);
    }
    lightcurve_pack(time, flux, POINTS, 12345.678, 9.5e-4, body);
}

static void a_packed_segment_reads_back_the_same(void **state)
{
    (void)state;
    static double time[POINTS], flux[POINTS];
    static unsigned char body[SIZE];
    sample(time, flux, body);
    assert_int_equal(lightcurve_pack_size(POINTS), SIZE);
    double *times, *fluxes, noise;
    size_t n;
    struct base_error error = {0};
    assert_true(lightcurve_unpack(body, SIZE, &times, &fluxes, &n, &noise, &error));
    assert_int_equal(n, POINTS);
    assert_true(fabs(noise - 9.5e-4) < 1e-10);
    for (size_t i = 0; i < n; i++) {
        assert_true(fabs(times[i] - time[i]) * 86400.0 < 0.2);
        assert_true(fabs(fluxes[i] - flux[i]) < 1e-9);
    }
    free(times);
    free(fluxes);
}

/* The bytes as the format's description has them, written out by hand: IEEE 754 values of 1354.0,
 * 2.0, 0.25, and of 0.5 d and -0.125. */
static void the_bytes_are_those_of_the_description(void **state)
{
    (void)state;
    const double time[] = {1354.5}, flux[] = {0.875};
    unsigned char body[40];
    lightcurve_pack(time, flux, 1, 2.0, 0.25, body);
    const unsigned char wanted[40] = {
        'E', 'B', 'F', '1',  1, 0, 0,    0,    0, 0, 0, 0, 0, 0x28, 0x95, 0x40, 0, 0, 0, 0,
        0,   0,   0,   0x40, 0, 0, 0x80, 0x3e, 0, 0, 0, 0, 0, 0,    0,    0x3f, 0, 0, 0, 0xbe};
    assert_memory_equal(body, wanted, sizeof body);
}

static void an_empty_segment_packs_and_reads_back(void **state)
{
    (void)state;
    unsigned char body[LIGHTCURVE_PACK_HEAD];
    lightcurve_pack(NULL, NULL, 0, 1.0, NAN, body);
    double *times, *fluxes, noise;
    size_t n = 9;
    struct base_error error = {0};
    assert_true(lightcurve_unpack(body, sizeof body, &times, &fluxes, &n, &noise, &error));
    assert_int_equal(n, 0);
    assert_true(isnan(noise));
    free(times);
    free(fluxes);
}

static void assert_unpack_refuses(const unsigned char *body, size_t size)
{
    double *times, *fluxes, noise;
    size_t n;
    struct base_error error = {0};
    /* A copy of exactly the size, so that a read past the end is caught. */
    unsigned char *exact = malloc(size + 1);
    assert_non_null(exact);
    unsigned char *copy = realloc(exact, size > 0 ? size : 1);
    assert_non_null(copy);
    memcpy(copy, body, size);
    assert_false(lightcurve_unpack(copy, size, &times, &fluxes, &n, &noise, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    assert_true(strlen(error.sentence) > 20);
    assert_null(times);
    assert_null(fluxes);
    free(copy);
}

static void hostile_bodies_are_refused(void **state)
{
    (void)state;
    static double time[POINTS], flux[POINTS];
    static unsigned char body[SIZE], spoilt[SIZE];
    sample(time, flux, body);
    for (size_t size = 0; size < SIZE; size += size < 64 ? 1 : 997)
        assert_unpack_refuses(body, size);
    const struct {
        size_t at;
        unsigned char bytes[8];
        size_t count;
    } cases[] = {
        {0, {'X'}, 1},                                 /* another magic */
        {4, {0xff, 0xff, 0xff, 0xff}, 4},              /* points that are not there */
        {4, {0xcf, 0x07, 0, 0}, 4},                    /* one point less */
        {8, {0, 0, 0, 0, 0, 0, 0xf8, 0x7f}, 8},        /* a reference that is no number */
        {8, {0, 0, 0, 0, 0, 0, 0xe0, 0x7f}, 8},        /* or 9e307 d */
        {16, {0, 0, 0, 0, 0, 0, 0xf0, 0x7f}, 8},       /* an infinite median */
        {24, {0, 0, 0x80, 0x7f}, 4},                   /* infinite noise */
        {24, {0, 0, 0x80, 0xbf}, 4},                   /* negative noise */
        {28, {1}, 1},                                  /* not zero */
        {32 + 4 * 500, {0, 0, 0xc0, 0x7f}, 4},         /* a time that is no number */
        {32 + 4 * 500, {0, 0, 0, 0}, 4},               /* a time that goes back */
        {32 + 4 * (POINTS + 7), {0, 0, 0x80, 0xff}, 4} /* flux of minus infinity */
    };
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        memcpy(spoilt, body, SIZE);
        memcpy(spoilt + cases[i].at, cases[i].bytes, cases[i].count);
        assert_unpack_refuses(spoilt, SIZE);
    }
}

static void bodies_of_random_bytes_never_crash(void **state)
{
    (void)state;
    struct dice dice = {11};
    unsigned char body[200];
    for (int turn = 0; turn < 20000; turn++) {
        size_t points = (size_t)(dice_uniform(&dice) * 20.0);
        size_t size = LIGHTCURVE_PACK_HEAD + 8 * points;
        for (size_t i = 0; i < size; i++)
            body[i] = (unsigned char)(dice_uniform(&dice) * 256.0);
        memcpy(body, "EBF1", 4);
        body[4] = (unsigned char)points;
        memset(body + 5, 0, 3);
        if (turn % 2 == 0)
            memset(body + 8, 0, 24);
        double *times, *fluxes, noise;
        size_t n;
        struct base_error error = {0};
        if (lightcurve_unpack(body, size, &times, &fluxes, &n, &noise, &error)) {
            assert_int_equal(n, points);
            free(times);
            free(fluxes);
        }
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_packed_segment_reads_back_the_same),
        cmocka_unit_test(the_bytes_are_those_of_the_description),
        cmocka_unit_test(an_empty_segment_packs_and_reads_back),
        cmocka_unit_test(hostile_bodies_are_refused),
        cmocka_unit_test(bodies_of_random_bytes_never_crash),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
