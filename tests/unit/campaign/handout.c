/* Handing out segments. */
#include "support.h"

#include <pthread.h>

#include "../../../server/campaign/inside.h"
#include "../../../server/campaign/seen.h"

static bool take(struct place *place, int64_t person, struct campaign_lease *lease)
{
    struct base_error error = {0};
    struct base_arena *arena = base_arena_new(0);
    bool found = false;
    assert_ok(campaign_lease_take(place->campaign, arena, person, lease, &found, &error), error);
    base_arena_free(arena);
    lease->segment.time_reference = NULL; /* went with the arena */
    return found;
}

static void start(struct place *place, unsigned stars, unsigned segments)
{
    struct base_error error = {0};
    place_open(place);
    (void)add_flat_stars(place, "first", 1, stars, segments);
    assert_ok(handout_refresh(place->campaign->handout, &error), error);
}

static void nobody_gets_a_segment_twice(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    bool given[64] = {false};
    start(&place, 6, 5);
    int64_t person = add_person(&place, "one");
    for (unsigned i = 0; i < 30; i++) {
        assert_true(take(&place, person, &lease));
        assert_in_range(lease.segment.id, 1, 63);
        assert_false(given[lease.segment.id]);
        given[lease.segment.id] = true;
        /* Half are answered, half stay out: neither kind comes back. */
        if (i % 2 == 0)
            review_segment(&place, person, lease.segment.id, i + 1, NULL, 0);
    }
    assert_false(take(&place, person, &lease));
    place_close(&place);
}

static void what_was_seen_is_remembered_over_a_restart(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    start(&place, 1, 3);
    int64_t person = add_person(&place, "one");
    assert_true(take(&place, person, &lease));
    int64_t seen = lease.segment.id;
    review_segment(&place, person, seen, 1, NULL, 0);
    place_shut(&place);
    place_open_again(&place);
    for (unsigned i = 0; i < 2; i++) {
        assert_true(take(&place, person, &lease));
        assert_int_not_equal(lease.segment.id, seen);
    }
    assert_false(take(&place, person, &lease));
    place_close(&place);
}

static void a_segment_is_out_to_no_more_people_than_it_needs(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    start(&place, 1, 1);
    change_setting(&place, "looks_least", "1");
    change_setting(&place, "looks_most", "3");
    int64_t people[4];
    for (unsigned i = 0; i < 4; i++) {
        char handle[16];
        (void)snprintf(handle, sizeof handle, "person %u", i);
        people[i] = add_person(&place, handle);
    }
    assert_true(take(&place, people[0], &lease));
    assert_true(take(&place, people[1], &lease));
    review_segment(&place, people[1], lease.segment.id, 1, NULL, 0);
    assert_true(take(&place, people[2], &lease));
    assert_false(take(&place, people[3], &lease));
    change_setting(&place, "looks_most", "4");
    assert_true(take(&place, people[3], &lease));
    place_close(&place);
}

static void the_segment_with_the_fewest_looks_goes_first(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    start(&place, 1, 4);
    int64_t one = add_person(&place, "one"), two = add_person(&place, "two");
    for (int64_t segment = 1; segment <= 3; segment++)
        review_segment(&place, one, segment, (uint64_t)segment, NULL, 0);
    assert_true(take(&place, two, &lease));
    assert_int_equal(lease.segment.id, 4);
    place_close(&place);
}

/* Time is what the caller says it is, so a lease can end without waiting. */
static void an_ended_lease_gives_its_place_back(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    start(&place, 1, 1);
    struct handout *handout = place.campaign->handout;
    int64_t segment = 0;
    bool found = false;
    struct handout_wish wish = {.person = 1, .looks_most = 1, .now_ms = 1000, .expires_ms = 2000};
    assert_ok(handout_take(handout, &wish, &segment, &found, &error), error);
    assert_true(found);
    wish = (struct handout_wish){.person = 2, .looks_most = 1, .now_ms = 1999, .expires_ms = 3000};
    assert_ok(handout_take(handout, &wish, &segment, &found, &error), error);
    assert_false(found);
    wish.now_ms = 2000;
    assert_ok(handout_take(handout, &wish, &segment, &found, &error), error);
    assert_true(found);
    assert_int_equal(handout_figures_now(handout).live, 1);
    /* The first holder may look on for a while, and then no longer. */
    assert_true(handout_may_see(handout, 1, segment, 2500, &error));
    assert_false(handout_may_see(handout, 1, segment, 2000 + HANDOUT_REMEMBER_MS, &error));
    assert_int_equal(error.kind, BASE_NONE);
    place_close(&place);
}

