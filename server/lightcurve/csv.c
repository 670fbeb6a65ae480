#include "read.h"

#include "ebbmark/text.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

#define NUMBER_BYTES_MAX 400 /* longer text is taken for no number */

const char *lightcurve_quote(char buffer[LIGHTCURVE_QUOTE_SIZE], const char *text, size_t length)
{
    size_t shown = length < 40 ? length : 40;
    for (size_t i = 0; i < shown; i++)
        buffer[i] = text[i] >= 0x20 && text[i] < 0x7f && text[i] != '"' ? text[i] : '?';
    (void)memcpy(buffer + shown, length > shown ? "..." : "", length > shown ? 4 : 1);
    return buffer;
}

void lightcurve_csv_close(struct lightcurve_csv *csv)
{
    free(csv->fields);
    free(csv->scratch);
    *csv = (struct lightcurve_csv){0};
}

static bool is_blank(const struct lightcurve_csv *csv, char c)
{
    return c == ' ' || (c == '\t' && csv->separator != '\t');
}

/* Step over one line ending: LF, CR LF or CR alone. */
static void pass_line_end(struct lightcurve_csv *csv)
{
    if (csv->at < csv->end && *csv->at == '\r')
        csv->at++;
    else if (csv->at < csv->end && *csv->at == '\n') {
        csv->at++;
        csv->next_line++;
        return;
    }
    if (csv->at < csv->end && *csv->at == '\n')
        csv->at++;
    csv->next_line++;
}

/* Read a quoted field from its first quote to the character after its last; its text goes to
 * csv->scratch from *used on. `limit` is where the longest allowed line ends. */
static bool read_quoted(struct lightcurve_csv *csv, const char *limit, size_t *used,
                        struct lightcurve_csv_field *field, struct base_error *error)
{
    char *start = csv->scratch + *used;
    char *out = start;
    csv->at++;
    while (csv->at < limit) {
        char c = *csv->at;
        if (c == '\0')
            break;
        if (c == '"' && (csv->at + 1 == csv->end || csv->at[1] != '"')) {
            csv->at++;
            *used += (size_t)(out - start);
            *field = (struct lightcurve_csv_field){start, (size_t)(out - start)};
            while (csv->at < limit && is_blank(csv, *csv->at))
                csv->at++;
            if (csv->at < limit && *csv->at != csv->separator && *csv->at != '\n' &&
                *csv->at != '\r')
                return base_fail(error, BASE_INVALID,
                                 "Line %zu: text follows a closing quotation mark.", csv->line);
            return true;
        }
        if (c == '\n' || (c == '\r' && (csv->at + 1 == csv->end || csv->at[1] != '\n')))
            csv->next_line++;
        csv->at += c == '"' ? 2 : 1;
        *out++ = c;
    }
    if (csv->at < csv->end && csv->at < limit)
        return base_fail(error, BASE_INVALID, "Line %zu: a NUL byte, which no CSV text holds.",
                         csv->line);
    if (csv->at >= csv->end)
        return base_fail(error, BASE_INVALID,
                         "Truncated: line %zu has a quotation mark that is not closed.", csv->line);
    return true; /* the line is too long: the caller says so */
}

static bool read_plain(struct lightcurve_csv *csv, const char *limit,
                       struct lightcurve_csv_field *field, struct base_error *error)
{
    const char *start = csv->at;
    while (csv->at < limit && *csv->at != csv->separator && *csv->at != '\n' && *csv->at != '\r' &&
           *csv->at != '\0')
        csv->at++;
    if (csv->at < limit && *csv->at == '\0')
        return base_fail(error, BASE_INVALID, "Line %zu: a NUL byte, which no CSV text holds.",
                         csv->line);
    const char *last = csv->at;
    while (last > start && is_blank(csv, last[-1]))
        last--;
    *field = (struct lightcurve_csv_field){start, (size_t)(last - start)};
    return true;
}

