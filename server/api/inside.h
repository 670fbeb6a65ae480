/* What the resources share. The handlers' context is a struct api_server. */
#ifndef API_INSIDE_H
#define API_INSIDE_H

#include <jansson.h>

#include "ebbmark/api.h"
#include "ebbmark/http.h"
#include "flux_cache.h"

struct api_server {
    struct campaign *campaign;
    struct http_server *http;
    struct flux_cache *flux;
    const struct base_log *log;
    double began_s;
};

/* One table a resource, beside its handlers; ended by a NULL method. */
extern const struct http_route api_people_routes[], api_sessions_routes[], api_me_routes[],
    api_leases_routes[], api_segments_routes[], api_reviews_routes[], api_candidates_routes[],
    api_verdicts_routes[], api_stars_routes[], api_reviewers_routes[], api_consensus_runs_routes[],
    api_batches_routes[], api_settings_routes[], api_health_routes[], api_openapi_routes[],
    api_problems_routes[];
extern const struct http_route *const api_routes[];

/* Embedded at build time. */
extern const struct http_static_file web_files[];
extern const size_t web_file_count;
extern const char openapi_text[];
extern const size_t openapi_size;

/* ---- JSON ---- */

json_t *json_time(int64_t unix_ms);  /* RFC 3339 text; null for 0 */
json_t *json_number(double value);   /* null for what is not finite */
json_t *json_text(const char *text); /* "" becomes null */
json_t *json_rate(double value, double low, double high);
json_t *json_person(const struct store_person *person);
json_t *json_mark(const struct store_mark *mark);
json_t *json_conditions(unsigned conditions);
const char *role_name(enum store_role role);
bool role_read(const char *text, enum store_role *out);

/* Answer a whole JSON value that was put together; NULL (no memory) becomes a problem. */
enum http_result answer_json(struct http_exchange *exchange, unsigned status, json_t *json);

/* Refuse members that are not in `known` (NULL-ended): false, answered. */
bool members_known(struct http_exchange *exchange, const json_t *object, const char *where,
                   const char *const *known);

/* A whole number of the path; false, answered 404. */
bool path_number(struct http_exchange *exchange, const char *name, int64_t *out);

/* An optional cursor that is a row number: 0 when absent; false, answered 422. */
bool cursor_read(struct http_exchange *exchange, int64_t *out);
json_t *cursor_make(bool more, int64_t value);

#endif
