#include "read.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <sys/stat.h>
#include <unistd.h>

bool lightcurve_file_open(int at, const char *name, bool follow, const char *label, int *fd,
                          uint64_t *size, struct base_error *error)
{
    struct stat about;
    /* Not blocking, so that a named pipe put in place of a file cannot hold us up. */
    *fd =
        openat(at, name, O_RDONLY | O_CLOEXEC | O_NONBLOCK | O_NOCTTY | (follow ? 0 : O_NOFOLLOW));
    if (*fd < 0)
        return base_fail_errno(error, errno, "Opening %s", label);
    if (fstat(*fd, &about) != 0) {
        (void)base_fail_errno(error, errno, "Looking at %s", label);
        goto refuse;
    }
    if (!S_ISREG(about.st_mode)) {
        (void)base_fail(error, BASE_INVALID, "%s is not a regular file.", label);
        goto refuse;
    }
    *size = (uint64_t)about.st_size;
    return true;
refuse:
    (void)close(*fd);
    *fd = -1;
    return false;
}

bool lightcurve_file_read(int fd, uint64_t size, const char *label, unsigned char **data,
                          size_t *length, struct base_error *error)
{
    *data = NULL;
    *length = 0;
    if (size > LIGHTCURVE_FILE_BYTES_MAX)
        return base_fail(error, BASE_TOO_LARGE,
                         "The file has %llu bytes; the limit for one file is %llu.",
                         (unsigned long long)size, LIGHTCURVE_FILE_BYTES_MAX);
    unsigned char *buffer = malloc(size == 0 ? 1 : (size_t)size);
    if (buffer == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to read %s.", label);
    size_t used = 0;
    while (used < size) {
        ssize_t got = pread(fd, buffer + used, (size_t)size - used, (off_t)used);
        if (got == 0)
            break;
        if (got < 0 && errno == EINTR)
            continue;
        if (got < 0) {
            int reason = errno;
            free(buffer);
            return base_fail_errno(error, reason, "Reading %s", label);
        }
        used += (size_t)got;
    }
    *data = buffer;
    *length = used;
    return true;
}
