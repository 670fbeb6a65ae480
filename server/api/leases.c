/* Handing out a segment. */
#include "call.h"
#include "routes.h"

static json_t *lease_json(const struct campaign_lease *lease)
{
    const struct store_segment *segment = &lease->segment;
    json_t *shown =
        json_pack("{s:s, s:o, s:o, s:I, s:o, s:o}", "id", segment->public_id, "starts",
                  api_number(segment->starts_d), "ends", api_number(segment->ends_d), "points",
                  (json_int_t)segment->count, "time_reference", api_text(segment->time_reference),
                  "flux", json_sprintf("/api/v1/segments/%s/flux", segment->public_id));
    return json_pack("{s:s, s:o, s:o}", "lease", lease->text, "expires",
                     api_moment(lease->expires_ms), "segment", shown);
}

/* POST /leases */
static enum http_result take(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct campaign_lease lease;
    bool found = false;
    bool ok =
        api_call_begin(&call, exchange, context) && api_call_no_body(&call) &&
        campaign_lease_take(call.campaign, call.arena, call.person, &lease, &found, &call.error);
    if (!ok)
        return api_call_end(&call);
    return found ? http_answer_json(exchange, 201, lease_json(&lease))
                 : http_answer_empty(exchange, 204);
}

const struct http_route api_leases_routes[] = {
    {"POST", "/api/v1/leases", HTTP_REVIEWER, 0, 1024, take},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
