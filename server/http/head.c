#include "head.h"

#include <stdlib.h>
#include <string.h>
#include <strings.h>

static const struct {
    const char *name;
    size_t length;
    bool single;
} known[HTTP_KNOWN_COUNT] = {
#define X(slot, name, single) [HTTP_KNOWN_##slot] = {name, sizeof(name) - 1, single},
#include "headers.def"
#undef X
};

/* Blanks after a value are not part of it (RFC 9110, 5.5), but the library leaves them there; for
 * the rare one that has some, a copy without. */
static const char *without_blanks(struct http_exchange *exchange, const char *value, size_t length)
{
    while (length > 0 && (value[length - 1] == ' ' || value[length - 1] == '\t'))
        length--;
    struct base_arena *arena = http_exchange_arena(exchange);
    char *copy = arena == NULL ? NULL : base_arena_take(arena, length + 1);
    if (copy == NULL) {
        exchange->fault = "There is no memory for the header fields.";
        return "";
    }
    return memcpy(copy, value, length);
}

/* Of these the library's own reading counts, blanks and all. */
static bool is_framing(enum http_known slot)
{
    return slot == HTTP_KNOWN_CONTENT_LENGTH || slot == HTTP_KNOWN_TRANSFER_ENCODING;
}

static enum MHD_Result note_header(void *context, enum MHD_ValueKind kind, const char *name,
                                   size_t name_length, const char *value, size_t length)
{
    struct http_exchange *exchange = context;
    (void)kind;
    if (value == NULL)
        value = "";
    exchange->head_size += name_length + length + 4; /* ": " and the line's end */
    exchange->header_count++;
    if (strlen(value) != length)
        exchange->fault = "A header field must not hold a NUL character.";
    for (size_t i = 0; i < HTTP_KNOWN_COUNT; i++) {
        if (known[i].length != name_length || strncasecmp(known[i].name, name, name_length) != 0)
            continue;
        if (exchange->known[i] != NULL && known[i].single)
            exchange->fault = "A header field that holds one value is there twice.";
        if (length > 0 && strchr(" \t", value[length - 1]) != NULL && !is_framing(i))
            value = without_blanks(exchange, value, length);
        exchange->known[i] = value;
        break;
    }
    return MHD_YES;
}

/* Where does the body end? Two headers that say so differently are how requests are smuggled past
 * a proxy (RFC 9112, 6.3), so anything but one plain statement is refused. */
static void check_framing(struct http_exchange *exchange, const char *version)
{
    const char *encoding = exchange->known[HTTP_KNOWN_TRANSFER_ENCODING];
    const char *length = exchange->known[HTTP_KNOWN_CONTENT_LENGTH];
    bool is_new = strcmp(version, "HTTP/1.1") == 0;
    if (encoding != NULL && (length != NULL || !is_new))
        exchange->fault = "The length of the body is stated in two ways.";
    else if (encoding != NULL && strcasecmp(encoding, "chunked") != 0)
        exchange->fault = "No Transfer-Encoding but chunked is taken here.";
    else if (is_new && exchange->known[HTTP_KNOWN_HOST] == NULL)
        exchange->fault = "The header Host is missing.";
    if (length != NULL) {
        /* The library has refused what is not a number. */
        exchange->body_declared = (size_t)strtoull(length, NULL, 10);
        exchange->body_length_known = true;
    } else if (encoding == NULL) {
        exchange->body_length_known = true;
    }
}

static bool refuse(struct http_exchange *exchange, const char *kind, const char *sentence)
{
    (void)http_answer_problem(exchange, kind, NULL, "%s", sentence);
    return false;
}

bool http_head_read(struct http_exchange *exchange, const char *version)
{
    (void)MHD_get_connection_values_n(exchange->connection, MHD_HEADER_KIND, note_header, exchange);
    check_framing(exchange, version);
    size_t address_length = strlen(exchange->address);
    if (exchange->fault != NULL)
        return refuse(exchange, "bad_request", exchange->fault);
    if (address_length > HTTP_ADDRESS_MAX) {
        (void)http_answer_problem(exchange, "address_too_long", NULL,
                                  "The address is longer than %d bytes.", HTTP_ADDRESS_MAX);
        return false;
    }
    if (exchange->head_size > HTTP_HEAD_MAX || exchange->header_count > HTTP_HEADERS_MAX) {
        (void)http_answer_problem(exchange, "headers_too_large", NULL,
                                  "The header fields are larger than %d bytes or more than %d.",
                                  HTTP_HEAD_MAX, HTTP_HEADERS_MAX);
        return false;
    }
    const char *wrong = http_target_cut(exchange->address + address_length + 1, &exchange->target);
    return wrong == NULL || refuse(exchange, "bad_request", wrong);
}
