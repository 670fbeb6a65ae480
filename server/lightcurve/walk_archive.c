#include "walk.h"

#include <archive.h>
#include <archive_entry.h>
#include <errno.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#define READ_STEP (1u << 16)
#define DAMAGED_MAX 100 /* damaged entries of a zip after which the rest is given up */

/* One archive under way. */
struct opened {
    struct archive *archive;
    /* Ours, since libarchive does not look whether it could make one of its own. */
    struct archive_entry *entry;
    int fd;
    const char *label;
    uint64_t packed;   /* bytes of the archive file */
    uint64_t unpacked; /* bytes that its entries came to so far, those passed over included */
    size_t entries, damaged;
    unsigned char *data; /* of the current entry; kept from one to the next */
    size_t length, capacity;
};

/* REOPEN: libarchive is of no more use, but the entries that follow can still be found. */
enum state { GO_ON, REOPEN, END_OF_ARCHIVE, STOP_WALK };

/* Say that the archive itself, not one entry, is at fault, and give it up. */
static enum state give_up(struct lightcurve_walker *walker, const struct opened *opened,
                          const struct base_error *reason)
{
    return lightcurve_walker_tell(walker, opened->label, NULL, 0, reason) ? END_OF_ARCHIVE
                                                                          : STOP_WALK;
}

static void word_damage(const struct opened *opened, struct base_error *reason)
{
    struct base_text said = {0};
    const char *text = archive_error_string(opened->archive);
    lightcurve_label_add(&said, text == NULL ? "no reason given" : text);
    (void)base_fail(reason, BASE_INVALID, "The archive is truncated or damaged: %s.",
                    said.data == NULL ? "no reason given" : said.data);
    base_text_free(&said);
}

/* The entry's path as UTF-8 where libarchive has it so, else its bytes; NULL when unreadable. */
static const char *entry_path(struct archive_entry *entry)
{
    const char *path = archive_entry_pathname_utf8(entry);
    return path != NULL ? path : archive_entry_pathname(entry);
}

/* Absolute paths and those that climb out. Nothing is ever written to a path; such an entry is
 * refused because whoever made it meant harm or made a mistake. */
static bool path_is_unsafe(const char *path)
{
    if (path[0] == '/' || path[0] == '\\' || (path[0] != '\0' && path[1] == ':'))
        return true;
    for (const char *at = path; *at != '\0';) {
        size_t length = strcspn(at, "/\\");
        if (length == 2 && at[0] == '.' && at[1] == '.')
            return true;
        at += length;
        at += *at == '\0' ? 0 : 1;
    }
    return false;
}

/* True when the file or a folder above it has a name that is passed over. */
static bool path_is_passed_over(const char *path)
{
    for (const char *at = path; *at != '\0';) {
        size_t length = strcspn(at, "/");
        bool here = length == 1 && at[0] == '.';
        bool last = at[length] == '\0';
        if (!here && (last ? lightcurve_walk_passes_over(at) : at[0] == '.'))
            return true;
        at += length;
        at += last ? 0 : 1;
    }
    return false;
}

static bool reserve(struct opened *opened, struct base_error *reason)
{
    if (opened->capacity - opened->length >= READ_STEP)
        return true;
    size_t capacity = opened->capacity == 0 ? 4 * READ_STEP : opened->capacity * 2;
    unsigned char *data = realloc(opened->data, capacity);
    if (data == NULL)
        return base_fail(reason, BASE_MEMORY, "There is not enough memory to unpack this entry.");
    opened->data = data;
    opened->capacity = capacity;
    return true;
}

/* How to go on after libarchive gave up within an entry: a zip's directory leads to the next one,
 * a tar's stream does not. */
static enum state after_damage(struct opened *opened)
{
    bool zip = archive_format(opened->archive) == ARCHIVE_FORMAT_ZIP;
    return zip && ++opened->damaged <= DAMAGED_MAX ? REOPEN : END_OF_ARCHIVE;
}

/* Unpack the current entry into opened->data. On failure `reason` is filled, and *next says how the
 * walk can go on. */
static bool unpack_entry(struct opened *opened, enum state *next, struct base_error *reason)
{
    opened->length = 0;
    for (;;) {
        if (!reserve(opened, reason))
            return false;
        la_ssize_t got =
            archive_read_data(opened->archive, opened->data + opened->length, READ_STEP);
        if (got == 0)
            return true;
        if (got < 0) {
            word_damage(opened, reason);
            if (got == ARCHIVE_FATAL)
                *next = after_damage(opened);
            return false;
        }
        opened->length += (size_t)got;
        opened->unpacked += (uint64_t)got;
        if (opened->length > LIGHTCURVE_FILE_BYTES_MAX)
            return base_fail(reason, BASE_TOO_LARGE,
                             "Unpacked it is larger than %llu bytes, the limit for one file.",
                             LIGHTCURVE_FILE_BYTES_MAX);
        if (lightcurve_ratio_exceeded(opened->unpacked, opened->packed, reason)) {
            *next = END_OF_ARCHIVE;
            return false;
        }
    }
}

