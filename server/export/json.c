/* JSON: {"table", "description", "about": {…}, "columns": [{…}], "rows": [{…}]}. Written as it
 * comes, because a library's tree of the whole table would not stay flat in memory. */
#include "writer.h"

static void add_quoted(struct base_text *text, const char *value)
{
    base_text_add_char(text, '"');
    for (; *value != '\0'; value++) {
        unsigned char c = (unsigned char)*value;
        if (c == '"' || c == '\\') {
            base_text_add_char(text, '\\');
            base_text_add_char(text, (char)c);
        } else if (c < 0x20 || c == 0x7f) {
            base_text_add_format(text, "\\u%04x", c);
        } else {
            base_text_add_char(text, (char)c);
        }
    }
    base_text_add_char(text, '"');
}

static void add_member(struct base_text *text, bool first, const char *name, const char *value)
{
    if (!first)
        base_text_add_char(text, ',');
    add_quoted(text, name);
    base_text_add_char(text, ':');
    add_quoted(text, value);
}

static void begin(struct export_writer *writer)
{
    struct base_text *text = &writer->buffer;
    base_text_add_char(text, '{');
    add_member(text, true, "table", writer->table->name);
    add_member(text, false, "description", writer->table->description);
    base_text_add(text, ",\n\"about\":{");
    for (size_t i = 0; i < writer->fact_count; i++)
        add_member(text, i == 0, writer->facts[i].name, writer->facts[i].value);
    base_text_add(text, "},\n\"columns\":[");
    for (size_t i = 0; i < writer->table->column_count; i++) {
        const struct export_column *column = &writer->table->columns[i];
        base_text_add(text, i == 0 ? "\n{" : ",\n{");
        add_member(text, true, "name", column->name);
        add_member(text, false, "unit", column->unit);
        add_member(text, false, "ucd", column->ucd);
        add_member(text, false, "description", column->description);
        base_text_add_char(text, '}');
    }
    base_text_add(text, "],\n\"rows\":[");
}

static void row(struct export_writer *writer, const struct export_cell *cells)
{
    struct base_text *text = &writer->buffer;
    base_text_add(text, writer->rows == 0 ? "\n{" : ",\n{");
    for (size_t i = 0; i < writer->table->column_count; i++) {
        if (i > 0)
            base_text_add_char(text, ',');
        add_quoted(text, writer->table->columns[i].name);
        base_text_add_char(text, ':');
        export_add_cell(text, &writer->table->columns[i], &cells[i], "null", add_quoted);
    }
    base_text_add_char(text, '}');
}

static void end(struct export_writer *writer)
{
    base_text_add(&writer->buffer, "\n]}\n");
}

const struct export_shape export_shape_json = {begin, row, end};
