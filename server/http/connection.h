/*
 * What we remember of each open connection beside the library: whose it is, and since when it owes
 * us a whole request head. The library's own timeout is about silence; a client that sends one byte
 * now and then never falls silent, so the housekeeping cuts it off.
 */
#ifndef HTTP_CONNECTION_H
#define HTTP_CONNECTION_H

#include <pthread.h>
#include <stdatomic.h>
#include <stdbool.h>
#include <stddef.h>

#include "proxy.h"

struct http_connection {
    struct http_connection *older, *newer; /* the list's lock */
    int fd;
    struct http_ip peer;
    atomic_bool busy;           /* a request is being read past its head, or answered */
    _Atomic double idle_from_s; /* when it began to owe a request head */
    bool linger;                /* the server's threads: read on after the answer, see below */
};

#define HTTP_LINGER_MAX 64

struct http_connections {
    pthread_mutex_t lock; /* guards the list and the lingering ones */
    struct http_connection *newest;
    size_t count;
    struct http_lingering {
        int fd;
        double until_s;
    } lingering[HTTP_LINGER_MAX];
    size_t lingering_count;
};

void http_connections_begin(struct http_connections *connections);
void http_connections_end(struct http_connections *connections);

/* NULL when out of memory. */
struct http_connection *http_connection_opened(struct http_connections *connections, int fd,
                                               const struct sockaddr *peer, double now_s);
/* Forget it, before the library closes its socket. A socket with unread bytes would answer its
 * closing with a reset, which can overtake the answer that tells the client why; so one marked
 * `linger` is kept open a moment longer and what still arrives is thrown away. */
void http_connection_closed(struct http_connections *connections,
                            struct http_connection *connection, double now_s);

/* Cut off those that have owed a request head for longer than `most_s`, and read what the lingering
 * ones still sent. Returns whether any still linger. */
bool http_connections_sweep(struct http_connections *connections, double now_s, double most_s);
size_t http_connections_count(struct http_connections *connections);

#endif
