/* A small HTTP client for rehearsal reviewers, over libcurl: one person's session. One thread. */
#ifndef CAMPAIGN_REHEARSE_CLIENT_H
#define CAMPAIGN_REHEARSE_CLIENT_H

#include <curl/curl.h>
#include <jansson.h>
#include <stdbool.h>
#include <stddef.h>

#include "ebbmark/error.h"
#include "ebbmark/text.h"

struct rehearse_client {
    CURL *curl; /* keeps the connection and the session cookie */
    const char *server;
    struct base_text body; /* of the last answer */
    long status;           /* of the last answer */
    double retry_after_s;  /* its Retry-After, or 0 */
};

/* The caller closes it. BASE_MEMORY. */
bool rehearse_client_open(struct rehearse_client *client, const char *server,
                          struct base_error *error);
void rehearse_client_close(struct rehearse_client *client);

/* Send one request and read the whole answer (at most 64 MiB). `json` may be NULL (no body); `key`
 * is an Idempotency-Key or NULL. 429 and 503 are waited out and sent again, a lost connection a few
 * times too, so that a true return means that some other answer came. BASE_IO otherwise. */
bool rehearse_client_send(struct rehearse_client *client, const char *method, const char *path,
                          const json_t *json, const char *key, struct base_error *error);

#endif
