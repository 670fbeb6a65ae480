/*
 * The flux of a segment. What was asked for lately is kept ready in memory; the rest is made on
 * this room's workers, so that the server's own threads never wait for a light curve.
 */
#include <math.h>
#include <sodium.h>
#include <stdlib.h>
#include <string.h>

#include "call.h"
#include "ebbmark/lightcurve_pack.h"
#include "ebbmark/text.h"
#include "flux_kept.h"
#include "routes.h"

#define PACKED_TYPE "application/vnd.ebbmark.flux"
#define JSON_TYPE "application/json"
/* The content of an id never changes, and only its holder may keep it. */
#define CACHE_CONTROL "private, max-age=86400, immutable"

/* ---- what is asked for ---------------------------------------------------------------------- */

static bool read_id(struct http_exchange *exchange, uint64_t *out)
{
    unsigned char bytes[8];
    const char *id = http_path_part(exchange, "id");
    *out = 0;
    if (id[strspn(id, "0123456789abcdef")] != '\0' || !base_text_unhex(bytes, sizeof bytes, id))
        return false;
    for (size_t i = 0; i < sizeof bytes; i++)
        *out = *out << 8 | bytes[i];
    return true;
}

static bool read_view(struct api_call *call, unsigned *out)
{
    const char *view = http_query(call->exchange, "view");
    bool removed = view != NULL && strcmp(view, "trend_removed") == 0;
    *out = removed ? CAMPAIGN_TREND_REMOVED : CAMPAIGN_AS_MEASURED;
    return view == NULL || removed || strcmp(view, "as_measured") == 0 ||
           base_fail_field(&call->error, BASE_INVALID, "view",
                           "view must be as_measured or trend_removed.");
}

static bool read_form(struct api_call *call, enum flux_form *out)
{
    static const char *const types[] = {PACKED_TYPE, JSON_TYPE};
    int best = http_accept_best(call->exchange, types, 2);
    if (best >= 0) {
        *out = best == 0 ? FLUX_PACKED : FLUX_JSON;
        return true;
    }
    (void)http_answer_problem(call->exchange, "not_acceptable", NULL,
                              "Flux can be had as " PACKED_TYPE " or " JSON_TYPE ".");
    call->answered = true;
    return false;
}

static bool read_key(struct api_call *call, struct flux_key *out)
{
    if (!read_id(call->exchange, &out->public_id))
        return base_fail(&call->error, BASE_NOT_FOUND, "There is no such segment.");
    static const char *const names[] = {"view", NULL};
    return api_call_query(call, names) && read_view(call, &out->view) &&
           read_form(call, &out->form);
}

/* The science team sees everything; others what they hold or have reviewed. A lease that is sent
 * along is proof enough, even when the server was started again since it was given. */
static bool may_see(struct api_call *call, int64_t segment)
{
    if (http_identity(call->exchange)->role >= HTTP_SCIENCE ||
        campaign_may_see(call->campaign, call->person, segment))
        return true;
    const char *lease = http_header(call->exchange, "Ebbmark-Lease");
    return (lease != NULL && campaign_may_see_with(call->campaign, call->person, segment, lease)) ||
           base_fail(&call->error, BASE_DENIED,
                     "You hold no lease on this segment; take one first.");
}

/* ---- making a body -------------------------------------------------------------------------- */

static struct http_kept_body *keep(const char *media_type, const void *data, size_t size,
                                   struct base_error *error)
{
    unsigned char hash[crypto_hash_sha256_BYTES];
    char etag[2 * 16 + 3] = "\"";
    (void)crypto_hash_sha256(hash, data, size);
    base_text_hex(etag + 1, hash, 16);
    memcpy(etag + 1 + 2 * 16, "\"", 2);
    struct http_kept_body *body = http_kept_make(media_type, data, size, etag, CACHE_CONTROL);
    if (body == NULL)
        (void)base_fail(error, BASE_MEMORY, "There is no memory to keep a segment's flux.");
    return body;
}

static struct http_kept_body *make_packed(const struct campaign_flux *flux,
                                          struct base_error *error)
{
    size_t size = lightcurve_pack_size(flux->count);
    unsigned char *data = malloc(size);
    if (data == NULL) {
        (void)base_fail(error, BASE_MEMORY, "There is no memory to pack a segment's flux.");
        return NULL;
    }
    double noise = isfinite(flux->noise_point) ? flux->noise_point : 0.0;
    lightcurve_pack(flux->time, flux->flux, flux->count, flux->median_flux, noise, data);
    struct http_kept_body *body = keep(PACKED_TYPE, data, size, error);
    free(data);
    return body;
}

