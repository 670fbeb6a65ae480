#include "support.h"

static struct store_batch only_batch(struct place *place)
{
    struct store_batch *batches;
    size_t count;
    must(store_batches_list(place->store, place->arena, &batches, &count, &error));
    assert_int_equal(count, 1);
    return batches[0];
}

static bool add_outcome(struct place *place, const char *label, enum store_file_outcome outcome,
                        const char *reason, unsigned char hash)
{
    struct store_file_new file = {
        .batch = place->batch, .label = label, .reason = reason, .outcome = outcome, .bytes = 4};
    memset(file.sha256, hash, sizeof file.sha256);
    return store_files_add(place->store, &file, 1, &error);
}

static void an_unfinished_batch_is_resumed_and_a_finished_name_is_taken(void **state)
{
    struct place *place = *state;
    int64_t id, again;
    bool resumed;
    must(store_batch_begin(place->store, "second", "there", 3, &id, &resumed, &error));
    assert_false(resumed);
    reopen(place);
    must(store_batch_begin(place->store, "second", "there", 4, &again, &resumed, &error));
    assert_true(resumed);
    assert_int_equal(again, id);
    must_fail(store_batch_begin(place->store, "first", "x", 5, &id, &resumed, &error),
              BASE_CONFLICT);
    assert_string_equal(error.field, "batch");
}

static void a_batch_counts_what_is_in_it(void **state)
{
    struct place *place = *state;
    must(add_star(place->store, place->batch, "RB-0002", 2, &error));
    must(add_outcome(place, "bad.csv", STORE_FILE_REFUSED, "No flux column.", 3));
    must(add_outcome(place, "again.csv", STORE_FILE_REPEATED, "Seen before.", 1));
    struct store_batch batch = only_batch(place);
    assert_string_equal(batch.name, "first");
    assert_string_equal(batch.source, "here");
    assert_int_equal(batch.state, STORE_BATCH_READY);
    assert_int_equal(batch.begun_ms, 1);
    assert_int_equal(batch.finished_ms, 2);
    assert_int_equal(batch.files_loaded, 2);
    assert_int_equal(batch.files_refused, 1);
    assert_int_equal(batch.files_repeated, 1);
    assert_int_equal(batch.stars, 2);
    assert_int_equal(batch.segments, 2);
    assert_int_equal(batch.points, 2 * POINTS);
}

static void finishing_or_withdrawing_what_is_not_there_is_said(void **state)
{
    struct place *place = *state;
    must_fail(store_batch_finish(place->store, 99, 1, &error), BASE_NOT_FOUND);
    must_fail(store_batch_withdraw(place->store, 99, 1, &error), BASE_NOT_FOUND);
    must_fail(add_star(place->store, 99, "RB-0009", 9, &error), BASE_NOT_FOUND);
}

static void a_batch_withdrawn_while_it_is_loaded_stays_withdrawn(void **state)
{
    struct place *place = *state;
    int64_t id;
    bool resumed;
    struct store_batch *batches;
    size_t count;
    must(store_batch_begin(place->store, "second", "", 3, &id, &resumed, &error));
    must(store_batch_withdraw(place->store, id, 4, &error));
    must(store_batch_finish(place->store, id, 5, &error));
    must(store_batches_list(place->store, place->arena, &batches, &count, &error));
    assert_int_equal(count, 2);
    assert_int_equal(batches[1].state, STORE_BATCH_WITHDRAWN);
    assert_int_equal(batches[1].finished_ms, 4);
}

static void segments_are_handed_out_only_of_ready_batches_and_until_settled(void **state)
{
    struct place *place = *state;
    struct store_segment segment;
    struct store_open_segment open = {0};
    struct store_counts counts;
    int64_t id;
    bool resumed;
    must(store_batch_begin(place->store, "second", "", 3, &id, &resumed, &error));
    must(add_star(place->store, id, "RB-0002", 2, &error));
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.segments, 2);
    assert_int_equal(counts.open_segments, 1);
    must(store_segments_settle(place->store, &place->segment.id, 1, true, &error));
    must(store_segments_settle(place->store, &place->segment.id, 1, true, &error));
    must(store_segments_open_each(place->store, take_first, &open, &error));
    assert_int_equal(open.id, 0);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.open_segments, 0);
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_false(segment.open);
    must(store_segments_settle(place->store, &place->segment.id, 1, false, &error));
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.open_segments, 1);
    must(store_batch_withdraw(place->store, place->batch, 9, &error));
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_false(segment.open);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.open_segments, 0);
    assert_int_equal(counts.segments, 2);
}

