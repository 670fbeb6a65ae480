/* What the formats share: a table being written, and one small set of verbs for each format. */
#ifndef EXPORT_WRITER_H
#define EXPORT_WRITER_H

#include "ebbmark/export.h"
#include "ebbmark/text.h"

#define EXPORT_FLUSH_AT 32768u /* bytes gathered before the sink is called */

struct export_writer {
    const struct export_shape *shape;
    const struct export_table *table;
    const struct export_fact *facts;
    size_t fact_count;
    uint64_t rows;
    struct base_text buffer;
    export_sink *sink;
    void *context;
};

/* A text format appends to writer->buffer; the writer hands it on. */
struct export_shape {
    void (*begin)(struct export_writer *writer);
    void (*row)(struct export_writer *writer, const struct export_cell *cells);
    void (*end)(struct export_writer *writer);
};

extern const struct export_shape export_shape_csv;
extern const struct export_shape export_shape_json;
extern const struct export_shape export_shape_votable;

/* Append one cell: `null` for a null, a TEXT through add_text, the rest as plain numbers and words,
 * a REAL with the column's precision or as many digits as read back the same. */
void export_add_cell(struct base_text *text, const struct export_column *column,
                     const struct export_cell *cell, const char *null,
                     void (*add_text)(struct base_text *text, const char *value));

#endif
