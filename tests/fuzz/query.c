/*
 * Fuzz target: the address of a request, its path and its query.
 *   make build/fuzz/query && build/fuzz/query
 */
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include "../../server/http/uri.h"
#include "ebbmark/text.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

/* A text that came out must be sound UTF-8 within the text that went in. */
static void check(const char *text, const char *start, size_t size)
{
    if (text < start || text > start + size || !base_text_is_utf8(text, strlen(text)))
        __builtin_trap();
}

/* Either a sentence, or parts and fields that are sound and distinct. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    char *text = malloc(size + 1);
    struct http_target target;
    if (text == NULL)
        return 0;
    memcpy(text, data, size);
    text[size] = '\0';
    const char *wrong = http_target_cut(text, &target);
    for (size_t i = 0; wrong == NULL && i < target.part_count; i++)
        check(target.parts[i], text, size);
    for (size_t i = 0; wrong == NULL && i < target.field_count; i++) {
        check(target.fields[i].name, text, size);
        check(target.fields[i].value, text, size);
        for (size_t j = 0; j < i; j++)
            if (strcmp(target.fields[i].name, target.fields[j].name) == 0)
                __builtin_trap();
    }
    if (wrong != NULL && wrong[0] == '\0')
        __builtin_trap();
    free(text);
    return 0;
}
