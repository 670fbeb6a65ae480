#include "read.h"

#include <assert.h>
#include <stdlib.h>
#include <string.h>
/* So that zlib takes what it only reads as const. */
#define ZLIB_CONST
#include <zlib.h>

#define GZIP_WINDOW (15 + 16) /* largest window, gzip framing only */

bool lightcurve_gzip_is(const void *data, size_t size)
{
    return size >= 3 && memcmp(data, "\x1f\x8b\x08", 3) == 0;
}

bool lightcurve_archive_is(const void *data, size_t size)
{
    const char *bytes = data;
    if (size >= 4 && (memcmp(bytes, "PK\x03\x04", 4) == 0 || memcmp(bytes, "PK\x05\x06", 4) == 0))
        return true;
    return size >= 512 && memcmp(bytes + 257, "ustar", 5) == 0;
}

bool lightcurve_ratio_exceeded(uint64_t unpacked, uint64_t packed, struct base_error *error)
{
    if (unpacked <= LIGHTCURVE_RATIO_FROM || unpacked / LIGHTCURVE_ARCHIVE_RATIO_MAX < packed)
        return false;
    (void)base_fail(error, BASE_TOO_LARGE,
                    "Unpacked it is more than %d times its packed size, which is refused as a trap "
                    "for the disk and memory.",
                    LIGHTCURVE_ARCHIVE_RATIO_MAX);
    return true;
}

/* Hand the next packed bytes to zlib, whose counters are narrower than ours. */
static void feed(z_stream *stream, const unsigned char *data, size_t size, size_t *given)
{
    if (stream->avail_in > 0 || *given == size)
        return;
    size_t step = size - *given < (1u << 30) ? size - *given : (1u << 30);
    stream->next_in = data + *given;
    stream->avail_in = (uInt)step;
    *given += step;
}

/* Double the buffer, up to one byte past the limit so that passing it can be seen. */
static bool grow(unsigned char **buffer, size_t *capacity, struct base_error *error)
{
    size_t limit = LIGHTCURVE_FILE_BYTES_MAX + 1;
    size_t larger = *capacity > limit / 2 ? limit : *capacity * 2;
    unsigned char *moved = realloc(*buffer, larger);
    if (moved == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to unpack the file.");
    *buffer = moved;
    *capacity = larger;
    return true;
}

/* The loop of lightcurve_gzip_unpack; *buffer and *length are left as far as it came. */
static bool inflate_all(z_stream *stream, const unsigned char *data, size_t size,
                        unsigned char **buffer, size_t *capacity, size_t *length,
                        struct base_error *error)
{
    size_t given = 0;
    for (;;) {
        feed(stream, data, size, &given);
        if (*length == *capacity && !grow(buffer, capacity, error))
            return false;
        size_t room = *capacity - *length < (1u << 30) ? *capacity - *length : (1u << 30);
        stream->next_out = *buffer + *length;
        stream->avail_out = (uInt)room;
        int state = inflate(stream, Z_NO_FLUSH);
        *length += room - stream->avail_out;
        if (*length > LIGHTCURVE_FILE_BYTES_MAX)
            return base_fail(error, BASE_TOO_LARGE,
                             "Unpacked it is larger than %llu bytes, the limit for one file.",
                             LIGHTCURVE_FILE_BYTES_MAX);
        if (lightcurve_ratio_exceeded(*length, size, error))
            return false;
        bool more = stream->avail_in > 0 || given < size;
        if (state == Z_STREAM_END && !more)
            return true;
        if (state == Z_STREAM_END)
            state = inflateReset(stream); /* a further member follows */
        if (state == Z_MEM_ERROR)
            return base_fail(error, BASE_MEMORY, "There is not enough memory to unpack the file.");
        if ((state == Z_BUF_ERROR || state == Z_OK) && !more && stream->avail_out > 0)
            return base_fail(error, BASE_INVALID,
                             "Truncated: the gzip data end before they are complete.");
        if (state != Z_OK && state != Z_BUF_ERROR)
            return base_fail(error, BASE_INVALID, "The gzip data are damaged.");
    }
}

bool lightcurve_gzip_unpack(const void *data, size_t size, unsigned char **out, size_t *out_size,
                            struct base_error *error)
{
    assert(data != NULL && size > 0);
    size_t capacity = size < (1u << 28) ? size * 4 + 4096 : LIGHTCURVE_FILE_BYTES_MAX / 2;
    size_t length = 0;
    bool ok = false;
    bool started = false;
    z_stream stream = {0};
    unsigned char *buffer = malloc(capacity);
    if (buffer == NULL || inflateInit2(&stream, GZIP_WINDOW) != Z_OK) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to unpack the file.");
        goto end;
    }
    started = true;
    ok = inflate_all(&stream, data, size, &buffer, &capacity, &length, error);
end:
    if (started)
        (void)inflateEnd(&stream);
    if (!ok) {
        free(buffer);
        buffer = NULL;
        length = 0;
    }
    *out = buffer;
    *out_size = length;
    return ok;
}

size_t lightcurve_gzip_peek(const void *data, size_t size, void *out, size_t room)
{
    z_stream stream = {0};
    if (inflateInit2(&stream, GZIP_WINDOW) != Z_OK)
        return 0;
    size_t given = 0;
    feed(&stream, data, size, &given);
    stream.next_out = out;
    stream.avail_out = (uInt)room;
    (void)inflate(&stream, Z_SYNC_FLUSH); /* damage only ends the peek; reading will name it */
    (void)inflateEnd(&stream);
    return room - stream.avail_out;
}