/* Tell the visitor of one regular file in the archive. */
static enum state visit_entry(struct lightcurve_walker *walker, struct opened *opened,
                              struct archive_entry *entry, const char *path, const char *label)
{
    struct base_error reason = {0};
    enum state next = GO_ON;
    bool ok = false;
    if (path == NULL) {
        (void)base_fail(&reason, BASE_INVALID, "The name of entry %zu cannot be read.",
                        opened->entries);
    } else if (path_is_unsafe(path)) {
        (void)base_fail(&reason, BASE_INVALID,
                        "The entry's path is unsafe: it is absolute or leads out of the archive.");
    } else if (archive_entry_is_encrypted(entry)) {
        (void)base_fail(&reason, BASE_INVALID, "The entry is encrypted.");
    } else if (walker->visit == NULL) {
        uint64_t size = archive_entry_size(entry) < 0 ? 0 : (uint64_t)archive_entry_size(entry);
        lightcurve_walker_count(walker, size);
        opened->unpacked += size; /* passing over it unpacks it all the same */
        return GO_ON;
    } else if (unpack_entry(opened, &next, &reason)) {
        ok = !lightcurve_archive_is(opened->data, opened->length);
        if (!ok)
            (void)base_fail(&reason, BASE_INVALID, "An archive inside an archive is not unpacked.");
    }
    bool more = ok ? lightcurve_walker_tell(walker, label, opened->data, opened->length, NULL)
                   : lightcurve_walker_tell(walker, label, NULL, 0, &reason);
    return more ? next : STOP_WALK;
}

static enum state next_entry(struct lightcurve_walker *walker, struct opened *opened)
{
    struct archive_entry *entry = opened->entry;
    struct base_error reason = {0};
    int status = archive_read_next_header2(opened->archive, entry);
    if (status == ARCHIVE_EOF)
        return END_OF_ARCHIVE;
    if (status == ARCHIVE_FATAL || status == ARCHIVE_RETRY) {
        word_damage(opened, &reason);
        return give_up(walker, opened, &reason);
    }
    if (++opened->entries > LIGHTCURVE_ARCHIVE_FILES_MAX) {
        (void)base_fail(&reason, BASE_TOO_LARGE, "The archive has more than %d entries, the limit.",
                        LIGHTCURVE_ARCHIVE_FILES_MAX);
        return give_up(walker, opened, &reason);
    }
    if (lightcurve_ratio_exceeded(opened->unpacked, opened->packed, &reason))
        return give_up(walker, opened, &reason);
    if (archive_entry_filetype(entry) != AE_IFREG || archive_entry_hardlink(entry) != NULL)
        return GO_ON;
    const char *path = entry_path(entry);
    if (path != NULL && !path_is_unsafe(path) && path_is_passed_over(path)) {
        opened->unpacked += archive_entry_size(entry) < 0 ? 0 : (uint64_t)archive_entry_size(entry);
        return GO_ON;
    }
    struct base_text label = {0};
    base_text_add(&label, opened->label);
    base_text_add(&label, ": ");
    lightcurve_label_add(&label, path == NULL ? "?" : path);
    enum state state =
        visit_entry(walker, opened, entry, path, label.failed ? opened->label : label.data);
    base_text_free(&label);
    return state;
}

/* Open the archive from its start, in place of what was open. */
static bool open_archive(struct opened *opened, struct base_error *reason)
{
    if (opened->archive != NULL)
        (void)archive_read_free(opened->archive);
    opened->archive = archive_read_new();
    if (opened->entry == NULL)
        opened->entry = archive_entry_new();
    if (opened->archive == NULL || opened->entry == NULL)
        return base_fail(reason, BASE_MEMORY, "There is not enough memory to open the archive.");
    if (lseek(opened->fd, 0, SEEK_SET) != 0)
        return base_fail_errno(reason, errno, "Reading %s", opened->label);
    if (archive_read_support_filter_gzip(opened->archive) != ARCHIVE_OK ||
        archive_read_support_format_tar(opened->archive) != ARCHIVE_OK ||
        archive_read_support_format_zip(opened->archive) != ARCHIVE_OK ||
        archive_read_open_fd(opened->archive, opened->fd, READ_STEP) != ARCHIVE_OK) {
        word_damage(opened, reason);
        return false;
    }
    return true;
}

/* Open again and pass over the entries that were seen already. */
static enum state reopen(struct lightcurve_walker *walker, struct opened *opened)
{
    struct base_error reason = {0};
    if (!open_archive(opened, &reason))
        return give_up(walker, opened, &reason);
    for (size_t i = 0; i < opened->entries; i++) {
        int status = archive_read_next_header2(opened->archive, opened->entry);
        if (status != ARCHIVE_OK && status != ARCHIVE_WARN) {
            word_damage(opened, &reason);
            return give_up(walker, opened, &reason);
        }
    }
    return GO_ON;
}

bool lightcurve_walk_archive(struct lightcurve_walker *walker, int fd, uint64_t size,
                             const char *label)
{
    struct base_error reason = {0};
    struct opened opened = {.fd = fd, .label = label, .packed = size};
    enum state state = open_archive(&opened, &reason) ? GO_ON : give_up(walker, &opened, &reason);
    while (state == GO_ON || state == REOPEN)
        state = state == GO_ON ? next_entry(walker, &opened) : reopen(walker, &opened);
    if (opened.archive != NULL)
        (void)archive_read_free(opened.archive);
    archive_entry_free(opened.entry);
    free(opened.data);
    return state != STOP_WALK;
}
