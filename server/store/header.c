#include "header.h"

#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

/* SQLite's file format, https://www.sqlite.org/fileformat2.html, section 1.3. */
#define HEADER_SIZE 100
#define AT_PAGE_SIZE 16
#define AT_PAGE_COUNT 28
#define AT_APPLICATION_ID 68

static uint32_t big_endian(const unsigned char *at)
{
    return (uint32_t)at[0] << 24 | (uint32_t)at[1] << 16 | (uint32_t)at[2] << 8 | at[3];
}

static bool has_wal(const char *path)
{
    char wal[PATH_MAX];
    struct stat status;
    int wrote = snprintf(wal, sizeof wal, "%s-wal", path);
    return wrote > 0 && (size_t)wrote < sizeof wal && stat(wal, &status) == 0 && status.st_size > 0;
}

/* Is the file as long as it says? SQLite itself does not mind if a part of the last page is gone.
 * While there is a WAL the pages may still stand there. */
static bool length_check(const char *path, const unsigned char *header, off_t length,
                         struct base_error *error)
{
    off_t page = (off_t)header[AT_PAGE_SIZE] << 8 | header[AT_PAGE_SIZE + 1];
    off_t says = (page == 1 ? 65536 : page) * (off_t)big_endian(header + AT_PAGE_COUNT);
    return length >= says || has_wal(path) ||
           base_fail(
               error, BASE_CORRUPT,
               "%s is cut short: it has %lld bytes of %lld. Keep a copy of it and restore the "
               "newest backup.",
               path, (long long)length, (long long)says);
}

static bool judge(const char *path, const unsigned char *header, off_t length,
                  enum header_kind *kind, struct base_error *error)
{
    *kind = HEADER_NEW;
    if (length == 0)
        return true;
    if (length < HEADER_SIZE || memcmp(header, "SQLite format 3", 16) != 0)
        return base_fail(error, BASE_INVALID,
                         "%s is not an Ebbmark database but some other file, so it is left alone.",
                         path);
    uint32_t id = big_endian(header + AT_APPLICATION_ID);
    if (id == HEADER_APPLICATION_ID) {
        *kind = HEADER_OURS;
        return length_check(path, header, length, error);
    }
    if (has_wal(path))
        *kind = HEADER_UNKNOWN;
    else if (id != 0 || big_endian(header + AT_PAGE_COUNT) > 1)
        return base_fail(error, BASE_INVALID,
                         "%s is a database of another program, so it is left alone.", path);
    return true;
}

bool header_read(const char *path, enum header_kind *kind, struct base_error *error)
{
    unsigned char header[HEADER_SIZE] = {0};
    *kind = HEADER_NEW;
    int fd = open(path, O_RDONLY | O_CLOEXEC);
    if (fd < 0)
        return errno == ENOENT || base_fail_errno(error, errno, "Opening the database %s", path);
    struct stat status;
    bool ok = (fstat(fd, &status) == 0 && pread(fd, header, sizeof header, 0) >= 0) ||
              base_fail_errno(error, errno, "Reading the database %s", path);
    (void)close(fd);
    return ok && judge(path, header, status.st_size, kind, error);
}
