#include "walk.h"

#include <assert.h>
#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <sys/stat.h>
#include <unistd.h>

#define DEPTH_MAX 32       /* folders within folders */
#define PEEK_BYTES 65536   /* looked at to tell an archive */
#define LABEL_NAME_MAX 500 /* bytes of one name that a label shows */

bool lightcurve_walker_tell(struct lightcurve_walker *walker, const char *label, const void *data,
                            size_t size, const struct base_error *reason)
{
    walker->files++;
    walker->bytes += size;
    if (walker->visit != NULL)
        walker->stopped = !walker->visit(walker->context, label, data, size, reason);
    return !walker->stopped;
}

void lightcurve_walker_count(struct lightcurve_walker *walker, uint64_t bytes)
{
    walker->files++;
    walker->bytes += bytes;
}

bool lightcurve_walk_passes_over(const char *name)
{
    return name[0] == '.' || strncasecmp(name, "README", 6) == 0;
}

void lightcurve_label_add(struct base_text *label, const char *name)
{
    size_t length = strnlen(name, LABEL_NAME_MAX);
    while (length > 0 && name[length] != '\0' && ((unsigned char)name[length] & 0xc0) == 0x80)
        length--;
    bool whole = base_text_is_utf8(name, length);
    for (size_t i = 0; i < length; i++) {
        unsigned char c = (unsigned char)name[i];
        bool shown = c >= 0x20 && c != 0x7f && (whole || c < 0x80);
        base_text_add_char(label, shown ? name[i] : '?');
    }
}

static bool tell_reason(struct lightcurve_walker *walker, const char *label,
                        const struct base_error *reason)
{
    return lightcurve_walker_tell(walker, label, NULL, 0, reason);
}

/* Does the open file hold an archive, bare or under gzip? Damage is left for the reader to name. */
static bool holds_archive(int fd)
{
    bool archive = false;
    unsigned char *head = malloc(PEEK_BYTES);
    if (head == NULL)
        return false;
    ssize_t got = pread(fd, head, PEEK_BYTES, 0);
    size_t size = got < 0 ? 0 : (size_t)got;
    if (lightcurve_gzip_is(head, size)) {
        unsigned char inner[512];
        size_t inner_size = lightcurve_gzip_peek(head, size, inner, sizeof inner);
        archive = lightcurve_archive_is(inner, inner_size);
    } else {
        archive = lightcurve_archive_is(head, size);
    }
    free(head);
    return archive;
}

static bool walk_open_file(struct lightcurve_walker *walker, int fd, uint64_t size,
                           const char *label)
{
    if (holds_archive(fd))
        return lightcurve_walk_archive(walker, fd, size, label);
    if (walker->visit == NULL) {
        lightcurve_walker_count(walker, size);
        return true;
    }
    struct base_error reason = {0};
    unsigned char *data = NULL;
    size_t length = 0;
    bool go_on = lightcurve_file_read(fd, size, label, &data, &length, &reason)
                     ? lightcurve_walker_tell(walker, label, data, length, NULL)
                     : tell_reason(walker, label, &reason);
    free(data);
    return go_on;
}

static int by_name(const void *a, const void *b)
{
    return strcmp(*(char *const *)a, *(char *const *)b);
}

struct names {
    char **list;
    size_t count, room;
};

static void names_free(struct names *names)
{
    for (size_t i = 0; i < names->count; i++)
        free(names->list[i]);
    free(names->list);
}

static bool names_add(struct names *names, const char *name)
{
    if (names->count == names->room) {
        size_t room = names->room == 0 ? 64 : names->room * 2;
        char **list = realloc(names->list, room * sizeof *list);
        if (list == NULL)
            return false;
        names->list = list;
        names->room = room;
    }
    names->list[names->count] = strdup(name);
    if (names->list[names->count] == NULL)
        return false;
    names->count++;
    return true;
}

/* The names in an open folder that are not passed over, sorted by their bytes. */
static bool read_names(int folder, const char *label, struct names *names, struct base_error *error)
{
    int copy = fcntl(folder, F_DUPFD_CLOEXEC, 0);
    DIR *stream = copy < 0 ? NULL : fdopendir(copy);
    if (stream == NULL) {
        (void)base_fail_errno(error, errno, "Reading the folder %s", label);
        if (copy >= 0)
            (void)close(copy);
        return false;
    }
    bool ok = false;
    for (;;) {
        errno = 0;
        const struct dirent *entry = readdir(stream);
        if (entry == NULL && errno != 0) {
            (void)base_fail_errno(error, errno, "Reading the folder %s", label);
            goto end;
        }
        if (entry == NULL)
            break;
        if (!lightcurve_walk_passes_over(entry->d_name) && !names_add(names, entry->d_name)) {
            (void)base_fail(error, BASE_MEMORY, "There is not enough memory to list %s.", label);
            goto end;
        }
    }
    if (names->count > 0)
        qsort(names->list, names->count, sizeof *names->list, by_name);
    ok = true;
end:
    (void)closedir(stream);
    return ok;
}

static bool walk_folder(struct lightcurve_walker *walker, int folder, const char *label, int depth,
                        struct base_error *error);

