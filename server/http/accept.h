/* Content negotiation: the Accept and Accept-Encoding headers (RFC 9110, 12.5). */
#ifndef HTTP_ACCEPT_H
#define HTTP_ACCEPT_H

#include <stdbool.h>
#include <stddef.h>

/* Which of `types` an Accept header (NULL: none was sent) prefers: the highest quality, and among
 * equals the earliest of `types`. The most specific range that fits a type decides its quality. -1
 * when it allows none of them. What cannot be read in the header is passed over. */
int http_accept_pick(const char *header, const char *const *types, size_t count);

/* May the answer be compressed by gzip? */
bool http_accept_gzip(const char *header);

/* Is `etag` (quoted) among those of an If-None-Match header, by weak comparison? "*" fits all. */
bool http_etag_is_listed(const char *header, const char *etag);

#endif
