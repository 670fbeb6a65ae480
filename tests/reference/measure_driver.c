/*
 * Prints what the measuring half of the light-curve room gives: for tests/reference/dip.py. Reads
 * from stdin, one command a line:
 *   data N               followed by N lines "time flux"; becomes the light curve at hand
 *   trend WINDOW GAP     -> N values on one line
 *   flatten WINDOW GAP   divides the light curve by its trend
 *   noise CADENCE GAP    -> point noise and the windows' scatter; becomes the noise at hand
 *   noise_of_mean DURATION POINTS -> one value
 *   white POINT CADENCE  sets the noise at hand: white, windows to match
 *   dip STARTS ENDS GAP  -> shape mid mid_error duration duration_error ingress depth depth_error
 *                           level slope snr chi2 chi2_box points points_in covered
 *   inject SEED CADENCE  puts a drawn transit into the light curve, with the noise at hand
 *                        -> mid duration depth snr, of its first transit on the data
 */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/injection.h"
#include "ebbmark/lightcurve_inject.h"
#include "ebbmark/lightcurve_measure.h"

struct desk {
    size_t n;
    double *time, *flux, *trend;
    struct lightcurve_noise noise;
};

static void stop(const char *why)
{
    fprintf(stderr, "measure_driver: %s\n", why);
    exit(1);
}

static void must(bool ok, const struct base_error *error)
{
    if (!ok)
        stop(error->sentence);
}

static void read_data(struct desk *desk, size_t n)
{
    free(desk->time);
    desk->n = n;
    desk->time = calloc(n + 1, 3 * sizeof *desk->time);
    if (desk->time == NULL)
        stop("out of memory");
    desk->flux = desk->time + n;
    desk->trend = desk->flux + n;
    char line[128];
    for (size_t i = 0; i < n; i++)
        if (fgets(line, sizeof line, stdin) == NULL ||
            sscanf(line, "%lf %lf", &desk->time[i], &desk->flux[i]) != 2)
            stop("a data line is missing");
}

static void print_values(const double *values, size_t n)
{
    for (size_t i = 0; i < n; i++)
        printf("%.17g%c", values[i], i + 1 == n ? '\n' : ' ');
}

static void find_trend(struct desk *desk, double window, double gap)
{
    struct base_error error;
    must(lightcurve_trend(desk->time, desk->flux, desk->n, window, gap, desk->trend, &error),
         &error);
}

static void set_white(struct desk *desk, double point, double cadence)
{
    desk->noise = (struct lightcurve_noise){.point = point, .cadence_d = cadence};
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        desk->noise.window[w] = point / sqrt(lightcurve_noise_window_h[w] / 24.0 / cadence);
}

static void measure_noise(struct desk *desk, double cadence, double gap)
{
    struct base_error error;
    must(lightcurve_noise_measure(desk->time, desk->flux, desk->n, cadence, gap, &desk->noise,
                                  &error),
         &error);
    printf("%.17g ", desk->noise.point);
    print_values(desk->noise.window, LIGHTCURVE_NOISE_WINDOWS);
}

static void measure_dip(struct desk *desk, double starts, double ends, double gap)
{
    struct base_error error;
    struct lightcurve_dip dip;
    must(lightcurve_dip_measure(desk->time, desk->flux, NULL, desk->n, gap, starts, ends,
                                &desk->noise, &dip, &error),
         &error);
    const double values[] = {dip.shape,
                             dip.mid_d,
                             dip.mid_error_d,
                             dip.duration_d,
                             dip.duration_error_d,
                             dip.ingress_fraction,
                             dip.depth,
                             dip.depth_error,
                             dip.level,
                             dip.slope,
                             dip.snr,
                             dip.chi2,
                             dip.chi2_box,
                             (double)dip.points,
                             (double)dip.points_in,
                             dip.covered};
    print_values(values, sizeof values / sizeof values[0]);
}

static double noise_of_mean(const void *context, double duration_d)
{
    const struct lightcurve_noise *noise = context;
    return lightcurve_noise_of_mean(noise, duration_d,
                                    (size_t)fmax(duration_d / noise->cadence_d, 1.0));
}

static void inject(struct desk *desk, unsigned long seed, double cadence)
{
    struct ephemeris_injection_host host = {.time = desk->time,
                                            .count = desk->n,
                                            .cadence_d = cadence,
                                            .exposure_d = cadence,
                                            .density_solar = NAN,
                                            .u1 = EPHEMERIS_INJECTION_U1,
                                            .u2 = EPHEMERIS_INJECTION_U2,
                                            .noise_of_mean = noise_of_mean,
                                            .context = &desk->noise};
    struct ephemeris_injection drawn;
    struct base_error error;
    gsl_rng *generator = gsl_rng_alloc(gsl_rng_mt19937);
    if (generator == NULL)
        stop("out of memory");
    gsl_rng_set(generator, seed);
    must(ephemeris_injection_draw(&host, generator, &drawn, &error), &error);
    gsl_rng_free(generator);
    ephemeris_transit_curve(&drawn.transit, desk->time, desk->n, desk->trend);
    lightcurve_inject(desk->flux, desk->trend, desk->n, desk->flux);
    double first;
    ephemeris_transits_within(&drawn.transit, desk->time[0], desk->time[desk->n - 1], &first);
    const double values[] = {first, drawn.duration_d, drawn.depth, drawn.snr};
    print_values(values, sizeof values / sizeof values[0]);
}

static void obey(struct desk *desk, const char *line)
{
    size_t n;
    double a, b, c;
    if (sscanf(line, "data %zu", &n) == 1) {
        read_data(desk, n);
    } else if (sscanf(line, "trend %lf %lf", &a, &b) == 2) {
        find_trend(desk, a, b);
        print_values(desk->trend, desk->n);
    } else if (sscanf(line, "flatten %lf %lf", &a, &b) == 2) {
        find_trend(desk, a, b);
        for (size_t i = 0; i < desk->n; i++)
            desk->flux[i] /= desk->trend[i];
    } else if (sscanf(line, "noise_of_mean %lf %zu", &a, &n) == 2) {
        printf("%.17g\n", lightcurve_noise_of_mean(&desk->noise, a, n));
    } else if (sscanf(line, "noise %lf %lf", &a, &b) == 2) {
        measure_noise(desk, a, b);
    } else if (sscanf(line, "white %lf %lf", &a, &b) == 2) {
        set_white(desk, a, b);
    } else if (sscanf(line, "inject %zu %lf", &n, &a) == 2) {
        inject(desk, n, a);
    } else if (sscanf(line, "dip %lf %lf %lf", &a, &b, &c) == 3) {
        measure_dip(desk, a, b, c);
    } else {
        stop(line);
    }
}

int main(void)
{
    struct desk desk = {0};
    char line[256];
    while (fgets(line, sizeof line, stdin) != NULL)
        obey(&desk, line);
    free(desk.time);
    return ferror(stdin) || fflush(stdout) != 0;
}
