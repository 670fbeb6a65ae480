/* The tables of routes; each stands beside its handlers and ends with a NULL method. */
#ifndef API_ROUTES_H
#define API_ROUTES_H

#include "ebbmark/http.h"

extern const struct http_route api_batches_routes[];
extern const struct http_route api_campaign_routes[];
extern const struct http_route api_candidates_routes[];
extern const struct http_route api_consensus_runs_routes[];
extern const struct http_route api_health_routes[];
extern const struct http_route api_leases_routes[];
extern const struct http_route api_me_routes[];
extern const struct http_route api_metrics_routes[];
extern const struct http_route api_openapi_routes[];
extern const struct http_route api_people_routes[];
extern const struct http_route api_problems_routes[];
extern const struct http_route api_reviewers_routes[];
extern const struct http_route api_reviews_routes[];
extern const struct http_route api_segments_routes[];
extern const struct http_route api_sessions_routes[];
extern const struct http_route api_stars_routes[];
extern const struct http_route api_verdicts_routes[];

extern const struct http_route *const api_routes[]; /* all of them, NULL-ended */

#endif
