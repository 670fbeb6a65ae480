#include <errno.h>
#include <netdb.h>
#include <netinet/in.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <unistd.h>

#include "server.h"

#define BACKLOG 1024

/* "host:port" or "[host]:port" cut into two texts. */
static bool split(const char *where, char host[static 256], char port[static 8],
                  struct base_error *error)
{
    const char *colon = strrchr(where, ':');
    size_t length = colon == NULL ? 0 : (size_t)(colon - where);
    bool bracketed = length >= 2 && where[0] == '[' && where[length - 1] == ']';
    const char *start = bracketed ? where + 1 : where;
    if (bracketed)
        length -= 2;
    bool ok = colon != NULL && length > 0 && length < 256 && strlen(colon + 1) < 8 &&
              colon[1] != '\0' && colon[1 + strspn(colon + 1, "0123456789")] == '\0' &&
              strtoul(colon + 1, NULL, 10) <= UINT16_MAX;
    if (ok && !bracketed && memchr(start, ':', length) != NULL)
        ok = false;
    if (!ok)
        return base_fail(error, BASE_INVALID,
                         "\"%s\" is not an address to listen on; write HOST:PORT, for example "
                         "127.0.0.1:8080 or [::1]:8080.",
                         where);
    memcpy(host, start, length);
    host[length] = '\0';
    memcpy(port, colon + 1, strlen(colon + 1) + 1);
    return true;
}

static bool open_socket(const struct addrinfo *address, int *out)
{
    const int yes = 1, no = 0;
    int fd = socket(address->ai_family, SOCK_STREAM | SOCK_CLOEXEC | SOCK_NONBLOCK, 0);
    if (fd < 0)
        return false;
    bool ok = setsockopt(fd, SOL_SOCKET, SO_REUSEADDR, &yes, sizeof yes) == 0;
    if (ok && address->ai_family == AF_INET6)
        ok = setsockopt(fd, IPPROTO_IPV6, IPV6_V6ONLY, &no, sizeof no) == 0;
    ok = ok && bind(fd, address->ai_addr, address->ai_addrlen) == 0 && listen(fd, BACKLOG) == 0;
    if (!ok) {
        int saved = errno;
        (void)close(fd);
        errno = saved;
        return false;
    }
    *out = fd;
    return true;
}

static uint16_t port_of(int fd)
{
    union {
        struct sockaddr any;
        struct sockaddr_in four;
        struct sockaddr_in6 six;
    } address = {0};
    socklen_t size = sizeof address;
    if (getsockname(fd, &address.any, &size) != 0)
        return 0;
    return ntohs(address.any.sa_family == AF_INET6 ? address.six.sin6_port : address.four.sin_port);
}

bool http_listen(const char *where, int *fd, uint16_t *port, struct base_error *error)
{
    char host[256], service[8];
    if (!split(where, host, service, error))
        return false;
    const struct addrinfo hints = {.ai_family = AF_UNSPEC,
                                   .ai_socktype = SOCK_STREAM,
                                   .ai_flags = AI_PASSIVE | AI_NUMERICSERV};
    struct addrinfo *found = NULL;
    int failed = getaddrinfo(host, service, &hints, &found);
    if (failed != 0)
        return base_fail(error, BASE_INVALID, "The address %s to listen on is not known: %s.",
                         where, gai_strerror(failed));
    bool ok = open_socket(found, fd);
    if (!ok && errno == EADDRINUSE)
        (void)base_fail(error, BASE_CONFLICT,
                        "Another program listens on %s already; stop it or choose another port.",
                        where);
    else if (!ok)
        (void)base_fail_errno(error, errno, "Listening on %s", where);
    else
        *port = port_of(*fd);
    freeaddrinfo(found);
    return ok;
}
