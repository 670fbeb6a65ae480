/* Addresses, and the proxies that may speak for one. */
#ifndef HTTP_PROXY_H
#define HTTP_PROXY_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <sys/socket.h>

#include "ebbmark/error.h"

/* An IPv6 address; an IPv4 one is mapped (::ffff:a.b.c.d), so that both compare alike. */
struct http_ip {
    uint8_t bytes[16];
};

#define HTTP_IP_SIZE 48 /* of the longest text */

/* False for a family that is neither. */
bool http_ip_of_socket(const struct sockaddr *address, struct http_ip *out);
/* One address: "192.0.2.7", "2001:db8::1"; with a port as proxies write it: "192.0.2.7:4711",
 * "[2001:db8::1]:4711". False for anything else. */
bool http_ip_read(const char *text, size_t length, struct http_ip *out);
/* IPv4 in its usual form. Returns `buffer` of HTTP_IP_SIZE bytes. */
char *http_ip_write(const struct http_ip *ip, char *buffer);
bool http_ip_is_loopback(const struct http_ip *ip);
/* What one customer of a network has: an IPv4 address, or the first 64 bits of an IPv6 one. */
struct http_ip http_ip_household(const struct http_ip *ip);

/* Networks in CIDR notation. */
struct http_networks {
    struct http_network {
        struct http_ip base;
        unsigned bits; /* of the 128 */
    } * list;
    size_t count;
};

/* Read a NULL-ended list (NULL: none). The caller frees it with http_networks_free. */
bool http_networks_read(const char *const *texts, struct http_networks *out,
                        struct base_error *error);
void http_networks_free(struct http_networks *networks);
bool http_networks_hold(const struct http_networks *networks, const struct http_ip *ip);

/* The client behind trusted proxies: from the right of an X-Forwarded-For header, the first address
 * that is not a trusted proxy's; the leftmost when all are; `peer` when the header cannot be read
 * or the peer is not trusted. */
struct http_ip http_client_ip(const struct http_networks *trusted, const struct http_ip *peer,
                              const char *forwarded_for);

#endif
