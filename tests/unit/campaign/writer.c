/* The writer of reviews: everybody is told once, many share a commit, failures hurt nobody else. */
#include "support.h"

#include <signal.h>
#include <stdatomic.h>
#include <sys/resource.h>

#define THREADS 8
#define REVIEWS_EACH 1250 /* 10,000 in all */

struct parcel {
    struct store_review_new review;
    char key[40];
    struct store_mark mark;
    atomic_uint told;
    bool ok;
    struct base_error error;
};

static void told(void *context, bool ok, const struct base_error *error)
{
    struct parcel *parcel = context;
    parcel->ok = ok;
    if (error != NULL)
        parcel->error = *error;
    (void)atomic_fetch_add(&parcel->told, 1);
}

static void fill(struct parcel *parcel, int64_t person, int64_t segment, uint64_t number)
{
    parcel->review = review_of(person, segment, number, parcel->key);
    parcel->mark = (struct store_mark){.starts_d = 1.0,
                                       .ends_d = 1.0 + 1e-6 * (double)(number % 1000 + 1),
                                       .low = 0.9,
                                       .high = 1.0};
    parcel->review.marks = &parcel->mark;
    parcel->review.mark_count = 1;
    atomic_init(&parcel->told, 0);
}

/* Submit, and come again while the writer says that it is busy. */
static void submit(struct campaign *campaign, struct parcel *parcel)
{
    struct base_error error = {0};
    while (!campaign_review_submit(campaign, &parcel->review, told, parcel, &error)) {
        assert_int_equal(error.kind, BASE_BUSY);
        (void)usleep(1000);
    }
}

static void wait_for(struct parcel *parcels, size_t count)
{
    double until = base_clock_monotonic_s() + 60.0;
    for (size_t i = 0; i < count; i++)
        while (atomic_load(&parcels[i].told) == 0) {
            assert_true(base_clock_monotonic_s() < until);
            (void)usleep(500);
        }
}

struct sender {
    struct campaign *campaign;
    struct parcel *parcels;
};

static void *send_all(void *argument)
{
    const struct sender *sender = argument;
    for (size_t i = 0; i < REVIEWS_EACH; i++)
        submit(sender->campaign, &sender->parcels[i]);
    return NULL;
}

static void ten_thousand_reviews_from_eight_threads_are_each_told_once(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    pthread_t threads[THREADS];
    struct sender senders[THREADS];
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 50);
    change_setting(&place, "run_after_reviews", "0");
    struct parcel *parcels = calloc(THREADS * REVIEWS_EACH, sizeof *parcels);
    assert_non_null(parcels);
    int64_t people[THREADS];
    for (unsigned t = 0; t < THREADS; t++) {
        char handle[16];
        (void)snprintf(handle, sizeof handle, "person %u", t);
        people[t] = add_person(&place, handle);
    }
    for (size_t i = 0; i < THREADS * REVIEWS_EACH; i++)
        fill(&parcels[i], people[i / REVIEWS_EACH], (int64_t)(i % 50) + 1, i + 1);
    for (unsigned t = 0; t < THREADS; t++) {
        senders[t] = (struct sender){place.campaign, parcels + (size_t)t * REVIEWS_EACH};
        assert_int_equal(pthread_create(&threads[t], NULL, send_all, &senders[t]), 0);
    }
    for (unsigned t = 0; t < THREADS; t++)
        (void)pthread_join(threads[t], NULL);
    wait_for(parcels, THREADS * REVIEWS_EACH);
    int64_t newest = 0, count = 0;
    assert_ok(store_reviews_high_water(place.store, &newest, &count, &error), error);
    assert_int_equal(count, THREADS * REVIEWS_EACH);
    bool *ids = calloc((size_t)newest + 1, sizeof *ids);
    assert_non_null(ids);
    for (size_t i = 0; i < THREADS * REVIEWS_EACH; i++) {
        assert_int_equal(atomic_load(&parcels[i].told), 1);
        assert_true(parcels[i].ok);
        assert_int_equal(parcels[i].review.outcome, STORE_REVIEW_TAKEN);
        assert_in_range(parcels[i].review.review, 1, newest);
        assert_false(ids[parcels[i].review.review]);
        ids[parcels[i].review.review] = true;
    }
    free(ids);
    free(parcels);
    place_close(&place);
}

static void reviews_that_wait_together_share_a_commit(void **state)
{
    (void)state;
    enum { MANY = 2000 };
    struct place place;
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 5);
    change_setting(&place, "run_after_reviews", "0");
    int64_t person = add_person(&place, "one");
    struct parcel *parcels = calloc(MANY, sizeof *parcels);
    assert_non_null(parcels);
    for (size_t i = 0; i < MANY; i++)
        fill(&parcels[i], person, (int64_t)(i % 5) + 1, i + 1);
    for (size_t i = 0; i < MANY; i++)
        submit(place.campaign, &parcels[i]);
    wait_for(parcels, MANY);
    /* The group's figures come after its last call. */
    struct campaign_figures figures = campaign_figures_now(place.campaign);
    for (int i = 0; i < 2000 && figures.reviews_taken < MANY; i++) {
        (void)usleep(1000);
        figures = campaign_figures_now(place.campaign);
    }
    assert_int_equal(figures.reviews_taken, MANY);
    assert_int_equal(figures.reviews_failed, 0);
    assert_true(figures.review_groups >= MANY / 256);
    assert_true(figures.review_groups <= MANY / 2);
    free(parcels);
    place_close(&place);
}

