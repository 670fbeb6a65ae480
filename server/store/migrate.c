#include "migrate.h"

#include <errno.h>
#include <inttypes.h>
#include <stdio.h>
#include <unistd.h>

#include "ebbmark/clock.h"
#include "migrations.h"

#define APPLICATION_ID 0x45624d6b /* "EbMk" */

int store_version_newest(void)
{
    int newest = 0;
    for (const struct store_migration *at = store_migrations; at->version != 0; at++)
        newest = at->version;
    return newest;
}

static bool pragma_read(struct db *db, const char *sql, int64_t *out, struct base_error *error)
{
    sqlite3_stmt *row = db_bind(db, sql, error, "");
    if (row == NULL)
        return false;
    int got = db_next(db, row, error);
    *out = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    return got >= 0;
}

bool migrate_check(struct store *store, struct base_error *error)
{
    int64_t id = 0, version = 0, tables = 0;
    struct db *db = &store->writer;
    if (!pragma_read(db, "PRAGMA application_id", &id, error) ||
        !pragma_read(db, "PRAGMA user_version", &version, error) ||
        !pragma_read(db, "SELECT count(*) FROM sqlite_schema", &tables, error)) {
        if (error != NULL && error->kind == BASE_CORRUPT)
            return base_fail(error, BASE_INVALID,
                             "%s is not an Ebbmark database, or it is damaged.", store->path);
        return false;
    }
    if (tables > 0 && id != APPLICATION_ID)
        return base_fail(error, BASE_INVALID,
                         "%s is a database of another program, so it is left alone.", store->path);
    if (version > store_version_newest())
        return base_fail(error, BASE_INVALID,
                         "%s is at version %" PRId64 ", newer than this program knows (%d); use a "
                         "newer ebbmark.",
                         store->path, version, store_version_newest());
    store->version = (int)version;
    return true;
}

/* One step in one transaction. */
static bool apply(struct store *store, const struct store_migration *step, struct base_error *error)
{
    char version[96];
    (void)snprintf(version, sizeof version, "PRAGMA application_id = %d; PRAGMA user_version = %d;",
                   APPLICATION_ID, step->version);
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_script(db, step->sql, error) &&
              db_script(db,
                        "CREATE TABLE IF NOT EXISTS schema_migration (version INTEGER PRIMARY KEY,"
                        " name TEXT NOT NULL, applied_ms INTEGER NOT NULL) STRICT",
                        error) &&
              db_run(db, error, "INSERT INTO schema_migration VALUES (?, ?, ?)", "iti",
                     (int64_t)step->version, step->name, base_clock_unix_ms()) &&
              db_script(db, version, error);
    ok = db_write_end(store, ok, error);
    if (ok)
        store->version = step->version;
    return ok;
}

bool migrate_forward(struct store *store, struct base_error *error)
{
    bool ok = true;
    for (const struct store_migration *step = store_migrations; ok && step->version != 0; step++) {
        if (step->version <= store->version)
            continue;
        if (store->version > 0) {
            char copy[4096];
            (void)snprintf(copy, sizeof copy, "%s.before-%04d", store->path, step->version);
            /* One that is left from a try that failed later is made anew. */
            if (unlink(copy) != 0 && errno != ENOENT)
                return base_fail_errno(error, errno, "Replacing the backup %s", copy);
            ok = copy_verified(store, copy, error);
        }
        ok = ok && apply(store, step, error);
    }
    return ok;
}