static void the_same_bytes_are_loaded_once(void **state)
{
    struct place *place = *state;
    unsigned char hash[STORE_HASH_SIZE];
    enum store_file_outcome outcome;
    int64_t batch;
    memset(hash, 1, sizeof hash);
    must(store_file_seen(place->store, hash, &outcome, &batch, &error));
    assert_int_equal(outcome, STORE_FILE_LOADED);
    assert_int_equal(batch, place->batch);
    memset(hash, 2, sizeof hash);
    must(store_file_seen(place->store, hash, &outcome, &batch, &error));
    assert_int_equal(outcome, STORE_FILE_UNKNOWN);
    /* Two files of the same bytes may come before either is known. */
    must(add_star(place->store, place->batch, "RB-0001-copy", 1, &error));
    struct store_batch whole = only_batch(place);
    assert_int_equal(whole.files_loaded, 1);
    assert_int_equal(whole.files_repeated, 1);
    assert_int_equal(whole.stars, 1);
    must(add_star(place->store, place->batch, "RB-0001-copy", 1, &error));
    whole = only_batch(place);
    assert_int_equal(whole.files_repeated, 1);
}

static void a_refused_file_is_mended_by_a_later_one_of_its_label(void **state)
{
    struct place *place = *state;
    struct store_file *files;
    size_t count;
    must(add_outcome(place, "RB-0002", STORE_FILE_REFUSED, "It is cut short.", 3));
    must(
        store_batch_files(place->store, place->arena, place->batch, 0, 10, &files, &count, &error));
    assert_int_equal(count, 2);
    assert_int_equal(files[1].outcome, STORE_FILE_REFUSED);
    assert_string_equal(files[1].reason, "It is cut short.");
    assert_int_equal(files[1].bytes, 4);
    must(add_star(place->store, place->batch, "RB-0002", 2, &error));
    must(store_batch_files(place->store, place->arena, place->batch, files[0].id, 10, &files,
                           &count, &error));
    assert_int_equal(count, 1);
    assert_string_equal(files[0].label, "RB-0002");
    assert_int_equal(files[0].outcome, STORE_FILE_LOADED);
    struct store_batch batch = only_batch(place);
    assert_int_equal(batch.files_refused, 0);
    assert_int_equal(batch.files_loaded, 2);
}

static void a_loaded_file_is_not_replaced_by_a_later_refusal(void **state)
{
    struct place *place = *state;
    must(add_outcome(place, "RB-0001", STORE_FILE_REFUSED, "Too late.", 3));
    struct store_batch batch = only_batch(place);
    assert_int_equal(batch.files_loaded, 1);
    assert_int_equal(batch.files_refused, 0);
}

static void several_files_are_stored_all_or_none(void **state)
{
    struct place *place = *state;
    const struct store_file_new files[] = {
        {.batch = place->batch,
         .label = "fine",
         .reason = "No rows.",
         .outcome = STORE_FILE_REFUSED},
        {.batch = 99, .label = "of no batch", .reason = "No rows.", .outcome = STORE_FILE_REFUSED}};
    must_fail(store_files_add(place->store, files, 2, &error), BASE_NOT_FOUND);
    assert_int_equal(only_batch(place).files_refused, 0);
    must(store_files_add(place->store, files, 1, &error));
    assert_int_equal(only_batch(place).files_refused, 1);
}

static void a_star_met_again_keeps_what_was_known_and_gains_the_rest(void **state)
{
    struct place *place = *state;
    static double time[POINTS];
    static float flux[POINTS], trend[POINTS], errors[POINTS];
    make_points(time, flux, trend);
    const struct store_span spans[] = {{0, 100, 100.0, 102.0}, {90, 210, 101.8, 106.0}};
    const struct store_light_curve_new curves[] = {
        {.star = {"RB-0001", 25.5, 11.0, 12.5, 5800.0, NAN, NAN},
         .time_reference = "BJD_TDB",
         .points = {POINTS, time, flux, trend, errors},
         .segments = spans,
         .segment_count = 2}};
    struct store_file_new file = {.batch = place->batch,
                                  .label = "more",
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .curves = curves,
                                  .curve_count = 1};
    must(store_files_add(place->store, &file, 1, &error));
    struct store_star star, *stars;
    struct store_light_curve *found, one;
    size_t count;
    must(store_star_by_name(place->store, place->arena, "RB-0001", &star, &error));
    assert_true(star.properties.ra_deg == 25.5);
    assert_true(star.properties.dec_deg == 10.0);
    assert_true(star.properties.magnitude == 12.5);
    assert_true(isnan(star.properties.radius_rsun));
    assert_int_equal(star.light_curves, 2);
    assert_int_equal(star.segments, 3);
    assert_int_equal(star.reviews, 0);
    assert_int_equal(only_batch(place).stars, 1);
    must(store_stars_list(place->store, place->arena, 0, 5, &stars, &count, &error));
    assert_int_equal(count, 1);
    must(store_light_curves_of_star(place->store, place->arena, star.id, &found, &count, &error));
    assert_int_equal(count, 2);
    assert_string_equal(found[0].time_reference, REFERENCE);
    assert_string_equal(found[1].time_reference, "BJD_TDB");
    assert_true(found[0].noise_window[1] == 2e-5 && isnan(found[0].noise_window[3]));
    must(store_light_curve_read(place->store, place->arena, found[0].id, &one, &error));
    assert_string_equal(one.star_name, "RB-0001");
    assert_int_equal(one.count, POINTS);
    assert_true(one.starts_d == time[0] && one.ends_d == time[POINTS - 1]);
    must_fail(store_star_by_name(place->store, place->arena, "RB-9999", &star, &error),
              BASE_NOT_FOUND);
    must_fail(store_light_curve_read(place->store, place->arena, 99, &one, &error), BASE_NOT_FOUND);
}

