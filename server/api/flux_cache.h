/*
 * Packed flux, kept ready to send: a bounded cache of segments lately asked for, dropped oldest use
 * first. Thread-safe.
 */
#ifndef API_FLUX_CACHE_H
#define API_FLUX_CACHE_H

#include "ebbmark/campaign.h"
#include "ebbmark/http.h"

struct flux_cache;

/* At most `bytes` of bodies. NULL when out of memory. */
struct flux_cache *flux_cache_open(size_t bytes);
void flux_cache_close(struct flux_cache *cache);

/* The segment a kept body belongs to and who may see it are found with it. */
struct flux_kept {
    struct http_kept_body *body; /* held for the caller, who drops it */
    int64_t segment;
};
bool flux_cache_get(struct flux_cache *cache, const char *public_id, enum campaign_view view,
                    struct flux_kept *out);
void flux_cache_put(struct flux_cache *cache, const char *public_id, enum campaign_view view,
                    int64_t segment, struct http_kept_body *body);

#endif
