/* Taking a review: read, check, hand to the writer; the answer goes out after the commit. */
#include <math.h>
#include <sodium.h>
#include <stdio.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "inside.h"

#define BODY_MAX 32768
#define MARKS_READ_MAX 1000 /* more than this is not even read; the campaign's own limit is lower  \
                             */
#define KEY_MAX 200
#define SECONDS_MAX 86400.0

/* One review under way; lives in the exchange's arena until it is answered. */
struct taking {
    struct http_exchange *exchange;
    struct store_review_new review;
};

static bool invalid(struct http_exchange *exchange, const char *field, const char *why)
{
    (void)http_answer_problem(exchange, "invalid", field, "%s %s.", field, why);
    return false;
}

/* 1 to KEY_MAX visible ASCII characters. */
static const char *key_read(struct http_exchange *exchange)
{
    const char *key = http_header(exchange, "Idempotency-Key");
    size_t length = key != NULL ? strlen(key) : 0;
    bool fits = length >= 1 && length <= KEY_MAX;
    for (size_t i = 0; fits && i < length; i++)
        fits = key[i] > 0x20 && key[i] < 0x7f;
    if (fits)
        return key;
    (void)http_answer_problem(
        exchange, "bad_request", NULL,
        "Send an Idempotency-Key of 1 to %d visible ASCII characters, the same "
        "one when you send the same review again.",
        KEY_MAX);
    return NULL;
}

static bool number_member(struct http_exchange *exchange, const json_t *mark, size_t i,
                          const char *name, double *out)
{
    char field[64];
    const json_t *value = json_object_get(mark, name);
    *out = json_number_value(value);
    if (json_is_number(value) && isfinite(*out))
        return true;
    (void)snprintf(field, sizeof field, "marks[%zu].%s", i, name);
    return invalid(exchange, field, "must be a finite number");
}

static bool mark_read(struct http_exchange *exchange, const json_t *json, size_t i,
                      struct store_mark *out)
{
    static const char *const known[] = {"starts", "ends", "low", "high", "certainty", NULL};
    char where[48];
    (void)snprintf(where, sizeof where, "marks[%zu]", i);
    if (!json_is_object(json))
        return invalid(exchange, where, "must be an object");
    (void)snprintf(where, sizeof where, "marks[%zu].", i);
    if (!members_known(exchange, json, where, known) ||
        !number_member(exchange, json, i, "starts", &out->starts_d) ||
        !number_member(exchange, json, i, "ends", &out->ends_d) ||
        !number_member(exchange, json, i, "low", &out->low) ||
        !number_member(exchange, json, i, "high", &out->high))
        return false;
    const json_t *certainty = json_object_get(json, "certainty");
    const char *word = certainty == NULL ? "sure" : json_string_value(certainty);
    if (word == NULL || (strcmp(word, "sure") != 0 && strcmp(word, "unsure") != 0)) {
        (void)snprintf(where, sizeof where, "marks[%zu].certainty", i);
        return invalid(exchange, where, "is \"sure\" or \"unsure\"");
    }
    out->sure = strcmp(word, "sure") == 0;
    return true;
}

static bool marks_read(struct http_exchange *exchange, const json_t *body,
                       struct store_review_new *review, struct store_mark **marks)
{
    const json_t *list = json_object_get(body, "marks");
    if (!json_is_array(list) || json_array_size(list) > MARKS_READ_MAX)
        return invalid(exchange, "marks", "must be a list, empty when there is no dip");
    size_t count = json_array_size(list);
    *marks = base_arena_take_array(http_arena(exchange), count + 1, sizeof **marks);
    if (*marks == NULL) {
        (void)http_answer_problem(exchange, "internal", NULL, "There is no memory for the marks.");
        return false;
    }
    for (size_t i = 0; i < count; i++)
        if (!mark_read(exchange, json_array_get(list, i), i, &(*marks)[i]))
            return false;
    review->marks = *marks;
    review->mark_count = count;
    return true;
}

static bool conditions_read(struct http_exchange *exchange, const json_t *body, unsigned *out)
{
    const json_t *list = json_object_get(body, "conditions");
    *out = 0;
    if (list == NULL)
        return true;
    if (!json_is_array(list))
        return invalid(exchange, "conditions", "must be a list");
    for (size_t i = 0; i < json_array_size(list); i++) {
        const char *word = json_string_value(json_array_get(list, i));
        if (word != NULL && strcmp(word, "break") == 0)
            *out |= STORE_BREAK;
        else if (word != NULL && strcmp(word, "keeps_changing") == 0)
            *out |= STORE_KEEPS_CHANGING;
        else
            return invalid(exchange, "conditions", "knows \"break\" and \"keeps_changing\"");
    }
    return true;
}

