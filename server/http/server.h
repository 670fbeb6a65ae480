/* The server's own parts. Set up before the threads start; each part guards itself. */
#ifndef HTTP_SERVER_H
#define HTTP_SERVER_H

#include <microhttpd.h>
#include <stdatomic.h>

#include "connection.h"
#include "identity.h"
#include "limits.h"
#include "proxy.h"
#include "request_log.h"
#include "route.h"
#include "static.h"
#include "waiting.h"

struct http_server {
    atomic_uint holders; /* the owner, and each exchange */
    struct MHD_Daemon *daemon;
    int listen_fd;
    uint16_t port;
    const struct base_log *log;
    void *context;
    char *cookie_name;
    bool is_tls;
    char *tls_cert, *tls_key; /* PEM text, which the library does not copy */
    unsigned timeout_s;
    struct http_router *router;
    struct http_statics *statics;
    struct http_networks proxies;
    struct http_identities *identities; /* NULL: nobody signs in here */
    struct http_limits *person_limits, *address_limits;
    struct http_connections connections;
    struct http_waiting waiting;
    struct http_request_log request_log;
    struct MHD_Response *when_failed, *when_stopping;
    unsigned char id_key[16];
    atomic_uint_fast64_t requests_begun;
    atomic_size_t in_flight;
    atomic_size_t body_bytes; /* of all bodies being held */
    size_t body_bytes_max;
    atomic_uint_fast64_t answers[6]; /* by the first digit of the status */
    atomic_bool stopping;
    pthread_t housekeeper;
    bool housekeeper_runs;
};

/* Frees what http_start made, when the last hold is given up. */
void http_server_drop(struct http_server *server);

/* pipeline.c: what the library calls. */
void *http_pipeline_begin(void *server, const char *address, struct MHD_Connection *connection);
enum MHD_Result http_pipeline_step(void *server, struct MHD_Connection *connection,
                                   const char *address, const char *method, const char *version,
                                   const char *data, size_t *size, void **exchange);
/* The request is over; `cut` when its client did not get the whole answer. */
void http_pipeline_finish(struct http_exchange *exchange, bool cut);
void http_pipeline_end(void *server, struct MHD_Connection *connection, void **exchange,
                       enum MHD_RequestTerminationCode how);

/* listen.c: a listening socket for "host:port"; the port in use. */
bool http_listen(const char *where, int *fd, uint16_t *port, struct base_error *error);

#endif
