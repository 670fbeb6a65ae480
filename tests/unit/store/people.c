#include "support.h"

static void a_person_is_found_by_handle_and_by_id_as_they_joined(void **state)
{
    struct place *place = *state;
    struct store_person person;
    must(store_person_by_key(place->store, place->arena, "ada", &person, &error));
    assert_int_equal(person.id, place->person);
    assert_string_equal(person.handle, "Ada");
    assert_string_equal(person.handle_key, "ada");
    assert_string_equal(person.passphrase, "hash");
    assert_int_equal(person.role, STORE_REVIEWER);
    assert_int_equal(person.joined_ms, 1);
    assert_false(person.suspended || person.credit || person.left);
    must(store_person_by_id(place->store, place->arena, place->person, &person, &error));
    assert_string_equal(person.handle, "Ada");
    must_fail(store_person_by_key(place->store, place->arena, "Ada", &person, &error),
              BASE_NOT_FOUND);
    must_fail(store_person_by_id(place->store, place->arena, 99, &person, &error), BASE_NOT_FOUND);
}

static void a_taken_handle_is_refused_and_names_the_field(void **state)
{
    struct place *place = *state;
    int64_t id;
    must_fail(store_person_add(place->store, "ADA", "ada", "", STORE_ADMIN, 1, &id, &error),
              BASE_CONFLICT);
    assert_string_equal(error.field, "handle");
}

static void what_is_changed_of_a_person_is_kept_over_a_restart(void **state)
{
    struct place *place = *state;
    struct store_person person;
    must(store_person_set_role(place->store, place->person, STORE_ADMIN, &error));
    must(store_person_set_suspended(place->store, place->person, true, &error));
    must(store_person_set_credit(place->store, place->person, true, &error));
    must(store_person_set_passphrase(place->store, place->person, "other", &error));
    reopen(place);
    must(store_person_by_id(place->store, place->arena, place->person, &person, &error));
    assert_int_equal(person.role, STORE_ADMIN);
    assert_true(person.suspended && person.credit);
    assert_string_equal(person.passphrase, "other");
    must(store_person_set_suspended(place->store, place->person, false, &error));
    must(store_person_by_id(place->store, place->arena, place->person, &person, &error));
    assert_false(person.suspended);
}

static void changing_a_person_who_is_not_there_is_said(void **state)
{
    struct place *place = *state;
    must_fail(store_person_set_role(place->store, 99, STORE_ADMIN, &error), BASE_NOT_FOUND);
    must_fail(store_person_set_suspended(place->store, 99, true, &error), BASE_NOT_FOUND);
    must_fail(store_person_set_credit(place->store, 99, true, &error), BASE_NOT_FOUND);
    must_fail(store_person_set_passphrase(place->store, 99, "x", &error), BASE_NOT_FOUND);
    must_fail(store_person_forget(place->store, 99, &error), BASE_NOT_FOUND);
}

static void people_are_listed_by_id_a_page_at_a_time(void **state)
{
    struct place *place = *state;
    int64_t second, third;
    struct store_person *people;
    size_t count;
    must(store_person_add(place->store, "Bo", "bo", "", STORE_SCIENCE, 2, &second, &error));
    must(store_person_add(place->store, "Cy", "cy", "", STORE_ADMIN, 3, &third, &error));
    must(store_people_list(place->store, place->arena, 0, 2, &people, &count, &error));
    assert_int_equal(count, 2);
    assert_int_equal(people[1].id, second);
    must(store_people_list(place->store, place->arena, second, 2, &people, &count, &error));
    assert_int_equal(count, 1);
    assert_string_equal(people[0].handle, "Cy");
    must(store_people_list(place->store, place->arena, third, 2, &people, &count, &error));
    assert_int_equal(count, 0);
}

static void a_person_who_leaves_keeps_their_reviews_without_the_handle(void **state)
{
    struct place *place = *state;
    struct store_review_new review = a_review(place, "k1", 1);
    const unsigned char hash[STORE_HASH_SIZE] = {1};
    struct store_access_found found;
    struct store_person person;
    struct store_counts counts;
    int64_t other;
    must(add_review(place->store, &review, &error));
    must(store_access_add(place->store, STORE_SESSION, hash, place->person, STORE_REVIEWER, 1, 100,
                          &error));
    must(store_person_forget(place->store, place->person, &error));
    must(store_person_by_id(place->store, place->arena, place->person, &person, &error));
    assert_true(person.left);
    assert_false(person.credit);
    assert_string_equal(person.handle, "");
    assert_null(person.handle_key);
    assert_string_equal(person.passphrase, "");
    must_fail(store_access_find(place->store, STORE_SESSION, hash, 2, &found, &error),
              BASE_NOT_FOUND);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 1);
    assert_int_equal(counts.people, 0);
    must_fail(store_person_set_role(place->store, place->person, STORE_ADMIN, &error),
              BASE_NOT_FOUND);
    must(store_person_add(place->store, "Ada", "ada", "", STORE_REVIEWER, 1, &other, &error));
    assert_int_not_equal(other, place->person);
}

