/* The table of problems. */
#ifndef HTTP_PROBLEM_H
#define HTTP_PROBLEM_H

#include "ebbmark/http.h"

/* The row of a kind; the kind must be in the table. */
const struct http_problem_kind *http_problem_find(const char *kind);
/* {"type", "title", "status", "detail"} and "fields" when not NULL (its reference is taken). NULL
 * when out of memory. */
json_t *http_problem_json(const struct http_problem_kind *kind, const char *detail, json_t *fields);

#endif
