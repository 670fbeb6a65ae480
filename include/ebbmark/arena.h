/*
 * An arena: memory for one request or one job, freed all at once. What outlives it is copied out
 * on purpose. Not thread-safe: one arena belongs to one thread at a time.
 */
#ifndef EBBMARK_ARENA_H
#define EBBMARK_ARENA_H

#include <stddef.h>

struct base_arena;

/* A new arena that hands out at most `limit` bytes in all (0: no limit). NULL when out of memory.
 * The caller frees it. */
struct base_arena *base_arena_new(size_t limit);

/* Frees the arena and everything taken from it. NULL is allowed. */
void base_arena_free(struct base_arena *arena);

/* Give everything back but keep the first block, so that the arena can serve the next request. */
void base_arena_reset(struct base_arena *arena);

/* `size` zeroed bytes, aligned for any type; NULL when out of memory or over the limit. */
void *base_arena_take(struct base_arena *arena, size_t size);

/* `count` zeroed items of `size` bytes; NULL also when count x size overflows. */
void *base_arena_take_array(struct base_arena *arena, size_t count, size_t size);

/* A copy of a NUL-terminated text (NULL gives NULL), or NULL when out of memory. */
char *base_arena_copy_text(struct base_arena *arena, const char *text);

/* A copy of `size` bytes, or NULL when out of memory. */
void *base_arena_copy(struct base_arena *arena, const void *data, size_t size);

/* printf into the arena; NULL when out of memory. */
char *base_arena_format(struct base_arena *arena, const char *format, ...)
    __attribute__((format(printf, 2, 3)));

/* Bytes handed out so far. */
size_t base_arena_used(const struct base_arena *arena);

#endif
