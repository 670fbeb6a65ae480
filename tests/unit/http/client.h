/*
 * A small HTTP client over a raw socket for the tests of the server, so that they can send what no
 * library would: half requests, wrong ones, several at once.
 */
#ifndef TESTS_HTTP_CLIENT_H
#define TESTS_HTTP_CLIENT_H

#include <arpa/inet.h>
#include <errno.h>
#include <netinet/in.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <sys/socket.h>
#include <sys/time.h>
#include <unistd.h>

#include "ebbmark/http.h"

#define CLIENT_ROOM (4u * 1024u * 1024u)
#define CLIENT_PATIENCE_S 20

/* One connection and what has arrived on it beyond the answers read so far. */
struct client {
    int fd;
    char *data;
    size_t size;
};

struct reply {
    unsigned status; /* 0: the connection ended before a whole answer */
    char *head;      /* NUL-terminated, with the line ends */
    char *body;      /* NUL-terminated, chunks joined */
    size_t size;
    bool cut; /* it ended within the body */
};

static inline struct client client_dial(uint16_t port)
{
    const struct sockaddr_in address = {
        .sin_family = AF_INET, .sin_port = htons(port), .sin_addr.s_addr = htonl(INADDR_LOOPBACK)};
    const struct timeval patience = {.tv_sec = CLIENT_PATIENCE_S};
    struct client client = {.fd = socket(AF_INET, SOCK_STREAM | SOCK_CLOEXEC, 0)};
    client.data = malloc(CLIENT_ROOM);
    if (client.fd < 0 || client.data == NULL ||
        setsockopt(client.fd, SOL_SOCKET, SO_RCVTIMEO, &patience, sizeof patience) != 0 ||
        setsockopt(client.fd, SOL_SOCKET, SO_SNDTIMEO, &patience, sizeof patience) != 0 ||
        connect(client.fd, (const struct sockaddr *)&address, sizeof address) != 0) {
        perror("dialling the server");
        abort();
    }
    return client;
}

static inline void client_close(struct client *client)
{
    (void)close(client->fd);
    free(client->data);
    *client = (struct client){.fd = -1};
}

/* False when the server has closed its end. */
static inline bool client_send(struct client *client, const void *data, size_t size)
{
    const char *at = data;
    while (size > 0) {
        ssize_t sent = send(client->fd, at, size, MSG_NOSIGNAL);
        if (sent <= 0)
            return false;
        at += sent;
        size -= (size_t)sent;
    }
    return true;
}

static inline bool client_say(struct client *client, const char *format, ...)
    __attribute__((format(printf, 2, 3)));
static inline bool client_say(struct client *client, const char *format, ...)
{
    char *text = NULL;
    va_list list;
    va_start(list, format);
    int length = vasprintf(&text, format, list);
    va_end(list);
    bool sent = length >= 0 && client_send(client, text, (size_t)length);
    free(text);
    return sent;
}

/* Wait for more bytes; false at the end, on a reset and when patience is over. */
static inline bool client_hear(struct client *client)
{
    if (client->size == CLIENT_ROOM - 1)
        return false;
    ssize_t got = recv(client->fd, client->data + client->size, CLIENT_ROOM - 1 - client->size, 0);
    if (got <= 0)
        return false;
    client->size += (size_t)got;
    return true;
}

static inline void client_consume(struct client *client, size_t size)
{
    memmove(client->data, client->data + size, client->size - size);
    client->size -= size;
}

/* The value of a header of a reply, copied into `out`; false when it is not there. */
static inline bool reply_header(const struct reply *reply, const char *name, char *out, size_t room)
{
    size_t length = strlen(name);
    for (const char *line = reply->head; line != NULL && *line != '\0';) {
        if (strncasecmp(line, name, length) == 0 && line[length] == ':') {
            const char *value = line + length + 1 + strspn(line + length + 1, " ");
            (void)snprintf(out, room, "%.*s", (int)strcspn(value, "\r\n"), value);
            return true;
        }
        line = strstr(line, "\r\n");
        if (line != NULL)
            line += 2;
    }
    return false;
}

static inline bool reply_has(const struct reply *reply, const char *name, const char *value)
{
    char found[2048];
    return reply_header(reply, name, found, sizeof found) && strcmp(found, value) == 0;
}

/* Read `size` bytes of body, or all until the end when it is not known. */
static inline void reply_read_plain(struct client *client, struct reply *reply, size_t size,
                                    bool known)
{
    while ((!known || client->size < size) && client_hear(client))
        ;
    reply->cut = known && client->size < size;
    reply->size = !known || reply->cut ? client->size : size;
    reply->body = calloc(1, reply->size + 1);
    memcpy(reply->body, client->data, reply->size);
    client_consume(client, reply->size);
}

