#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <zlib.h>

#include "client.h"

#define SAME_SITE "Ebbmark-Request: 1\r\n"
#define REVIEWER "Cookie: ebbmark_session=reviewer\r\n"
#define JSON "Content-Type: application/json\r\n"

/* ---- a small application ----------------------------------------------------------------------
 */

struct application {
    struct http_kept_body *kept;
    unsigned asked; /* how often identify was called */
};

static bool identify(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    static const struct {
        const char *secret;
        struct http_identity identity;
    } people[] = {{"reviewer", {.person = 7, .role = HTTP_REVIEWER}},
                  {"science", {.person = 8, .role = HTTP_SCIENCE}},
                  {"away", {.person = 9, .role = HTTP_ADMIN, .suspended = true}},
                  {"ended", {.person = 10, .role = HTTP_ADMIN, .ends_ms = 1000}},
                  {"script", {.person = 11, .role = HTTP_ADMIN}}};
    struct application *application = context;
    __atomic_fetch_add(&application->asked, 1, __ATOMIC_RELAXED);
    for (size_t i = 0; i < sizeof people / sizeof people[0]; i++)
        if (strcmp(people[i].secret, secret) == 0 && is_token == (i == 4)) {
            *out = people[i].identity;
            return true;
        }
    return false;
}

static enum http_result echo(struct http_exchange *exchange, void *context)
{
    (void)context;
    size_t size;
    const char *body = http_body(exchange, &size);
    const char *query = http_query(exchange, "say"), *header = http_header(exchange, "x-odd");
    return http_answer_json(exchange, 200,
                            json_pack("{s:s, s:s?, s:s?, s:s%, s:I, s:b, s:s?, s:s}", "part",
                                      http_path_part(exchange, "part"), "query", query, "header",
                                      header, "body", body, size, "person",
                                      (json_int_t)http_identity(exchange)->person, "token",
                                      http_identity(exchange)->by_token, "secret",
                                      http_secret(exchange), "address", http_address(exchange)));
}

static enum http_result object(struct http_exchange *exchange, void *context)
{
    (void)context;
    json_t *body;
    if (!http_body_json(exchange, &body))
        return HTTP_ANSWERED;
    return http_answer_json(exchange, 201, json_incref(body));
}

static enum http_result page(struct http_exchange *exchange, void *context)
{
    (void)context;
    int64_t limit;
    double least;
    if (!http_query_integer(exchange, "limit", 1, 1000, 100, &limit) ||
        !http_query_real(exchange, "least", 0.0, 1.0, 0.25, &least))
        return HTTP_ANSWERED;
    return http_answer_json(exchange, 200, json_pack("{s:I, s:f}", "limit", limit, "least", least));
}

static enum http_result large(struct http_exchange *exchange, void *context)
{
    (void)context;
    json_t *list = json_array();
    for (int i = 0; i < 1000; i++)
        (void)json_array_append_new(list, json_pack("{s:i}", "number", i));
    return http_answer_json(exchange, 200, list);
}

static enum http_result kept(struct http_exchange *exchange, void *context)
{
    return http_answer_kept(exchange, ((struct application *)context)->kept);
}

static enum http_result kept_with_header(struct http_exchange *exchange, void *context)
{
    http_answer_header(exchange, "X-Own", "yes");
    return http_answer_kept(exchange, ((struct application *)context)->kept);
}

static enum http_result cookie(struct http_exchange *exchange, void *context)
{
    (void)context;
    bool clear = http_query(exchange, "clear") != NULL;
    http_answer_cookie(exchange, clear ? NULL : "fresh", 3600);
    return http_answer_empty(exchange, 204);
}

static enum http_result fail_as(struct http_exchange *exchange, void *context)
{
    (void)context;
    int64_t kind;
    if (!http_query_integer(exchange, "kind", BASE_INVALID, BASE_INTERNAL, 1, &kind))
        return HTTP_ANSWERED;
    struct base_error error;
    (void)base_fail_field(&error, (enum base_error_kind)kind, kind == BASE_INVALID ? "flux" : "",
                          "A sentence with a private path.");
    return http_answer_error(exchange, &error);
}

static enum http_result fields(struct http_exchange *exchange, void *context)
{
    (void)context;
    return http_answer_fields(exchange,
                              json_pack("[{s:s,s:s},{s:s,s:s}]", "field", "a", "detail",
                                        "A is odd.", "field", "b", "detail", "B is odd."));
}

static enum http_result broken_header(struct http_exchange *exchange, void *context)
{
    (void)context;
    http_answer_header(exchange, "X-Name", "two\r\nSet-Cookie: stolen=1");
    return http_answer_empty(exchange, 204);
}

static enum http_result negotiate(struct http_exchange *exchange, void *context)
{
    static const char *const types[] = {"text/csv", "application/json"};
    (void)context;
    int best = http_accept_best(exchange, types, 2);
    if (best < 0)
        return http_answer_problem(exchange, "not_acceptable", NULL, "CSV or JSON.");
    return http_answer_bytes(exchange, 200, types[best], "x", 1);
}

