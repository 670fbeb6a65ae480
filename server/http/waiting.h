/*
 * Exchanges that somebody else answers: a worker (HTTP_SLOW) or whoever holds it (HTTP_LATER).
 *
 * While it waits, the connection is suspended in the library, which neither reads nor notices a
 * client that goes away. The library must not be stopped while one is suspended, and each must be
 * resumed exactly once; both are seen to here, under one lock. At a stop, those that nobody has
 * answered are abandoned: they get the answer "stopping", and the exchange lives on until its
 * handler calls http_resume.
 */
#ifndef HTTP_WAITING_H
#define HTTP_WAITING_H

#include "ebbmark/pool.h"
#include "exchange.h"

struct http_waiting {
    pthread_mutex_t lock; /* guards all of this, and the marked fields of exchanges */
    struct http_exchange *newest;
    bool begun;
    bool cut_off;              /* no more may wait: the server stops */
    struct base_pool *workers; /* NULL before the start and after the cutting off */
    size_t queue_limit;        /* HTTP_SLOW exchanges that may wait for a worker */
    size_t queued;             /* that do */
};

bool http_waiting_begin(struct http_waiting *waiting, unsigned workers, size_t queue_limit,
                        size_t streams_max, struct base_error *error);
/* Let the workers finish what they have begun, refuse what they have not, abandon the rest. Called
 * once; afterwards nothing is suspended. */
void http_waiting_cut_off(struct http_waiting *waiting);
void http_waiting_end(struct http_waiting *waiting);

/* Run the route's handler on a worker. Suspends the connection, or answers a problem (overloaded,
 * stopping) and returns false. */
bool http_wait_for_worker(struct http_exchange *exchange);
/* The handler said HTTP_LATER. True: suspended. False: http_resume was called already, or the
 * server stops (then it is abandoned); send the answer now. */
bool http_wait_for_resume(struct http_exchange *exchange);
bool http_wait_is_abandoned(struct http_exchange *exchange);

/* Let a worker call work(context) while the connection, in the middle of its answer, is suspended;
 * work ends with http_stream_resume. False: the server stops, nothing was done. */
bool http_wait_for_stream(struct http_waiting *waiting, struct MHD_Connection *connection,
                          void (*work)(void *context), void *context);
void http_stream_resume(struct http_waiting *waiting, struct MHD_Connection *connection);

#endif
