/* What embed-web.sh puts into the program: the files of web/, and openapi.json. */
#ifndef API_EMBEDDED_H
#define API_EMBEDDED_H

#include "ebbmark/http.h"

extern const struct http_static_file web_files[];
extern const size_t web_file_count;

extern const struct http_static_file api_description;

#endif
