/* Sealed leases, who may see a segment, and what a review's marks must be like. */
#include "support.h"

#include <math.h>
#include <sodium.h>

#include "../../../server/campaign/inside.h"

struct scene {
    struct place place;
    struct base_arena *arena;
    int64_t one, two;
};

static void start(struct scene *scene)
{
    struct base_error error = {0};
    place_open(&scene->place);
    (void)add_flat_stars(&scene->place, "first", 1, 1, 4);
    assert_ok(handout_refresh(scene->place.campaign->handout, &error), error);
    scene->one = add_person(&scene->place, "one");
    scene->two = add_person(&scene->place, "two");
    scene->arena = base_arena_new(0);
}

static void stop(struct scene *scene)
{
    base_arena_free(scene->arena);
    place_close(&scene->place);
}

static struct campaign_lease take(struct scene *scene, int64_t person)
{
    struct base_error error = {0};
    struct campaign_lease lease;
    bool found = false;
    assert_ok(
        campaign_lease_take(scene->place.campaign, scene->arena, person, &lease, &found, &error),
        error);
    assert_true(found);
    return lease;
}

static void a_lease_says_whose_and_of_what_it_is(void **state)
{
    (void)state;
    struct scene scene;
    struct campaign_lease_read read;
    struct base_error error = {0};
    start(&scene);
    int64_t before = base_clock_unix_ms();
    struct campaign_lease lease = take(&scene, scene.one);
    assert_true(strlen(lease.text) < CAMPAIGN_LEASE_SIZE);
    assert_ok(campaign_lease_open(scene.place.campaign, lease.text, &read, &error), error);
    assert_int_equal(read.person, scene.one);
    assert_int_equal(read.segment, lease.segment.id);
    assert_int_equal(read.expires_ms, lease.expires_ms);
    assert_in_range(read.expires_ms - before, 15 * 60000, 15 * 60000 + 5000);
    assert_false(read.expired);
    stop(&scene);
}

static void a_lease_holds_over_a_restart(void **state)
{
    (void)state;
    struct scene scene;
    struct campaign_lease_read read;
    struct base_error error = {0};
    start(&scene);
    struct campaign_lease lease = take(&scene, scene.one);
    place_shut(&scene.place);
    place_open_again(&scene.place);
    struct campaign *campaign = scene.place.campaign;
    assert_ok(campaign_lease_open(campaign, lease.text, &read, &error), error);
    assert_int_equal(read.segment, lease.segment.id);
    /* Memory of it is gone; the text itself is the proof. */
    assert_false(campaign_may_see(campaign, scene.one, lease.segment.id));
    assert_true(campaign_may_see_with(campaign, scene.one, lease.segment.id, lease.text));
    assert_false(campaign_may_see_with(campaign, scene.two, lease.segment.id, lease.text));
    assert_false(campaign_may_see_with(campaign, scene.one, lease.segment.id % 4 + 1, lease.text));
    assert_false(campaign_may_see_with(campaign, scene.one, lease.segment.id, NULL));
    stop(&scene);
}

