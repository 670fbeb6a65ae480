#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <poll.h>

#include "client.h"

#define LIMIT 100000
#define LARGE_LIMIT (40 * 1024 * 1024)

static enum http_result length_of(struct http_exchange *exchange, void *context)
{
    (void)context;
    size_t size, sum = 0;
    const unsigned char *body = http_body(exchange, &size);
    for (size_t i = 0; i < size; i++)
        sum += body[i];
    return http_answer_json(
        exchange, 200, json_pack("{s:I, s:I}", "size", (json_int_t)size, "sum", (json_int_t)sum));
}

static const struct http_route table[] = {
    {"POST", "/body", HTTP_ANYONE, 0, LIMIT, length_of},
    {"POST", "/large", HTTP_ANYONE, 0, LARGE_LIMIT, length_of},
    {"GET", "/none", HTTP_ANYONE, 0, 0, length_of},
    {0}};
static const struct http_route *const tables[] = {table, NULL};

static struct http_server *server;
static uint16_t port;

static int begin(void **state)
{
    (void)state;
    const struct http_options options = {
        .listen = "127.0.0.1:0", .routes = tables, .timeout_s = 3, .connections_max = 400};
    server = server_begin(&options);
    port = http_port(server);
    return 0;
}

static int end(void **state)
{
    (void)state;
    http_stop(server, 1.0);
    return 0;
}

static void assert_taken(const struct reply *reply, size_t size, size_t sum)
{
    char wanted[64];
    (void)snprintf(wanted, sizeof wanted, "{\"size\":%zu,\"sum\":%zu}", size, sum);
    assert_int_equal(reply->status, 200);
    assert_string_equal(reply->body, wanted);
}

/* The connection still serves. */
static void assert_alive(struct client *client)
{
    struct reply reply = client_ask(client, "GET", "/none", "");
    assert_taken(&reply, 0, 0);
    reply_free(&reply);
}

static void post_head(struct client *client, const char *target, size_t length)
{
    assert_true(client_say(client, "POST %s HTTP/1.1\r\nHost: h\r\nContent-Length: %zu\r\n\r\n",
                           target, length));
}

static void a_body_up_to_the_limit_is_taken_whole(void **state)
{
    (void)state;
    const size_t sizes[] = {0, 1, 4095, 4096, 4097, 20000, LIMIT};
    struct client client = client_dial(port);
    char *body = malloc(LIMIT);
    memset(body, 3, LIMIT);
    for (size_t i = 0; i < sizeof sizes / sizeof sizes[0]; i++) {
        post_head(&client, "/body", sizes[i]);
        assert_true(client_send(&client, body, sizes[i]));
        struct reply reply = client_read(&client, false);
        assert_taken(&reply, sizes[i], 3 * sizes[i]);
        reply_free(&reply);
    }
    free(body);
    client_close(&client);
}

static void a_body_in_chunks_is_joined(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    for (int trailer = 0; trailer < 2; trailer++) {
        assert_true(client_say(&client, "POST /body HTTP/1.1\r\nHost: h\r\n"
                                        "Transfer-Encoding: Chunked\r\n\r\n"));
        for (int i = 0; i < 300; i++)
            assert_true(client_say(&client, "%s\r\n\1\1\1\1\1\1\1\1\1\1\r\n",
                                   i % 2 == 0 ? "a" : "00A;name=value"));
        assert_true(client_say(&client, trailer ? "0\r\nX-Sum: 1\r\n\r\n" : "0\r\n\r\n"));
        struct reply reply = client_read(&client, false);
        assert_taken(&reply, 3000, 3000);
        reply_free(&reply);
    }
    assert_alive(&client);
    client_close(&client);
}

static void a_body_byte_by_byte_is_taken(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const char request[] = "POST /body HTTP/1.1\r\nHost: h\r\nContent-Length: 5\r\n\r\n\1\1\1\1\1";
    for (size_t i = 0; i + 1 < sizeof request; i++) {
        assert_true(client_send(&client, request + i, 1));
        (void)usleep(500);
    }
    struct reply reply = client_read(&client, false);
    assert_taken(&reply, 5, 5);
    reply_free(&reply);
    client_close(&client);
}

