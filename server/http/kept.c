#include "kept.h"

#include <assert.h>
#include <pthread.h>
#include <stdlib.h>
#include <string.h>

#include "accept.h"
#include "answer.h"
#include "server.h"

#define SPARE_MAX 64u /* shells of each form that a body keeps when nobody needs them */
#define LEVEL 6

struct http_kept_body {
    atomic_size_t holders;
    bool borrowed; /* the bytes belong to somebody who outlives us */
    char *media_type, *etag, *etag_gzip, *cache_control;
    unsigned char *data[2]; /* plain, gzip (or NULL) */
    size_t size[2];
    pthread_mutex_t lock; /* guards what follows */
    struct http_shell *spare[2];
    unsigned spare_count[2];
};

/* The compressed form is other bytes, so a strong ETag of its own: "abc" becomes "abc-gzip". */
static char *etag_of_gzip(const char *etag)
{
    size_t length = strlen(etag);
    assert(length >= 2 && etag[length - 1] == '"');
    char *out = malloc(length + sizeof "-gzip");
    if (out != NULL) {
        memcpy(out, etag, length - 1);
        memcpy(out + length - 1, "-gzip\"", sizeof "-gzip\"");
    }
    return out;
}

static void body_free(struct http_kept_body *body)
{
    for (size_t form = 0; form < 2; form++) {
        while (body->spare[form] != NULL) {
            struct http_shell *shell = body->spare[form];
            body->spare[form] = shell->next;
            MHD_destroy_response(shell->response);
            free(shell);
        }
        if (!body->borrowed)
            free(body->data[form]);
    }
    free(body->media_type);
    free(body->etag);
    free(body->etag_gzip);
    free(body->cache_control);
    (void)pthread_mutex_destroy(&body->lock);
    free(body);
}

/* Everything but the bytes. NULL when out of memory. */
static struct http_kept_body *body_new(const char *media_type, const char *etag,
                                       const char *cache_control)
{
    struct http_kept_body *body = calloc(1, sizeof *body);
    if (body == NULL)
        return NULL;
    atomic_store(&body->holders, 1);
    (void)pthread_mutex_init(&body->lock, NULL);
    body->media_type = strdup(media_type);
    body->cache_control = strdup(cache_control == NULL ? "no-store" : cache_control);
    bool ok = body->media_type != NULL && body->cache_control != NULL;
    if (ok && etag != NULL) {
        body->etag = strdup(etag);
        body->etag_gzip = etag_of_gzip(etag);
        ok = body->etag != NULL && body->etag_gzip != NULL;
    }
    if (!ok) {
        body_free(body);
        body = NULL;
    }
    return body;
}

struct http_kept_body *http_kept_make(const char *media_type, const void *data, size_t size,
                                      const char *etag, const char *cache_control)
{
    struct http_kept_body *body = body_new(media_type, etag, cache_control);
    if (body == NULL)
        return NULL;
    body->size[0] = size;
    body->data[0] = malloc(size > 0 ? size : 1);
    if (body->data[0] == NULL) {
        body_free(body);
        return NULL;
    }
    if (size > 0)
        memcpy(body->data[0], data, size);
    if (size >= HTTP_GZIP_FROM)
        body->data[1] = http_gzip(data, size, LEVEL, &body->size[1]);
    return body;
}

struct http_kept_body *http_kept_borrow(const struct http_static_file *file,
                                        const char *cache_control)
{
    struct http_kept_body *body = body_new(file->media_type, file->etag, cache_control);
    if (body == NULL)
        return NULL;
    body->borrowed = true;
    /* Never written to: the library's signature has no const, and nor has ours for owned bytes. */
    body->data[0] = (unsigned char *)file->data;
    body->size[0] = file->size;
    body->data[1] = (unsigned char *)file->gzip;
    body->size[1] = file->gzip_size;
    return body;
}

void http_kept_hold(struct http_kept_body *body)
{
    (void)atomic_fetch_add(&body->holders, 1);
}

void http_kept_drop(struct http_kept_body *body)
{
    if (body != NULL && atomic_fetch_sub(&body->holders, 1) == 1)
        body_free(body);
}

size_t http_kept_size(const struct http_kept_body *body)
{
    return body->size[0] + (body->data[1] == NULL ? 0 : body->size[1]);
}

/* The headers that a kept body has in every answer of that form, and in a 304. */
static bool add_headers(const struct http_kept_body *body, bool gzip, bool with_body,
                        struct MHD_Response *response)
{
    const char *etag = gzip ? body->etag_gzip : body->etag;
    bool ok = MHD_add_response_header(response, "Cache-Control", body->cache_control) == MHD_YES;
    /* Handlers choose between kept bodies by Accept, this room by Accept-Encoding. */
    ok = ok && MHD_add_response_header(response, "Vary", "Accept, Accept-Encoding") == MHD_YES;
    if (etag != NULL)
        ok = ok && MHD_add_response_header(response, "ETag", etag) == MHD_YES;
    if (with_body)
        ok = ok && MHD_add_response_header(response, "Content-Type", body->media_type) == MHD_YES;
    if (with_body && gzip)
        ok = ok && MHD_add_response_header(response, "Content-Encoding", "gzip") == MHD_YES;
    return ok;
}

