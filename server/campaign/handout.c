#include "handout.h"

#include <assert.h>
#include <pthread.h>
#include <sodium.h>
#include <stdlib.h>

#include "ebbmark/campaign.h"
#include "leases.h"
#include "queue.h"
#include "seen.h"

struct handout {
    struct store *store;
    pthread_mutex_t refreshing; /* held through a whole refresh; taken before `lock` */
    pthread_mutex_t lock;       /* guards everything below; never held while the store is asked */
    pthread_cond_t loaded;      /* some person's state left SEEN_LOADING */
    struct queue queue;
    struct leases leases;
    struct seen seen;
    uint64_t live, given;
};

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory to hand out segments.");
    return false;
}

/* ---- building the queue ---- */

struct queue_reading {
    struct queue *queue;
    bool full;
};

static bool add_open(void *context, const struct store_open_segment *segment)
{
    struct queue_reading *reading = context;
    reading->full = !queue_add(reading->queue, segment->id, segment->looks);
    return !reading->full;
}

static bool read_queue(struct store *store, struct queue *queue, struct base_error *error)
{
    *queue = (struct queue){0};
    randombytes_buf(&queue->random, sizeof queue->random);
    struct queue_reading reading = {.queue = queue};
    bool ok = store_segments_open_each(store, add_open, &reading, error);
    return ok && reading.full ? no_memory(error) : ok;
}

bool handout_open(struct store *store, struct handout **out, struct base_error *error)
{
    *out = NULL;
    struct handout *handout = calloc(1, sizeof *handout);
    if (handout == NULL)
        return no_memory(error);
    handout->store = store;
    handout->seen.slots_max = SEEN_SLOTS_MAX;
    handout->seen.people_max = SEEN_PEOPLE_MAX;
    (void)pthread_mutex_init(&handout->refreshing, NULL);
    (void)pthread_mutex_init(&handout->lock, NULL);
    (void)pthread_cond_init(&handout->loaded, NULL);
    if (!read_queue(store, &handout->queue, error)) {
        handout_close(handout);
        return false;
    }
    *out = handout;
    return true;
}

void handout_close(struct handout *handout)
{
    if (handout == NULL)
        return;
    queue_free(&handout->queue);
    leases_free(&handout->leases);
    seen_free(&handout->seen);
    (void)pthread_cond_destroy(&handout->loaded);
    (void)pthread_mutex_destroy(&handout->lock);
    (void)pthread_mutex_destroy(&handout->refreshing);
    free(handout);
}

bool handout_refresh(struct handout *handout, struct base_error *error)
{
    struct queue *fresh = calloc(1, sizeof *fresh);
    if (fresh == NULL)
        return no_memory(error);
    (void)pthread_mutex_lock(&handout->refreshing);
    bool ok = read_queue(handout->store, fresh, error);
    if (ok) {
        (void)pthread_mutex_lock(&handout->lock);
        queue_carry_over(fresh, &handout->queue);
        for (size_t i = 0; i < handout->leases.count; i++) {
            const struct lease_record *record = handout->leases.heap[i];
            struct queue_place *place = record->live ? queue_find(fresh, record->segment) : NULL;
            if (place != NULL)
                queue_fly(fresh, place);
        }
        struct queue old = handout->queue;
        handout->queue = *fresh;
        *fresh = old;
        (void)pthread_mutex_unlock(&handout->lock);
    }
    (void)pthread_mutex_unlock(&handout->refreshing);
    queue_free(fresh);
    free(fresh);
    return ok;
}

/* ---- what a person has seen ---- */

/* Read a person's reviewed segments into their set. The lock is held on entry and on return, and
 * let go while the store is asked; what is taken meanwhile is added by handout_review_taken. */
