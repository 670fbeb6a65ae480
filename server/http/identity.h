/* Whose secret is this: an answer remembered for a few seconds. */
#ifndef HTTP_IDENTITY_H
#define HTTP_IDENTITY_H

#include "ebbmark/http.h"

#define HTTP_IDENTITY_KEPT_S 5.0

struct http_identities;

bool http_identities_make(http_identify *identify, void *context, struct http_identities **out,
                          struct base_error *error);
void http_identities_free(struct http_identities *identities);

/* The identity behind a secret of at most HTTP_SECRET_MAX bytes; false when it is nobody's or its
 * end has passed. The secret itself is not kept, only a keyed hash of it. Thread-safe. */
bool http_identities_find(struct http_identities *identities, const char *secret, size_t length,
                          bool is_token, double now_s, struct http_identity *out);

/* Forget one person, or everybody (0). A find that asks at this moment is not remembered. */
void http_identities_forget(struct http_identities *identities, int64_t person);

#endif
