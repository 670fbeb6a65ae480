#include "flux_kept.h"

#include <pthread.h>
#include <stdlib.h>

#define SHARDS 16u
#define BUCKETS 1024u     /* of each shard */
#define ENTRY_BYTES 1024u /* what an entry costs beside its body, about */

struct entry {
    struct flux_key key;
    int64_t segment;
    struct http_kept_body *body;
    size_t bytes;
    struct entry *next;            /* in its bucket */
    struct entry *later, *earlier; /* by when it was asked for */
};

struct shard {
    pthread_mutex_t lock; /* guards the rest */
    struct entry *buckets[BUCKETS];
    struct entry *latest, *earliest;
    size_t bytes, bytes_most;
    uint64_t bodies, found, missed;
};

struct flux_kept {
    struct shard shards[SHARDS];
};

struct flux_kept *flux_kept_new(size_t bytes_most)
{
    struct flux_kept *kept = calloc(1, sizeof *kept);
    for (size_t i = 0; kept != NULL && i < SHARDS; i++) {
        (void)pthread_mutex_init(&kept->shards[i].lock, NULL);
        kept->shards[i].bytes_most = bytes_most / SHARDS;
    }
    return kept;
}

/* Public ids are drawn at random, so their bits need no mixing. */
static struct shard *shard_of(struct flux_kept *kept, const struct flux_key *key)
{
    return &kept->shards[key->public_id % SHARDS];
}

static struct entry **bucket_of(struct shard *shard, const struct flux_key *key)
{
    size_t mixed = (size_t)(key->public_id / SHARDS) + key->view + 2u * (size_t)key->form;
    return &shard->buckets[mixed % BUCKETS];
}

static struct entry *look_up(struct shard *shard, const struct flux_key *key)
{
    struct entry *entry = *bucket_of(shard, key);
    while (entry != NULL && (entry->key.public_id != key->public_id ||
                             entry->key.view != key->view || entry->key.form != key->form))
        entry = entry->next;
    return entry;
}

static void unlink_order(struct shard *shard, struct entry *entry)
{
    if (entry->later != NULL)
        entry->later->earlier = entry->earlier;
    else
        shard->latest = entry->earlier;
    if (entry->earlier != NULL)
        entry->earlier->later = entry->later;
    else
        shard->earliest = entry->later;
}

static void link_latest(struct shard *shard, struct entry *entry)
{
    entry->later = NULL;
    entry->earlier = shard->latest;
    if (shard->latest != NULL)
        shard->latest->later = entry;
    else
        shard->earliest = entry;
    shard->latest = entry;
}

static void throw_out(struct shard *shard, struct entry *entry)
{
    struct entry **link = bucket_of(shard, &entry->key);
    while (*link != entry)
        link = &(*link)->next;
    *link = entry->next;
    unlink_order(shard, entry);
    shard->bytes -= entry->bytes;
    shard->bodies--;
    http_kept_drop(entry->body);
    free(entry);
}

void flux_kept_free(struct flux_kept *kept)
{
    if (kept == NULL)
        return;
    for (size_t i = 0; i < SHARDS; i++) {
        while (kept->shards[i].earliest != NULL)
            throw_out(&kept->shards[i], kept->shards[i].earliest);
        (void)pthread_mutex_destroy(&kept->shards[i].lock);
    }
    free(kept);
}

bool flux_kept_find(struct flux_kept *kept, const struct flux_key *key, int64_t *segment,
                    struct http_kept_body **body)
{
    struct shard *shard = shard_of(kept, key);
    (void)pthread_mutex_lock(&shard->lock);
    struct entry *entry = look_up(shard, key);
    if (entry != NULL) {
        http_kept_hold(entry->body);
        *body = entry->body;
        *segment = entry->segment;
        unlink_order(shard, entry);
        link_latest(shard, entry);
        shard->found++;
    } else {
        shard->missed++;
    }
    (void)pthread_mutex_unlock(&shard->lock);
    return entry != NULL;
}

void flux_kept_put(struct flux_kept *kept, const struct flux_key *key, int64_t segment,
                   struct http_kept_body *body)
{
    struct shard *shard = shard_of(kept, key);
    size_t bytes = http_kept_size(body) + ENTRY_BYTES;
    struct entry *entry = bytes <= shard->bytes_most ? malloc(sizeof *entry) : NULL;
    if (entry == NULL)
        return;
    (void)pthread_mutex_lock(&shard->lock);
    /* Two may have made the same body at the same time. */
    if (look_up(shard, key) == NULL) {
        while (shard->bytes + bytes > shard->bytes_most)
            throw_out(shard, shard->earliest);
        http_kept_hold(body);
        struct entry **bucket = bucket_of(shard, key);
        *entry = (struct entry){
            .key = *key, .segment = segment, .body = body, .bytes = bytes, .next = *bucket};
        *bucket = entry;
        link_latest(shard, entry);
        shard->bytes += bytes;
        shard->bodies++;
        entry = NULL;
    }
    (void)pthread_mutex_unlock(&shard->lock);
    free(entry);
}

struct flux_kept_figures flux_kept_figures_now(struct flux_kept *kept)
{
    struct flux_kept_figures figures = {0};
    for (size_t i = 0; i < SHARDS; i++) {
        struct shard *shard = &kept->shards[i];
        (void)pthread_mutex_lock(&shard->lock);
        figures.bodies += shard->bodies;
        figures.bytes += shard->bytes;
        figures.found += shard->found;
        figures.missed += shard->missed;
        (void)pthread_mutex_unlock(&shard->lock);
    }
    return figures;
}