static void a_person_holds_a_bounded_number_of_segments(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    struct base_error error = {0};
    bool found;
    start(&place, 1, CAMPAIGN_LEASES_HELD_MAX + 5);
    int64_t person = add_person(&place, "one");
    for (unsigned i = 0; i < CAMPAIGN_LEASES_HELD_MAX; i++)
        assert_true(take(&place, person, &lease));
    struct base_arena *arena = base_arena_new(0);
    assert_false(campaign_lease_take(place.campaign, arena, person, &lease, &found, &error));
    assert_int_equal(error.kind, BASE_BUSY);
    assert_non_null(strstr(error.sentence, "100"));
    review_segment(&place, person, lease.segment.id, 1, NULL, 0);
    assert_ok(campaign_lease_take(place.campaign, arena, person, &lease, &found, &error), error);
    assert_true(found);
    base_arena_free(arena);
    place_close(&place);
}

static void a_withdrawn_batch_is_not_handed_out(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    struct base_error error = {0};
    start(&place, 1, 40);
    int64_t second = add_flat_stars(&place, "second", 100, 1, 2);
    assert_ok(handout_refresh(place.campaign->handout, &error), error);
    int64_t person = add_person(&place, "one");
    /* Behind the campaign's back, so that the queue hears of it only from the segments. */
    assert_ok(store_batch_withdraw(place.store, 1, 5, &error), error);
    for (unsigned i = 0; i < 2; i++) {
        assert_true(take(&place, person, &lease));
        assert_int_equal(lease.segment.batch, second);
    }
    assert_false(take(&place, person, &lease));
    assert_ok(campaign_batch_withdraw(place.campaign, second, &error), error);
    assert_int_equal(campaign_figures_now(place.campaign).segments_queued, 0);
    place_close(&place);
}

static void a_refresh_keeps_leases_and_looks(void **state)
{
    (void)state;
    struct place place;
    struct campaign_lease lease;
    struct base_error error = {0};
    start(&place, 1, 1);
    change_setting(&place, "looks_least", "1");
    change_setting(&place, "looks_most", "2");
    int64_t one = add_person(&place, "one"), two = add_person(&place, "two");
    int64_t three = add_person(&place, "three");
    assert_true(take(&place, one, &lease));
    assert_true(take(&place, two, &lease));
    assert_ok(handout_refresh(place.campaign->handout, &error), error);
    assert_false(take(&place, three, &lease));
    review_segment(&place, one, 1, 1, NULL, 0);
    assert_ok(handout_refresh(place.campaign->handout, &error), error);
    assert_false(take(&place, three, &lease));
    place_close(&place);
}

/* ---- many at once ---- */

#define THREADS 8
#define PEOPLE 24
#define LOOKS_MOST 5

struct crowd {
    struct place *place;
    const int64_t *people;
    unsigned thread;
    uint64_t reviews;
};

static void *work(void *argument)
{
    struct crowd *crowd = argument;
    bool left[PEOPLE / THREADS] = {true, true, true};
    for (bool any = true; any;) {
        any = false;
        for (unsigned i = 0; i < PEOPLE / THREADS; i++) {
            struct campaign_lease lease;
            int64_t person = crowd->people[crowd->thread * (PEOPLE / THREADS) + i];
            left[i] = left[i] && take(crowd->place, person, &lease);
            if (!left[i])
                continue;
            any = true;
            uint64_t number = (uint64_t)person << 32 | (uint64_t)lease.segment.id;
            review_segment(crowd->place, person, lease.segment.id, number, NULL, 0);
            crowd->reviews++;
        }
    }
    return NULL;
}

