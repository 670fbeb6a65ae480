/* Finding a secret in the Cookie and Authorization headers. */
#ifndef HTTP_COOKIE_H
#define HTTP_COOKIE_H

#include <stdbool.h>
#include <stddef.h>

#define HTTP_SECRET_MAX 256 /* longer ones are nobody's */

/* The value of the first cookie of that name in a Cookie header (RFC 6265, 4.2.1), not
 * NUL-terminated. False when there is none, it is empty, too long or holds what a cookie must not.
 */
bool http_cookie_find(const char *header, const char *name, const char **value, size_t *length);

/* The token of "Bearer <token>" (RFC 6750, 2.1; the scheme in any case). */
bool http_bearer_find(const char *header, const char **token, size_t *length);

#endif
