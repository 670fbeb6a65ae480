/*
 * A growing byte string. A failed allocation is remembered in `failed`, so that a long sequence of
 * appends needs one check at the end. Not thread-safe.
 */
#ifndef EBBMARK_TEXT_H
#define EBBMARK_TEXT_H

#include <stdbool.h>
#include <stddef.h>

struct base_text {
    char *data; /* always NUL-terminated once anything was appended; owned by this struct */
    size_t length;
    size_t capacity;
    bool failed; /* an append did not fit in memory; what follows it was dropped */
};

/* Start from `struct base_text text = {0};`. Frees the data and zeroes the struct. */
void base_text_free(struct base_text *text);

void base_text_add(struct base_text *text, const char *string);
void base_text_add_bytes(struct base_text *text, const void *data, size_t size);
void base_text_add_char(struct base_text *text, char c);
void base_text_add_format(struct base_text *text, const char *format, ...)
    __attribute__((format(printf, 2, 3)));

/* The shortest decimal text that reads back as the same double; "" for NaN and infinities.
 * `buffer` holds at least BASE_NUMBER_SIZE bytes; returns it. Locale does not matter. */
#define BASE_NUMBER_SIZE 32
char *base_text_number(char *buffer, double value);

/* Read a whole string as one finite or non-finite decimal number, surrounding blanks allowed,
 * whatever the locale. False when anything else is there. */
bool base_text_read_number(const char *string, double *out);

/* Lower-case hexadecimal of `size` bytes into `out` (2 x size + 1 bytes). */
void base_text_hex(char *out, const void *data, size_t size);
/* The reverse: exactly `size` bytes from 2 x size digits and nothing else. */
bool base_text_unhex(void *out, size_t size, const char *hex);

/* True when the bytes are well-formed UTF-8 without NUL. */
bool base_text_is_utf8(const char *data, size_t length);

#endif
