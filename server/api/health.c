/* For whoever looks after the machine: is the program there, and can it take work? */
#include "call.h"
#include "ebbmark/log.h"
#include "routes.h"

/* GET /healthz */
static enum http_result up(struct http_exchange *exchange, void *context)
{
    (void)context;
    return http_answer_json(exchange, 200, json_pack("{s:s}", "status", "up"));
}

/* GET /readyz */
static enum http_result ready(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    if (!api_call_begin(&call, exchange, context))
        return api_call_end(&call);
    if (!store_ready(call.store, &call.error))
        return http_answer_problem(exchange, "not_ready", NULL, "%s", call.error.sentence);
    return http_answer_json(exchange, 200, json_pack("{s:s}", "status", "ready"));
}

const struct http_route api_health_routes[] = {{"GET", "/healthz", HTTP_ANYONE, 0, 0, up},
                                               {"GET", "/readyz", HTTP_ANYONE, HTTP_SLOW, 0, ready},
                                               {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
