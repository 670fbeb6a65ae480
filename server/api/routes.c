#include "routes.h"

const struct http_route *const api_routes[] = {
    api_people_routes,     api_sessions_routes,       api_me_routes,
    api_leases_routes,     api_segments_routes,       api_reviews_routes,
    api_candidates_routes, api_verdicts_routes,       api_stars_routes,
    api_reviewers_routes,  api_consensus_runs_routes, api_batches_routes,
    api_campaign_routes,   api_health_routes,         api_metrics_routes,
    api_problems_routes,   api_openapi_routes,        NULL};