static void a_segment_is_found_by_an_id_that_tells_nothing(void **state)
{
    struct place *place = *state;
    struct store_segment segment, same;
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(strlen(segment.public_id), 16);
    assert_int_equal(strspn(segment.public_id, "0123456789abcdef"), 16);
    assert_int_equal(segment.count, POINTS);
    assert_true(segment.open);
    assert_string_equal(segment.time_reference, REFERENCE);
    assert_int_equal(segment.batch, place->batch);
    must(store_segment_by_public_id(place->store, place->arena, segment.public_id, &same, &error));
    assert_int_equal(same.id, segment.id);
    must_fail(
        store_segment_by_public_id(place->store, place->arena, "0000000000000000", &same, &error),
        BASE_NOT_FOUND);
    must_fail(store_segment_by_id(place->store, place->arena, 99, &same, &error), BASE_NOT_FOUND);
}

/* Every bit pattern that a float may have must survive, so the columns hold odd ones. */
static void points_come_back_bit_for_bit(void **state)
{
    struct place *place = *state;
    static double time[POINTS];
    static float flux[POINTS], trend[POINTS], errors[POINTS];
    make_points(time, flux, trend);
    uint32_t bits = 1;
    for (size_t i = 0; i < POINTS; i++) {
        bits = bits * 1664525u + 1013904223u;
        memcpy(&flux[i], &bits, sizeof bits);
        errors[i] = i % 3 == 0 ? NAN : 1e-3f * (float)i;
    }
    const struct store_light_curve_new curve = {.star = {"RB-0002", NAN, NAN, NAN, NAN, NAN, NAN},
                                                .time_reference = REFERENCE,
                                                .points = {POINTS, time, flux, trend, errors}};
    struct store_file_new file = {.batch = place->batch,
                                  .label = "odd",
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .curves = &curve,
                                  .curve_count = 1};
    must(store_files_add(place->store, &file, 1, &error));
    reopen(place);
    struct store_points points;
    must(store_points_read(place->store, place->arena, 2, &points, &error));
    assert_int_equal(points.count, POINTS);
    assert_memory_equal(points.time, time, sizeof time);
    assert_memory_equal(points.flux, flux, sizeof flux);
    assert_memory_equal(points.trend, trend, sizeof trend);
    assert_memory_equal(points.error, errors, sizeof errors);
    must(store_points_read(place->store, place->arena, 1, &points, &error));
    assert_null(points.error);
    must_fail(store_points_read(place->store, place->arena, 99, &points, &error), BASE_NOT_FOUND);
}

static void an_arena_that_is_too_small_is_no_memory_and_no_crash(void **state)
{
    struct place *place = *state;
    struct base_arena *small = base_arena_new(64);
    struct store_points points;
    struct store_star star;
    struct store_batch *batches;
    size_t count;
    assert_non_null(small);
    must_fail(store_points_read(place->store, small, 1, &points, &error), BASE_MEMORY);
    must_fail(store_batches_list(place->store, small, &batches, &count, &error), BASE_MEMORY);
    base_arena_free(small);
    must(store_star_by_name(place->store, place->arena, "RB-0001", &star, &error));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(an_unfinished_batch_is_resumed_and_a_finished_name_is_taken),
        IN_PLACE(a_batch_counts_what_is_in_it),
        IN_PLACE(finishing_or_withdrawing_what_is_not_there_is_said),
        IN_PLACE(a_batch_withdrawn_while_it_is_loaded_stays_withdrawn),
        IN_PLACE(segments_are_handed_out_only_of_ready_batches_and_until_settled),
        IN_PLACE(the_same_bytes_are_loaded_once),
        IN_PLACE(a_refused_file_is_mended_by_a_later_one_of_its_label),
        IN_PLACE(a_loaded_file_is_not_replaced_by_a_later_refusal),
        IN_PLACE(several_files_are_stored_all_or_none),
        IN_PLACE(a_star_met_again_keeps_what_was_known_and_gains_the_rest),
        IN_PLACE(a_segment_is_found_by_an_id_that_tells_nothing),
        IN_PLACE(points_come_back_bit_for_bit),
        IN_PLACE(an_arena_that_is_too_small_is_no_memory_and_no_crash),
    };
    return cmocka_run_group_tests_name("store: batches, stars and segments", tests, NULL, NULL);
}
