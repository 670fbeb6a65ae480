/* What the tests of the store share: a campaign in a folder of its own, with one star. */
#ifndef TEST_STORE_SUPPORT_H
#define TEST_STORE_SUPPORT_H

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/store.h"

#define POINTS 300
#define REFERENCE "BJD_TDB - 2460000"

struct place {
    char folder[64], path[96];
    struct store *store;
    struct base_arena *arena;
    int64_t person, batch;
    struct store_open_segment segment;
};

static struct base_error error;

/* The call works, or the test fails with its sentence. */
#define must(call)                                                                                 \
    do {                                                                                           \
        error = (struct base_error){0};                                                            \
        if (!(call))                                                                               \
            fail_msg("%s: %s", #call, error.sentence);                                             \
    } while (0)

/* The call fails in this way, with a whole sentence. */
#define must_fail(call, wanted)                                                                    \
    do {                                                                                           \
        error = (struct base_error){0};                                                            \
        assert_false(call);                                                                        \
        if (error.kind != (wanted))                                                                \
            fail_msg("%s: %s: %s", #call, base_error_kind_name(error.kind), error.sentence);       \
        assert_true(strlen(error.sentence) > 10);                                                  \
        assert_int_equal(error.sentence[strlen(error.sentence) - 1], '.');                         \
    } while (0)

/* A name in the place's folder, in one of four buffers in turn. */
static inline const char *in_folder(const struct place *place, const char *name)
{
    static char paths[4][128];
    static unsigned turn;
    char *path = paths[turn++ % 4];
    (void)snprintf(path, sizeof paths[0], "%s/%s", place->folder, name);
    return path;
}

static inline struct store *open_store(const char *path)
{
    const struct store_options options = {.readers = 2};
    struct store *store = NULL;
    must(store_open(path, &options, &store, &error));
    return store;
}

static inline void make_points(double time[POINTS], float flux[POINTS], float trend[POINTS])
{
    for (size_t i = 0; i < POINTS; i++) {
        time[i] = 100.0 + 0.02 * (double)i;
        flux[i] = (float)(1e-4 * (double)(i % 7));
        trend[i] = 1e-5f;
    }
}

/* Load one star of one segment as a file of its own, whose bytes hash to `hash` throughout. */
static inline bool add_star(struct store *store, int64_t batch, const char *name,
                            unsigned char hash, struct base_error *why)
{
    double time[POINTS];
    float flux[POINTS], trend[POINTS];
    make_points(time, flux, trend);
    const struct store_span spans[] = {{0, POINTS, time[0], time[POINTS - 1]}};
    const struct store_light_curve_new curve = {
        .star = {name, NAN, 10.0, NAN, NAN, NAN, NAN},
        .time_reference = REFERENCE,
        .points = {.count = POINTS, .time = time, .flux = flux, .trend = trend},
        .median_flux = 1000.0,
        .cadence_d = 0.02,
        .noise_point = 1e-4,
        .noise_window = {1e-5, 2e-5, 3e-5, NAN},
        .segments = spans,
        .segment_count = 1};
    struct store_file_new file = {.batch = batch,
                                  .label = name,
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .bytes = 10,
                                  .curves = &curve,
                                  .curve_count = 1};
    memset(file.sha256, hash, sizeof file.sha256);
    return store_files_add(store, &file, 1, why);
}

static inline bool take_first(void *context, const struct store_open_segment *segment)
{
    *(struct store_open_segment *)context = *segment;
    return false;
}

/* A person, a finished batch, a star, its segment. */
static inline void fill_place(struct place *place)
{
    bool resumed = true;
    place->store = open_store(place->path);
    must(store_person_add(place->store, "Ada", "ada", "hash", STORE_REVIEWER, 1, &place->person,
                          &error));
    must(store_batch_begin(place->store, "first", "here", 1, &place->batch, &resumed, &error));
    assert_false(resumed);
    must(add_star(place->store, place->batch, "RB-0001", 1, &error));
    must(store_batch_finish(place->store, place->batch, 2, &error));
    must(store_segments_open_each(place->store, take_first, &place->segment, &error));
    assert_int_not_equal(place->segment.id, 0);
}

static inline struct place *new_place(const char *where)
{
    struct place *place = calloc(1, sizeof *place);
    assert_non_null(place);
    (void)snprintf(place->folder, sizeof place->folder, "%s/ebbmark-store-XXXXXX", where);
    assert_non_null(mkdtemp(place->folder));
    (void)snprintf(place->path, sizeof place->path, "%s/campaign.db", place->folder);
    place->arena = base_arena_new(0);
    assert_non_null(place->arena);
    return place;
}

static inline int open_empty(void **state)
{
    *state = new_place("/tmp");
    return 0;
}

static inline int open_place(void **state)
{
    struct place *place = new_place("/tmp");
    fill_place(place);
    *state = place;
    return 0;
}

static inline int close_place(void **state)
{
    struct place *place = *state;
    char command[128];
    base_arena_free(place->arena);
    store_close(place->store);
    (void)snprintf(command, sizeof command, "rm -rf %s", place->folder);
    assert_int_equal(system(command), 0);
    free(place);
    return 0;
}

static inline void close_store(struct place *place)
{
    store_close(place->store);
    place->store = NULL;
}

static inline void reopen(struct place *place)
{
    close_store(place);
    place->store = open_store(place->path);
}

/* A review with one mark; the lease is `lease` throughout. */
static inline struct store_review_new a_review(const struct place *place, const char *key,
                                               unsigned char lease)
{
    static const struct store_mark marks[] = {
        {.starts_d = 101.0, .ends_d = 101.2, .low = 0.99, .high = 1.0, .sure = true}};
    struct store_review_new review = {.person = place->person,
                                      .segment = place->segment.id,
                                      .key = key,
                                      .submitted_ms = 5,
                                      .seconds = 7.5,
                                      .conditions = STORE_BREAK,
                                      .marks = marks,
                                      .mark_count = 1};
    memset(review.lease, lease, sizeof review.lease);
    memset(review.body_hash, 0x55, sizeof review.body_hash);
    return review;
}

static inline bool add_review(struct store *store, struct store_review_new *review,
                              struct base_error *why)
{
    struct store_review_new *one[] = {review};
    return store_reviews_add(store, one, 1, why);
}

#define IN_PLACE(test) cmocka_unit_test_setup_teardown(test, open_place, close_place)
#define IN_EMPTY(test) cmocka_unit_test_setup_teardown(test, open_empty, close_place)

#endif