static void a_forged_lease_is_no_lease(void **state)
{
    (void)state;
    struct scene scene;
    struct campaign_lease_read read;
    struct base_error error = {0};
    start(&scene);
    struct campaign_lease lease = take(&scene, scene.one);
    size_t length = strlen(lease.text);
    char text[2 * CAMPAIGN_LEASE_SIZE];
    /* Each of its characters matters. */
    for (size_t i = 0; i < length; i++) {
        memcpy(text, lease.text, length + 1);
        text[i] = text[i] == 'A' ? 'B' : 'A';
        assert_false(campaign_lease_open(scene.place.campaign, text, &read, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_string_equal(error.field, "lease");
    }
    for (size_t i = 0; i < length; i++) {
        memcpy(text, lease.text, i);
        text[i] = '\0';
        assert_false(campaign_lease_open(scene.place.campaign, text, &read, &error));
    }
    (void)snprintf(text, sizeof text, "%sA", lease.text);
    assert_false(campaign_lease_open(scene.place.campaign, text, &read, &error));
    (void)snprintf(text, sizeof text, "%s%s", lease.text, lease.text);
    assert_false(campaign_lease_open(scene.place.campaign, text, &read, &error));
    assert_false(campaign_lease_open(scene.place.campaign, "not base64 at all!", &read, &error));
    stop(&scene);
}

static void another_campaigns_lease_is_no_lease_here(void **state)
{
    (void)state;
    struct scene here, there;
    struct campaign_lease_read read;
    struct base_error error = {0};
    start(&here);
    start(&there);
    struct campaign_lease lease = take(&there, there.one);
    assert_false(campaign_lease_open(here.place.campaign, lease.text, &read, &error));
    stop(&there);
    stop(&here);
}

/* Sealed with the campaign's own key, as an old one would be. */
static void seal_old(struct scene *scene, int64_t person, int64_t segment, int64_t expires_ms,
                     char text[CAMPAIGN_LEASE_SIZE])
{
    enum { BODY = 41, SEALED = 24 + 16 + BODY };
    unsigned char body[BODY] = {1}, sealed[SEALED];
    const int64_t values[] = {person, segment, expires_ms};
    for (size_t v = 0; v < 3; v++)
        for (size_t i = 0; i < 8; i++)
            body[1 + 8 * v + i] = (unsigned char)((uint64_t)values[v] >> (8 * i));
    randombytes_buf(sealed, 24);
    (void)crypto_secretbox_easy(sealed + 24, body, sizeof body, sealed,
                                scene->place.campaign->lease_key);
    (void)sodium_bin2base64(text, CAMPAIGN_LEASE_SIZE, sealed, sizeof sealed,
                            sodium_base64_VARIANT_URLSAFE_NO_PADDING);
}

static void an_expired_lease_says_so_and_shows_for_a_day(void **state)
{
    (void)state;
    struct scene scene;
    struct campaign_lease_read read;
    struct base_error error = {0};
    char text[CAMPAIGN_LEASE_SIZE];
    start(&scene);
    int64_t now = base_clock_unix_ms();
    seal_old(&scene, scene.one, 2, now - 1000, text);
    assert_ok(campaign_lease_open(scene.place.campaign, text, &read, &error), error);
    assert_true(read.expired);
    assert_true(campaign_may_see_with(scene.place.campaign, scene.one, 2, text));
    seal_old(&scene, scene.one, 2, now - CAMPAIGN_LEASE_AFTER_MS - 1000, text);
    assert_false(campaign_may_see_with(scene.place.campaign, scene.one, 2, text));
    stop(&scene);
}

static void only_holders_and_reviewers_may_see(void **state)
{
    (void)state;
    struct scene scene;
    start(&scene);
    struct campaign *campaign = scene.place.campaign;
    struct campaign_lease lease = take(&scene, scene.one);
    assert_true(campaign_may_see(campaign, scene.one, lease.segment.id));
    assert_false(campaign_may_see(campaign, scene.two, lease.segment.id));
    for (int64_t other = 1; other <= 4; other++)
        assert_int_equal(campaign_may_see(campaign, scene.one, other), other == lease.segment.id);
    review_segment(&scene.place, scene.one, lease.segment.id, 1, NULL, 0);
    assert_true(campaign_may_see(campaign, scene.one, lease.segment.id));
    place_shut(&scene.place);
    place_open_again(&scene.place);
    assert_true(campaign_may_see(scene.place.campaign, scene.one, lease.segment.id));
    stop(&scene);
}

static void flux_is_the_segments_own(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct store_segment segment;
    struct campaign_flux flux;
    start(&scene);
    assert_ok(store_segment_by_id(scene.place.store, scene.arena, 3, &segment, &error), error);
    for (int view = CAMPAIGN_AS_MEASURED; view <= CAMPAIGN_TREND_REMOVED; view++) {
        assert_ok(campaign_flux_read(scene.place.campaign, scene.arena, &segment,
                                     (enum campaign_view)view, &flux, &error),
                  error);
        assert_int_equal(flux.count, 40);
        assert_true(flux.time[0] == 20.0 && flux.time[39] == 29.75);
        assert_true(flux.flux[0] == 1.0 && flux.median_flux == 1000.0);
        assert_string_equal(flux.time_reference, "BJD_TDB - 2457000");
    }
    segment.first = 150;
    assert_false(campaign_flux_read(scene.place.campaign, scene.arena, &segment,
                                    CAMPAIGN_AS_MEASURED, &flux, &error));
    assert_int_equal(error.kind, BASE_CORRUPT);
    stop(&scene);
}

/* ---- marks ---- */

static bool check(struct scene *scene, struct store_mark mark, struct store_mark *clipped,
                  struct base_error *error)
{
    struct store_segment segment = {.starts_d = 10.0, .ends_d = 20.0};
    struct store_mark marks[3] = {{.starts_d = 11.0, .ends_d = 12.0, .low = 0.9, .high = 1.0}};
    marks[1] = marks[0];
    marks[2] = mark;
    bool ok = campaign_review_check(scene->place.campaign, &segment, marks, 3, error);
    *clipped = marks[2];
    return ok;
}

static void marks_are_held_to_their_segment(void **state)
{
    (void)state;
    static const struct {
        struct store_mark mark;
        const char *field;
    } bad[] = {
        {{.starts_d = 9.98, .ends_d = 12, .low = 0, .high = 1}, "marks[2].starts"},
        {{.starts_d = 12, .ends_d = 20.02, .low = 0, .high = 1}, "marks[2].ends"},
        {{.starts_d = 12, .ends_d = 12, .low = 0, .high = 1}, "marks[2].ends"},
        {{.starts_d = 13, .ends_d = 12, .low = 0, .high = 1}, "marks[2].ends"},
        {{.starts_d = 12, .ends_d = 13, .low = 2, .high = 1}, "marks[2].low"},
        {{.starts_d = NAN, .ends_d = 13, .low = 0, .high = 1}, "marks[2].starts"},
        {{.starts_d = 12, .ends_d = INFINITY, .low = 0, .high = 1}, "marks[2].ends"},
        {{.starts_d = 12, .ends_d = 13, .low = -INFINITY, .high = 1}, "marks[2].low"},
        {{.starts_d = 12, .ends_d = 13, .low = 0, .high = NAN}, "marks[2].high"},
        {{.starts_d = 9.992, .ends_d = 9.998, .low = 0, .high = 1}, "marks[2].starts"},
    };
    struct scene scene;
    struct store_mark clipped;
    start(&scene);
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct base_error error = {0};
        assert_false(check(&scene, bad[i].mark, &clipped, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_string_equal(error.field, bad[i].field);
    }
    stop(&scene);
}

static void a_mark_that_sticks_out_a_little_is_clipped(void **state)
{
    (void)state;
    struct scene scene;
    struct store_mark clipped;
    struct base_error error = {0};
    start(&scene);
    struct store_mark mark = {.starts_d = 9.995, .ends_d = 20.005, .low = 0.5, .high = 0.5};
    assert_ok(check(&scene, mark, &clipped, &error), error);
    assert_true(clipped.starts_d == 10.0 && clipped.ends_d == 20.0);
    stop(&scene);
}

static void a_review_holds_a_bounded_number_of_marks(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct store_segment segment = {.starts_d = 0.0, .ends_d = 10.0};
    struct store_mark marks[51];
    for (size_t i = 0; i < 51; i++)
        marks[i] = (struct store_mark){.starts_d = 1.0, .ends_d = 2.0, .low = 0.9, .high = 1.0};
    start(&scene);
    assert_ok(campaign_review_check(scene.place.campaign, &segment, marks, 50, &error), error);
    assert_false(campaign_review_check(scene.place.campaign, &segment, marks, 51, &error));
    assert_string_equal(error.field, "marks");
    assert_non_null(strstr(error.sentence, "50"));
    change_setting(&scene.place, "marks_most", "2");
    assert_false(campaign_review_check(scene.place.campaign, &segment, marks, 3, &error));
    assert_true(campaign_review_check(scene.place.campaign, &segment, marks, 2, &error));
    assert_true(campaign_review_check(scene.place.campaign, &segment, NULL, 0, &error));
    stop(&scene);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_lease_says_whose_and_of_what_it_is),
        cmocka_unit_test(a_lease_holds_over_a_restart),
        cmocka_unit_test(a_forged_lease_is_no_lease),
        cmocka_unit_test(another_campaigns_lease_is_no_lease_here),
        cmocka_unit_test(an_expired_lease_says_so_and_shows_for_a_day),
        cmocka_unit_test(only_holders_and_reviewers_may_see),
        cmocka_unit_test(flux_is_the_segments_own),
        cmocka_unit_test(marks_are_held_to_their_segment),
        cmocka_unit_test(a_mark_that_sticks_out_a_little_is_clipped),
        cmocka_unit_test(a_review_holds_a_bounded_number_of_marks),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