static void a_body_over_the_limit_is_refused_and_read_past(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    char *body = calloc(1, 2 * LIMIT);
    post_head(&client, "/body", LIMIT + 1);
    assert_true(client_send(&client, body, LIMIT + 1));
    struct reply reply = client_read(&client, false);
    assert_true(reply_is_problem(&reply, 413, "too_large"));
    assert_non_null(strstr(reply.body, "100000"));
    reply_free(&reply);
    assert_alive(&client);
    assert_true(client_say(&client,
                           "POST /body HTTP/1.1\r\nHost: h\r\n"
                           "Transfer-Encoding: chunked\r\n\r\n%x\r\n",
                           2 * LIMIT));
    assert_true(client_send(&client, body, 2 * LIMIT));
    assert_true(client_say(&client, "\r\n0\r\n\r\n"));
    reply = client_read(&client, false);
    assert_true(reply_is_problem(&reply, 413, "too_large"));
    reply_free(&reply);
    assert_alive(&client);
    free(body);
    client_close(&client);
}

static void a_route_without_a_body_takes_none(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    const char *const heads[] = {"Content-Length: 3\r\n\r\nabc",
                                 "Transfer-Encoding: chunked\r\n\r\n3\r\nabc\r\n0\r\n\r\n"};
    for (size_t i = 0; i < 2; i++) {
        assert_true(client_say(&client, "GET /none HTTP/1.1\r\nHost: h\r\n%s", heads[i]));
        struct reply reply = client_read(&client, false);
        assert_true(reply_is_problem(&reply, 413, "too_large"));
        reply_free(&reply);
        assert_alive(&client);
    }
    client_close(&client);
}

/* The answer comes although the client sends on for a while, and then the connection ends. */
static void a_huge_body_is_answered_before_it_is_read(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    char *body = calloc(1, 1024 * 1024);
    post_head(&client, "/body", 1u << 30);
    size_t sent = 0;
    while (sent < 64 && client_send(&client, body, 1024 * 1024)) {
        struct pollfd readable = {.fd = client.fd, .events = POLLIN};
        sent++;
        if (poll(&readable, 1, 0) == 1)
            break;
    }
    struct reply reply = client_read(&client, false);
    assert_true(reply_is_problem(&reply, 413, "too_large"));
    assert_true(reply_has(&reply, "Connection", "close"));
    reply_free(&reply);
    assert_true(client_is_closed(&client));
    free(body);
    client_close(&client);
}

static void a_client_that_asks_first_is_told_before_it_sends(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    assert_true(client_say(&client, "POST /body HTTP/1.1\r\nHost: h\r\nExpect: 100-continue\r\n"
                                    "Content-Length: 3\r\n\r\n"));
    struct reply reply = client_read(&client, false);
    assert_int_equal(reply.status, 100);
    reply_free(&reply);
    assert_true(client_say(&client, "\1\1\1"));
    reply = client_read(&client, false);
    assert_taken(&reply, 3, 3);
    reply_free(&reply);
    assert_true(client_say(&client,
                           "POST /body HTTP/1.1\r\nHost: h\r\nExpect: 100-continue\r\n"
                           "Content-Length: %d\r\n\r\n",
                           LIMIT + 1));
    reply = client_read(&client, false);
    assert_true(reply_is_problem(&reply, 413, "too_large"));
    reply_free(&reply);
    assert_true(client_is_closed(&client));
    client_close(&client);
}

/* RFC 9112, 6.3: what does not say plainly where the body ends is how requests are smuggled. */
static void a_body_whose_end_is_in_doubt_is_refused(void **state)
{
    (void)state;
    const char *const heads[] = {
        "Host: h\r\nContent-Length: 3\r\nContent-Length: 3\r\n\r\nabc",
        "Host: h\r\nContent-Length: 3\r\nContent-Length: 4\r\n\r\nabc",
        "Host: h\r\nContent-Length: 3\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
        "Host: h\r\nTransfer-Encoding: identity\r\n\r\nabc",
        "Host: h\r\nTransfer-Encoding: gzip, chunked\r\n\r\n0\r\n\r\n",
        "Host: h\r\nTransfer-Encoding: chunked \r\n\r\n0\r\n\r\n",
        "Host: h\r\nTransfer-Encoding: identity\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
        "Host: h\r\nContent-Length: -1\r\n\r\n",
        "Host: h\r\nContent-Length: +3\r\n\r\nabc",
        "Host: h\r\nContent-Length: 3,3\r\n\r\nabc",
        "Host: h\r\nContent-Length: x\r\n\r\n",
        "Host: h\r\nContent-Length: 99999999999999999999999\r\n\r\n",
        "Content-Length: 3\r\n\r\nabc",
        "Host: h\r\nHost: i\r\nContent-Length: 3\r\n\r\nabc"};
    for (size_t i = 0; i < sizeof heads / sizeof heads[0]; i++) {
        struct client client = client_dial(port);
        assert_true(client_say(&client, "POST /body HTTP/1.1\r\n%s", heads[i]));
        struct reply reply = client_read(&client, false);
        if (reply.status != 400 && reply.status != 413)
            fail_msg("%s got %u %s", heads[i], reply.status, reply.body);
        reply_free(&reply);
        assert_true(client_is_closed(&client));
        client_close(&client);
    }
}