static void add_number(struct base_text *text, double value)
{
    char number[BASE_NUMBER_SIZE];
    base_text_add(text, isfinite(value) ? base_text_number(number, value) : "null");
}

static void add_numbers(struct base_text *text, const char *name, const double *values,
                        size_t count)
{
    base_text_add_format(text, ",\"%s\":[", name);
    for (size_t i = 0; i < count; i++) {
        if (i > 0)
            base_text_add_char(text, ',');
        add_number(text, values[i]);
    }
    base_text_add_char(text, ']');
}

/* Written as it comes: a library's tree would hold each number as an object of its own. */
static struct http_kept_body *make_json(const struct campaign_flux *flux, struct base_error *error)
{
    struct base_text text = {0};
    json_t *reference = api_text(flux->time_reference);
    char *quoted = reference == NULL ? NULL : json_dumps(reference, JSON_ENCODE_ANY);
    json_decref(reference);
    base_text_add(&text, "{\"starts\":");
    add_number(&text, flux->starts_d);
    base_text_add_format(
        &text, ",\"time_reference\":%s,\"median_flux\":", quoted == NULL ? "\"\"" : quoted);
    add_number(&text, flux->median_flux);
    base_text_add(&text, ",\"noise\":");
    add_number(&text, flux->noise_point);
    add_numbers(&text, "times", flux->time, flux->count);
    add_numbers(&text, "flux", flux->flux, flux->count);
    base_text_add_char(&text, '}');
    struct http_kept_body *body = NULL;
    if (text.failed || quoted == NULL)
        (void)base_fail(error, BASE_MEMORY, "There is no memory to write a segment's flux.");
    else
        body = keep(JSON_TYPE, text.data, text.length, error);
    base_text_free(&text);
    free(quoted);
    return body;
}

/* Read a segment's flux and make a body of it; NULL on failure. The whole light curve is read, so
 * that memory is an arena of its own, given back at once. */
static struct http_kept_body *make_body(struct api_call *call, const struct store_segment *segment,
                                        const struct flux_key *key)
{
    struct http_kept_body *body = NULL;
    struct campaign_flux flux;
    struct base_arena *arena = base_arena_new(0);
    if (arena == NULL)
        (void)base_fail(&call->error, BASE_MEMORY, "There is no memory to read a light curve.");
    else if (campaign_flux_read(call->campaign, arena, segment, (enum campaign_view)key->view,
                                &flux, &call->error))
        body = key->form == FLUX_PACKED ? make_packed(&flux, &call->error)
                                        : make_json(&flux, &call->error);
    base_arena_free(arena);
    return body;
}

/* ---- answering ------------------------------------------------------------------------------ */

/* What a worker needs; from the exchange's arena. */
struct making {
    struct api_call call;
    struct flux_key key;
};

static void make_and_answer(void *context)
{
    struct making *making = context;
    struct api_call *call = &making->call;
    struct store_segment segment;
    struct http_kept_body *body = NULL;
    bool ok =
        store_segment_by_public_id(call->store, call->arena, http_path_part(call->exchange, "id"),
                                   &segment, &call->error) &&
        may_see(call, segment.id);
    if (ok)
        body = make_body(call, &segment, &making->key);
    if (body != NULL) {
        flux_kept_put(call->api->flux, &making->key, segment.id, body);
        (void)http_answer_kept(call->exchange, body);
        http_kept_drop(body);
    } else {
        (void)api_call_end(call);
    }
    http_resume(call->exchange);
}

static enum http_result hand_to_a_worker(struct api_call *call, const struct flux_key *key)
{
    struct making *making =
        api_call_arena(call) ? base_arena_take(call->arena, sizeof *making) : NULL;
    if (making == NULL) {
        (void)base_fail(&call->error, BASE_MEMORY, "There is no memory to answer a request.");
        return api_call_end(call);
    }
    *making = (struct making){.call = *call, .key = *key};
    return base_pool_submit(call->api->workers, make_and_answer, making, &call->error)
               ? HTTP_LATER
               : api_call_end(call);
}

/* GET /segments/{id}/flux */
static enum http_result flux(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct flux_key key;
    int64_t segment;
    struct http_kept_body *body = NULL;
    api_call_begin_bare(&call, exchange, context);
    if (!read_key(&call, &key))
        return api_call_end(&call);
    if (!flux_kept_find(call.api->flux, &key, &segment, &body))
        return hand_to_a_worker(&call, &key);
    enum http_result result =
        may_see(&call, segment) ? http_answer_kept(exchange, body) : api_call_end(&call);
    http_kept_drop(body);
    return result;
}

const struct http_route api_segments_routes[] = {
    {"GET", "/api/v1/segments/{id}/flux", HTTP_REVIEWER, 0, 0, flux},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
