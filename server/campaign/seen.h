/*
 * Who has seen what: for each person lately at work, the segments they have reviewed, as read from
 * the store once and kept up since. Bounded: the least lately used are forgotten and read again.
 *
 * Not thread-safe: the handout room's lock guards it.
 */
#ifndef CAMPAIGN_SEEN_H
#define CAMPAIGN_SEEN_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#define SEEN_SLOTS_MAX 8388608 /* 64 MiB of segment ids over all people */
#define SEEN_PEOPLE_MAX 100000

enum seen_state {
    SEEN_UNKNOWN, /* nothing was read yet, or it was forgotten */
    SEEN_LOADING, /* some thread is reading it from the store */
    SEEN_KNOWN
};

struct seen_person {
    int64_t person;
    enum seen_state state;
    unsigned pins;  /* threads that use it, and that nobody else may drop it under */
    unsigned holds; /* live leases of this person */
    int64_t *slots; /* an open-addressed set, 0 for empty; ids start at 1 */
    size_t used, room;
    struct seen_person *next;          /* in its chain */
    struct seen_person *newer, *older; /* by last use */
};

struct seen {
    struct seen_person **buckets;
    size_t bucket_count, count;
    size_t slots; /* in all sets */
    size_t slots_max, people_max;
    struct seen_person *newest, *oldest;
};

void seen_free(struct seen *seen);

/* NULL when this person is not remembered. */
struct seen_person *seen_find(const struct seen *seen, int64_t person);

/* The person, made (SEEN_UNKNOWN) when new, and now the one used last. NULL when out of memory. */
struct seen_person *seen_touch(struct seen *seen, int64_t person);

bool seen_has(const struct seen_person *person, int64_t segment);

/* False when out of memory: then the set is not to be trusted, and the caller forgets it. */
bool seen_add(struct seen *seen, struct seen_person *person, int64_t segment);

/* Drop what is known of a person, who stays remembered. */
void seen_forget(struct seen *seen, struct seen_person *person);

/* Hold to the limits, from the person used longest ago; those that are pinned stay. */
void seen_trim(struct seen *seen);

#endif
