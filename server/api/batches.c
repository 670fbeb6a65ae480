/* Batches of stars: what became of their files; withdrawing one. */
#include "call.h"
#include "routes.h"

static json_t *batch_json(const void *item)
{
    static const char *const states[] = {[STORE_BATCH_LOADING] = "loading",
                                         [STORE_BATCH_READY] = "ready",
                                         [STORE_BATCH_WITHDRAWN] = "withdrawn"};
    const struct store_batch *batch = item;
    json_t *files =
        json_pack("{s:I, s:I, s:I}", "loaded", (json_int_t)batch->files_loaded, "repeated",
                  (json_int_t)batch->files_repeated, "refused", (json_int_t)batch->files_refused);
    return json_pack("{s:I, s:o, s:o, s:s, s:o, s:o, s:o, s:I, s:I, s:I}", "batch",
                     (json_int_t)batch->id, "name", api_text(batch->name), "source",
                     api_text(batch->source), "state", states[batch->state], "begun",
                     api_moment(batch->begun_ms), "finished", api_moment(batch->finished_ms),
                     "files", files, "stars", (json_int_t)batch->stars, "segments",
                     (json_int_t)batch->segments, "points", (json_int_t)batch->points);
}

static json_t *file_json(const void *item)
{
    static const char *const outcomes[] = {[STORE_FILE_UNKNOWN] = "unknown",
                                           [STORE_FILE_LOADED] = "loaded",
                                           [STORE_FILE_REPEATED] = "repeated",
                                           [STORE_FILE_REFUSED] = "refused"};
    const struct store_file *file = item;
    return json_pack("{s:o, s:s, s:o, s:I}", "label", api_text(file->label), "outcome",
                     outcomes[file->outcome], "reason", api_text(file->reason), "bytes",
                     (json_int_t)file->bytes);
}

/* GET /batches */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_batch *batches = NULL;
    size_t count = 0;
    bool ok = api_call_begin(&call, exchange, context) &&
              store_batches_list(call.store, call.arena, &batches, &count, &call.error);
    return ok ? http_answer_json(exchange, 200,
                                 json_pack("{s:o}", "batches",
                                           api_list(batches, count, sizeof *batches, batch_json)))
              : api_call_end(&call);
}

/* The batch of the path. */
static bool find(struct api_call *call, struct store_batch *out)
{
    static const char missing[] = "There is no such batch.";
    struct store_batch *batches = NULL;
    size_t count = 0;
    int64_t id;
    if (!api_call_number(call, "id", missing, &id) ||
        !store_batches_list(call->store, call->arena, &batches, &count, &call->error))
        return false;
    for (size_t i = 0; i < count; i++)
        if (batches[i].id == id) {
            *out = batches[i];
            return true;
        }
    return base_fail(&call->error, BASE_NOT_FOUND, "%s", missing);
}

/* GET /batches/{id} */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct api_page page;
    struct store_batch batch;
    struct store_file *files = NULL;
    size_t count = 0;
    bool ok = api_call_begin(&call, exchange, context) && api_call_page(&call, &page) &&
              find(&call, &batch) &&
              store_batch_files(call.store, call.arena, batch.id, page.after, page.limit + 1,
                                &files, &count, &call.error);
    if (!ok)
        return api_call_end(&call);
    bool more = api_page_cut(&page, &count);
    int64_t last = count > 0 ? files[count - 1].id : 0;
    return http_answer_json(
        exchange, 200,
        api_joined(batch_json(&batch), json_pack("{s:o, s:o}", "outcomes",
                                                 api_list(files, count, sizeof *files, file_json),
                                                 "next", api_page_next(more, last))));
}

/* POST /batches/{id}/withdrawal */
static enum http_result withdraw(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_batch batch = {0};
    bool ok = api_call_begin(&call, exchange, context) && api_call_no_body(&call) &&
              find(&call, &batch) &&
              campaign_batch_withdraw(call.campaign, batch.id, &call.error) && find(&call, &batch);
    return ok ? http_answer_json(exchange, 200, batch_json(&batch)) : api_call_end(&call);
}

const struct http_route api_batches_routes[] = {
    {"GET", "/api/v1/batches", HTTP_ADMIN, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/batches/{id}", HTTP_ADMIN, HTTP_SLOW, 0, show},
    {"POST", "/api/v1/batches/{id}/withdrawal", HTTP_ADMIN, HTTP_SLOW, 1024, withdraw},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
