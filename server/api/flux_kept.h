/*
 * Flux that is ready to be sent: the bodies asked for last, up to a number of bytes. The least
 * lately asked for goes first.
 *
 * Thread-safe: it is cut into shards, each with a lock of its own.
 */
#ifndef API_FLUX_KEPT_H
#define API_FLUX_KEPT_H

#include <stdbool.h>
#include <stdint.h>

#include "ebbmark/http.h"

enum flux_form { FLUX_PACKED = 0, FLUX_JSON = 1 };

struct flux_key {
    uint64_t public_id; /* of the segment */
    unsigned view;      /* enum campaign_view */
    enum flux_form form;
};

struct flux_kept;

/* NULL when out of memory. A body larger than a shard's share of the bytes is never kept. */
struct flux_kept *flux_kept_new(size_t bytes_most);
void flux_kept_free(struct flux_kept *kept);

/* The body, held for the caller, who drops it, and the segment's id in the store. */
bool flux_kept_find(struct flux_kept *kept, const struct flux_key *key, int64_t *segment,
                    struct http_kept_body **body);
/* Keep a body (holding it); when there is no memory, or it is kept already, nothing happens. */
void flux_kept_put(struct flux_kept *kept, const struct flux_key *key, int64_t segment,
                   struct http_kept_body *body);

struct flux_kept_figures {
    uint64_t bodies, bytes, found, missed;
};
struct flux_kept_figures flux_kept_figures_now(struct flux_kept *kept);

#endif
