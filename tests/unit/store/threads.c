/* Many threads at once: what each was told is what is there. cmocka's checks are for the main
 * thread, so the others count what went wrong. */
#include "support.h"

#include <pthread.h>

#define WRITERS 4
#define READERS 6 /* more than there are reading connections */
#define GROUPS 40
#define GROUP 5

struct worker {
    struct place *place;
    unsigned number;
    unsigned taken, wrong;
    bool *stop; /* set and read with __atomic calls */
};

static void *write_reviews(void *argument)
{
    struct worker *worker = argument;
    struct base_error why = {0};
    for (unsigned g = 0; g < GROUPS; g++) {
        struct store_review_new reviews[GROUP], *each[GROUP];
        char keys[GROUP][24];
        for (unsigned i = 0; i < GROUP; i++) {
            unsigned lease[2] = {worker->number, g * GROUP + i};
            (void)snprintf(keys[i], sizeof keys[i], "w%u-%u", lease[0], lease[1]);
            reviews[i] = a_review(worker->place, keys[i], 0);
            memcpy(reviews[i].lease, lease, sizeof lease);
            each[i] = &reviews[i];
        }
        if (!store_reviews_add(worker->place->store, each, GROUP, &why))
            worker->wrong++;
        for (unsigned i = 0; i < GROUP; i++)
            worker->taken += reviews[i].outcome == STORE_REVIEW_TAKEN ? 1 : 0;
    }
    return NULL;
}

struct order {
    int64_t last;
    unsigned wrong;
};

static bool see(void *context, const struct store_review_row *row)
{
    struct order *order = context;
    order->wrong += row->review != order->last + 1 || row->mark == NULL ? 1 : 0;
    order->last = row->review;
    return true;
}

static void *read_reviews(void *argument)
{
    struct worker *worker = argument;
    struct base_error why = {0};
    int64_t last = 0;
    while (!__atomic_load_n(worker->stop, __ATOMIC_ACQUIRE)) {
        struct base_arena *arena = base_arena_new(0);
        struct order order = {0};
        struct store_segment segment;
        struct store_points points;
        int64_t newest, count;
        bool ok = arena != NULL &&
                  store_reviews_high_water(worker->place->store, &newest, &count, &why) &&
                  store_segment_by_id(worker->place->store, arena, 1, &segment, &why) &&
                  store_points_read(worker->place->store, arena, 1, &points, &why) &&
                  store_reviews_each(worker->place->store, INT64_MAX, see, &order, &why);
        /* Never less than was seen before: what is committed is seen by all. */
        if (!ok || newest < last || segment.looks < newest || order.last < segment.looks ||
            order.wrong > 0)
            worker->wrong++;
        last = newest;
        base_arena_free(arena);
    }
    return NULL;
}

static void threads_that_write_and_read_at_once_agree(void **state)
{
    struct place *place = *state;
    struct worker writers[WRITERS], readers[READERS];
    pthread_t threads[WRITERS + READERS];
    struct store_counts counts;
    bool stop = false;
    unsigned taken = 0;
    for (unsigned i = 0; i < READERS; i++) {
        readers[i] = (struct worker){.place = place, .stop = &stop};
        assert_int_equal(pthread_create(&threads[WRITERS + i], NULL, read_reviews, &readers[i]), 0);
    }
    for (unsigned i = 0; i < WRITERS; i++) {
        writers[i] = (struct worker){.place = place, .number = i};
        assert_int_equal(pthread_create(&threads[i], NULL, write_reviews, &writers[i]), 0);
    }
    for (unsigned i = 0; i < WRITERS; i++) {
        assert_int_equal(pthread_join(threads[i], NULL), 0);
        assert_int_equal(writers[i].wrong, 0);
        taken += writers[i].taken;
    }
    __atomic_store_n(&stop, true, __ATOMIC_RELEASE);
    for (unsigned i = 0; i < READERS; i++) {
        assert_int_equal(pthread_join(threads[WRITERS + i], NULL), 0);
        assert_int_equal(readers[i].wrong, 0);
    }
    assert_int_equal(taken, WRITERS * GROUPS * GROUP);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, taken);
}

/* ---- the same review sent by many at once ---- */

static void *send_the_same(void *argument)
{
    struct worker *worker = argument;
    struct base_error why = {0};
    for (unsigned i = 0; i < GROUPS; i++) {
        char key[16];
        (void)snprintf(key, sizeof key, "k%u", i);
        struct store_review_new review = a_review(worker->place, key, (unsigned char)i);
        if (!add_review(worker->place->store, &review, &why))
            worker->wrong++;
        worker->taken += review.outcome == STORE_REVIEW_TAKEN ? 1 : 0;
        worker->wrong +=
            review.outcome != STORE_REVIEW_TAKEN && review.outcome != STORE_REVIEW_REPEATED ? 1 : 0;
    }
    return NULL;
}

static void a_review_sent_by_many_threads_at_once_is_taken_by_one_of_them(void **state)
{
    struct place *place = *state;
    struct worker workers[WRITERS];
    pthread_t threads[WRITERS];
    struct store_counts counts;
    unsigned taken = 0;
    for (unsigned i = 0; i < WRITERS; i++) {
        workers[i] = (struct worker){.place = place};
        assert_int_equal(pthread_create(&threads[i], NULL, send_the_same, &workers[i]), 0);
    }
    for (unsigned i = 0; i < WRITERS; i++) {
        assert_int_equal(pthread_join(threads[i], NULL), 0);
        assert_int_equal(workers[i].wrong, 0);
        taken += workers[i].taken;
    }
    assert_int_equal(taken, GROUPS);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, GROUPS);
}

/* ---- a batch begun, and a run stored, by several at once ---- */

static void *add_runs(void *argument)
{
    struct worker *worker = argument;
    struct base_error why = {0};
    const struct store_candidate candidate = {
        .id = 1, .star = 1, .light_curve = 1, .probability = 0.5};
    for (unsigned i = 0; i < 10; i++) {
        struct store_run_new run = {.run = {.newest_review = 1, .settings = "{}", .fit = "{}"},
                                    .candidates = &candidate,
                                    .candidate_count = 1};
        if (!store_run_add(worker->place->store, &run, &why))
            worker->wrong++;
    }
    return NULL;
}

static void runs_stored_at_once_get_a_number_each(void **state)
{
    struct place *place = *state;
    struct worker workers[WRITERS];
    pthread_t threads[WRITERS];
    struct store_run *runs;
    size_t count;
    struct store_review_new review = a_review(place, "k", 1);
    must(add_review(place->store, &review, &error));
    for (unsigned i = 0; i < WRITERS; i++) {
        workers[i] = (struct worker){.place = place};
        assert_int_equal(pthread_create(&threads[i], NULL, add_runs, &workers[i]), 0);
    }
    for (unsigned i = 0; i < WRITERS; i++) {
        assert_int_equal(pthread_join(threads[i], NULL), 0);
        assert_int_equal(workers[i].wrong, 0);
    }
    must(store_runs_list(place->store, place->arena, 0, 1000, &runs, &count, &error));
    assert_int_equal(count, 10 * WRITERS);
    for (size_t i = 0; i < count; i++)
        assert_int_equal(runs[i].id, (int64_t)(count - i));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(threads_that_write_and_read_at_once_agree),
        IN_PLACE(a_review_sent_by_many_threads_at_once_is_taken_by_one_of_them),
        IN_PLACE(runs_stored_at_once_get_a_number_each),
    };
    return cmocka_run_group_tests_name("store: threads", tests, NULL, NULL);
}
