/* The person who asks: who they are, what they did, leaving. */
#include <math.h>

#include "call.h"
#include "ebbmark/tables.h"
#include "routes.h"

#define PASSPHRASE_MOST 4096
#define CANDIDATES_MOST 100 /* of a person's own record */

static enum http_result answer_person(struct api_call *call)
{
    struct store_person person;
    return store_person_by_id(call->store, call->arena, call->person, &person, &call->error)
               ? http_answer_json(call->exchange, 200, api_person(&person))
               : api_call_end(call);
}

/* GET /me */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    return api_call_begin(&call, exchange, context) ? answer_person(&call) : api_call_end(&call);
}

struct change {
    bool has_credit, credit;
    const char *passphrase; /* NULL: stays */
};

static bool read_change(struct api_call *call, struct change *out)
{
    static const char *const names[] = {"credit", "passphrase", NULL};
    struct api_input input = {call, NULL, ""};
    *out = (struct change){0};
    if (!api_call_body(call, false, &input.object))
        return false;
    api_input_only(&input, names);
    out->has_credit = api_input_boolean(&input, "credit", &out->credit);
    (void)api_input_text(&input, "passphrase", false, PASSPHRASE_MOST, &out->passphrase);
    return api_input_end(call);
}

/* PATCH /me */
static enum http_result change(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct change change;
    bool ok = api_call_begin(&call, exchange, context) && read_change(&call, &change);
    if (ok && change.passphrase != NULL)
        ok = campaign_passphrase_set(call.campaign, call.person, change.passphrase, &call.error);
    if (ok && change.has_credit)
        ok = store_person_set_credit(call.store, call.person, change.credit, &call.error);
    return ok ? answer_person(&call) : api_call_end(&call);
}

/* DELETE /me */
static enum http_result leave(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    bool ok = api_call_begin(&call, exchange, context) &&
              store_person_forget(call.store, call.person, &call.error);
    if (!ok)
        return api_call_end(&call);
    http_identity_forget(http_server_of(exchange), call.person);
    http_answer_cookie(exchange, NULL, 0);
    return http_answer_empty(exchange, 204);
}

/* ---- the record ----------------------------------------------------------------------------- */

struct record {
    struct api_page page;
    struct store_own_totals totals;
    struct store_own_review *reviews;
    size_t review_count;
    struct store_candidate *candidates;
    size_t candidate_count;
    struct store_skill skill;
    bool has_skill;
};

/* That no run knows the person yet is no failure. */
static bool read_skill(struct api_call *call, struct record *record)
{
    struct base_error problem = {0};
    record->has_skill = store_skill_read(call->store, call->person, &record->skill, &problem);
    if (record->has_skill || problem.kind == BASE_NOT_FOUND)
        return true;
    call->error = problem;
    return false;
}

static bool read_record(struct api_call *call, struct record *record)
{
    *record = (struct record){0};
    return api_call_page(call, &record->page) &&
           store_person_record(call->store, call->arena, call->person, record->page.after,
                               record->page.limit + 1, &record->totals, &record->reviews,
                               &record->review_count, &call->error) &&
           store_person_candidates(call->store, call->arena, call->person, CANDIDATES_MOST,
                                   &record->candidates, &record->candidate_count, &call->error) &&
           read_skill(call, record);
}

static json_t *own_mark(const void *item)
{
    return api_mark(item);
}

static json_t *own_review(const void *item)
{
    const struct store_own_review *own = item;
    json_t *conditions = json_array();
    if ((own->conditions & STORE_BREAK) != 0)
        (void)json_array_append_new(conditions, json_string("break"));
    if ((own->conditions & STORE_KEEPS_CHANGING) != 0)
        (void)json_array_append_new(conditions, json_string("keeps_changing"));
    json_t *segment =
        json_pack("{s:s, s:o, s:o, s:o}", "id", own->segment, "starts", api_number(own->starts_d),
                  "ends", api_number(own->ends_d), "time_reference", api_text(own->time_reference));
    return json_pack("{s:I, s:o, s:b, s:o, s:o, s:o}", "review", (json_int_t)own->review,
                     "submitted", api_moment(own->submitted_ms), "late", own->late, "segment",
                     segment, "marks",
                     api_list(own->marks, own->mark_count, sizeof *own->marks, own_mark),
                     "conditions", conditions);
}

static json_t *own_candidate(const void *item)
{
    const struct store_candidate *candidate = item;
    double mid = isfinite(candidate->mid_d) ? candidate->mid_d
                                            : (candidate->starts_d + candidate->ends_d) / 2.0;
    return json_pack("{s:I, s:o, s:o, s:o, s:o}", "candidate", (json_int_t)candidate->id, "star",
                     api_text(candidate->star_name), "mid_time", api_number(mid), "time_reference",
                     api_text(candidate->time_reference), "probability",
                     api_number(candidate->probability));
}

static json_t *skill_json(const struct record *record)
{
    const struct store_skill *skill = &record->skill;
    return record->has_skill
               ? json_pack("{s:o, s:o}", "hit",
                           api_rate(skill->hit, skill->hit_low, skill->hit_high), "chance",
                           api_rate(skill->chance, skill->chance_low, skill->chance_high))
               : json_null();
}

static json_t *totals_json(const struct store_own_totals *totals)
{
    return json_pack("{s:I, s:I, s:o, s:o, s:o}", "looks", (json_int_t)totals->looks, "marks",
                     (json_int_t)totals->marks, "days_looked", api_number(totals->days_looked),
                     "first", api_moment(totals->first_ms), "last", api_moment(totals->last_ms));
}

/* GET /me/record */
static enum http_result show_record(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct record record;
    if (!api_call_begin(&call, exchange, context) || !read_record(&call, &record))
        return api_call_end(&call);
    bool more = api_page_cut(&record.page, &record.review_count);
    int64_t last = record.review_count > 0 ? record.reviews[record.review_count - 1].review : 0;
    json_t *json =
        json_pack("{s:o, s:o, s:o, s:o, s:o, s:s}", "totals", totals_json(&record.totals), "skill",
                  skill_json(&record), "candidates",
                  api_list(record.candidates, record.candidate_count, sizeof *record.candidates,
                           own_candidate),
                  "reviews",
                  api_list(record.reviews, record.review_count, sizeof *record.reviews, own_review),
                  "next", api_page_next(more, last), "caution", CAMPAIGN_CAUTION);
    return http_answer_json(exchange, 200, json);
}

const struct http_route api_me_routes[] = {
    {"GET", "/api/v1/me", HTTP_REVIEWER, 0, 0, show},
    {"PATCH", "/api/v1/me", HTTP_REVIEWER, HTTP_SLOW, 16384, change},
    {"DELETE", "/api/v1/me", HTTP_REVIEWER, HTTP_SLOW, 0, leave},
    {"GET", "/api/v1/me/record", HTTP_REVIEWER, HTTP_SLOW, 0, show_record},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
