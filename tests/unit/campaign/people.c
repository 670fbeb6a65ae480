/* Handles, joining, signing in, sessions and tokens. */
#include "support.h"

#include <ctype.h>
#include <pthread.h>

static const char *key_of(const char *handle)
{
    static char key[256];
    struct base_error error = {0};
    assert_ok(campaign_handle_key(handle, key, &error), error);
    return key;
}

static void assert_same_key(const char *one, const char *two)
{
    char first[256];
    (void)snprintf(first, sizeof first, "%s", key_of(one));
    assert_string_equal(first, key_of(two));
}

/* Case folding and compatibility forms of Unicode; the examples are from memory. */
static void handles_that_read_alike_have_one_key(void **state)
{
    (void)state;
    assert_same_key("Tern", "tERN");
    assert_same_key("Straße", "STRASSE");
    assert_same_key("Å", "A\u030a");                     /* composed and decomposed */
    assert_same_key("\u212b", "å");                      /* angstrom sign */
    assert_same_key("\uff34\uff45\uff52\uff4e", "tern"); /* full width */
    assert_same_key("\ufb01sh", "fish");                 /* ligature */
    assert_same_key("\u212aelp", "kelp");                /* kelvin sign */
    assert_same_key("\U0001d413ern", "tern");            /* mathematical bold capital */
    assert_same_key("Σίσυφος", "ΣΊΣΥΦΟΣ");               /* final sigma */
    assert_same_key("a\u00a0b", "a b");                  /* no-break space */
    assert_string_not_equal(key_of("tern"), "terns");
}

static void handles_that_cannot_be_read_are_refused(void **state)
{
    (void)state;
    static const char *const bad[] = {
        "",         " ",       " tern",        "tern ",      "te\trn",     "te\nrn",
        "te  rn",   "\u3000x", "te\u200brn",   "\u202etern", "te\u00adrn", "te\ufe0frn",
        "\u115f",   "\u3164",  "te\U000e0001", "\ue000",     "te\u0378",   "\u2800x",
        "\xff\xfe", "te\xc3",  "\xed\xa0\x80", "a\u2028b",
    };
    char key[256];
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct base_error error = {0};
        if (campaign_handle_key(bad[i], key, &error))
            fail_msg("handle %zu was taken", i);
        assert_int_equal(error.kind, BASE_INVALID);
        assert_string_equal(error.field, "handle");
    }
}

static void a_handle_has_at_most_32_characters_of_any_kind(void **state)
{
    (void)state;
    char key[256], text[33 * 4 + 1];
    struct base_error error = {0};
    static const char *const letters[] = {"a", "é", "字", "\U0001f41f"};
    for (size_t i = 0; i < 4; i++) {
        text[0] = '\0';
        for (size_t n = 0; n < 32; n++)
            (void)strcat(text, letters[i]);
        assert_ok(campaign_handle_key(text, key, &error), error);
        (void)strcat(text, letters[i]);
        assert_false(campaign_handle_key(text, key, &error));
        assert_non_null(strstr(error.sentence, "32"));
    }
    /* One character that is spelled out to eighteen: too long when there are many of it. */
    text[0] = '\0';
    for (size_t n = 0; n < 32; n++)
        (void)strcat(text, "\ufdfa");
    assert_false(campaign_handle_key(text, key, &error));
    assert_int_equal(error.kind, BASE_INVALID);
}

