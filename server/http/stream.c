#include <assert.h>
#include <stdlib.h>
#include <string.h>

#include "answer.h"
#include "server.h"

#define BUFFER_SIZE 32768

/* A stream under way. For an HTTP_SLOW route next() runs on a worker, so that reading much from the
 * disk never holds up the server's own threads: the worker fills the buffer while the connection is
 * suspended. One thread at a time touches this; the suspension hands it over. */
struct stream {
    struct http_waiting *waiting;
    struct MHD_Connection *connection;
    long (*next)(void *state, char *buffer, size_t room);
    void (*done)(void *state);
    void *state;
    bool on_workers, ended, failed;
    size_t filled, given;
    char buffer[];
};

static void fill(void *context)
{
    struct stream *stream = context;
    long got = stream->next(stream->state, stream->buffer, BUFFER_SIZE);
    assert(got <= BUFFER_SIZE);
    stream->given = 0;
    stream->filled = got > 0 ? (size_t)got : 0;
    stream->ended = got == 0;
    stream->failed = got < 0;
    http_stream_resume(stream->waiting, stream->connection);
}

static ssize_t read_from_workers(struct stream *stream, char *buffer, size_t room)
{
    if (stream->given < stream->filled) {
        size_t left = stream->filled - stream->given;
        size_t size = left < room ? left : room;
        memcpy(buffer, stream->buffer + stream->given, size);
        stream->given += size;
        return (ssize_t)size;
    }
    if (stream->ended)
        return MHD_CONTENT_READER_END_OF_STREAM;
    if (stream->failed || !http_wait_for_stream(stream->waiting, stream->connection, fill, stream))
        return MHD_CONTENT_READER_END_WITH_ERROR;
    return 0;
}

static ssize_t read_stream(void *context, uint64_t position, char *buffer, size_t room)
{
    struct stream *stream = context;
    (void)position;
    if (stream->on_workers)
        return read_from_workers(stream, buffer, room);
    long got = stream->next(stream->state, buffer, room);
    assert(got <= (long)room);
    return got > 0    ? got
           : got == 0 ? MHD_CONTENT_READER_END_OF_STREAM
                      : MHD_CONTENT_READER_END_WITH_ERROR;
}

static void end_stream(void *context)
{
    struct stream *stream = context;
    if (stream->done != NULL)
        stream->done(stream->state);
    free(stream);
}

enum http_result http_answer_stream(struct http_exchange *exchange, unsigned status,
                                    const char *media_type,
                                    long (*next)(void *state, char *buffer, size_t room),
                                    void (*done)(void *state), void *state)
{
    bool on_workers = (exchange->route->flags & HTTP_SLOW) != 0;
    struct stream *stream = malloc(sizeof *stream + (on_workers ? BUFFER_SIZE : 0));
    struct MHD_Response *response = NULL;
    if (stream != NULL) {
        *stream = (struct stream){.waiting = &exchange->server->waiting,
                                  .connection = exchange->connection,
                                  .next = next,
                                  .done = done,
                                  .state = state,
                                  .on_workers = on_workers};
        response = MHD_create_response_from_callback(MHD_SIZE_UNKNOWN, BUFFER_SIZE, read_stream,
                                                     stream, end_stream);
    }
    /* The library would send the last chunk of a body even to HEAD, which has none; without chunks
     * it does not, and then the connection must end. */
    if (response != NULL && exchange->is_head)
        (void)MHD_set_response_options(response, MHD_RF_HTTP_1_0_COMPATIBLE_STRICT, MHD_RO_END);
    if (response == NULL) {
        if (done != NULL)
            done(state);
        free(stream);
    }
    http_response_header(exchange, response, "Content-Type", media_type);
    http_answer_set(exchange, status, response);
    return HTTP_ANSWERED;
}
