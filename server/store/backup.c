#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include "migrate.h"

/* Names of all tables, then for each the same count on both sides. */
static bool counts_agree(struct db *from, struct db *to, struct base_error *error)
{
    sqlite3_stmt *names = NULL;
    bool ok =
        sqlite3_prepare_v2(from->handle,
                           "SELECT format('SELECT count(*) FROM \"%w\"', name) FROM sqlite_schema "
                           "WHERE type = 'table' AND name NOT LIKE 'sqlite_%'",
                           -1, &names, NULL) == SQLITE_OK ||
        db_fail(from, "Reading the table names", error);
    while (ok && sqlite3_step(names) == SQLITE_ROW) {
        sqlite3_stmt *one = NULL, *other = NULL;
        const char *sql = (const char *)sqlite3_column_text(names, 0);
        ok = sqlite3_prepare_v2(from->handle, sql, -1, &one, NULL) == SQLITE_OK &&
             sqlite3_prepare_v2(to->handle, sql, -1, &other, NULL) == SQLITE_OK &&
             sqlite3_step(one) == SQLITE_ROW && sqlite3_step(other) == SQLITE_ROW &&
             sqlite3_column_int64(one, 0) == sqlite3_column_int64(other, 0);
        if (!ok)
            (void)base_fail(
                error, BASE_CORRUPT,
                "The copy of the database does not hold the same rows; it is not kept.");
        (void)sqlite3_finalize(other);
        (void)sqlite3_finalize(one);
    }
    (void)sqlite3_finalize(names);
    return ok;
}

static bool is_sound(struct db *db, struct base_error *error)
{
    sqlite3_stmt *row = db_bind(db, "PRAGMA integrity_check", error, "");
    if (row == NULL)
        return false;
    int got = db_next(db, row, error);
    bool ok = got == 1 && strcmp((const char *)sqlite3_column_text(row, 0), "ok") == 0;
    if (got == 1 && !ok)
        (void)base_fail(error, BASE_CORRUPT, "The copy of the database is damaged: %s.",
                        (const char *)sqlite3_column_text(row, 0));
    db_done(row);
    return ok;
}

static bool copy_pages(struct db *from, struct db *to, struct base_error *error)
{
    sqlite3_backup *backup = sqlite3_backup_init(to->handle, "main", from->handle, "main");
    if (backup == NULL)
        return db_fail(to, "Starting the backup", error);
    int code;
    do {
        code = sqlite3_backup_step(backup, 1024);
        if (code == SQLITE_BUSY || code == SQLITE_LOCKED)
            (void)sqlite3_sleep(20);
    } while (code == SQLITE_OK || code == SQLITE_BUSY || code == SQLITE_LOCKED);
    (void)sqlite3_backup_finish(backup);
    return code == SQLITE_DONE || db_fail(to, "Writing the backup", error);
}

bool copy_verified(struct store *store, const char *path, struct base_error *error)
{
    struct stat status;
    if (stat(path, &status) == 0)
        return base_fail(error, BASE_CONFLICT, "%s is there already and is not overwritten.", path);
    /* A connection of its own, held in a read transaction, so that both sides are the same moment.
     */
    struct db from, to = {0};
    if (!db_open(&from, store->path, true, error))
        return false;
    bool ok = db_open(&to, path, false, error) &&
              db_script(&from, "BEGIN; SELECT count(*) FROM sqlite_schema", error) &&
              copy_pages(&from, &to, error) && is_sound(&to, error) &&
              counts_agree(&from, &to, error);
    db_close(&to);
    db_close(&from);
    if (!ok)
        (void)unlink(path);
    return ok;
}

bool store_backup(struct store *store, const char *path, struct base_error *error)
{
    return copy_verified(store, path, error);
}
