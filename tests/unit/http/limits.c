#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <sodium.h>

#include "../../../server/http/identity.h"
#include "../../../server/http/limits.h"
#include "client.h"
#include "ebbmark/clock.h"

/* ---- buckets ----------------------------------------------------------------------------------
 */

static struct http_limits *limits_of(double rate, double burst, size_t slots)
{
    struct http_limits *limits = NULL;
    struct base_error error = {0};
    if (!http_limits_make(rate, burst, slots, &limits, &error))
        fail_msg("%s", error.sentence);
    return limits;
}

static void a_bucket_empties_and_fills_at_its_rate(void **state)
{
    (void)state;
    struct http_limits *limits = limits_of(2.0, 5.0, 64);
    double wait_s;
    for (int i = 0; i < 5; i++)
        assert_true(http_limits_take(limits, "a", 1, 100.0, &wait_s));
    assert_false(http_limits_take(limits, "a", 1, 100.0, &wait_s));
    assert_true(wait_s > 0.499 && wait_s < 0.501);
    assert_false(http_limits_take(limits, "a", 1, 100.25, &wait_s));
    assert_true(wait_s > 0.249 && wait_s < 0.251);
    assert_true(http_limits_take(limits, "a", 1, 100.5, &wait_s));
    assert_false(http_limits_take(limits, "a", 1, 100.5, &wait_s));
    /* An hour later it is full, and no fuller. */
    for (int i = 0; i < 5; i++)
        assert_true(http_limits_take(limits, "a", 1, 3700.0, &wait_s));
    assert_false(http_limits_take(limits, "a", 1, 3700.0, &wait_s));
    http_limits_free(limits);
}

static void one_key_does_not_use_up_anothers(void **state)
{
    (void)state;
    struct http_limits *limits = limits_of(1.0, 1.0, 64);
    double wait_s;
    assert_true(http_limits_take(limits, "a", 1, 0.0, &wait_s));
    assert_true(http_limits_take(limits, "b", 1, 0.0, &wait_s));
    assert_false(http_limits_take(limits, "a", 1, 0.0, &wait_s));
    assert_false(http_limits_take(limits, "b", 1, 0.0, &wait_s));
    http_limits_free(limits);
}

/* Keys that came once leave nearly full buckets; those give way before one that was emptied. */
static void a_crowd_does_not_refill_an_empty_bucket(void **state)
{
    (void)state;
    struct http_limits *limits = limits_of(0.001, 10.0, 64);
    double wait_s;
    for (int i = 0; i < 10; i++)
        assert_true(http_limits_take(limits, "greedy", 6, 0.0, &wait_s));
    for (uint32_t passer_by = 0; passer_by < 100000; passer_by++)
        assert_true(http_limits_take(limits, &passer_by, sizeof passer_by, 0.0, &wait_s));
    assert_false(http_limits_take(limits, "greedy", 6, 0.0, &wait_s));
    http_limits_free(limits);
}

/* ---- identities -------------------------------------------------------------------------------
 */

struct register_ {
    unsigned asked;
    bool known;
    int64_t ends_ms;
    struct http_identities *identities; /* forget everybody while being asked */
};

static bool look_up(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    struct register_ *book = context;
    book->asked++;
    if (book->identities != NULL)
        http_identities_forget(book->identities, 0);
    assert_string_equal(secret, "secret");
    *out = (struct http_identity){.person = is_token ? 2 : 1, .ends_ms = book->ends_ms};
    return book->known;
}

static bool find(struct http_identities *identities, bool is_token, double now_s, int64_t person)
{
    struct http_identity identity;
    bool found = http_identities_find(identities, "secretX", 6, is_token, now_s, &identity);
    assert_int_equal(identity.person, found ? person : 0);
    return found;
}

static void an_identity_is_remembered_for_a_few_seconds(void **state)
{
    (void)state;
    struct register_ book = {.known = true};
    struct http_identities *identities;
    assert_true(http_identities_make(look_up, &book, &identities, NULL));
    assert_true(find(identities, false, 10.0, 1));
    assert_true(find(identities, false, 14.9, 1));
    assert_int_equal(book.asked, 1);
    assert_true(find(identities, true, 14.9, 2));
    assert_int_equal(book.asked, 2);
    assert_true(find(identities, false, 15.1, 1));
    assert_int_equal(book.asked, 3);
    http_identities_forget(identities, 2);
    assert_true(find(identities, false, 15.2, 1));
    assert_int_equal(book.asked, 3);
    http_identities_forget(identities, 1);
    book.known = false;
    assert_false(find(identities, false, 15.3, 1));
    assert_false(find(identities, false, 15.3, 1));
    assert_int_equal(book.asked, 5);
    http_identities_free(identities);
}

static void an_identity_ends_when_it_says(void **state)
{
    (void)state;
    struct register_ book = {.known = true, .ends_ms = base_clock_unix_ms() + 1000};
    struct http_identities *identities;
    assert_true(http_identities_make(look_up, &book, &identities, NULL));
    assert_true(find(identities, false, 10.0, 1));
    assert_true(find(identities, false, 10.8, 1));
    assert_int_equal(book.asked, 1);
    book.ends_ms = base_clock_unix_ms() - 1;
    assert_false(find(identities, false, 11.1, 1));
    assert_int_equal(book.asked, 2);
    http_identities_free(identities);
}