/* Open the lease: whose, for which segment, and is it still running? */
static bool lease_read(struct http_exchange *exchange, struct api_server *api, const json_t *body,
                       struct store_review_new *review)
{
    struct campaign_lease_read lease;
    struct base_error error = {0};
    const char *text = json_string_value(json_object_get(body, "lease"));
    if (text == NULL)
        return invalid(exchange, "lease", "is missing");
    if (!campaign_lease_open(api->campaign, text, &lease, &error)) {
        (void)http_answer_error(exchange, &error);
        return false;
    }
    if (lease.person != review->person) {
        (void)http_answer_problem(exchange, "not_your_lease", NULL,
                                  "This lease was given to somebody else.");
        return false;
    }
    review->segment = lease.segment;
    review->late = lease.expired;
    memcpy(review->lease, lease.nonce, sizeof review->lease);
    return true;
}

static bool seconds_read(struct http_exchange *exchange, const json_t *body, double *out)
{
    const json_t *value = json_object_get(body, "seconds");
    *out = value == NULL ? 0.0 : json_number_value(value);
    return value == NULL || (json_is_number(value) && *out >= 0.0 && *out <= SECONDS_MAX) ||
           invalid(exchange, "seconds", "must be a number from 0 to 86400");
}

static void answer_taken(struct http_exchange *exchange, const struct store_review_new *review)
{
    if (review->outcome == STORE_REVIEW_REPEATED)
        http_answer_header(exchange, "Ebbmark-Repeated", "1");
    (void)answer_json(
        exchange, 201,
        json_pack("{s:I,s:b}", "review", (json_int_t)review->review, "late", review->was_late));
}

/* On the writer's thread, after the commit (or its failure). */
static void done(void *context, bool ok, const struct base_error *error)
{
    struct taking *taking = context;
    struct http_exchange *exchange = taking->exchange;
    if (!ok) {
        (void)http_answer_error(exchange, error);
        http_resume(exchange);
        return;
    }
    switch (taking->review.outcome) {
    case STORE_REVIEW_TAKEN:
    case STORE_REVIEW_REPEATED:
        answer_taken(exchange, &taking->review);
        break;
    case STORE_REVIEW_KEY_REUSED:
        (void)http_answer_problem(exchange, "invalid", NULL,
                                  "This Idempotency-Key was used for another review.");
        break;
    case STORE_REVIEW_LEASE_USED:
        (void)http_answer_problem(exchange, "lease_used", NULL,
                                  "This lease has its review already.");
        break;
    case STORE_REVIEW_CLOSED:
        (void)http_answer_problem(exchange, "expired_lease", NULL,
                                  "The lease has ended and the segment needs no more looks.");
        break;
    }
    http_resume(exchange);
}

static enum http_result take(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"lease", "marks", "conditions", "seconds", NULL};
    struct api_server *api = context;
    json_t *body;
    size_t size;
    struct store_mark *marks;
    struct store_segment segment;
    struct base_error error = {0};
    struct taking *taking = base_arena_take(http_arena(exchange), sizeof *taking);
    const char *key = key_read(exchange);
    if (key == NULL || !http_body_json(exchange, &body))
        return HTTP_ANSWERED;
    if (taking == NULL)
        return http_answer_problem(exchange, "internal", NULL,
                                   "There is no memory for the review.");
    taking->exchange = exchange;
    struct store_review_new *review = &taking->review;
    *review = (struct store_review_new){.person = http_identity(exchange)->person,
                                        .key = key,
                                        .submitted_ms = base_clock_unix_ms()};
    if (!members_known(exchange, body, "", known) || !lease_read(exchange, api, body, review) ||
        !marks_read(exchange, body, review, &marks) ||
        !conditions_read(exchange, body, &review->conditions) ||
        !seconds_read(exchange, body, &review->seconds))
        return HTTP_ANSWERED;
    const void *sent = http_body(exchange, &size);
    (void)crypto_hash_sha256(review->body_hash, sent, size);
    if (!store_segment_by_id(campaign_store(api->campaign), http_arena(exchange), review->segment,
                             &segment, &error) ||
        !campaign_review_check(api->campaign, &segment, marks, review->mark_count, &error) ||
        !campaign_review_submit(api->campaign, review, done, taking, &error))
        return http_answer_error(exchange, &error);
    return HTTP_LATER;
}

const struct http_route api_reviews_routes[] = {
    {"POST", "/api/v1/reviews", HTTP_REVIEWER, 0, BODY_MAX, take},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
