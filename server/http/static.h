/* The files of web/, from the table that the program carries; never the file system. */
#ifndef HTTP_STATIC_H
#define HTTP_STATIC_H

#include "ebbmark/http.h"
#include "uri.h"

struct http_statics;

bool http_statics_make(const struct http_static_file *files, size_t count,
                       struct http_statics **out, struct base_error *error);
void http_statics_free(struct http_statics *statics);
/* "/" is /index.html and "/x" is /x.html when there is no /x; else the file of exactly that path.
 * NULL when there is none. The body belongs to the table. */
struct http_kept_body *http_statics_find(const struct http_statics *statics,
                                         const struct http_target *target);

#endif
