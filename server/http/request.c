/* What handlers read of a request. */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

#include "accept.h"
#include "cookie.h"
#include "ebbmark/text.h"
#include "exchange.h"
#include "server.h"

struct base_arena *http_arena(struct http_exchange *exchange)
{
    return http_exchange_arena(exchange);
}

const struct http_identity *http_identity(const struct http_exchange *exchange)
{
    return &exchange->identity;
}

struct http_server *http_server_of(struct http_exchange *exchange)
{
    return exchange->server;
}

const char *http_path_part(struct http_exchange *exchange, const char *name)
{
    int part = http_route_part(exchange->route, name);
    return part < 0 ? "" : exchange->target.parts[part];
}

const char *http_query(struct http_exchange *exchange, const char *name)
{
    for (size_t i = 0; i < exchange->target.field_count; i++)
        if (strcmp(exchange->target.fields[i].name, name) == 0)
            return exchange->target.fields[i].value;
    return NULL;
}

/* Copies one header to the end of the list. Without memory the answer, whatever it is, becomes an
 * error: a handler must not take a lost header for one that was not sent. */
static enum MHD_Result copy_header(void *context, enum MHD_ValueKind kind, const char *name,
                                   const char *value)
{
    struct http_exchange *exchange = context;
    (void)kind;
    struct base_arena *arena = http_exchange_arena(exchange);
    struct http_pair *pair = arena == NULL ? NULL : base_arena_take(arena, sizeof *pair);
    char *copy = pair == NULL ? NULL : base_arena_copy_text(arena, value == NULL ? "" : value);
    if (copy != NULL)
        pair->name = base_arena_copy_text(arena, name);
    if (copy == NULL || pair->name == NULL) {
        exchange->answer_failed = true;
        return MHD_NO;
    }
    for (size_t end = strlen(copy); end > 0 && strchr(" \t", copy[end - 1]) != NULL; end--)
        copy[end - 1] = '\0';
    pair->value = copy;
    struct http_pair **end = &exchange->headers;
    while (*end != NULL)
        end = &(*end)->next;
    *end = pair;
    return MHD_YES;
}

/* The library's own text goes when the connection does, which a handler can outlive; so all are
 * copied when one is asked for, and under the lock that an abandonment needs too. */
static void copy_headers(struct http_exchange *exchange)
{
    struct http_waiting *waiting = &exchange->server->waiting;
    (void)pthread_mutex_lock(&waiting->lock);
    if (!exchange->abandoned)
        (void)MHD_get_connection_values(exchange->connection, MHD_HEADER_KIND, copy_header,
                                        exchange);
    (void)pthread_mutex_unlock(&waiting->lock);
    exchange->headers_copied = true;
}

const char *http_header(struct http_exchange *exchange, const char *name)
{
    if (!exchange->headers_copied)
        copy_headers(exchange);
    const char *value = NULL;
    for (const struct http_pair *at = exchange->headers; at != NULL; at = at->next)
        if (strcasecmp(at->name, name) == 0)
            value = at->value;
    return value;
}

const void *http_body(struct http_exchange *exchange, size_t *size)
{
    *size = exchange->body_size;
    return exchange->body_size > 0 ? exchange->body : "";
}

const char *http_secret(struct http_exchange *exchange)
{
    const char *authorization = http_header(exchange, "Authorization");
    const char *cookies = http_header(exchange, "Cookie");
    const char *secret;
    size_t length;
    bool found = authorization != NULL && http_bearer_find(authorization, &secret, &length);
    if (!found)
        found = cookies != NULL &&
                http_cookie_find(cookies, exchange->server->cookie_name, &secret, &length);
    struct base_arena *arena = found ? http_exchange_arena(exchange) : NULL;
    char *copy = arena == NULL ? NULL : base_arena_take(arena, length + 1);
    if (copy != NULL)
        memcpy(copy, secret, length);
    else if (found)
        exchange->answer_failed = true;
    return copy;
}

bool http_is_secure(struct http_exchange *exchange)
{
    return exchange->is_secure;
}

const char *http_address(struct http_exchange *exchange)
{
    return http_ip_write(&exchange->ip, exchange->ip_text);
}

