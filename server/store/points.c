#include "points.h"

#include <assert.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

#include "db.h"

/* What still fits in one of SQLite's blobs (1,000,000,000 bytes), if nothing can be compressed. */
#define POINTS_MAX 40000000u
#define ZLIB_RATIO_MAX 1032u /* zlib cannot compress by more than this (zlib's technical notes) */

/* Bytes of n points: time 8, flux 4, trend 4, and error 4 where there is one. */
static size_t plain_size(size_t n, bool has_error)
{
    return n * (has_error ? 20 : 16);
}

/* Byte k of every item together: out[k * n + i] = in[i * width + k]; and the reverse. */
static void shuffle(unsigned char *out, const unsigned char *in, size_t n, size_t width)
{
    for (size_t k = 0; k < width; k++)
        for (size_t i = 0; i < n; i++)
            out[k * n + i] = in[i * width + k];
}

static void unshuffle(unsigned char *out, const unsigned char *in, size_t n, size_t width)
{
    for (size_t k = 0; k < width; k++)
        for (size_t i = 0; i < n; i++)
            out[i * width + k] = in[k * n + i];
}

bool points_pack(const struct store_points *points, struct points_blob *out,
                 struct base_error *error)
{
    assert(points->count > 0);
    size_t n = points->count, size = plain_size(n, points->error != NULL);
    *out = (struct points_blob){0};
    if (n > POINTS_MAX)
        return base_fail(error, BASE_TOO_LARGE, "A light curve has %zu points (limit %u).", n,
                         POINTS_MAX);
    uLong bound = compressBound((uLong)size);
    unsigned char *plain = malloc(size);
    out->data = malloc(bound);
    bool ok = plain != NULL && out->data != NULL;
    if (ok) {
        shuffle(plain, (const unsigned char *)points->time, n, 8);
        shuffle(plain + 8 * n, (const unsigned char *)points->flux, n, 4);
        shuffle(plain + 12 * n, (const unsigned char *)points->trend, n, 4);
        if (points->error != NULL)
            shuffle(plain + 16 * n, (const unsigned char *)points->error, n, 4);
        ok = compress2(out->data, &bound, plain, (uLong)size, 4) == Z_OK;
        out->size = bound;
        out->checksum = (uint32_t)crc32_z(0, out->data, bound);
    }
    free(plain);
    if (!ok) {
        free(out->data);
        *out = (struct points_blob){0};
        return db_no_memory(error);
    }
    return true;
}

static bool damaged(struct base_error *error)
{
    return base_fail(error, BASE_CORRUPT,
                     "The points of a stored light curve are damaged; restore the newest backup.");
}

bool points_unpack(const unsigned char *data, size_t size, uint32_t checksum, size_t count,
                   bool has_error, struct base_arena *arena, struct store_points *out,
                   struct base_error *error)
{
    /* Before taking memory: are these the bytes, and could they hold so many points at all? */
    if (data == NULL || count == 0 || count > POINTS_MAX ||
        plain_size(count, has_error) / ZLIB_RATIO_MAX > size ||
        (uint32_t)crc32_z(0, data, size) != checksum)
        return damaged(error);
    size_t need = plain_size(count, has_error), columns = has_error ? 3 : 2;
    uLong got = (uLong)need;
    unsigned char *plain = malloc(need);
    double *time = base_arena_take_array(arena, count, sizeof *time);
    float *values = base_arena_take_array(arena, count, columns * sizeof *values);
    bool ok = plain != NULL && time != NULL && values != NULL;
    if (!ok)
        (void)db_no_memory(error);
    else if (uncompress(plain, &got, data, (uLong)size) != Z_OK || got != need)
        ok = damaged(error);
    if (ok) {
        unshuffle((unsigned char *)time, plain, count, 8);
        for (size_t i = 0; i < columns; i++)
            unshuffle((unsigned char *)(values + i * count), plain + (8 + 4 * i) * count, count, 4);
        *out = (struct store_points){.count = count,
                                     .time = time,
                                     .flux = values,
                                     .trend = values + count,
                                     .error = has_error ? values + 2 * count : NULL};
    }
    free(plain);
    return ok;
}

bool store_points_read(struct store *store, struct base_arena *arena, int64_t light_curve,
                       struct store_points *out, struct base_error *error)
{
    /* The light curve comes first: one without its points is damage, not absence. */
    static const char sql[] = "SELECT l.count, p.has_error, p.checksum, p.packed FROM light_curve l"
                              " LEFT JOIN points p ON p.light_curve = l.id WHERE l.id = ?";
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, sql, error, "i", light_curve);
    int got = row != NULL ? db_next(db, row, error) : -1;
    const unsigned char *blob = got == 1 ? sqlite3_column_blob(row, 3) : NULL;
    bool ok = got == 1 && points_unpack(blob, (size_t)sqlite3_column_bytes(row, 3),
                                        (uint32_t)sqlite3_column_int64(row, 2),
                                        (size_t)sqlite3_column_int64(row, 0),
                                        sqlite3_column_int(row, 1) != 0, arena, out, error);
    if (got == 0)
        (void)base_fail(error, BASE_NOT_FOUND, "There is no such light curve.");
    db_done(row);
    db_read_end(store, db);
    return ok;
}
