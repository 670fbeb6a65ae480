/* Consensus runs: start one, watch it, list those that are kept. */
#include "call.h"
#include "routes.h"

/* Run number `run` for an answer; null for 0. */
static bool newest_run(struct api_call *call, struct store_run *out)
{
    int64_t run;
    *out = (struct store_run){0};
    return store_run_current(call->store, &run, &call->error) &&
           (run == 0 || store_run_read(call->store, call->arena, run, out, &call->error));
}

static enum http_result answer_state(struct api_call *call, unsigned status)
{
    struct store_run newest;
    const struct campaign_run_state state = campaign_run_state_now(call->campaign);
    if (!newest_run(call, &newest))
        return api_call_end(call);
    return http_answer_json(
        call->exchange, status,
        json_pack("{s:s, s:o, s:o, s:o, s:o}", "state", state.working ? "working" : "idle",
                  "fraction", api_number(state.fraction), "stage", api_text_or_null(state.stage),
                  "last_error", api_text_or_null(state.last_error), "newest",
                  newest.id == 0 ? json_null() : api_run(&newest)));
}

/* POST /consensus-runs */
static enum http_result start(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    bool ok = api_call_begin(&call, exchange, context) && api_call_no_body(&call) &&
              campaign_run_ask(call.campaign, &call.error);
    if (!ok)
        return api_call_end(&call);
    http_answer_header(exchange, "Location", "/api/v1/consensus-runs/current");
    return answer_state(&call, 202);
}

static json_t *run_row(const void *item)
{
    return api_run(item);
}

/* GET /consensus-runs */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct api_page page;
    struct store_run *runs = NULL;
    size_t count = 0;
    bool ok = api_call_begin(&call, exchange, context) && api_call_page(&call, &page) &&
              store_runs_list(call.store, call.arena, page.after, page.limit + 1, &runs, &count,
                              &call.error);
    if (!ok)
        return api_call_end(&call);
    bool more = api_page_cut(&page, &count);
    int64_t last = count > 0 ? runs[count - 1].id : 0;
    return http_answer_json(exchange, 200,
                            json_pack("{s:o, s:o}", "runs",
                                      api_list(runs, count, sizeof *runs, run_row), "next",
                                      api_page_next(more, last)));
}

/* Settings and fit are kept as JSON texts. NULL also for a text that is none. */
static json_t *run_in_full(const struct store_run *run)
{
    return api_joined(api_run(run),
                      json_pack("{s:o, s:o}", "settings", json_loads(run->settings, 0, NULL), "fit",
                                json_loads(run->fit, 0, NULL)));
}

/* GET /consensus-runs/current */
static enum http_result watch(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    return api_call_begin(&call, exchange, context) ? answer_state(&call, 200)
                                                    : api_call_end(&call);
}

/* GET /consensus-runs/{id} */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_run run;
    int64_t id;
    bool ok = api_call_begin(&call, exchange, context) &&
              api_call_number(&call, "id", "There is no such run.", &id) &&
              store_run_read(call.store, call.arena, id, &run, &call.error);
    return ok ? http_answer_json(exchange, 200, run_in_full(&run)) : api_call_end(&call);
}

const struct http_route api_consensus_runs_routes[] = {
    {"POST", "/api/v1/consensus-runs", HTTP_SCIENCE, HTTP_SLOW, 1024, start},
    {"GET", "/api/v1/consensus-runs", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/consensus-runs/current", HTTP_SCIENCE, HTTP_SLOW, 0, watch},
    {"GET", "/api/v1/consensus-runs/{id}", HTTP_SCIENCE, HTTP_SLOW, 0, show},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
