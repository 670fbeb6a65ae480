#include "invent_inside.h"

#include <assert.h>
#include <math.h>

#include "ebbmark/transit.h"

#define U1 0.40 /* limb darkening of every star; common practice for a Sun-like one */
#define U2 0.22
#define TRIES 60
#define COVERED_LEAST                                                                              \
    0.5 /* a dip with less data than this is not in the truth: nobody can see it */

/* Depth at mid-transit for a body of radius ratio k. */
static double depth_of(double k, double impact)
{
    return 1.0 - ephemeris_transit_flux(impact, k, U1, U2);
}

/* The radius ratio that gives a depth, by halving; the depth grows with it. */
static double ratio_of_depth(double depth, double impact)
{
    double low = 0.0, high = 0.4;
    for (int i = 0; i < 60; i++) {
        double middle = 0.5 * (low + high);
        if (depth_of(middle, impact) < depth)
            low = middle;
        else
            high = middle;
    }
    return 0.5 * (low + high);
}

/* The impact parameter at which a grazing companion of ratio k takes that much light. */
static double impact_of_depth(double depth, double k)
{
    double low = 0.0, high = 1.0 + k;
    for (int i = 0; i < 60; i++) {
        double middle = 0.5 * (low + high);
        if (depth_of(k, middle) > depth)
            low = middle;
        else
            high = middle;
    }
    return 0.5 * (low + high);
}

/* Error of the mean flux over a dip: white noise falls with the number of cadences, correlated
 * noise with the number of its own times (the variance of an Ornstein-Uhlenbeck mean). */
static double noise_of_mean(const struct invent_star *star, double duration_d)
{
    double points = duration_d / INVENT_CADENCE_D;
    double x = duration_d / star->red_d;
    double red = star->red * star->red * 2.0 / x * (1.0 - (1.0 - exp(-x)) / x);
    return sqrt(star->white * star->white / (points < 1.0 ? 1.0 : points) + red);
}

/* Share of a dip's length that usable cadences cover. */
static double coverage(const struct invent_star *star, double mid_d, double duration_d)
{
    int there = 0, steps = 40;
    for (int i = 0; i < steps; i++)
        there += invent_covers(star, mid_d + duration_d * ((i + 0.5) / steps - 0.5)) ? 1 : 0;
    return (double)there / steps;
}

/* Dips of a series that begin before the data end. */
static int count_dips(const struct ephemeris_transit *transit)
{
    double left = INVENT_STARTS_D + INVENT_LENGTH_D - transit->mid_d;
    return left <= 0.0 ? 0 : (int)ceil(left / transit->period_d);
}

static int count_covered(const struct invent_star *star, const struct ephemeris_transit *transit)
{
    double duration = ephemeris_transit_duration_d(transit);
    int covered = 0, dips = count_dips(transit);
    for (int i = 0; i < dips; i++) {
        double mid = transit->mid_d + i * transit->period_d;
        covered += coverage(star, mid, duration) >= COVERED_LEAST ? 1 : 0;
    }
    return covered;
}

/* Put one series of dips into the signal, `share` of the model's depth, and tell of those that the
 * data cover. */
static void add_series(struct invent_star *star, const struct ephemeris_transit *transit,
                       double share, bool eclipse)
{
    double flux[INVENT_POINTS];
    double duration = ephemeris_transit_duration_d(transit);
    double depth = share * depth_of(transit->radius_ratio, transit->impact);
    bool single = transit->period_d > INVENT_LENGTH_D;
    int dips = count_dips(transit);
    ephemeris_transit_curve(transit, star->time, star->count, flux);
    for (size_t i = 0; i < star->count; i++)
        star->signal[i] *= 1.0 - share * (1.0 - flux[i]);
    for (int i = 0; i < dips; i++) {
        double mid = transit->mid_d + i * transit->period_d;
        if (coverage(star, mid, duration) >= COVERED_LEAST && star->dip_count < INVENT_DIPS_MAX)
            star->dips[star->dip_count++] =
                (struct invent_dip){.mid_d = mid,
                                    .depth = depth,
                                    .duration_d = duration,
                                    .period_d = single ? 0.0 : transit->period_d,
                                    .snr = depth / noise_of_mean(star, duration),
                                    .eclipse = eclipse};
    }
}

/* A transiting body between two periods whose dips last at least an hour and a half and of which
 * at least `least` are covered. The depth follows from an SNR a dip. */
static void add_body(struct invent_star *star, gsl_rng *random, double period_low,
                     double period_high, int least, double snr_low, double snr_high)
{
    double density = star->about.mass_msun / pow(star->about.radius_rsun, 3.0);
    struct ephemeris_transit transit = {.u1 = U1, .u2 = U2, .exposure_d = INVENT_CADENCE_D};
    for (int i = 0; i < TRIES; i++) {
        double earliest = INVENT_STARTS_D + 0.15;
        transit.period_d = invent_log_uniform(random, period_low, period_high);
        double room =
            transit.period_d < INVENT_LENGTH_D - 0.3 ? transit.period_d : INVENT_LENGTH_D - 0.3;
        transit.mid_d = earliest + room * gsl_rng_uniform(random);
        transit.axis_ratio = ephemeris_axis_ratio(transit.period_d, density);
        transit.impact = invent_uniform(random, 0.0, 0.8);
        transit.radius_ratio = 0.03; /* for the length of the try */
        double duration = ephemeris_transit_duration_d(&transit);
        double snr = invent_log_uniform(random, snr_low, snr_high);
        double depth = snr * noise_of_mean(star, duration);
        transit.radius_ratio = ratio_of_depth(depth < 0.03 ? depth : 0.03, transit.impact);
        if (duration * 24.0 >= 1.5 && count_covered(star, &transit) >= least)
            break;
    }
    add_series(star, &transit, 1.0, false);
}

static void add_eclipses(struct invent_star *star, gsl_rng *random)
{
    double density = star->about.mass_msun / pow(star->about.radius_rsun, 3.0);
    double depth = invent_log_uniform(random, 0.008, 0.05);
    double secondary = invent_uniform(random, 0.12, 0.6);
    struct ephemeris_transit transit = {.u1 = U1, .u2 = U2, .exposure_d = INVENT_CADENCE_D};
    transit.period_d = invent_log_uniform(random, 2.2, 9.0);
    transit.mid_d = INVENT_STARTS_D + transit.period_d * gsl_rng_uniform(random);
    transit.axis_ratio = ephemeris_axis_ratio(transit.period_d, density);
    transit.radius_ratio = invent_uniform(random, 0.35, 0.6);
    transit.impact = impact_of_depth(depth, transit.radius_ratio);
    add_series(star, &transit, 1.0, true);
    transit.mid_d += 0.5 * transit.period_d;
    if (transit.mid_d - transit.period_d > INVENT_STARTS_D)
        transit.mid_d -= transit.period_d;
    add_series(star, &transit, secondary, true);
}

void invent_dips_add(struct invent_star *star, gsl_rng *random)
{
    switch (star->kind) {
    case INVENT_NOTHING:
        break;
    case INVENT_REPEATING:
        add_body(star, random, 1.4, 12.0, 2, 4.5, 24.0);
        break;
    case INVENT_TWO:
        add_body(star, random, 1.6, 5.0, 3, 6.0, 15.0);
        add_body(star, random, 7.0, 12.5, 2, 8.0, 24.0);
        break;
    case INVENT_SINGLE:
        add_body(star, random, 35.0, 160.0, 1, 6.0, 35.0);
        break;
    case INVENT_ECLIPSING:
        add_eclipses(star, random);
        break;
    }
}
