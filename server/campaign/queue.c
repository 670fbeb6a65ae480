#include "queue.h"

#include <assert.h>
#include <stdlib.h>

#define TRIES 12

void queue_free(struct queue *queue)
{
    for (size_t i = 0; i < QUEUE_LEVELS; i++)
        free(queue->levels[i].places);
    free(queue->places);
    *queue = (struct queue){0};
}

/* The next number below `limit`: splitmix64, reduced by multiplication. */
static uint32_t random_below(struct queue *queue, uint32_t limit)
{
    uint64_t z = queue->random += 0x9e3779b97f4a7c15u;
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9u;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebu;
    z ^= z >> 31;
    return (uint32_t)(((z >> 32) * limit) >> 32);
}

static struct queue_level *level_of(struct queue *queue, const struct queue_place *place)
{
    unsigned level = (unsigned)place->looks + place->flying;
    return &queue->levels[level < QUEUE_LEVELS ? level : QUEUE_LEVELS - 1];
}

static bool level_resize(struct queue_level *level, uint32_t room)
{
    uint32_t *places = realloc(level->places, (size_t)room * sizeof *places);
    if (places == NULL)
        return false;
    level->places = places;
    level->room = room;
    return true;
}

/* Take a place out of its level: the level's last place fills the hole. */
static void leave(struct queue *queue, struct queue_place *place)
{
    if (place->position >= QUEUE_CLOSED)
        return;
    struct queue_level *level = level_of(queue, place);
    uint32_t last = level->places[--level->count];
    level->places[place->position] = last;
    queue->places[last].position = place->position;
    place->position = QUEUE_NOWHERE;
    queue->queued--;
    if (level->room > 64 && level->count < level->room / 4)
        (void)level_resize(level, level->room / 2); /* keeping the larger array is no failure */
}

static void enter(struct queue *queue, struct queue_place *place)
{
    struct queue_level *level = level_of(queue, place);
    if (place->position == QUEUE_CLOSED)
        return;
    if (level->count == level->room &&
        !level_resize(level, level->room == 0 ? 16 : level->room * 2))
        return;
    place->position = level->count;
    level->places[level->count++] = (uint32_t)(place - queue->places);
    queue->queued++;
}

bool queue_add(struct queue *queue, int64_t segment, int32_t looks)
{
    assert(queue->count == 0 || queue->places[queue->count - 1].segment < segment);
    if (queue->count == queue->room) {
        if (queue->room > UINT32_MAX / 4)
            return false;
        uint32_t room = queue->room == 0 ? 256 : queue->room * 2;
        struct queue_place *places = realloc(queue->places, (size_t)room * sizeof *places);
        if (places == NULL)
            return false;
        queue->places = places;
        queue->room = room;
    }
    struct queue_place *place = &queue->places[queue->count++];
    *place = (struct queue_place){.segment = segment, .position = QUEUE_NOWHERE};
    place->looks = looks < 0 ? 0 : looks > UINT16_MAX ? UINT16_MAX : (uint16_t)looks;
    enter(queue, place);
    return place->position != QUEUE_NOWHERE;
}

struct queue_place *queue_find(const struct queue *queue, int64_t segment)
{
    uint32_t low = 0, high = queue->count;
    while (low < high) {
        uint32_t middle = low + (high - low) / 2;
        if (queue->places[middle].segment < segment)
            low = middle + 1;
        else
            high = middle;
    }
    return low < queue->count && queue->places[low].segment == segment ? &queue->places[low] : NULL;
}

void queue_fly(struct queue *queue, struct queue_place *place)
{
    leave(queue, place);
    assert(place->flying < UINT16_MAX);
    place->flying++;
    enter(queue, place);
}

void queue_land(struct queue *queue, struct queue_place *place)
{
    leave(queue, place);
    assert(place->flying > 0);
    place->flying--;
    enter(queue, place);
}

void queue_look(struct queue *queue, struct queue_place *place)
{
    leave(queue, place);
    if (place->looks < UINT16_MAX)
        place->looks++;
    enter(queue, place);
}

void queue_close(struct queue *queue, struct queue_place *place)
{
    leave(queue, place);
    place->position = QUEUE_CLOSED;
}

static struct queue_place *pick_in(struct queue *queue, const struct queue_level *level,
                                   bool (*allowed)(void *context, int64_t segment), void *context)
{
    for (unsigned i = 0; i < TRIES; i++) {
        struct queue_place *place =
            &queue->places[level->places[random_below(queue, level->count)]];
        if (allowed(context, place->segment))
            return place;
    }
    uint32_t start = random_below(queue, level->count);
    for (uint32_t i = 0; i < level->count; i++) {
        uint32_t at = i < level->count - start ? start + i : start + i - level->count;
        struct queue_place *place = &queue->places[level->places[at]];
        if (allowed(context, place->segment))
            return place;
    }
    return NULL;
}

struct queue_place *queue_pick(struct queue *queue, unsigned below,
                               bool (*allowed)(void *context, int64_t segment), void *context)
{
    assert(below < QUEUE_LEVELS);
    struct queue_place *place = NULL;
    for (unsigned i = 0; place == NULL && i < below; i++)
        if (queue->levels[i].count > 0)
            place = pick_in(queue, &queue->levels[i], allowed, context);
    return place;
}

void queue_carry_over(struct queue *fresh, const struct queue *old)
{
    uint32_t at = 0;
    for (uint32_t i = 0; i < old->count; i++) {
        const struct queue_place *was = &old->places[i];
        while (at < fresh->count && fresh->places[at].segment < was->segment)
            at++;
        if (at == fresh->count)
            break;
        struct queue_place *is = &fresh->places[at];
        if (is->segment != was->segment || is->looks >= was->looks)
            continue;
        leave(fresh, is);
        is->looks = was->looks;
        enter(fresh, is);
    }
}
