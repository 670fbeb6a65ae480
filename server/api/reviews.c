/*
 * Taking a review: the hot path. It is read and checked here, handed to the campaign's writer, and
 * answered only when the writer says that it is on the disk.
 */
#include <math.h>
#include <sodium.h>
#include <stdio.h>
#include <string.h>

#include "call.h"
#include "ebbmark/clock.h"
#include "routes.h"
#include "segment_bounds.h"

#define BODY_MOST 65536
#define KEY_MOST 200
#define MARKS_MOST 50 /* the most that the setting marks_most allows */
#define SECONDS_MOST 86400.0

/* A review on its way; from the exchange's arena, so that it lives until the answer is sent. */
struct taking {
    struct http_exchange *exchange;
    struct store_review_new review;
    struct store_mark *marks;
};

/* ---- reading -------------------------------------------------------------------------------- */

static bool read_key(struct api_call *call, const char **out)
{
    const char *key = http_header(call->exchange, "Idempotency-Key");
    size_t length = key == NULL ? 0 : strlen(key);
    bool ok = length >= 1 && length <= KEY_MOST;
    for (size_t i = 0; ok && i < length; i++)
        ok = key[i] > ' ' && key[i] < 0x7f;
    if (!ok) {
        (void)http_answer_problem(
            call->exchange, "bad_request", "Idempotency-Key",
            "A review needs the header Idempotency-Key: 1 to %d visible ASCII "
            "characters, the same each time this review is sent.",
            KEY_MOST);
        call->answered = true;
    }
    *out = key;
    return ok;
}

static void read_mark(struct api_call *call, json_t *json, size_t index, struct store_mark *out)
{
    static const char *const names[] = {"starts", "ends", "low", "high", "certainty", NULL};
    static const char *const certainties[] = {"sure", "unsure", NULL};
    char prefix[32];
    const struct api_input marks = {call, json, ""};
    if (!json_is_object(json)) {
        (void)snprintf(prefix, sizeof prefix, "marks[%zu]", index);
        api_input_fault(&marks, prefix, "%s must be an object.", prefix);
        return;
    }
    (void)snprintf(prefix, sizeof prefix, "marks[%zu].", index);
    const struct api_input input = {call, json, prefix};
    size_t certainty = 0;
    api_input_only(&input, names);
    (void)api_input_number(&input, "starts", true, -INFINITY, INFINITY, &out->starts_d);
    (void)api_input_number(&input, "ends", true, -INFINITY, INFINITY, &out->ends_d);
    (void)api_input_number(&input, "low", true, -INFINITY, INFINITY, &out->low);
    (void)api_input_number(&input, "high", true, -INFINITY, INFINITY, &out->high);
    (void)api_input_word(&input, "certainty", false, certainties, &certainty);
    out->sure = certainty == 0;
}

static void read_marks(const struct api_input *input, struct taking *taking)
{
    struct api_call *call = input->call;
    json_t *marks = NULL;
    if (!api_input_array(input, "marks", true, &marks))
        return;
    size_t count = json_array_size(marks);
    if (count > MARKS_MOST) {
        api_input_fault(input, "marks", "A review holds at most %d marks, this one has %zu.",
                        MARKS_MOST, count);
        return;
    }
    taking->marks = base_arena_take_array(call->arena, count, sizeof *taking->marks);
    if (taking->marks == NULL && count > 0) {
        (void)base_fail(&call->error, BASE_MEMORY, "There is no memory to take a review.");
        return;
    }
    for (size_t i = 0; i < count; i++)
        read_mark(call, json_array_get(marks, i), i, &taking->marks[i]);
    taking->review.marks = taking->marks;
    taking->review.mark_count = count;
}

static void read_conditions(const struct api_input *input, struct taking *taking)
{
    json_t *conditions = NULL, *condition;
    size_t i;
    if (!api_input_array(input, "conditions", false, &conditions))
        return;
    json_array_foreach(conditions, i, condition)
    {
        const char *word = json_string_value(condition);
        char name[40];
        (void)snprintf(name, sizeof name, "conditions[%zu]", i);
        if (word != NULL && strcmp(word, "break") == 0)
            taking->review.conditions |= STORE_BREAK;
        else if (word != NULL && strcmp(word, "keeps_changing") == 0)
            taking->review.conditions |= STORE_KEEPS_CHANGING;
        else
            api_input_fault(input, name, "%s must be break or keeps_changing.", name);
    }
}