static enum http_result odd_detail(struct http_exchange *exchange, void *context)
{
    (void)context;
    char long_text[600];
    memset(long_text, 'x', sizeof long_text);
    for (size_t i = 0; i + 2 < sizeof long_text; i += 2)
        memcpy(long_text + i, "\xc3\xa9", 2);
    long_text[sizeof long_text - 1] = '\0';
    return http_answer_problem(exchange, "invalid", "name", "x%s", long_text);
}

static const struct http_route first_table[] = {
    {"GET", "/echo/{part}", HTTP_ANYONE, 0, 0, echo},
    {"GET", "/echo/first", HTTP_ANYONE, 0, 0, page},
    {"POST", "/echo/{part}", HTTP_ANYONE, 0, 1000, echo},
    {"POST", "/json", HTTP_ANYONE, 0, 100000, object},
    {"GET", "/page", HTTP_ANYONE, 0, 0, page},
    {"GET", "/large", HTTP_ANYONE, 0, 0, large},
    {"GET", "/kept", HTTP_ANYONE, 0, 0, kept},
    {"GET", "/kept-with-header", HTTP_ANYONE, 0, 0, kept_with_header},
    {0}};
static const struct http_route second_table[] = {
    {"POST", "/cookie", HTTP_ANYONE, 0, 0, cookie},
    {"GET", "/fail", HTTP_ANYONE, 0, 0, fail_as},
    {"GET", "/fields", HTTP_ANYONE, 0, 0, fields},
    {"GET", "/broken-header", HTTP_ANYONE, 0, 0, broken_header},
    {"GET", "/negotiate", HTTP_ANYONE, 0, 0, negotiate},
    {"GET", "/odd-detail", HTTP_ANYONE, 0, 0, odd_detail},
    {"GET", "/for/{part}", HTTP_REVIEWER, 0, 0, echo},
    {"GET", "/science/{part}", HTTP_SCIENCE, 0, 0, echo},
    {"POST", "/change/{part}", HTTP_REVIEWER, 0, 1000, echo},
    {"DELETE", "/change/{part}", HTTP_REVIEWER, 0, 0, echo},
    {0}};
static const struct http_route *const tables[] = {first_table, second_table, NULL};

static const unsigned char index_page[] = "<!doctype html><title>Desk</title>";
static const unsigned char module[] = "export const a = 1;";
static const struct http_static_file files[] = {
    {"/index.html", "text/html; charset=utf-8", index_page, sizeof index_page - 1, NULL, 0,
     "\"i\""},
    {"/record.html", "text/html; charset=utf-8", index_page, 15, NULL, 0, "\"r\""},
    {"/parts/a.js", "text/javascript", module, sizeof module - 1, (const unsigned char *)"zip", 3,
     "\"m\""}};

static struct http_server *server;
static struct application application;
static uint16_t port;

static int begin(void **state)
{
    (void)state;
    char text[8192];
    memset(text, 'a', sizeof text);
    application.kept =
        http_kept_make("text/plain", text, sizeof text, "\"k1\"", "private, max-age=9");
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .files = files,
                                         .file_count = 3,
                                         .cookie_name = "ebbmark_session",
                                         .identify = identify,
                                         .context = &application};
    server = server_begin(&options);
    port = http_port(server);
    return application.kept == NULL ? -1 : 0;
}

static int end(void **state)
{
    (void)state;
    http_stop(server, 1.0);
    http_kept_drop(application.kept);
    return 0;
}

static json_t *reply_json(const struct reply *reply)
{
    json_error_t error;
    json_t *json = json_loads(reply->body, 0, &error);
    if (json == NULL)
        fail_msg("%s: %s%s", error.text, reply->head, reply->body);
    return json;
}

static const char *member(const json_t *json, const char *name)
{
    return json_string_value(json_object_get(json, name));
}

/* ---- routing ----------------------------------------------------------------------------------
 */

static void a_handler_reads_what_was_sent(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    struct reply reply =
        client_post(&client, "/echo/a%2Fb%20%C3%A9?say=h%26i", "X-Odd: \t v \t\r\n", "{}");
    json_t *json = reply_json(&reply);
    assert_int_equal(reply.status, 200);
    assert_string_equal(member(json, "part"), "a/b \xc3\xa9");
    assert_string_equal(member(json, "query"), "h&i");
    assert_string_equal(member(json, "header"), "v");
    assert_string_equal(member(json, "body"), "{}");
    assert_string_equal(member(json, "address"), "127.0.0.1");
    json_decref(json);
    reply_free(&reply);
    client_close(&client);
}

static void assert_problem(const char *method, const char *target, const char *headers,
                           unsigned status, const char *kind)
{
    struct reply reply = ask_once(port, method, target, headers);
    if (!reply_is_problem(&reply, status, kind))
        fail_msg("%s %s", method, target);
    assert_true(reply_has(&reply, "Cache-Control", "no-store"));
    reply_free(&reply);
}

static void an_unknown_address_is_not_found(void **state)
{
    (void)state;
    const char *const unknown[] = {
        "/nothing",     "/echo",   "/echo/",         "/echo/a/",
        "//echo/a",     "/ECHO/a", "/../etc/passwd", "/parts/../index.html",
        "/parts",       "/parts/", "/parts%2Fa.js",  "/index.htm",
        "/record.html/"};
    for (size_t i = 0; i < sizeof unknown / sizeof unknown[0]; i++)
        assert_problem("GET", unknown[i], "", 404, "not_found");
}

