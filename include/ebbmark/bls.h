/*
 * Box least squares: how well a box-shaped dip of some length fits the folded light curve, for each
 * of many periods (Kovács, Zucker & Mazeh 2002, A&A 391, 369). Pure; thread-safe.
 */
#ifndef EBBMARK_BLS_H
#define EBBMARK_BLS_H

#include <stdbool.h>
#include <stddef.h>

#include "ebbmark/error.h"
#include "ebbmark/pool.h"

#define EPHEMERIS_BLS_BINS_MOST 16777216   /* of one folded period */
#define EPHEMERIS_BLS_PERIODS_MOST 4000000 /* of one grid */
#define EPHEMERIS_BLS_DRIFT 0.33           /* of a grid's step; common practice, no source */

enum ephemeris_bls_objective {
    EPHEMERIS_BLS_LIKELIHOOD, /* weight in the box x depth^2 / 2: gain in log-likelihood */
    EPHEMERIS_BLS_SNR         /* depth / error of the depth */
};

struct ephemeris_bls_data {
    const double *time;  /* d; any order */
    const double *flux;  /* relative, trend removed */
    const double *error; /* one sigma, relative, > 0; NULL: 1 for each point */
    size_t count;        /* at least 2 */
};

struct ephemeris_bls_search {
    const double *period; /* d, each longer than the longest duration */
    size_t periods;
    const double *duration; /* d, > 0 */
    size_t durations;
    unsigned oversample; /* bins of the shortest duration, 1 or more; 10 is usual */
    enum ephemeris_bls_objective objective;
    /* NULL, or asked now and then, from any thread: true stops the search. */
    bool (*cancelled)(void *context);
    void *context;
};

/* The best box of one period. All 0, and mid_d the first time, when no box has less light inside
 * than outside. */
struct ephemeris_bls_box {
    double power;              /* the objective */
    double depth, depth_error; /* mean outside the box - mean inside, relative */
    double snr;                /* depth / depth_error */
    double log_likelihood;     /* weight in the box x depth^2 / 2 */
    double duration_d;
    double mid_d; /* of the first box not before the data's first time */
};

/* Find the best box of each period: out[i] belongs to search->period[i]. The folded light curve is
 * cut into bins of (shortest duration / oversample), beginning at the data's first time, and closed
 * to a ring, so that a dip across the end of the folded period counts whole. A box is a whole
 * number of bins. Spread over `pool` (NULL: this thread alone) with the same bits whatever the
 * number of threads. BASE_INVALID on numbers that make no search, BASE_TOO_LARGE over a limit
 * above, BASE_CANCELLED, BASE_MEMORY; then out is not to be used. Cost: periods x (points +
 * durations x bins). */
bool ephemeris_bls_power(const struct ephemeris_bls_data *data,
                         const struct ephemeris_bls_search *search, struct base_pool *pool,
                         struct ephemeris_bls_box *out, struct base_error *error);

/* A grid of periods from least_d to most_d (0 < least_d < most_d), each longer than the one before
 * by so much that over the data's length the last dip moves by EPHEMERIS_BLS_DRIFT of the shortest
 * duration. Returns how many there are; writes the first `room` of them to `period`, which may be
 * NULL when room is 0. Never more than EPHEMERIS_BLS_PERIODS_MOST: beyond that the step is
 * widened. */
size_t ephemeris_bls_grid(double least_d, double most_d, double shortest_duration_d,
                          double length_d, double *period, size_t room);

#endif
