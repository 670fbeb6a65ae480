/*
 * One line a request, in the log's own format. Lines are gathered and written at most a second
 * later, a few kilobytes at a time, so that a busy server does not make a system call for each; a
 * killed process loses at most those. Failures are written at once.
 */
#ifndef HTTP_REQUEST_LOG_H
#define HTTP_REQUEST_LOG_H

#include <pthread.h>
#include <stdint.h>

#include "ebbmark/log.h"
#include "exchange.h"

/* A pipe takes so much in one piece (PIPE_BUF), so that lines of other writers cannot part ours. */
#define HTTP_LOG_PIECE 4096

struct http_request_log {
    const struct base_log *log;
    pthread_mutex_t lock; /* guards what follows */
    char piece[HTTP_LOG_PIECE];
    size_t used;
    int64_t second; /* whose text this is */
    char second_text[20];
};

void http_request_log_begin(struct http_request_log *log, const struct base_log *to);
void http_request_log_end(struct http_request_log *log);
/* Note a finished request; `cut` when the client did not get the whole answer. */
void http_request_log_note(struct http_request_log *log, const struct http_exchange *exchange,
                           double now_s, bool cut);
void http_request_log_flush(struct http_request_log *log);

#endif
