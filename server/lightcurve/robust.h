/*
 * Order statistics and stretches, shared by cleaning, trend, noise and the dip fit. Private to the
 * room. Everything here takes finite numbers only.
 */
#ifndef EBBMARK_SERVER_LIGHTCURVE_ROBUST_H
#define EBBMARK_SERVER_LIGHTCURVE_ROBUST_H

#include <stddef.h>

/* 1 / the 0.75 quantile of the normal distribution: makes a MAD estimate a standard deviation. */
#define LIGHTCURVE_MAD_TO_SIGMA 1.482602218505602

/* The median of n >= 1 values, which are put in another order; the mean of the middle two when n is
 * even. Linear on average and never worse than n log n. */
double lightcurve_median(double *values, size_t n);

/* The median of |value - centre|, in `scratch` (n values), which may be `values` itself. */
double lightcurve_mad(const double *values, size_t n, double centre, double *scratch);

/* Tukey's biweight location with c = 6 MAD, one step from the median (Beers, Flynn & Gebhardt 1990,
 * AJ 100, 32, equation 5); the median where the MAD is 0. `values` (n >= 1) are put in another
 * order; `scratch` holds n values. */
double lightcurve_biweight(double *values, size_t n, double *scratch);

/* One past the last point of the stretch that begins at `first`: the next step is longer than
 * gap_d, or the data end. */
size_t lightcurve_stretch_end(const double *time, size_t n, size_t first, double gap_d);

/* The first of time[low … high-1] (increasing) that is not before `at`; high when all are. */
size_t lightcurve_first_not_before(const double *time, size_t low, size_t high, double at);

#endif