/* Somebody signs out while another thread asks who they are: the old answer must not stay. */
static void what_was_asked_before_a_forgetting_is_not_kept_after_it(void **state)
{
    (void)state;
    struct register_ book = {.known = true};
    struct http_identities *identities;
    assert_true(http_identities_make(look_up, &book, &identities, NULL));
    book.identities = identities;
    assert_true(find(identities, false, 10.0, 1));
    assert_true(find(identities, false, 10.0, 1));
    assert_int_equal(book.asked, 2);
    http_identities_free(identities);
}

/* ---- a server with limits ---------------------------------------------------------------------
 */

static bool identify(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    (void)context;
    *out = (struct http_identity){.person = atoi(secret), .role = HTTP_REVIEWER};
    return !is_token && out->person > 0;
}

static enum http_result who(struct http_exchange *exchange, void *context)
{
    (void)context;
    http_answer_cookie(exchange, "fresh", 10);
    return http_answer_json(exchange, 200,
                            json_pack("{s:s, s:b}", "address", http_address(exchange), "secure",
                                      http_is_secure(exchange)));
}

static const struct http_route table[] = {{"GET", "/who", HTTP_ANYONE, 0, 0, who}, {0}};
static const struct http_route *const tables[] = {table, NULL};

static unsigned status_of(struct client *client, const char *headers)
{
    struct reply reply = client_ask(client, "GET", "/who", headers);
    unsigned status = reply.status;
    char wait[16] = "";
    if (status == 429) {
        assert_true(reply_is_problem(&reply, 429, "too_many_requests"));
        assert_true(reply_header(&reply, "Retry-After", wait, sizeof wait));
        assert_in_range(atoi(wait), 1, 100);
    }
    reply_free(&reply);
    return status;
}

static void a_person_is_limited_alone(void **state)
{
    (void)state;
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .cookie_name = "s",
                                         .identify = identify,
                                         .person_rate = 0.02,
                                         .person_burst = 3,
                                         .address_rate = 0.02,
                                         .address_burst = 1};
    struct http_server *server = server_begin(&options);
    struct client client = client_dial(http_port(server));
    for (int i = 0; i < 3; i++)
        assert_int_equal(status_of(&client, "Cookie: s=5\r\n"), 200);
    assert_int_equal(status_of(&client, "Cookie: s=5\r\n"), 429);
    assert_int_equal(status_of(&client, "Cookie: s=6\r\n"), 200);
    /* Nobody is not a person, and loopback has no limit of addresses. */
    for (int i = 0; i < 10; i++)
        assert_int_equal(status_of(&client, ""), 200);
    assert_int_equal(status_of(&client, "Cookie: s=5\r\n"), 429);
    client_close(&client);
    http_stop(server, 1.0);
}

static void an_address_behind_a_proxy_is_limited_alone(void **state)
{
    (void)state;
    static const char *const proxies[] = {"127.0.0.0/8", NULL};
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .trusted_proxies = proxies,
                                         .address_rate = 0.02,
                                         .address_burst = 2};
    struct http_server *server = server_begin(&options);
    struct client client = client_dial(http_port(server));
    const char *const one = "X-Forwarded-For: 203.0.113.9\r\n";
    const char *const other = "X-Forwarded-For: 203.0.113.10\r\n";
    assert_int_equal(status_of(&client, one), 200);
    assert_int_equal(status_of(&client, one), 200);
    assert_int_equal(status_of(&client, one), 429);
    assert_int_equal(status_of(&client, other), 200);
    /* What a client claims to the left of what the proxy saw changes nothing; nor does a header of
     * its own before the proxy's. */
    assert_int_equal(status_of(&client, "X-Forwarded-For: 1.2.3.4, 203.0.113.9\r\n"), 429);
    assert_int_equal(status_of(&client, "X-Forwarded-For: 1.2.3.4\r\n"
                                        "X-Forwarded-For: 203.0.113.9\r\n"),
                     429);
    /* All of one household's IPv6 addresses count together. */
    assert_int_equal(status_of(&client, "X-Forwarded-For: 2001:db8:1:2::1\r\n"), 200);
    assert_int_equal(status_of(&client, "X-Forwarded-For: 2001:db8:1:2:ffff::9\r\n"), 200);
    assert_int_equal(status_of(&client, "X-Forwarded-For: 2001:db8:1:2::7\r\n"), 429);
    assert_int_equal(status_of(&client, "X-Forwarded-For: 2001:db8:1:3::1\r\n"), 200);
    /* The proxy's own machine is limited too once there is a proxy. */
    assert_int_equal(status_of(&client, ""), 200);
    assert_int_equal(status_of(&client, ""), 200);
    assert_int_equal(status_of(&client, ""), 429);
    client_close(&client);
    http_stop(server, 1.0);
}

