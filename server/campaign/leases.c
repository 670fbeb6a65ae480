#include "leases.h"

#include <assert.h>
#include <stdlib.h>

void leases_free(struct leases *leases)
{
    for (size_t i = 0; i < leases->count; i++)
        free(leases->heap[i]);
    free(leases->heap);
    free(leases->buckets);
    *leases = (struct leases){0};
}

static size_t bucket_of(const struct leases *leases, int64_t person, int64_t segment)
{
    uint64_t mixed = (uint64_t)person * 0x9e3779b97f4a7c15u + (uint64_t)segment;
    mixed = (mixed ^ (mixed >> 32)) * 0xd6e8feb86659fd93u;
    return (size_t)(mixed >> 32) & (leases->bucket_count - 1);
}

struct lease_record *leases_find(const struct leases *leases, int64_t person, int64_t segment)
{
    struct lease_record *at =
        leases->count == 0 ? NULL : leases->buckets[bucket_of(leases, person, segment)];
    while (at != NULL && (at->person != person || at->segment != segment))
        at = at->next;
    return at;
}

/* ---- the heap ---- */

static void heap_set(struct leases *leases, size_t at, struct lease_record *record)
{
    leases->heap[at] = record;
    record->heap = at;
}

static void heap_rise(struct leases *leases, struct lease_record *record)
{
    size_t at = record->heap;
    while (at > 0 && leases->heap[(at - 1) / 2]->due_ms > record->due_ms) {
        heap_set(leases, at, leases->heap[(at - 1) / 2]);
        at = (at - 1) / 2;
    }
    heap_set(leases, at, record);
}

static void heap_sink(struct leases *leases, struct lease_record *record)
{
    size_t at = record->heap;
    for (;;) {
        size_t child = 2 * at + 1;
        if (child + 1 < leases->count &&
            leases->heap[child + 1]->due_ms < leases->heap[child]->due_ms)
            child++;
        if (child >= leases->count || leases->heap[child]->due_ms >= record->due_ms)
            break;
        heap_set(leases, at, leases->heap[child]);
        at = child;
    }
    heap_set(leases, at, record);
}

/* ---- growing ---- */

static bool grow_heap(struct leases *leases)
{
    size_t room = leases->heap_room == 0 ? 64 : leases->heap_room * 2;
    struct lease_record **heap = realloc(leases->heap, room * sizeof(struct lease_record *));
    if (heap == NULL)
        return false;
    leases->heap = heap;
    leases->heap_room = room;
    return true;
}

static bool grow_buckets(struct leases *leases)
{
    size_t count = leases->bucket_count == 0 ? 64 : leases->bucket_count * 2;
    struct lease_record **buckets = calloc(count, sizeof(struct lease_record *));
    if (buckets == NULL)
        return false;
    free(leases->buckets);
    leases->buckets = buckets;
    leases->bucket_count = count;
    for (size_t i = 0; i < leases->count; i++) {
        struct lease_record *record = leases->heap[i];
        size_t bucket = bucket_of(leases, record->person, record->segment);
        record->next = buckets[bucket];
        buckets[bucket] = record;
    }
    return true;
}

struct lease_record *leases_add(struct leases *leases, int64_t person, int64_t segment,
                                int64_t due_ms)
{
    assert(leases_find(leases, person, segment) == NULL);
    if ((leases->count == leases->heap_room && !grow_heap(leases)) ||
        (leases->count == leases->bucket_count && !grow_buckets(leases)))
        return NULL;
    struct lease_record *record = malloc(sizeof *record);
    if (record == NULL)
        return NULL;
    size_t bucket = bucket_of(leases, person, segment);
    *record = (struct lease_record){.person = person,
                                    .segment = segment,
                                    .due_ms = due_ms,
                                    .live = true,
                                    .heap = leases->count,
                                    .next = leases->buckets[bucket]};
    leases->buckets[bucket] = record;
    leases->heap[leases->count++] = record;
    heap_rise(leases, record);
    return record;
}

void leases_delay(struct leases *leases, struct lease_record *record, int64_t due_ms)
{
    record->due_ms = due_ms;
    heap_rise(leases, record);
    heap_sink(leases, record);
}

void leases_remove(struct leases *leases, struct lease_record *record)
{
    struct lease_record **link =
        &leases->buckets[bucket_of(leases, record->person, record->segment)];
    while (*link != record)
        link = &(*link)->next;
    *link = record->next;
    struct lease_record *last = leases->heap[--leases->count];
    if (last != record) {
        heap_set(leases, record->heap, last);
        heap_rise(leases, last);
        heap_sink(leases, last);
    }
    free(record);
}

struct lease_record *leases_due(const struct leases *leases, int64_t now_ms)
{
    return leases->count > 0 && leases->heap[0]->due_ms <= now_ms ? leases->heap[0] : NULL;
}
