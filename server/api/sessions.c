#include "sessions.h"
#include "inside.h"

#define BODY_MAX 4096

static enum http_result sign_in(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"handle", "passphrase", NULL};
    struct api_server *api = context;
    json_t *body;
    struct base_error error = {0};
    struct store_person person;
    if (!http_body_json(exchange, &body) || !members_known(exchange, body, "", known))
        return HTTP_ANSWERED;
    const char *handle = json_string_value(json_object_get(body, "handle"));
    const char *passphrase = json_string_value(json_object_get(body, "passphrase"));
    if (handle == NULL || passphrase == NULL)
        return http_answer_problem(exchange, "invalid", handle == NULL ? "handle" : "passphrase",
                                   "Give a handle and a passphrase.");
    if (!campaign_sign_in(api->campaign, handle, passphrase, http_arena(exchange), &person, &error))
        return error.kind == BASE_DENIED
                   ? http_answer_problem(exchange, "wrong_passphrase", NULL, "%s", error.sentence)
                   : http_answer_error(exchange, &error);
    if (!api_session_start(exchange, api, &person, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 201, json_person(&person));
}

static enum http_result sign_out(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct base_error error = {0};
    const char *secret = http_secret(exchange);
    if (http_identity(exchange)->by_token)
        return http_answer_problem(exchange, "bad_request", NULL,
                                   "A token is not a session; it ends on its day.");
    if (secret != NULL && !campaign_access_end(api->campaign, STORE_SESSION, secret, &error))
        return http_answer_error(exchange, &error);
    http_identity_forget(api->http, http_identity(exchange)->person);
    http_answer_cookie(exchange, NULL, 0);
    return http_answer_empty(exchange, 204);
}

const struct http_route api_sessions_routes[] = {
    {"POST", "/api/v1/sessions", HTTP_ANYONE, HTTP_SLOW, BODY_MAX, sign_in},
    {"DELETE", "/api/v1/sessions/current", HTTP_REVIEWER, HTTP_SLOW, 0, sign_out},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