static bool load_seen(struct handout *handout, struct seen_person *person, struct base_error *error)
{
    person->state = SEEN_LOADING;
    (void)pthread_mutex_unlock(&handout->lock);
    int64_t *segments = NULL;
    size_t count = 0;
    struct base_arena *arena = base_arena_new(0);
    bool ok = arena != NULL ? store_person_segments(handout->store, arena, person->person,
                                                    &segments, &count, error)
                            : no_memory(error);
    (void)pthread_mutex_lock(&handout->lock);
    bool complete = ok && person->state == SEEN_LOADING;
    for (size_t i = 0; complete && i < count; i++)
        complete = seen_add(&handout->seen, person, segments[i]);
    if (complete)
        person->state = SEEN_KNOWN;
    else
        seen_forget(&handout->seen, person);
    base_arena_free(arena);
    (void)pthread_cond_broadcast(&handout->loaded);
    return complete || (ok ? no_memory(error) : false);
}

/* The person with what they have seen, pinned; NULL on failure. The lock is held on entry and on
 * return, and may be let go between. */
static struct seen_person *remember(struct handout *handout, int64_t id, struct base_error *error)
{
    struct seen_person *person = seen_touch(&handout->seen, id);
    if (person == NULL) {
        (void)no_memory(error);
        return NULL;
    }
    person->pins++;
    bool ok = true;
    while (ok && person->state != SEEN_KNOWN) {
        if (person->state == SEEN_LOADING)
            (void)pthread_cond_wait(&handout->loaded, &handout->lock);
        else
            ok = load_seen(handout, person, error);
    }
    if (!ok) {
        person->pins--;
        return NULL;
    }
    return person;
}

static void unpin(struct handout *handout, struct seen_person *person)
{
    person->pins--;
    seen_trim(&handout->seen);
}

/* ---- leases ---- */

/* A lease no longer counts: its segment's place and its holder are free of it. */
static void end_lease(struct handout *handout, struct lease_record *record)
{
    if (!record->live)
        return;
    record->live = false;
    handout->live--;
    struct queue_place *place = queue_find(&handout->queue, record->segment);
    if (place != NULL)
        queue_land(&handout->queue, place);
    struct seen_person *person = seen_find(&handout->seen, record->person);
    if (person != NULL && person->holds > 0)
        person->holds--;
}

/* End what is due. */
static void sweep(struct handout *handout, int64_t now_ms)
{
    for (struct lease_record *record = leases_due(&handout->leases, now_ms); record != NULL;
         record = leases_due(&handout->leases, now_ms)) {
        if (record->live) {
            end_lease(handout, record);
            leases_delay(&handout->leases, record, record->due_ms + HANDOUT_REMEMBER_MS);
        } else {
            leases_remove(&handout->leases, record);
        }
    }
}

/* Note a lease on a place. */
static bool note_lease(struct handout *handout, struct seen_person *person,
                       struct queue_place *place, int64_t expires_ms, struct base_error *error)
{
    struct lease_record *record = leases_find(&handout->leases, person->person, place->segment);
    if (record != NULL) {
        record->live = true;
        leases_delay(&handout->leases, record, expires_ms);
    } else if (handout->leases.count >= CAMPAIGN_LEASES_MAX) {
        return base_fail(error, BASE_BUSY, "Too many segments are handed out (limit %d).",
                         CAMPAIGN_LEASES_MAX);
    } else if (leases_add(&handout->leases, person->person, place->segment, expires_ms) == NULL) {
        return no_memory(error);
    }
    queue_fly(&handout->queue, place);
    person->holds++;
    handout->live++;
    handout->given++;
    return true;
}

struct seeker {
    const struct handout *handout;
    const struct seen_person *person;
};

static bool is_new_to(void *context, int64_t segment)
{
    const struct seeker *seeker = context;
    if (seen_has(seeker->person, segment))
        return false;
    const struct lease_record *record =
        leases_find(&seeker->handout->leases, seeker->person->person, segment);
    return record == NULL || !record->live;
}