static void an_address_that_cannot_be_decoded_is_a_bad_request(void **state)
{
    (void)state;
    const char *const bad[] = {"/echo/%",     "/echo/%zz", "/echo/%00",       "/echo/%ff",
                               "/echo/a?b=%", "*",         "/echo/a?b=1&b=2", "/echo/\x01"};
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++)
        assert_problem("GET", bad[i], "", 400, "bad_request");
}

static void a_wrong_method_is_told_the_right_ones(void **state)
{
    (void)state;
    const struct {
        const char *method, *target, *allow;
    } cases[] = {{"DELETE", "/echo/x", "GET, HEAD, POST"},
                 {"PUT", "/json", "POST"},
                 {"POST", "/", "GET, HEAD"},
                 {"OPTIONS", "/change/x", "POST, DELETE"},
                 {"BREW", "/page", "GET, HEAD"}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct reply reply = ask_once(port, cases[i].method, cases[i].target, "");
        assert_true(reply_is_problem(&reply, 405, "method_not_allowed"));
        assert_true(reply_has(&reply, "Allow", cases[i].allow));
        reply_free(&reply);
    }
}

static void the_route_that_spells_out_more_wins(void **state)
{
    (void)state;
    struct reply reply = ask_once(port, "GET", "/echo/first?limit=3", "");
    json_t *json = reply_json(&reply);
    assert_int_equal(json_integer_value(json_object_get(json, "limit")), 3);
    json_decref(json);
    reply_free(&reply);
}

static void the_same_route_twice_stops_the_start(void **state)
{
    (void)state;
    static const struct http_route twice[] = {{"GET", "/a/{x}", HTTP_ANYONE, 0, 0, echo},
                                              {"GET", "/a/{y}", HTTP_ANYONE, 0, 0, echo},
                                              {0}};
    static const struct http_route *const both[] = {twice, NULL};
    const struct http_options options = {.listen = "127.0.0.1:0", .routes = both};
    struct http_server *never;
    struct base_error error;
    assert_false(http_start(&options, &never, &error));
    assert_int_equal(error.kind, BASE_INTERNAL);
    assert_null(never);
}

/* ---- keep-alive, pipelining, HEAD -------------------------------------------------------------
 */

static void a_connection_outlives_every_kind_of_answer(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const struct {
        const char *method, *target;
        unsigned status;
    } cases[] = {{"GET", "/echo/x", 200},       {"GET", "/nothing", 404}, {"HEAD", "/large", 200},
                 {"DELETE", "/echo/x", 405},    {"GET", "/echo/%", 400},  {"GET", "/for/x", 401},
                 {"POST", "/cookie", 204},      {"GET", "/kept", 200},    {"HEAD", "/kept", 200},
                 {"GET", "/fail?kind=12", 500}, {"GET", "/", 200},        {"HEAD", "/nothing", 404},
                 {"GET", "/fail?kind=7", 503},  {"GET", "/echo/x", 200}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct reply reply = client_ask(&client, cases[i].method, cases[i].target, "");
        assert_int_equal(reply.status, cases[i].status);
        assert_int_equal(client.size, 0);
        reply_free(&reply);
    }
    client_close(&client);
}

static void a_refused_body_is_read_past(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const struct {
        const char *target;
        unsigned status;
    } cases[] = {{"/nothing", 404}, {"/page", 405}, {"/change/x", 401},
                 {"/cookie", 413},  {"/json", 415}, {"/echo/%", 400}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct reply reply =
            client_post(&client, cases[i].target, "", "GET /kept HTTP/1.1\r\n\r\n");
        assert_int_equal(reply.status, cases[i].status);
        reply_free(&reply);
        reply = client_ask(&client, "GET", "/page", "");
        assert_int_equal(reply.status, 200);
        reply_free(&reply);
    }
    client_close(&client);
}

static void requests_sent_together_are_answered_in_order(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    for (int i = 0; i < 30; i++)
        assert_true(client_say(&client,
                               i % 3 == 0 ? "GET /echo/%d HTTP/1.1\r\nHost: h\r\n\r\n"
                               : i % 3 == 1
                                   ? "POST /echo/%d HTTP/1.1\r\nHost: h\r\nContent-Length: 4\r\n"
                                     "\r\nabcd"
                                   : "GET /nothing/%d HTTP/1.1\r\nHost: h\r\n\r\n",
                               i));
    for (int i = 0; i < 30; i++) {
        struct reply reply = client_read(&client, false);
        assert_int_equal(reply.status, i % 3 == 2 ? 404 : 200);
        if (i % 3 != 2) {
            json_t *json = reply_json(&reply);
            assert_int_equal(atoi(member(json, "part")), i);
            assert_string_equal(member(json, "body"), i % 3 == 1 ? "abcd" : "");
            json_decref(json);
        }
        reply_free(&reply);
    }
    client_close(&client);
}

