/* Reading a CSV file record by record (RFC 4180): quotes, line ends of either kind, a byte-order
 * mark. One reader belongs to one thread. */
#ifndef CAMPAIGN_RECORDS_H
#define CAMPAIGN_RECORDS_H

#include <stdint.h>
#include <stdio.h>

#include "ebbmark/error.h"
#include "ebbmark/text.h"
#include "vector.h"

#define RECORD_BYTES_MAX 65536
#define RECORD_FIELDS_MAX 200

struct records {
    FILE *file;
    uint64_t line, next_line; /* where the record at hand began, and where the next begins */
    struct base_text bytes;   /* of the fields, each ended by NUL */
    struct vector starts;     /* size_t: of each field, in bytes */
};

/* BASE_NOT_FOUND, BASE_IO. The caller closes it. */
bool records_open(struct records *records, const char *path, struct base_error *error);
/* Read from an open file, which records_close closes. */
void records_start(struct records *records, FILE *file);
void records_close(struct records *records);

/* The next record; *more is false at the end. Empty lines are passed over. BASE_INVALID with the
 * line when it cannot be read. */
bool records_next(struct records *records, bool *more, struct base_error *error);

size_t records_fields(const struct records *records);
/* Field `index` of the record at hand: UTF-8, "" when there is none such. */
const char *records_field(const struct records *records, size_t index);

#endif
