/* Opening: the lock, the checks, the migrations, the connections. */
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <sys/statvfs.h>
#include <unistd.h>

#include "db.h"
#include "migrate.h"

#define READERS_DEFAULT 4u
#define FREE_BYTES_LEAST (4u << 20)

/* Take FILE.lock and write our process id into it. */
static bool lock_take(struct store *store, struct base_error *error)
{
    char path[4096];
    int wrote = snprintf(path, sizeof path, "%s.lock", store->path);
    if (wrote < 0 || (size_t)wrote >= sizeof path)
        return base_fail(error, BASE_INVALID, "The database's path is too long.");
    store->lock_fd = open(path, O_RDWR | O_CREAT | O_CLOEXEC, 0600);
    if (store->lock_fd < 0)
        return base_fail_errno(error, errno, "Opening the lock file %s", path);
    char holder[32] = "";
    if (flock(store->lock_fd, LOCK_EX | LOCK_NB) != 0) {
        ssize_t length = pread(store->lock_fd, holder, sizeof holder - 1, 0);
        holder[length > 0 ? length : 0] = '\0';
        holder[strcspn(holder, "\n")] = '\0';
        return base_fail(error, BASE_CONFLICT,
                         "The database %s is in use by process %s; stop that first, since one "
                         "process may use a database at a time.",
                         store->path, holder[0] != '\0' ? holder : "(unknown)");
    }
    int length = snprintf(holder, sizeof holder, "%ld\n", (long)getpid());
    if (ftruncate(store->lock_fd, 0) != 0 ||
        pwrite(store->lock_fd, holder, (size_t)length, 0) != length)
        return base_fail_errno(error, errno, "Writing the lock file %s", path);
    return true;
}

static bool readers_open(struct store *store, unsigned count, struct base_error *error)
{
    store->readers = calloc(count, sizeof *store->readers);
    store->idle = calloc(count, sizeof(struct db *));
    if (store->readers == NULL || store->idle == NULL)
        return db_no_memory(error);
    for (unsigned i = 0; i < count; i++) {
        if (!db_open(&store->readers[i], store->path, true, error))
            return false;
        store->reader_count++;
        store->idle[store->idle_count++] = &store->readers[i];
    }
    return true;
}

/* Does the path hold something, and may we go on? */
static bool file_check(const char *path, bool must_exist, struct base_error *error)
{
    struct stat status;
    if (stat(path, &status) == 0)
        return S_ISREG(status.st_mode) || base_fail(error, BASE_INVALID, "%s is not a file.", path);
    if (errno != ENOENT)
        return base_fail_errno(error, errno, "Looking at the database %s", path);
    return !must_exist || base_fail(error, BASE_NOT_FOUND,
                                    "There is no database %s; `ebbmark load` makes one.", path);
}

static bool open_parts(struct store *store, const struct store_options *options,
                       struct base_error *error)
{
    if (!file_check(store->path, options->must_exist, error) || !lock_take(store, error) ||
        !db_open(&store->writer, store->path, false, error) || !migrate_check(store, error) ||
        !db_script(&store->writer,
                   "PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL;"
                   "PRAGMA wal_autocheckpoint = 4000;",
                   error) ||
        !migrate_forward(store, error))
        return false;
    return readers_open(store, options->readers > 0 ? options->readers : READERS_DEFAULT, error);
}

bool store_open(const char *path, const struct store_options *options, struct store **out,
                struct base_error *error)
{
    *out = NULL;
    struct store *store = calloc(1, sizeof *store);
    if (store == NULL)
        return db_no_memory(error);
    store->lock_fd = -1;
    (void)pthread_mutex_init(&store->writing, NULL);
    (void)pthread_mutex_init(&store->lock, NULL);
    (void)pthread_cond_init(&store->returned, NULL);
    store->path = strdup(path);
    bool ok = store->path != NULL ? open_parts(store, options, error) : db_no_memory(error);
    if (!ok) {
        store_close(store);
        return false;
    }
    *out = store;
    return true;
}

void store_close(struct store *store)
{
    if (store == NULL)
        return;
    for (size_t i = 0; i < store->reader_count; i++)
        db_close(&store->readers[i]);
    db_close(&store->writer);
    if (store->lock_fd >= 0)
        (void)close(store->lock_fd);
    (void)pthread_cond_destroy(&store->returned);
    (void)pthread_mutex_destroy(&store->lock);
    (void)pthread_mutex_destroy(&store->writing);
    free(store->idle);
    free(store->readers);
    free(store->path);
    free(store);
}

int store_version(const struct store *store)
{
    return store->version;
}

bool store_ready(struct store *store, struct base_error *error)
{
    struct statvfs disk;
    if (statvfs(store->path, &disk) != 0)
        return base_fail_errno(error, errno, "Looking at the disk of %s", store->path);
    if ((unsigned long long)disk.f_bavail * disk.f_frsize < FREE_BYTES_LEAST)
        return base_fail(error, BASE_DISK_FULL,
                         "The disk of the database has less than 4 MiB left.");
    if ((disk.f_flag & ST_RDONLY) != 0)
        return base_fail(error, BASE_IO, "The disk of the database is read-only.");
    struct db *db = db_write(store, error);
    return db != NULL && db_write_end(store, true, error);
}