static void head_answers_as_get_without_a_body(void **state)
{
    (void)state;
    const char *const targets[] = {"/echo/x", "/large", "/kept", "/", "/nothing"};
    for (size_t i = 0; i < sizeof targets / sizeof targets[0]; i++) {
        struct client client = client_dial(port);
        char get_length[32] = "", head_length[32] = "", type[64];
        struct reply got = client_ask(&client, "GET", targets[i], "");
        struct reply headed = client_ask(&client, "HEAD", targets[i], "");
        assert_int_equal(got.status, headed.status);
        assert_true(reply_header(&got, "Content-Length", get_length, sizeof get_length));
        assert_true(reply_header(&headed, "Content-Length", head_length, sizeof head_length));
        assert_string_equal(get_length, head_length);
        assert_true(reply_header(&headed, "Content-Type", type, sizeof type));
        assert_true(reply_has(&got, "Content-Type", type));
        reply_free(&got);
        reply_free(&headed);
        client_close(&client);
    }
}

static void an_old_client_is_answered_and_let_go(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    assert_true(client_say(&client, "GET /echo/x HTTP/1.0\r\n\r\n"));
    struct reply reply = client_read(&client, false);
    assert_int_equal(reply.status, 200);
    assert_true(client_is_closed(&client));
    reply_free(&reply);
    client_close(&client);
}

/* ---- what every answer carries ----------------------------------------------------------------
 */

static void every_answer_carries_the_protecting_headers_and_an_id(void **state)
{
    (void)state;
    const char *const targets[] = {"/echo/x", "/nothing", "/kept",   "/kept-with-header",
                                   "/",       "/large",   "/echo/%", "/fail?kind=12"};
    char ids[8][64];
    for (size_t i = 0; i < 8; i++) {
        char value[512];
        struct reply reply = ask_once(port, "GET", targets[i], "X-Request-Id: mine\r\n");
        assert_true(reply_header(&reply, "Content-Security-Policy", value, sizeof value));
        assert_non_null(strstr(value, "default-src 'self'"));
        assert_non_null(strstr(value, "frame-ancestors 'none'"));
        assert_null(strstr(value, "unsafe"));
        assert_true(reply_has(&reply, "X-Content-Type-Options", "nosniff"));
        assert_true(reply_has(&reply, "Referrer-Policy", "same-origin"));
        assert_true(reply_header(&reply, "Permissions-Policy", value, sizeof value));
        assert_true(reply_has(&reply, "Cross-Origin-Opener-Policy", "same-origin"));
        assert_true(reply_has(&reply, "Cross-Origin-Resource-Policy", "same-origin"));
        assert_true(reply_header(&reply, "Cache-Control", value, sizeof value));
        assert_true(reply_header(&reply, "Ebbmark-Request-Id", ids[i], sizeof ids[i]));
        assert_int_equal(strlen(ids[i]), 16);
        for (size_t j = 0; j < i; j++)
            assert_string_not_equal(ids[i], ids[j]);
        reply_free(&reply);
    }
}

static void a_header_with_a_line_break_is_not_sent(void **state)
{
    (void)state;
    struct reply reply = ask_once(port, "GET", "/broken-header", "");
    assert_int_equal(reply.status, 500);
    assert_null(strstr(reply.head, "stolen"));
    reply_free(&reply);
}

static void a_detail_that_was_cut_is_still_sound_text(void **state)
{
    (void)state;
    struct reply reply = ask_once(port, "GET", "/odd-detail", "");
    assert_true(reply_is_problem(&reply, 422, "invalid"));
    assert_true(reply.size > 500);
    reply_free(&reply);
}

/* ---- problems ---------------------------------------------------------------------------------
 */

static void an_error_becomes_the_problem_it_stands_for(void **state)
{
    (void)state;
    const struct {
        enum base_error_kind kind;
        unsigned status;
        const char *problem;
    } cases[] = {{BASE_INVALID, 422, "invalid"},     {BASE_DENIED, 403, "not_allowed"},
                 {BASE_NOT_FOUND, 404, "not_found"}, {BASE_CONFLICT, 409, "conflict"},
                 {BASE_TOO_LARGE, 413, "too_large"}, {BASE_DISK_FULL, 507, "disk_full"},
                 {BASE_BUSY, 503, "overloaded"},     {BASE_MEMORY, 500, "internal"},
                 {BASE_IO, 500, "internal"},         {BASE_CORRUPT, 500, "internal"},
                 {BASE_CANCELLED, 500, "internal"},  {BASE_INTERNAL, 500, "internal"}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        char target[32], id[32];
        (void)snprintf(target, sizeof target, "/fail?kind=%d", (int)cases[i].kind);
        struct reply reply = ask_once(port, "GET", target, "");
        assert_true(reply_is_problem(&reply, cases[i].status, cases[i].problem));
        json_t *json = reply_json(&reply);
        bool told = strstr(member(json, "detail"), "private") != NULL;
        assert_true(told == (cases[i].status != 500));
        assert_true(reply_header(&reply, "Ebbmark-Request-Id", id, sizeof id));
        assert_true(told || strstr(member(json, "detail"), id) != NULL);
        assert_true(reply_has(&reply, "Retry-After", "2") == (cases[i].kind == BASE_BUSY));
        if (cases[i].kind == BASE_INVALID)
            assert_string_equal(member(json_array_get(json_object_get(json, "fields"), 0), "field"),
                                "flux");
        json_decref(json);
        reply_free(&reply);
    }
}

