/* One call: its beginning, its address and its end. */
#include "call.h"

#include <errno.h>
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

void api_call_begin_bare(struct api_call *call, struct http_exchange *exchange, void *context)
{
    struct api *api = context;
    *call = (struct api_call){.api = api,
                              .campaign = api->campaign,
                              .store = api->store,
                              .exchange = exchange,
                              .person = http_identity(exchange)->person};
}

bool api_call_arena(struct api_call *call)
{
    call->arena = http_arena(call->exchange);
    return call->arena != NULL ||
           base_fail(&call->error, BASE_MEMORY, "There is no memory to answer a request.");
}

bool api_call_begin(struct api_call *call, struct http_exchange *exchange, void *context)
{
    api_call_begin_bare(call, exchange, context);
    return api_call_arena(call);
}

enum http_result api_call_end(struct api_call *call)
{
    json_decref(call->faults);
    call->faults = NULL;
    return call->answered ? HTTP_ANSWERED : http_answer_error(call->exchange, &call->error);
}

bool api_number_read(const char *text, int64_t *out)
{
    if (text[0] < '1' || text[0] > '9' || text[strspn(text, "0123456789")] != '\0')
        return false;
    errno = 0;
    long long value = strtoll(text, NULL, 10);
    *out = value;
    return errno == 0;
}

bool api_call_number(struct api_call *call, const char *part, const char *missing, int64_t *out)
{
    return api_number_read(http_path_part(call->exchange, part), out) ||
           base_fail(&call->error, BASE_NOT_FOUND, "%s", missing);
}

bool api_call_query(struct api_call *call, const char *const *names)
{
    call->answered = !http_query_only(call->exchange, names);
    return !call->answered;
}

bool api_call_limit(struct api_call *call, size_t *limit)
{
    int64_t asked;
    call->answered =
        !http_query_integer(call->exchange, "limit", 1, API_LIMIT_MOST, API_LIMIT_DEFAULT, &asked);
    *limit = (size_t)asked;
    return !call->answered;
}

bool api_call_page(struct api_call *call, struct api_page *out)
{
    static const char *const names[] = {"limit", "cursor", NULL};
    *out = (struct api_page){0};
    if (!api_call_query(call, names) || !api_call_limit(call, &out->limit))
        return false;
    const char *cursor = http_query(call->exchange, "cursor");
    return cursor == NULL || api_number_read(cursor, &out->after) ||
           base_fail_field(&call->error, BASE_INVALID, "cursor",
                           "This cursor is not one that this list gave.");
}

bool api_page_cut(const struct api_page *page, size_t *count)
{
    bool more = *count > page->limit;
    *count = more ? page->limit : *count;
    return more;
}

json_t *api_page_next(bool more, int64_t last)
{
    return more ? json_sprintf("%" PRId64, last) : json_null();
}