static void eight_threads_never_overfill_a_segment(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    start(&place, 10, 6);
    change_setting(&place, "looks_least", "1");
    change_setting(&place, "looks_most", "5");
    int64_t people[PEOPLE];
    for (unsigned i = 0; i < PEOPLE; i++) {
        char handle[16];
        (void)snprintf(handle, sizeof handle, "person %u", i);
        people[i] = add_person(&place, handle);
    }
    struct crowd crowd[THREADS];
    pthread_t threads[THREADS];
    for (unsigned i = 0; i < THREADS; i++) {
        crowd[i] = (struct crowd){&place, people, i, 0};
        assert_int_equal(pthread_create(&threads[i], NULL, work, &crowd[i]), 0);
    }
    uint64_t reviews = 0;
    for (unsigned i = 0; i < THREADS; i++) {
        (void)pthread_join(threads[i], NULL);
        reviews += crowd[i].reviews;
    }
    /* Everybody went on until nothing was left for them, so each segment is full. */
    assert_int_equal(reviews, 60 * LOOKS_MOST);
    struct base_arena *arena = base_arena_new(0);
    for (int64_t id = 1; id <= 60; id++) {
        struct store_segment segment;
        assert_ok(store_segment_by_id(place.store, arena, id, &segment, &error), error);
        assert_int_equal(segment.looks, LOOKS_MOST);
    }
    for (unsigned i = 0; i < PEOPLE; i++) {
        int64_t *seen = NULL;
        size_t distinct = 0;
        struct store_own_totals totals;
        struct store_own_review *own = NULL;
        size_t own_count = 0;
        assert_ok(store_person_segments(place.store, arena, people[i], &seen, &distinct, &error),
                  error);
        assert_ok(store_person_record(place.store, arena, people[i], 0, 1, &totals, &own,
                                      &own_count, &error),
                  error);
        assert_int_equal(totals.looks, distinct);
    }
    base_arena_free(arena);
    assert_int_equal(campaign_figures_now(place.campaign).leases_live, 0);
    place_close(&place);
}

static void memory_of_who_saw_what_is_bounded(void **state)
{
    (void)state;
    struct seen seen = {.slots_max = 1000, .people_max = 50};
    for (int64_t person = 1; person <= 400; person++) {
        struct seen_person *at = seen_touch(&seen, person);
        assert_non_null(at);
        at->state = SEEN_KNOWN;
        for (int64_t segment = 1; segment <= person % 90; segment++)
            assert_true(seen_add(&seen, at, segment * 7));
        seen_trim(&seen);
        assert_true(seen.slots <= 1000 || seen.count == 1);
        assert_true(seen.count <= 50);
    }
    /* The newest is there whole, and nothing else is said to be seen. */
    const struct seen_person *newest = seen_find(&seen, 400);
    assert_non_null(newest);
    for (int64_t id = 1; id <= 700; id++)
        assert_int_equal(seen_has(newest, id), id % 7 == 0 && id / 7 <= 400 % 90);
    assert_null(seen_find(&seen, 1));
    seen_free(&seen);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(nobody_gets_a_segment_twice),
        cmocka_unit_test(what_was_seen_is_remembered_over_a_restart),
        cmocka_unit_test(a_segment_is_out_to_no_more_people_than_it_needs),
        cmocka_unit_test(the_segment_with_the_fewest_looks_goes_first),
        cmocka_unit_test(an_ended_lease_gives_its_place_back),
        cmocka_unit_test(a_person_holds_a_bounded_number_of_segments),
        cmocka_unit_test(a_withdrawn_batch_is_not_handed_out),
        cmocka_unit_test(a_refresh_keeps_leases_and_looks),
        cmocka_unit_test(eight_threads_never_overfill_a_segment),
        cmocka_unit_test(memory_of_who_saw_what_is_bounded),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