static void several_fields_at_fault_are_named_together(void **state)
{
    (void)state;
    struct reply reply = ask_once(port, "GET", "/fields", "");
    assert_true(reply_is_problem(&reply, 422, "invalid"));
    json_t *json = reply_json(&reply);
    assert_int_equal(json_array_size(json_object_get(json, "fields")), 2);
    json_decref(json);
    reply_free(&reply);
}

static void every_kind_of_problem_is_told_once(void **state)
{
    (void)state;
    size_t count;
    const struct http_problem_kind *kinds = http_problem_kinds(&count);
    assert_true(count >= 20);
    for (size_t i = 0; i < count; i++) {
        assert_in_range(kinds[i].status, 400, 599);
        for (size_t j = 0; j < i; j++)
            assert_string_not_equal(kinds[i].kind, kinds[j].kind);
    }
}

/* ---- JSON and queries -------------------------------------------------------------------------
 */

static void a_json_body_is_read(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const char *const types[] = {"application/json", "Application/JSON; charset=utf-8",
                                 "application/json;charset=\"UTF-8\""};
    for (size_t i = 0; i < 3; i++) {
        char header[128];
        (void)snprintf(header, sizeof header, "Content-Type: %s\r\n", types[i]);
        struct reply reply = client_post(&client, "/json", header, "{\"a\": [1, 2.5]}");
        assert_int_equal(reply.status, 201);
        assert_string_equal(reply.body, "{\"a\":[1,2.5]}");
        reply_free(&reply);
    }
    client_close(&client);
}

static void malformed_json_is_told_where(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    char deep[20001];
    memset(deep, '[', sizeof deep - 1);
    deep[sizeof deep - 1] = '\0';
    const char *const malformed[] = {"",
                                     "{",
                                     "{\"a\":1,}",
                                     "{\"a\":01}",
                                     "nope",
                                     "{} {}",
                                     "{\"a\":\"\xff\"}",
                                     "{\"a\":\"\\u0000\"}",
                                     "{\"a\":1,\"a\":2}",
                                     "{\"a\":1e999}",
                                     "{\"\xc3\":1}",
                                     deep};
    for (size_t i = 0; i < sizeof malformed / sizeof malformed[0]; i++) {
        struct reply reply = client_post(&client, "/json", JSON, malformed[i]);
        assert_true(reply_is_problem(&reply, 400, "malformed_json"));
        assert_non_null(strstr(reply.body, "line 1, column"));
        reply_free(&reply);
    }
    struct reply reply = client_post(&client, "/json", JSON, "{\n  \"a\": x\n}");
    assert_non_null(strstr(reply.body, "line 2, column 8"));
    reply_free(&reply);
    client_close(&client);
}

static void a_body_that_is_no_json_object_is_refused(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    struct reply reply = client_post(&client, "/json", JSON, "[1]");
    assert_true(reply_is_problem(&reply, 422, "invalid"));
    reply_free(&reply);
    const char *const types[] = {"", "Content-Type: text/plain\r\n",
                                 "Content-Type: application/jsonx\r\n",
                                 "Content-Type: application/json; charset=latin1\r\n",
                                 "Content-Type: application/x-www-form-urlencoded\r\n"};
    for (size_t i = 0; i < sizeof types / sizeof types[0]; i++) {
        reply = client_post(&client, "/json", types[i], "{}");
        assert_true(reply_is_problem(&reply, 415, "unsupported_media_type"));
        reply_free(&reply);
    }
    reply = client_post(&client, "/json", JSON "Content-Encoding: gzip\r\n", "{}");
    assert_true(reply_is_problem(&reply, 415, "unsupported_media_type"));
    reply_free(&reply);
    client_close(&client);
}

static void a_number_in_the_query_is_held_to_its_range(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const char *const good[] = {"/page", "/page?limit=1", "/page?limit=1000&least=1",
                                "/page?least=1e-3", "/page?least=0"};
    const char *const bad[] = {"/page?limit=0",    "/page?limit=1001",
                               "/page?limit=",     "/page?limit=1.5",
                               "/page?limit=-1",   "/page?limit=x",
                               "/page?limit=%201", "/page?limit=99999999999999999999",
                               "/page?least=1.1",  "/page?least=nan",
                               "/page?least=inf",  "/page?least=0x1",
                               "/page?least=",     "/page?least=-0.1"};
    for (size_t i = 0; i < sizeof good / sizeof good[0]; i++) {
        struct reply reply = client_ask(&client, "GET", good[i], "");
        assert_int_equal(reply.status, 200);
        reply_free(&reply);
    }
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct reply reply = client_ask(&client, "GET", bad[i], "");
        assert_true(reply_is_problem(&reply, 422, "invalid"));
        json_t *json = reply_json(&reply);
        const char *field = member(json_array_get(json_object_get(json, "fields"), 0), "field");
        assert_int_equal(strncmp(field, bad[i] + 6, 5), 0);
        json_decref(json);
        reply_free(&reply);
    }
    client_close(&client);
}

