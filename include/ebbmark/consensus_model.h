/*
 * The consensus: from who marked what to a probability for each group and a skill for each
 * reviewer. One interface; the model behind it can be replaced. Pure, deterministic: the same
 * input gives the same bits whatever the number of threads.
 */
#ifndef EBBMARK_CONSENSUS_MODEL_H
#define EBBMARK_CONSENSUS_MODEL_H

#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"
#include "ebbmark/pool.h"

/* What is known of a group's truth beforehand. */
enum consensus_known { CONSENSUS_FREE = 0, CONSENSUS_DIP = 1, CONSENSUS_NOT_DIP = 2 };

/* One group. Its looks are looks[first_look … first_look + looks - 1] of the input. */
struct consensus_item {
    size_t first_look, looks;
    double snr;        /* measured; NAN where nothing could be measured */
    double duration_d; /* > 0 */
    uint8_t known;     /* enum consensus_known */
    uint8_t control;   /* 1: on an injected or inverted segment, so outside the SNR densities */
};

/* One reviewer's look at one group (everyone whose review's segment covers at least half of it). */
struct consensus_look {
    int32_t person; /* 0 … people-1 */
    uint8_t marked; /* 1: one of their marks is in the group */
    uint8_t sure;   /* certainty of that mark; 0 when not marked */
    float centre_d; /* centre of the mark minus the group's mid-time, d; 0 when not marked */
};

struct consensus_input {
    const struct consensus_item *items;
    size_t item_count;
    const struct consensus_look *looks; /* ordered by item */
    size_t look_count;
    size_t people;
    const double *days_looked; /* people values: days of light curve each has looked at */
    double days_total;         /* days of distinct survey light curve looked at by anyone */
};

struct consensus_settings {
    unsigned rounds_max;    /* default 500 */
    double tolerance;       /* relative change of the penalised log-likelihood, default 1e-8 */
    struct base_pool *pool; /* NULL: one thread */
};
#define CONSENSUS_SETTINGS_DEFAULT ((struct consensus_settings){500, 1e-8, NULL})

struct consensus_rate {
    double value, low, high; /* with a 90 % interval; NAN where unknown */
};

struct consensus_skill {
    struct consensus_rate hit;    /* P(marks | a dip was shown) */
    struct consensus_rate chance; /* P(marks | no dip there) in the two-class form */
    double weight;                /* for weighted medians, >= 0 */
};

struct consensus_answer {
    double probability;                                 /* P(dip) in [0, 1] */
    double log_odds;                                    /* natural log */
    double marks_only_probability;                      /* without the photometry's say */
    double term_looks, term_time, term_snr, term_prior; /* they add up to log_odds */
};

/* All arrays are owned by the struct; free with consensus_output_free. */
struct consensus_output {
    struct consensus_answer *answers; /* item_count */
    struct consensus_skill *skills;   /* people */
    double prior;                     /* class proportion of dips among groups */
    double log_likelihood;            /* penalised, at the end */
    unsigned rounds;
    int converged; /* 1: by the tolerance; 0: the round limit was met */
};
void consensus_output_free(struct consensus_output *output);

/* Fit the consensus. Any input in range gives finite numbers: no reviewers, no groups, one
 * reviewer, only random ones. BASE_MEMORY, or BASE_INVALID when an index is out of range. */
bool consensus_fit(const struct consensus_input *input, const struct consensus_settings *settings,
                   struct consensus_output *output, struct base_error *error);

/* The plain two-class form, which knows no SNR, time or lures: the baseline in evaluations. */
bool consensus_fit_two_class(const struct consensus_input *input,
                             const struct consensus_settings *settings,
                             struct consensus_output *output, struct base_error *error);

#endif
