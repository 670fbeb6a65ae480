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

struct http_exchange;

struct http_connection {
    struct http_connection *older, *newer; /* the list's lock */
    int fd;
    struct http_ip peer;
    struct http_exchange *exchange; /* under way on it; the server's threads only */
    atomic_bool busy;               /* a request is being read past its head, or answered */
    _Atomic double idle_from_s;     /* when it began to owe a request head */
    bool linger;                    /* the server's threads: read on after the answer, see below */
};

#define HTTP_LINGER_MAX 64

struct http_connections {
    pthread_mutex_t lock; /* guards the list and the lingering ones */
    pthread_cond_t wake;  /* there is something to read away, or the end has come */
    bool ends;
    struct http_connection *newest;
    size_t count;
    struct http_lingering {
        int fd;
        double until_s;
    } lingering[HTTP_LINGER_MAX];
    size_t lingering_count;
    double next_sweep_s;
};

void http_connections_begin(struct http_connections *connections);
void http_connections_end(struct http_connections *connections);

/* NULL when out of memory. */
struct http_connection *http_connection_opened(struct http_connections *connections, int fd,
                                               const struct sockaddr *peer, double now_s);
/* Forget it, before the library closes its socket. A socket with unread bytes would answer its
 * closing with a reset, which can overtake the answer that tells the client why; so such a one, and
 * one marked `linger`, is kept open a moment longer and what still arrives is thrown away. */
void http_connection_closed(struct http_connections *connections,
                            struct http_connection *connection, double now_s);

/* The housekeeper's turn: wait a second, or less when some linger; then read what those still sent,
 * and cut off connections that have owed a request head for longer than `most_s`. False: the end
 * has come (http_connections_wake_for_end). */
bool http_connections_tend(struct http_connections *connections, double most_s);
void http_connections_wake_for_end(struct http_connections *connections);
size_t http_connections_count(struct http_connections *connections);

#endif