static void the_answer_is_of_the_type_that_was_asked_for(void **state)
{
    (void)state;
    struct reply reply = ask_once(port, "GET", "/negotiate", "Accept: application/json\r\n");
    assert_true(reply_has(&reply, "Content-Type", "application/json"));
    reply_free(&reply);
    reply = ask_once(port, "GET", "/negotiate", "");
    assert_true(reply_has(&reply, "Content-Type", "text/csv"));
    reply_free(&reply);
    assert_problem("GET", "/negotiate", "Accept: image/png\r\n", 406, "not_acceptable");
}

/* ---- compression and revalidation -------------------------------------------------------------
 */

static size_t inflated(const struct reply *reply, char *out, size_t room)
{
    z_stream stream = {.next_in = (unsigned char *)reply->body,
                       .avail_in = (uInt)reply->size,
                       .next_out = (unsigned char *)out,
                       .avail_out = (uInt)room};
    assert_int_equal(inflateInit2(&stream, MAX_WBITS + 16), Z_OK);
    assert_int_equal(inflate(&stream, Z_FINISH), Z_STREAM_END);
    assert_int_equal(inflateEnd(&stream), Z_OK);
    return stream.total_out;
}

static void a_large_answer_is_compressed_when_accepted(void **state)
{
    (void)state;
    static char text[65536];
    const char *const targets[] = {"/large", "/kept"};
    for (size_t i = 0; i < 2; i++) {
        struct client client = client_dial(port);
        struct reply plain = client_ask(&client, "GET", targets[i], "");
        struct reply small = client_ask(&client, "GET", targets[i], "Accept-Encoding: gzip\r\n");
        assert_false(reply_has(&plain, "Content-Encoding", "gzip"));
        assert_true(reply_has(&small, "Content-Encoding", "gzip"));
        assert_true(reply_has(&small, "Vary", "Accept, Accept-Encoding"));
        assert_true(small.size < plain.size / 2);
        assert_int_equal(inflated(&small, text, sizeof text), plain.size);
        assert_memory_equal(text, plain.body, plain.size);
        reply_free(&plain);
        reply_free(&small);
        client_close(&client);
    }
    struct reply reply = ask_once(port, "GET", "/echo/x", "Accept-Encoding: gzip\r\n");
    assert_false(reply_has(&reply, "Content-Encoding", "gzip"));
    reply_free(&reply);
}

static void a_kept_body_is_not_sent_to_whoever_has_it(void **state)
{
    (void)state;
    const char *const targets[] = {"/kept", "/kept-with-header", "/kept"};
    for (size_t i = 0; i < 3; i++) {
        struct client client = client_dial(port);
        struct reply reply = client_ask(&client, "GET", targets[i], "");
        assert_int_equal(reply.status, 200);
        assert_int_equal(reply.size, 8192);
        assert_true(reply_has(&reply, "ETag", "\"k1\""));
        assert_true(reply_has(&reply, "Cache-Control", "private, max-age=9"));
        assert_true(reply_has(&reply, "X-Own", "yes") == (i == 1));
        reply_free(&reply);
        reply = client_ask(&client, "GET", targets[i], "Accept-Encoding: gzip\r\n");
        assert_true(reply_has(&reply, "ETag", "\"k1-gzip\""));
        reply_free(&reply);
        const char *const held[] = {"If-None-Match: \"k1\"\r\n", "If-None-Match: \"k1-gzip\"\r\n",
                                    "If-None-Match: \"x\", W/\"k1\"\r\n", "If-None-Match: *\r\n"};
        for (size_t j = 0; j < 4; j++) {
            reply = client_ask(&client, "GET", targets[i], held[j]);
            assert_int_equal(reply.status, 304);
            assert_true(reply_has(&reply, "ETag", "\"k1\""));
            assert_true(reply_has(&reply, "Cache-Control", "private, max-age=9"));
            reply_free(&reply);
        }
        reply = client_ask(&client, "GET", targets[i], "If-None-Match: \"k2\"\r\n");
        assert_int_equal(reply.status, 200);
        reply_free(&reply);
        client_close(&client);
    }
}

static void a_kept_body_counts_both_its_forms(void **state)
{
    (void)state;
    struct http_kept_body *body = http_kept_make("a/b", "abc", 3, NULL, NULL);
    assert_int_equal(http_kept_size(body), 3);
    http_kept_hold(body);
    http_kept_drop(body);
    http_kept_drop(body);
    assert_in_range(http_kept_size(application.kept), 8193, 9000);
}

/* ---- pages ------------------------------------------------------------------------------------
 */

static void a_page_is_found_by_its_short_name(void **state)
{
    (void)state;
    const struct {
        const char *target, *etag;
    } cases[] = {{"/", "\"i\""},       {"/index.html", "\"i\""}, {"/index", "\"i\""},
                 {"/record", "\"r\""}, {"/?a=b", "\"i\""},       {"/parts/a.js", "\"m\""}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct reply reply = ask_once(port, "GET", cases[i].target, "");
        assert_int_equal(reply.status, 200);
        assert_true(reply_has(&reply, "ETag", cases[i].etag));
        assert_true(reply_has(&reply, "Cache-Control", "no-cache"));
        reply_free(&reply);
    }
    struct reply reply = ask_once(port, "GET", "/parts/a.js", "Accept-Encoding: gzip\r\n");
    assert_string_equal(reply.body, "zip");
    assert_true(reply_has(&reply, "Content-Encoding", "gzip"));
    reply_free(&reply);
    reply = ask_once(port, "GET", "/", "If-None-Match: \"i\"\r\n");
    assert_int_equal(reply.status, 304);
    reply_free(&reply);
}

