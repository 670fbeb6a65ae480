#include "copy.h"

#include <errno.h>
#include <fcntl.h>
#include <libgen.h>
#include <limits.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#define STEP_PAGES 1024
#define BUSY_WAIT_MS 20

/* The number that one statement, not from the cache, gives; -1 on failure. */
static int64_t count_rows(struct db *db, const char *sql, struct base_error *error)
{
    sqlite3_stmt *row = NULL;
    int64_t count = -1;
    if (sqlite3_prepare_v2(db->handle, sql, -1, &row, NULL) == SQLITE_OK &&
        sqlite3_step(row) == SQLITE_ROW)
        count = sqlite3_column_int64(row, 0);
    else
        (void)db_fail(db, "Counting the rows of a table", error);
    (void)sqlite3_finalize(row);
    return count;
}

/* The same tables with the same number of rows on both sides? */
static bool counts_agree(struct db *from, struct db *to, struct base_error *error)
{
    static const char tables[] =
        "SELECT format('SELECT count(*) FROM \"%w\"', name) FROM sqlite_schema"
        " WHERE type = 'table' AND name NOT LIKE 'sqlite\\_%' ESCAPE '\\'";
    sqlite3_stmt *names = db_bind(from, tables, error, "");
    int got = names != NULL ? 1 : -1;
    while (got == 1 && (got = db_next(from, names, error)) == 1) {
        const char *sql = (const char *)sqlite3_column_text(names, 0);
        int64_t here = sql != NULL ? count_rows(from, sql, error) : -1;
        int64_t there = here >= 0 ? count_rows(to, sql, error) : -1;
        if (sql == NULL)
            (void)db_no_memory(error);
        else if (here >= 0 && there >= 0 && here != there)
            (void)base_fail(error, BASE_CORRUPT,
                            "The copy of the database has other rows than the original; it is not "
                            "kept.");
        if (there < 0 || here != there)
            got = -1;
    }
    db_done(names);
    return got == 0;
}

bool copy_is_sound(struct db *db, const char *what, struct base_error *error)
{
    sqlite3_stmt *row = db_bind(db, "PRAGMA integrity_check(1)", error, "");
    int got = row != NULL ? db_next(db, row, error) : -1;
    const char *said = got == 1 ? (const char *)sqlite3_column_text(row, 0) : NULL;
    bool ok = said != NULL && strcmp(said, "ok") == 0;
    if (got >= 0 && !ok)
        (void)base_fail(error, BASE_CORRUPT, "%s is damaged: %s.", what,
                        said != NULL ? said : "it cannot be checked");
    db_done(row);
    return ok;
}

static bool copy_pages(struct db *from, struct db *to, struct base_error *error)
{
    sqlite3_backup *backup = sqlite3_backup_init(to->handle, "main", from->handle, "main");
    if (backup == NULL)
        return db_fail(to, "Starting the copy", error);
    int code;
    do {
        code = sqlite3_backup_step(backup, STEP_PAGES);
        if (code == SQLITE_BUSY || code == SQLITE_LOCKED)
            (void)sqlite3_sleep(BUSY_WAIT_MS);
    } while (code == SQLITE_OK || code == SQLITE_BUSY || code == SQLITE_LOCKED);
    /* The reason of a failure stands on the destination once the copy is ended. */
    (void)sqlite3_backup_finish(backup);
    return code == SQLITE_DONE || db_fail(to, "Writing the copy", error);
}

/* Write and verify a copy under a name of its own. */
static bool copy_to(struct db *from, const char *path, struct base_error *error)
{
    struct db to = {0};
    /* For its owner only, like the database. */
    int fd = open(path, O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0600);
    if (fd < 0)
        return base_fail_errno(error, errno, "Making the copy %s", path);
    (void)close(fd);
    /* Locked exclusively, it needs no memory shared through a file, which a network disk may not
     * have. Without a WAL the copy is one file that stands alone. */
    bool ok = db_open(&to, path, DB_WRITES, error) &&
              db_script(&to, "PRAGMA locking_mode = EXCLUSIVE", error) &&
              copy_pages(from, &to, error) && db_script(&to, "PRAGMA journal_mode = DELETE", error);
    db_close(&to);
    /* Opened anew, so that it is read from the file and not from what the copy left in memory. */
    ok = ok && db_open(&to, path, DB_READS, error) &&
         copy_is_sound(&to, "The copy of the database", error) && counts_agree(from, &to, error);
    db_close(&to);
    return ok;
}

static bool give_name(const char *part, const char *path, enum copy_where where,
                      struct base_error *error)
{
    unsigned flags = where == COPY_IS_NEW ? RENAME_NOREPLACE : 0;
    if (renameat2(AT_FDCWD, part, AT_FDCWD, path, flags) == 0)
        return copy_sync_folder(path, error);
    /* Not every file system can refuse to replace; there the check at the start has to do. */
    if (errno == EINVAL && rename(part, path) == 0)
        return copy_sync_folder(path, error);
    if (errno == EEXIST)
        return base_fail(error, BASE_CONFLICT, "%s is there already and is not overwritten.", path);
    return base_fail_errno(error, errno, "Naming the copy %s", path);
}

bool copy_sync_folder(const char *path, struct base_error *error)
{
    char folder[PATH_MAX];
    (void)snprintf(folder, sizeof folder, "%s", path);
    int fd = open(dirname(folder), O_RDONLY | O_DIRECTORY | O_CLOEXEC);
    if (fd < 0)
        return base_fail_errno(error, errno, "Opening the folder of %s", path);
    /* Some file systems cannot sync a folder and say EINVAL; they keep names on their own. */
    bool ok = fsync(fd) == 0 || errno == EINVAL ||
              base_fail_errno(error, errno, "Storing the name %s", path);
    (void)close(fd);
    return ok;
}

bool copy_verified(const char *from, const char *to, enum copy_where where,
                   struct base_error *error)
{
    char part[PATH_MAX];
    int wrote = snprintf(part, sizeof part, "%s.part", to);
    if (wrote < 0 || (size_t)wrote >= sizeof part)
        return base_fail(error, BASE_INVALID, "The path of the copy is too long.");
    struct stat status;
    if (where == COPY_IS_NEW && stat(to, &status) == 0)
        return base_fail(error, BASE_CONFLICT, "%s is there already and is not overwritten.", to);
    if (unlink(part) != 0 && errno != ENOENT)
        return base_fail_errno(error, errno, "Removing an unfinished copy %s", part);
    /* A connection of its own, held in a read transaction, so that both sides are the same moment.
     */
    struct db source = {0};
    bool ok = db_open(&source, from, DB_READS, error) &&
              db_script(&source, "BEGIN; SELECT count(*) FROM sqlite_schema", error) &&
              copy_to(&source, part, error) && give_name(part, to, where, error);
    db_close(&source);
    if (!ok)
        (void)unlink(part);
    return ok;
}
