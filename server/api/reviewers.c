/* Skills of all reviewers, as a consensus run found them. */
#include "call.h"
#include "routes.h"

static json_t *reviewer_json(const void *item)
{
    const struct store_skill *skill = item;
    return json_pack("{s:I, s:o, s:I, s:I, s:o, s:o, s:o}", "person", (json_int_t)skill->person,
                     "handle", api_text_or_null(skill->handle), "looks", (json_int_t)skill->looks,
                     "marks", (json_int_t)skill->marks, "days_looked",
                     api_number(skill->days_looked), "hit",
                     api_rate(skill->hit, skill->hit_low, skill->hit_high), "chance",
                     api_rate(skill->chance, skill->chance_low, skill->chance_high));
}

/* GET /reviewers */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_skill *skills = NULL;
    struct store_run known;
    size_t count = 0;
    int64_t run = 0;
    static const char *const names[] = {"run", NULL};
    if (!api_call_begin(&call, exchange, context) || !api_call_query(&call, names))
        return api_call_end(&call);
    call.answered = !http_query_integer(exchange, "run", 1, INT64_MAX, 0, &run);
    bool ok = !call.answered;
    if (ok && run != 0)
        ok = store_run_read(call.store, call.arena, run, &known, &call.error);
    else if (ok)
        ok = store_run_current(call.store, &run, &call.error);
    if (ok && run != 0)
        ok = store_skills_list(call.store, call.arena, run, &skills, &count, &call.error);
    if (!ok)
        return api_call_end(&call);
    return http_answer_json(
        exchange, 200,
        json_pack("{s:o, s:o}", "run", run == 0 ? json_null() : json_integer((json_int_t)run),
                  "reviewers", api_list(skills, count, sizeof *skills, reviewer_json)));
}

const struct http_route api_reviewers_routes[] = {
    {"GET", "/api/v1/reviewers", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
