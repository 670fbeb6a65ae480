#include "ebbmark/log.h"

#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/clock.h"
#include "ebbmark/text.h"

/* A JSON string; what is not well-formed UTF-8 is written byte by byte as \u00XX. */
static void add_quoted(struct base_text *line, const char *value)
{
    size_t length = strlen(value);
    bool sound = base_text_is_utf8(value, length);
    base_text_add_char(line, '"');
    for (size_t i = 0; i < length; i++) {
        unsigned char c = (unsigned char)value[i];
        if (c == '"' || c == '\\') {
            base_text_add_char(line, '\\');
            base_text_add_char(line, (char)c);
        } else if (c < 0x20 || c == 0x7f || (c >= 0x80 && !sound)) {
            base_text_add_format(line, "\\u%04x", c);
        } else {
            base_text_add_char(line, (char)c);
        }
    }
    base_text_add_char(line, '"');
}

/* Best effort by nature: a log line that cannot be written has nowhere to be complained about. */
static void write_whole(int fd, const char *data, size_t size)
{
    while (size > 0) {
        ssize_t wrote = write(fd, data, size);
        if (wrote <= 0)
            return;
        data += wrote;
        size -= (size_t)wrote;
    }
}

void base_log_line(const struct base_log *log, enum base_log_level level, const char *event, ...)
{
    static const char *const names[] = {"debug", "info", "warning", "error"};
    if (log == NULL || log->fd < 0 || level < log->least)
        return;
    struct base_text line = {0};
    char at[BASE_CLOCK_SIZE];
    base_text_add_format(&line, "{\"at\":\"%s\",\"level\":\"%s\",\"event\":",
                         base_clock_rfc3339(at, base_clock_unix_ms()), names[level]);
    add_quoted(&line, event);
    va_list list;
    va_start(list, event);
    for (const char *key = va_arg(list, const char *); key != NULL;
         key = va_arg(list, const char *)) {
        const char *value = va_arg(list, const char *);
        base_text_add_char(&line, ',');
        add_quoted(&line, key);
        base_text_add_char(&line, ':');
        add_quoted(&line, value == NULL ? "" : value);
    }
    va_end(list);
    base_text_add(&line, "}\n");
    if (!line.failed)
        write_whole(log->fd, line.data, line.length);
    base_text_free(&line);
}