int http_accept_best(struct http_exchange *exchange, const char *const *types, size_t count)
{
    /* The slot, which is ours, says whether the header came; its text is the library's, which is
     * sure to be there only for the thread that reads the connection. */
    const char *accept = exchange->known[HTTP_KNOWN_ACCEPT];
    if (accept != NULL && !pthread_equal(exchange->reader, pthread_self()))
        accept = http_header(exchange, "Accept");
    return http_accept_pick(accept, types, count);
}

/* "application/json", with no charset or the only one that JSON has. */
static bool is_json_type(const char *type)
{
    static const char json[] = "application/json";
    size_t length = type == NULL ? 0 : strcspn(type, "; \t");
    if (length != sizeof json - 1 || strncasecmp(type, json, length) != 0)
        return false;
    const char *charset = strcasestr(type + length, "charset=");
    if (charset == NULL)
        return true;
    charset += strlen("charset=");
    if (*charset == '"')
        charset++;
    return strncasecmp(charset, "utf-8", 5) == 0;
}

bool http_body_json(struct http_exchange *exchange, json_t **out)
{
    *out = NULL;
    if (!is_json_type(http_header(exchange, "Content-Type"))) {
        (void)http_answer_problem(exchange, "unsupported_media_type", NULL,
                                  "Send JSON, with the header Content-Type: application/json.");
        return false;
    }
    json_error_t wrong;
    size_t size;
    const char *text = http_body(exchange, &size);
    json_decref(exchange->json);
    exchange->json = json_loadb(text, size, JSON_REJECT_DUPLICATES, &wrong);
    if (exchange->json == NULL) {
        /* It does not always say so with its code, but a fault in the text has a place. */
        if (json_error_code(&wrong) == json_error_out_of_memory || wrong.line < 1)
            (void)http_answer_problem(exchange, "overloaded", NULL,
                                      "There is no memory to read the body; try again soon.");
        else
            (void)http_answer_problem(exchange, "malformed_json", NULL,
                                      "The body is not well-formed JSON at line %d, column %d: %s.",
                                      wrong.line, wrong.column, wrong.text);
        return false;
    }
    if (!json_is_object(exchange->json)) {
        (void)http_answer_problem(exchange, "invalid", NULL, "The body must be a JSON object.");
        return false;
    }
    *out = exchange->json;
    return true;
}

bool http_query_only(struct http_exchange *exchange, const char *const *names)
{
    for (size_t i = 0; i < exchange->target.field_count; i++) {
        const char *field = exchange->target.fields[i].name;
        size_t k = 0;
        while (names[k] != NULL && strcmp(names[k], field) != 0)
            k++;
        if (names[k] == NULL) {
            (void)http_answer_problem(exchange, "invalid", field,
                                      "The query has no field of this name here.");
            return false;
        }
    }
    return true;
}

bool http_query_integer(struct http_exchange *exchange, const char *name, int64_t least,
                        int64_t most, int64_t fallback, int64_t *out)
{
    const char *text = http_query(exchange, name);
    *out = fallback;
    if (text == NULL)
        return true;
    const char *digits = text[0] == '-' ? text + 1 : text;
    bool ok = digits[0] != '\0' && digits[strspn(digits, "0123456789")] == '\0';
    errno = 0;
    long long value = ok ? strtoll(text, NULL, 10) : 0;
    if (ok && errno == 0 && value >= least && value <= most) {
        *out = value;
        return true;
    }
    (void)http_answer_problem(exchange, "invalid", name,
                              "The query field \"%s\" must be a whole number from %lld to %lld.",
                              name, (long long)least, (long long)most);
    return false;
}

bool http_query_real(struct http_exchange *exchange, const char *name, double least, double most,
                     double fallback, double *out)
{
    const char *text = http_query(exchange, name);
    *out = fallback;
    if (text == NULL)
        return true;
    double value;
    if (base_text_read_number(text, &value) && isfinite(value) && value >= least && value <= most) {
        *out = value;
        return true;
    }
    char from[BASE_NUMBER_SIZE], to[BASE_NUMBER_SIZE];
    (void)http_answer_problem(exchange, "invalid", name,
                              "The query field \"%s\" must be a number from %s to %s.", name,
                              base_text_number(from, least), base_text_number(to, most));
    return false;
}