/* ---- who --------------------------------------------------------------------------------------
 */

static void a_route_is_for_those_it_names(void **state)
{
    (void)state;
    assert_problem("GET", "/for/x", "", 401, "not_signed_in");
    assert_problem("GET", "/for/x", "Cookie: ebbmark_session=stranger\r\n", 401, "not_signed_in");
    assert_problem("GET", "/for/x", "Cookie: ebbmark_session=ended\r\n", 401, "not_signed_in");
    assert_problem("GET", "/for/x", "Cookie: ebbmark_session=away\r\n", 403, "suspended");
    assert_problem("GET", "/science/x", REVIEWER, 403, "not_allowed");
    /* A cookie's secret is no token, nor the other way round. */
    assert_problem("GET", "/for/x", "Authorization: Bearer reviewer\r\n", 401, "not_signed_in");
    assert_problem("GET", "/for/x", "Cookie: ebbmark_session=script\r\n", 401, "not_signed_in");
    struct reply reply = ask_once(port, "GET", "/for/x", "");
    assert_true(reply_has(&reply, "WWW-Authenticate", "Bearer realm=\"Ebbmark\""));
    reply_free(&reply);
    const char *const allowed[] = {"Cookie: ebbmark_session=science\r\n",
                                   "Authorization: Bearer script\r\n"};
    for (size_t i = 0; i < 2; i++) {
        reply = ask_once(port, "GET", "/science/x", allowed[i]);
        json_t *json = reply_json(&reply);
        assert_int_equal(json_integer_value(json_object_get(json, "person")), i == 0 ? 8 : 11);
        assert_true(json_is_true(json_object_get(json, "token")) == (i == 1));
        assert_string_equal(member(json, "secret"), i == 0 ? "science" : "script");
        json_decref(json);
        reply_free(&reply);
    }
}

static void a_wrong_token_does_not_fall_back_to_the_cookie(void **state)
{
    (void)state;
    assert_problem("GET", "/for/x", REVIEWER "Authorization: Bearer wrong\r\n", 401,
                   "not_signed_in");
    struct reply reply = ask_once(port, "GET", "/for/x", REVIEWER "Authorization: Basic YTpi\r\n");
    assert_int_equal(reply.status, 200);
    reply_free(&reply);
}

static void a_change_by_cookie_needs_our_own_header(void **state)
{
    (void)state;
    assert_problem("POST", "/change/x", REVIEWER, 403, "missing_request_header");
    assert_problem("DELETE", "/change/x", REVIEWER "Ebbmark-Request: 2\r\n", 403,
                   "missing_request_header");
    assert_problem("POST", "/change/x", REVIEWER SAME_SITE "Sec-Fetch-Site: cross-site\r\n", 403,
                   "not_allowed");
    assert_problem("POST", "/cookie", "Sec-Fetch-Site: cross-site\r\n", 403, "not_allowed");
    const struct {
        const char *method, *target, *headers;
        unsigned status;
    } fine[] = {{"POST", "/change/x", REVIEWER SAME_SITE, 200},
                {"DELETE", "/change/x",
                 REVIEWER "Ebbmark-Request: 1 \r\nSec-Fetch-Site: same-origin\r\n", 200},
                {"POST", "/change/x", "Authorization: Bearer script\r\n", 200},
                {"GET", "/for/x", REVIEWER "Sec-Fetch-Site: cross-site\r\n", 200},
                {"POST", "/cookie", "Sec-Fetch-Site: none\r\n", 204}};
    for (size_t i = 0; i < sizeof fine / sizeof fine[0]; i++) {
        struct reply reply = ask_once(port, fine[i].method, fine[i].target, fine[i].headers);
        assert_int_equal(reply.status, fine[i].status);
        reply_free(&reply);
    }
}

static void an_identity_is_asked_for_once_and_forgotten_on_demand(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    http_identity_forget(server, 0);
    unsigned before = __atomic_load_n(&application.asked, __ATOMIC_RELAXED);
    for (int i = 0; i < 10; i++) {
        struct reply reply = client_ask(&client, "GET", "/for/x", REVIEWER);
        assert_int_equal(reply.status, 200);
        reply_free(&reply);
    }
    assert_int_equal(__atomic_load_n(&application.asked, __ATOMIC_RELAXED), before + 1);
    for (int64_t person = 6; person <= 7; person++) {
        http_identity_forget(server, person);
        struct reply reply = client_ask(&client, "GET", "/for/x", REVIEWER);
        reply_free(&reply);
        assert_int_equal(__atomic_load_n(&application.asked, __ATOMIC_RELAXED),
                         before + (person == 7 ? 2 : 1));
    }
    client_close(&client);
}

