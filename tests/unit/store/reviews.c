#include "support.h"

static void a_review_sent_twice_is_stored_once(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), again = a_review(place, "k1", 1);
    struct store_review_new much_later = a_review(place, "k1", 1);
    struct store_review_new *both[] = {&first, &again};
    struct store_counts counts;
    must(store_reviews_add(place->store, both, 2, &error));
    assert_int_equal(first.outcome, STORE_REVIEW_TAKEN);
    assert_int_equal(again.outcome, STORE_REVIEW_REPEATED);
    assert_int_equal(again.review, first.review);
    reopen(place);
    must(add_review(place->store, &much_later, &error));
    assert_int_equal(much_later.outcome, STORE_REVIEW_REPEATED);
    assert_int_equal(much_later.review, first.review);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 1);
    assert_int_equal(counts.marks, 1);
}

static void a_key_with_another_body_and_a_used_lease_store_nothing(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), other = a_review(place, "k1", 2);
    struct store_review_new used = a_review(place, "k2", 1);
    struct store_segment segment;
    struct store_counts counts;
    other.body_hash[0] = 9;
    struct store_review_new *all[] = {&first, &other, &used};
    must(store_reviews_add(place->store, all, 3, &error));
    assert_int_equal(other.outcome, STORE_REVIEW_KEY_REUSED);
    assert_int_equal(other.review, 0);
    assert_int_equal(used.outcome, STORE_REVIEW_LEASE_USED);
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(segment.looks, 1);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 1);
}

static void two_people_may_use_the_same_key(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), other = a_review(place, "k1", 2);
    must(store_person_add(place->store, "Bo", "bo", "", STORE_REVIEWER, 1, &other.person, &error));
    must(add_review(place->store, &first, &error));
    must(add_review(place->store, &other, &error));
    assert_int_equal(other.outcome, STORE_REVIEW_TAKEN);
    assert_int_not_equal(other.review, first.review);
}

static void a_late_review_is_taken_only_while_the_segment_is_open(void **state)
{
    struct place *place = *state;
    struct store_review_new late = a_review(place, "k1", 1), again = a_review(place, "k1", 1);
    struct store_review_new later = a_review(place, "k2", 2), in_time = a_review(place, "k3", 3);
    late.late = again.late = later.late = true;
    must(add_review(place->store, &late, &error));
    assert_int_equal(late.outcome, STORE_REVIEW_TAKEN);
    assert_true(late.was_late);
    must(store_batch_withdraw(place->store, place->batch, 9, &error));
    must(add_review(place->store, &later, &error));
    assert_int_equal(later.outcome, STORE_REVIEW_CLOSED);
    must(add_review(place->store, &again, &error));
    assert_int_equal(again.outcome, STORE_REVIEW_REPEATED);
    assert_true(again.was_late);
    must(add_review(place->store, &in_time, &error));
    assert_int_equal(in_time.outcome, STORE_REVIEW_TAKEN);
    assert_false(in_time.was_late);
}

static void one_review_that_cannot_be_stored_keeps_its_whole_group_out(void **state)
{
    struct place *place = *state;
    struct store_review_new fine = a_review(place, "k1", 1), nobody = a_review(place, "k2", 2);
    struct store_review_new *both[] = {&fine, &nobody};
    struct store_counts counts;
    int64_t newest, count;
    nobody.person = 99;
    must_fail(store_reviews_add(place->store, both, 2, &error), BASE_NOT_FOUND);
    assert_int_equal(fine.outcome, 0);
    assert_int_equal(fine.review, 0);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 0);
    must(add_review(place->store, &fine, &error));
    must(store_reviews_high_water(place->store, &newest, &count, &error));
    assert_int_equal(newest, fine.review);
    assert_int_equal(count, 1);
}

static void a_mark_that_makes_no_sense_is_refused(void **state)
{
    struct place *place = *state;
    const struct store_mark backwards = {.starts_d = 2, .ends_d = 1, .low = 0.9, .high = 1};
    const struct store_mark no_number = {.starts_d = NAN, .ends_d = 1, .low = 0.9, .high = 1};
    struct store_review_new review = a_review(place, "k1", 1);
    review.marks = &backwards;
    must_fail(add_review(place->store, &review, &error), BASE_INVALID);
    review.marks = &no_number;
    must_fail(add_review(place->store, &review, &error), BASE_INVALID);
}

