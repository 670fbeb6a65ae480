/*
 * Turning a real segment into a control: a model transit put in, or the flux turned upside down.
 * Pure; thread-safe.
 */
#ifndef EBBMARK_LIGHTCURVE_INJECT_H
#define EBBMARK_LIGHTCURVE_INJECT_H

#include <stddef.h>

/* The flux of n points as it would be with a transit in front of the star: flux (relative, trend
 * removed or not) times model (1 outside the transits). `out` holds n values and may be `flux`. */
void lightcurve_inject(const double *flux, const double *model, size_t n, double *out);

/* The flux turned upside down about its trend: 2 - flux where the trend is 1, so that every dip
 * becomes a bump of the same size and the star's slow changes stay. trend NULL means 1 everywhere.
 * `out` holds n values and may be `flux`. Turning twice gives the flux back. */
void lightcurve_invert(const double *flux, const double *trend, size_t n, double *out);

#endif
