/*
 * Times box least squares for tests/bench/bls.py: bls_driver POINTS PERIODS DURATIONS OVERSAMPLE
 * ROUNDS and on stdin, as doubles: times, fluxes, errors, periods, durations. Prints the best
 * seconds of the rounds, on one core, and the sum of all power.
 */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/bls.h"
#include "ebbmark/clock.h"

static void stop(const char *why)
{
    fprintf(stderr, "bls_driver: %s\n", why);
    exit(1);
}

int main(int argc, char **argv)
{
    if (argc != 6)
        stop("five numbers are needed");
    size_t points = strtoul(argv[1], NULL, 10), periods = strtoul(argv[2], NULL, 10);
    size_t durations = strtoul(argv[3], NULL, 10), rounds = strtoul(argv[5], NULL, 10);
    size_t total = 3 * points + periods + durations;
    double *values = calloc(total, sizeof *values), best_s = INFINITY, sum = 0.0;
    struct ephemeris_bls_box *out = calloc(periods, sizeof *out);
    struct base_error error;
    if (values == NULL || out == NULL)
        stop("out of memory");
    if (fread(values, sizeof *values, total, stdin) != total)
        stop("numbers are missing");
    struct ephemeris_bls_data data = {
        .time = values, .flux = values + points, .error = values + 2 * points, .count = points};
    struct ephemeris_bls_search search = {.period = values + 3 * points,
                                          .periods = periods,
                                          .duration = values + 3 * points + periods,
                                          .durations = durations,
                                          .oversample = (unsigned)strtoul(argv[4], NULL, 10)};
    for (size_t i = 0; i < rounds; i++) {
        double started = base_clock_monotonic_s();
        if (!ephemeris_bls_power(&data, &search, NULL, out, &error))
            stop(error.sentence);
        best_s = fmin(best_s, base_clock_monotonic_s() - started);
    }
    for (size_t i = 0; i < periods; i++)
        sum += out[i].power;
    printf("%.9g %.17g\n", best_s, sum);
    free(out);
    free(values);
    return fflush(stdout) != 0;
}
