/*
 * The transit model: Mandel & Agol (2002) with quadratic limb darkening, circular orbit geometry
 * after Winn (2010). Pure; thread-safe.
 */
#ifndef EBBMARK_TRANSIT_H
#define EBBMARK_TRANSIT_H

#include <stddef.h>

#include "ebbmark/error.h"

/* Relative flux of a star with quadratic limb darkening I(mu) = 1 - u1 (1 - mu) - u2 (1 - mu)^2
 * when a dark disc of radius ratio k >= 0 is at projected distance z >= 0 (stellar radii).
 * Accurate to 1e-6 or better everywhere, contacts and k > 1 included. u1 / 3 + u2 / 6 < 1. NAN
 * gives NAN. */
double ephemeris_transit_flux(double z, double k, double u1, double u2);

struct ephemeris_transit {
    double period_d;     /* > 0 */
    double mid_d;        /* a mid-transit time */
    double radius_ratio; /* k = Rp / R*, >= 0 */
    double axis_ratio;   /* a / R*, > 1 */
    double impact;       /* b, stellar radii, >= 0 */
    double u1, u2;       /* limb darkening */
    double exposure_d;   /* averaged over this, >= 0 */
};

/* Relative flux at n times (d), averaged over the exposure. */
void ephemeris_transit_curve(const struct ephemeris_transit *transit, const double *time, size_t n,
                             double *flux);

/* First to fourth, and second to third contact, in d (Winn 2010, equations 14 and 15 for e = 0);
 * 0 where there is no such phase. For k > 1 the second is the time wholly covered. */
double ephemeris_transit_duration_d(const struct ephemeris_transit *transit);
double ephemeris_transit_full_duration_d(const struct ephemeris_transit *transit);

/* a / R* of a circular orbit from the period and the star's mean density in units of the Sun's,
 * which is that of the nominal GM and radius of IAU 2015 Resolution B3 (about 1410 kg m^-3). */
double ephemeris_axis_ratio(double period_d, double density_solar);

#endif
