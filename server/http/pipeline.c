/*
 * The life of a request, from top to bottom: the library calls begin, then step as often as bytes
 * of the body arrive and once more at its end, then end.
 *
 *   begin      the request line is here
 *   step       first call: the head is here; the steps of `before_body` in order, each of which
 *              may answer in the handler's place
 *              with bytes: the body is kept, or thrown away after a refusal
 *              last call: handle, then answer
 *              once more after a wait: answer
 *   end        log
 *
 * An answer given to the library on the first call makes it close the connection, which costs four
 * fifths of the speed, so even a refusal waits for the end of the body, unless that is too long.
 */
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

#include "accept.h"
#include "answer.h"
#include "body.h"
#include "cookie.h"
#include "ebbmark/clock.h"
#include "head.h"
#include "kept.h"
#include "server.h"

/* ---- the steps before the body: false when the step has answered ---------------------------- */

static bool know_client(struct http_exchange *exchange)
{
    const struct http_server *server = exchange->server;
    const char *protocol = exchange->known[HTTP_KNOWN_FORWARDED_PROTO];
    exchange->ip = exchange->line->peer;
    exchange->is_secure = server->is_tls;
    exchange->wants_gzip = http_accept_gzip(exchange->known[HTTP_KNOWN_ACCEPT_ENCODING]);
    if (server->proxies.count > 0 && http_networks_hold(&server->proxies, &exchange->line->peer)) {
        exchange->ip = http_client_ip(&server->proxies, &exchange->line->peer,
                                      exchange->known[HTTP_KNOWN_FORWARDED_FOR]);
        exchange->is_secure =
            server->is_tls || (protocol != NULL && strcasecmp(protocol, "https") == 0);
    }
    return true;
}

static bool too_many(struct http_exchange *exchange, double wait_s, const char *of_whom)
{
    char seconds[24];
    (void)snprintf(seconds, sizeof seconds, "%.0f", ceil(wait_s > 1.0 ? wait_s : 1.0));
    http_answer_header(exchange, "Retry-After", seconds);
    (void)http_answer_problem(exchange, "too_many_requests", NULL,
                              "There were too many requests from this %s; wait %s s.", of_whom,
                              seconds);
    return false;
}

static bool limit_address(struct http_exchange *exchange)
{
    struct http_server *server = exchange->server;
    /* On the machine itself scripts may go as fast as they like; a proxy there is another matter.
     */
    if (server->address_limits == NULL ||
        (server->proxies.count == 0 && http_ip_is_loopback(&exchange->ip)))
        return true;
    struct http_ip household = http_ip_household(&exchange->ip);
    double wait_s;
    return http_limits_take(server->address_limits, household.bytes, sizeof household.bytes,
                            exchange->began_s, &wait_s) ||
           too_many(exchange, wait_s, "address");
}

static bool is_reading(const char *method)
{
    return strcmp(method, "GET") == 0 || strcmp(method, "HEAD") == 0;
}

static bool find_route(struct http_exchange *exchange)
{
    struct http_server *server = exchange->server;
    char allow[HTTP_ALLOW_SIZE];
    exchange->route = http_router_find(server->router, exchange->method, &exchange->target, allow);
    if (exchange->route != NULL)
        return true;
    if (allow[0] == '\0') {
        exchange->file = http_statics_find(server->statics, &exchange->target);
        if (exchange->file == NULL) {
            (void)http_answer_problem(exchange, "not_found", NULL,
                                      "There is nothing at this address.");
            return false;
        }
        if (is_reading(exchange->method))
            return true;
        (void)snprintf(allow, sizeof allow, "GET, HEAD");
    }
    http_answer_header(exchange, "Allow", allow);
    (void)http_answer_problem(exchange, "method_not_allowed", NULL, "This address takes %s.",
                              allow);
    return false;
}

/* Whose request is it? A token that was sent counts even when it is nobody's: falling back to a
 * cookie would let a page of another site borrow it. */
