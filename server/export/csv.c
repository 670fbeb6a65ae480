/* CSV after RFC 4180: a header row, CRLF line ends, quotes where needed. */
#include "writer.h"

#include <string.h>

/* A text that a spreadsheet would run as a formula gets a leading apostrophe. */
static void add_text(struct base_text *text, const char *value)
{
    bool formula = value[0] != '\0' && strchr("=+-@\t\r", value[0]) != NULL;
    bool quoted = value[strcspn(value, ",\"\r\n")] != '\0';
    if (quoted)
        base_text_add_char(text, '"');
    if (formula)
        base_text_add_char(text, '\'');
    for (; *value != '\0'; value++) {
        if (*value == '"')
            base_text_add_char(text, '"');
        base_text_add_char(text, *value);
    }
    if (quoted)
        base_text_add_char(text, '"');
}

static void begin(struct export_writer *writer)
{
    for (size_t i = 0; i < writer->table->column_count; i++) {
        if (i > 0)
            base_text_add_char(&writer->buffer, ',');
        base_text_add(&writer->buffer, writer->table->columns[i].name);
    }
    base_text_add(&writer->buffer, "\r\n");
}

static void row(struct export_writer *writer, const struct export_cell *cells)
{
    for (size_t i = 0; i < writer->table->column_count; i++) {
        if (i > 0)
            base_text_add_char(&writer->buffer, ',');
        export_add_cell(&writer->buffer, &writer->table->columns[i], &cells[i], "", add_text);
    }
    base_text_add(&writer->buffer, "\r\n");
}

static void end(struct export_writer *writer)
{
    (void)writer; /* a CSV just stops */
}

const struct export_shape export_shape_csv = {begin, row, end};
