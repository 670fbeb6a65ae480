#include <stdio.h>

#include "inside.h"

static enum http_result take(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct campaign_lease lease;
    bool found = false;
    struct base_error error = {0};
    if (!campaign_lease_take(api->campaign, http_arena(exchange), http_identity(exchange)->person,
                             &lease, &found, &error))
        return http_answer_error(exchange, &error);
    if (!found)
        return http_answer_empty(exchange, 204);
    const struct store_segment *segment = &lease.segment;
    char flux[64];
    (void)snprintf(flux, sizeof flux, "/api/v1/segments/%s/flux", segment->public_id);
    return answer_json(exchange, 201,
                       json_pack("{s:s,s:o,s:{s:s,s:f,s:f,s:I,s:s,s:s}}", "lease", lease.text,
                                 "expires", json_time(lease.expires_ms), "segment", "id",
                                 segment->public_id, "starts", segment->starts_d, "ends",
                                 segment->ends_d, "points", (json_int_t)segment->count,
                                 "time_reference", segment->time_reference, "flux", flux));
}

const struct http_route api_leases_routes[] = {
    {"POST", "/api/v1/leases", HTTP_REVIEWER, 0, 1024, take},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
