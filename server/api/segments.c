/* A segment's flux: packed and kept ready, or as JSON. */
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/lightcurve_pack.h"
#include "ebbmark/text.h"
#include "inside.h"

#define PACKED "application/vnd.ebbmark.flux"
#define CACHE_CONTROL "private, max-age=86400, immutable"

static bool view_read(struct http_exchange *exchange, enum campaign_view *out)
{
    const char *text = http_query(exchange, "view");
    *out = CAMPAIGN_AS_MEASURED;
    if (text == NULL || strcmp(text, "as_measured") == 0)
        return true;
    if (strcmp(text, "trend_removed") == 0) {
        *out = CAMPAIGN_TREND_REMOVED;
        return true;
    }
    (void)http_answer_problem(exchange, "invalid", "view", "view is as_measured or trend_removed.");
    return false;
}

/* A reviewer sees what they were handed; the science team sees all. */
static bool allowed(struct http_exchange *exchange, struct api_server *api, int64_t segment)
{
    const struct http_identity *identity = http_identity(exchange);
    if (identity->role >= HTTP_SCIENCE ||
        campaign_may_see_with(api->campaign, identity->person, segment,
                              http_header(exchange, "Ebbmark-Lease")))
        return true;
    (void)http_answer_problem(exchange, "not_your_lease", NULL,
                              "This segment was not handed to you; ask for one.");
    return false;
}

/* Pack the flux into a body with an ETag from its content. NULL with the error filled. */
static struct http_kept_body *pack(const struct campaign_flux *flux, struct base_error *error)
{
    size_t size = lightcurve_pack_size(flux->count);
    unsigned char *packed = malloc(size), digest[crypto_hash_sha256_BYTES];
    struct http_kept_body *body = NULL;
    if (packed != NULL) {
        char etag[40] = "\"";
        lightcurve_pack(flux->time, flux->flux, flux->count, flux->median_flux, flux->noise_point,
                        packed);
        (void)crypto_hash_sha256(digest, packed, size);
        base_text_hex(etag + 1, digest, 16);
        memcpy(etag + 33, "\"", 2);
        body = http_kept_make(PACKED, packed, size, etag, CACHE_CONTROL);
    }
    free(packed);
    if (body == NULL)
        (void)base_fail(error, BASE_MEMORY, "There is no memory for the segment's flux.");
    return body;
}

static json_t *as_json(const struct campaign_flux *flux)
{
    json_t *times = json_array(), *values = json_array();
    for (size_t i = 0; i < flux->count; i++) {
        (void)json_array_append_new(times, json_real(flux->time[i]));
        (void)json_array_append_new(values, json_real(flux->flux[i]));
    }
    return json_pack("{s:f,s:s,s:o,s:o,s:o}", "starts", flux->starts_d, "time_reference",
                     flux->time_reference, "times", times, "flux", values, "noise",
                     json_number(flux->noise_point));
}

static enum http_result answer_kept(struct http_exchange *exchange, struct http_kept_body *body)
{
    enum http_result result = http_answer_kept(exchange, body);
    http_kept_drop(body);
    return result;
}

static enum http_result flux(struct http_exchange *exchange, void *context)
{
    static const char *const types[] = {PACKED, "application/json"};
    struct api_server *api = context;
    const char *id = http_path_part(exchange, "id");
    enum campaign_view view;
    struct flux_kept kept;
    struct store_segment segment;
    struct campaign_flux read;
    struct base_error error = {0};
    if (!view_read(exchange, &view))
        return HTTP_ANSWERED;
    int type = http_accept_best(exchange, types, 2);
    if (type < 0)
        return http_answer_problem(exchange, "not_acceptable", NULL,
                                   "Flux comes as " PACKED " or as application/json.");
    if (type == 0 && flux_cache_get(api->flux, id, view, &kept)) {
        if (allowed(exchange, api, kept.segment))
            return answer_kept(exchange, kept.body);
        http_kept_drop(kept.body);
        return HTTP_ANSWERED;
    }
    if (!store_segment_by_public_id(campaign_store(api->campaign), http_arena(exchange), id,
                                    &segment, &error))
        return http_answer_error(exchange, &error);
    if (!allowed(exchange, api, segment.id))
        return HTTP_ANSWERED;
    if (!campaign_flux_read(api->campaign, http_arena(exchange), &segment, view, &read, &error))
        return http_answer_error(exchange, &error);
    if (type == 1)
        return answer_json(exchange, 200, as_json(&read));
    struct http_kept_body *body = pack(&read, &error);
    if (body == NULL)
        return http_answer_error(exchange, &error);
    flux_cache_put(api->flux, id, view, segment.id, body);
    return answer_kept(exchange, body);
}

const struct http_route api_segments_routes[] = {
    {"GET", "/api/v1/segments/{id}/flux", HTTP_REVIEWER, 0, 0, flux},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