/* Split one line, blank or not, into csv->fields. */
static bool split_line(struct lightcurve_csv *csv, struct base_error *error)
{
    size_t left = (size_t)(csv->end - csv->at);
    bool bounded = left > LIGHTCURVE_CSV_LINE_MAX;
    const char *limit = bounded ? csv->at + LIGHTCURVE_CSV_LINE_MAX + 1 : csv->end;
    size_t used = 0;
    csv->line = csv->next_line;
    csv->count = 0;
    for (;;) {
        if (csv->count == LIGHTCURVE_CSV_COLUMNS_MAX)
            return base_fail(error, BASE_TOO_LARGE, "Line %zu has more than %d columns, the limit.",
                             csv->line, LIGHTCURVE_CSV_COLUMNS_MAX);
        while (csv->at < limit && is_blank(csv, *csv->at))
            csv->at++;
        struct lightcurve_csv_field *field = &csv->fields[csv->count++];
        bool quoted = csv->at < limit && *csv->at == '"';
        if (!(quoted ? read_quoted(csv, limit, &used, field, error)
                     : read_plain(csv, limit, field, error)))
            return false;
        if (bounded && csv->at >= limit)
            return base_fail(error, BASE_TOO_LARGE, "Line %zu is longer than %u bytes, the limit.",
                             csv->line, LIGHTCURVE_CSV_LINE_MAX);
        if (csv->at == csv->end || *csv->at != csv->separator)
            break;
        csv->at++;
    }
    pass_line_end(csv);
    return true;
}

bool lightcurve_csv_next(struct lightcurve_csv *csv, bool *found, struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    *found = false;
    while (csv->at < csv->end) {
        if (!split_line(csv, error))
            return false;
        if (csv->count == 1 && csv->fields[0].length == 0)
            continue;
        if (csv->header != 0 && csv->count != csv->header)
            return base_fail(error, BASE_INVALID,
                             "Line %zu has %zu fields where the header has %zu; it begins \"%s\".",
                             csv->line, csv->count, csv->header,
                             lightcurve_quote(quoted, csv->fields[0].text, csv->fields[0].length));
        *found = true;
        return true;
    }
    return true;
}

/* The separator is the first of comma, tab and semicolon that the header line holds outside of
 * quotation marks, brackets and parentheses. */
static char tell_separator(const char *at, const char *end)
{
    bool tab = false, semicolon = false, quoted = false;
    int depth = 0;
    for (; at < end && *at != '\n' && *at != '\r'; at++) {
        if (*at == '"')
            quoted = !quoted;
        else if (*at == '[' || *at == '(')
            depth++;
        else if (*at == ']' || *at == ')')
            depth--;
        if (quoted || depth > 0)
            continue;
        if (*at == ',')
            return ',';
        tab = tab || *at == '\t';
        semicolon = semicolon || *at == ';';
    }
    return tab ? '\t' : semicolon ? ';' : ',';
}

/* Pass over blank lines and lines that begin with '#'. The last of these, without its '#', is left
 * in `remark`, since many programs write the column names there. */
static void pass_remarks(struct lightcurve_csv *csv, struct lightcurve_csv_field *remark)
{
    for (;;) {
        const char *look = csv->at;
        while (look < csv->end && (*look == ' ' || *look == '\t'))
            look++;
        bool marked = look < csv->end && *look == '#';
        const char *text = look + (marked ? 1 : 0);
        while (marked && look < csv->end && *look != '\n' && *look != '\r')
            look++;
        if (!marked && (look == csv->end || (*look != '\n' && *look != '\r')))
            return;
        if (marked)
            *remark = (struct lightcurve_csv_field){text, (size_t)(look - text)};
        csv->at = look;
        pass_line_end(csv);
    }
}

static bool means_missing(struct lightcurve_csv_field field)
{
    static const char *const words[] = {"nan", "null", "na", "n/a", "none", "--"};
    if (field.length == 0)
        return true;
    for (size_t i = 0; i < sizeof words / sizeof words[0]; i++)
        if (strlen(words[i]) == field.length &&
            strncasecmp(words[i], field.text, field.length) == 0)
            return true;
    return false;
}

/* Plain decimal numbers whose value is exact digits times or over an exact power of ten: one
 * correctly rounded operation (W. Clinger, How to Read Floating Point Numbers Accurately, 1990).
 * False for anything else, which strtod then reads. */
static bool read_simple(const char *at, const char *end, double *out)
{
    static const double powers[] = {1e0,  1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,
                                    1e8,  1e9,  1e10, 1e11, 1e12, 1e13, 1e14, 1e15,
                                    1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22};
    bool negative = at < end && *at == '-';
    if (negative || (at < end && *at == '+'))
        at++;
    uint64_t digits = 0;
    size_t count = 0, decimals = 0;
    bool point = false;
    for (; at < end; at++) {
        if (*at == '.' && !point) {
            point = true;
            continue;
        }
        if (*at < '0' || *at > '9' || ++count > 18)
            return false;
        digits = digits * 10 + (uint64_t)(*at - '0');
        decimals += point ? 1 : 0;
    }
    if (count == 0 || digits > (1ull << 53))
        return false;
    double value = (double)digits / powers[decimals];
    *out = negative ? -value : value;
    return true;
}

