#include "inside.h"

static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct store *store = campaign_store(((struct api_server *)context)->campaign);
    struct store_skill *skills;
    size_t count;
    int64_t run;
    struct base_error error = {0};
    if (!store_run_current(store, &run, &error) ||
        !store_skills_list(store, http_arena(exchange), 0, &skills, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++) {
        const struct store_skill *skill = &skills[i];
        (void)json_array_append_new(
            rows, json_pack("{s:I,s:o,s:I,s:I,s:f,s:o,s:o}", "person", (json_int_t)skill->person,
                            "handle", json_text(skill->handle), "looks", (json_int_t)skill->looks,
                            "marks", (json_int_t)skill->marks, "days_looked", skill->days_looked,
                            "hit", json_rate(skill->hit, skill->hit_low, skill->hit_high), "chance",
                            json_rate(skill->chance, skill->chance_low, skill->chance_high)));
    }
    return answer_json(exchange, 200,
                       json_pack("{s:o,s:o}", "run", run == 0 ? json_null() : json_integer(run),
                                 "reviewers", rows));
}

const struct http_route api_reviewers_routes[] = {
    {"GET", "/api/v1/reviewers", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
