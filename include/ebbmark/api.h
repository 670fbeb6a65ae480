/*
 * The campaign over HTTP: every resource of the interface, and the pages.
 */
#ifndef EBBMARK_API_H
#define EBBMARK_API_H

#include <stdint.h>

#include "ebbmark/campaign.h"

struct api_server;

struct api_options {
    const char *listen;                 /* "127.0.0.1:8080"; port 0: any free one */
    const char *tls_cert, *tls_key;     /* PEM files, or NULL */
    const char *const *trusted_proxies; /* CIDRs, NULL-ended; NULL: none */
    const struct base_log *log;
};

/* Serve the campaign, which must outlive the server. The caller stops it. BASE_CONFLICT when the
 * address is taken. */
bool api_start(struct campaign *campaign, const struct api_options *options,
               struct api_server **out, struct base_error *error);
uint16_t api_port(const struct api_server *server);
/* Let what is in flight finish for at most grace_s, then stop and free. */
void api_stop(struct api_server *server, double grace_s);

#endif
