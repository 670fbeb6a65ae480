#include "body.h"

#include <stdlib.h>
#include <string.h>
#include <strings.h>

#include "server.h"

/* A body may take this long whatever its size; past that it must keep up the slowest speed of an
 * old mobile connection. */
#define PATIENCE_S 30.0
#define SLOWEST_BYTES_S 1000.0

static bool too_large(struct http_exchange *exchange)
{
    size_t limit = exchange->route == NULL ? 0 : exchange->route->body_limit;
    if (limit == 0)
        (void)http_answer_problem(exchange, "too_large", NULL, "This address takes no body.");
    else
        (void)http_answer_problem(exchange, "too_large", NULL,
                                  "The body is larger than this address takes (limit %zu bytes).",
                                  limit);
    return false;
}

bool http_body_admit(struct http_exchange *exchange)
{
    const char *encoding = exchange->known[HTTP_KNOWN_CONTENT_ENCODING];
    size_t limit = exchange->route == NULL ? 0 : exchange->route->body_limit;
    if (exchange->body_length_known && exchange->body_declared > limit)
        return too_large(exchange);
    if (limit == 0 && exchange->known[HTTP_KNOWN_TRANSFER_ENCODING] != NULL)
        return too_large(exchange);
    if (encoding != NULL && strcasecmp(encoding, "identity") != 0) {
        (void)http_answer_problem(exchange, "unsupported_media_type", NULL,
                                  "Send the body as it is, without a Content-Encoding.");
        return false;
    }
    return true;
}

void http_body_plan_refusal(struct http_exchange *exchange)
{
    bool asks_first = exchange->known[HTTP_KNOWN_EXPECT] != NULL;
    bool large = exchange->body_length_known && exchange->body_declared > HTTP_DRAIN_KNOWN;
    bool any = exchange->body_declared > 0 || exchange->known[HTTP_KNOWN_TRANSFER_ENCODING] != NULL;
    bool ends_where_it_says = exchange->fault == NULL;
    exchange->body_plan =
        !ends_where_it_says || large || (any && asks_first) ? HTTP_BODY_REFUSE : HTTP_BODY_DROP;
}

/* Room for `more` bytes, counted against what all exchanges may hold together. */
static bool reserve(struct http_exchange *exchange, size_t more)
{
    size_t need = exchange->body_size + more;
    if (need <= exchange->body_capacity)
        return true;
    size_t capacity = exchange->body_capacity == 0 ? 4096 : exchange->body_capacity;
    while (capacity < need)
        capacity *= 2;
    if (exchange->body_length_known && capacity > exchange->body_declared)
        capacity = exchange->body_declared < need ? need : exchange->body_declared;
    struct http_server *server = exchange->server;
    size_t growth = capacity - exchange->body_capacity;
    char *body = NULL;
    if (atomic_fetch_add(&server->body_bytes, growth) + growth <= server->body_bytes_max)
        body = realloc(exchange->body, capacity);
    if (body == NULL) {
        (void)atomic_fetch_sub(&server->body_bytes, growth);
        return false;
    }
    exchange->body = body;
    exchange->body_capacity = capacity;
    return true;
}

void http_body_free(struct http_exchange *exchange)
{
    (void)atomic_fetch_sub(&exchange->server->body_bytes, exchange->body_capacity);
    free(exchange->body);
    exchange->body = NULL;
    exchange->body_size = exchange->body_capacity = 0;
}

/* An answer stands; throw the rest away. */
static void refuse_rest(struct http_exchange *exchange)
{
    exchange->refused_at = "read the body";
    http_body_free(exchange);
    exchange->body_plan = HTTP_BODY_DROP;
}

bool http_body_take(struct http_exchange *exchange, const char *data, size_t size, double now_s)
{
    double took_s = now_s - exchange->began_s;
    size_t so_far = exchange->body_size + exchange->body_dropped + size;
    if (took_s > PATIENCE_S && (double)so_far < took_s * SLOWEST_BYTES_S)
        return false;
    if (exchange->body_plan == HTTP_BODY_TAKE) {
        if (exchange->body_size + size > exchange->route->body_limit) {
            (void)too_large(exchange);
            refuse_rest(exchange);
        } else if (!reserve(exchange, size)) {
            (void)http_answer_problem(exchange, "overloaded", NULL,
                                      "The server holds too many large bodies just now; "
                                      "try again soon.");
            refuse_rest(exchange);
        } else {
            memcpy(exchange->body + exchange->body_size, data, size);
            exchange->body_size += size;
            return true;
        }
    }
    exchange->body_dropped += size;
    return exchange->body_length_known || exchange->body_dropped <= HTTP_DRAIN_CHUNKED;
}
