/*
 * One request and its answer, from the first byte of its head until the answer is sent.
 *
 * Threads: an exchange is touched by one thread at a time. First it is the server thread's that
 * reads the connection; HTTP_SLOW and HTTP_LATER hand it to the handler, whose http_resume hands it
 * back. What both may touch at once is marked "waiting lock". A handler can outlive the connection
 * (when the server is stopped), so what belongs to the library is marked too.
 */
#ifndef HTTP_EXCHANGE_H
#define HTTP_EXCHANGE_H

#include <microhttpd.h>
#include <pthread.h>
#include <stdatomic.h>

#include "connection.h"
#include "ebbmark/http.h"
#include "proxy.h"
#include "uri.h"

enum http_known {
#define X(slot, name, single) HTTP_KNOWN_##slot,
#include "headers.def"
#undef X
    HTTP_KNOWN_COUNT
};

enum http_phase {
    HTTP_PHASE_HEAD,    /* the handler of the connection was not called yet */
    HTTP_PHASE_BODY,    /* the body is being read, if there is one */
    HTTP_PHASE_WAITING, /* somebody else works on the answer */
    HTTP_PHASE_SENT     /* queued with the library */
};

enum http_body_plan {
    HTTP_BODY_TAKE,  /* keep it for the handler */
    HTTP_BODY_DROP,  /* an answer stands already: read on to keep the connection, within bounds */
    HTTP_BODY_REFUSE /* answer before it is read and close */
};

struct http_pair {
    const char *name, *value;
    struct http_pair *next;
};

struct http_exchange {
    struct http_server *server;
    struct MHD_Connection *connection;
    pthread_t reader;             /* the server's thread that reads the connection */
    struct http_connection *line; /* ours beside the library's; the server's threads only */
    double began_s;
    atomic_uint holders; /* the connection, and a handler that answers later */
    enum http_phase phase;
    char id[17];

    /* the request */
    bool is_head, is_secure, wants_gzip, headers_copied;
    bool has_cookie;    /* the secret that came is a cookie's */
    bool handed_over;   /* to a handler that answers later; the server's threads only */
    const char *method; /* the library's text: the server's threads only */
    char *address;      /* the target as sent, for the log */
    struct http_target target;
    const char *known[HTTP_KNOWN_COUNT]; /* the library's text: the server's threads only */
    struct http_pair *headers;           /* copies of all of them, once somebody asked */
    size_t head_size, header_count;
    const char *fault; /* of the head's framing: what is wrong with it, or NULL */
    struct http_ip ip;
    char ip_text[HTTP_IP_SIZE]; /* when somebody asked */
    const struct http_route *route;
    struct http_kept_body *file; /* a static file, when there is no route */
    struct http_identity identity;
    const char *refused_at; /* the step that answered in the handler's place */

    /* the body */
    char *body;
    size_t body_size, body_capacity, body_declared, body_dropped;
    json_t *json;
    enum http_body_plan body_plan;
    bool body_length_known;

    /* the answer */
    bool answer_failed;   /* some part of it could not be made */
    unsigned status;      /* 0: none was set yet */
    unsigned sent_status; /* 0: the library was given none; the server's threads only */
    struct http_pair *extra, **extra_end; /* headers asked for */
    struct MHD_Response *response;        /* NULL with a status: it could not be made */
    struct http_kept_body *kept;          /* in its place: a shell of a kept body, which is held */
    struct http_shell *shell;

    struct base_arena *arena;

    /* waiting lock */
    struct http_exchange *waiting_older, *waiting_newer;
    bool suspended, resumed, abandoned;
};

/* A new exchange for a request line with this target; NULL when out of memory. */
struct http_exchange *http_exchange_new(struct http_server *server, const char *address);
/* Give up one hold; the last one frees it, and with it the server when that was stopped. */
void http_exchange_drop(struct http_exchange *exchange);
/* Was an answer set? */
bool http_exchange_is_answered(const struct http_exchange *exchange);
/* The exchange's arena, made when first needed; NULL when out of memory. */
struct base_arena *http_exchange_arena(struct http_exchange *exchange);

#endif
