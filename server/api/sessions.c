/* Signing in and out. */
#include <sodium.h>

#include "call.h"
#include "routes.h"

#define TEXT_MOST 4096
#define DAY_S 86400

bool api_session_give(struct api_call *call, const struct store_person *person)
{
    char secret[CAMPAIGN_SECRET_SIZE];
    int64_t days = campaign_settings_now(call->campaign).session_days;
    /* A session has the person's own role, whatever becomes of that: it is the lower of the two. */
    bool ok = campaign_access_give(call->campaign, STORE_SESSION, person->id, STORE_ADMIN,
                                   (double)days, secret, &call->error);
    if (ok)
        http_answer_cookie(call->exchange, secret, days * DAY_S);
    sodium_memzero(secret, sizeof secret);
    return ok;
}

static bool read_sign_in(struct api_call *call, const char **handle, const char **passphrase)
{
    static const char *const names[] = {"handle", "passphrase", NULL};
    struct api_input input = {call, NULL, ""};
    if (!api_call_body(call, false, &input.object))
        return false;
    api_input_only(&input, names);
    (void)api_input_text(&input, "handle", true, TEXT_MOST, handle);
    (void)api_input_text(&input, "passphrase", true, TEXT_MOST, passphrase);
    return api_input_end(call);
}

/* campaign_sign_in, whose refusals are told as what they are. */
static bool check_passphrase(struct api_call *call, const char *handle, const char *passphrase,
                             struct store_person *person)
{
    if (campaign_sign_in(call->campaign, handle, passphrase, call->arena, person, &call->error))
        return true;
    if (call->error.kind == BASE_DENIED) {
        (void)http_answer_problem(call->exchange,
                                  person->suspended ? "suspended" : "wrong_passphrase", NULL, "%s",
                                  call->error.sentence);
        call->answered = true;
    }
    return false;
}

/* POST /sessions */
static enum http_result sign_in(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_person person = {0};
    const char *handle = NULL, *passphrase = NULL;
    bool ok =
        api_call_begin(&call, exchange, context) && read_sign_in(&call, &handle, &passphrase) &&
        check_passphrase(&call, handle, passphrase, &person) && api_session_give(&call, &person);
    return ok ? http_answer_json(exchange, 201, api_person(&person)) : api_call_end(&call);
}

/* DELETE /sessions/current. Whoever has no session has none after it, so that is no failure. */
static enum http_result sign_out(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    if (!api_call_begin(&call, exchange, context))
        return api_call_end(&call);
    const struct http_identity *identity = http_identity(exchange);
    const char *secret = http_secret(exchange);
    if (identity->by_token)
        return http_answer_problem(exchange, "bad_request", NULL,
                                   "A token is no session; it ends by itself on its last day.");
    if (secret != NULL && !campaign_access_end(call.campaign, STORE_SESSION, secret, &call.error))
        return api_call_end(&call);
    if (identity->person != 0)
        http_identity_forget(http_server_of(exchange), identity->person);
    http_answer_cookie(exchange, NULL, 0);
    return http_answer_empty(exchange, 204);
}

const struct http_route api_sessions_routes[] = {
    {"POST", "/api/v1/sessions", HTTP_ANYONE, HTTP_SLOW, 16384, sign_in},
    {"DELETE", "/api/v1/sessions/current", HTTP_ANYONE, HTTP_SLOW, 0, sign_out},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
