/* The description of this interface. */
#include "call.h"
#include "routes.h"

/* GET /openapi.json */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    const struct api *api = context;
    return http_answer_kept(exchange, api->description);
}

const struct http_route api_openapi_routes[] = {
    {"GET", "/api/v1/openapi.json", HTTP_ANYONE, 0, 0, show},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
