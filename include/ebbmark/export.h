/*
 * One table writer, several formats behind it: CSV, JSON and VOTable 1.4.
 * Streaming: a row is written as it comes, memory stays flat. Pure; one writer belongs to one
 * thread.
 */
#ifndef EBBMARK_EXPORT_H
#define EBBMARK_EXPORT_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

enum export_type { EXPORT_INTEGER, EXPORT_REAL, EXPORT_TEXT, EXPORT_BOOLEAN };

struct export_column { /* NOLINT(clang-analyzer-optin.performance.Padding): in reading order */
    const char *name;  /* snake_case with the unit in it where a bare number could mislead */
    enum export_type type;
    const char *unit;        /* VOUnit text, "" for none */
    const char *ucd;         /* IVOA UCD1+, "" for none */
    const char *description; /* one sentence */
    int precision;           /* significant digits of a REAL; 0: as many as needed to read back */
};

/* One cell. REAL that is NAN, and a NULL text, are null: empty in CSV, null in JSON. */
struct export_cell {
    int64_t integer;
    double real;
    const char *text;
    bool boolean;
    bool null;
};

struct export_table {
    const char *name, *description;
    const struct export_column *columns;
    size_t column_count;
};

/* Facts about the whole table (run, time reference, caution …), written where the format has a
 * place: JSON "about", VOTable INFO; CSV has none and stays a plain table. */
struct export_fact {
    const char *name, *value;
};

/* Where bytes go; false stops the writer (with the sink's own error filled in). */
typedef bool export_sink(void *context, const void *data, size_t size, struct base_error *error);

enum export_format { EXPORT_CSV, EXPORT_JSON, EXPORT_VOTABLE };

struct export_writer;

/* BASE_MEMORY. Facts and table must outlive the writer; the caller closes it. */
bool export_open(struct export_writer **out, enum export_format format,
                 const struct export_table *table, const struct export_fact *facts,
                 size_t fact_count, export_sink *sink, void *context, struct base_error *error);
/* column_count cells. CSV texts that a spreadsheet could take for a formula are prefixed with '. */
bool export_row(struct export_writer *writer, const struct export_cell *cells,
                struct base_error *error);
/* Write the end. After this only export_close. */
bool export_finish(struct export_writer *writer, struct base_error *error);
void export_close(struct export_writer *writer);

/* "csv", "json" or "votable"; false for anything else. */
bool export_format_read(const char *name, enum export_format *out);
const char *
export_media_type(enum export_format format); /* "text/csv; charset=utf-8; header=present" … */

#endif