static void an_access_is_found_until_it_ends_and_only_as_its_kind(void **state)
{
    struct place *place = *state;
    const unsigned char hash[STORE_HASH_SIZE] = {7}, other[STORE_HASH_SIZE] = {8};
    struct store_access_found found;
    must(store_access_add(place->store, STORE_SESSION, hash, place->person, STORE_REVIEWER, 1, 100,
                          &error));
    must(store_access_find(place->store, STORE_SESSION, hash, 99, &found, &error));
    assert_int_equal(found.person, place->person);
    assert_int_equal(found.ends_ms, 100);
    assert_false(found.suspended);
    must_fail(store_access_find(place->store, STORE_SESSION, hash, 100, &found, &error),
              BASE_NOT_FOUND);
    must_fail(store_access_find(place->store, STORE_TOKEN, hash, 99, &found, &error),
              BASE_NOT_FOUND);
    must_fail(store_access_find(place->store, STORE_SESSION, other, 99, &found, &error),
              BASE_NOT_FOUND);
    must(store_access_end(place->store, STORE_SESSION, hash, &error));
    must_fail(store_access_find(place->store, STORE_SESSION, hash, 99, &found, &error),
              BASE_NOT_FOUND);
}

static void a_token_has_the_lower_of_two_roles_and_shows_a_suspension(void **state)
{
    struct place *place = *state;
    const unsigned char low[STORE_HASH_SIZE] = {1}, high[STORE_HASH_SIZE] = {2};
    struct store_access_found found;
    must(store_person_set_role(place->store, place->person, STORE_SCIENCE, &error));
    must(store_access_add(place->store, STORE_TOKEN, low, place->person, STORE_REVIEWER, 1, 100,
                          &error));
    must(store_access_add(place->store, STORE_TOKEN, high, place->person, STORE_ADMIN, 1, 100,
                          &error));
    must(store_access_find(place->store, STORE_TOKEN, low, 2, &found, &error));
    assert_int_equal(found.role, STORE_REVIEWER);
    must(store_access_find(place->store, STORE_TOKEN, high, 2, &found, &error));
    assert_int_equal(found.role, STORE_SCIENCE);
    must(store_person_set_suspended(place->store, place->person, true, &error));
    must(store_access_find(place->store, STORE_TOKEN, high, 2, &found, &error));
    assert_true(found.suspended);
}

static void purging_removes_what_ended_and_nothing_else(void **state)
{
    struct place *place = *state;
    const unsigned char old[STORE_HASH_SIZE] = {1}, fresh[STORE_HASH_SIZE] = {2};
    struct store_access_found found;
    must(store_access_add(place->store, STORE_SESSION, old, place->person, 1, 1, 50, &error));
    must(store_access_add(place->store, STORE_SESSION, fresh, place->person, 1, 1, 100, &error));
    must(store_access_purge(place->store, 60, &error));
    must_fail(store_access_find(place->store, STORE_SESSION, old, 2, &found, &error),
              BASE_NOT_FOUND);
    must(store_access_find(place->store, STORE_SESSION, fresh, 60, &found, &error));
}

static void an_access_for_nobody_is_refused(void **state)
{
    struct place *place = *state;
    const unsigned char hash[STORE_HASH_SIZE] = {1};
    must_fail(store_access_add(place->store, STORE_SESSION, hash, 99, STORE_REVIEWER, 1, 2, &error),
              BASE_NOT_FOUND);
}

static void a_secret_is_made_once_and_kept(void **state)
{
    struct place *place = *state;
    unsigned char first[STORE_HASH_SIZE], again[STORE_HASH_SIZE], other[STORE_HASH_SIZE];
    must(store_secret(place->store, "sessions", first, &error));
    must(store_secret(place->store, "leases", other, &error));
    reopen(place);
    must(store_secret(place->store, "sessions", again, &error));
    assert_memory_equal(first, again, STORE_HASH_SIZE);
    assert_memory_not_equal(first, other, STORE_HASH_SIZE);
}

static void a_setting_is_kept_and_written_over(void **state)
{
    struct place *place = *state;
    struct store_setting *settings;
    size_t count;
    must(store_settings_read(place->store, place->arena, &settings, &count, &error));
    assert_int_equal(count, 0);
    must(store_setting_write(place->store, "looks_least", "5", place->person, &error));
    must(store_setting_write(place->store, "campaign", "Reedbed \xc3\xa9", place->person, &error));
    must(store_setting_write(place->store, "looks_least", "8", place->person, &error));
    reopen(place);
    must(store_settings_read(place->store, place->arena, &settings, &count, &error));
    assert_int_equal(count, 2);
    assert_string_equal(settings[0].name, "campaign");
    assert_string_equal(settings[0].value, "Reedbed \xc3\xa9");
    assert_string_equal(settings[1].value, "8");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(a_person_is_found_by_handle_and_by_id_as_they_joined),
        IN_PLACE(a_taken_handle_is_refused_and_names_the_field),
        IN_PLACE(what_is_changed_of_a_person_is_kept_over_a_restart),
        IN_PLACE(changing_a_person_who_is_not_there_is_said),
        IN_PLACE(people_are_listed_by_id_a_page_at_a_time),
        IN_PLACE(a_person_who_leaves_keeps_their_reviews_without_the_handle),
        IN_PLACE(an_access_is_found_until_it_ends_and_only_as_its_kind),
        IN_PLACE(a_token_has_the_lower_of_two_roles_and_shows_a_suspension),
        IN_PLACE(purging_removes_what_ended_and_nothing_else),
        IN_PLACE(an_access_for_nobody_is_refused),
        IN_PLACE(a_secret_is_made_once_and_kept),
        IN_PLACE(a_setting_is_kept_and_written_over),
    };
    return cmocka_run_group_tests_name("store: people and settings", tests, NULL, NULL);
}
