/*
 * Box least squares for tests/reference/bls.py. Reads from stdin:
 *   OBJECTIVE OVERSAMPLE THREADS POINTS PERIODS DURATIONS      (OBJECTIVE: likelihood or snr)
 * then "time flux error" a point, one period a line, one duration a line; prints "power depth
 * depth_error snr log_likelihood duration mid" a period. THREADS 0: no pool.
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/bls.h"

static void stop(const char *why)
{
    fprintf(stderr, "bls_driver: %s\n", why);
    exit(1);
}

static double *numbers(size_t count)
{
    double *values = calloc(count, sizeof *values);
    if (values == NULL)
        stop("out of memory");
    for (size_t i = 0; i < count; i++)
        if (scanf("%lf", &values[i]) != 1)
            stop("a number is missing");
    return values;
}

static double *column(const double *table, size_t rows, size_t at)
{
    double *values = calloc(rows, sizeof *values);
    if (values == NULL)
        stop("out of memory");
    for (size_t i = 0; i < rows; i++)
        values[i] = table[3 * i + at];
    return values;
}

int main(void)
{
    char objective[16];
    unsigned oversample, threads;
    size_t points, periods, durations;
    if (scanf("%15s %u %u %zu %zu %zu", objective, &oversample, &threads, &points, &periods,
              &durations) != 6)
        stop("the first line is wrong");
    double *table = numbers(3 * points), *period = numbers(periods), *duration = numbers(durations);
    double *time = column(table, points, 0), *flux = column(table, points, 1);
    double *sigma = column(table, points, 2);
    struct ephemeris_bls_box *out = calloc(periods, sizeof *out);
    struct base_pool *pool = NULL;
    struct base_error error;
    if (out == NULL)
        stop("out of memory");
    if (threads > 0 && !base_pool_open(&pool, threads, 1, &error))
        stop(error.sentence);
    struct ephemeris_bls_data data = {.time = time, .flux = flux, .error = sigma, .count = points};
    struct ephemeris_bls_search search = {
        .period = period,
        .periods = periods,
        .duration = duration,
        .durations = durations,
        .oversample = oversample,
        .objective = strcmp(objective, "snr") == 0 ? EPHEMERIS_BLS_SNR : EPHEMERIS_BLS_LIKELIHOOD};
    if (!ephemeris_bls_power(&data, &search, pool, out, &error))
        stop(error.sentence);
    for (size_t i = 0; i < periods; i++)
        printf("%.17g %.17g %.17g %.17g %.17g %.17g %.17g\n", out[i].power, out[i].depth,
               out[i].depth_error, out[i].snr, out[i].log_likelihood, out[i].duration_d,
               out[i].mid_d);
    base_pool_close(pool);
    free(out);
    free(sigma);
    free(flux);
    free(time);
    free(duration);
    free(period);
    free(table);
    return fflush(stdout) != 0;
}
