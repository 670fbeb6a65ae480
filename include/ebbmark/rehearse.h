/*
 * Rehearsal reviewers: programs that do a volunteer's work on a running server over HTTP. They look
 * at the flux that is served and never at the truth, each with an eye and a temper of their own, so
 * that a team sees a whole campaign before people come.
 */
#ifndef EBBMARK_REHEARSE_H
#define EBBMARK_REHEARSE_H

#include <gsl/gsl_rng.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

/* One thing that stands out in a segment: a run of low flux. */
struct rehearse_feature {
    double starts_d, ends_d; /* in the segment's time */
    double depth;            /* relative */
    double snr;              /* depth over the error of the mean, > 0 */
    double asymmetry;        /* |second half - first half| / depth, as a shape clue, >= 0 */
};

#define REHEARSE_FEATURES_MAX 40

/* Look at flux (relative, about 1) and list what stands out below the trend by an SNR of at least
 * least_snr, most salient first, never overlapping: a box of several lengths from 1 to 13 h slid
 * over the trend-removed flux. `found` holds REHEARSE_FEATURES_MAX. BASE_MEMORY. */
bool rehearse_look(const double *time, const double *flux, size_t n, double least_snr,
                   struct rehearse_feature *found, size_t *count, struct base_error *error);

/* A reviewer's character. Rates as in the consensus model: logits at SNR 10. */
struct rehearse_character {
    const char *kind;    /* "keen", "steady", "hasty", "easily drawn", "random", "never marks" */
    double hit_logit;    /* of marking what looks like a dip */
    double doubt;        /* how much a lopsided shape lowers it, logit per unit of asymmetry */
    double snr_slope;    /* logit per ln(SNR) */
    double chance_per_d; /* marks put where nothing is, per day of light curve */
    double edge_scatter; /* of each edge, in dip lengths */
};

/* The character of reviewer `index` in a mix that repeats: mostly steady, some keen, some hasty,
 * some easily drawn, a few who mark at random or never. */
struct rehearse_character rehearse_character_of(unsigned index, gsl_rng *random);

struct rehearse_mark {
    double starts_d, ends_d, low, high;
    bool sure;
};

/* What that reviewer marks, given what stands out: at most `most` marks into `marks`; returns how
 * many. They lie inside the segment's times and each is at least one cadence long. */
size_t rehearse_marks(const struct rehearse_character *character,
                      const struct rehearse_feature *features, size_t feature_count,
                      const double *time, const double *flux, size_t n, gsl_rng *random,
                      struct rehearse_mark *marks, size_t most);

struct rehearse_options {
    const char *server; /* "http://127.0.0.1:8080" */
    unsigned reviewers; /* how many people, 1 to 10000 */
    unsigned looks;     /* looks each at most; 0: until nothing is left */
    uint64_t seed;
    unsigned threads; /* 1 to 64 */
    /* Now and then, from one thread at a time; false stops. May be NULL. */
    bool (*progress)(void *context, uint64_t reviews, uint64_t marks, double seconds);
    void *context;
};
struct rehearse_totals {
    uint64_t people, reviews, marks;
    double seconds;
};

/* Join as guests, take leases, look, answer, until nothing is left. Answers 429 and 503 are waited
 * out as Retry-After says. BASE_IO when the server cannot be reached, BASE_CANCELLED when progress
 * said stop; totals count what was acknowledged. */
bool rehearse_run(const struct rehearse_options *options, struct rehearse_totals *totals,
                  struct base_error *error);

#endif
