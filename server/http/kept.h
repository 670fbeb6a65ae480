/* Kept bodies: how an exchange sends one. */
#ifndef HTTP_KEPT_H
#define HTTP_KEPT_H

#include "exchange.h"

/*
 * The library's response object with all its headers, built once. It can only be on one wire at a
 * time, because one header, the request's id, differs from answer to answer; so a body has a few of
 * them and an exchange borrows one.
 */
struct http_shell {
    struct http_shell *next;
    struct MHD_Response *response;
    bool is_gzip;
    char id[17]; /* in its Ebbmark-Request-Id */
};

/* A kept body over bytes that outlive it, with a compressed form made by somebody else or NULL. */
struct http_kept_body *http_kept_borrow(const struct http_static_file *file,
                                        const char *cache_control);
/* Lend a shell to the exchange, which holds the body until http_kept_give_back. False when out of
 * memory. */
bool http_kept_lend(struct http_kept_body *body, struct http_exchange *exchange);
void http_kept_give_back(struct http_exchange *exchange);

#endif
