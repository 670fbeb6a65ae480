#include "inside.h"

#define CURRENT "/api/v1/consensus-runs/current"

/* JSON kept as text in the store. */
static json_t *kept_json(const char *text)
{
    json_t *json = json_loads(text, JSON_DECODE_ANY, NULL);
    return json != NULL ? json : json_null();
}

static json_t *run_json(const struct store_run *run)
{
    return json_pack("{s:I,s:I,s:I,s:I,s:I,s:o,s:o,s:o,s:o}", "run", (json_int_t)run->id,
                     "newest_review", (json_int_t)run->newest_review, "reviews",
                     (json_int_t)run->reviews, "people", (json_int_t)run->people, "candidates",
                     (json_int_t)run->candidates, "begun", json_time(run->begun_ms), "finished",
                     json_time(run->finished_ms), "settings", kept_json(run->settings), "fit",
                     kept_json(run->fit));
}

/* What is at work now, and the newest finished run. */
static json_t *state_json(struct api_server *api, struct base_arena *arena,
                          struct base_error *error)
{
    struct store *store = campaign_store(api->campaign);
    struct campaign_run_state state = campaign_run_state_now(api->campaign);
    struct store_run run;
    int64_t number;
    if (!store_run_current(store, &number, error) ||
        (number != 0 && !store_run_read(store, arena, number, &run, error)))
        return NULL;
    return json_pack("{s:s,s:f,s:o,s:o,s:o}", "state", state.working ? "working" : "idle",
                     "fraction", state.fraction, "stage", json_text(state.stage), "last_error",
                     json_text(state.last_error), "newest",
                     number == 0 ? json_null() : run_json(&run));
}

static enum http_result answer_state(struct http_exchange *exchange, struct api_server *api,
                                     unsigned status)
{
    struct base_error error = {0};
    json_t *json = state_json(api, http_arena(exchange), &error);
    return json != NULL ? http_answer_json(exchange, status, json)
                        : http_answer_error(exchange, &error);
}

static enum http_result start(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct base_error error = {0};
    if (!campaign_run_ask(api->campaign, &error))
        return http_answer_error(exchange, &error);
    http_answer_header(exchange, "Location", CURRENT);
    return answer_state(exchange, api, 202);
}

static enum http_result current(struct http_exchange *exchange, void *context)
{
    return answer_state(exchange, context, 200);
}

static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t limit, before;
    struct store_run *runs;
    size_t count;
    struct base_error error = {0};
    if (!http_query_integer(exchange, "limit", 1, 1000, 100, &limit) ||
        !cursor_read(exchange, &before))
        return HTTP_ANSWERED;
    if (!store_runs_list(campaign_store(api->campaign), http_arena(exchange), before, (size_t)limit,
                         &runs, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(rows, run_json(&runs[i]));
    return answer_json(
        exchange, 200,
        json_pack("{s:o,s:o}", "runs", rows, "next",
                  cursor_make(count == (size_t)limit, count > 0 ? runs[count - 1].id : 0)));
}

static enum http_result one(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t id;
    struct store_run run;
    struct base_error error = {0};
    if (!path_number(exchange, "id", &id))
        return HTTP_ANSWERED;
    if (!store_run_read(campaign_store(api->campaign), http_arena(exchange), id, &run, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 200, run_json(&run));
}

const struct http_route api_consensus_runs_routes[] = {
    {"POST", "/api/v1/consensus-runs", HTTP_SCIENCE, HTTP_SLOW, 1024, start},
    {"GET", "/api/v1/consensus-runs", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", CURRENT, HTTP_SCIENCE, HTTP_SLOW, 0, current},
    {"GET", "/api/v1/consensus-runs/{id}", HTTP_SCIENCE, HTTP_SLOW, 0, one},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
