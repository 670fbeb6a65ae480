#include "answer.h"

#include <assert.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

#include "cookie.h"
#include "problem.h"
#include "server.h"

#define LIVE_LEVEL 4 /* of gzip, for answers made on the spot */

/* No script, style, image or request but our own; in no frame; nothing of the browser's devices. */
static const struct {
    const char *name, *value;
} standing[] = {
    {"Content-Security-Policy", "default-src 'self'; object-src 'none'; base-uri 'none'; "
                                "form-action 'self'; frame-ancestors 'none'"},
    {"X-Content-Type-Options", "nosniff"},
    {"Referrer-Policy", "same-origin"},
    {"Permissions-Policy", "camera=(), geolocation=(), microphone=(), payment=(), usb=()"},
    {"Cross-Origin-Opener-Policy", "same-origin"},
    {"Cross-Origin-Embedder-Policy", "require-corp"},
    {"Cross-Origin-Resource-Policy", "same-origin"},
};

bool http_answer_standing_headers(struct MHD_Response *response)
{
    for (size_t i = 0; i < sizeof standing / sizeof standing[0]; i++)
        if (MHD_add_response_header(response, standing[i].name, standing[i].value) != MHD_YES)
            return false;
    return true;
}

struct MHD_Response *http_answer_last_resort(const char *kind_name)
{
    const struct http_problem_kind *kind = http_problem_find(kind_name);
    json_t *problem = http_problem_json(kind, NULL, NULL);
    char *text = problem == NULL ? NULL : json_dumps(problem, JSON_COMPACT);
    json_decref(problem);
    if (text == NULL)
        return NULL;
    struct MHD_Response *response =
        MHD_create_response_from_buffer(strlen(text), text, MHD_RESPMEM_MUST_FREE);
    if (response == NULL) {
        free(text);
        return NULL;
    }
    if (MHD_add_response_header(response, "Content-Type", "application/problem+json") != MHD_YES ||
        MHD_add_response_header(response, "Cache-Control", "no-store") != MHD_YES ||
        MHD_add_response_header(response, "Connection", "close") != MHD_YES ||
        !http_answer_standing_headers(response)) {
        MHD_destroy_response(response);
        response = NULL;
    }
    return response;
}

void *http_gzip(const void *data, size_t size, int level, size_t *out_size)
{
    z_stream stream = {0};
    if (size > UINT32_MAX / 2 ||
        deflateInit2(&stream, level, Z_DEFLATED, MAX_WBITS + 16, 8, Z_DEFAULT_STRATEGY) != Z_OK)
        return NULL;
    /* One byte less than the plain form: what does not fit is not worth sending. */
    unsigned char *out = malloc(size);
    if (out != NULL) {
        stream.next_in = (unsigned char *)data;
        stream.avail_in = (uInt)size;
        stream.next_out = out;
        stream.avail_out = (uInt)(size - 1);
        if (deflate(&stream, Z_FINISH) != Z_STREAM_END) {
            free(out);
            out = NULL;
        }
    }
    *out_size = stream.total_out;
    (void)deflateEnd(&stream);
    return out;
}

void http_response_header(struct http_exchange *exchange, struct MHD_Response *response,
                          const char *name, const char *value)
{
    if (response == NULL || MHD_add_response_header(response, name, value) != MHD_YES)
        exchange->answer_failed = true;
}

void http_answer_set(struct http_exchange *exchange, unsigned status, struct MHD_Response *response)
{
    assert(!http_exchange_is_answered(exchange) && status >= 200 && status <= 599);
    bool says_how_long = false;
    for (const struct http_pair *at = exchange->extra; at != NULL; at = at->next) {
        http_response_header(exchange, response, at->name, at->value);
        says_how_long = says_how_long || strcmp(at->name, "Cache-Control") == 0;
    }
    /* Kept bodies have said it themselves. */
    if (response != NULL && !says_how_long &&
        MHD_get_response_header(response, "Cache-Control") == NULL)
        http_response_header(exchange, response, "Cache-Control", "no-store");
    http_response_header(exchange, response, "Ebbmark-Request-Id", exchange->id);
    if (atomic_load(&exchange->server->stopping))
        http_response_header(exchange, response, "Connection", "close");
    if (response != NULL && !http_answer_standing_headers(response))
        exchange->answer_failed = true;
    if (exchange->answer_failed) {
        base_log_line(exchange->server->log, BASE_LOG_ERROR, "answer_failed", "request",
                      exchange->id, "address", exchange->address, "sentence",
                      "The answer could not be built: no memory, or a header that is not text.",
                      NULL);
        if (response != NULL)
            MHD_destroy_response(response);
        response = NULL;
    }
    exchange->response = response;
    exchange->status = status;
}