static void only_a_trusted_proxy_says_whether_it_is_secure(void **state)
{
    (void)state;
    static const char *const here[] = {"127.0.0.1", NULL}, *const elsewhere[] = {"10.0.0.0/8",
                                                                                 NULL};
    for (int trusted = 0; trusted < 2; trusted++) {
        const struct http_options options = {.listen = "127.0.0.1:0",
                                             .routes = tables,
                                             .cookie_name = "s",
                                             .trusted_proxies = trusted ? here : elsewhere};
        struct http_server *server = server_begin(&options);
        struct reply reply = ask_once(http_port(server), "GET", "/who",
                                      "X-Forwarded-For: 203.0.113.9\r\n"
                                      "X-Forwarded-Proto: https\r\n");
        char cookie[128];
        assert_true(reply_header(&reply, "Set-Cookie", cookie, sizeof cookie));
        assert_true((strstr(cookie, "; Secure") != NULL) == (trusted == 1));
        assert_string_equal(reply.body, trusted ? "{\"address\":\"203.0.113.9\",\"secure\":true}"
                                                : "{\"address\":\"127.0.0.1\",\"secure\":false}");
        reply_free(&reply);
        http_stop(server, 1.0);
    }
}

static void a_wrong_network_stops_the_start(void **state)
{
    (void)state;
    static const char *const proxies[] = {"10.0.0.0/8", "proxy.example", NULL};
    const struct http_options options = {.listen = "127.0.0.1:0", .trusted_proxies = proxies};
    struct http_server *server;
    struct base_error error;
    assert_false(http_start(&options, &server, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    assert_non_null(strstr(error.sentence, "proxy.example"));
}

/* ---- the log ----------------------------------------------------------------------------------
 */

static void a_request_is_logged_once_and_cannot_forge_a_line(void **state)
{
    (void)state;
    FILE *file = tmpfile();
    assert_non_null(file);
    const struct base_log log = {.fd = fileno(file), .least = BASE_LOG_INFO};
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .cookie_name = "s",
                                         .identify = identify,
                                         .log = &log};
    struct http_server *server = server_begin(&options);
    struct client client = client_dial(http_port(server));
    struct reply reply;
    char id[32];
    const char *const targets[] = {"/who?token=hidden", "/a\"\\\x01\x7f{}", "/who", "/nothing"};
    for (size_t i = 0; i < 4; i++) {
        reply = client_ask(&client, "GET", targets[i], "Cookie: s=5\r\n");
        assert_true(reply_header(&reply, "Ebbmark-Request-Id", id, sizeof id));
        reply_free(&reply);
    }
    for (int i = 0; i < 500; i++) {
        reply = client_ask(&client, "GET", "/who", "Authorization: Bearer topsecret\r\n");
        reply_free(&reply);
    }
    client_close(&client);
    http_stop(server, 1.0);
    rewind(file);
    char line[4096];
    size_t count = 0;
    while (fgets(line, sizeof line, file) != NULL) {
        json_error_t error;
        json_t *entry = json_loads(line, 0, &error);
        if (entry == NULL)
            fail_msg("%s in %s", error.text, line);
        assert_string_equal(json_string_value(json_object_get(entry, "event")), "request");
        assert_null(strstr(line, "hidden"));
        assert_null(strstr(line, "secret"));
        assert_null(strstr(line, "127.0.0.1"));
        assert_int_equal(strlen(json_string_value(json_object_get(entry, "at"))), 24);
        assert_true(json_is_real(json_object_get(entry, "ms")));
        const char *path = json_string_value(json_object_get(entry, "path"));
        if (count == 0)
            assert_string_equal(path, "/who");
        if (count == 1)
            assert_string_equal(path, "/a\"\\\x01\x7f{}");
        if (count == 3) {
            assert_string_equal(json_string_value(json_object_get(entry, "request")), id);
            assert_int_equal(json_integer_value(json_object_get(entry, "status")), 404);
            assert_string_equal(json_string_value(json_object_get(entry, "refused_at")),
                                "find the route");
        }
        assert_int_equal(json_integer_value(json_object_get(entry, "person")),
                         count == 0 || count == 2 ? 5 : 0);
        count++;
        json_decref(entry);
    }
    assert_int_equal(count, 504);
    (void)fclose(file);
}

static int begin(void **state)
{
    (void)state;
    return sodium_init() < 0 ? -1 : 0;
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_bucket_empties_and_fills_at_its_rate),
        cmocka_unit_test(one_key_does_not_use_up_anothers),
        cmocka_unit_test(a_crowd_does_not_refill_an_empty_bucket),
        cmocka_unit_test(an_identity_is_remembered_for_a_few_seconds),
        cmocka_unit_test(an_identity_ends_when_it_says),
        cmocka_unit_test(what_was_asked_before_a_forgetting_is_not_kept_after_it),
        cmocka_unit_test(a_person_is_limited_alone),
        cmocka_unit_test(an_address_behind_a_proxy_is_limited_alone),
        cmocka_unit_test(only_a_trusted_proxy_says_whether_it_is_secure),
        cmocka_unit_test(a_wrong_network_stops_the_start),
        cmocka_unit_test(a_request_is_logged_once_and_cannot_forge_a_line),
    };
    return cmocka_run_group_tests(tests, begin, NULL);
}
