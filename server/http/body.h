/* Reading request bodies. */
#ifndef HTTP_BODY_H
#define HTTP_BODY_H

#include "exchange.h"

/* What is read and thrown away after a refusal, to keep the connection: of a body of known length,
 * and of one without. */
#define HTTP_DRAIN_KNOWN (1024u * 1024u)
#define HTTP_DRAIN_CHUNKED (16u * 1024u * 1024u)

/* From the head alone: may this route take the body that is announced? Answers a problem and
 * returns false when not. */
bool http_body_admit(struct http_exchange *exchange);
/* How the rest of a refused request is treated. */
void http_body_plan_refusal(struct http_exchange *exchange);
/* Some bytes of it. False: give the connection up. */
bool http_body_take(struct http_exchange *exchange, const char *data, size_t size, double now_s);
void http_body_free(struct http_exchange *exchange);

#endif
