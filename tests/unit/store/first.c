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

struct place {
    char folder[64], path[96];
    struct store *store;
    struct base_arena *arena;
    int64_t person, batch;
    struct store_open_segment segment;
};

static bool take_first(void *context, const struct store_open_segment *segment)
{
    *(struct store_open_segment *)context = *segment;
    return false;
}

static struct base_error error;
#define must(call)                                                                                 \
    do {                                                                                           \
        error = (struct base_error){0};                                                            \
        if (!(call))                                                                               \
            fail_msg("%s: %s", #call, error.sentence);                                             \
    } while (0)

static void add_star(struct place *place, const char *name, unsigned char hash)
{
    static double time[POINTS];
    static float flux[POINTS], trend[POINTS];
    for (size_t i = 0; i < POINTS; i++) {
        time[i] = 100.0 + 0.02 * (double)i;
        flux[i] = (float)(1e-4 * (double)(i % 7));
        trend[i] = 1e-5f;
    }
    const struct store_span spans[] = {{0, POINTS, time[0], time[POINTS - 1]}};
    const struct store_light_curve_new curve = {
        .star = {.name = name, .ra_deg = NAN, .dec_deg = 10.0},
        .time_reference = "BJD_TDB - 2460000",
        .points = {.count = POINTS, .time = time, .flux = flux, .trend = trend},
        .median_flux = 1000.0,
        .cadence_d = 0.02,
        .noise_point = 1e-4,
        .segments = spans,
        .segment_count = 1};
    struct store_file_new file = {.batch = place->batch,
                                  .label = name,
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .bytes = 10,
                                  .curves = &curve,
                                  .curve_count = 1};
    memset(file.sha256, hash, sizeof file.sha256);
    must(store_files_add(place->store, &file, 1, &error));
}

static int open_place(void **state)
{
    struct place *place = calloc(1, sizeof *place);
    snprintf(place->folder, sizeof place->folder, "/tmp/ebbmark-store-XXXXXX");
    assert_non_null(mkdtemp(place->folder));
    snprintf(place->path, sizeof place->path, "%s/campaign.db", place->folder);
    const struct store_options options = {.readers = 2};
    bool resumed;
    must(store_open(place->path, &options, &place->store, &error));
    place->arena = base_arena_new(0);
    must(store_person_add(place->store, "Ada", "ada", "", STORE_REVIEWER, 1, &place->person,
                          &error));
    must(store_batch_begin(place->store, "first", "here", 1, &place->batch, &resumed, &error));
    assert_false(resumed);
    add_star(place, "RB-0001", 1);
    must(store_batch_finish(place->store, place->batch, 2, &error));
    must(store_segments_open_each(place->store, take_first, &place->segment, &error));
    assert_int_not_equal(place->segment.id, 0);
    *state = place;
    return 0;
}

static int close_place(void **state)
{
    struct place *place = *state;
    base_arena_free(place->arena);
    store_close(place->store);
    char command[128];
    snprintf(command, sizeof command, "rm -rf %s", place->folder);
    assert_int_equal(system(command), 0);
    free(place);
    return 0;
}

static struct store_review_new a_review(const struct place *place, const char *key,
                                        unsigned char lease)
{
    static const struct store_mark marks[] = {
        {.starts_d = 101.0, .ends_d = 101.2, .low = 0.99, .high = 1.0, .sure = true}};
    struct store_review_new review = {.person = place->person,
                                      .segment = place->segment.id,
                                      .key = key,
                                      .submitted_ms = 5,
                                      .marks = marks,
                                      .mark_count = 1};
    memset(review.lease, lease, sizeof review.lease);
    return review;
}

static void a_review_sent_twice_is_stored_once(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), again = a_review(place, "k1", 1);
    struct store_review_new *both[] = {&first, &again};
    must(store_reviews_add(place->store, both, 2, &error));
    assert_int_equal(first.outcome, STORE_REVIEW_TAKEN);
    assert_int_equal(again.outcome, STORE_REVIEW_REPEATED);
    assert_int_equal(again.review, first.review);
    struct store_counts counts;
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 1);
    assert_int_equal(counts.marks, 1);
}

static void a_key_with_another_body_and_a_used_lease_store_nothing(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), other = a_review(place, "k1", 2);
    struct store_review_new used = a_review(place, "k2", 1);
    other.body_hash[0] = 9;
    struct store_review_new *all[] = {&first, &other, &used};
    must(store_reviews_add(place->store, all, 3, &error));
    assert_int_equal(other.outcome, STORE_REVIEW_KEY_REUSED);
    assert_int_equal(used.outcome, STORE_REVIEW_LEASE_USED);
    struct store_segment segment;
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(segment.looks, 1);
}

static void a_late_review_is_taken_only_while_the_segment_is_open(void **state)
{
    struct place *place = *state;
    struct store_review_new late = a_review(place, "k1", 1), later = a_review(place, "k2", 2);
    late.late = later.late = true;
    struct store_review_new *one[] = {&late}, *two[] = {&later};
    must(store_reviews_add(place->store, one, 1, &error));
    assert_int_equal(late.outcome, STORE_REVIEW_TAKEN);
    assert_true(late.was_late);
    must(store_batch_withdraw(place->store, place->batch, 9, &error));
    must(store_reviews_add(place->store, two, 1, &error));
    assert_int_equal(later.outcome, STORE_REVIEW_CLOSED);
}