static void ids_have_no_holes_whatever_is_refused(void **state)
{
    struct place *place = *state;
    int64_t newest, count;
    for (unsigned i = 0; i < 20; i++) {
        char key[8];
        (void)snprintf(key, sizeof key, "k%u", i / 2); /* each key twice */
        struct store_review_new review = a_review(place, key, (unsigned char)(i / 2));
        struct store_review_new broken = a_review(place, "x", (unsigned char)(100 + i));
        broken.segment = 99;
        must(add_review(place->store, &review, &error));
        must_fail(add_review(place->store, &broken, &error), BASE_NOT_FOUND);
    }
    must(store_reviews_high_water(place->store, &newest, &count, &error));
    assert_int_equal(newest, 10);
    assert_int_equal(count, 10);
}

static void a_person_and_a_star_know_what_was_reviewed(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), second = a_review(place, "k2", 2);
    struct store_review_new others = a_review(place, "k3", 3);
    struct store_star star;
    int64_t *ids;
    size_t count;
    must(add_star(place->store, place->batch, "RB-0002", 2, &error));
    must(store_person_add(place->store, "Bo", "bo", "", STORE_REVIEWER, 1, &others.person, &error));
    second.mark_count = 0;
    others.segment = place->segment.id + 1;
    struct store_review_new *all[] = {&first, &second, &others};
    must(store_reviews_add(place->store, all, 3, &error));
    must(store_person_segments(place->store, place->arena, place->person, &ids, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(ids[0], place->segment.id);
    must(store_star_by_name(place->store, place->arena, "RB-0001", &star, &error));
    assert_int_equal(star.reviews, 2);
    must(store_reviewed_stars(place->store, place->arena, 3, &ids, &count, &error));
    assert_int_equal(count, 2);
    assert_true(ids[0] < ids[1]);
    must(store_reviewed_stars(place->store, place->arena, 2, &ids, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(ids[0], star.id);
    must(store_reviewing_people(place->store, place->arena, 3, &ids, &count, &error));
    assert_int_equal(count, 2);
    must(store_reviewing_people(place->store, place->arena, 2, &ids, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(ids[0], place->person);
}

static void looks_and_marks_of_a_star_end_at_the_newest_asked_for(void **state)
{
    struct place *place = *state;
    struct store_review_new first = a_review(place, "k1", 1), second = a_review(place, "k2", 2);
    struct store_look *looks;
    struct store_mark *marks;
    size_t look_count, mark_count;
    struct store_review_new *all[] = {&first, &second};
    must(store_reviews_add(place->store, all, 2, &error));
    must(store_star_looks(place->store, place->arena, place->segment.star, 2, &looks, &look_count,
                          &marks, &mark_count, &error));
    assert_int_equal(look_count, 2);
    assert_int_equal(mark_count, 2);
    assert_int_equal(looks[0].review, first.review);
    assert_int_equal(looks[0].person, place->person);
    assert_int_equal(looks[0].segment, place->segment.id);
    assert_int_equal(looks[0].conditions, STORE_BREAK);
    assert_true(looks[0].seconds == 7.5);
    assert_int_equal(looks[0].submitted_ms, 5);
    assert_int_equal(marks[1].review, second.review);
    assert_true(marks[1].starts_d == 101.0 && marks[1].ends_d == 101.2);
    assert_true(marks[1].low == 0.99 && marks[1].high == 1.0 && marks[1].sure);
    must(store_star_looks(place->store, place->arena, place->segment.star, 1, &looks, &look_count,
                          &marks, &mark_count, &error));
    assert_int_equal(look_count, 1);
    assert_int_equal(mark_count, 1);
}

struct seen {
    size_t rows, marks, stop_after;
    int64_t last;
    char handle[16], star[16];
};

static bool see(void *context, const struct store_review_row *row)
{
    struct seen *seen = context;
    assert_true(row->review >= seen->last);
    seen->last = row->review;
    seen->rows++;
    seen->marks += row->mark != NULL ? 1 : 0;
    (void)snprintf(seen->handle, sizeof seen->handle, "%s", row->handle);
    (void)snprintf(seen->star, sizeof seen->star, "%s", row->star);
    assert_int_equal(strlen(row->segment), 16);
    assert_string_equal(row->time_reference, REFERENCE);
    return seen->rows != seen->stop_after;
}

static void every_review_is_visited_with_each_of_its_marks(void **state)
{
    struct place *place = *state;
    const struct store_mark marks[] = {{.starts_d = 101, .ends_d = 102, .low = 0.9, .high = 1},
                                       {.starts_d = 103, .ends_d = 104, .low = 0.9, .high = 1}};
    struct store_review_new two = a_review(place, "k1", 1), none = a_review(place, "k2", 2);
    struct store_review_new later = a_review(place, "k3", 3);
    two.marks = marks;
    two.mark_count = 2;
    none.mark_count = 0;
    struct store_review_new *all[] = {&two, &none, &later};
    must(store_reviews_add(place->store, all, 3, &error));
    struct seen seen = {0}, stopped = {.stop_after = 1};
    must(store_reviews_each(place->store, none.review, see, &seen, &error));
    assert_int_equal(seen.rows, 3);
    assert_int_equal(seen.marks, 2);
    assert_string_equal(seen.handle, "Ada");
    assert_string_equal(seen.star, "RB-0001");
    must(store_reviews_each(place->store, later.review, see, &stopped, &error));
    assert_int_equal(stopped.rows, 1);
    must(store_person_forget(place->store, place->person, &error));
    seen = (struct seen){0};
    must(store_reviews_each(place->store, later.review, see, &seen, &error));
    assert_int_equal(seen.rows, 4);
    assert_string_equal(seen.handle, "");
}

static void ones_own_record_is_newest_first_a_page_at_a_time(void **state)
{
    struct place *place = *state;
    struct store_own_totals totals;
    struct store_own_review *own;
    size_t count;
    must(store_person_record(place->store, place->arena, place->person, 0, 2, &totals, &own, &count,
                             &error));
    assert_int_equal(count, 0);
    assert_int_equal(totals.looks, 0);
    for (unsigned i = 0; i < 3; i++) {
        char key[8];
        (void)snprintf(key, sizeof key, "k%u", i);
        struct store_review_new review = a_review(place, key, (unsigned char)i);
        review.submitted_ms = 10 + i;
        review.mark_count = i == 1 ? 0 : 1;
        must(add_review(place->store, &review, &error));
    }
    must(store_person_record(place->store, place->arena, place->person, 0, 2, &totals, &own, &count,
                             &error));
    assert_int_equal(totals.looks, 3);
    assert_int_equal(totals.marks, 2);
    assert_int_equal(totals.first_ms, 10);
    assert_int_equal(totals.last_ms, 12);
    assert_true(fabs(totals.days_looked - 3.0 * 0.02 * (POINTS - 1)) < 1e-9);
    assert_int_equal(count, 2);
    assert_int_equal(own[0].submitted_ms, 12);
    assert_int_equal(own[0].mark_count, 1);
    assert_true(own[0].marks[0].ends_d == 101.2);
    assert_int_equal(own[0].conditions, STORE_BREAK);
    assert_int_equal(strlen(own[0].segment), 16);
    assert_int_equal(own[1].mark_count, 0);
    must(store_person_record(place->store, place->arena, place->person, own[1].review, 2, &totals,
                             &own, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(own[0].submitted_ms, 10);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(a_review_sent_twice_is_stored_once),
        IN_PLACE(a_key_with_another_body_and_a_used_lease_store_nothing),
        IN_PLACE(two_people_may_use_the_same_key),
        IN_PLACE(a_late_review_is_taken_only_while_the_segment_is_open),
        IN_PLACE(one_review_that_cannot_be_stored_keeps_its_whole_group_out),
        IN_PLACE(a_mark_that_makes_no_sense_is_refused),
        IN_PLACE(ids_have_no_holes_whatever_is_refused),
        IN_PLACE(a_person_and_a_star_know_what_was_reviewed),
        IN_PLACE(looks_and_marks_of_a_star_end_at_the_newest_asked_for),
        IN_PLACE(every_review_is_visited_with_each_of_its_marks),
        IN_PLACE(ones_own_record_is_newest_first_a_page_at_a_time),
    };
    return cmocka_run_group_tests_name("store: reviews", tests, NULL, NULL);
}