static void malformed_chunks_end_the_connection(void **state)
{
    (void)state;
    const char *const chunks[] = {"x\r\n", "-1\r\n", "3\r\nabcd\r\n", "ffffffffffffffffffff\r\n",
                                  ";\r\n", "3\r\nab"};
    for (size_t i = 0; i < sizeof chunks / sizeof chunks[0]; i++) {
        struct client client = client_dial(port);
        assert_true(client_say(&client,
                               "POST /body HTTP/1.1\r\nHost: h\r\n"
                               "Transfer-Encoding: chunked\r\n\r\n%s",
                               chunks[i]));
        (void)shutdown(client.fd, SHUT_WR);
        struct reply reply = client_read(&client, false);
        assert_true(reply.status == 0 || reply.status == 400 || reply.status == 413);
        reply_free(&reply);
        assert_true(client_is_closed(&client));
        client_close(&client);
    }
}

static void a_repeated_header_that_holds_one_value_is_refused(void **state)
{
    (void)state;
    const char *const names[] = {"Cookie", "Authorization", "Content-Type", "Idempotency-Key",
                                 "Ebbmark-Request"};
    for (size_t i = 0; i < sizeof names / sizeof names[0]; i++) {
        struct client client = client_dial(port);
        char headers[128];
        (void)snprintf(headers, sizeof headers, "%s: a\r\nX-Other: b\r\n%s: a\r\n", names[i],
                       names[i]);
        struct reply reply = client_post(&client, "/body", headers, "abc");
        assert_true(reply_is_problem(&reply, 400, "bad_request"));
        reply_free(&reply);
        client_close(&client);
    }
}

/* From small to far too large, every request gets an answer: ours, ours that it is too large, or,
 * where it does not fit into the library's memory at all, the library's. Only one that just fits,
 * and leaves no room for the head of an answer, ends the connection without. */
static void headers_of_any_size_are_answered(void **state)
{
    (void)state;
    char *value = malloc(70000);
    unsigned seen[600] = {0};
    for (size_t size = 100; size < 70000; size += size < 20000 ? 250 : 5000) {
        for (int shape = 0; shape < 4; shape++) {
            struct client client = client_dial(port);
            memset(value, 'a', size);
            value[size] = '\0';
            if (shape == 3) /* many small ones: cookies, which the library keeps twice */
                for (size_t i = 0; i + 4 < size; i += 4)
                    memcpy(value + i, "a=b;", 4);
            (void)client_say(&client,
                             shape == 0   ? "GET /none HTTP/1.1\r\nHost: h\r\nX-Long: %s\r\n\r\n"
                             : shape == 1 ? "GET /none?%s HTTP/1.1\r\nHost: h\r\n\r\n"
                             : shape == 2 ? "GET /%s HTTP/1.1\r\nHost: h\r\n\r\n"
                                          : "GET /none HTTP/1.1\r\nHost: h\r\nCookie: %s\r\n\r\n",
                             value);
            struct reply reply = client_read(&client, false);
            seen[reply.status]++;
            if (size <= 4000 && shape == 3)
                assert_true(reply.status == 200 || reply.status == 431);
            else if (size <= 4000)
                assert_int_equal(reply.status, shape == 2 ? 404 : 200);
            else if (size > 8192 && (size < 15000 || size > 16384))
                assert_true(reply.status == 431 || reply.status == 414);
            reply_free(&reply);
            client_close(&client);
        }
    }
    assert_true(seen[431] > 0 && seen[414] > 0 && seen[200] > 0);
    free(value);
}

static void many_headers_are_too_many(void **state)
{
    (void)state;
    char headers[4096] = "";
    for (int i = 0; i < 120; i++)
        (void)strcat(headers, "X-A: b\r\n");
    struct reply reply = ask_once(port, "GET", "/none", headers);
    assert_true(reply_is_problem(&reply, 431, "headers_too_large"));
    reply_free(&reply);
}

