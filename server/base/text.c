#include "ebbmark/text.h"

#include <ctype.h>
#include <locale.h>
#include <math.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

void base_text_free(struct base_text *text)
{
    free(text->data);
    *text = (struct base_text){0};
}

/* Room for `more` bytes and a NUL; false (and remembered) when there is no memory. */
static bool reserve(struct base_text *text, size_t more)
{
    if (text->failed)
        return false;
    if (more >= SIZE_MAX / 4 - text->length) {
        text->failed = true;
        return false;
    }
    size_t need = text->length + more + 1;
    if (need <= text->capacity)
        return true;
    size_t capacity = text->capacity < 128 ? 128 : text->capacity;
    while (capacity < need)
        capacity *= 2;
    char *data = realloc(text->data, capacity);
    if (data == NULL) {
        text->failed = true;
        return false;
    }
    text->data = data;
    text->capacity = capacity;
    return true;
}

void base_text_add_bytes(struct base_text *text, const void *data, size_t size)
{
    if (!reserve(text, size))
        return;
    if (size > 0)
        memcpy(text->data + text->length, data, size);
    text->length += size;
    text->data[text->length] = '\0';
}

void base_text_add(struct base_text *text, const char *string)
{
    base_text_add_bytes(text, string, strlen(string));
}

void base_text_add_char(struct base_text *text, char c)
{
    base_text_add_bytes(text, &c, 1);
}

void base_text_add_format(struct base_text *text, const char *format, ...)
{
    va_list list;
    va_start(list, format);
    int length = vsnprintf(NULL, 0, format, list);
    va_end(list);
    if (length < 0 || !reserve(text, (size_t)length)) {
        text->failed = true;
        return;
    }
    va_start(list, format);
    (void)vsnprintf(text->data + text->length, (size_t)length + 1, format, list);
    va_end(list);
    text->length += (size_t)length;
}

/* Numbers are written and read in the C locale, which newlocale gives without touching the
 * process's own. */
static locale_t plain_locale(void)
{
    return newlocale(LC_ALL_MASK, "C", (locale_t)0);
}

char *base_text_number(char *buffer, double value)
{
    buffer[0] = '\0';
    if (!isfinite(value))
        return buffer;
    locale_t plain = plain_locale();
    locale_t before = plain == (locale_t)0 ? (locale_t)0 : uselocale(plain);
    for (int digits = 15; digits <= 17; digits++) {
        (void)snprintf(buffer, BASE_NUMBER_SIZE, "%.*g", digits, value);
        if (!(strtod(buffer, NULL) < value) && !(strtod(buffer, NULL) > value))
            break;
    }
    if (plain != (locale_t)0) {
        (void)uselocale(before);
        freelocale(plain);
    }
    return buffer;
}

bool base_text_read_number(const char *string, double *out)
{
    locale_t plain = plain_locale();
    if (plain == (locale_t)0)
        return false;
    char *end = NULL;
    double value = strtod_l(string, &end, plain);
    freelocale(plain);
    if (end == string)
        return false;
    /* strtod also reads hexadecimal, which no data file of ours means. */
    if (memchr(string, 'x', (size_t)(end - string)) != NULL ||
        memchr(string, 'X', (size_t)(end - string)) != NULL)
        return false;
    while (isspace((unsigned char)*end))
        end++;
    if (*end != '\0')
        return false;
    *out = value;
    return true;
}

void base_text_hex(char *out, const void *data, size_t size)
{
    static const char digits[] = "0123456789abcdef";
    const unsigned char *bytes = data;
    for (size_t i = 0; i < size; i++) {
        out[2 * i] = digits[bytes[i] >> 4];
        out[2 * i + 1] = digits[bytes[i] & 15];
    }
    out[2 * size] = '\0';
}

static int hex_value(char c)
{
    if (c >= '0' && c <= '9')
        return c - '0';
    if (c >= 'a' && c <= 'f')
        return c - 'a' + 10;
    return -1;
}

bool base_text_unhex(void *out, size_t size, const char *hex)
{
    unsigned char *bytes = out;
    for (size_t i = 0; i < size; i++) {
        int high = hex_value(hex[2 * i]);
        int low = high < 0 ? -1 : hex_value(hex[2 * i + 1]);
        if (low < 0)
            return false;
        bytes[i] = (unsigned char)(high * 16 + low);
    }
    return hex[2 * size] == '\0';
}

/* Length of the well-formed UTF-8 sequence at `bytes`, 0 when there is none (Unicode, table 3-7).
 */
static size_t sequence_length(const unsigned char *bytes, size_t left)
{
    unsigned char first = bytes[0];
    if (first < 0x80)
        return first == 0 ? 0 : 1;
    size_t length = first >= 0xf0 ? 4 : first >= 0xe0 ? 3 : 2;
    if (first < 0xc2 || first > 0xf4 || left < length)
        return 0;
    for (size_t i = 1; i < length; i++)
        if ((bytes[i] & 0xc0) != 0x80)
            return 0;
    if ((first == 0xe0 && bytes[1] < 0xa0) || (first == 0xed && bytes[1] > 0x9f) ||
        (first == 0xf0 && bytes[1] < 0x90) || (first == 0xf4 && bytes[1] > 0x8f))
        return 0;
    return length;
}

bool base_text_is_utf8(const char *data, size_t length)
{
    const unsigned char *bytes = (const unsigned char *)data;
    for (size_t at = 0; at < length;) {
        size_t step = sequence_length(bytes + at, length - at);
        if (step == 0)
            return false;
        at += step;
    }
    return true;
}
