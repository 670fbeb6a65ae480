/* What the campaign's tests share: a fresh database in a folder of its own, stars in it, and small
 * helpers to look and answer. */
#ifndef TESTS_CAMPAIGN_SUPPORT_H
#define TESTS_CAMPAIGN_SUPPORT_H

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <fcntl.h>
#include <ftw.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mount.h>
#include <sys/stat.h>
#include <unistd.h>

#include "ebbmark/campaign.h"
#include "ebbmark/clock.h"

struct place {
    char folder[128], database[160];
    struct store *store;
    struct base_pool *pool;
    struct campaign *campaign;
};

/* Show why a call failed before the assertion ends the test. */
#define assert_ok(call, error)                                                                     \
    do {                                                                                           \
        bool went_well = (call);                                                                   \
        if (!went_well)                                                                            \
            print_error("%s\n", (error).sentence);                                                 \
        assert_true(went_well);                                                                    \
    } while (0)

static inline void place_open_again(struct place *place)
{
    struct base_error error = {0};
    const struct store_options options = {.readers = 8};
    assert_ok(store_open(place->database, &options, &place->store, &error), error);
    assert_ok(campaign_open(place->store, place->pool, NULL, &place->campaign, &error), error);
}

static inline void place_shut(struct place *place)
{
    campaign_close(place->campaign);
    store_close(place->store);
    place->campaign = NULL;
    place->store = NULL;
}

/* `folder` "" makes one under /tmp. */
static inline void place_open_in(struct place *place, const char *folder)
{
    struct base_error error = {0};
    *place = (struct place){0};
    (void)snprintf(place->folder, sizeof place->folder, "%s",
                   folder[0] != '\0' ? folder : "/tmp/ebbmark-campaign-XXXXXX");
    if (folder[0] == '\0')
        assert_non_null(mkdtemp(place->folder));
    (void)snprintf(place->database, sizeof place->database, "%s/campaign.db", place->folder);
    assert_ok(base_pool_open(&place->pool, 2, 64, &error), error);
    place_open_again(place);
}

static inline void place_open(struct place *place)
{
    place_open_in(place, "");
}

static inline int remove_one(const char *path, const struct stat *about, int kind,
                             struct FTW *where)
{
    (void)about;
    (void)kind;
    (void)where;
    return remove(path);
}

static inline void folder_remove(const char *path)
{
    (void)nftw(path, remove_one, 16, FTW_DEPTH | FTW_PHYS);
}

static inline void place_close(struct place *place)
{
    if (place->campaign != NULL)
        place_shut(place);
    base_pool_close(place->pool);
    folder_remove(place->folder);
}

/* A batch of `stars` flat stars, one light curve each of `segments` segments of 10 d that touch. */
static inline int64_t add_flat_stars(struct place *place, const char *batch, unsigned first,
                                     unsigned stars, unsigned segments)
{
    enum { POINTS = 40 }; /* a segment */
    struct base_error error = {0};
    int64_t id = 0;
    bool resumed;
    size_t n = (size_t)segments * POINTS;
    double *time = calloc(n, sizeof *time);
    float *zero = calloc(n, sizeof *zero);
    struct store_span *spans = calloc(segments, sizeof *spans);
    assert_non_null(time);
    assert_non_null(zero);
    assert_non_null(spans);
    for (size_t i = 0; i < n; i++)
        time[i] = 10.0 * (double)i / POINTS;
    for (unsigned s = 0; s < segments; s++)
        spans[s] = (struct store_span){(size_t)s * POINTS, POINTS, 10.0 * s, 10.0 * s + 9.75};
    assert_ok(store_batch_begin(place->store, batch, "a test", 1, &id, &resumed, &error), error);
    for (unsigned i = 0; i < stars; i++) {
        char name[32], label[40];
        (void)snprintf(name, sizeof name, "RB-%05u", first + i);
        (void)snprintf(label, sizeof label, "%s.csv", name);
        const struct store_light_curve_new curve = {
            .star = {name, 10.0, -5.0, 11.0, 5000.0, 1.0, 1.0},
            .time_reference = "BJD_TDB - 2457000",
            .points = {n, time, zero, zero, NULL},
            .median_flux = 1000.0,
            .cadence_d = 0.25,
            .noise_point = 1e-3,
            .noise_window = {1e-3, 1e-3, 1e-3, 1e-3},
            .segments = spans,
            .segment_count = segments};
        struct store_file_new file = {.batch = id,
                                      .label = label,
                                      .reason = "",
                                      .outcome = STORE_FILE_LOADED,
                                      .bytes = 1,
                                      .curves = &curve,
                                      .curve_count = 1};
        (void)snprintf((char *)file.sha256, sizeof file.sha256, "%s", name);
        assert_ok(store_files_add(place->store, &file, 1, &error), error);
    }
    assert_ok(store_batch_finish(place->store, id, 2, &error), error);
    free(spans);
    free(zero);
    free(time);
    return id;
}

