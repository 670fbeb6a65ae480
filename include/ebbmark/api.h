/*
 * The HTTP interface of a campaign: routes under /api/v1, the health and metrics addresses and the
 * pages of web/, on an HTTP server of its own.
 *
 * Threads: start and stop from one thread; requests are answered on the server's threads and on a
 * few workers of this room.
 */
#ifndef EBBMARK_API_H
#define EBBMARK_API_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/campaign.h"
#include "ebbmark/error.h"
#include "ebbmark/log.h"

struct api_server;

/* What a request may cost at most, unless the options say otherwise: requests a second, and how
 * many may come at once. Common practice, no source. */
#define API_PERSON_RATE 100.0
#define API_PERSON_BURST 1000.0
#define API_ADDRESS_RATE 100.0
#define API_ADDRESS_BURST 2000.0
/* Bytes of flux kept ready to be sent. */
#define API_FLUX_KEPT_BYTES ((size_t)128 << 20)

struct api_options {
    const char *listen;                 /* "127.0.0.1:8080", "[::1]:0" (0: any free port) */
    const char *tls_cert, *tls_key;     /* PEM files, or both NULL */
    const char *const *trusted_proxies; /* CIDRs, NULL-ended; NULL: none */
    double person_rate, person_burst;   /* 0: the defaults above; a negative rate: no limit */
    double address_rate, address_burst;
    size_t flux_kept_bytes;     /* 0: the default above */
    const struct base_log *log; /* outlives the campaign; may be NULL */
};

/* Listen and serve. BASE_CONFLICT when the address is taken, BASE_INVALID when it is none. The
 * caller stops it, before the campaign is closed. */
bool api_start(struct campaign *campaign, const struct api_options *options,
               struct api_server **out, struct base_error *error);
/* The port in use. */
uint16_t api_port(const struct api_server *server);
/* Stop accepting, let what is in flight finish for at most grace_s, free. A review that is still
 * waiting for the writer then is stored by campaign_close. */
void api_stop(struct api_server *server, double grace_s);

#endif
