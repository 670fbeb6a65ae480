/*
 * Light curves: the types that the room shares, and cleaning and cutting.
 *
 * Times are days in double precision, counted from a reference that is kept beside them. Flux is
 * relative: 1 is the light curve's median. Pure: nothing here touches a file or global state.
 */
#ifndef EBBMARK_LIGHTCURVE_H
#define EBBMARK_LIGHTCURVE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

#define LIGHTCURVE_NAME_SIZE 64       /* bytes of a star's name with its NUL */
#define LIGHTCURVE_REFERENCE_SIZE 48  /* bytes of a time reference with its NUL */
#define LIGHTCURVE_POINTS_MIN 100     /* fewer usable points than this is refused */
#define LIGHTCURVE_POINTS_MAX 5000000 /* more points in one light curve than this is refused */
#define LIGHTCURVE_TIME_MAX_D 1e9     /* a time further from its reference counts as missing */
#define LIGHTCURVE_FLUX_MAX 1e9       /* flux further from 0 than this many medians does so too */

/* What is known of a star; NAN where it is not. */
struct lightcurve_star {
    char name[LIGHTCURVE_NAME_SIZE]; /* UTF-8, not empty */
    double ra_deg, dec_deg;          /* ICRS, [0, 360) and [-90, 90] */
    double magnitude;
    double temperature_k;
    double radius_rsun; /* nominal solar radii */
    double mass_msun;   /* nominal solar masses */
};

/* As read from a file, before cleaning. Arrays hold `count` values and are owned by the struct
 * (malloc); `quality` and `error` may be NULL. Free with lightcurve_raw_free. */
struct lightcurve_raw {
    struct lightcurve_star star;
    char time_reference[LIGHTCURVE_REFERENCE_SIZE]; /* for example "BJD_TDB - 2457000" */
    size_t count;
    double *time;     /* d since the reference; may be non-finite or unsorted */
    double *flux;     /* in the file's unit */
    double *error;    /* same unit as flux */
    int32_t *quality; /* bit flags; 0 is good */
};
void lightcurve_raw_free(struct lightcurve_raw *raw);

/* Cleaned. time is strictly increasing, all values finite, flux has median 1. Owned by the struct;
 * free with lightcurve_free. error may be NULL (none in the file). */
struct lightcurve {
    struct lightcurve_star star;
    char time_reference[LIGHTCURVE_REFERENCE_SIZE];
    size_t count;
    double *time;       /* d */
    double *flux;       /* relative, median 1 */
    double *error;      /* relative, one sigma */
    double median_flux; /* in the file's unit, before division */
    double cadence_d;   /* median step */
    size_t dropped_nonfinite, dropped_flagged, dropped_repeats;
};
void lightcurve_free(struct lightcurve *curve);

/* Drop non-finite values and cadences with any of `quality_mask`'s bits, sort by time, drop exact
 * repeats of a time (the first is kept), divide by the median. Low points are never clipped. An
 * error that is not finite and positive becomes the median of the others; where none is good,
 * out->error is NULL. BASE_INVALID with the stated reason when all values are missing, fewer than
 * LIGHTCURVE_POINTS_MIN are left, the median is not positive, or times do not increase after
 * sorting (every time the same); BASE_TOO_LARGE above LIGHTCURVE_POINTS_MAX; BASE_MEMORY. `raw` is
 * left as it was. On failure `out` is zeroed. */
bool lightcurve_clean(const struct lightcurve_raw *raw, uint32_t quality_mask,
                      struct lightcurve *out, struct base_error *error);

/* Everything is kept out of the mask by default: any flag drops the cadence. */
#define LIGHTCURVE_QUALITY_MASK_DEFAULT 0xffffffffu

/* A gap is a step longer than this: 0.5 d or 10 cadences, whichever is larger. In d. */
double lightcurve_gap_d(double cadence_d);

struct lightcurve_cut_settings {
    double length_d;  /* segment length, default 15, [1, 1000] */
    double overlap_d; /* default 0.75, [0, length / 2] */
    double least_d;   /* a stretch shorter than this joins its neighbour or is dropped, default 2 */
};
#define LIGHTCURVE_CUT_DEFAULT ((struct lightcurve_cut_settings){15.0, 0.75, 2.0})

/* One segment: points first … first+count-1, from the first point's time to the last's. */
struct lightcurve_span {
    size_t first, count;
    double starts_d, ends_d;
};

/* Cut a cleaned light curve into segments of about length_d with the overlap asked for, at gaps
 * where that is possible: a boundary that would fall within length/4 of a gap moves to the gap, and
 * then needs no overlap. Every point belongs to at least one segment, except in stretches dropped
 * as too short to show (isolated by gaps longer than a segment, shorter than least_d): their
 * points are counted in *dropped_points. `*out` is malloc'd and the caller frees it. Where every
 * stretch is too short the longest is kept, so that a light curve with points always gives at least
 * one segment. No segment is longer than 1.5 x length_d and one step between points. BASE_INVALID
 * for settings out of range, BASE_MEMORY. */
bool lightcurve_cut(const struct lightcurve *curve, const struct lightcurve_cut_settings *settings,
                    struct lightcurve_span **out, size_t *count, size_t *dropped_points,
                    struct base_error *error);

#endif
