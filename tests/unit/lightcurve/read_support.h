/* FITS files made by hand, card by card, so that a test can say exactly what is wrong with one. */
#ifndef EBBMARK_TESTS_UNIT_LIGHTCURVE_READ_SUPPORT_H
#define EBBMARK_TESTS_UNIT_LIGHTCURVE_READ_SUPPORT_H

#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

#include "ebbmark/lightcurve_read.h"
#include "ebbmark/text.h"

/* Append one 80-byte card. */
static inline void card(struct base_text *file, const char *text)
{
    char line[96];
    (void)snprintf(line, sizeof line, "%-80.80s", text);
    base_text_add_bytes(file, line, 80);
}

/* Fill up to a whole block. */
static inline void pad(struct base_text *file, char with)
{
    while (file->length % 2880 != 0)
        base_text_add_char(file, with);
}

/* A primary header without data; `more` holds further cards, one a line, or is NULL. */
static inline void cards(struct base_text *file, const char *more)
{
    while (more != NULL && *more != '\0') {
        char line[81];
        size_t length = strcspn(more, "\n");
        (void)snprintf(line, sizeof line, "%.*s", (int)length, more);
        card(file, line);
        more += length + (more[length] == '\n' ? 1 : 0);
    }
}

static inline void primary(struct base_text *file, const char *more)
{
    cards(file, "SIMPLE  =                    T\nBITPIX  =                    8\n"
                "NAXIS   =                    0\nEXTEND  =                    T");
    cards(file, more);
    card(file, "END");
    pad(file, ' ');
}

/* The header of a binary table. Sizes are texts, so that they may be absurd. */
static inline void table_header(struct base_text *file, const char *row_bytes, const char *rows,
                                const char *fields, const char *more)
{
    char line[96];
    cards(file, "XTENSION= 'BINTABLE'\nBITPIX  =                    8\n"
                "NAXIS   =                    2");
    (void)snprintf(line, sizeof line, "NAXIS1  = %20s", row_bytes);
    card(file, line);
    (void)snprintf(line, sizeof line, "NAXIS2  = %20s", rows);
    card(file, line);
    cards(file, "PCOUNT  =                    0\nGCOUNT  =                    1");
    (void)snprintf(line, sizeof line, "TFIELDS = %20s", fields);
    card(file, line);
    cards(file, more);
    card(file, "END");
    pad(file, ' ');
}

/* The low `bytes` bytes of a whole number, highest first. */
static inline void whole(struct base_text *file, int bytes, int64_t value)
{
    for (int i = bytes - 1; i >= 0; i--)
        base_text_add_char(file, (char)(unsigned char)((uint64_t)value >> (8 * i)));
}

static inline void real64(struct base_text *file, double value)
{
    int64_t bits;
    memcpy(&bits, &value, sizeof bits);
    whole(file, 8, bits);
}

static inline void real32(struct base_text *file, float value)
{
    int32_t bits;
    memcpy(&bits, &value, sizeof bits);
    whole(file, 4, bits);
}

/* The same bytes as one gzip member. */
static inline void gzip(const void *data, size_t size, struct base_text *out)
{
    z_stream stream = {0};
    unsigned char buffer[65536];
    if (deflateInit2(&stream, 9, Z_DEFLATED, 15 + 16, 9, Z_DEFAULT_STRATEGY) != Z_OK)
        abort();
    stream.next_in = (unsigned char *)(uintptr_t)data;
    stream.avail_in = (uInt)size;
    int state = Z_OK;
    while (state != Z_STREAM_END) {
        stream.next_out = buffer;
        stream.avail_out = sizeof buffer;
        state = deflate(&stream, Z_FINISH);
        base_text_add_bytes(out, buffer, sizeof buffer - stream.avail_out);
    }
    (void)deflateEnd(&stream);
}

#define assert_fails(call, error, wanted_kind, wanted_text)                                        \
    do {                                                                                           \
        (error) = (struct base_error){0};                                                          \
        assert_false(call);                                                                        \
        if (strstr((error).sentence, wanted_text) == NULL)                                         \
            fail_msg("the sentence is: %s", (error).sentence);                                     \
        assert_int_equal((error).kind, wanted_kind);                                               \
    } while (0)

#endif
