#include <sodium.h>
#include <stdlib.h>

#include "db.h"
#include "points.h"

bool store_file_seen(struct store *store, const unsigned char sha256[STORE_HASH_SIZE],
                     enum store_file_outcome *outcome, int64_t *batch, struct base_error *error)
{
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, "SELECT batch FROM file WHERE sha256 = ? AND outcome = 1",
                                error, "b", sha256, (size_t)STORE_HASH_SIZE);
    int got = row != NULL ? db_next(db, row, error) : -1;
    *outcome = got == 1 ? STORE_FILE_LOADED : STORE_FILE_UNKNOWN;
    *batch = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    db_read_end(store, db);
    return got >= 0;
}

/* The star's id, made or with its unknown properties filled in. 0 on failure. */
static int64_t star_put(struct db *db, const struct store_star_properties *star,
                        struct base_error *error)
{
    static const char put[] =
        "INSERT INTO star (name, ra_deg, dec_deg, magnitude, temperature_k, radius_rsun, mass_msun)"
        " VALUES (?, ?, ?, ?, ?, ?, ?) ON CONFLICT (name) DO UPDATE SET"
        " ra_deg = ifnull(ra_deg, excluded.ra_deg), dec_deg = ifnull(dec_deg, excluded.dec_deg),"
        " magnitude = ifnull(magnitude, excluded.magnitude),"
        " temperature_k = ifnull(temperature_k, excluded.temperature_k),"
        " radius_rsun = ifnull(radius_rsun, excluded.radius_rsun),"
        " mass_msun = ifnull(mass_msun, excluded.mass_msun) RETURNING id";
    sqlite3_stmt *row =
        db_bind(db, put, error, "trrrrrr", star->name, star->ra_deg, star->dec_deg, star->magnitude,
                star->temperature_k, star->radius_rsun, star->mass_msun);
    int64_t id = 0;
    if (row != NULL && db_next(db, row, error) == 1) {
        id = sqlite3_column_int64(row, 0);
        (void)db_next(db, row, error);
    }
    db_done(row);
    return id;
}

/* Does the star have a light curve in this batch? 1, 0, or -1 on failure. */
static int star_is_in_batch(struct db *db, int64_t star, int64_t batch, struct base_error *error)
{
    static const char sql[] = "SELECT 1 FROM light_curve WHERE star = ? AND batch = ? LIMIT 1";
    sqlite3_stmt *row = db_bind(db, sql, error, "ii", star, batch);
    int got = row != NULL ? db_next(db, row, error) : -1;
    db_done(row);
    return got;
}

static bool segments_put(struct db *db, int64_t light_curve,
                         const struct store_light_curve_new *curve, struct base_error *error)
{
    static const char put[] =
        "INSERT INTO segment (public_id, light_curve, first, count, starts, ends)"
        " VALUES (?, ?, ?, ?, ?, ?)";
    bool ok = true;
    for (size_t i = 0; ok && i < curve->segment_count; i++) {
        unsigned char bytes[8];
        char id[STORE_PUBLIC_ID_SIZE];
        randombytes_buf(bytes, sizeof bytes);
        (void)sodium_bin2hex(id, sizeof id, bytes, sizeof bytes);
        ok = db_run(db, error, put, "tiiirr", id, light_curve, (int64_t)curve->segments[i].first,
                    (int64_t)curve->segments[i].count, curve->segments[i].starts_d,
                    curve->segments[i].ends_d);
    }
    return ok;
}

static bool curve_put(struct db *db, int64_t batch, int64_t file,
                      const struct store_light_curve_new *curve, const struct points_blob *blob,
                      struct base_error *error)
{
    static const char put[] =
        "INSERT INTO light_curve (star, batch, file, time_reference, count, starts, ends,"
        " median_flux, cadence, noise_point, noise_1h, noise_3h, noise_6h, noise_13h)"
        " VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)";
    static const char points[] =
        "INSERT INTO points (light_curve, has_error, checksum, packed) VALUES (?, ?, ?, ?)";
    static const char totals[] =
        "UPDATE batch SET stars = stars + ?, light_curves = light_curves + 1,"
        " segments = segments + ?, points = points + ? WHERE id = ?";
    size_t n = curve->points.count;
    const double *time = curve->points.time, *noise = curve->noise_window;
    int64_t star = star_put(db, &curve->star, error);
    int known = star != 0 ? star_is_in_batch(db, star, batch, error) : -1;
    if (known < 0 ||
        !db_run(db, error, put, "iiitirrrrrrrrr", star, batch, file, curve->time_reference,
                (int64_t)n, time[0], time[n - 1], curve->median_flux, curve->cadence_d,
                curve->noise_point, noise[0], noise[1], noise[2], noise[3]))
        return false;
    int64_t id = sqlite3_last_insert_rowid(db->handle);
    return db_run(db, error, points, "iiib", id, (int64_t)(curve->points.error != NULL),
                  (int64_t)blob->checksum, blob->data, blob->size) &&
           segments_put(db, id, curve, error) &&
           db_run(db, error, totals, "iiii", (int64_t)(known == 0), (int64_t)curve->segment_count,
                  (int64_t)n, batch);
}