static bool sign_in(struct http_exchange *exchange)
{
    struct http_server *server = exchange->server;
    const char *authorization = exchange->known[HTTP_KNOWN_AUTHORIZATION];
    const char *cookies = exchange->known[HTTP_KNOWN_COOKIE];
    const char *secret;
    size_t length;
    if (server->identities == NULL || exchange->route == NULL)
        return true;
    bool by_token = authorization != NULL && http_bearer_find(authorization, &secret, &length);
    exchange->has_cookie = !by_token && cookies != NULL &&
                           http_cookie_find(cookies, server->cookie_name, &secret, &length);
    if (by_token || exchange->has_cookie)
        (void)http_identities_find(server->identities, secret, length, by_token, exchange->began_s,
                                   &exchange->identity);
    return true;
}

static bool limit_person(struct http_exchange *exchange)
{
    int64_t person = exchange->identity.person;
    double wait_s;
    return person == 0 ||
           http_limits_take(exchange->server->person_limits, &person, sizeof person,
                            exchange->began_s, &wait_s) ||
           too_many(exchange, wait_s, "person");
}

static bool check_right(struct http_exchange *exchange)
{
    static const char *const whom[] = {"anyone", "reviewers", "the science team", "admins"};
    const struct http_identity *identity = &exchange->identity;
    if (exchange->route == NULL || exchange->route->who == HTTP_ANYONE)
        return true;
    if (identity->person == 0)
        (void)http_answer_problem(exchange, "not_signed_in", NULL,
                                  "Sign in first, or send a token that has not ended.");
    else if (identity->suspended)
        (void)http_answer_problem(exchange, "suspended", NULL,
                                  "An admin has suspended this person.");
    else if (identity->role < exchange->route->who)
        (void)http_answer_problem(exchange, "not_allowed", NULL, "This is for %s.",
                                  whom[exchange->route->who]);
    return !http_exchange_is_answered(exchange);
}

/* Changes must come from our own pages. A form of another site can send neither a header of ours
 * nor hide where it is from; old browsers do not say where, so its absence proves nothing. */
static bool check_origin(struct http_exchange *exchange)
{
    const char *site = exchange->known[HTTP_KNOWN_FETCH_SITE];
    const char *ours = exchange->known[HTTP_KNOWN_OUR_REQUEST];
    if (is_reading(exchange->method) || exchange->identity.by_token)
        return true;
    if (exchange->has_cookie && (ours == NULL || strcmp(ours, "1") != 0))
        (void)http_answer_problem(exchange, "missing_request_header", NULL,
                                  "A change made with a session cookie needs the header "
                                  "Ebbmark-Request: 1.");
    else if (site != NULL && strcmp(site, "same-origin") != 0 && strcmp(site, "none") != 0)
        (void)http_answer_problem(exchange, "not_allowed", NULL,
                                  "A change must come from this server's own pages.");
    return !http_exchange_is_answered(exchange);
}

static const struct {
    const char *name; /* what the log says when it answered */
    bool (*run)(struct http_exchange *exchange);
} before_body[] = {
    {"know the client", know_client},   {"limit the address", limit_address},
    {"find the route", find_route},     {"sign in", sign_in},
    {"limit the person", limit_person}, {"check the right", check_right},
    {"check the origin", check_origin}, {"admit the body", http_body_admit},
};

/* ---- handle and answer ---------------------------------------------------------------------- */

/* True when an answer stands now. */
static bool handle(struct http_exchange *exchange)
{
    if (exchange->file != NULL) {
        (void)http_answer_kept(exchange, exchange->file);
        return true;
    }
    exchange->handed_over = (exchange->route->flags & HTTP_SLOW) != 0;
    if (exchange->handed_over)
        return !http_wait_for_worker(exchange);
    /* The handler's own hold, which http_resume gives up; it may do so before handle returns. */
    (void)atomic_fetch_add(&exchange->holders, 1);
    if (exchange->route->handle(exchange, exchange->server->context) == HTTP_LATER) {
        exchange->handed_over = true;
        return !http_wait_for_resume(exchange);
    }
    http_exchange_drop(exchange);
    return true;
}