static void noise_does_not_hurt(void **state)
{
    (void)state;
    unsigned seed = 12345;
    for (int round = 0; round < 200; round++) {
        struct client client = client_dial(port);
        char noise[512];
        size_t size = 1 + (unsigned)rand_r(&seed) % sizeof noise;
        const char start[] =
            "POST /body?a=b HTTP/1.1\r\nHost: h\r\nTransfer-Encoding: chunked\r\n\r\n";
        for (size_t i = 0; i < size; i++)
            noise[i] = (char)rand_r(&seed);
        size_t keep = (unsigned)rand_r(&seed) % sizeof start;
        (void)client_send(&client, start, keep);
        (void)client_send(&client, noise, size);
        (void)client_send(&client, "\r\n\r\n", 4);
        (void)shutdown(client.fd, SHUT_WR);
        struct reply reply = client_read(&client, false);
        reply_free(&reply);
        client_close(&client);
    }
    struct client client = client_dial(port);
    assert_alive(&client);
    client_close(&client);
}

/* More than all may hold together: one is told to come back, the others are served. */
static void bodies_share_a_bounded_memory(void **state)
{
    (void)state;
    enum { MANY = 5 };
    struct client clients[MANY];
    size_t part = 1024 * 1024, parts = LARGE_LIMIT / part;
    char *body = calloc(1, part);
    unsigned taken = 0, refused = 0;
    for (int i = 0; i < MANY; i++) {
        clients[i] = client_dial(port);
        post_head(&clients[i], "/large", LARGE_LIMIT);
    }
    for (size_t p = 0; p < parts; p++)
        for (int i = 0; i < MANY; i++)
            assert_true(client_send(&clients[i], body, part));
    for (int i = 0; i < MANY; i++) {
        struct reply reply = client_read(&clients[i], false);
        taken += reply.status == 200;
        refused += reply.status == 503 && reply_has(&reply, "Retry-After", "2");
        reply_free(&reply);
        client_close(&clients[i]);
    }
    assert_int_equal(taken + refused, MANY);
    assert_true(taken >= 1 && refused >= 1);
    free(body);
}

static void a_client_that_falls_silent_is_let_go(void **state)
{
    (void)state;
    struct client idle = client_dial(port), head = client_dial(port), body = client_dial(port);
    assert_true(client_say(&head, "GET /none HT"));
    post_head(&body, "/body", 10);
    assert_true(client_is_closed(&idle));
    assert_true(client_is_closed(&head));
    assert_true(client_is_closed(&body));
    client_close(&idle);
    client_close(&head);
    client_close(&body);
}

/* It never falls silent for as long as the timeout, but it never finishes its head either. */
static void a_client_that_trickles_its_head_is_cut_off(void **state)
{
    (void)state;
    struct client client = client_dial(port);
    struct timeval short_patience = {.tv_sec = 1};
    (void)setsockopt(client.fd, SOL_SOCKET, SO_RCVTIMEO, &short_patience, sizeof short_patience);
    bool cut = false;
    assert_true(client_say(&client, "GET /none HTTP/1.1\r\nX: "));
    for (int second = 0; second < 25 && !cut; second++)
        cut = !client_send(&client, "a", 1) || client_is_closed(&client);
    assert_true(cut);
    client_close(&client);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_body_up_to_the_limit_is_taken_whole),
        cmocka_unit_test(a_body_in_chunks_is_joined),
        cmocka_unit_test(a_body_byte_by_byte_is_taken),
        cmocka_unit_test(a_body_over_the_limit_is_refused_and_read_past),
        cmocka_unit_test(a_route_without_a_body_takes_none),
        cmocka_unit_test(a_huge_body_is_answered_before_it_is_read),
        cmocka_unit_test(a_client_that_asks_first_is_told_before_it_sends),
        cmocka_unit_test(a_body_whose_end_is_in_doubt_is_refused),
        cmocka_unit_test(malformed_chunks_end_the_connection),
        cmocka_unit_test(a_repeated_header_that_holds_one_value_is_refused),
        cmocka_unit_test(headers_of_any_size_are_answered),
        cmocka_unit_test(many_headers_are_too_many),
        cmocka_unit_test(noise_does_not_hurt),
        cmocka_unit_test(bodies_share_a_bounded_memory),
        cmocka_unit_test(a_client_that_falls_silent_is_let_go),
        cmocka_unit_test(a_client_that_trickles_its_head_is_cut_off),
    };
    return cmocka_run_group_tests(tests, begin, end);
}
