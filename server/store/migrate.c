#include "migrate.h"

#include <inttypes.h>
#include <limits.h>
#include <stdio.h>

#include "copy.h"
#include "ebbmark/clock.h"
#include "header.h"

int store_version_newest(void)
{
    int newest = 0;
    for (const struct store_migration *at = store_migrations; at->version != 0; at++)
        newest = at->version;
    return newest;
}

static bool number_read(struct db *db, const char *sql, int64_t *out, struct base_error *error)
{
    sqlite3_stmt *row = db_bind(db, sql, error, "");
    int got = row != NULL ? db_next(db, row, error) : -1;
    *out = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    return got >= 0;
}

bool migrate_identify(struct db *db, const char *path, int *version, struct base_error *error)
{
    int64_t id = 0, found = 0, tables = 0;
    if (!number_read(db, "PRAGMA application_id", &id, error) ||
        !number_read(db, "PRAGMA user_version", &found, error) ||
        !number_read(db, "SELECT count(*) FROM sqlite_schema", &tables, error))
        return false;
    bool is_empty = id == 0 && found == 0 && tables == 0;
    if (!is_empty && (id != HEADER_APPLICATION_ID || found < 1))
        return base_fail(error, BASE_INVALID,
                         "%s is a database of another program, so it is left alone.", path);
    if (found > store_version_newest())
        return base_fail(error, BASE_INVALID,
                         "%s is at version %" PRId64
                         ", newer than this program knows (%d). Use the "
                         "newer ebbmark that wrote it.",
                         path, found, store_version_newest());
    *version = (int)found;
    return true;
}

bool migrate_check(struct store *store, struct base_error *error)
{
    return migrate_identify(&store->writer, store->path, &store->version, error);
}

/* One step in one transaction. */
static bool apply(struct store *store, const struct store_migration *step, struct base_error *error)
{
    static const char record[] =
        "CREATE TABLE IF NOT EXISTS schema_migration (version INTEGER PRIMARY KEY,"
        " name TEXT NOT NULL, applied_ms INTEGER NOT NULL) STRICT";
    static const char insert[] = "INSERT INTO schema_migration VALUES (?, ?, ?)";
    char version[96];
    (void)snprintf(version, sizeof version, "PRAGMA application_id = %d; PRAGMA user_version = %d;",
                   HEADER_APPLICATION_ID, step->version);
    struct base_error why = {0};
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok =
        db_script(db, step->sql, &why) && db_script(db, record, &why) &&
        db_run(db, &why, insert, "iti", (int64_t)step->version, step->name, base_clock_unix_ms()) &&
        db_script(db, version, &why);
    ok = db_write_end(store, ok, &why);
    if (ok)
        store->version = step->version;
    return ok || base_fail(error, why.kind, "The migration %s failed and changed nothing. %s",
                           step->name, why.sentence);
}

static bool back_up(struct store *store, int version, struct base_error *error)
{
    char path[PATH_MAX];
    int wrote = snprintf(path, sizeof path, "%s.before-%04d", store->path, version);
    if (wrote < 0 || (size_t)wrote >= sizeof path)
        return base_fail(error, BASE_INVALID, "The path of the database is too long.");
    /* One that is left from a try that failed later gives way, once there is a newer one. */
    return copy_verified(store->path, path, COPY_REPLACES, error);
}

bool migrate_forward(struct store *store, const struct store_migration *steps,
                     struct base_error *error)
{
    bool ok = true;
    for (const struct store_migration *step = steps; ok && step->version != 0; step++)
        if (step->version > store->version)
            ok = (store->version == 0 || back_up(store, step->version, error)) &&
                 apply(store, step, error);
    return ok;
}
