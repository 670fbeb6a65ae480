/*
 * Fuzz target: CSV files of reviews made elsewhere, record by record.
 *   make build/fuzz/records && build/fuzz/records
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../../server/campaign/records.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

/* Every field is text, all of them within the limits, and lines only go up. */
static void check_record(const struct records *records, uint64_t line_before)
{
    size_t total = 0, fields = records_fields(records);
    if (fields == 0 || fields > RECORD_FIELDS_MAX || records->line <= line_before)
        __builtin_trap();
    for (size_t i = 0; i < fields; i++) {
        size_t length = strlen(records_field(records, i));
        total += length + 1;
        if (!base_text_is_utf8(records_field(records, i), length))
            __builtin_trap();
    }
    if (total > RECORD_BYTES_MAX + 2 || records_field(records, fields)[0] != '\0')
        __builtin_trap();
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    struct records records;
    struct base_error error = {0};
    bool more = true;
    uint64_t line = 0;
    /* fmemopen takes no empty buffer. */
    FILE *file = size > 0 ? fmemopen((void *)(uintptr_t)data, size, "rb") : NULL;
    if (file == NULL)
        return 0;
    records_start(&records, file);
    while (records_next(&records, &more, &error) && more) {
        check_record(&records, line);
        line = records.line;
    }
    if (error.kind != BASE_NONE && strncmp(error.sentence, "Line ", 5) != 0)
        __builtin_trap();
    records_close(&records);
    return 0;
}
