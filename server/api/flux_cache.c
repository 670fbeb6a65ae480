#include "flux_cache.h"

#include <pthread.h>
#include <stdlib.h>
#include <string.h>

#define BUCKETS 16384u

struct kept {
    char public_id[STORE_PUBLIC_ID_SIZE];
    enum campaign_view view;
    int64_t segment;
    struct http_kept_body *body;
    struct kept *next;          /* in its bucket */
    struct kept *newer, *older; /* by last use */
};

struct flux_cache {
    pthread_mutex_t lock; /* guards everything below */
    struct kept *buckets[BUCKETS];
    struct kept *newest, *oldest;
    size_t bytes, bytes_max;
};

struct flux_cache *flux_cache_open(size_t bytes)
{
    struct flux_cache *cache = calloc(1, sizeof *cache);
    if (cache == NULL)
        return NULL;
    (void)pthread_mutex_init(&cache->lock, NULL);
    cache->bytes_max = bytes;
    return cache;
}

/* Public ids are random, so their first digits are a hash already. */
static struct kept **bucket_of(struct flux_cache *cache, const char *public_id,
                               enum campaign_view view)
{
    unsigned hash = (unsigned)view;
    for (size_t i = 0; public_id[i] != '\0' && i < STORE_PUBLIC_ID_SIZE; i++)
        hash = hash * 31u + (unsigned char)public_id[i];
    return &cache->buckets[hash % BUCKETS];
}

static struct kept *find(struct flux_cache *cache, const char *public_id, enum campaign_view view)
{
    struct kept *kept = *bucket_of(cache, public_id, view);
    while (kept != NULL && (kept->view != view || strcmp(kept->public_id, public_id) != 0))
        kept = kept->next;
    return kept;
}

static void unlink_use(struct flux_cache *cache, struct kept *kept)
{
    *(kept->newer != NULL ? &kept->newer->older : &cache->newest) = kept->older;
    *(kept->older != NULL ? &kept->older->newer : &cache->oldest) = kept->newer;
}

static void link_newest(struct flux_cache *cache, struct kept *kept)
{
    kept->newer = NULL;
    kept->older = cache->newest;
    *(cache->newest != NULL ? &cache->newest->newer : &cache->oldest) = kept;
    cache->newest = kept;
}

static void drop(struct flux_cache *cache, struct kept *kept)
{
    struct kept **at = bucket_of(cache, kept->public_id, kept->view);
    while (*at != kept)
        at = &(*at)->next;
    *at = kept->next;
    unlink_use(cache, kept);
    cache->bytes -= http_kept_size(kept->body);
    http_kept_drop(kept->body);
    free(kept);
}

void flux_cache_close(struct flux_cache *cache)
{
    if (cache == NULL)
        return;
    while (cache->oldest != NULL)
        drop(cache, cache->oldest);
    (void)pthread_mutex_destroy(&cache->lock);
    free(cache);
}

bool flux_cache_get(struct flux_cache *cache, const char *public_id, enum campaign_view view,
                    struct flux_kept *out)
{
    (void)pthread_mutex_lock(&cache->lock);
    struct kept *kept = find(cache, public_id, view);
    if (kept != NULL) {
        unlink_use(cache, kept);
        link_newest(cache, kept);
        http_kept_hold(kept->body);
        *out = (struct flux_kept){kept->body, kept->segment};
    }
    (void)pthread_mutex_unlock(&cache->lock);
    return kept != NULL;
}

void flux_cache_put(struct flux_cache *cache, const char *public_id, enum campaign_view view,
                    int64_t segment, struct http_kept_body *body)
{
    struct kept *kept = calloc(1, sizeof *kept);
    if (kept == NULL || strlen(public_id) >= sizeof kept->public_id) {
        free(kept); /* without memory it is simply not kept */
        return;
    }
    memcpy(kept->public_id, public_id, strlen(public_id) + 1);
    kept->view = view;
    kept->segment = segment;
    kept->body = body;
    (void)pthread_mutex_lock(&cache->lock);
    if (find(cache, public_id, view) == NULL) {
        struct kept **bucket = bucket_of(cache, public_id, view);
        http_kept_hold(body);
        kept->next = *bucket;
        *bucket = kept;
        link_newest(cache, kept);
        cache->bytes += http_kept_size(body);
        while (cache->bytes > cache->bytes_max && cache->oldest != kept)
            drop(cache, cache->oldest);
        kept = NULL;
    }
    (void)pthread_mutex_unlock(&cache->lock);
    free(kept);
}
