/*
 * The impostor tests for tests/reference/impostor.py. Reads from stdin, one command a line:
 *   data N                  followed by N lines "time flux"; becomes the light curve at hand
 *   fold POINT_ERROR PERIOD EPOCH DURATION   becomes the folding at hand
 *   secondary  -> phase depth error sigma chance, at half and then of the deepest
 *   shape      -> v_shape low high duration depth v_worse_sigma
 *   depths N   followed by N lines "depth error cycle"
 *              -> odds evens odd error even error sigma mean mean_error chi2 p
 *   match PERIOD ERROR EPOCH ERROR N   followed by N lines "period error epoch error"
 *              -> index times of ratio off chance, or -1
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/impostor.h"

static void stop(const char *why)
{
    fprintf(stderr, "impostor_driver: %s\n", why);
    exit(1);
}

static void *room_for(size_t count, size_t size)
{
    void *room = calloc(count + 1, size);
    if (room == NULL)
        stop("out of memory");
    return room;
}

static double number(void)
{
    double value;
    if (scanf("%lf", &value) != 1)
        stop("a number is missing");
    return value;
}

static void find_secondary(const struct ephemeris_folding *folding)
{
    struct ephemeris_secondary half, best;
    struct base_error error;
    if (!ephemeris_secondary_find(folding, &half, &best, &error))
        stop(error.sentence);
    printf("%.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g\n", half.phase, half.depth,
           half.depth_error, half.sigma, half.chance, best.phase, best.depth, best.depth_error,
           best.sigma, best.chance);
}

static void compare_depths(size_t n)
{
    double *depth = room_for(n, sizeof *depth), *sigma = room_for(n, sizeof *sigma);
    int64_t *cycle = room_for(n, sizeof *cycle);
    for (size_t i = 0; i < n; i++) {
        depth[i] = number();
        sigma[i] = number();
        cycle[i] = (int64_t)number();
    }
    struct ephemeris_odd_even parity;
    struct ephemeris_depth_agreement agreement;
    ephemeris_odd_even(depth, sigma, cycle, n, &parity);
    ephemeris_depth_agreement(depth, sigma, n, &agreement);
    printf("%zu %zu %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g\n", parity.odds,
           parity.evens, parity.odd_depth, parity.odd_error, parity.even_depth, parity.even_error,
           parity.sigma, agreement.mean, agreement.mean_error, agreement.chi2, agreement.p);
    free(cycle);
    free(sigma);
    free(depth);
}

static void match_known(void)
{
    struct ephemeris_line line = {.period_d = number()};
    line.period_error_d = number();
    line.epoch_d = number();
    line.epoch_error_d = number();
    size_t count = (size_t)number();
    struct ephemeris_known *known = room_for(count, sizeof *known);
    struct ephemeris_match match;
    for (size_t i = 0; i < count; i++) {
        known[i].period_d = number();
        known[i].period_error_d = number();
        known[i].epoch_d = number();
        known[i].epoch_error_d = number();
    }
    if (ephemeris_known_match(&line, known, count, &ephemeris_match_rules_usual, &match))
        printf("%zu %u %u %.17g %.17g %.17g\n", match.index, match.times, match.of,
               match.period_ratio, match.phase_off_d, match.phase_chance);
    else
        printf("-1\n");
    free(known);
}

int main(void)
{
    struct ephemeris_folding folding = {0};
    double *time = NULL, *flux = NULL;
    char command[16];
    while (scanf("%15s", command) == 1) {
        if (strcmp(command, "data") == 0) {
            free(time);
            free(flux);
            folding.count = (size_t)number();
            folding.time = time = room_for(folding.count, sizeof *time);
            folding.flux = flux = room_for(folding.count, sizeof *flux);
            for (size_t i = 0; i < folding.count; i++) {
                time[i] = number();
                flux[i] = number();
            }
        } else if (strcmp(command, "fold") == 0) {
            folding.point_error = number();
            folding.period_d = number();
            folding.epoch_d = number();
            folding.duration_d = number();
        } else if (strcmp(command, "secondary") == 0) {
            find_secondary(&folding);
        } else if (strcmp(command, "shape") == 0) {
            struct ephemeris_shape shape;
            ephemeris_shape_fit(&folding, &shape);
            printf("%.17g %.17g %.17g %.17g %.17g %.17g\n", shape.v_shape, shape.low, shape.high,
                   shape.duration_d, shape.depth, shape.v_worse_sigma);
        } else if (strcmp(command, "depths") == 0) {
            compare_depths((size_t)number());
        } else if (strcmp(command, "match") == 0) {
            match_known();
        } else {
            stop(command);
        }
    }
    free(flux);
    free(time);
    return ferror(stdin) || fflush(stdout) != 0;
}
