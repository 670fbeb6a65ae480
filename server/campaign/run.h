/*
 * Inside a consensus run. It goes over the stars twice, some of them at a time on the pool: first
 * to group marks with every reviewer's word weighing the same, for a first fit that says how far
 * each can be trusted; then with those weights in the groups' intervals, and the dips measured, for
 * the fit that counts. What a star gives is appended in the order of the stars, so that the answer
 * does not depend on the number of threads.
 */
#ifndef CAMPAIGN_RUN_H
#define CAMPAIGN_RUN_H

#include <stdatomic.h>

#include "ebbmark/consensus_group.h"
#include "ebbmark/consensus_model.h"
#include "inside.h"
#include "vector.h"

/* Who looked: a reviewer whose segment covers at least this much of a group's interval. */
#define RUN_COVER_LEAST 0.5

struct run_order {
    const atomic_bool *stop; /* set: end with BASE_CANCELLED at the next step; may be NULL */
    void (*progress)(void *context, double fraction, const char *stage); /* may be NULL */
    void *context;
};

/* A segment that was looked at, for deciding whether it needs more looks. */
struct run_segment {
    int64_t segment, light_curve;
    size_t first_person, people; /* in segment_people: each person once, by index */
    size_t looks;                /* reviews */
};
/* A group of which a segment covers at least half. */
struct run_cover {
    size_t segment, item;
};
/* One person's part in what was looked at. */
struct run_share {
    int32_t person;
    int64_t looks, marks;
    double days;
};

/* What a star, or all of them, came to. items and candidates go together; indexes in them are into
 * the vectors beside them. */
struct run_sum {
    struct vector items;          /* struct consensus_item */
    struct vector looks;          /* struct consensus_look */
    struct vector candidates;     /* struct store_candidate, without the model's say */
    struct vector references;     /* uint64_t: stands for a candidate's time reference */
    struct vector members;        /* struct store_member */
    struct vector segments;       /* struct run_segment */
    struct vector segment_people; /* int32_t */
    struct vector covers;         /* struct run_cover */
    struct vector shares;         /* struct run_share; of one star, not summed up */
    double days_total;            /* of distinct light curve looked at */
};
void run_sum_open(struct run_sum *sum);
void run_sum_free(struct run_sum *sum);

/* What all stars of one pass share; nothing in it changes during the pass. */
struct run_pass {
    struct store *store;
    int64_t newest;
    const int64_t *people; /* ids, ascending; a person's index is their place here */
    size_t people_count;
    const double *weights; /* a person's weight in the intervals; NULL: everybody's is 1 */
    bool measure;          /* measure the dips */
};

/* Sum up one star. `out` was opened by the caller, who frees it whatever comes. */
bool run_star(const struct run_pass *pass, int64_t star, struct run_sum *out,
              struct base_error *error);

/* Measure the candidates of one star on the light curves they name, and put the SNR into their
 * items. The two arrays go together. */
bool run_measure(const struct run_pass *pass, struct store_candidate *candidates,
                 struct consensus_item *items, size_t count, const struct store_light_curve *curves,
                 size_t curve_count, struct base_error *error);

/* A whole run, before it is stored. */
struct run_result {
    int64_t newest, reviews;
    int64_t *people;
    size_t people_count;
    struct run_share *shares; /* people_count of them */
    struct run_sum sum;
    struct consensus_output fit;
    unsigned first_rounds;
};
/* Compute a run over all reviews up to `newest`. The same reviews give the same bits. On failure
 * `out` is emptied; the caller frees it with run_result_free. */
bool run_compute(struct campaign *campaign, const struct run_order *order, int64_t newest,
                 struct run_result *out, struct base_error *error);
void run_result_free(struct run_result *result);

/* Count, for each candidate, likely candidates on other stars at the same time. */
bool run_count_other_stars(struct run_result *result, struct base_error *error);

/* The run's settings and fit as JSON objects, malloc'd; NULL when out of memory. */
char *run_settings_json(const struct campaign_settings *settings);
char *run_fit_json(const struct run_result *result);

/* Close the segments that need no more looks, and open again those that do after all. */
bool run_settle(struct campaign *campaign, const struct run_result *result,
                struct base_error *error);

/* Compute, store, settle. */
bool run_whole(struct campaign *campaign, const struct run_order *order, int64_t *run,
               struct base_error *error);

#endif
