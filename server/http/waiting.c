#include "waiting.h"

#include "ebbmark/http.h"
#include "server.h"

bool http_waiting_begin(struct http_waiting *waiting, unsigned workers, size_t queue_limit,
                        size_t streams_max, struct base_error *error)
{
    (void)pthread_mutex_init(&waiting->lock, NULL);
    waiting->begun = true;
    waiting->queue_limit = queue_limit;
    /* Streams under way always find a place: whoever was let in is served to the end. */
    return base_pool_open(&waiting->workers, workers, queue_limit + streams_max, error);
}

void http_waiting_end(struct http_waiting *waiting)
{
    if (!waiting->begun)
        return;
    base_pool_close(waiting->workers);
    (void)pthread_mutex_destroy(&waiting->lock);
}

/* The lock is held. From here on the library leaves the connection alone. */
static void suspend(struct http_waiting *waiting, struct http_exchange *exchange)
{
    exchange->suspended = true;
    exchange->waiting_newer = NULL;
    exchange->waiting_older = waiting->newest;
    if (waiting->newest != NULL)
        waiting->newest->waiting_newer = exchange;
    waiting->newest = exchange;
    MHD_suspend_connection(exchange->connection);
}

/* The lock is held. The connection's thread may send the answer from this moment on. */
static void unsuspend(struct http_waiting *waiting, struct http_exchange *exchange)
{
    exchange->suspended = false;
    if (exchange->waiting_older != NULL)
        exchange->waiting_older->waiting_newer = exchange->waiting_newer;
    if (exchange->waiting_newer != NULL)
        exchange->waiting_newer->waiting_older = exchange->waiting_older;
    else
        waiting->newest = exchange->waiting_older;
    MHD_resume_connection(exchange->connection);
}

void http_waiting_cut_off(struct http_waiting *waiting)
{
    (void)pthread_mutex_lock(&waiting->lock);
    waiting->cut_off = true;
    (void)pthread_mutex_unlock(&waiting->lock);
    base_pool_close(waiting->workers);
    (void)pthread_mutex_lock(&waiting->lock);
    waiting->workers = NULL;
    while (waiting->newest != NULL) {
        waiting->newest->abandoned = true;
        unsuspend(waiting, waiting->newest);
    }
    (void)pthread_mutex_unlock(&waiting->lock);
}

/* A worker's part of an HTTP_SLOW exchange. */
static void run_handler(void *context)
{
    struct http_exchange *exchange = context;
    struct http_waiting *waiting = &exchange->server->waiting;
    (void)pthread_mutex_lock(&waiting->lock);
    waiting->queued--;
    bool too_late = waiting->cut_off;
    (void)pthread_mutex_unlock(&waiting->lock);
    enum http_result result =
        too_late ? http_answer_problem(exchange, "stopping", NULL,
                                       "The server is being stopped; try again in a moment.")
                 : exchange->route->handle(exchange, exchange->server->context);
    if (result == HTTP_ANSWERED)
        http_resume(exchange);
}

bool http_wait_for_worker(struct http_exchange *exchange)
{
    struct http_waiting *waiting = &exchange->server->waiting;
    (void)pthread_mutex_lock(&waiting->lock);
    bool stops = waiting->cut_off;
    bool queued = !stops && waiting->queued < waiting->queue_limit;
    if (queued) {
        (void)atomic_fetch_add(&exchange->holders, 1);
        waiting->queued++;
        /* The worker cannot resume before the lock is given up, so not before the suspension. */
        queued = base_pool_submit(waiting->workers, run_handler, exchange, NULL);
        if (queued) {
            suspend(waiting, exchange);
        } else {
            waiting->queued--;
            (void)atomic_fetch_sub(&exchange->holders, 1);
        }
    }
    (void)pthread_mutex_unlock(&waiting->lock);
    if (!queued)
        (void)http_answer_problem(exchange, stops ? "stopping" : "overloaded", NULL,
                                  stops
                                      ? "The server is being stopped; try again in a moment."
                                      : "The server has too much to do just now; try again soon.");
    return queued;
}

bool http_wait_for_resume(struct http_exchange *exchange)
{
    struct http_waiting *waiting = &exchange->server->waiting;
    (void)pthread_mutex_lock(&waiting->lock);
    bool waits = !exchange->resumed && !waiting->cut_off;
    if (waits)
        suspend(waiting, exchange);
    else if (!exchange->resumed)
        exchange->abandoned = true;
    (void)pthread_mutex_unlock(&waiting->lock);
    return waits;
}

bool http_wait_is_abandoned(struct http_exchange *exchange)
{
    (void)pthread_mutex_lock(&exchange->server->waiting.lock);
    bool abandoned = exchange->abandoned;
    (void)pthread_mutex_unlock(&exchange->server->waiting.lock);
    return abandoned;
}

void http_resume(struct http_exchange *exchange)
{
    struct http_waiting *waiting = &exchange->server->waiting;
    (void)pthread_mutex_lock(&waiting->lock);
    exchange->resumed = true;
    if (exchange->suspended)
        unsuspend(waiting, exchange);
    (void)pthread_mutex_unlock(&waiting->lock);
    http_exchange_drop(exchange);
}

bool http_wait_for_stream(struct http_waiting *waiting, struct MHD_Connection *connection,
                          void (*work)(void *context), void *context)
{
    (void)pthread_mutex_lock(&waiting->lock);
    bool queued = !waiting->cut_off && base_pool_submit(waiting->workers, work, context, NULL);
    if (queued)
        MHD_suspend_connection(connection);
    (void)pthread_mutex_unlock(&waiting->lock);
    return queued;
}

void http_stream_resume(struct http_waiting *waiting, struct MHD_Connection *connection)
{
    (void)pthread_mutex_lock(&waiting->lock);
    MHD_resume_connection(connection);
    (void)pthread_mutex_unlock(&waiting->lock);
}