bool lightcurve_csv_number(struct lightcurve_csv_field field, double *out)
{
    if (field.length > 0 && read_simple(field.text, field.text + field.length, out))
        return true;
    if (means_missing(field)) {
        *out = NAN;
        return true;
    }
    char copy[NUMBER_BYTES_MAX + 1];
    if (field.length > NUMBER_BYTES_MAX || memchr(field.text, '\0', field.length) != NULL)
        return false;
    memcpy(copy, field.text, field.length);
    copy[field.length] = '\0';
    return base_text_read_number(copy, out);
}

static bool is_all_numbers(const struct lightcurve_csv *csv)
{
    double value;
    for (size_t i = 0; i < csv->count; i++)
        if (!lightcurve_csv_number(csv->fields[i], &value))
            return false;
    return true;
}

/* Read the header line, or, where the first line holds numbers, the remark above it. */
static bool read_header(struct lightcurve_csv *csv, struct lightcurve_csv_field remark,
                        struct base_error *error)
{
    bool found = false;
    const char *at = csv->at, *end = csv->end;
    size_t first_line = csv->next_line;
    csv->separator = tell_separator(csv->at, csv->end);
    if (!lightcurve_csv_next(csv, &found, error))
        return false;
    if (!found)
        return base_fail(error, BASE_INVALID, "The file is empty: it holds no header line.");
    size_t line = csv->line;
    if (is_all_numbers(csv) && remark.length > 0) {
        csv->at = remark.text;
        csv->end = remark.text + remark.length;
        csv->separator = tell_separator(csv->at, csv->end);
        if (!lightcurve_csv_next(csv, &found, error))
            return false;
        csv->at = at;
        csv->end = end;
        csv->next_line = first_line;
    }
    if (!found || is_all_numbers(csv))
        return base_fail(error, BASE_INVALID,
                         "Line %zu: there is no header; the first line must name the columns, and "
                         "it holds numbers.",
                         line);
    csv->header = csv->count;
    return true;
}

bool lightcurve_csv_open(struct lightcurve_csv *csv, const char *data, size_t size,
                         struct base_error *error)
{
    assert(data != NULL || size == 0);
    *csv = (struct lightcurve_csv){.at = data, .end = data + size, .next_line = 1};
    csv->fields = calloc(LIGHTCURVE_CSV_COLUMNS_MAX, sizeof *csv->fields);
    csv->scratch = malloc(LIGHTCURVE_CSV_LINE_MAX + 1);
    if (csv->fields == NULL || csv->scratch == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to read the CSV.");
    if (size >= 3 && memcmp(data, "\xef\xbb\xbf", 3) == 0)
        csv->at += 3;
    struct lightcurve_csv_field remark = {"", 0};
    pass_remarks(csv, &remark);
    return read_header(csv, remark, error);
}

static void copy_trimmed(char out[LIGHTCURVE_COLUMN_SIZE], const char *text, size_t length)
{
    while (length > 0 && (text[0] == ' ' || text[0] == '\t')) {
        text++;
        length--;
    }
    while (length > 0 && (text[length - 1] == ' ' || text[length - 1] == '\t'))
        length--;
    if (length >= LIGHTCURVE_COLUMN_SIZE)
        length = 0;
    memcpy(out, text, length);
    out[length] = '\0';
}

void lightcurve_csv_name(struct lightcurve_csv_field field, char name[LIGHTCURVE_COLUMN_SIZE],
                         char unit[LIGHTCURVE_COLUMN_SIZE])
{
    size_t open = 0;
    while (open < field.length && field.text[open] != '[' && field.text[open] != '(')
        open++;
    copy_trimmed(name, field.text, open);
    unit[0] = '\0';
    if (open == field.length)
        return;
    char closing = field.text[open] == '[' ? ']' : ')';
    size_t close = field.length;
    while (close > open + 1 && field.text[close - 1] != closing)
        close--;
    if (close > open + 1)
        copy_trimmed(unit, field.text + open + 1, close - open - 2);
}
