/*
 * Handing out: the queue of open segments, the leases that are out and who has seen what, under one
 * lock. Nothing here is stored: it is built from the store at start and kept up by what passes.
 *
 * Thread-safe.
 */
#ifndef CAMPAIGN_HANDOUT_H
#define CAMPAIGN_HANDOUT_H

#include "ebbmark/store.h"

/* In memory an ended lease is remembered for this long. */
#define HANDOUT_REMEMBER_MS 3600000

struct handout;

/* Build the queue from the store's open segments. */
bool handout_open(struct store *store, struct handout **out, struct base_error *error);
void handout_close(struct handout *handout);

/* Read the open segments again: after a batch was finished or withdrawn, or segments reopened. */
bool handout_refresh(struct handout *handout, struct base_error *error);

struct handout_wish {
    int64_t person;
    unsigned looks_most;        /* 1 … QUEUE_LEVELS - 1 */
    int64_t now_ms, expires_ms; /* of the lease to give */
};
/* Find a segment of the lowest level that the person has not reviewed and holds no live lease on,
 * and note the lease. *found is false when there is none. BASE_BUSY over a limit of leases; and
 * what the store fails with, when the person's reviews must be read. */
bool handout_take(struct handout *handout, const struct handout_wish *wish, int64_t *segment,
                  bool *found, struct base_error *error);

/* A lease was noted that could not be given after all; or the segment turned out not to be open. */
void handout_give_back(struct handout *handout, int64_t person, int64_t segment, bool open);

/* A review was stored: one look more, and the person's lease is done with. */
void handout_review_taken(struct handout *handout, int64_t person, int64_t segment);

/* Is the segment in the queue, whatever its level? */
bool handout_is_open(struct handout *handout, int64_t segment);
/* Take segments out of the queue. */
void handout_settle(struct handout *handout, const int64_t *segments, size_t count);

/* A remembered lease, or a review there. False on failure too, with the error filled. */
bool handout_may_see(struct handout *handout, int64_t person, int64_t segment, int64_t now_ms,
                     struct base_error *error);

struct handout_figures {
    uint64_t queued, live, people, given;
};
struct handout_figures handout_figures_now(struct handout *handout);

#endif