static void a_review_sent_twice_is_stored_once(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    char key[40];
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 2);
    int64_t person = add_person(&place, "one");
    struct store_review_new review = review_of(person, 1, 7, key);
    assert_ok(send_review(place.campaign, &review, &error), error);
    int64_t id = review.review;
    struct store_review_new again = review_of(person, 1, 7, key);
    assert_ok(send_review(place.campaign, &again, &error), error);
    assert_int_equal(again.outcome, STORE_REVIEW_REPEATED);
    assert_int_equal(again.review, id);
    struct store_review_new other = review_of(person, 1, 7, key);
    other.body_hash[0] ^= 1;
    assert_ok(send_review(place.campaign, &other, &error), error);
    assert_int_equal(other.outcome, STORE_REVIEW_KEY_REUSED);
    place_close(&place);
}

static void a_review_that_cannot_be_stored_takes_no_other_with_it(void **state)
{
    (void)state;
    enum { MANY = 300 };
    struct place place;
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 5);
    int64_t person = add_person(&place, "one");
    struct parcel *parcels = calloc(MANY, sizeof *parcels);
    assert_non_null(parcels);
    for (size_t i = 0; i < MANY; i++)
        fill(&parcels[i], i % 100 == 50 ? person + 999 : person, (int64_t)(i % 5) + 1, i + 1);
    for (size_t i = 0; i < MANY; i++)
        submit(place.campaign, &parcels[i]);
    wait_for(parcels, MANY);
    for (size_t i = 0; i < MANY; i++)
        assert_int_equal(parcels[i].ok, i % 100 != 50);
    free(parcels);
    place_close(&place);
}

static void closing_stores_what_waits(void **state)
{
    (void)state;
    enum { MANY = 1500 };
    struct place place;
    struct base_error error = {0};
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 5);
    change_setting(&place, "run_after_reviews", "0");
    int64_t person = add_person(&place, "one"), newest = 0, count = 0;
    struct parcel *parcels = calloc(MANY, sizeof *parcels);
    assert_non_null(parcels);
    for (size_t i = 0; i < MANY; i++)
        fill(&parcels[i], person, (int64_t)(i % 5) + 1, i + 1);
    for (size_t i = 0; i < MANY; i++)
        submit(place.campaign, &parcels[i]);
    place_shut(&place);
    for (size_t i = 0; i < MANY; i++)
        assert_true(atomic_load(&parcels[i].told) == 1 && parcels[i].ok);
    place_open_again(&place);
    assert_ok(store_reviews_high_water(place.store, &newest, &count, &error), error);
    assert_int_equal(count, MANY);
    free(parcels);
    place_close(&place);
}

/* Send reviews until one is refused; returns how many were stored. Each waits for its end. */
static size_t send_until_refused(struct place *place, int64_t person, uint64_t first, size_t most,
                                 struct base_error *error)
{
    size_t stored = 0;
    for (; stored < most; stored++) {
        struct parcel parcel = {0};
        struct store_mark marks[50];
        fill(&parcel, person, (int64_t)(stored % 5) + 1, first + stored);
        for (size_t m = 0; m < 50; m++)
            marks[m] = parcel.mark;
        parcel.review.marks = marks;
        parcel.review.mark_count = 50;
        submit(place->campaign, &parcel);
        wait_for(&parcel, 1);
        if (!parcel.ok) {
            *error = parcel.error;
            break;
        }
    }
    return stored;
}

/* A full disk without a disk: files may not grow past a limit. */
static void a_file_that_cannot_grow_refuses_and_recovers(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct rlimit before, tight;
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 1, 5);
    change_setting(&place, "run_after_reviews", "0");
    int64_t person = add_person(&place, "one"), newest = 0, count = 0;
    (void)signal(SIGXFSZ, SIG_IGN);
    assert_int_equal(getrlimit(RLIMIT_FSIZE, &before), 0);
    tight = before;
    tight.rlim_cur = 1u << 20;
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &tight), 0);
    size_t stored = send_until_refused(&place, person, 1, 4000, &error);
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &before), 0);
    assert_true(stored < 4000);
    assert_true(error.sentence[0] != '\0');
    assert_ok(store_reviews_high_water(place.store, &newest, &count, &error), error);
    assert_int_equal(count, stored);
    assert_int_equal(send_until_refused(&place, person, 100000, 20, &error), 20);
    place_close(&place);
}

static void a_full_disk_refuses_and_recovers(void **state)
{
    const char *folder = *state;
    struct place place;
    struct base_error error = {0};
    if (folder == NULL) {
        print_message("a small disk could not be mounted here; that needs root\n");
        skip();
    }
    place_open_in(&place, folder);
    (void)add_flat_stars(&place, "first", 1, 1, 5);
    change_setting(&place, "run_after_reviews", "0");
    int64_t person = add_person(&place, "one"), newest = 0, count = 0;
    size_t stored = send_until_refused(&place, person, 1, 20000, &error);
    assert_true(stored < 20000);
    assert_int_equal(error.kind, BASE_DISK_FULL);
    assert_ok(store_reviews_high_water(place.store, &newest, &count, &error), error);
    assert_int_equal(count, stored);
    assert_int_equal(mount("tmpfs", folder, "tmpfs", MS_REMOUNT, "size=40m"), 0);
    assert_int_equal(send_until_refused(&place, person, 100000, 20, &error), 20);
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(ten_thousand_reviews_from_eight_threads_are_each_told_once),
        cmocka_unit_test(reviews_that_wait_together_share_a_commit),
        cmocka_unit_test(a_review_sent_twice_is_stored_once),
        cmocka_unit_test(a_review_that_cannot_be_stored_takes_no_other_with_it),
        cmocka_unit_test(closing_stores_what_waits),
        cmocka_unit_test(a_file_that_cannot_grow_refuses_and_recovers),
        cmocka_unit_test_setup_teardown(a_full_disk_refuses_and_recovers, mount_disk, unmount_disk),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
