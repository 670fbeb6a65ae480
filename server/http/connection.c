#include "connection.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <sys/socket.h>
#include <unistd.h>

#define LINGER_S 2.0

void http_connections_begin(struct http_connections *connections)
{
    (void)pthread_mutex_init(&connections->lock, NULL);
}

void http_connections_end(struct http_connections *connections)
{
    for (size_t i = 0; i < connections->lingering_count; i++)
        (void)close(connections->lingering[i].fd);
    (void)pthread_mutex_destroy(&connections->lock);
}

struct http_connection *http_connection_opened(struct http_connections *connections, int fd,
                                               const struct sockaddr *peer, double now_s)
{
    struct http_connection *connection = calloc(1, sizeof *connection);
    if (connection == NULL || !http_ip_of_socket(peer, &connection->peer)) {
        free(connection);
        return NULL;
    }
    connection->fd = fd;
    atomic_store(&connection->idle_from_s, now_s);
    (void)pthread_mutex_lock(&connections->lock);
    connection->older = connections->newest;
    if (connection->older != NULL)
        connection->older->newer = connection;
    connections->newest = connection;
    connections->count++;
    (void)pthread_mutex_unlock(&connections->lock);
    return connection;
}

/* Keep a second descriptor of the socket; when the list is full or there is none, the close is an
 * ordinary one. */
static void linger(struct http_connections *connections, int fd, double now_s)
{
    if (connections->lingering_count == HTTP_LINGER_MAX)
        return;
    int second = fcntl(fd, F_DUPFD_CLOEXEC, 0);
    if (second >= 0)
        connections->lingering[connections->lingering_count++] =
            (struct http_lingering){second, now_s + LINGER_S};
}

void http_connection_closed(struct http_connections *connections,
                            struct http_connection *connection, double now_s)
{
    if (connection == NULL)
        return;
    (void)pthread_mutex_lock(&connections->lock);
    if (connection->linger)
        linger(connections, connection->fd, now_s);
    if (connection->older != NULL)
        connection->older->newer = connection->newer;
    if (connection->newer != NULL)
        connection->newer->older = connection->older;
    else
        connections->newest = connection->older;
    connections->count--;
    (void)pthread_mutex_unlock(&connections->lock);
    free(connection);
}

/* Throw away what has arrived; false once the other side is done or has gone. */
static bool read_away(int fd)
{
    char waste[16384];
    for (unsigned turn = 0; turn < 256; turn++) {
        ssize_t got = recv(fd, waste, sizeof waste, MSG_DONTWAIT);
        if (got == 0)
            return false;
        if (got < 0)
            return errno == EAGAIN || errno == EWOULDBLOCK || errno == EINTR;
    }
    return true;
}

bool http_connections_sweep(struct http_connections *connections, double now_s, double most_s)
{
    (void)pthread_mutex_lock(&connections->lock);
    for (struct http_connection *at = connections->newest; at != NULL; at = at->older)
        if (!atomic_load(&at->busy) && now_s - atomic_load(&at->idle_from_s) > most_s)
            (void)shutdown(at->fd, SHUT_RDWR);
    for (size_t i = 0; i < connections->lingering_count;) {
        struct http_lingering *one = &connections->lingering[i];
        if (now_s < one->until_s && read_away(one->fd)) {
            i++;
            continue;
        }
        (void)close(one->fd);
        *one = connections->lingering[--connections->lingering_count];
    }
    bool any = connections->lingering_count > 0;
    (void)pthread_mutex_unlock(&connections->lock);
    return any;
}

size_t http_connections_count(struct http_connections *connections)
{
    (void)pthread_mutex_lock(&connections->lock);
    size_t count = connections->count;
    (void)pthread_mutex_unlock(&connections->lock);
    return count;
}
