#include <math.h>

#include "ebbmark/tables.h"
#include "inside.h"

#define BODY_MAX 4096
#define RECORD_LIMIT_MAX 1000
#define CANDIDATES_SHOWN 100

static bool myself(struct http_exchange *exchange, struct api_server *api, struct store_person *out,
                   struct base_error *error)
{
    return store_person_by_id(campaign_store(api->campaign), http_arena(exchange),
                              http_identity(exchange)->person, out, error);
}

static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct base_error error = {0};
    struct store_person person;
    if (!myself(exchange, context, &person, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 200, json_person(&person));
}

static enum http_result patch(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"credit", "passphrase", NULL};
    struct api_server *api = context;
    int64_t id = http_identity(exchange)->person;
    json_t *body;
    struct base_error error = {0};
    struct store_person person;
    if (!http_body_json(exchange, &body) || !members_known(exchange, body, "", known))
        return HTTP_ANSWERED;
    const json_t *credit = json_object_get(body, "credit");
    const json_t *passphrase = json_object_get(body, "passphrase");
    if (credit != NULL && !json_is_boolean(credit))
        return http_answer_problem(exchange, "invalid", "credit", "credit is true or false.");
    if (passphrase != NULL && !json_is_string(passphrase))
        return http_answer_problem(exchange, "invalid", "passphrase", "passphrase is a text.");
    bool ok = (passphrase == NULL ||
               campaign_passphrase_set(api->campaign, id, json_string_value(passphrase), &error)) &&
              (credit == NULL || store_person_set_credit(campaign_store(api->campaign), id,
                                                         json_is_true(credit), &error)) &&
              myself(exchange, api, &person, &error);
    return ok ? answer_json(exchange, 200, json_person(&person))
              : http_answer_error(exchange, &error);
}

static enum http_result leave(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct base_error error = {0};
    int64_t id = http_identity(exchange)->person;
    if (!store_person_forget(campaign_store(api->campaign), id, &error))
        return http_answer_error(exchange, &error);
    http_identity_forget(api->http, id);
    http_answer_cookie(exchange, NULL, 0);
    return http_answer_empty(exchange, 204);
}

static json_t *own_reviews(const struct store_own_review *reviews, size_t count)
{
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++) {
        json_t *marks = json_array();
        for (size_t k = 0; k < reviews[i].mark_count; k++)
            (void)json_array_append_new(marks, json_mark(&reviews[i].marks[k]));
        (void)json_array_append_new(
            rows, json_pack("{s:I,s:o,s:b,s:{s:s,s:f,s:f,s:s},s:o,s:o}", "review",
                            (json_int_t)reviews[i].review, "submitted",
                            json_time(reviews[i].submitted_ms), "late", reviews[i].late, "segment",
                            "id", reviews[i].segment, "starts", reviews[i].starts_d, "ends",
                            reviews[i].ends_d, "time_reference", reviews[i].time_reference, "marks",
                            marks, "conditions", json_conditions(reviews[i].conditions)));
    }
    return rows;
}

static json_t *own_candidates(const struct store_candidate *rows, size_t count)
{
    json_t *list = json_array();
    for (size_t i = 0; i < count; i++) {
        double middle =
            isfinite(rows[i].mid_d) ? rows[i].mid_d : 0.5 * (rows[i].starts_d + rows[i].ends_d);
        (void)json_array_append_new(
            list, json_pack("{s:I,s:s,s:f,s:s,s:f}", "candidate", (json_int_t)rows[i].id, "star",
                            rows[i].star_name, "mid_time", middle, "time_reference",
                            rows[i].time_reference, "probability", rows[i].probability));
    }
    return list;
}

static enum http_result record(struct http_exchange *exchange, void *context)
{
    struct store *store = campaign_store(((struct api_server *)context)->campaign);
    struct base_arena *arena = http_arena(exchange);
    int64_t person = http_identity(exchange)->person, limit, before;
    struct store_own_totals totals;
    struct store_own_review *reviews;
    struct store_candidate *candidates;
    struct store_skill skill;
    size_t review_count, candidate_count;
    struct base_error error = {0}, unknown = {0};
    if (!http_query_integer(exchange, "limit", 1, RECORD_LIMIT_MAX, 100, &limit) ||
        !cursor_read(exchange, &before))
        return HTTP_ANSWERED;
    if (!store_person_record(store, arena, person, before, (size_t)limit, &totals, &reviews,
                             &review_count, &error) ||
        !store_person_candidates(store, arena, person, CANDIDATES_SHOWN, &candidates,
                                 &candidate_count, &error))
        return http_answer_error(exchange, &error);
    bool skilled = store_skill_read(store, person, &skill, &unknown);
    if (!skilled && unknown.kind != BASE_NOT_FOUND)
        return http_answer_error(exchange, &unknown);
    return answer_json(
        exchange, 200,
        json_pack("{s:{s:I,s:I,s:f,s:o,s:o},s:o,s:o,s:o,s:o,s:s}", "totals", "looks",
                  (json_int_t)totals.looks, "marks", (json_int_t)totals.marks, "days_looked",
                  totals.days_looked, "first", json_time(totals.first_ms), "last",
                  json_time(totals.last_ms), "skill",
                  skilled ? json_pack("{s:o,s:o}", "hit",
                                      json_rate(skill.hit, skill.hit_low, skill.hit_high), "chance",
                                      json_rate(skill.chance, skill.chance_low, skill.chance_high))
                          : json_null(),
                  "candidates", own_candidates(candidates, candidate_count), "reviews",
                  own_reviews(reviews, review_count), "next",
                  cursor_make(review_count == (size_t)limit,
                              review_count > 0 ? reviews[review_count - 1].review : 0),
                  "caution", CAMPAIGN_CAUTION));
}

const struct http_route api_me_routes[] = {
    {"GET", "/api/v1/me", HTTP_REVIEWER, HTTP_SLOW, 0, show},
    {"PATCH", "/api/v1/me", HTTP_REVIEWER, HTTP_SLOW, BODY_MAX, patch},
    {"DELETE", "/api/v1/me", HTTP_REVIEWER, HTTP_SLOW, 0, leave},
    {"GET", "/api/v1/me/record", HTTP_REVIEWER, HTTP_SLOW, 0, record},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
