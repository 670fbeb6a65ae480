/* A growing array of items of one size. Not thread-safe. */
#ifndef CAMPAIGN_VECTOR_H
#define CAMPAIGN_VECTOR_H

#include <stdbool.h>
#include <stddef.h>

struct vector {
    void *items; /* owned */
    size_t count, room, size;
};

#define VECTOR_OF(type) ((struct vector){.size = sizeof(type)})

/* Room for `count` zeroed items more at the end: their address, or NULL when out of memory. It is
 * good until the next call. */
void *vector_add(struct vector *vector, size_t count);
void vector_free(struct vector *vector);

#endif
