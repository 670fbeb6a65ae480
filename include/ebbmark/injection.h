/*
 * Drawing the transit that a control gets. Pure; thread-safe as long as each thread has its own
 * generator. The same host and the same state of the generator give the same transit.
 */
#ifndef EBBMARK_INJECTION_H
#define EBBMARK_INJECTION_H

#include <stdbool.h>
#include <stddef.h>

#include <gsl/gsl_rng.h>

#include "ebbmark/error.h"
#include "ebbmark/transit.h"

#define EPHEMERIS_INJECTION_SNR_LEAST 4.0
#define EPHEMERIS_INJECTION_SNR_MOST 40.0
#define EPHEMERIS_INJECTION_PERIOD_LEAST_D 0.5
#define EPHEMERIS_INJECTION_PERIOD_MOST 2.0 /* in lengths of the segment */
#define EPHEMERIS_INJECTION_IMPACT_MOST 0.9
#define EPHEMERIS_INJECTION_RATIO_MOST 0.5 /* Rp / R*; a larger body is no planet of any star */
#define EPHEMERIS_INJECTION_AXIS_LEAST 2.0 /* a / R*; nearer in nothing lasts */
#define EPHEMERIS_INJECTION_COVERED 0.5    /* of one transit at least, by data */

/* Limb darkening of a star like the Sun in red light: common practice, no source. */
#define EPHEMERIS_INJECTION_U1 0.4
#define EPHEMERIS_INJECTION_U2 0.25

/* The segment that is to hold the transit. */
struct ephemeris_injection_host {
    const double *time; /* d, increasing; `count` points */
    size_t count;
    double cadence_d;     /* > 0 */
    double exposure_d;    /* >= 0 */
    double density_solar; /* of the star, in the Sun's; the Sun's where not finite and positive */
    double u1, u2;
    /* One-sigma error (relative) of the mean flux over a dip of that length that data cover. */
    double (*noise_of_mean)(const void *context, double duration_d);
    const void *context;
};

struct ephemeris_injection {
    struct ephemeris_transit transit;
    double snr;        /* of one transit: depth / noise_of_mean(length at half depth) */
    double depth;      /* relative; of the trapezoid with the same contacts and missing light */
    double duration_d; /* T14 */
    size_t transits;   /* how many have their middle within the segment */
};

/* Draw a transit: SNR log-uniform from 4 to 40, period log-uniform from 0.5 d to twice the segment,
 * impact parameter uniform from 0 to 0.9, phase uniform among those that put a middle on the
 * segment; the axis ratio from period and density, the radius ratio so that the SNR holds. Drawn
 * again when that is no transit (a radius or axis ratio beyond the limits above) or when data cover
 * no transit by at least EPHEMERIS_INJECTION_COVERED. BASE_INVALID when a thousand draws gave none
 * or the noise is not known: take another host. */
bool ephemeris_injection_draw(const struct ephemeris_injection_host *host, gsl_rng *generator,
                              struct ephemeris_injection *out, struct base_error *error);

/* How many transits have their middle in [starts_d, ends_d]; *first_d is the first middle, and each
 * next is a period later. */
size_t ephemeris_transits_within(const struct ephemeris_transit *transit, double starts_d,
                                 double ends_d, double *first_d);

#endif
