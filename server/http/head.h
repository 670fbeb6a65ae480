/* Reading the head of a request. */
#ifndef HTTP_HEAD_H
#define HTTP_HEAD_H

#include "exchange.h"

/* Below what the library has room for, so that the refusal is ours. */
#define HTTP_HEAD_MAX 8192    /* bytes of all header fields */
#define HTTP_HEADERS_MAX 100  /* header fields */
#define HTTP_ADDRESS_MAX 4096 /* bytes of the target */

/* Find the header fields that this room reads, check the framing of the body, cut the target up.
 * Answers a problem and returns false when something is wrong. */
bool http_head_read(struct http_exchange *exchange, const char *version);

#endif
