/* Token buckets, one a key, in bounded memory. */
#ifndef HTTP_LIMITS_H
#define HTTP_LIMITS_H

#include <stdbool.h>
#include <stddef.h>

#include "ebbmark/error.h"

struct http_limits;

/* Buckets that gain `rate` tokens a second up to `burst`. `slots` buckets are kept (rounded up to
 * whole sets); when more keys come, the bucket that is nearest to full gives way, since forgetting
 * a full one changes nothing. The caller frees it. */
bool http_limits_make(double rate, double burst, size_t slots, struct http_limits **out,
                      struct base_error *error);
void http_limits_free(struct http_limits *limits);

/* Take one token for the key at the time `now_s` (which never steps back). False when there is
 * none; then *wait_s is how long until there is. Thread-safe. NULL limits nothing. */
bool http_limits_take(struct http_limits *limits, const void *key, size_t size, double now_s,
                      double *wait_s);

#endif
