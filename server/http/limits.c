#include "limits.h"

#include <assert.h>
#include <pthread.h>
#include <sodium.h>
#include <stdint.h>
#include <stdlib.h>

#define WAYS 8u
#define STRIPES 64u

struct bucket {
    uint64_t key; /* the keyed hash of whose it is; 0: free */
    double tokens;
    double at_s; /* when `tokens` was true */
};

struct http_limits {
    double rate, burst;
    size_t sets; /* a power of two */
    /* Of whoever is limited: without it nobody can choose keys that meet in one set. */
    unsigned char secret[crypto_shorthash_KEYBYTES];
    pthread_mutex_t stripes[STRIPES]; /* set i is touched under stripe i % STRIPES */
    struct bucket buckets[];
};

bool http_limits_make(double rate, double burst, size_t slots, struct http_limits **out,
                      struct base_error *error)
{
    assert(rate > 0.0 && burst >= 1.0 && slots >= 1);
    size_t sets = 1;
    while (sets * WAYS < slots)
        sets *= 2;
    *out = calloc(1, sizeof **out + sets * WAYS * sizeof(struct bucket));
    if (*out == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the rate limits.");
    (*out)->rate = rate;
    (*out)->burst = burst;
    (*out)->sets = sets;
    crypto_shorthash_keygen((*out)->secret);
    for (size_t i = 0; i < STRIPES; i++)
        (void)pthread_mutex_init(&(*out)->stripes[i], NULL);
    return true;
}

void http_limits_free(struct http_limits *limits)
{
    if (limits == NULL)
        return;
    for (size_t i = 0; i < STRIPES; i++)
        (void)pthread_mutex_destroy(&limits->stripes[i]);
    free(limits);
}

static double tokens_at(const struct http_limits *limits, const struct bucket *bucket, double now_s)
{
    double tokens = bucket->tokens + (now_s - bucket->at_s) * limits->rate;
    return tokens < limits->burst ? tokens : limits->burst;
}

/* The key's bucket in its set, or a new and full one in the place that is missed least. */
static struct bucket *find(const struct http_limits *limits, struct bucket *set, uint64_t key,
                           double now_s)
{
    struct bucket *least_missed = set;
    double most_tokens = -1.0;
    for (size_t i = 0; i < WAYS; i++) {
        if (set[i].key == key)
            return &set[i];
        double tokens = set[i].key == 0 ? limits->burst + 1.0 : tokens_at(limits, &set[i], now_s);
        if (tokens > most_tokens) {
            most_tokens = tokens;
            least_missed = &set[i];
        }
    }
    *least_missed = (struct bucket){.key = key, .tokens = limits->burst, .at_s = now_s};
    return least_missed;
}

bool http_limits_take(struct http_limits *limits, const void *key, size_t size, double now_s,
                      double *wait_s)
{
    if (limits == NULL)
        return true;
    uint64_t hash;
    (void)crypto_shorthash((unsigned char *)&hash, key, size, limits->secret);
    if (hash == 0)
        hash = 1;
    size_t set = (size_t)(hash >> 16) & (limits->sets - 1);
    pthread_mutex_t *stripe = &limits->stripes[set % STRIPES];
    (void)pthread_mutex_lock(stripe);
    struct bucket *bucket = find(limits, &limits->buckets[set * WAYS], hash, now_s);
    double tokens = tokens_at(limits, bucket, now_s);
    bool granted = tokens >= 1.0;
    bucket->tokens = granted ? tokens - 1.0 : tokens;
    bucket->at_s = now_s;
    (void)pthread_mutex_unlock(stripe);
    *wait_s = granted ? 0.0 : (1.0 - tokens) / limits->rate;
    return granted;
}