static inline void reply_read_chunks(struct client *client, struct reply *reply)
{
    reply->body = calloc(1, CLIENT_ROOM);
    for (;;) {
        char *end;
        while ((end = memmem(client->data, client->size, "\r\n", 2)) == NULL)
            if (!client_hear(client)) {
                reply->cut = true;
                return;
            }
        size_t chunk = strtoul(client->data, NULL, 16);
        client_consume(client, (size_t)(end + 2 - client->data));
        while (client->size < chunk + 2)
            if (!client_hear(client)) {
                reply->cut = true;
                return;
            }
        memcpy(reply->body + reply->size, client->data, chunk);
        reply->size += chunk;
        client_consume(client, chunk + 2);
        if (chunk == 0)
            return;
    }
}

/* Read the next answer. `bodiless` for answers to HEAD. */
static inline struct reply client_read(struct client *client, bool bodiless)
{
    struct reply reply = {0};
    char *end, text[64];
    while ((end = memmem(client->data, client->size, "\r\n\r\n", 4)) == NULL)
        if (!client_hear(client)) {
            reply.head = calloc(1, 1);
            reply.body = calloc(1, 1);
            return reply;
        }
    size_t head = (size_t)(end + 4 - client->data);
    reply.head = calloc(1, head + 1);
    memcpy(reply.head, client->data, head);
    reply.status = (unsigned)strtoul(reply.head + strcspn(reply.head, " "), NULL, 10);
    client_consume(client, head);
    if (bodiless || reply.status == 204 || reply.status == 304 || reply.status < 200)
        reply.body = calloc(1, 1);
    else if (reply_has(&reply, "Transfer-Encoding", "chunked"))
        reply_read_chunks(client, &reply);
    else if (reply_header(&reply, "Content-Length", text, sizeof text))
        reply_read_plain(client, &reply, strtoul(text, NULL, 10), true);
    else
        reply_read_plain(client, &reply, 0, false);
    return reply;
}

static inline void reply_free(struct reply *reply)
{
    free(reply->head);
    free(reply->body);
    *reply = (struct reply){0};
}

/* Has the server closed its end (within the client's patience)? */
static inline bool client_is_closed(struct client *client)
{
    char byte;
    ssize_t got = recv(client->fd, &byte, 1, 0);
    return got == 0 || (got < 0 && (errno == ECONNRESET || errno == EPIPE));
}

/* A request without a body, with more header lines ("A: b\r\n") or "". */
static inline struct reply client_ask(struct client *client, const char *method, const char *target,
                                      const char *headers)
{
    (void)client_say(client, "%s %s HTTP/1.1\r\nHost: localhost\r\n%s\r\n", method, target,
                     headers);
    return client_read(client, strcmp(method, "HEAD") == 0);
}

static inline struct reply client_post(struct client *client, const char *target,
                                       const char *headers, const char *body)
{
    (void)client_say(client,
                     "POST %s HTTP/1.1\r\nHost: localhost\r\nContent-Length: %zu\r\n%s\r\n%s",
                     target, strlen(body), headers, body);
    return client_read(client, false);
}

/* The same on a connection of its own. */
static inline struct reply ask_once(uint16_t port, const char *method, const char *target,
                                    const char *headers)
{
    struct client client = client_dial(port);
    struct reply reply = client_ask(&client, method, target, headers);
    client_close(&client);
    return reply;
}

/* Check that a reply is that problem, whole and well-formed; 0 is no status. */
static inline bool reply_is_problem(const struct reply *reply, unsigned status, const char *kind)
{
    char type[128];
    (void)snprintf(type, sizeof type, "/problems/%s", kind);
    json_t *problem = json_loads(reply->body, 0, NULL);
    bool is = reply->status == status &&
              reply_has(reply, "Content-Type", "application/problem+json") &&
              json_is_object(problem) &&
              strcmp(json_string_value(json_object_get(problem, "type")), type) == 0 &&
              json_integer_value(json_object_get(problem, "status")) == (json_int_t)status &&
              json_string_length(json_object_get(problem, "title")) > 0 &&
              json_string_length(json_object_get(problem, "detail")) > 0;
    if (!is)
        (void)fprintf(stderr, "wanted %u %s, got %s%s\n", status, kind, reply->head, reply->body);
    json_decref(problem);
    return is;
}

/* A server on a free port of loopback, or the end of the test program. */
static inline struct http_server *server_begin(const struct http_options *options)
{
    struct http_server *server = NULL;
    struct base_error error = {0};
    if (!http_start(options, &server, &error)) {
        (void)fprintf(stderr, "the server does not start: %s\n", error.sentence);
        abort();
    }
    return server;
}

#endif
