/* People: handles, joining, signing in. */
#include <stdlib.h>
#include <string.h>
#include <unicase.h>
#include <unictype.h>
#include <uninorm.h>
#include <unistr.h>

#include "ebbmark/clock.h"
#include "ebbmark/text.h"
#include "guest.h"
#include "inside.h"

#define KEY_SIZE 256

static bool invalid_handle(struct base_error *error, const char *why)
{
    return base_fail_field(error, BASE_INVALID, "handle", "%s", why);
}

/* Characters that do not show, or mean nothing yet, would let two handles look the same. U+2800 is
 * a symbol by category and an empty cell by looks. */
static bool shows(ucs4_t c)
{
    return c != 0x2800 && !uc_is_property_default_ignorable_code_point(c) &&
           !uc_is_general_category_withtable(c, UC_CATEGORY_MASK_Cc | UC_CATEGORY_MASK_Cf |
                                                    UC_CATEGORY_MASK_Cs | UC_CATEGORY_MASK_Co |
                                                    UC_CATEGORY_MASK_Cn | UC_CATEGORY_MASK_Zl |
                                                    UC_CATEGORY_MASK_Zp);
}

static bool is_blank(ucs4_t c)
{
    return uc_is_property_white_space(c);
}

static bool check_characters(const char *handle, struct base_error *error)
{
    const uint8_t *at = (const uint8_t *)handle;
    size_t characters = 0;
    ucs4_t c = 0, last = 0;
    while ((at = u8_next(&c, at)) != NULL) {
        if (!shows(c))
            return invalid_handle(error, "A handle may not hold characters that do not show.");
        if (characters == 0 && is_blank(c))
            return invalid_handle(error, "A handle may not begin with a blank.");
        if (characters > 0 && is_blank(c) && is_blank(last))
            return invalid_handle(error, "A handle may not hold two blanks in a row.");
        last = c;
        characters++;
    }
    if (characters == 0)
        return invalid_handle(error, "A handle has at least one character.");
    if (is_blank(last))
        return invalid_handle(error, "A handle may not end with a blank.");
    if (characters > CAMPAIGN_HANDLE_CHARACTERS_MAX)
        return base_fail_field(error, BASE_INVALID, "handle", "A handle has at most %d characters.",
                               CAMPAIGN_HANDLE_CHARACTERS_MAX);
    return true;
}

