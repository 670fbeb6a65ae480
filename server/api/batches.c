#include "inside.h"

static const char *const states[] = {[STORE_BATCH_LOADING] = "loading",
                                     [STORE_BATCH_READY] = "ready",
                                     [STORE_BATCH_WITHDRAWN] = "withdrawn"};
static const char *const outcomes[] = {[STORE_FILE_UNKNOWN] = "unknown",
                                       [STORE_FILE_LOADED] = "loaded",
                                       [STORE_FILE_REPEATED] = "repeated",
                                       [STORE_FILE_REFUSED] = "refused"};

static json_t *batch_json(const struct store_batch *batch)
{
    return json_pack("{s:I,s:s,s:s,s:s,s:o,s:o,s:{s:I,s:I,s:I},s:I,s:I,s:I}", "batch",
                     (json_int_t)batch->id, "name", batch->name, "source", batch->source, "state",
                     states[batch->state], "begun", json_time(batch->begun_ms), "finished",
                     json_time(batch->finished_ms), "files", "loaded",
                     (json_int_t)batch->files_loaded, "repeated", (json_int_t)batch->files_repeated,
                     "refused", (json_int_t)batch->files_refused, "stars", (json_int_t)batch->stars,
                     "segments", (json_int_t)batch->segments, "points", (json_int_t)batch->points);
}

static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct store_batch *batches;
    size_t count;
    struct base_error error = {0};
    if (!store_batches_list(campaign_store(api->campaign), http_arena(exchange), &batches, &count,
                            &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(rows, batch_json(&batches[i]));
    return answer_json(exchange, 200, json_pack("{s:o}", "batches", rows));
}

static bool find(struct http_exchange *exchange, struct api_server *api, int64_t id,
                 struct store_batch *out, struct base_error *error)
{
    struct store_batch *batches;
    size_t count;
    if (!store_batches_list(campaign_store(api->campaign), http_arena(exchange), &batches, &count,
                            error))
        return false;
    for (size_t i = 0; i < count; i++)
        if (batches[i].id == id) {
            *out = batches[i];
            return true;
        }
    return base_fail(error, BASE_NOT_FOUND, "There is no such batch.");
}

static enum http_result one(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t id, limit, after;
    struct store_batch batch;
    struct store_file *files;
    size_t count;
    struct base_error error = {0};
    if (!path_number(exchange, "id", &id) ||
        !http_query_integer(exchange, "limit", 1, 1000, 100, &limit) ||
        !cursor_read(exchange, &after))
        return HTTP_ANSWERED;
    if (!find(exchange, api, id, &batch, &error) ||
        !store_batch_files(campaign_store(api->campaign), http_arena(exchange), id, after,
                           (size_t)limit, &files, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(rows, json_pack("{s:s,s:s,s:s,s:I}", "label", files[i].label,
                                                    "outcome", outcomes[files[i].outcome], "reason",
                                                    files[i].reason, "bytes",
                                                    (json_int_t)files[i].bytes));
    json_t *answer = batch_json(&batch);
    (void)json_object_set_new(answer, "outcomes", rows);
    (void)json_object_set_new(
        answer, "next", cursor_make(count == (size_t)limit, count > 0 ? files[count - 1].id : 0));
    return answer_json(exchange, 200, answer);
}

static enum http_result withdraw(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t id;
    struct store_batch batch;
    struct base_error error = {0};
    if (!path_number(exchange, "id", &id))
        return HTTP_ANSWERED;
    if (!campaign_batch_withdraw(api->campaign, id, &error) ||
        !find(exchange, api, id, &batch, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 200, batch_json(&batch));
}

const struct http_route api_batches_routes[] = {
    {"GET", "/api/v1/batches", HTTP_ADMIN, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/batches/{id}", HTTP_ADMIN, HTTP_SLOW, 0, one},
    {"POST", "/api/v1/batches/{id}/withdrawal", HTTP_ADMIN, HTTP_SLOW, 1024, withdraw},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
