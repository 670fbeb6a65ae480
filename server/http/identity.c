#include "identity.h"

#include <assert.h>
#include <pthread.h>
#include <sodium.h>
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>

#include "cookie.h"
#include "ebbmark/clock.h"

#define WAYS 4u
#define SETS 4096u
#define STRIPES 64u
#define HASH_SIZE crypto_shorthash_siphashx24_BYTES

struct remembered {
    unsigned char hash[HASH_SIZE];
    double until_s; /* monotonic; 0: free */
    struct http_identity identity;
};

struct http_identities {
    http_identify *identify;
    void *context;
    unsigned char key[crypto_shorthash_siphashx24_KEYBYTES];
    /* Counts the forgettings: what was asked for before one is not put in after it. */
    atomic_uint_fast64_t forgettings;
    pthread_mutex_t stripes[STRIPES]; /* set i is touched under stripe i % STRIPES */
    struct remembered entries[SETS * WAYS];
};

bool http_identities_make(http_identify *identify, void *context, struct http_identities **out,
                          struct base_error *error)
{
    *out = calloc(1, sizeof **out);
    if (*out == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the cache of identities.");
    (*out)->identify = identify;
    (*out)->context = context;
    crypto_shorthash_keygen((*out)->key);
    for (size_t i = 0; i < STRIPES; i++)
        (void)pthread_mutex_init(&(*out)->stripes[i], NULL);
    return true;
}

void http_identities_free(struct http_identities *identities)
{
    if (identities == NULL)
        return;
    for (size_t i = 0; i < STRIPES; i++)
        (void)pthread_mutex_destroy(&identities->stripes[i]);
    free(identities);
}

static void hash_secret(const struct http_identities *identities, const char *secret, size_t length,
                        bool is_token, unsigned char hash[HASH_SIZE])
{
    unsigned char text[HTTP_SECRET_MAX + 1];
    text[0] = is_token ? 't' : 'c';
    memcpy(text + 1, secret, length);
    (void)crypto_shorthash_siphashx24(hash, text, length + 1, identities->key);
}

static size_t set_of(const unsigned char hash[HASH_SIZE])
{
    return (hash[0] | (size_t)hash[1] << 8) % SETS;
}

static bool recall(struct http_identities *identities, const unsigned char hash[HASH_SIZE],
                   double now_s, struct http_identity *out)
{
    size_t set = set_of(hash);
    bool found = false;
    (void)pthread_mutex_lock(&identities->stripes[set % STRIPES]);
    for (size_t i = 0; i < WAYS && !found; i++) {
        const struct remembered *entry = &identities->entries[set * WAYS + i];
        found = entry->until_s > now_s && sodium_memcmp(entry->hash, hash, HASH_SIZE) == 0;
        if (found)
            *out = entry->identity;
    }
    (void)pthread_mutex_unlock(&identities->stripes[set % STRIPES]);
    return found;
}

/* Put it in the place of the one that ends first, unless somebody was forgotten since `asked_at`.
 */
static void remember(struct http_identities *identities, const unsigned char hash[HASH_SIZE],
                     const struct http_identity *identity, double until_s, uint64_t asked_at)
{
    size_t set = set_of(hash);
    (void)pthread_mutex_lock(&identities->stripes[set % STRIPES]);
    if (atomic_load(&identities->forgettings) == asked_at) {
        struct remembered *place = &identities->entries[set * WAYS];
        for (size_t i = 1; i < WAYS; i++)
            if (identities->entries[set * WAYS + i].until_s < place->until_s)
                place = &identities->entries[set * WAYS + i];
        memcpy(place->hash, hash, HASH_SIZE);
        place->identity = *identity;
        place->until_s = until_s;
    }
    (void)pthread_mutex_unlock(&identities->stripes[set % STRIPES]);
}

bool http_identities_find(struct http_identities *identities, const char *secret, size_t length,
                          bool is_token, double now_s, struct http_identity *out)
{
    assert(length <= HTTP_SECRET_MAX);
    *out = (struct http_identity){0};
    unsigned char hash[HASH_SIZE];
    hash_secret(identities, secret, length, is_token, hash);
    if (recall(identities, hash, now_s, out))
        return true;
    char text[HTTP_SECRET_MAX + 1];
    memcpy(text, secret, length);
    text[length] = '\0';
    uint64_t asked_at = atomic_load(&identities->forgettings);
    bool known = identities->identify(identities->context, text, is_token, out);
    sodium_memzero(text, sizeof text);
    double left_s = HTTP_IDENTITY_KEPT_S;
    if (known && out->ends_ms != 0) {
        double ends_in_s = (double)(out->ends_ms - base_clock_unix_ms()) / 1000.0;
        left_s = ends_in_s < left_s ? ends_in_s : left_s;
    }
    if (!known || left_s <= 0.0) {
        *out = (struct http_identity){0};
        return false;
    }
    out->by_token = is_token;
    remember(identities, hash, out, now_s + left_s, asked_at);
    return true;
}

void http_identities_forget(struct http_identities *identities, int64_t person)
{
    (void)atomic_fetch_add(&identities->forgettings, 1);
    for (size_t set = 0; set < SETS; set++) {
        (void)pthread_mutex_lock(&identities->stripes[set % STRIPES]);
        for (size_t i = 0; i < WAYS; i++) {
            struct remembered *entry = &identities->entries[set * WAYS + i];
            if (person == 0 || entry->identity.person == person)
                *entry = (struct remembered){0};
        }
        (void)pthread_mutex_unlock(&identities->stripes[set % STRIPES]);
    }
}
