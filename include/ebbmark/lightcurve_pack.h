/*
 * The packed form of a segment's flux (application/vnd.ebbmark.flux), little-endian:
 * bytes 0-3 "EBF1"; 4-7 uint32 n; 8-15 float64 reference time (d); 16-23 float64 median flux;
 * 24-27 float32 point-to-point noise (relative); 28-31 zero; then n float32 days since the
 * reference, then n float32 relative flux minus 1.
 */
#ifndef EBBMARK_LIGHTCURVE_PACK_H
#define EBBMARK_LIGHTCURVE_PACK_H

#include "ebbmark/lightcurve.h"

#define LIGHTCURVE_PACK_HEAD 32

/* Bytes needed for n points. */
size_t lightcurve_pack_size(size_t n);

/* Write n points to `out` (lightcurve_pack_size(n) bytes). The reference time is time[0] rounded
 * down to a whole day, so that float32 keeps better than 0.2 s over 30 d. n may be 0. */
void lightcurve_pack(const double *time, const double *flux, size_t n, double median_flux,
                     double noise, unsigned char *out);

/* Read a packed body back: hostile input. *time and *flux (relative flux, about 1) are malloc'd and
 * the caller frees them. BASE_INVALID when the magic, the size or a value is wrong. */
bool lightcurve_unpack(const unsigned char *data, size_t size, double **time, double **flux,
                       size_t *n, double *noise, struct base_error *error);

#endif
