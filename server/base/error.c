#include "ebbmark/error.h"

#include <errno.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

static void fill(struct base_error *error, enum base_error_kind kind, const char *field,
                 const char *format, va_list list)
{
    error->kind = kind;
    (void)vsnprintf(error->sentence, sizeof error->sentence, format, list);
    (void)snprintf(error->field, sizeof error->field, "%s", field);
}

bool base_fail(struct base_error *error, enum base_error_kind kind, const char *format, ...)
{
    if (error != NULL) {
        va_list list;
        va_start(list, format);
        fill(error, kind, "", format, list);
        va_end(list);
    }
    return false;
}

bool base_fail_field(struct base_error *error, enum base_error_kind kind, const char *field,
                     const char *format, ...)
{
    if (error != NULL) {
        va_list list;
        va_start(list, format);
        fill(error, kind, field, format, list);
        va_end(list);
    }
    return false;
}

static enum base_error_kind kind_of_errno(int errnum)
{
    switch (errnum) {
    case ENOSPC:
    case EDQUOT:
        return BASE_DISK_FULL;
    case ENOMEM:
        return BASE_MEMORY;
    case ENOENT:
        return BASE_NOT_FOUND;
    case EACCES:
    case EPERM:
    case EROFS:
        return BASE_DENIED;
    default:
        return BASE_IO;
    }
}

bool base_fail_errno(struct base_error *error, int errnum, const char *format, ...)
{
    if (error == NULL)
        return false;
    char doing[BASE_SENTENCE_SIZE / 2];
    va_list list;
    va_start(list, format);
    (void)vsnprintf(doing, sizeof doing, format, list);
    va_end(list);
    char reason[128];
    /* The GNU form of strerror_r, which may answer with a constant of its own. */
    const char *said = strerror_r(errnum, reason, sizeof reason);
    return base_fail(error, kind_of_errno(errnum), "%s: %s.", doing, said);
}

const char *base_error_kind_name(enum base_error_kind kind)
{
    static const char *const names[] = {
        [BASE_NONE] = "none",           [BASE_INVALID] = "invalid",
        [BASE_DENIED] = "denied",       [BASE_NOT_FOUND] = "not_found",
        [BASE_CONFLICT] = "conflict",   [BASE_TOO_LARGE] = "too_large",
        [BASE_DISK_FULL] = "disk_full", [BASE_BUSY] = "busy",
        [BASE_MEMORY] = "memory",       [BASE_IO] = "io",
        [BASE_CORRUPT] = "corrupt",     [BASE_CANCELLED] = "cancelled",
        [BASE_INTERNAL] = "internal"};
    return (size_t)kind < sizeof names / sizeof names[0] ? names[kind] : "unknown";
}
