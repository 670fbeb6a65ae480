/*
 * Leases that are remembered: live ones, which count against their segment, and lately ended ones,
 * whose holders may still see it. One a person and segment.
 *
 * Not thread-safe: the handout room's lock guards it.
 */
#ifndef CAMPAIGN_LEASES_H
#define CAMPAIGN_LEASES_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

struct lease_record {
    int64_t person, segment;
    int64_t due_ms; /* when it ends (live) or is forgotten (ended) */
    bool live;
    size_t heap; /* its index in the heap */
    struct lease_record *next;
};

struct leases {
    struct lease_record **buckets; /* chains by person and segment; a power of two of them */
    size_t bucket_count, count;
    struct lease_record **heap; /* the earliest due on top */
    size_t heap_room;
};

void leases_free(struct leases *leases);

/* NULL when there is none. */
struct lease_record *leases_find(const struct leases *leases, int64_t person, int64_t segment);

/* Make a live record; there must be none for the two. NULL when out of memory. */
struct lease_record *leases_add(struct leases *leases, int64_t person, int64_t segment,
                                int64_t due_ms);

/* Change when a record is due. */
void leases_delay(struct leases *leases, struct lease_record *record, int64_t due_ms);

void leases_remove(struct leases *leases, struct lease_record *record);

/* The record due first, if that is by now; NULL otherwise. */
struct lease_record *leases_due(const struct leases *leases, int64_t now_ms);

#endif
