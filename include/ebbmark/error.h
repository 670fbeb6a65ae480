/*
 * The one way to fail. Every function that can fail returns false (or a named enum) and fills a
 * struct base_error: a kind that a program can act on and a sentence that a person can act on.
 */
#ifndef EBBMARK_ERROR_H
#define EBBMARK_ERROR_H

#include <stdbool.h>

enum base_error_kind {
    BASE_NONE = 0,
    BASE_INVALID,   /* the input is at fault; the field names what, where that is known */
    BASE_DENIED,    /* known person, not allowed */
    BASE_NOT_FOUND, /* no such thing */
    BASE_CONFLICT,  /* it clashes with what is there already */
    BASE_TOO_LARGE, /* over a named limit; the sentence states the limit */
    BASE_DISK_FULL, /* no space left; nothing was half stored */
    BASE_BUSY,      /* overloaded or locked; the same call may succeed later */
    BASE_MEMORY,    /* an allocation failed or an arena reached its limit */
    BASE_IO,        /* the disk or the network failed */
    BASE_CORRUPT,   /* stored data is not what was written */
    BASE_CANCELLED, /* somebody asked for the work to stop */
    BASE_INTERNAL   /* a fault of the program itself */
};

#define BASE_SENTENCE_SIZE 480
#define BASE_FIELD_SIZE 96

/* Plain data; the caller owns it, usually on the stack. Zero-initialised means "no error". */
struct base_error {
    enum base_error_kind kind;
    char sentence[BASE_SENTENCE_SIZE]; /* UTF-8, ends with a full stop, no newline */
    char field[BASE_FIELD_SIZE];       /* "marks[2].ends", or empty */
};

/* Fill error (which may be NULL) and return false, so that a caller can `return base_fail(…)`. */
bool base_fail(struct base_error *error, enum base_error_kind kind, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* The same, naming the input field at fault. */
bool base_fail_field(struct base_error *error, enum base_error_kind kind, const char *field,
                     const char *format, ...) __attribute__((format(printf, 4, 5)));

/* Fill error from an errno value: ENOSPC and EDQUOT become BASE_DISK_FULL, ENOMEM BASE_MEMORY,
 * ENOENT BASE_NOT_FOUND, EACCES, EPERM and EROFS BASE_DENIED, the rest BASE_IO. The sentence is
 * "<doing what>: <system's reason>." Returns false. */
bool base_fail_errno(struct base_error *error, int errnum, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* A short stable name for logs: "invalid", "not_found", … */
const char *base_error_kind_name(enum base_error_kind kind);

#endif
