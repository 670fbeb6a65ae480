#include "inside.h"

static enum http_result show(struct http_exchange *exchange, void *context)
{
    (void)context;
    return http_answer_bytes(exchange, 200, "application/json", openapi_text, openapi_size);
}

const struct http_route api_openapi_routes[] = {
    {"GET", "/api/v1/openapi.json", HTTP_ANYONE, 0, 0, show},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