static bool read_review(struct api_call *call, struct taking *taking, const char **lease)
{
    static const char *const names[] = {"lease", "marks", "conditions", "seconds", NULL};
    struct api_input input = {call, NULL, ""};
    size_t size;
    if (!read_key(call, &taking->review.key) || !api_call_body(call, false, &input.object))
        return false;
    api_input_only(&input, names);
    (void)api_input_text(&input, "lease", true, CAMPAIGN_LEASE_SIZE - 1, lease);
    (void)api_input_number(&input, "seconds", false, 0.0, SECONDS_MOST, &taking->review.seconds);
    read_marks(&input, taking);
    read_conditions(&input, taking);
    const void *body = http_body(call->exchange, &size);
    (void)crypto_hash_sha256(taking->review.body_hash, body, size);
    return api_input_end(call);
}

/* ---- checking ------------------------------------------------------------------------------- */

/* Where the segment of a lease begins and ends. */
static bool find_bounds(struct api_call *call, int64_t id, struct store_segment *out)
{
    struct segment_bounds *bounds = call->api->bounds;
    *out = (struct store_segment){.id = id};
    if (segment_bounds_find(bounds, id, &out->starts_d, &out->ends_d))
        return true;
    if (!store_segment_by_id(call->store, call->arena, id, out, &call->error))
        return false;
    segment_bounds_put(bounds, id, out->starts_d, out->ends_d);
    return true;
}

static bool check(struct api_call *call, struct taking *taking, const char *text)
{
    struct store_review_new *review = &taking->review;
    struct campaign_lease_read lease;
    struct store_segment segment;
    if (!campaign_lease_open(call->campaign, text, &lease, &call->error))
        return false;
    if (lease.person != call->person) {
        (void)http_answer_problem(call->exchange, "not_your_lease", "lease",
                                  "This lease was given to somebody else.");
        call->answered = true;
        return false;
    }
    review->person = lease.person;
    review->segment = lease.segment;
    review->late = lease.expired;
    review->submitted_ms = base_clock_unix_ms();
    memcpy(review->lease, lease.nonce, sizeof review->lease);
    return find_bounds(call, lease.segment, &segment) &&
           campaign_review_check(call->campaign, &segment, taking->marks, review->mark_count,
                                 &call->error);
}

/* ---- answering ------------------------------------------------------------------------------ */

static enum http_result answer(struct http_exchange *exchange,
                               const struct store_review_new *review)
{
    switch (review->outcome) {
    case STORE_REVIEW_REPEATED:
        http_answer_header(exchange, "Ebbmark-Repeated", "1");
        break;
    case STORE_REVIEW_TAKEN:
        break;
    case STORE_REVIEW_KEY_REUSED:
        return http_answer_problem(exchange, "invalid", "Idempotency-Key",
                                   "This Idempotency-Key was used for another review; nothing was "
                                   "stored. Choose a new one for each review.");
    case STORE_REVIEW_LEASE_USED:
        return http_answer_problem(exchange, "lease_used", "lease",
                                   "This lease was answered already, by a review that is kept.");
    case STORE_REVIEW_CLOSED:
        return http_answer_problem(exchange, "expired_lease", "lease",
                                   "The lease is over and the segment needs no more looks; this "
                                   "review was not stored.");
    }
    return http_answer_json(
        exchange, 201,
        json_pack("{s:I, s:b}", "review", (json_int_t)review->review, "late", review->was_late));
}

/* On the writer's thread, after the commit. Nothing of the server's own is touched here but the
 * exchange, because the server may be gone by now. */
static void stored(void *context, bool ok, const struct base_error *error)
{
    struct taking *taking = context;
    struct http_exchange *exchange = taking->exchange;
    if (ok)
        (void)answer(exchange, &taking->review);
    else
        (void)http_answer_error(exchange, error);
    http_resume(exchange);
}

/* POST /reviews */
static enum http_result take(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    const char *lease = NULL;
    if (!api_call_begin(&call, exchange, context))
        return api_call_end(&call);
    struct taking *taking = base_arena_take(call.arena, sizeof *taking);
    if (taking == NULL) {
        (void)base_fail(&call.error, BASE_MEMORY, "There is no memory to take a review.");
        return api_call_end(&call);
    }
    taking->exchange = exchange;
    bool ok = read_review(&call, taking, &lease) && check(&call, taking, lease) &&
              campaign_review_submit(call.campaign, &taking->review, stored, taking, &call.error);
    return ok ? HTTP_LATER : api_call_end(&call);
}

const struct http_route api_reviews_routes[] = {
    {"POST", "/api/v1/reviews", HTTP_REVIEWER, 0, BODY_MOST, take},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
