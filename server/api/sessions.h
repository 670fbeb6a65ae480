#ifndef API_SESSIONS_H
#define API_SESSIONS_H

#include "inside.h"

/* Give this person a new session and set its cookie on the answer that follows. */
bool api_session_start(struct http_exchange *exchange, struct api_server *api,
                       const struct store_person *person, struct base_error *error);

#endif
