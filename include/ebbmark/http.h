/*
 * The HTTP server: libmicrohttpd's epoll with a thread pool behind one readable pipeline (accept,
 * read, sign-in, limit, route, handle, answer, log). The only room that includes microhttpd.h. It
 * knows nothing of the campaign: who a cookie or token belongs to is asked of a function it is
 * given.
 *
 * Threads: a handler runs on one thread, either one of the server's own (quick handlers) or a
 * worker (HTTP_SLOW); an exchange belongs to that handler until it answers. A handler that returned
 * HTTP_LATER hands its exchange over to whoever calls http_resume, exactly once.
 */
#ifndef EBBMARK_HTTP_H
#define EBBMARK_HTTP_H

#include <jansson.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/arena.h"
#include "ebbmark/error.h"
#include "ebbmark/log.h"

struct http_server;
struct http_exchange;

/* Who may call a route. Roles are ordered. */
enum http_who { HTTP_ANYONE = 0, HTTP_REVIEWER = 1, HTTP_SCIENCE = 2, HTTP_ADMIN = 3 };

enum http_result {
    HTTP_ANSWERED, /* an http_answer_… call was made */
    HTTP_LATER     /* http_resume will be called from any thread, after an answer was set */
};

enum http_flags {
    HTTP_SLOW = 1, /* runs on a worker: reads much, hashes a passphrase, writes */
};

/* A route stands beside its handler. `path` may hold {names}. Changes (POST, PATCH, DELETE) that
 * come with a session cookie need the header `Ebbmark-Request: 1`, else 403. */
struct http_route {
    const char *method; /* "GET" also serves HEAD */
    const char *path;   /* "/api/v1/segments/{id}/flux" */
    enum http_who who;
    unsigned flags;
    size_t body_limit; /* bytes; 0: no body allowed */
    enum http_result (*handle)(struct http_exchange *exchange, void *context);
};

struct http_identity {
    int64_t person; /* 0: nobody */
    enum http_who role;
    bool by_token; /* Authorization: Bearer, not a cookie */
    bool suspended;
    int64_t ends_ms;
};

/* Find whose session cookie or bearer token this is. False: not valid. Called without locks, from
 * any thread; the answer is cached for some seconds and dropped by http_identity_forget. */
typedef bool http_identify(void *context, const char *secret, bool is_token,
                           struct http_identity *out);

struct http_static_file { /* a file of web/, embedded at build time */
    const char *path;     /* "/desk.js" */
    const char *media_type;
    const unsigned char *data;
    size_t size;
    const unsigned char *gzip; /* the same, compressed; NULL when that is not smaller */
    size_t gzip_size;
    const char *etag; /* quoted */
};

struct http_options {
    const char *listen;       /* "127.0.0.1:8080", "[::1]:0" (0: any free port) */
    unsigned threads;         /* epoll threads, default 2 */
    unsigned workers;         /* for HTTP_SLOW, default 4 */
    size_t waiting_max;       /* HTTP_SLOW exchanges waiting; past that 503 with Retry-After */
    unsigned connections_max; /* default 12000 */
    unsigned timeout_s;       /* idle connection, default 30 */
    double person_rate, person_burst; /* requests a second a person; 0: no limit */
    double address_rate,
        address_burst; /* a second an address, not for loopback w/o trusted proxy */
    const char *const *trusted_proxies; /* CIDRs whose X-Forwarded-For is believed; NULL-ended */
    const char *tls_cert, *tls_key;     /* PEM files, or NULL */
    const struct http_route *const
        *routes; /* tables, NULL-ended; each table ends with a NULL method */
    const struct http_static_file *files;
    size_t file_count;
    const char *cookie_name; /* "ebbmark_session" */
    http_identify *identify;
    void *context; /* for identify and the handlers */
    const struct base_log *log;
};

/* Listen and serve. BASE_CONFLICT when the address is taken. The caller stops it. Raises the
 * process's limit of open files as far as the connections need and the system allows. */
bool http_start(const struct http_options *options, struct http_server **out,
                struct base_error *error);
/* The port in use. */
uint16_t http_port(const struct http_server *server);
/* Stop accepting, let what is in flight finish for at most `grace_s`, then close and free. Handlers
 * that run on a worker are waited for whatever they take; exchanges that are still somebody's after
 * HTTP_LATER get the answer "stopping" in their place, and may be answered and resumed, to no
 * effect, after this has returned. */
void http_stop(struct http_server *server, double grace_s);
/* Drop the cached identity of a person (signed out, suspended, role changed), or of all (0). */
void http_identity_forget(struct http_server *server, int64_t person);

/* What the server is doing, for /metrics. */
struct http_counts {
    size_t connections, in_flight, waiting; /* open; being answered; of those, for a worker */
    uint64_t answers[6]; /* since the start, by the status's first digit; 0: cut off before one */
};
void http_count(struct http_server *server, struct http_counts *out);

/* The table of problems (http/problems.def), for whoever describes them. */
struct http_problem_kind {
    const char *kind;
    unsigned status, retry_after_s; /* 0: no Retry-After */
    const char *title;
};
const struct http_problem_kind *http_problem_kinds(size_t *count);

/* ---- reading the request ------------------------------------------------------------------ */

