/* Sessions and tokens: the secret goes out once, the database keeps its SHA-256. */
#include <assert.h>
#include <sodium.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "inside.h"

#define SECRET_BYTES 32
#define DAY_MS 86400000.0

bool campaign_access_give(struct campaign *campaign, enum store_access kind, int64_t person,
                          enum store_role role, double days, char secret[CAMPAIGN_SECRET_SIZE],
                          struct base_error *error)
{
    assert(days > 0.0 && days < 1e6);
    unsigned char random[SECRET_BYTES], hash[STORE_HASH_SIZE];
    randombytes_buf(random, sizeof random);
    (void)sodium_bin2base64(secret, CAMPAIGN_SECRET_SIZE, random, sizeof random,
                            sodium_base64_VARIANT_URLSAFE_NO_PADDING);
    sodium_memzero(random, sizeof random);
    (void)crypto_hash_sha256(hash, (const unsigned char *)secret, strlen(secret));
    int64_t now = base_clock_unix_ms();
    bool ok = store_access_add(campaign->store, kind, hash, person, role, now,
                               now + (int64_t)(days * DAY_MS), error);
    if (!ok)
        sodium_memzero(secret, CAMPAIGN_SECRET_SIZE);
    return ok;
}

/* False for a text that cannot be a secret of ours. */
static bool hash_secret(const char *secret, unsigned char hash[STORE_HASH_SIZE])
{
    size_t length = strnlen(secret, CAMPAIGN_SECRET_SIZE);
    if (length != CAMPAIGN_SECRET_SIZE - 1)
        return false;
    (void)crypto_hash_sha256(hash, (const unsigned char *)secret, length);
    return true;
}

bool campaign_access_check(struct campaign *campaign, enum store_access kind, const char *secret,
                           struct store_access_found *out, struct base_error *error)
{
    unsigned char hash[STORE_HASH_SIZE];
    if (!hash_secret(secret, hash))
        return base_fail(error, BASE_NOT_FOUND, "This sign-in is not known.");
    return store_access_find(campaign->store, kind, hash, base_clock_unix_ms(), out, error);
}

bool campaign_access_end(struct campaign *campaign, enum store_access kind, const char *secret,
                         struct base_error *error)
{
    unsigned char hash[STORE_HASH_SIZE];
    return !hash_secret(secret, hash) || store_access_end(campaign->store, kind, hash, error);
}
