/* Backups: made, checked, put back. */
#include <errno.h>
#include <inttypes.h>
#include <limits.h>
#include <stdio.h>
#include <stdlib.h>
#include <sys/stat.h>
#include <unistd.h>

#include "copy.h"
#include "header.h"
#include "migrate.h"

bool store_backup(struct store *store, const char *path, struct base_error *error)
{
    return copy_verified(store->path, path, COPY_IS_NEW, error);
}

bool store_backup_check(const char *path, int *version, struct base_error *error)
{
    enum header_kind kind;
    struct stat status;
    *version = 0;
    if (stat(path, &status) != 0)
        return base_fail_errno(error, errno, "Looking at the backup %s", path);
    if (!header_read(path, &kind, error))
        return false;
    if (kind == HEADER_NEW)
        return base_fail(error, BASE_INVALID, "%s is empty: there is nothing to put back.", path);
    struct db db = {0};
    bool ok = db_open(&db, path, DB_READS, error) && migrate_identify(&db, path, version, error) &&
              copy_is_sound(&db, path, error);
    db_close(&db);
    return ok;
}

/* Rename FILE to FILE<mark>, and what SQLite keeps beside it likewise, so that they stay together.
 * *moved: there was something. */
static bool move_aside(const char *path, const char *mark, bool *moved, struct base_error *error)
{
    static const char *const parts[] = {"", "-wal", "-shm"};
    *moved = false;
    for (size_t i = 0; i < sizeof parts / sizeof parts[0]; i++) {
        char from[PATH_MAX], to[PATH_MAX];
        int one = snprintf(from, sizeof from, "%s%s", path, parts[i]);
        int other = snprintf(to, sizeof to, "%s%s%s", path, mark, parts[i]);
        if (one < 0 || other < 0 || (size_t)one >= sizeof from || (size_t)other >= sizeof to)
            return base_fail(error, BASE_INVALID, "The path of the database is too long.");
        if (rename(from, to) == 0)
            *moved = true;
        else if (errno != ENOENT)
            return base_fail_errno(error, errno, "Moving %s aside", from);
    }
    return true;
}

/* With the lock held: the verified copy stands ready before the old database is moved. */
static bool put_back(const char *backup, const char *path, int64_t now_ms, bool *replaced,
                     struct base_error *error)
{
    char ready[PATH_MAX], mark[48];
    (void)snprintf(mark, sizeof mark, ".replaced-%" PRId64, now_ms);
    int wrote = snprintf(ready, sizeof ready, "%s.restored", path);
    if (wrote < 0 || (size_t)wrote >= sizeof ready)
        return base_fail(error, BASE_INVALID, "The path of the database is too long.");
    if (!copy_verified(backup, ready, COPY_REPLACES, error) ||
        !move_aside(path, mark, replaced, error))
        return false;
    if (rename(ready, path) != 0)
        return base_fail_errno(error, errno, "Naming the restored database %s", path);
    return copy_sync_folder(path, error);
}

bool store_restore(const char *backup, const char *path, int64_t now_ms, bool *replaced,
                   struct base_error *error)
{
    struct lock lock;
    int version;
    *replaced = false;
    char *resolved = realpath(path, NULL);
    const char *database = resolved != NULL ? resolved : path;
    bool ok = lock_take(database, &lock, error);
    if (ok) {
        ok = store_backup_check(backup, &version, error) &&
             put_back(backup, database, now_ms, replaced, error);
        lock_end(database, &lock, !ok && lock.made);
    }
    free(resolved);
    return ok;
}