struct base_arena *http_arena(struct http_exchange *exchange); /* freed after the answer is sent */
const struct http_identity *http_identity(const struct http_exchange *exchange);
struct http_server *http_server_of(struct http_exchange *exchange);
const char *http_path_part(struct http_exchange *exchange,
                           const char *name);                              /* decoded; never NULL */
const char *http_query(struct http_exchange *exchange, const char *name);  /* decoded, or NULL */
const char *http_header(struct http_exchange *exchange, const char *name); /* or NULL */
const void *http_body(struct http_exchange *exchange, size_t *size);
/* The session cookie's value or the bearer token as sent, or NULL. */
const char *http_secret(struct http_exchange *exchange);
/* Is the connection (or the trusted proxy's) under TLS? */
bool http_is_secure(struct http_exchange *exchange);
/* The caller's address, after trusted proxies. */
const char *http_address(struct http_exchange *exchange);
/* The body as a JSON object (owned by the exchange). False: a problem was answered already (400
 * with line and column, 415 when the Content-Type is not application/json), so return
 * HTTP_ANSWERED. */
bool http_body_json(struct http_exchange *exchange, json_t **out);
/* A whole number in the query within [least, most], or `fallback` when absent. False: answered 422.
 */
bool http_query_integer(struct http_exchange *exchange, const char *name, int64_t least,
                        int64_t most, int64_t fallback, int64_t *out);
bool http_query_real(struct http_exchange *exchange, const char *name, double least, double most,
                     double fallback, double *out);
/* Has the query no field but these (ended by NULL)? False: answered 422, naming it, so that a
 * misspelt filter does not pass for none. */
bool http_query_only(struct http_exchange *exchange, const char *const *names);
/* Does the Accept header (or its absence) allow this media type, and which of several is preferred?
 */
int http_accept_best(struct http_exchange *exchange, const char *const *types, size_t count);

/* ---- answering ---------------------------------------------------------------------------- */

/* Add a header to the answer that follows. */
void http_answer_header(struct http_exchange *exchange, const char *name, const char *value);
/* Set the session cookie (HttpOnly, SameSite=Strict, Path=/, Secure under TLS); NULL clears it. */
void http_answer_cookie(struct http_exchange *exchange, const char *secret, int64_t seconds);
/* JSON; takes the reference. Compressed when large and accepted. */
enum http_result http_answer_json(struct http_exchange *exchange, unsigned status, json_t *json);
/* No body. */
enum http_result http_answer_empty(struct http_exchange *exchange, unsigned status);
/* Bytes, copied. */
enum http_result http_answer_bytes(struct http_exchange *exchange, unsigned status,
                                   const char *media_type, const void *data, size_t size);

/* An immutable body kept for many answers: plain and, where smaller, deflated by gzip; with an ETag
 * for If-None-Match (the compressed form has one of its own, "…-gzip"). Reference-counted and
 * thread-safe. http_kept_make copies data; etag (quoted) and cache_control may be NULL; NULL when
 * out of memory. */
struct http_kept_body;
struct http_kept_body *http_kept_make(const char *media_type, const void *data, size_t size,
                                      const char *etag, const char *cache_control);
void http_kept_hold(struct http_kept_body *body);
void http_kept_drop(struct http_kept_body *body);
size_t http_kept_size(const struct http_kept_body *body); /* bytes held, both forms */
/* 200, or 304 when If-None-Match has its ETag. Says Vary: Accept, Accept-Encoding by itself. The
 * fastest answer there is, unless http_answer_header was called. */
enum http_result http_answer_kept(struct http_exchange *exchange, struct http_kept_body *body);

/* A stream pulled as the client reads: next() writes at most `room` bytes, returns how many, 0 at
 * the end, -1 on failure (the connection is then cut, so that a short file is not taken for a whole
 * one). done() is called once, whatever happens. On an HTTP_SLOW route next() runs on a worker,
 * else on the server's own thread, where it must not take long. */
enum http_result http_answer_stream(struct http_exchange *exchange, unsigned status,
                                    const char *media_type,
                                    long (*next)(void *state, char *buffer, size_t room),
                                    void (*done)(void *state), void *state);

/* A problem (RFC 9457). `kind` is one of the table in http/problems.def ("invalid",
 * "expired_lease"); the type is "/problems/<kind>", title and status come from the table. field may
 * be NULL. */
enum http_result http_answer_problem(struct http_exchange *exchange, const char *kind,
                                     const char *field, const char *detail_format, ...)
    __attribute__((format(printf, 4, 5)));
/* The problem that a base_error stands for: INVALID 422, DENIED 403, NOT_FOUND 404, CONFLICT 409,
 * TOO_LARGE 413, DISK_FULL 507, BUSY 503 with Retry-After, the rest 500 (logged in full, told in
 * general). */
enum http_result http_answer_error(struct http_exchange *exchange, const struct base_error *error);
/* Several fields at fault, 422: [{"field","detail"}…]. */
enum http_result http_answer_fields(struct http_exchange *exchange, json_t *fields);

/* After HTTP_LATER: the answer was set by the calls above; send it. From any thread, exactly once.
 */
void http_resume(struct http_exchange *exchange);

#endif
