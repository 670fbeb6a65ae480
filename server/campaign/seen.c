#include "seen.h"

#include <assert.h>
#include <stdlib.h>

static void person_free(struct seen_person *person)
{
    free(person->slots);
    free(person);
}

void seen_free(struct seen *seen)
{
    for (struct seen_person *at = seen->newest; at != NULL;) {
        struct seen_person *older = at->older;
        person_free(at);
        at = older;
    }
    free(seen->buckets);
    *seen = (struct seen){0};
}

static size_t mix(int64_t id)
{
    uint64_t mixed = (uint64_t)id * 0x9e3779b97f4a7c15u;
    return (size_t)(mixed ^ (mixed >> 29));
}

struct seen_person *seen_find(const struct seen *seen, int64_t person)
{
    struct seen_person *at =
        seen->count == 0 ? NULL : seen->buckets[mix(person) & (seen->bucket_count - 1)];
    while (at != NULL && at->person != person)
        at = at->next;
    return at;
}

/* ---- the list by last use ---- */

static void unlink_use(struct seen *seen, struct seen_person *person)
{
    if (person->newer != NULL)
        person->newer->older = person->older;
    else
        seen->newest = person->older;
    if (person->older != NULL)
        person->older->newer = person->newer;
    else
        seen->oldest = person->newer;
}

static void link_newest(struct seen *seen, struct seen_person *person)
{
    person->newer = NULL;
    person->older = seen->newest;
    if (seen->newest != NULL)
        seen->newest->newer = person;
    else
        seen->oldest = person;
    seen->newest = person;
}

static bool grow_buckets(struct seen *seen)
{
    size_t count = seen->bucket_count == 0 ? 64 : seen->bucket_count * 2;
    struct seen_person **buckets = calloc(count, sizeof(struct seen_person *));
    if (buckets == NULL)
        return false;
    free(seen->buckets);
    seen->buckets = buckets;
    seen->bucket_count = count;
    for (struct seen_person *at = seen->newest; at != NULL; at = at->older) {
        size_t bucket = mix(at->person) & (count - 1);
        at->next = buckets[bucket];
        buckets[bucket] = at;
    }
    return true;
}

struct seen_person *seen_touch(struct seen *seen, int64_t person)
{
    struct seen_person *found = seen_find(seen, person);
    if (found != NULL) {
        unlink_use(seen, found);
        link_newest(seen, found);
        return found;
    }
    if (seen->count == seen->bucket_count && !grow_buckets(seen))
        return NULL;
    found = calloc(1, sizeof *found);
    if (found == NULL)
        return NULL;
    found->person = person;
    size_t bucket = mix(person) & (seen->bucket_count - 1);
    found->next = seen->buckets[bucket];
    seen->buckets[bucket] = found;
    seen->count++;
    link_newest(seen, found);
    return found;
}

/* ---- one person's set ---- */

static void set_put(int64_t *slots, size_t room, int64_t segment)
{
    size_t at = mix(segment) & (room - 1);
    while (slots[at] != 0)
        at = (at + 1) & (room - 1);
    slots[at] = segment;
}

bool seen_has(const struct seen_person *person, int64_t segment)
{
    if (person->room == 0)
        return false;
    size_t at = mix(segment) & (person->room - 1);
    while (person->slots[at] != 0 && person->slots[at] != segment)
        at = (at + 1) & (person->room - 1);
    return person->slots[at] == segment;
}

static bool grow_set(struct seen *seen, struct seen_person *person)
{
    size_t room = person->room == 0 ? 16 : person->room * 2;
    int64_t *slots = calloc(room, sizeof *slots);
    if (slots == NULL)
        return false;
    for (size_t i = 0; i < person->room; i++)
        if (person->slots[i] != 0)
            set_put(slots, room, person->slots[i]);
    free(person->slots);
    seen->slots += room - person->room;
    person->slots = slots;
    person->room = room;
    return true;
}

bool seen_add(struct seen *seen, struct seen_person *person, int64_t segment)
{
    assert(segment > 0);
    if (seen_has(person, segment))
        return true;
    if (person->used * 2 >= person->room && !grow_set(seen, person))
        return false;
    set_put(person->slots, person->room, segment);
    person->used++;
    return true;
}

void seen_forget(struct seen *seen, struct seen_person *person)
{
    seen->slots -= person->room;
    free(person->slots);
    person->slots = NULL;
    person->used = person->room = 0;
    person->state = SEEN_UNKNOWN;
}

static void remove_person(struct seen *seen, struct seen_person *person)
{
    struct seen_person **link = &seen->buckets[mix(person->person) & (seen->bucket_count - 1)];
    while (*link != person)
        link = &(*link)->next;
    *link = person->next;
    unlink_use(seen, person);
    seen->count--;
    person_free(person);
}

void seen_trim(struct seen *seen)
{
    for (struct seen_person *at = seen->oldest;
         at != NULL && (seen->slots > seen->slots_max || seen->count > seen->people_max);) {
        struct seen_person *newer = at->newer;
        if (at->pins == 0 && at->state == SEEN_KNOWN)
            seen_forget(seen, at);
        if (at->pins == 0 && at->holds == 0)
            remove_person(seen, at);
        at = newer;
    }
}