bool campaign_handle_key(const char *handle, char key[KEY_SIZE], struct base_error *error)
{
    if (!base_text_is_utf8(handle, strlen(handle)))
        return invalid_handle(error, "A handle is UTF-8 text.");
    if (!check_characters(handle, error))
        return false;
    /* Normalised first, because a compatibility form may turn out to be a capital letter. */
    uint8_t form[KEY_SIZE], folded[KEY_SIZE];
    size_t form_length = sizeof form, folded_length = sizeof folded - 1;
    uint8_t *normal =
        u8_normalize(UNINORM_NFKC, (const uint8_t *)handle, strlen(handle), form, &form_length);
    if (normal == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to read a handle.");
    uint8_t *fold = u8_casefold(normal, form_length, NULL, UNINORM_NFKC, folded, &folded_length);
    bool ok = fold == folded;
    if (ok) {
        memcpy(key, folded, folded_length);
        key[folded_length] = '\0';
    } else if (fold == NULL) {
        (void)base_fail(error, BASE_MEMORY, "There is no memory to read a handle.");
    } else {
        (void)invalid_handle(error, "This handle is too long when spelled out.");
    }
    if (fold != folded)
        free(fold);
    if (normal != form)
        free(normal);
    return ok && (key[0] != '\0' || invalid_handle(error, "A handle has at least one letter."));
}

/* Is the key free? Asked before the slow part; store_person_add has the last word. */
static bool key_is_free(struct campaign *campaign, const char *key, struct base_error *error)
{
    struct base_arena *arena = base_arena_new(0);
    if (arena == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to look for a handle.");
    struct store_person person;
    struct base_error problem = {0};
    bool taken = store_person_by_key(campaign->store, arena, key, &person, &problem);
    base_arena_free(arena);
    if (taken)
        return base_fail_field(error, BASE_CONFLICT, "handle",
                               "Somebody has this handle already; choose another.");
    if (problem.kind != BASE_NOT_FOUND) {
        if (error != NULL)
            *error = problem;
        return false;
    }
    return true;
}

bool campaign_person_add(struct campaign *campaign, const char *handle, const char *passphrase,
                         enum store_role role, int64_t *id, struct base_error *error)
{
    char key[KEY_SIZE], hash[crypto_pwhash_STRBYTES] = "";
    return campaign_handle_key(handle, key, error) &&
           (passphrase == NULL || passphrase_check(passphrase, error)) &&
           key_is_free(campaign, key, error) &&
           (passphrase == NULL ||
            passphrase_hash(&campaign->passphrases, passphrase, hash, error)) &&
           store_person_add(campaign->store, handle, key, hash, role, base_clock_unix_ms(), id,
                            error);
}

/* A guest under an invented handle; another one where it is taken. */
static bool add_guest(struct campaign *campaign, int64_t *id, struct base_error *error)
{
    struct base_error problem = {.kind = BASE_CONFLICT};
    bool ok = false;
    for (int tries = 0; !ok && problem.kind == BASE_CONFLICT && tries < 20; tries++) {
        char handle[GUEST_HANDLE_SIZE];
        guest_handle(handle);
        ok = campaign_person_add(campaign, handle, NULL, STORE_REVIEWER, id, &problem);
    }
    if (!ok && error != NULL)
        *error = problem;
    return ok;
}

bool campaign_join(struct campaign *campaign, const char *handle, const char *passphrase,
                   struct base_arena *arena, struct store_person *out, struct base_error *error)
{
    if (campaign_settings_now(campaign).open_to_join == 0)
        return base_fail(error, BASE_DENIED,
                         "This campaign takes no new people by itself; ask its admins.");
    if (handle == NULL && passphrase != NULL)
        return invalid_handle(error, "Choose a handle to go with the passphrase.");
    int64_t id = 0;
    bool added = handle == NULL ? add_guest(campaign, &id, error)
                                : campaign_person_add(campaign, handle, passphrase, STORE_REVIEWER,
                                                      &id, error);
    return added && store_person_by_id(campaign->store, arena, id, out, error);
}

/* Find who that is; *out is zeroed when nobody. False only when the store fails. */
static bool find_person(struct campaign *campaign, const char *handle, struct base_arena *arena,
                        struct store_person *out, struct base_error *error)
{
    char key[KEY_SIZE];
    struct base_error problem = {0};
    *out = (struct store_person){0};
    if (!campaign_handle_key(handle, key, &problem) ||
        !store_person_by_key(campaign->store, arena, key, out, &problem)) {
        *out = (struct store_person){0};
        if (problem.kind != BASE_INVALID && problem.kind != BASE_NOT_FOUND) {
            if (error != NULL)
                *error = problem;
            return false;
        }
    }
    return true;
}

bool campaign_sign_in(struct campaign *campaign, const char *handle, const char *passphrase,
                      struct base_arena *arena, struct store_person *out, struct base_error *error)
{
    bool right = false;
    if (!find_person(campaign, handle, arena, out, error) ||
        !passphrase_verify(&campaign->passphrases, out->passphrase, passphrase, &right, error))
        return false;
    if (!right) {
        *out = (struct store_person){0};
        return base_fail(error, BASE_DENIED, "Handle and passphrase do not go together.");
    }
    if (out->suspended)
        return base_fail(error, BASE_DENIED,
                         "This person is suspended; the campaign's admins can say why.");
    return true;
}

bool campaign_passphrase_set(struct campaign *campaign, int64_t person, const char *passphrase,
                             struct base_error *error)
{
    char hash[crypto_pwhash_STRBYTES];
    return passphrase_check(passphrase, error) &&
           passphrase_hash(&campaign->passphrases, passphrase, hash, error) &&
           store_person_set_passphrase(campaign->store, person, hash, error);
}
