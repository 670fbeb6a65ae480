#include "writer.h"

#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* One row a format, in the order of enum export_format. */
static const struct {
    const char *name, *media_type;
    const struct export_shape *shape;
} formats[] = {
    {"csv", "text/csv; charset=utf-8; header=present", &export_shape_csv},
    {"json", "application/json", &export_shape_json},
    {"votable", "application/x-votable+xml", &export_shape_votable},
};

bool export_format_read(const char *name, enum export_format *out)
{
    for (size_t i = 0; i < sizeof formats / sizeof formats[0]; i++)
        if (strcmp(name, formats[i].name) == 0) {
            *out = (enum export_format)i;
            return true;
        }
    return false;
}

const char *export_media_type(enum export_format format)
{
    assert((size_t)format < sizeof formats / sizeof formats[0]);
    return formats[format].media_type;
}

static bool is_null(const struct export_cell *cell, enum export_type type)
{
    if (cell->null)
        return true;
    if (type == EXPORT_REAL)
        return !isfinite(cell->real);
    return type == EXPORT_TEXT && cell->text == NULL;
}

static void add_real(struct base_text *text, double value, int precision)
{
    char number[BASE_NUMBER_SIZE];
    if (precision > 0) {
        /* Round to the digits asked for, then write the shortest text that reads back as that. */
        char rounded[BASE_NUMBER_SIZE];
        double near = value;
        (void)snprintf(rounded, sizeof rounded, "%.*e", precision - 1, value);
        if (base_text_read_number(rounded, &near))
            value = near;
    }
    base_text_add(text, base_text_number(number, value));
}

void export_add_cell(struct base_text *text, const struct export_column *column,
                     const struct export_cell *cell, const char *null,
                     void (*add_text)(struct base_text *text, const char *value))
{
    if (is_null(cell, column->type)) {
        base_text_add(text, null);
        return;
    }
    switch (column->type) {
    case EXPORT_INTEGER:
        base_text_add_format(text, "%" PRId64, cell->integer);
        break;
    case EXPORT_REAL:
        add_real(text, cell->real, column->precision);
        break;
    case EXPORT_TEXT:
        add_text(text, cell->text);
        break;
    case EXPORT_BOOLEAN:
        base_text_add(text, cell->boolean ? "true" : "false");
        break;
    }
}

static bool flush(struct export_writer *writer, struct base_error *error)
{
    if (writer->buffer.failed)
        return base_fail(error, BASE_MEMORY, "There is no memory for a row of the table %s.",
                         writer->table->name);
    if (writer->buffer.length > 0 &&
        !writer->sink(writer->context, writer->buffer.data, writer->buffer.length, error))
        return false;
    writer->buffer.length = 0;
    return true;
}

bool export_open(struct export_writer **out, enum export_format format,
                 const struct export_table *table, const struct export_fact *facts,
                 size_t fact_count, export_sink *sink, void *context, struct base_error *error)
{
    assert((size_t)format < sizeof formats / sizeof formats[0] && sink != NULL);
    *out = NULL;
    struct export_writer *writer = calloc(1, sizeof *writer);
    if (writer == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to write the table %s.",
                         table->name);
    *writer = (struct export_writer){.shape = formats[format].shape,
                                     .table = table,
                                     .facts = facts,
                                     .fact_count = fact_count,
                                     .sink = sink,
                                     .context = context};
    writer->shape->begin(writer);
    if (writer->buffer.failed) {
        export_close(writer);
        return base_fail(error, BASE_MEMORY, "There is no memory to write the table %s.",
                         table->name);
    }
    *out = writer;
    return true;
}

bool export_row(struct export_writer *writer, const struct export_cell *cells,
                struct base_error *error)
{
    writer->shape->row(writer, cells);
    writer->rows++;
    return writer->buffer.length < EXPORT_FLUSH_AT && !writer->buffer.failed ? true
                                                                             : flush(writer, error);
}

bool export_finish(struct export_writer *writer, struct base_error *error)
{
    writer->shape->end(writer);
    return flush(writer, error);
}

void export_close(struct export_writer *writer)
{
    if (writer == NULL)
        return;
    base_text_free(&writer->buffer);
    free(writer);
}
