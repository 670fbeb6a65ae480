#include "vector.h"

#include <stdint.h>
#include <stdlib.h>
#include <string.h>

void *vector_add(struct vector *vector, size_t count)
{
    if (count > vector->room - vector->count || vector->items == NULL) {
        size_t room = vector->room < 16 ? 16 : vector->room;
        while (room - vector->count < count && room <= SIZE_MAX / 4)
            room *= 2;
        if (room - vector->count < count || room > SIZE_MAX / vector->size)
            return NULL;
        void *items = realloc(vector->items, room * vector->size);
        if (items == NULL)
            return NULL;
        vector->items = items;
        vector->room = room;
    }
    unsigned char *added = (unsigned char *)vector->items + vector->count * vector->size;
    vector->count += count;
    return memset(added, 0, count * vector->size);
}

void vector_free(struct vector *vector)
{
    free(vector->items);
    *vector = (struct vector){.size = vector->size};
}
