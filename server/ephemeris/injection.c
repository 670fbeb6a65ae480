#include "ebbmark/injection.h"

#include <assert.h>
#include <math.h>

#define DRAWS_MOST 1000
#define RATIO_LEAST 1e-5 /* Rp / R*; shallower than any light curve shows */
#define HALVINGS 60

/* The depth of the transit and its SNR. The trapezoid with the same contacts is as long at half
 * depth as half way between T14 and T23, and has the same missing light when its depth is the area
 * over that length: the numbers that the measurement of a dip gives. */
static double snr_of(const struct ephemeris_injection_host *host,
                     const struct ephemeris_transit *transit, double *depth)
{
    struct ephemeris_transit averaged = *transit;
    double flux, total = ephemeris_transit_duration_d(transit);
    double length = 0.5 * (total + ephemeris_transit_full_duration_d(transit));
    averaged.exposure_d = total;
    ephemeris_transit_curve(&averaged, &transit->mid_d, 1, &flux);
    *depth = (1.0 - flux) * total / length;
    return *depth / host->noise_of_mean(host->context, length);
}

/* Set the radius ratio so that the SNR is the one asked for. False when none below the limit does
 * that. */
static bool solve_ratio(const struct ephemeris_injection_host *host,
                        struct ephemeris_injection *injection)
{
    double low = log(RATIO_LEAST), high = log(EPHEMERIS_INJECTION_RATIO_MOST), depth;
    injection->transit.radius_ratio = EPHEMERIS_INJECTION_RATIO_MOST;
    if (!(snr_of(host, &injection->transit, &depth) >= injection->snr))
        return false;
    injection->transit.radius_ratio = RATIO_LEAST;
    if (!(snr_of(host, &injection->transit, &depth) <= injection->snr))
        return false;
    for (int i = 0; i < HALVINGS; i++) {
        double middle = 0.5 * (low + high);
        injection->transit.radius_ratio = exp(middle);
        if (snr_of(host, &injection->transit, &injection->depth) < injection->snr)
            low = middle;
        else
            high = middle;
    }
    injection->duration_d = ephemeris_transit_duration_d(&injection->transit);
    return true;
}

static double log_uniform(gsl_rng *generator, double least, double most)
{
    return least * pow(most / least, gsl_rng_uniform(generator));
}

size_t ephemeris_transits_within(const struct ephemeris_transit *transit, double starts_d,
                                 double ends_d, double *first_d)
{
    double cycle = ceil((starts_d - transit->mid_d) / transit->period_d);
    *first_d = transit->mid_d + cycle * transit->period_d;
    if (!(*first_d <= ends_d))
        return 0;
    return (size_t)floor((ends_d - *first_d) / transit->period_d) + 1;
}

static size_t first_not_before(const double *time, size_t n, double at)
{
    size_t low = 0, high = n;
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        if (time[middle] < at)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

/* Count the transits on the segment. False when data cover none of them well enough. */
static bool is_covered(const struct ephemeris_injection_host *host,
                       struct ephemeris_injection *injection)
{
    double first, half = 0.5 * injection->duration_d;
    double least = EPHEMERIS_INJECTION_COVERED * injection->duration_d / host->cadence_d;
    injection->transits = ephemeris_transits_within(&injection->transit, host->time[0],
                                                    host->time[host->count - 1], &first);
    for (size_t i = 0; i < injection->transits; i++) {
        double mid = first + (double)i * injection->transit.period_d;
        size_t from = first_not_before(host->time, host->count, mid - half);
        size_t to = first_not_before(host->time, host->count, mid + half);
        if (to > from && (double)(to - from) >= least)
            return true;
    }
    return false;
}

/* One draw; false when it is no transit or falls where there are no data. Always takes four numbers
 * from the generator. */
static bool draw_once(const struct ephemeris_injection_host *host, double density,
                      gsl_rng *generator, struct ephemeris_injection *out)
{
    double starts = host->time[0], length = host->time[host->count - 1] - starts;
    double longest = EPHEMERIS_INJECTION_PERIOD_MOST * length;
    double snr =
        log_uniform(generator, EPHEMERIS_INJECTION_SNR_LEAST, EPHEMERIS_INJECTION_SNR_MOST);
    double period = log_uniform(generator, EPHEMERIS_INJECTION_PERIOD_LEAST_D,
                                fmax(longest, EPHEMERIS_INJECTION_PERIOD_LEAST_D));
    double impact = EPHEMERIS_INJECTION_IMPACT_MOST * gsl_rng_uniform(generator);
    double mid = starts + fmin(period, length) * gsl_rng_uniform(generator);
    *out = (struct ephemeris_injection){
        .snr = snr,
        .transit = {.period_d = period,
                    .mid_d = mid,
                    .axis_ratio = ephemeris_axis_ratio(period, density),
                    .impact = impact,
                    .u1 = host->u1,
                    .u2 = host->u2,
                    .exposure_d = host->exposure_d}};
    return out->transit.axis_ratio >= EPHEMERIS_INJECTION_AXIS_LEAST && solve_ratio(host, out) &&
           is_covered(host, out);
}

bool ephemeris_injection_draw(const struct ephemeris_injection_host *host, gsl_rng *generator,
                              struct ephemeris_injection *out, struct base_error *error)
{
    assert(host->cadence_d > 0.0 && host->exposure_d >= 0.0);
    if (host->count < 2)
        return base_fail(error, BASE_INVALID,
                         "A segment of %zu points cannot hold a transit; take another.",
                         host->count);
    bool known = isfinite(host->density_solar) && host->density_solar > 0.0;
    double density = known ? host->density_solar : 1.0;
    for (int i = 0; i < DRAWS_MOST; i++)
        if (draw_once(host, density, generator, out))
            return true;
    *out = (struct ephemeris_injection){0};
    return base_fail(error, BASE_INVALID,
                     "None of %d transits drawn fits the segment of %zu points from %g to %g d "
                     "with a star of %g solar densities and noise of %g over 3 h; take another "
                     "segment.",
                     DRAWS_MOST, host->count, host->time[0], host->time[host->count - 1], density,
                     host->noise_of_mean(host->context, 0.125));
}