static struct http_shell *shell_new(struct http_kept_body *body, bool gzip)
{
    struct http_shell *shell = calloc(1, sizeof *shell);
    if (shell == NULL)
        return NULL;
    shell->is_gzip = gzip;
    shell->response =
        MHD_create_response_from_buffer(body->size[gzip], body->data[gzip], MHD_RESPMEM_PERSISTENT);
    if (shell->response == NULL || !add_headers(body, gzip, true, shell->response) ||
        !http_answer_standing_headers(shell->response)) {
        if (shell->response != NULL)
            MHD_destroy_response(shell->response);
        free(shell);
        return NULL;
    }
    return shell;
}

/* Give the shell the exchange's id. False when out of memory; the shell then has none. */
static bool shell_address(struct http_shell *shell, const struct http_exchange *exchange)
{
    if (shell->id[0] != '\0')
        (void)MHD_del_response_header(shell->response, "Ebbmark-Request-Id", shell->id);
    shell->id[0] = '\0';
    if (MHD_add_response_header(shell->response, "Ebbmark-Request-Id", exchange->id) != MHD_YES)
        return false;
    memcpy(shell->id, exchange->id, sizeof shell->id);
    return true;
}

bool http_kept_lend(struct http_kept_body *body, struct http_exchange *exchange)
{
    bool gzip = exchange->wants_gzip && body->data[1] != NULL;
    (void)pthread_mutex_lock(&body->lock);
    struct http_shell *shell = body->spare[gzip];
    if (shell != NULL) {
        body->spare[gzip] = shell->next;
        body->spare_count[gzip]--;
    }
    (void)pthread_mutex_unlock(&body->lock);
    if (shell == NULL)
        shell = shell_new(body, gzip);
    if (shell == NULL)
        return false;
    http_kept_hold(body);
    exchange->kept = body;
    exchange->shell = shell;
    if (shell_address(shell, exchange))
        return true;
    http_kept_give_back(exchange);
    return false;
}

void http_kept_give_back(struct http_exchange *exchange)
{
    struct http_kept_body *body = exchange->kept;
    struct http_shell *shell = exchange->shell;
    exchange->kept = NULL;
    exchange->shell = NULL;
    if (body == NULL)
        return;
    (void)pthread_mutex_lock(&body->lock);
    bool kept = body->spare_count[shell->is_gzip] < SPARE_MAX;
    if (kept) {
        shell->next = body->spare[shell->is_gzip];
        body->spare[shell->is_gzip] = shell;
        body->spare_count[shell->is_gzip]++;
    }
    (void)pthread_mutex_unlock(&body->lock);
    if (!kept) {
        MHD_destroy_response(shell->response);
        free(shell);
    }
    http_kept_drop(body);
}

static void drop_held(void *body)
{
    http_kept_drop(body);
}

/* With headers of its own the answer needs a response of its own; it holds the body. */
static enum http_result answer_apart(struct http_exchange *exchange, struct http_kept_body *body,
                                     unsigned status)
{
    bool gzip = exchange->wants_gzip && body->data[1] != NULL;
    bool with_body = status == 200;
    http_kept_hold(body);
    struct MHD_Response *response = MHD_create_response_from_buffer_with_free_callback_cls(
        with_body ? body->size[gzip] : 0, with_body ? body->data[gzip] : (unsigned char *)"",
        drop_held, body);
    if (response == NULL) {
        http_kept_drop(body);
    } else if (!add_headers(body, gzip, with_body, response)) {
        MHD_destroy_response(response);
        response = NULL;
    }
    http_answer_set(exchange, status, response);
    return HTTP_ANSWERED;
}

enum http_result http_answer_kept(struct http_exchange *exchange, struct http_kept_body *body)
{
    assert(!http_exchange_is_answered(exchange));
    if (exchange->known[HTTP_KNOWN_IF_NONE_MATCH] != NULL && body->etag != NULL) {
        const char *listed = http_header(exchange, "If-None-Match");
        if (listed != NULL && (http_etag_is_listed(listed, body->etag) ||
                               http_etag_is_listed(listed, body->etag_gzip)))
            return answer_apart(exchange, body, 304);
    }
    if (exchange->answer_failed || exchange->extra != NULL ||
        atomic_load(&exchange->server->stopping))
        return answer_apart(exchange, body, 200);
    if (http_kept_lend(body, exchange))
        exchange->status = 200;
    else
        http_answer_set(exchange, 200, NULL);
    return HTTP_ANSWERED;
}
