#include "records.h"

#include <errno.h>
#include <inttypes.h>
#include <string.h>

static bool bad_line(const struct records *records, struct base_error *error, const char *why)
{
    return base_fail(error, BASE_INVALID, "Line %" PRIu64 ": %s.", records->line, why);
}

void records_start(struct records *records, FILE *file)
{
    static const unsigned char mark[] = {0xef, 0xbb, 0xbf};
    unsigned char head[sizeof mark];
    *records = (struct records){.file = file, .next_line = 1, .starts = VECTOR_OF(size_t)};
    if (fread(head, 1, sizeof head, file) != sizeof head || memcmp(head, mark, sizeof mark) != 0)
        rewind(file);
}

bool records_open(struct records *records, const char *path, struct base_error *error)
{
    *records = (struct records){0};
    FILE *file = fopen(path, "rbe");
    if (file == NULL)
        return base_fail_errno(error, errno, "Opening %s", path);
    records_start(records, file);
    return true;
}

void records_close(struct records *records)
{
    if (records->file != NULL)
        (void)fclose(records->file);
    base_text_free(&records->bytes);
    vector_free(&records->starts);
}

static bool begin_field(struct records *records)
{
    size_t *start = vector_add(&records->starts, 1);
    if (start != NULL)
        *start = records->bytes.length;
    return start != NULL;
}

/* What a byte did to the record. */
enum step { STEP_ON, STEP_END, STEP_BAD };

struct reading {
    bool quoted;     /* inside quotes */
    bool closed;     /* a quoted field has ended; only a comma or the line's end may follow */
    bool fresh;      /* nothing of the field was read yet */
    const char *why; /* after STEP_BAD */
};

static enum step bad(struct reading *reading, const char *why)
{
    reading->why = why;
    return STEP_BAD;
}

static enum step take_quoted(struct records *records, struct reading *reading, int c)
{
    if (c == EOF)
        return bad(reading, "a quoted field does not end");
    if (c == '\n')
        records->next_line++;
    if (c != '"') {
        base_text_add_char(&records->bytes, (char)c);
        return STEP_ON;
    }
    int next = getc(records->file);
    if (next == '"') {
        base_text_add_char(&records->bytes, '"');
        return STEP_ON;
    }
    if (next != EOF)
        (void)ungetc(next, records->file);
    reading->quoted = false;
    reading->closed = true;
    return STEP_ON;
}

static enum step take_plain(struct records *records, struct reading *reading, int c)
{
    if (c == '\r') {
        int next = getc(records->file);
        if (next != '\n' && next != EOF)
            (void)ungetc(next, records->file);
        c = '\n';
    }
    if (c == '\n')
        records->next_line++;
    if (c == '\n' || c == EOF)
        return STEP_END;
    if (c == ',') {
        base_text_add_char(&records->bytes, '\0');
        *reading = (struct reading){.fresh = true};
        return begin_field(records) ? STEP_ON : bad(reading, "there is no memory to read it");
    }
    if (reading->closed)
        return bad(reading, "something follows a closing quote");
    if (c == '"' && reading->fresh) {
        reading->quoted = true;
        reading->fresh = false;
        return STEP_ON;
    }
    if (c == '\0')
        return bad(reading, "it holds a zero byte");
    reading->fresh = false;
    base_text_add_char(&records->bytes, (char)c);
    return STEP_ON;
}

/* One record into bytes and starts. */
static bool read_record(struct records *records, struct base_error *error)
{
    struct reading reading = {.fresh = true};
    enum step step =
        begin_field(records) ? STEP_ON : bad(&reading, "there is no memory to read it");
    while (step == STEP_ON) {
        int c = getc(records->file);
        step =
            reading.quoted ? take_quoted(records, &reading, c) : take_plain(records, &reading, c);
        if (records->bytes.length > RECORD_BYTES_MAX)
            step = bad(&reading, "it is longer than 65536 bytes");
        if (records->starts.count > RECORD_FIELDS_MAX)
            step = bad(&reading, "it has more than 200 fields");
    }
    if (step == STEP_BAD)
        return bad_line(records, error, reading.why);
    if (ferror(records->file))
        return base_fail(error, BASE_IO, "Line %" PRIu64 " cannot be read from the disk.",
                         records->line);
    return true;
}

/* Every field is text that the rest of the program can hold. */
static bool check_fields(const struct records *records, struct base_error *error)
{
    if (records->bytes.failed)
        return base_fail(error, BASE_MEMORY, "There is no memory to read a line.");
    const size_t *starts = records->starts.items;
    for (size_t i = 0; i < records->starts.count; i++) {
        size_t end = i + 1 < records->starts.count ? starts[i + 1] - 1 : records->bytes.length;
        if (!base_text_is_utf8(records->bytes.data + starts[i], end - starts[i]))
            return bad_line(records, error, "it is not UTF-8 text");
    }
    return true;
}

bool records_next(struct records *records, bool *more, struct base_error *error)
{
    *more = false;
    for (;;) {
        int c = getc(records->file);
        if (c == EOF)
            return !ferror(records->file) ||
                   base_fail(error, BASE_IO, "The file cannot be read from the disk.");
        (void)ungetc(c, records->file);
        records->line = records->next_line;
        records->starts.count = 0;
        records->bytes.length = 0;
        if (!read_record(records, error))
            return false;
        base_text_add_char(&records->bytes, '\0');
        records->bytes.length--;
        if (!check_fields(records, error))
            return false;
        *more = records->starts.count > 1 || records->bytes.length > 0;
        if (*more)
            return true;
    }
}

size_t records_fields(const struct records *records)
{
    return records->starts.count;
}

const char *records_field(const struct records *records, size_t index)
{
    const size_t *starts = records->starts.items;
    return index < records->starts.count ? records->bytes.data + starts[index] : "";
}
