/* VOTable 1.4 (IVOA), one TABLE in the TABLEDATA serialization. A null is an empty TD. */
#include "writer.h"

/* XML 1.0 has no place for control characters; they become the replacement character. */
static void add_escaped(struct base_text *text, const char *value)
{
    for (; *value != '\0'; value++) {
        unsigned char c = (unsigned char)*value;
        if (c == '&')
            base_text_add(text, "&amp;");
        else if (c == '<')
            base_text_add(text, "&lt;");
        else if (c == '>')
            base_text_add(text, "&gt;");
        else if (c == '"')
            base_text_add(text, "&quot;");
        else if (c < 0x20 && c != '\t' && c != '\n' && c != '\r')
            base_text_add(text, "\xef\xbf\xbd");
        else
            base_text_add_char(text, (char)c);
    }
}

static void add_attribute(struct base_text *text, const char *name, const char *value)
{
    if (value[0] == '\0')
        return;
    base_text_add_format(text, " %s=\"", name);
    add_escaped(text, value);
    base_text_add_char(text, '"');
}

static void add_field(struct base_text *text, const struct export_column *column)
{
    static const char *const types[] = {[EXPORT_INTEGER] = " datatype=\"long\"",
                                        [EXPORT_REAL] = " datatype=\"double\"",
                                        [EXPORT_TEXT] = " datatype=\"unicodeChar\" arraysize=\"*\"",
                                        [EXPORT_BOOLEAN] = " datatype=\"boolean\""};
    base_text_add(text, "<FIELD");
    add_attribute(text, "name", column->name);
    base_text_add(text, types[column->type]);
    add_attribute(text, "unit", column->unit);
    add_attribute(text, "ucd", column->ucd);
    base_text_add(text, "><DESCRIPTION>");
    add_escaped(text, column->description);
    base_text_add(text, "</DESCRIPTION></FIELD>\n");
}

static void begin(struct export_writer *writer)
{
    struct base_text *text = &writer->buffer;
    base_text_add(text, "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n"
                        "<VOTABLE version=\"1.4\" "
                        "xmlns:xsi=\"http://www.w3.org/2001/XMLSchema-instance\" "
                        "xmlns=\"http://www.ivoa.net/xml/VOTable/v1.3\">\n<RESOURCE>\n");
    for (size_t i = 0; i < writer->fact_count; i++) {
        base_text_add(text, "<INFO");
        add_attribute(text, "name", writer->facts[i].name);
        base_text_add(text, " value=\"");
        add_escaped(text, writer->facts[i].value);
        base_text_add(text, "\"/>\n");
    }
    base_text_add(text, "<TABLE");
    add_attribute(text, "name", writer->table->name);
    base_text_add(text, ">\n<DESCRIPTION>");
    add_escaped(text, writer->table->description);
    base_text_add(text, "</DESCRIPTION>\n");
    for (size_t i = 0; i < writer->table->column_count; i++)
        add_field(text, &writer->table->columns[i]);
    base_text_add(text, "<DATA><TABLEDATA>\n");
}

static void row(struct export_writer *writer, const struct export_cell *cells)
{
    struct base_text *text = &writer->buffer;
    base_text_add(text, "<TR>");
    for (size_t i = 0; i < writer->table->column_count; i++) {
        base_text_add(text, "<TD>");
        export_add_cell(text, &writer->table->columns[i], &cells[i], "", add_escaped);
        base_text_add(text, "</TD>");
    }
    base_text_add(text, "</TR>\n");
}

static void end(struct export_writer *writer)
{
    base_text_add(&writer->buffer, "</TABLEDATA></DATA>\n</TABLE>\n</RESOURCE>\n</VOTABLE>\n");
}

const struct export_shape export_shape_votable = {begin, row, end};
