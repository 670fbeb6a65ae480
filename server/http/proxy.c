#include "proxy.h"

#include <arpa/inet.h>
#include <netinet/in.h>
#include <stdlib.h>
#include <string.h>

static const uint8_t mapped_prefix[12] = {0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0xff, 0xff};

static bool is_mapped(const struct http_ip *ip)
{
    return memcmp(ip->bytes, mapped_prefix, sizeof mapped_prefix) == 0;
}

static void map_ipv4(const void *four_bytes, struct http_ip *out)
{
    memcpy(out->bytes, mapped_prefix, sizeof mapped_prefix);
    memcpy(out->bytes + sizeof mapped_prefix, four_bytes, 4);
}

bool http_ip_of_socket(const struct sockaddr *address, struct http_ip *out)
{
    if (address == NULL)
        return false;
    if (address->sa_family == AF_INET) {
        struct sockaddr_in four;
        memcpy(&four, address, sizeof four);
        map_ipv4(&four.sin_addr, out);
        return true;
    }
    if (address->sa_family == AF_INET6) {
        struct sockaddr_in6 six;
        memcpy(&six, address, sizeof six);
        memcpy(out->bytes, &six.sin6_addr, sizeof out->bytes);
        return true;
    }
    return false;
}

/* The address alone, without a port. */
static bool read_bare(const char *text, struct http_ip *out)
{
    struct in_addr four;
    if (inet_pton(AF_INET, text, &four) == 1) {
        map_ipv4(&four, out);
        return true;
    }
    return inet_pton(AF_INET6, text, out->bytes) == 1;
}

bool http_ip_read(const char *text, size_t length, struct http_ip *out)
{
    char copy[HTTP_IP_SIZE + 16];
    if (length == 0 || length >= sizeof copy)
        return false;
    memcpy(copy, text, length);
    copy[length] = '\0';
    char *start = copy;
    if (copy[0] == '[') {
        char *close = strchr(copy, ']');
        if (close == NULL || (close[1] != '\0' && close[1] != ':'))
            return false;
        *close = '\0';
        start = copy + 1;
    } else {
        char *colon = strchr(copy, ':');
        if (colon != NULL && strchr(colon + 1, ':') == NULL)
            *colon = '\0';
    }
    return read_bare(start, out);
}

char *http_ip_write(const struct http_ip *ip, char *buffer)
{
    const char *written = is_mapped(ip) ? inet_ntop(AF_INET, ip->bytes + 12, buffer, HTTP_IP_SIZE)
                                        : inet_ntop(AF_INET6, ip->bytes, buffer, HTTP_IP_SIZE);
    if (written == NULL)
        buffer[0] = '\0';
    return buffer;
}

bool http_ip_is_loopback(const struct http_ip *ip)
{
    static const uint8_t six[16] = {[15] = 1};
    return is_mapped(ip) ? ip->bytes[12] == 127 : memcmp(ip->bytes, six, sizeof six) == 0;
}

struct http_ip http_ip_household(const struct http_ip *ip)
{
    struct http_ip out = *ip;
    if (!is_mapped(ip))
        memset(out.bytes + 8, 0, 8);
    return out;
}

static bool network_read(const char *text, struct http_network *out, struct base_error *error)
{
    const char *slash = strchr(text, '/');
    size_t length = slash == NULL ? strlen(text) : (size_t)(slash - text);
    char address[HTTP_IP_SIZE] = "";
    bool ok = length > 0 && length < sizeof address;
    if (ok) {
        memcpy(address, text, length);
        address[length] = '\0';
        ok = read_bare(address, &out->base);
    }
    unsigned long most = ok && strchr(address, ':') == NULL ? 32 : 128;
    unsigned long bits = most;
    if (ok && slash != NULL) {
        char *end = NULL;
        bits = strtoul(slash + 1, &end, 10);
        ok = slash[1] >= '0' && slash[1] <= '9' && *end == '\0' && bits <= most;
    }
    if (!ok)
        return base_fail(error, BASE_INVALID,
                         "\"%s\" is not a network; write an address and, after a slash, how many "
                         "bits of it count, for example 10.0.0.0/8.",
                         text);
    out->bits = (unsigned)(bits + (128 - most));
    return true;
}

bool http_networks_read(const char *const *texts, struct http_networks *out,
                        struct base_error *error)
{
    *out = (struct http_networks){0};
    size_t count = 0;
    while (texts != NULL && texts[count] != NULL)
        count++;
    if (count == 0)
        return true;
    out->list = calloc(count, sizeof *out->list);
    if (out->list == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the list of proxies.");
    bool ok = true;
    for (; ok && out->count < count; out->count++)
        ok = network_read(texts[out->count], &out->list[out->count], error);
    if (!ok)
        http_networks_free(out);
    return ok;
}

void http_networks_free(struct http_networks *networks)
{
    free(networks->list);
    *networks = (struct http_networks){0};
}

static bool network_holds(const struct http_network *network, const struct http_ip *ip)
{
    unsigned whole = network->bits / 8, rest = network->bits % 8;
    if (memcmp(network->base.bytes, ip->bytes, whole) != 0)
        return false;
    unsigned mask = 0xffu & (0xff00u >> rest);
    return rest == 0 || ((network->base.bytes[whole] ^ ip->bytes[whole]) & mask) == 0;
}

bool http_networks_hold(const struct http_networks *networks, const struct http_ip *ip)
{
    for (size_t i = 0; i < networks->count; i++)
        if (network_holds(&networks->list[i], ip))
            return true;
    return false;
}

struct http_ip http_client_ip(const struct http_networks *trusted, const struct http_ip *peer,
                              const char *forwarded_for)
{
    struct http_ip client = *peer;
    if (forwarded_for == NULL)
        return client;
    size_t end = strlen(forwarded_for);
    while (http_networks_hold(trusted, &client)) {
        size_t start = end;
        while (start > 0 && forwarded_for[start - 1] != ',')
            start--;
        size_t from = start, to = end;
        while (from < to && (forwarded_for[from] == ' ' || forwarded_for[from] == '\t'))
            from++;
        while (to > from && (forwarded_for[to - 1] == ' ' || forwarded_for[to - 1] == '\t'))
            to--;
        struct http_ip named;
        if (!http_ip_read(forwarded_for + from, to - from, &named))
            break;
        client = named;
        if (start == 0)
            break;
        end = start - 1;
    }
    return client;
}
