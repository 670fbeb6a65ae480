/*
 * The queue of open segments, in levels: a segment's level is its looks plus the leases out for it.
 * All moves between levels cost O(1), finding a segment O(log n), picking one O(1) on average.
 *
 * Not thread-safe: the handout room's lock guards it.
 */
#ifndef CAMPAIGN_QUEUE_H
#define CAMPAIGN_QUEUE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

#define QUEUE_LEVELS 1001 /* one more than the most looks that a setting can ask for */

/* Positions of a place that is in no level: for want of memory, or no longer handed out. */
#define QUEUE_NOWHERE UINT32_MAX
#define QUEUE_CLOSED (UINT32_MAX - 1)

struct queue_place {
    int64_t segment;
    uint32_t position; /* in its level's array, or one of the two above */
    uint16_t looks;
    uint16_t flying; /* leases out */
};

struct queue_level {
    uint32_t *places; /* indexes into the queue's places, in no order */
    uint32_t count, room;
};

struct queue {
    struct queue_place *places; /* by ascending segment */
    uint32_t count, room;
    uint32_t queued; /* places that are in a level */
    uint64_t random; /* state of the generator of picks; not for secrets */
    struct queue_level levels[QUEUE_LEVELS];
};

void queue_free(struct queue *queue);

/* Append an open segment; ids must come ascending. False when out of memory, or over 2^31 of them.
 */
bool queue_add(struct queue *queue, int64_t segment, int32_t looks);

/* The segment's place, or NULL. */
struct queue_place *queue_find(const struct queue *queue, int64_t segment);

/* Change what decides a place's level. When memory for the new level's array is lacking, the place
 * is in no level until its next change; nothing else is lost. */
void queue_fly(struct queue *queue, struct queue_place *place);
void queue_land(struct queue *queue, struct queue_place *place);
void queue_look(struct queue *queue, struct queue_place *place);
void queue_close(struct queue *queue, struct queue_place *place);

/* A place of the lowest level under `below` that `allowed` agrees to, at random; NULL when there is
 * none. A bounded number of random tries a level, then all of it from a random start. */
struct queue_place *queue_pick(struct queue *queue, unsigned below,
                               bool (*allowed)(void *context, int64_t segment), void *context);

/* `fresh` was read from the store a moment ago and may lack the newest looks, which `old` has. */
void queue_carry_over(struct queue *fresh, const struct queue *old);

#endif
