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

/* The densities of x are mixtures of triangles about knots. */
#define CONSENSUS_X_KNOTS 19
#define CONSENSUS_X_FIRST (-2.4)
#define CONSENSUS_X_STEP 0.3

/* What is common to all reviewers, and what one reviewer is, as the model's own numbers. x is
 * ln(max(SNR, 1) / 10). */
struct consensus_common {
    double beta, gamma;        /* growth of the hit and lure logits with x */
    double tau_dip, tau_lure;  /* spread of the logits from one dip or lure to another */
    double kappa;              /* spread of the marks' centres, in durations */
    double dips_per_d;         /* of survey light curve; those that somebody marked */
    double lures_per_d;        /* the same for lures */
    double chance_per_d;       /* a typical reviewer's chance marks */
    double together_per_d;     /* places where nothing is that people mark together */
    double hit_mean, hit_sd;   /* logits at SNR 10 over the reviewers */
    double lure_mean, lure_sd; /* the same for lures */
    double x_mean[3], x_sd[3]; /* of x for dips, lures, nothing; survey groups that were marked */
    double x_share[3][CONSENSUS_X_KNOTS]; /* its density: weights of the knots */
    double sure[3];                       /* P(sure | marked) for dips, lures, nothing */
};
struct consensus_person {
    double hit_logit, lure_logit; /* at SNR 10 */
    double log_chance_per_d;      /* natural log */
    double log_together;          /* weight among those who mark together; 0 for most */
};

/* Where a fit starts, from an earlier one. people values in the order of the new input; those with
 * a NAN, and those past the end, start at the population's mean. */
struct consensus_start {
    const struct consensus_common *common;
    const struct consensus_person *people;
    size_t people_count;
};

struct consensus_settings {
    unsigned rounds_max;    /* default 500 */
    double tolerance;       /* relative change of the penalised log-likelihood, default 1e-8 */
    struct base_pool *pool; /* NULL: one thread */
    const struct consensus_start *start; /* NULL: from vote fractions */
    /* Called after each round with the penalised log-likelihood; NULL: nobody listens. */
    void (*watch)(void *context, unsigned round, double penalised);
    void *watch_context;
    int hold; /* 1: keep what is common to all reviewers but beta, gamma, tau and kappa as it is */
};
#define CONSENSUS_SETTINGS_DEFAULT                                                                 \
    ((struct consensus_settings){500, 1e-8, NULL, NULL, NULL, NULL, 0})

struct consensus_rate {
    double value, low, high; /* with a 90 % interval; NAN where unknown */
};

struct consensus_skill {
    struct consensus_rate hit;    /* P(marks | a dip was shown), at SNR 10 */
    struct consensus_rate chance; /* P(marks | a group that is no dip) */
    double weight;                /* for weighted medians, >= 0 */
    /* NAN in the two-class form: */
    struct consensus_rate hit_snr5, hit_snr20;
    struct consensus_rate lure;            /* P(marks | a lure was shown), at SNR 10 */
    struct consensus_rate chance_per_30_d; /* marks where nothing is, per 30 d of light curve */
};

struct consensus_answer {
    double probability;                                 /* P(dip) in [0, 1] */
    double log_odds;                                    /* natural log; as if nothing were known */
    double marks_only_probability;                      /* without the photometry's say */
    double term_looks, term_time, term_snr, term_prior; /* they add up to log_odds */
    double lure, nothing;                               /* with probability they add up to 1 */
    double low, high;                                   /* 90 % interval of the probability */
};

/* All arrays are owned by the struct; free with consensus_output_free. */
struct consensus_output {
    struct consensus_answer *answers; /* item_count */
    struct consensus_skill *skills;   /* people */
    double prior;                     /* share of dips among survey groups */
    double log_likelihood;            /* penalised, at the end */
    unsigned rounds;
    int converged; /* 1: by the tolerance; 0: the round limit was met */
    /* Of the three-class form; empty in the other. */
    struct consensus_person *people; /* people */
    struct consensus_common common;
    double unmarked_dips; /* expected dips on survey light curves looked at that nobody marked */
};
void consensus_output_free(struct consensus_output *output);

/* Fit the consensus: each group is a dip, a lure or nothing (chance marks). An injected dip that
 * nobody marked enters as an item with looks, no marks, known CONSENSUS_DIP and control 1. Any
 * input in range gives finite numbers: no reviewers, no groups, one reviewer, only random ones.
 * BASE_MEMORY, or BASE_INVALID when an index is out of range. */
bool consensus_fit(const struct consensus_input *input, const struct consensus_settings *settings,
                   struct consensus_output *output, struct base_error *error);

/* The plain two-class form, which knows no SNR, time or lures: the baseline in evaluations. */
bool consensus_fit_two_class(const struct consensus_input *input,
                             const struct consensus_settings *settings,
                             struct consensus_output *output, struct base_error *error);

#endif