/* A header value may hold visible characters, blanks and what is beyond ASCII (RFC 9110, 5.5). */
static bool is_header_value(const char *value)
{
    for (; *value != '\0'; value++)
        if (((unsigned char)*value < 0x20 && *value != '\t') || *value == 0x7f)
            return false;
    return true;
}

void http_answer_header(struct http_exchange *exchange, const char *name, const char *value)
{
    struct base_arena *arena = http_exchange_arena(exchange);
    struct http_pair *pair = arena == NULL ? NULL : base_arena_take(arena, sizeof *pair);
    if (pair == NULL || !is_header_value(value)) {
        exchange->answer_failed = true;
        return;
    }
    pair->name = base_arena_copy_text(arena, name);
    pair->value = base_arena_copy_text(arena, value);
    if (pair->name == NULL || pair->value == NULL) {
        exchange->answer_failed = true;
        return;
    }
    *exchange->extra_end = pair;
    exchange->extra_end = &pair->next;
}

void http_answer_cookie(struct http_exchange *exchange, const char *secret, int64_t seconds)
{
    char value[HTTP_SECRET_MAX + 256];
    int length =
        snprintf(value, sizeof value, "%s=%s; Path=/; Max-Age=%lld; HttpOnly; SameSite=Strict%s",
                 exchange->server->cookie_name, secret == NULL ? "" : secret,
                 secret == NULL ? 0LL : (long long)seconds, exchange->is_secure ? "; Secure" : "");
    assert(length > 0 && (size_t)length < sizeof value);
    http_answer_header(exchange, "Set-Cookie", value);
}

enum http_result http_answer_empty(struct http_exchange *exchange, unsigned status)
{
    http_answer_set(
        exchange, status,
        MHD_create_response_from_buffer(0, (unsigned char *)"", MHD_RESPMEM_PERSISTENT));
    return HTTP_ANSWERED;
}

/* Takes `data`, which is malloc'd. */
static enum http_result answer_owned(struct http_exchange *exchange, unsigned status,
                                     const char *media_type, void *data, size_t size,
                                     bool compressible)
{
    bool compressed = false;
    if (compressible && exchange->wants_gzip) {
        size_t small_size;
        void *small = http_gzip(data, size, LIVE_LEVEL, &small_size);
        compressed = small != NULL;
        if (compressed) {
            free(data);
            data = small;
            size = small_size;
        }
    }
    struct MHD_Response *response =
        MHD_create_response_from_buffer(size, data, MHD_RESPMEM_MUST_FREE);
    if (response == NULL)
        free(data);
    http_response_header(exchange, response, "Content-Type", media_type);
    if (compressible)
        http_response_header(exchange, response, "Vary", "Accept, Accept-Encoding");
    if (compressed)
        http_response_header(exchange, response, "Content-Encoding", "gzip");
    http_answer_set(exchange, status, response);
    return HTTP_ANSWERED;
}

enum http_result http_answer_json(struct http_exchange *exchange, unsigned status, json_t *json)
{
    char *text = json == NULL ? NULL : json_dumps(json, JSON_COMPACT);
    json_decref(json);
    if (text == NULL) {
        http_answer_set(exchange, status, NULL);
        return HTTP_ANSWERED;
    }
    size_t size = strlen(text);
    return answer_owned(exchange, status, "application/json", text, size, size >= HTTP_GZIP_FROM);
}

/* Is a body of that type worth compressing? */
static bool is_text(const char *media_type)
{
    return strncmp(media_type, "text/", 5) == 0 || strstr(media_type, "json") != NULL ||
           strstr(media_type, "xml") != NULL;
}

enum http_result http_answer_bytes(struct http_exchange *exchange, unsigned status,
                                   const char *media_type, const void *data, size_t size)
{
    void *copy = malloc(size > 0 ? size : 1);
    if (copy == NULL) {
        http_answer_set(exchange, status, NULL);
        return HTTP_ANSWERED;
    }
    if (size > 0)
        memcpy(copy, data, size);
    return answer_owned(exchange, status, media_type, copy, size,
                        size >= HTTP_GZIP_FROM && is_text(media_type));
}
