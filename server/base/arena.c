#include "ebbmark/arena.h"

#include <assert.h>
#include <stdalign.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define FIRST_BLOCK 4096u
#define LARGEST_STEP (1u << 20)

struct block {
    struct block *older;
    size_t size, used; /* of the bytes that follow */
    alignas(max_align_t) unsigned char bytes[];
};

struct base_arena {
    struct block *newest;
    size_t limit; /* 0: none */
    size_t used;
};

struct base_arena *base_arena_new(size_t limit)
{
    struct base_arena *arena = calloc(1, sizeof *arena);
    if (arena != NULL)
        arena->limit = limit;
    return arena;
}

void base_arena_free(struct base_arena *arena)
{
    if (arena == NULL)
        return;
    for (struct block *block = arena->newest; block != NULL;) {
        struct block *older = block->older;
        free(block);
        block = older;
    }
    free(arena);
}

void base_arena_reset(struct base_arena *arena)
{
    assert(arena != NULL);
    while (arena->newest != NULL && arena->newest->older != NULL) {
        struct block *older = arena->newest->older;
        free(arena->newest);
        arena->newest = older;
    }
    if (arena->newest != NULL)
        arena->newest->used = 0;
    arena->used = 0;
}

/* A block with room for `size` more bytes at its head, each block larger than the last. */
static bool grow(struct base_arena *arena, size_t size)
{
    size_t step = arena->newest == NULL ? FIRST_BLOCK : arena->newest->size * 2;
    if (step > LARGEST_STEP)
        step = LARGEST_STEP;
    if (step < size)
        step = size;
    if (step > SIZE_MAX - sizeof(struct block))
        return false;
    struct block *block = malloc(sizeof *block + step);
    if (block == NULL)
        return false;
    block->older = arena->newest;
    block->size = step;
    block->used = 0;
    arena->newest = block;
    return true;
}

void *base_arena_take(struct base_arena *arena, size_t size)
{
    assert(arena != NULL);
    const size_t unit = alignof(max_align_t);
    if (size > SIZE_MAX - unit)
        return NULL;
    size_t rounded = (size + unit - 1) / unit * unit;
    if (rounded == 0)
        rounded = unit;
    if (arena->limit != 0 && rounded > arena->limit - arena->used)
        return NULL;
    if (arena->newest == NULL || arena->newest->size - arena->newest->used < rounded)
        if (!grow(arena, rounded))
            return NULL;
    void *taken = arena->newest->bytes + arena->newest->used;
    arena->newest->used += rounded;
    arena->used += rounded;
    return memset(taken, 0, rounded);
}

void *base_arena_take_array(struct base_arena *arena, size_t count, size_t size)
{
    if (size != 0 && count > SIZE_MAX / size)
        return NULL;
    return base_arena_take(arena, count * size);
}

void *base_arena_copy(struct base_arena *arena, const void *data, size_t size)
{
    void *copy = base_arena_take(arena, size);
    if (copy != NULL && size > 0)
        memcpy(copy, data, size);
    return copy;
}

char *base_arena_copy_text(struct base_arena *arena, const char *text)
{
    return text == NULL ? NULL : base_arena_copy(arena, text, strlen(text) + 1);
}

char *base_arena_format(struct base_arena *arena, const char *format, ...)
{
    va_list list;
    va_start(list, format);
    int length = vsnprintf(NULL, 0, format, list);
    va_end(list);
    if (length < 0)
        return NULL;
    char *text = base_arena_take(arena, (size_t)length + 1);
    if (text != NULL) {
        va_start(list, format);
        (void)vsnprintf(text, (size_t)length + 1, format, list);
        va_end(list);
    }
    return text;
}

size_t base_arena_used(const struct base_arena *arena)
{
    return arena->used;
}