/* Move a batch's count of files of this outcome by one. */
static bool count_file(struct db *db, int64_t batch, enum store_file_outcome outcome, int64_t by,
                       struct base_error *error)
{
    static const char sql[] = "UPDATE batch SET files_loaded = files_loaded + iif(?1 = 1, ?2, 0),"
                              " files_repeated = files_repeated + iif(?1 = 2, ?2, 0),"
                              " files_refused = files_refused + iif(?1 = 3, ?2, 0) WHERE id = ?3";
    return db_run(db, error, sql, "iii", (int64_t)outcome, by, batch);
}

/* Remove the row of this label, unless a file was loaded under it. */
static bool forget_refused(struct db *db, const struct store_file_new *file,
                           struct base_error *error)
{
    static const char sql[] = "DELETE FROM file WHERE batch = ? AND label = ? AND outcome <> 1"
                              " RETURNING outcome";
    sqlite3_stmt *row = db_bind(db, sql, error, "it", file->batch, file->label);
    int got = row != NULL ? db_next(db, row, error) : -1;
    enum store_file_outcome was =
        got == 1 ? (enum store_file_outcome)sqlite3_column_int(row, 0) : STORE_FILE_UNKNOWN;
    if (got == 1)
        got = db_next(db, row, error);
    db_done(row);
    return got == 0 && (was == STORE_FILE_UNKNOWN || count_file(db, file->batch, was, -1, error));
}

static bool insert_file(struct db *db, const struct store_file_new *file,
                        enum store_file_outcome outcome, const char *reason, bool *inserted,
                        struct base_error *error)
{
    static const char put[] = "INSERT INTO file (batch, label, sha256, outcome, reason, bytes)"
                              " VALUES (?, ?, ?, ?, ?, ?) ON CONFLICT DO NOTHING";
    bool ok = db_run(db, error, put, "itbiti", file->batch, file->label, file->sha256,
                     (size_t)STORE_HASH_SIZE, (int64_t)outcome, reason, file->bytes);
    *inserted = ok && sqlite3_changes(db->handle) == 1;
    return ok && (!*inserted || count_file(db, file->batch, outcome, 1, error));
}

/* Record a file's outcome. *id is 0 where its light curves are not to be stored: when it has none,
 * when a file was loaded under this label before, or when the same bytes were (then it is recorded
 * as repeated). */
static bool file_put(struct db *db, const struct store_file_new *file, int64_t *id,
                     struct base_error *error)
{
    bool inserted = false;
    *id = 0;
    if (!forget_refused(db, file, error) ||
        !insert_file(db, file, file->outcome, file->reason, &inserted, error))
        return false;
    if (file->outcome != STORE_FILE_LOADED)
        return true;
    if (inserted)
        *id = sqlite3_last_insert_rowid(db->handle);
    return inserted || insert_file(db, file, STORE_FILE_REPEATED,
                                   "The same bytes were loaded before.", &inserted, error);
}

static bool files_put(struct db *db, const struct store_file_new *files, size_t count,
                      const struct points_blob *blobs, struct base_error *error)
{
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++) {
        int64_t id = 0;
        ok = file_put(db, &files[i], &id, error);
        for (size_t k = 0; ok && id != 0 && k < files[i].curve_count; k++)
            ok = curve_put(db, files[i].batch, id, &files[i].curves[k], &blobs[k], error);
        blobs += files[i].curve_count;
    }
    return ok;
}

bool store_files_add(struct store *store, const struct store_file_new *files, size_t count,
                     struct base_error *error)
{
    size_t curves = 0, packed = 0;
    for (size_t i = 0; i < count; i++)
        curves += files[i].curve_count;
    struct points_blob *blobs = calloc(curves > 0 ? curves : 1, sizeof *blobs);
    if (blobs == NULL)
        return db_no_memory(error);
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++)
        for (size_t k = 0; ok && k < files[i].curve_count; k++)
            ok = points_pack(&files[i].curves[k].points, &blobs[packed++], error);
    if (ok) {
        struct db *db = db_write(store, error);
        ok = db != NULL && db_write_end(store, files_put(db, files, count, blobs, error), error);
    }
    for (size_t i = 0; i < packed; i++)
        free(blobs[i].data);
    free(blobs);
    return ok;
}

static bool fill_file(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_file *file = item;
    *file = (struct store_file){.id = sqlite3_column_int64(row, 0),
                                .batch = sqlite3_column_int64(row, 1),
                                .label = db_text(row, 2, arena),
                                .reason = db_text(row, 3, arena),
                                .outcome = (enum store_file_outcome)sqlite3_column_int(row, 4),
                                .bytes = sqlite3_column_int64(row, 5)};
    return file->label != NULL && file->reason != NULL;
}

bool store_batch_files(struct store *store, struct base_arena *arena, int64_t batch, int64_t after,
                       size_t limit, struct store_file **out, size_t *count,
                       struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_file, out, count, error,
                   "SELECT id, batch, label, reason, outcome, bytes FROM file"
                   " WHERE batch = ? AND id > ? ORDER BY id LIMIT ?",
                   "iii", batch, after, (int64_t)limit);
}
