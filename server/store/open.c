/* Opening: the lock, the checks, the migrations, the connections. */
#include <errno.h>
#include <fcntl.h>
#include <sodium.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/statvfs.h>
#include <unistd.h>

#include "db.h"
#include "header.h"
#include "migrate.h"

#define READERS_DEFAULT 4u
#define READERS_MAX 256u
#define FREE_BYTES_LEAST (4u << 20)

static bool readers_open(struct store *store, unsigned count, struct base_error *error)
{
    store->readers = calloc(count, sizeof *store->readers);
    store->idle = calloc(count, sizeof(struct db *));
    if (store->readers == NULL || store->idle == NULL)
        return db_no_memory(error);
    for (unsigned i = 0; i < count; i++) {
        if (!db_open(&store->readers[i], store->path, DB_READS, error))
            return false;
        store->reader_count++;
        store->idle[store->idle_count++] = &store->readers[i];
    }
    return true;
}

/* Does the path hold something that may be a database, and may we go on? */
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

/* A new database is for its owner only: it holds passphrases' hashes and secrets. */
static bool file_make(const char *path, struct base_error *error)
{
    int fd = open(path, O_WRONLY | O_CREAT | O_CLOEXEC, 0600);
    if (fd < 0)
        return base_fail_errno(error, errno, "Making the database %s", path);
    (void)close(fd);
    return true;
}

static bool open_writer(struct store *store, struct base_error *error)
{
    enum header_kind kind;
    if (!header_read(store->path, &kind, error) ||
        (kind == HEADER_NEW && !file_make(store->path, error)) ||
        !db_open(&store->writer, store->path, DB_WRITES, error))
        return false;
    /* Until it has been found to be ours, closing it must not change it. */
    int careful = SQLITE_DBCONFIG_NO_CKPT_ON_CLOSE;
    (void)sqlite3_db_config(store->writer.handle, careful, kind == HEADER_UNKNOWN ? 1 : 0, NULL);
    if (!migrate_check(store, error))
        return false;
    (void)sqlite3_db_config(store->writer.handle, careful, 0, NULL);
    /* About 40 MB of WAL before it is copied into the database, and at most 64 MB kept after a
     * long read has let it grow. */
    return db_script(&store->writer,
                     "PRAGMA journal_mode = WAL; PRAGMA wal_autocheckpoint = 10000;"
                     "PRAGMA journal_size_limit = 67108864;",
                     error) &&
           migrate_forward(store, store_migrations, error);
}

static bool open_parts(struct store *store, const struct store_options *options,
                       struct base_error *error)
{
    unsigned readers = options->readers > 0 ? options->readers : READERS_DEFAULT;
    if (!file_check(store->path, options->must_exist, error) ||
        !lock_take(store->path, &store->lock_file, error))
        return false;
    struct base_error why = {0};
    bool ok = open_writer(store, &why) &&
              readers_open(store, readers < READERS_MAX ? readers : READERS_MAX, &why);
    if (!ok && error != NULL)
        *error = why;
    /* Beside a file that is not ours nothing is left behind. */
    store->foreign = !ok && why.kind == BASE_INVALID && store->lock_file.made;
    return ok;
}

/* The path without symbolic links, so that one database has one lock by whatever name. A file that
 * is not there yet keeps the name it was given. */
static char *path_of(const char *path)
{
    char *resolved = realpath(path, NULL);
    return resolved != NULL ? resolved : strdup(path);
}

bool store_open(const char *path, const struct store_options *options, struct store **out,
                struct base_error *error)
{
    *out = NULL;
    if (sodium_init() < 0)
        return base_fail(error, BASE_INTERNAL, "libsodium could not start.");
    struct store *store = calloc(1, sizeof *store);
    if (store == NULL)
        return db_no_memory(error);
    store->lock_file.fd = -1;
    (void)pthread_mutex_init(&store->adding, NULL);
    (void)pthread_mutex_init(&store->lock, NULL);
    (void)pthread_cond_init(&store->turned, NULL);
    (void)pthread_cond_init(&store->returned, NULL);
    store->path = path_of(path);
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
    if (store->path != NULL)
        lock_end(store->path, &store->lock_file, store->foreign);
    (void)pthread_cond_destroy(&store->returned);
    (void)pthread_cond_destroy(&store->turned);
    (void)pthread_mutex_destroy(&store->lock);
    (void)pthread_mutex_destroy(&store->adding);
    free(store->idle);
    free(store->readers);
    free(store->path);
    free(store);
}

int store_version(const struct store *store)
{
    return store->version;
}

static bool disk_check(const struct store *store, struct base_error *error)
{
    struct statvfs disk;
    if (statvfs(store->path, &disk) != 0)
        return base_fail_errno(error, errno, "Looking at the disk of %s", store->path);
    if ((unsigned long long)disk.f_bavail * disk.f_frsize < FREE_BYTES_LEAST)
        return base_fail(error, BASE_DISK_FULL,
                         "The disk of the database has less than 4 MiB left.");
    return (disk.f_flag & ST_RDONLY) == 0 ||
           base_fail(error, BASE_IO, "The disk of the database is read-only.");
}

bool store_ready(struct store *store, struct base_error *error)
{
    if (!lock_check(store->path, &store->lock_file, error) || !disk_check(store, error))
        return false;
    struct db *db = db_write(store, error);
    return db != NULL && db_write_end(store, true, error);
}