static void people_join_and_sign_in(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_person joined, found;
    place_open(&place);
    struct base_arena *arena = base_arena_new(0);
    assert_ok(
        campaign_join(place.campaign, "Brisk Tern", "seven wet stones", arena, &joined, &error),
        error);
    assert_string_equal(joined.handle, "Brisk Tern");
    assert_int_equal(joined.role, STORE_REVIEWER);
    assert_null(strstr(joined.passphrase, "stones"));
    assert_int_equal(strncmp(joined.passphrase, "$argon2id$", 10), 0);
    assert_ok(
        campaign_sign_in(place.campaign, "BRISK tern", "seven wet stones", arena, &found, &error),
        error);
    assert_int_equal(found.id, joined.id);
    assert_false(campaign_join(place.campaign, "brisk TERN", NULL, arena, &found, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
    assert_string_equal(error.field, "handle");
    assert_ok(campaign_passphrase_set(place.campaign, joined.id, "eight dry stones", &error),
              error);
    assert_false(
        campaign_sign_in(place.campaign, "Brisk Tern", "seven wet stones", arena, &found, &error));
    assert_ok(
        campaign_sign_in(place.campaign, "Brisk Tern", "eight dry stones", arena, &found, &error),
        error);
    assert_ok(store_person_set_suspended(place.store, joined.id, true, &error), error);
    assert_false(
        campaign_sign_in(place.campaign, "Brisk Tern", "eight dry stones", arena, &found, &error));
    assert_int_equal(error.kind, BASE_DENIED);
    assert_non_null(strstr(error.sentence, "suspended"));
    base_arena_free(arena);
    place_close(&place);
}

static void passphrases_are_neither_short_nor_endless(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_person person;
    place_open(&place);
    struct base_arena *arena = base_arena_new(0);
    char longest[600];
    memset(longest, 'x', sizeof longest);
    longest[513] = '\0';
    assert_false(campaign_join(place.campaign, "tern", "nine char", arena, &person, &error));
    assert_string_equal(error.field, "passphrase");
    assert_false(campaign_join(place.campaign, "tern", longest, arena, &person, &error));
    longest[512] = '\0';
    assert_ok(campaign_join(place.campaign, "tern", longest, arena, &person, &error), error);
    /* The first 512 bytes of a longer one do not open the door. */
    longest[512] = 'x';
    assert_false(campaign_sign_in(place.campaign, "tern", longest, arena, &person, &error));
    assert_int_equal(error.kind, BASE_DENIED);
    base_arena_free(arena);
    place_close(&place);
}

static void guests_get_handles_of_their_own(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_person guests[20];
    place_open(&place);
    struct base_arena *arena = base_arena_new(0);
    for (size_t i = 0; i < 20; i++) {
        assert_ok(campaign_join(place.campaign, NULL, NULL, arena, &guests[i], &error), error);
        assert_string_equal(guests[i].passphrase, "");
        assert_true(strlen(guests[i].handle) >= 8);
        for (size_t k = 0; k < i; k++)
            assert_string_not_equal(guests[k].handle, guests[i].handle);
    }
    struct store_person person;
    assert_false(campaign_join(place.campaign, NULL, "seven wet stones", arena, &person, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    /* Nobody signs in as a guest by knowing the handle. */
    assert_false(campaign_sign_in(place.campaign, guests[0].handle, "", arena, &person, &error));
    assert_int_equal(error.kind, BASE_DENIED);
    base_arena_free(arena);
    place_close(&place);
}

static void a_closed_campaign_takes_people_by_an_admins_hand_only(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_person person;
    int64_t id = 0;
    place_open(&place);
    struct base_arena *arena = base_arena_new(0);
    change_setting(&place, "open_to_join", "0");
    assert_false(campaign_join(place.campaign, "tern", "seven wet stones", arena, &person, &error));
    assert_int_equal(error.kind, BASE_DENIED);
    assert_ok(
        campaign_person_add(place.campaign, "tern", "seven wet stones", STORE_ADMIN, &id, &error),
        error);
    assert_ok(store_person_by_id(place.store, arena, id, &person, &error), error);
    assert_int_equal(person.role, STORE_ADMIN);
    base_arena_free(arena);
    place_close(&place);
}

static double seconds_to_fail(struct place *place, const char *handle,
                              char sentence[BASE_SENTENCE_SIZE])
{
    struct base_error error = {0};
    struct store_person person;
    struct base_arena *arena = base_arena_new(0);
    double best = 1e9;
    for (int i = 0; i < 3; i++) {
        double began = base_clock_monotonic_s();
        assert_false(
            campaign_sign_in(place->campaign, handle, "nine grey stones", arena, &person, &error));
        double took = base_clock_monotonic_s() - began;
        best = took < best ? took : best;
    }
    assert_int_equal(error.kind, BASE_DENIED);
    (void)snprintf(sentence, BASE_SENTENCE_SIZE, "%s", error.sentence);
    base_arena_free(arena);
    return best;
}

/* An unknown handle, a guest's, and one that cannot be a handle must cost a whole hash, as a wrong
 * passphrase does: without it they would be done a hundred times sooner. The best of three keeps a
 * busy machine from spoiling it. */
static void time_does_not_tell_who_is_there(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    int64_t id = 0;
    char known[BASE_SENTENCE_SIZE], other[BASE_SENTENCE_SIZE];
    static const char *const others[] = {"nobody", "guest", " not a handle "};
    place_open(&place);
    assert_ok(campaign_person_add(place.campaign, "tern", "seven wet stones", STORE_REVIEWER, &id,
                                  &error),
              error);
    (void)add_person(&place, "guest");
    double wrong = seconds_to_fail(&place, "tern", known);
    for (size_t i = 0; i < 3; i++) {
        double took = seconds_to_fail(&place, others[i], other);
        assert_true(took > wrong / 4.0 && took < wrong * 4.0);
        assert_string_equal(known, other);
    }
    place_close(&place);
}

/* ---- many at the door ---- */

struct arrival {
    struct place *place;
    struct base_error error;
    bool ok;
};

static void *arrive(void *argument)
{
    struct arrival *arrival = argument;
    struct store_person person;
    struct base_arena *arena = base_arena_new(0);
    arrival->ok = campaign_sign_in(arrival->place->campaign, "tern", "seven wet stones", arena,
                                   &person, &arrival->error);
    base_arena_free(arena);
    return NULL;
}

static void a_crowd_at_the_door_is_told_to_come_again(void **state)
{
    (void)state;
    enum { CROWD = CAMPAIGN_HASHES_AT_ONCE + CAMPAIGN_HASHES_WAITING_MAX + 20 };
    struct place place;
    struct base_error error = {0};
    int64_t id = 0;
    pthread_t threads[CROWD];
    struct arrival arrivals[CROWD];
    unsigned in = 0, busy = 0;
    place_open(&place);
    assert_ok(campaign_person_add(place.campaign, "tern", "seven wet stones", STORE_REVIEWER, &id,
                                  &error),
              error);
    for (unsigned i = 0; i < CROWD; i++) {
        arrivals[i] = (struct arrival){.place = &place};
        assert_int_equal(pthread_create(&threads[i], NULL, arrive, &arrivals[i]), 0);
    }
    for (unsigned i = 0; i < CROWD; i++) {
        (void)pthread_join(threads[i], NULL);
        in += arrivals[i].ok ? 1 : 0;
        busy += !arrivals[i].ok && arrivals[i].error.kind == BASE_BUSY ? 1 : 0;
    }
    assert_int_equal(in + busy, CROWD);
    assert_true(in >= CAMPAIGN_HASHES_WAITING_MAX);
    assert_true(busy >= 1);
    place_close(&place);
}

/* ---- sessions and tokens ---- */

static void a_secret_opens_and_its_end_closes(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_access_found found;
    char session[CAMPAIGN_SECRET_SIZE], token[CAMPAIGN_SECRET_SIZE];
    place_open(&place);
    int64_t person = add_person(&place, "tern");
    int64_t before = base_clock_unix_ms();
    assert_ok(campaign_access_give(place.campaign, STORE_SESSION, person, STORE_REVIEWER, 2.0,
                                   session, &error),
              error);
    assert_ok(campaign_access_give(place.campaign, STORE_TOKEN, person, STORE_SCIENCE, 1.0, token,
                                   &error),
              error);
    assert_int_equal(strlen(session), 43);
    for (const char *c = session; *c != '\0'; c++)
        assert_true(isalnum((unsigned char)*c) || *c == '-' || *c == '_');
    assert_ok(campaign_access_check(place.campaign, STORE_SESSION, session, &found, &error), error);
    assert_int_equal(found.person, person);
    assert_in_range(found.ends_ms - before, 2 * 86400000, 2 * 86400000 + 5000);
    /* A token has no more than its person. */
    assert_ok(campaign_access_check(place.campaign, STORE_TOKEN, token, &found, &error), error);
    assert_int_equal(found.role, STORE_REVIEWER);
    /* A session is no token, and a changed letter opens nothing. */
    assert_false(campaign_access_check(place.campaign, STORE_TOKEN, session, &found, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    session[10] = session[10] == 'a' ? 'b' : 'a';
    assert_false(campaign_access_check(place.campaign, STORE_SESSION, session, &found, &error));
    assert_false(campaign_access_check(place.campaign, STORE_SESSION, "", &found, &error));
    assert_ok(campaign_access_end(place.campaign, STORE_TOKEN, token, &error), error);
    assert_false(campaign_access_check(place.campaign, STORE_TOKEN, token, &found, &error));
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(handles_that_read_alike_have_one_key),
        cmocka_unit_test(handles_that_cannot_be_read_are_refused),
        cmocka_unit_test(a_handle_has_at_most_32_characters_of_any_kind),
        cmocka_unit_test(people_join_and_sign_in),
        cmocka_unit_test(passphrases_are_neither_short_nor_endless),
        cmocka_unit_test(guests_get_handles_of_their_own),
        cmocka_unit_test(a_closed_campaign_takes_people_by_an_admins_hand_only),
        cmocka_unit_test(time_does_not_tell_who_is_there),
        cmocka_unit_test(a_crowd_at_the_door_is_told_to_come_again),
        cmocka_unit_test(a_secret_opens_and_its_end_closes),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
