/* The writer: one thread gathers the reviews that wait into one transaction at a time. */
#include <stdlib.h>

#include "inside.h"

#define GROUP_MAX 256

struct waiting {
    struct store_review_new *review;
    void (*done)(void *context, bool ok, const struct base_error *error);
    void *context;
};

struct writer {
    struct campaign *campaign;
    pthread_mutex_t lock; /* guards everything below */
    pthread_cond_t came;
    struct waiting *ring; /* CAMPAIGN_REVIEWS_WAITING_MAX of them */
    size_t first, count;
    bool closing, started;
    pthread_t thread; /* once started */
    struct writer_figures figures;
};

/* One group on its way; belongs to the writer's thread. */
struct group {
    struct waiting waiting[GROUP_MAX];
    size_t count;
};

/* What a stored review changes in memory. */
static void account(struct campaign *campaign, const struct store_review_new *review)
{
    if (review->outcome == STORE_REVIEW_TAKEN)
        handout_review_taken(campaign->handout, review->person, review->segment);
}

static bool store_some(struct campaign *campaign, const struct waiting *waiting, size_t count,
                       struct base_error *error)
{
    struct store_review_new *reviews[GROUP_MAX] = {0};
    for (size_t i = 0; i < count; i++)
        reviews[i] = waiting[i].review;
    if (!store_reviews_add(campaign->store, reviews, count, error))
        return false;
    for (size_t i = 0; i < count; i++)
        account(campaign, reviews[i]);
    return true;
}

/* Store reviews and tell each its end. Returns how many were newly taken. */
static uint64_t store_and_tell(struct campaign *campaign, const struct waiting *waiting,
                               size_t count, uint64_t *failed)
{
    struct base_error error = {0};
    bool ok = store_some(campaign, waiting, count, &error);
    uint64_t taken = 0;
    if (!ok && count > 1 && error.kind != BASE_DISK_FULL) {
        /* One that cannot be stored, such as by a person who is not there, must not take the
         * others down with it. */
        for (size_t i = 0; i < count; i++)
            taken += store_and_tell(campaign, &waiting[i], 1, failed);
        return taken;
    }
    if (!ok)
        campaign_tell(campaign, BASE_LOG_ERROR, "reviews_not_stored", "detail", error.sentence);
    for (size_t i = 0; i < count; i++) {
        taken += ok && waiting[i].review->outcome == STORE_REVIEW_TAKEN ? 1 : 0;
        waiting[i].done(waiting[i].context, ok, ok ? NULL : &error);
    }
    *failed += ok ? 0 : count;
    return taken;
}

/* Wait for reviews and take a group of them. False: closing, and nothing is left. */
static bool gather(struct writer *writer, struct group *group)
{
    (void)pthread_mutex_lock(&writer->lock);
    while (writer->count == 0 && !writer->closing)
        (void)pthread_cond_wait(&writer->came, &writer->lock);
    group->count = writer->count < GROUP_MAX ? writer->count : GROUP_MAX;
    for (size_t i = 0; i < group->count; i++)
        group->waiting[i] = writer->ring[(writer->first + i) % CAMPAIGN_REVIEWS_WAITING_MAX];
    writer->first = (writer->first + group->count) % CAMPAIGN_REVIEWS_WAITING_MAX;
    writer->count -= group->count;
    (void)pthread_mutex_unlock(&writer->lock);
    return group->count > 0;
}

static void *write_reviews(void *argument)
{
    struct writer *writer = argument;
    struct group group;
    while (gather(writer, &group)) {
        uint64_t failed = 0;
        uint64_t taken = store_and_tell(writer->campaign, group.waiting, group.count, &failed);
        (void)pthread_mutex_lock(&writer->lock);
        writer->figures.groups++;
        writer->figures.taken += taken;
        writer->figures.failed += failed;
        (void)pthread_mutex_unlock(&writer->lock);
        if (taken > 0)
            runner_reviews_taken(writer->campaign->runner, taken);
    }
    return NULL;
}

bool writer_open(struct campaign *campaign, struct writer **out, struct base_error *error)
{
    *out = NULL;
    struct writer *writer = calloc(1, sizeof *writer);
    if (writer != NULL)
        writer->ring = calloc(CAMPAIGN_REVIEWS_WAITING_MAX, sizeof *writer->ring);
    if (writer == NULL || writer->ring == NULL) {
        free(writer);
        return base_fail(error, BASE_MEMORY, "There is no memory for the writer of reviews.");
    }
    writer->campaign = campaign;
    (void)pthread_mutex_init(&writer->lock, NULL);
    (void)pthread_cond_init(&writer->came, NULL);
    *out = writer;
    return true;
}

void writer_close(struct writer *writer)
{
    if (writer == NULL)
        return;
    (void)pthread_mutex_lock(&writer->lock);
    writer->closing = true;
    (void)pthread_cond_signal(&writer->came);
    (void)pthread_mutex_unlock(&writer->lock);
    if (writer->started)
        (void)pthread_join(writer->thread, NULL);
    (void)pthread_cond_destroy(&writer->came);
    (void)pthread_mutex_destroy(&writer->lock);
    free(writer->ring);
    free(writer);
}

/* Most commands never store a review, so the thread starts with the first. */
static bool start(struct writer *writer, struct base_error *error)
{
    if (writer->started)
        return true;
    int failed = pthread_create(&writer->thread, NULL, write_reviews, writer);
    writer->started = failed == 0;
    return writer->started || base_fail_errno(error, failed, "Starting the writer of reviews");
}

bool campaign_review_submit(struct campaign *campaign, struct store_review_new *review,
                            void (*done)(void *context, bool ok, const struct base_error *error),
                            void *context, struct base_error *error)
{
    struct writer *writer = campaign->writer;
    (void)pthread_mutex_lock(&writer->lock);
    bool ok = start(writer, error);
    if (ok && writer->count == CAMPAIGN_REVIEWS_WAITING_MAX)
        ok = base_fail(error, BASE_BUSY, "Too many reviews wait to be stored (limit %d).",
                       CAMPAIGN_REVIEWS_WAITING_MAX);
    if (ok) {
        size_t at = (writer->first + writer->count) % CAMPAIGN_REVIEWS_WAITING_MAX;
        writer->ring[at] = (struct waiting){review, done, context};
        writer->count++;
        (void)pthread_cond_signal(&writer->came);
    }
    (void)pthread_mutex_unlock(&writer->lock);
    return ok;
}

struct writer_figures writer_figures_now(struct writer *writer)
{
    (void)pthread_mutex_lock(&writer->lock);
    struct writer_figures figures = writer->figures;
    figures.waiting = writer->count;
    (void)pthread_mutex_unlock(&writer->lock);
    return figures;
}
