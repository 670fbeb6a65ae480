#include "connection.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <time.h>
#include <unistd.h>

#include "ebbmark/clock.h"

#define LINGER_S 2.0
#define LINGER_TURN_MS 20

void http_connections_begin(struct http_connections *connections)
{
    pthread_condattr_t monotonic;
    (void)pthread_mutex_init(&connections->lock, NULL);
    (void)pthread_condattr_init(&monotonic);
    (void)pthread_condattr_setclock(&monotonic, CLOCK_MONOTONIC);
    (void)pthread_cond_init(&connections->wake, &monotonic);
    (void)pthread_condattr_destroy(&monotonic);
}

void http_connections_end(struct http_connections *connections)
{
    for (size_t i = 0; i < connections->lingering_count; i++)
        (void)close(connections->lingering[i].fd);
    (void)pthread_cond_destroy(&connections->wake);
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

static bool has_unread(int fd)
{
    char byte;
    return recv(fd, &byte, 1, MSG_PEEK | MSG_DONTWAIT) > 0;
}

/* The lock is held. Keep a second descriptor of the socket; where there is no room for it the one
 * that has lingered longest goes, and where there is no descriptor the close is an ordinary one. */
static void linger(struct http_connections *connections, int fd, double now_s)
{
    int second = fcntl(fd, F_DUPFD_CLOEXEC, 0);
    if (second < 0)
        return;
    if (connections->lingering_count == HTTP_LINGER_MAX) {
        (void)close(connections->lingering[0].fd);
        memmove(connections->lingering, connections->lingering + 1,
                (HTTP_LINGER_MAX - 1) * sizeof connections->lingering[0]);
        connections->lingering_count--;
    }
    connections->lingering[connections->lingering_count++] =
        (struct http_lingering){second, now_s + LINGER_S};
    (void)pthread_cond_signal(&connections->wake);
}

void http_connection_closed(struct http_connections *connections,
                            struct http_connection *connection, double now_s)
{
    if (connection == NULL)
        return;
    (void)pthread_mutex_lock(&connections->lock);
    if (connection->linger || has_unread(connection->fd))
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

/* The lock is held. */
static void tend_lingering(struct http_connections *connections, double now_s)
{
    size_t kept = 0;
    for (size_t i = 0; i < connections->lingering_count; i++) {
        struct http_lingering one = connections->lingering[i];
        if (now_s < one.until_s && read_away(one.fd))
            connections->lingering[kept++] = one;
        else
            (void)close(one.fd);
    }
    connections->lingering_count = kept;
}

/* The lock is held. Wait for `most_ms`, or until somebody lingers or the end comes. */
static void wait_a_while(struct http_connections *connections, long most_ms)
{
    struct timespec until;
    (void)clock_gettime(CLOCK_MONOTONIC, &until);
    until.tv_nsec += most_ms % 1000 * 1000000;
    until.tv_sec += most_ms / 1000 + until.tv_nsec / 1000000000;
    until.tv_nsec %= 1000000000;
    (void)pthread_cond_timedwait(&connections->wake, &connections->lock, &until);
}

bool http_connections_tend(struct http_connections *connections, double most_s)
{
    (void)pthread_mutex_lock(&connections->lock);
    if (!connections->ends)
        wait_a_while(connections, connections->lingering_count > 0 ? LINGER_TURN_MS : 1000);
    double now_s = base_clock_monotonic_s();
    tend_lingering(connections, now_s);
    if (now_s >= connections->next_sweep_s) {
        connections->next_sweep_s = now_s + 1.0;
        for (struct http_connection *at = connections->newest; at != NULL; at = at->older)
            if (!atomic_load(&at->busy) && now_s - atomic_load(&at->idle_from_s) > most_s)
                (void)shutdown(at->fd, SHUT_RDWR);
    }
    bool ends = connections->ends;
    (void)pthread_mutex_unlock(&connections->lock);
    return !ends;
}

void http_connections_wake_for_end(struct http_connections *connections)
{
    (void)pthread_mutex_lock(&connections->lock);
    connections->ends = true;
    (void)pthread_cond_signal(&connections->wake);
    (void)pthread_mutex_unlock(&connections->lock);
}

size_t http_connections_count(struct http_connections *connections)
{
    (void)pthread_mutex_lock(&connections->lock);
    size_t count = connections->count;
    (void)pthread_mutex_unlock(&connections->lock);
    return count;
}