/* Give the answer to the library. */
static enum MHD_Result answer(struct http_exchange *exchange)
{
    const struct http_server *server = exchange->server;
    struct MHD_Response *response = server->when_stopping;
    exchange->sent_status = 503;
    /* An abandoned one is its handler's still, so nothing of its answer is looked at. */
    if (!exchange->handed_over || !http_wait_is_abandoned(exchange)) {
        response = exchange->shell != NULL ? exchange->shell->response : exchange->response;
        exchange->sent_status = exchange->status;
    }
    if (response == NULL) {
        response = server->when_failed;
        exchange->sent_status = 500;
    }
    exchange->phase = HTTP_PHASE_SENT;
    return MHD_queue_response(exchange->connection, exchange->sent_status, response);
}

/* ---- what the library calls ----------------------------------------------------------------- */

void *http_pipeline_begin(void *context, const char *address, struct MHD_Connection *connection)
{
    const union MHD_ConnectionInfo *info =
        MHD_get_connection_info(connection, MHD_CONNECTION_INFO_SOCKET_CONTEXT);
    if (info == NULL || info->socket_context == NULL)
        return NULL;
    struct http_exchange *exchange = http_exchange_new(context, address == NULL ? "" : address);
    if (exchange != NULL) {
        exchange->line = info->socket_context;
        exchange->line->exchange = exchange;
    }
    return exchange;
}

/* The head is here. */
static enum MHD_Result first_call(struct http_exchange *exchange, struct MHD_Connection *connection,
                                  const char *method, const char *version)
{
    exchange->connection = connection;
    exchange->reader = pthread_self();
    exchange->method = method;
    exchange->is_head = strcmp(method, "HEAD") == 0;
    exchange->phase = HTTP_PHASE_BODY;
    (void)atomic_fetch_add(&exchange->server->in_flight, 1);
    atomic_store(&exchange->line->busy, true);
    if (!http_head_read(exchange, version))
        exchange->refused_at = "read the head";
    for (size_t i = 0;
         exchange->refused_at == NULL && i < sizeof before_body / sizeof before_body[0]; i++)
        if (!before_body[i].run(exchange))
            exchange->refused_at = before_body[i].name;
    if (exchange->refused_at == NULL)
        return MHD_YES;
    http_body_plan_refusal(exchange);
    if (exchange->body_plan != HTTP_BODY_REFUSE)
        return MHD_YES;
    exchange->line->linger = true;
    return answer(exchange);
}

enum MHD_Result http_pipeline_step(void *server, struct MHD_Connection *connection,
                                   const char *address, const char *method, const char *version,
                                   const char *data, size_t *size, void **context)
{
    struct http_exchange *exchange = *context;
    (void)server;
    (void)address;
    if (exchange == NULL)
        return MHD_NO; /* no memory for it */
    if (exchange->phase == HTTP_PHASE_HEAD)
        return first_call(exchange, connection, method, version);
    if (exchange->phase == HTTP_PHASE_SENT)
        return MHD_YES;
    if (*size > 0) {
        size_t arrived = *size;
        *size = 0;
        return http_body_take(exchange, data, arrived, base_clock_monotonic_s()) ? MHD_YES : MHD_NO;
    }
    if (exchange->phase == HTTP_PHASE_BODY) {
        exchange->phase = HTTP_PHASE_WAITING;
        if (!http_exchange_is_answered(exchange) && !handle(exchange))
            return MHD_YES; /* suspended */
    }
    return answer(exchange);
}

void http_pipeline_finish(struct http_exchange *exchange, bool cut)
{
    struct http_server *server = exchange->server;
    exchange->line->exchange = NULL;
    if (exchange->phase != HTTP_PHASE_HEAD) {
        double now_s = base_clock_monotonic_s();
        (void)atomic_fetch_add(&server->answers[exchange->sent_status / 100], 1);
        http_request_log_note(&server->request_log, exchange, now_s, cut);
        atomic_store(&exchange->line->idle_from_s, now_s);
        atomic_store(&exchange->line->busy, false);
        (void)atomic_fetch_sub(&server->in_flight, 1);
    }
    http_exchange_drop(exchange);
}

void http_pipeline_end(void *server, struct MHD_Connection *connection, void **place,
                       enum MHD_RequestTerminationCode how)
{
    (void)server;
    (void)connection;
    if (*place != NULL)
        http_pipeline_finish(*place, how != MHD_REQUEST_TERMINATED_COMPLETED_OK);
    *place = NULL;
}