static void the_session_cookie_is_out_of_scripts_reach(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    struct reply reply = client_post(&client, "/cookie", "", "");
    assert_true(reply_has(&reply, "Set-Cookie",
                          "ebbmark_session=fresh; Path=/; Max-Age=3600; HttpOnly; "
                          "SameSite=Strict"));
    reply_free(&reply);
    reply = client_post(&client, "/cookie?clear", "", "");
    assert_true(reply_has(&reply, "Set-Cookie",
                          "ebbmark_session=; Path=/; Max-Age=0; HttpOnly; SameSite=Strict"));
    reply_free(&reply);
    client_close(&client);
}

static void a_taken_port_and_a_wrong_address_are_told_apart(void **state)
{
    (void)state;
    char taken[32];
    (void)snprintf(taken, sizeof taken, "127.0.0.1:%u", port);
    const struct {
        const char *listen;
        enum base_error_kind kind;
    } cases[] = {{taken, BASE_CONFLICT},
                 {"127.0.0.1", BASE_INVALID},
                 {":80", BASE_INVALID},
                 {"::1:80", BASE_INVALID},
                 {"[::1]", BASE_INVALID},
                 {"127.0.0.1:x", BASE_INVALID},
                 {"host.invalid:1", BASE_INVALID},
                 {"127.0.0.1:99999", BASE_INVALID}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        const struct http_options options = {.listen = cases[i].listen, .routes = tables};
        struct http_server *never = NULL;
        struct base_error error = {0};
        if (http_start(&options, &never, &error))
            fail_msg("it listens on %s", cases[i].listen);
        assert_int_equal(error.kind, cases[i].kind);
    }
}

static void it_listens_on_ipv6_too(void **state)
{
    (void)state;
    const struct http_options options = {.listen = "[::1]:0", .routes = tables, .threads = 1};
    struct http_server *six = NULL;
    struct base_error error = {0};
    if (!http_start(&options, &six, &error)) {
        print_message("no IPv6 on this machine: %s\n", error.sentence);
        skip();
    }
    const struct sockaddr_in6 address = {.sin6_family = AF_INET6,
                                         .sin6_port = htons(http_port(six)),
                                         .sin6_addr = IN6ADDR_LOOPBACK_INIT};
    struct client client = {.fd = socket(AF_INET6, SOCK_STREAM, 0), .data = malloc(CLIENT_ROOM)};
    assert_int_equal(connect(client.fd, (const struct sockaddr *)&address, sizeof address), 0);
    struct reply reply = client_ask(&client, "GET", "/echo/x", "");
    json_t *json = reply_json(&reply);
    assert_string_equal(member(json, "address"), "::1");
    json_decref(json);
    reply_free(&reply);
    client_close(&client);
    http_stop(six, 0.0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_handler_reads_what_was_sent),
        cmocka_unit_test(an_unknown_address_is_not_found),
        cmocka_unit_test(an_address_that_cannot_be_decoded_is_a_bad_request),
        cmocka_unit_test(a_wrong_method_is_told_the_right_ones),
        cmocka_unit_test(the_route_that_spells_out_more_wins),
        cmocka_unit_test(the_same_route_twice_stops_the_start),
        cmocka_unit_test(a_connection_outlives_every_kind_of_answer),
        cmocka_unit_test(a_refused_body_is_read_past),
        cmocka_unit_test(requests_sent_together_are_answered_in_order),
        cmocka_unit_test(head_answers_as_get_without_a_body),
        cmocka_unit_test(an_old_client_is_answered_and_let_go),
        cmocka_unit_test(every_answer_carries_the_protecting_headers_and_an_id),
        cmocka_unit_test(a_header_with_a_line_break_is_not_sent),
        cmocka_unit_test(a_detail_that_was_cut_is_still_sound_text),
        cmocka_unit_test(an_error_becomes_the_problem_it_stands_for),
        cmocka_unit_test(several_fields_at_fault_are_named_together),
        cmocka_unit_test(every_kind_of_problem_is_told_once),
        cmocka_unit_test(a_json_body_is_read),
        cmocka_unit_test(malformed_json_is_told_where),
        cmocka_unit_test(a_body_that_is_no_json_object_is_refused),
        cmocka_unit_test(a_number_in_the_query_is_held_to_its_range),
        cmocka_unit_test(the_answer_is_of_the_type_that_was_asked_for),
        cmocka_unit_test(a_large_answer_is_compressed_when_accepted),
        cmocka_unit_test(a_kept_body_is_not_sent_to_whoever_has_it),
        cmocka_unit_test(a_kept_body_counts_both_its_forms),
        cmocka_unit_test(a_page_is_found_by_its_short_name),
        cmocka_unit_test(a_route_is_for_those_it_names),
        cmocka_unit_test(a_wrong_token_does_not_fall_back_to_the_cookie),
        cmocka_unit_test(a_change_by_cookie_needs_our_own_header),
        cmocka_unit_test(an_identity_is_asked_for_once_and_forgotten_on_demand),
        cmocka_unit_test(the_session_cookie_is_out_of_scripts_reach),
        cmocka_unit_test(a_taken_port_and_a_wrong_address_are_told_apart),
        cmocka_unit_test(it_listens_on_ipv6_too),
    };
    return cmocka_run_group_tests(tests, begin, end);
}
