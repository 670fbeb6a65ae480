/* Light-curve points as one blob: columns one after another, their bytes shuffled so that like
 * bytes stand together, then zlib, which adds a check sum of what was compressed. */
#ifndef STORE_POINTS_H
#define STORE_POINTS_H

#include "ebbmark/store.h"

struct points_blob {
    unsigned char *data; /* malloc'd; the caller frees it */
    size_t size;
    uint32_t checksum; /* crc32 of the blob */
};
bool points_pack(const struct store_points *points, struct points_blob *out,
                 struct base_error *error);

/* BASE_CORRUPT when the blob is not what was written. */
bool points_unpack(const unsigned char *data, size_t size, uint32_t checksum, size_t count,
                   bool has_error, struct base_arena *arena, struct store_points *out,
                   struct base_error *error);

#endif