static void points_come_back_as_they_were(void **state)
{
    struct place *place = *state;
    struct store_light_curve *curves;
    struct store_star star;
    struct store_points points;
    size_t count;
    must(store_star_by_name(place->store, place->arena, "RB-0001", &star, &error));
    assert_true(isnan(star.properties.ra_deg));
    must(store_light_curves_of_star(place->store, place->arena, star.id, &curves, &count, &error));
    assert_int_equal(count, 1);
    must(store_points_read(place->store, place->arena, curves[0].id, &points, &error));
    assert_int_equal(points.count, POINTS);
    assert_true(points.time[299] == 100.0 + 0.02 * 299.0);
    assert_true(points.flux[5] == (float)(1e-4 * 5.0));
    assert_true(points.trend[299] == 1e-5f);
    assert_null(points.error);
}

static void a_second_opener_is_told_who_has_the_database(void **state)
{
    struct place *place = *state;
    const struct store_options options = {.readers = 1};
    struct store *second;
    assert_false(store_open(place->path, &options, &second, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
    char pid[16];
    snprintf(pid, sizeof pid, "%d", (int)getpid());
    assert_non_null(strstr(error.sentence, pid));
}

static void a_person_who_leaves_keeps_their_reviews_without_the_handle(void **state)
{
    struct place *place = *state;
    struct store_review_new review = a_review(place, "k1", 1);
    struct store_review_new *one[] = {&review};
    struct store_person person;
    int64_t other;
    must(store_reviews_add(place->store, one, 1, &error));
    assert_false(
        store_person_add(place->store, "ADA", "ada", "", STORE_REVIEWER, 1, &other, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
    must(store_person_forget(place->store, place->person, &error));
    must(store_person_by_id(place->store, place->arena, place->person, &person, &error));
    assert_true(person.left);
    assert_string_equal(person.handle, "");
    struct store_counts counts;
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 1);
    must(store_person_add(place->store, "Ada", "ada", "", STORE_REVIEWER, 1, &other, &error));
}

static void a_run_is_kept_with_its_candidates_and_members(void **state)
{
    struct place *place = *state;
    struct store_review_new review = a_review(place, "k1", 1);
    struct store_review_new *one[] = {&review};
    must(store_reviews_add(place->store, one, 1, &error));
    struct store_look *looks;
    struct store_mark *marks;
    size_t look_count, mark_count, count;
    must(store_star_looks(place->store, place->arena, place->segment.star, 100, &looks, &look_count,
                          &marks, &mark_count, &error));
    assert_int_equal(look_count, 1);
    assert_int_equal(mark_count, 1);
    const struct store_candidate candidate = {.id = marks[0].id,
                                              .star = place->segment.star,
                                              .light_curve = looks[0].light_curve,
                                              .starts_d = 101.0,
                                              .ends_d = 101.2,
                                              .mid_d = NAN,
                                              .probability = 0.75,
                                              .snr = 12.5,
                                              .looks = 1,
                                              .marks = 1};
    const struct store_member member = {marks[0].id, marks[0].id};
    const struct store_skill skill = {
        .person = place->person, .hit = 0.8, .chance = NAN, .weight = 0.5};
    struct store_run_new run = {.run = {.newest_review = 1, .settings = "{}", .fit = "{}"},
                                .candidates = &candidate,
                                .candidate_count = 1,
                                .members = &member,
                                .member_count = 1,
                                .skills = &skill,
                                .skill_count = 1};
    must(store_run_add(place->store, &run, &error));
    assert_int_equal(run.run.id, 1);
    int64_t verdict, total;
    must(store_verdict_add(place->store, candidate.id, place->person, "keep", "clear", 7, &verdict,
                           &error));
    struct store_candidate *rows;
    struct store_candidate_query query = {
        .star = "", .batch = "", .verdict = "keep", .order = STORE_BY_SNR};
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(count, 1);
    assert_int_equal(total, 1);
    assert_true(rows[0].snr == 12.5 && isnan(rows[0].mid_d));
    assert_string_equal(rows[0].verdict, "keep");
    query.verdict = "none";
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(count, 0);
    struct store_candidate_mark *own;
    must(store_candidate_marks(place->store, place->arena, 0, candidate.id, &own, &count, &error));
    assert_int_equal(count, 1);
    assert_true(own[0].weight == 0.5);
    must(store_person_candidates(place->store, place->arena, place->person, 10, &rows, &count,
                                 &error));
    assert_int_equal(count, 1);
    struct store_own_totals totals;
    struct store_own_review *reviews;
    must(store_person_record(place->store, place->arena, place->person, 0, 10, &totals, &reviews,
                             &count, &error));
    assert_int_equal(totals.looks, 1);
    assert_int_equal(totals.marks, 1);
    assert_int_equal(reviews[0].mark_count, 1);
}

static void a_copy_is_verified_and_never_overwrites(void **state)
{
    struct place *place = *state;
    char copy[128];
    snprintf(copy, sizeof copy, "%s/copy.db", place->folder);
    must(store_backup(place->store, copy, &error));
    assert_int_equal(access(copy, R_OK), 0);
    assert_false(store_backup(place->store, copy, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
}

int main(void)
{
#define T(test) cmocka_unit_test_setup_teardown(test, open_place, close_place)
    const struct CMUnitTest tests[] = {
        T(a_review_sent_twice_is_stored_once),
        T(a_key_with_another_body_and_a_used_lease_store_nothing),
        T(a_late_review_is_taken_only_while_the_segment_is_open),
        T(points_come_back_as_they_were),
        T(a_second_opener_is_told_who_has_the_database),
        T(a_person_who_leaves_keeps_their_reviews_without_the_handle),
        T(a_run_is_kept_with_its_candidates_and_members),
        T(a_copy_is_verified_and_never_overwrites),
    };
    return cmocka_run_group_tests_name("store: verbs", tests, NULL, NULL);
}
