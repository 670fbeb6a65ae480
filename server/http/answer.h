/* Building answers. */
#ifndef HTTP_ANSWER_H
#define HTTP_ANSWER_H

#include "exchange.h"

#define HTTP_GZIP_FROM 1024u /* bytes; smaller bodies are not worth compressing */

/* Put the headers that every answer carries on a response. False: out of memory. */
bool http_answer_standing_headers(struct MHD_Response *response);
/* The compressed form (gzip, level 1 to 9) in malloc'd memory; NULL when that failed or is not
 * smaller. */
void *http_gzip(const void *data, size_t size, int level, size_t *out_size);
/* Finish the answer: standing headers, the request's id, those asked for. Takes the response (NULL:
 * it could not be made). Whatever fails, an answer stands afterwards. */
void http_answer_set(struct http_exchange *exchange, unsigned status,
                     struct MHD_Response *response);
/* A header of a response under construction; remembers a failure in the exchange. */
void http_response_header(struct http_exchange *exchange, struct MHD_Response *response,
                          const char *name, const char *value);
/* The answer for when no other can be made; built at the start. NULL when out of memory. */
struct MHD_Response *http_answer_last_resort(const char *kind);

#endif