bool handout_take(struct handout *handout, const struct handout_wish *wish, int64_t *segment,
                  bool *found, struct base_error *error)
{
    assert(wish->looks_most >= 1 && wish->looks_most < QUEUE_LEVELS);
    *found = false;
    (void)pthread_mutex_lock(&handout->lock);
    sweep(handout, wish->now_ms);
    struct seen_person *person = remember(handout, wish->person, error);
    bool ok = person != NULL;
    if (ok && person->holds >= CAMPAIGN_LEASES_HELD_MAX)
        ok = base_fail(error, BASE_BUSY,
                       "You hold %u segments already; answer some of them first (limit %d).",
                       person->holds, CAMPAIGN_LEASES_HELD_MAX);
    if (ok) {
        struct seeker seeker = {handout, person};
        struct queue_place *place =
            queue_pick(&handout->queue, wish->looks_most, is_new_to, &seeker);
        ok = place == NULL || note_lease(handout, person, place, wish->expires_ms, error);
        *found = ok && place != NULL;
        *segment = *found ? place->segment : 0;
    }
    if (person != NULL)
        unpin(handout, person);
    (void)pthread_mutex_unlock(&handout->lock);
    return ok;
}

void handout_give_back(struct handout *handout, int64_t person, int64_t segment, bool open)
{
    (void)pthread_mutex_lock(&handout->lock);
    struct lease_record *record = leases_find(&handout->leases, person, segment);
    if (record != NULL) {
        end_lease(handout, record);
        leases_remove(&handout->leases, record);
    }
    struct queue_place *place = open ? NULL : queue_find(&handout->queue, segment);
    if (place != NULL)
        queue_close(&handout->queue, place);
    (void)pthread_mutex_unlock(&handout->lock);
}

void handout_review_taken(struct handout *handout, int64_t person, int64_t segment)
{
    (void)pthread_mutex_lock(&handout->lock);
    struct lease_record *record = leases_find(&handout->leases, person, segment);
    if (record != NULL) {
        end_lease(handout, record);
        leases_remove(&handout->leases, record);
    }
    struct queue_place *place = queue_find(&handout->queue, segment);
    if (place != NULL)
        queue_look(&handout->queue, place);
    struct seen_person *looked = seen_find(&handout->seen, person);
    if (looked != NULL && looked->state != SEEN_UNKNOWN &&
        !seen_add(&handout->seen, looked, segment))
        seen_forget(&handout->seen, looked); /* it is read from the store when next needed */
    (void)pthread_mutex_unlock(&handout->lock);
}

bool handout_is_open(struct handout *handout, int64_t segment)
{
    (void)pthread_mutex_lock(&handout->lock);
    const struct queue_place *place = queue_find(&handout->queue, segment);
    bool open = place != NULL && place->position != QUEUE_CLOSED;
    (void)pthread_mutex_unlock(&handout->lock);
    return open;
}

void handout_settle(struct handout *handout, const int64_t *segments, size_t count)
{
    (void)pthread_mutex_lock(&handout->lock);
    for (size_t i = 0; i < count; i++) {
        struct queue_place *place = queue_find(&handout->queue, segments[i]);
        if (place != NULL)
            queue_close(&handout->queue, place);
    }
    (void)pthread_mutex_unlock(&handout->lock);
}

bool handout_may_see(struct handout *handout, int64_t person, int64_t segment, int64_t now_ms,
                     struct base_error *error)
{
    (void)pthread_mutex_lock(&handout->lock);
    sweep(handout, now_ms);
    bool may = leases_find(&handout->leases, person, segment) != NULL;
    if (!may) {
        struct seen_person *looked = remember(handout, person, error);
        may = looked != NULL && seen_has(looked, segment);
        if (looked != NULL)
            unpin(handout, looked);
    }
    (void)pthread_mutex_unlock(&handout->lock);
    return may;
}

struct handout_figures handout_figures_now(struct handout *handout)
{
    (void)pthread_mutex_lock(&handout->lock);
    const struct handout_figures figures = {.queued = handout->queue.queued,
                                            .live = handout->live,
                                            .people = handout->seen.count,
                                            .given = handout->given};
    (void)pthread_mutex_unlock(&handout->lock);
    return figures;
}