static inline int64_t add_person(struct place *place, const char *handle)
{
    struct base_error error = {0};
    int64_t id = 0;
    assert_ok(campaign_person_add(place->campaign, handle, NULL, STORE_REVIEWER, &id, &error),
              error);
    return id;
}

static inline void change_setting(struct place *place, const char *name, const char *value)
{
    struct base_error error = {0};
    assert_ok(campaign_setting_change(place->campaign, name, value, 0, &error), error);
}

/* Sending a review and waiting for its end. */
struct sent {
    pthread_mutex_t lock;
    pthread_cond_t told;
    unsigned times;
    bool ok;
    struct base_error error;
};

static inline void sent_done(void *context, bool ok, const struct base_error *error)
{
    struct sent *sent = context;
    (void)pthread_mutex_lock(&sent->lock);
    sent->times++;
    sent->ok = ok;
    if (error != NULL)
        sent->error = *error;
    (void)pthread_cond_signal(&sent->told);
    (void)pthread_mutex_unlock(&sent->lock);
}

static inline bool send_review(struct campaign *campaign, struct store_review_new *review,
                               struct base_error *error)
{
    struct sent sent = {.times = 0};
    (void)pthread_mutex_init(&sent.lock, NULL);
    (void)pthread_cond_init(&sent.told, NULL);
    bool ok = campaign_review_submit(campaign, review, sent_done, &sent, error);
    if (ok) {
        (void)pthread_mutex_lock(&sent.lock);
        while (sent.times == 0)
            (void)pthread_cond_wait(&sent.told, &sent.lock);
        (void)pthread_mutex_unlock(&sent.lock);
        ok = sent.ok;
        if (!ok)
            *error = sent.error;
    }
    (void)pthread_cond_destroy(&sent.told);
    (void)pthread_mutex_destroy(&sent.lock);
    return ok;
}

/* A review of a segment, with a key and a nonce of its own. */
static inline struct store_review_new review_of(int64_t person, int64_t segment, uint64_t number,
                                                char key[40])
{
    struct store_review_new review = {.person = person,
                                      .segment = segment,
                                      .key = key,
                                      .submitted_ms = base_clock_unix_ms(),
                                      .seconds = 9.0};
    (void)snprintf(key, 40, "key-%016llx", (unsigned long long)number);
    memcpy(review.lease, &number, sizeof number);
    memcpy(review.body_hash, &number, sizeof number);
    return review;
}

static inline void review_segment(struct place *place, int64_t person, int64_t segment,
                                  uint64_t number, const struct store_mark *marks, size_t count)
{
    char key[40];
    struct base_error error = {0};
    struct store_review_new review = review_of(person, segment, number, key);
    review.marks = marks;
    review.mark_count = count;
    assert_ok(send_review(place->campaign, &review, &error), error);
    assert_int_equal(review.outcome, STORE_REVIEW_TAKEN);
}

/* Ids of all open segments, ascending, malloc'd. */
struct id_list {
    int64_t *ids;
    size_t count;
};
static inline bool id_list_add(void *context, const struct store_open_segment *segment)
{
    struct id_list *list = context;
    list->ids = realloc(list->ids, (list->count + 1) * sizeof *list->ids);
    assert_non_null(list->ids);
    list->ids[list->count++] = segment->id;
    return true;
}
static inline struct id_list open_segments(struct place *place)
{
    struct base_error error = {0};
    struct id_list list = {0};
    assert_ok(store_segments_open_each(place->store, id_list_add, &list, &error), error);
    return list;
}

/* A small disk of memory; *state is its folder, or NULL where there can be none. */
static inline int mount_disk(void **state)
{
    char *folder = strdup("/tmp/ebbmark-campaign-disk-XXXXXX");
    *state = NULL;
    if (folder == NULL || mkdtemp(folder) == NULL)
        return -1;
    if (mount("tmpfs", folder, "tmpfs", 0, "size=3m") == 0) {
        *state = folder;
    } else {
        (void)rmdir(folder);
        free(folder);
    }
    return 0;
}

static inline int unmount_disk(void **state)
{
    char *folder = *state;
    if (folder == NULL)
        return 0;
    int failed = umount2(folder, MNT_DETACH);
    (void)rmdir(folder);
    free(folder);
    return failed;
}

#endif
