/*
 * Tests for what looks like a planet and is none: mostly eclipsing binaries. None of them proves
 * anything alone, and a candidate that passes all is still no confirmed planet. Pure; thread-safe.
 */
#ifndef EBBMARK_IMPOSTOR_H
#define EBBMARK_IMPOSTOR_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"
#include "ebbmark/series.h"

/* Depths of a series' dips at odd and even cycles: those of a binary at half its real period
 * differ. Errors are scaled up where depths scatter more than they say. */
struct ephemeris_odd_even {
    size_t odds, evens;
    double odd_depth, odd_error; /* weighted mean, one sigma; NAN where there is none */
    double even_depth, even_error;
    double sigma; /* |odd - even| in sigma; NAN unless there are both */
};

/* n depths with errors > 0, and their cycles. */
void ephemeris_odd_even(const double *depth, const double *error, const int64_t *cycle, size_t n,
                        struct ephemeris_odd_even *out);

struct ephemeris_depth_agreement {
    double mean, mean_error; /* weighted */
    double chi2;             /* about it */
    double p; /* chance of at least this chi2 if all are equally deep; NAN for n < 2 */
};

/* n >= 1 depths with errors > 0. */
void ephemeris_depth_agreement(const double *depth, const double *error, size_t n,
                               struct ephemeris_depth_agreement *out);

/* A light curve and the ephemeris to fold it with. */
struct ephemeris_folding {
    const double *time, *flux; /* d; relative, trend removed, about 1; finite */
    size_t count;
    double point_error; /* of one point, relative, > 0 */
    double period_d, epoch_d, duration_d;
};

struct ephemeris_secondary {
    double phase;              /* of its middle, 0 to 1; the series' own dips are at 0 */
    double depth, depth_error; /* relative; NAN where data do not cover it */
    double sigma;              /* depth / depth_error; negative for a bump */
    double chance; /* of so deep a box somewhere (at half: just there) from noise alone */
};

/* Look for a second dip in each cycle, of the same duration: at phase one half, and at the phase
 * where it is deepest, away from the series' own dips. Errors are scaled up by how much boxes at
 * all phases scatter beyond the points' own noise, so that correlated noise counts. BASE_INVALID
 * when the period has not room for four durations, BASE_MEMORY. */
bool ephemeris_secondary_find(const struct ephemeris_folding *folding,
                              struct ephemeris_secondary *half, struct ephemeris_secondary *best,
                              struct base_error *error);

/* The folded dip's shape: twice the share of T14 that ingress takes. 0 is a box, 1 a V; the
 * interval is one sigma. */
struct ephemeris_shape {
    double v_shape, low, high; /* NAN where data do not cover the dip */
    double duration_d;         /* T14 of the best trapezoid */
    double depth;
    double v_worse_sigma; /* square root of how much worse, in chi2, the best V fits */
};

/* Fit trapezoids of all shapes, 0.5 to 1.6 durations long and centred on the ephemeris, to the
 * folded light curve. */
void ephemeris_shape_fit(const struct ephemeris_folding *folding, struct ephemeris_shape *out);

/* An ephemeris that is known already. Errors are one sigma, 0 or above. */
struct ephemeris_known {
    double period_d, period_error_d;
    double epoch_d, epoch_error_d;
};

struct ephemeris_match_rules {
    unsigned ratio_most;      /* period ratios a / b with a and b up to this */
    double period_tolerance;  /* relative, beyond the errors */
    double phase_tolerance_d; /* beyond the errors; half the duration is usual */
    double sigma;             /* how many of the errors may be used up */
};

/* Ratios up to 4; 1e-4; 0.05 d; 3 sigma. Common practice, no source. */
extern const struct ephemeris_match_rules ephemeris_match_rules_usual;

struct ephemeris_match {
    size_t index;        /* in the table */
    unsigned times, of;  /* line's period = times / of x known period */
    double period_ratio; /* as measured */
    double phase_off_d;  /* of the line's epoch from the nearest predicted dip */
    double phase_chance; /* that a random phase would match, 0 to 1; 1 says nothing */
};

/* The known ephemeris that this one repeats, at a ratio of small whole numbers and in phase: the
 * one with the smallest numbers, then the nearest in phase. False when there is none. Rows that are
 * not finite or have no period above 0 are passed over. */
bool ephemeris_known_match(const struct ephemeris_line *line, const struct ephemeris_known *known,
                           size_t count, const struct ephemeris_match_rules *rules,
                           struct ephemeris_match *out);

#endif
