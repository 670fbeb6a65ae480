/* Leases as texts: sealed, so that they need not be stored and hold over a restart. */
#include <sodium.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "inside.h"

#define MINUTE_MS 60000
#define VERSION 1

/* What is sealed: a version byte; person, segment and end as little-endian int64; the nonce that
 * the store keeps with the review. */
#define BODY_SIZE (1 + 3 * 8 + 16)
#define SEALED_SIZE (crypto_secretbox_NONCEBYTES + crypto_secretbox_MACBYTES + BODY_SIZE)
#define VARIANT sodium_base64_VARIANT_URLSAFE_NO_PADDING

_Static_assert(sodium_base64_ENCODED_LEN(SEALED_SIZE, VARIANT) <= CAMPAIGN_LEASE_SIZE,
               "a lease fits its text");
_Static_assert(crypto_secretbox_KEYBYTES == STORE_HASH_SIZE, "the store's secrets are keys");

static void put_integer(unsigned char *out, int64_t value)
{
    for (unsigned i = 0; i < 8; i++)
        out[i] = (unsigned char)((uint64_t)value >> (8 * i));
}

static int64_t get_integer(const unsigned char *in)
{
    uint64_t value = 0;
    for (unsigned i = 0; i < 8; i++)
        value |= (uint64_t)in[i] << (8 * i);
    return (int64_t)value;
}

static void seal(const struct campaign *campaign, int64_t person, int64_t segment,
                 int64_t expires_ms, char text[CAMPAIGN_LEASE_SIZE])
{
    unsigned char body[BODY_SIZE], sealed[SEALED_SIZE];
    body[0] = VERSION;
    put_integer(body + 1, person);
    put_integer(body + 9, segment);
    put_integer(body + 17, expires_ms);
    randombytes_buf(body + 25, 16);
    randombytes_buf(sealed, crypto_secretbox_NONCEBYTES);
    (void)crypto_secretbox_easy(sealed + crypto_secretbox_NONCEBYTES, body, sizeof body, sealed,
                                campaign->lease_key);
    (void)sodium_bin2base64(text, CAMPAIGN_LEASE_SIZE, sealed, sizeof sealed, VARIANT);
}

bool campaign_lease_open(struct campaign *campaign, const char *text,
                         struct campaign_lease_read *out, struct base_error *error)
{
    unsigned char body[BODY_SIZE], sealed[SEALED_SIZE];
    size_t size = 0;
    const char *end = NULL;
    size_t length = strnlen(text, CAMPAIGN_LEASE_SIZE);
    bool ours =
        length < CAMPAIGN_LEASE_SIZE &&
        sodium_base642bin(sealed, sizeof sealed, text, length, NULL, &size, &end, VARIANT) == 0 &&
        size == sizeof sealed && end == text + length &&
        crypto_secretbox_open_easy(body, sealed + crypto_secretbox_NONCEBYTES,
                                   sizeof sealed - crypto_secretbox_NONCEBYTES, sealed,
                                   campaign->lease_key) == 0 &&
        body[0] == VERSION;
    if (!ours)
        return base_fail_field(error, BASE_INVALID, "lease", "This lease was not given out here.");
    *out = (struct campaign_lease_read){.person = get_integer(body + 1),
                                        .segment = get_integer(body + 9),
                                        .expires_ms = get_integer(body + 17)};
    memcpy(out->nonce, body + 25, sizeof out->nonce);
    out->expired = base_clock_unix_ms() >= out->expires_ms;
    return true;
}

/* Read the segment that was found. *open is false when it is no longer handed out, which the queue
 * had not heard of. */
static bool read_segment(struct campaign *campaign, struct base_arena *arena, int64_t id,
                         struct store_segment *out, bool *open, struct base_error *error)
{
    struct base_error problem = {0};
    bool found = store_segment_by_id(campaign->store, arena, id, out, &problem);
    *open = found && out->open;
    if (!found && problem.kind != BASE_NOT_FOUND) {
        if (error != NULL)
            *error = problem;
        return false;
    }
    return true;
}

#define STALE_MAX 16 /* so many in a row, and the queue is read again */

bool campaign_lease_take(struct campaign *campaign, struct base_arena *arena, int64_t person,
                         struct campaign_lease *out, bool *found, struct base_error *error)
{
    const struct campaign_settings settings = campaign_settings_now(campaign);
    bool ok = true, settled = false;
    *found = false;
    for (unsigned stale = 0; ok && !settled;) {
        int64_t now = base_clock_unix_ms(), segment = 0;
        const struct handout_wish wish = {.person = person,
                                          .looks_most = (unsigned)settings.looks_most,
                                          .now_ms = now,
                                          .expires_ms = now + settings.lease_minutes * MINUTE_MS};
        bool open = false;
        ok = handout_take(campaign->handout, &wish, &segment, found, error);
        if (!ok || !*found)
            break;
        ok = read_segment(campaign, arena, segment, &out->segment, &open, error);
        settled = ok && open;
        if (settled) {
            out->expires_ms = wish.expires_ms;
            seal(campaign, person, segment, wish.expires_ms, out->text);
        } else {
            handout_give_back(campaign->handout, person, segment, !ok);
            if (ok && ++stale % STALE_MAX == 0)
                ok = handout_refresh(campaign->handout, error);
        }
    }
    *found = *found && ok;
    return ok;
}

bool campaign_may_see(struct campaign *campaign, int64_t person, int64_t segment)
{
    struct base_error error = {0};
    bool may = handout_may_see(campaign->handout, person, segment, base_clock_unix_ms(), &error);
    if (error.kind != BASE_NONE)
        campaign_tell(campaign, BASE_LOG_ERROR, "may_see_failed", "detail", error.sentence);
    return may;
}

bool campaign_may_see_with(struct campaign *campaign, int64_t person, int64_t segment,
                           const char *lease)
{
    struct campaign_lease_read read = {0};
    if (lease != NULL && campaign_lease_open(campaign, lease, &read, NULL) &&
        read.person == person && read.segment == segment &&
        base_clock_unix_ms() < read.expires_ms + CAMPAIGN_LEASE_AFTER_MS)
        return true;
    return campaign_may_see(campaign, person, segment);
}
