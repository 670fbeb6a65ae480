#include "lock.h"

#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <stdio.h>
#include <string.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>

static bool name_lock(char path[PATH_MAX], const char *database, struct base_error *error)
{
    int wrote = snprintf(path, PATH_MAX, "%s.lock", database);
    return (wrote > 0 && wrote < PATH_MAX) ||
           base_fail(error, BASE_INVALID, "The path of the database is too long.");
}

static bool fail_held(int fd, const char *database, struct base_error *error)
{
    char holder[32] = "";
    ssize_t length = pread(fd, holder, sizeof holder - 1, 0);
    holder[length > 0 ? length : 0] = '\0';
    holder[strspn(holder, "0123456789")] = '\0';
    return base_fail(error, BASE_CONFLICT,
                     "The database %s is in use by process %s. One process may use a database at a "
                     "time: stop that one first, or ask it over HTTP.",
                     database, holder[0] != '\0' ? holder : "(unknown)");
}

static bool write_holder(int fd, const char *path, struct base_error *error)
{
    char holder[32];
    int length = snprintf(holder, sizeof holder, "%ld\n", (long)getpid());
    if (ftruncate(fd, 0) == 0 && pwrite(fd, holder, (size_t)length, 0) == length)
        return true;
    return base_fail_errno(error, errno, "Writing the lock file %s", path);
}

static bool is_same_file(int fd, const char *path)
{
    struct stat held, named;
    return fstat(fd, &held) == 0 && stat(path, &named) == 0 && held.st_dev == named.st_dev &&
           held.st_ino == named.st_ino;
}

bool lock_take(const char *database, struct lock *lock, struct base_error *error)
{
    char path[PATH_MAX];
    *lock = (struct lock){.fd = -1};
    if (!name_lock(path, database, error))
        return false;
    bool ok = true, ours = false;
    while (ok && !ours) {
        lock->made = access(path, F_OK) != 0;
        lock->fd = open(path, O_RDWR | O_CREAT | O_CLOEXEC, 0600);
        if (lock->fd < 0)
            return base_fail_errno(error, errno, "Opening the lock file %s", path);
        if (flock(lock->fd, LOCK_EX | LOCK_NB) != 0)
            ok = errno == EWOULDBLOCK ? fail_held(lock->fd, database, error)
                                      : base_fail_errno(error, errno, "Locking %s", path);
        else
            ours = is_same_file(lock->fd, path);
        /* Its last holder removed it between the two calls: take the one that is there now. */
        if (ok && !ours)
            (void)close(lock->fd);
    }
    ok = ok && write_holder(lock->fd, path, error);
    if (!ok) {
        (void)close(lock->fd);
        lock->fd = -1;
    }
    return ok;
}

void lock_end(const char *database, struct lock *lock, bool forget)
{
    char path[PATH_MAX];
    if (lock->fd < 0)
        return;
    if (forget && name_lock(path, database, NULL))
        (void)unlink(path);
    (void)close(lock->fd);
    lock->fd = -1;
}

bool lock_check(const char *database, const struct lock *lock, struct base_error *error)
{
    char path[PATH_MAX];
    return name_lock(path, database, error) &&
           (is_same_file(lock->fd, path) ||
            base_fail(error, BASE_CONFLICT,
                      "The lock file %s was removed or replaced, so another process may use the "
                      "database; stop this one and start it again.",
                      path));
}