/* A folder within a folder: what cannot be read in it is told to the visitor. */
static bool walk_inner_folder(struct lightcurve_walker *walker, int at, const char *name,
                              const char *label, int depth)
{
    struct base_error reason = {0};
    if (depth == DEPTH_MAX) {
        (void)base_fail(&reason, BASE_TOO_LARGE, "Folders lie more than %d deep.", DEPTH_MAX);
        return tell_reason(walker, label, &reason);
    }
    int folder = openat(at, name, O_RDONLY | O_DIRECTORY | O_NOFOLLOW | O_CLOEXEC);
    if (folder < 0) {
        (void)base_fail_errno(&reason, errno, "Opening the folder %s", label);
        return tell_reason(walker, label, &reason);
    }
    bool ok = walk_folder(walker, folder, label, depth + 1, &reason);
    (void)close(folder);
    return ok || (!walker->stopped && tell_reason(walker, label, &reason));
}

/* One name in a folder: a file, a folder, or something that is passed over (links, devices). */
static bool walk_name(struct lightcurve_walker *walker, int folder, const char *name,
                      const char *label, int depth)
{
    struct stat about;
    struct base_error reason = {0};
    if (fstatat(folder, name, &about, AT_SYMLINK_NOFOLLOW) != 0) {
        (void)base_fail_errno(&reason, errno, "Looking at %s", label);
        return tell_reason(walker, label, &reason);
    }
    if (S_ISDIR(about.st_mode))
        return walk_inner_folder(walker, folder, name, label, depth);
    if (!S_ISREG(about.st_mode))
        return true;
    int fd = -1;
    uint64_t size = 0;
    if (!lightcurve_file_open(folder, name, false, label, &fd, &size, &reason))
        return tell_reason(walker, label, &reason);
    bool go_on = walk_open_file(walker, fd, size, label);
    (void)close(fd);
    return go_on;
}

/* False when the walk is to stop, or (with `error`) when the folder cannot be listed. */
static bool walk_folder(struct lightcurve_walker *walker, int folder, const char *label, int depth,
                        struct base_error *error)
{
    bool ok = false;
    struct names names = {0};
    struct base_text path = {0};
    if (!read_names(folder, label, &names, error))
        goto end;
    for (size_t i = 0; i < names.count; i++) {
        path.length = 0;
        base_text_add(&path, label);
        if (path.length > 0 && path.data[path.length - 1] != '/')
            base_text_add_char(&path, '/');
        lightcurve_label_add(&path, names.list[i]);
        if (path.failed) {
            (void)base_fail(error, BASE_MEMORY, "There is not enough memory to list %s.", label);
            goto end;
        }
        if (!walk_name(walker, folder, names.list[i], path.data, depth))
            goto end;
    }
    ok = true;
end:
    base_text_free(&path);
    names_free(&names);
    return ok;
}

/* Walk the path that was asked for; a link there is followed, since somebody named it. */
static bool walk_path(struct lightcurve_walker *walker, const char *path, struct base_error *error)
{
    bool ok = false;
    struct base_text label = {0};
    struct stat about;
    int fd = -1;
    uint64_t size = 0;
    base_text_add(&label, "");
    for (const char *at = path; *at != '\0' && !label.failed;) {
        /* Piece by piece, since a label shows only so much of one name. */
        size_t step = strcspn(at, "/");
        char *piece = strndup(at, step);
        label.failed = label.failed || piece == NULL;
        if (piece != NULL)
            lightcurve_label_add(&label, piece);
        free(piece);
        at += step;
        if (*at == '/') {
            base_text_add_char(&label, '/');
            at++;
        }
    }
    if (label.failed) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to walk the path.");
        goto end;
    }
    if (stat(path, &about) != 0) {
        (void)base_fail_errno(error, errno, "Opening %s", label.data);
        goto end;
    }
    if (S_ISDIR(about.st_mode)) {
        fd = open(path, O_RDONLY | O_DIRECTORY | O_CLOEXEC);
        if (fd < 0)
            (void)base_fail_errno(error, errno, "Opening the folder %s", label.data);
        ok = fd >= 0 && walk_folder(walker, fd, label.data, 0, error);
    } else {
        ok = lightcurve_file_open(AT_FDCWD, path, true, label.data, &fd, &size, error) &&
             walk_open_file(walker, fd, size, label.data);
    }
    if (walker->stopped)
        (void)base_fail(error, BASE_CANCELLED, "The walk over %s was stopped.", label.data);
end:
    if (fd >= 0)
        (void)close(fd);
    base_text_free(&label);
    return ok;
}

bool lightcurve_walk(const char *path, lightcurve_visit *visit, void *context,
                     struct base_error *error)
{
    assert(path != NULL && visit != NULL);
    struct lightcurve_walker walker = {.visit = visit, .context = context};
    return walk_path(&walker, path, error);
}

bool lightcurve_walk_count(const char *path, size_t *files, uint64_t *bytes,
                           struct base_error *error)
{
    assert(path != NULL && files != NULL && bytes != NULL);
    struct lightcurve_walker walker = {0};
    bool ok = walk_path(&walker, path, error);
    *files = ok ? walker.files : 0;
    *bytes = ok ? walker.bytes : 0;
    return ok;
}
