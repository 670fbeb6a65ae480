#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <pthread.h>
#include <stdatomic.h>

#include "client.h"
#include "ebbmark/clock.h"

#define MANY 200

/* ---- an application whose answers come later ----------------------------------------------------
 */

struct application {
    pthread_mutex_t lock; /* guards the parked exchanges */
    struct http_exchange *parked[64];
    size_t parked_count;
    atomic_uint streams_done, slow_begun;
    atomic_bool gate; /* slow handlers wait for it */
};

static void pause_ms(unsigned ms)
{
    (void)usleep(ms * 1000);
}

static enum http_result quick(struct http_exchange *exchange, void *context)
{
    (void)context;
    return http_answer_json(exchange, 200, json_pack("{s:s}", "is", "quick"));
}

static enum http_result slow(struct http_exchange *exchange, void *context)
{
    (void)context;
    int64_t ms;
    if (!http_query_integer(exchange, "ms", 0, 5000, 20, &ms))
        return HTTP_ANSWERED;
    pause_ms((unsigned)ms);
    const char *header = http_header(exchange, "X-Say");
    return http_answer_json(exchange, 200, json_pack("{s:s?}", "is", header));
}

static enum http_result gated(struct http_exchange *exchange, void *context)
{
    struct application *application = context;
    (void)atomic_fetch_add(&application->slow_begun, 1);
    while (!atomic_load(&application->gate))
        pause_ms(1);
    return http_answer_json(exchange, 200, json_pack("{s:s}", "is", "gated"));
}

/* Parks the exchange until a test takes it. */
static enum http_result park(struct http_exchange *exchange, void *context)
{
    struct application *application = context;
    (void)pthread_mutex_lock(&application->lock);
    application->parked[application->parked_count++] = exchange;
    (void)pthread_mutex_unlock(&application->lock);
    return HTTP_LATER;
}

/* Resumed before the handler has returned. */
static enum http_result early(struct http_exchange *exchange, void *context)
{
    (void)context;
    (void)http_answer_json(exchange, 200, json_pack("{s:s}", "is", "early"));
    http_resume(exchange);
    return HTTP_LATER;
}

struct source {
    struct application *application;
    size_t left;
    bool fails, is_slow;
};

static long source_next(void *state, char *buffer, size_t room)
{
    struct source *source = state;
    if (source->is_slow)
        pause_ms(2);
    if (source->left == 0)
        return source->fails ? -1 : 0;
    size_t size = source->left < room ? source->left : room;
    for (size_t i = 0; i < size; i++)
        buffer[i] = (char)('a' + (source->left - i) % 26);
    source->left -= size;
    return (long)size;
}

static void source_done(void *state)
{
    struct source *source = state;
    (void)atomic_fetch_add(&source->application->streams_done, 1);
    free(source);
}

static enum http_result stream(struct http_exchange *exchange, void *context)
{
    int64_t size;
    if (!http_query_integer(exchange, "size", 0, 100000000, 0, &size))
        return HTTP_ANSWERED;
    struct source *source = malloc(sizeof *source);
    *source = (struct source){.application = context,
                              .left = (size_t)size,
                              .fails = http_query(exchange, "fails") != NULL,
                              .is_slow = http_query(exchange, "slow") != NULL};
    return http_answer_stream(exchange, 200, "text/csv", source_next, source_done, source);
}

static const struct http_route table[] = {
    {"GET", "/quick", HTTP_ANYONE, 0, 0, quick},
    {"GET", "/slow", HTTP_ANYONE, HTTP_SLOW, 0, slow},
    {"POST", "/slow", HTTP_ANYONE, HTTP_SLOW, 1000, slow},
    {"GET", "/gated", HTTP_ANYONE, HTTP_SLOW, 0, gated},
    {"GET", "/park", HTTP_ANYONE, 0, 0, park},
    {"GET", "/slow-park", HTTP_ANYONE, HTTP_SLOW, 0, park},
    {"GET", "/early", HTTP_ANYONE, 0, 0, early},
    {"GET", "/stream", HTTP_ANYONE, 0, 0, stream},
    {"GET", "/slow-stream", HTTP_ANYONE, HTTP_SLOW, 0, stream},
    {0}};
static const struct http_route *const tables[] = {table, NULL};

struct world {
    struct application application;
    struct http_server *server;
    uint16_t port;
};

static void world_begin(struct world *world, unsigned workers, size_t waiting_max)
{
    *world = (struct world){0};
    (void)pthread_mutex_init(&world->application.lock, NULL);
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .workers = workers,
                                         .waiting_max = waiting_max,
                                         .timeout_s = 2,
                                         .context = &world->application};
    world->server = server_begin(&options);
    world->port = http_port(world->server);
}

/* The next parked exchange, waited for. */
static struct http_exchange *take(struct world *world)
{
    struct http_exchange *exchange = NULL;
    for (int turn = 0; turn < 5000 && exchange == NULL; turn++) {
        (void)pthread_mutex_lock(&world->application.lock);
        if (world->application.parked_count > 0)
            exchange = world->application.parked[--world->application.parked_count];
        (void)pthread_mutex_unlock(&world->application.lock);
        if (exchange == NULL)
            pause_ms(1);
    }
    assert_non_null(exchange);
    return exchange;
}

static void finish(struct http_exchange *exchange, const char *is)
{
    (void)http_answer_json(exchange, 201, json_pack("{s:s}", "is", is));
    http_resume(exchange);
}

static void assert_is(struct reply *reply, unsigned status, const char *is)
{
    char wanted[64];
    (void)snprintf(wanted, sizeof wanted, "{\"is\":\"%s\"}", is);
    assert_int_equal(reply->status, status);
    assert_string_equal(reply->body, wanted);
    reply_free(reply);
}

/* ---- later ------------------------------------------------------------------------------------
 */

static void an_answer_may_come_from_another_thread(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct client client = client_dial(world.port);
    const char *const targets[] = {"/park", "/slow-park", "/park"};
    for (size_t i = 0; i < 3; i++) {
        assert_true(
            client_say(&client, "GET %s HTTP/1.1\r\nHost: h\r\nX-Say: hello\r\n\r\n", targets[i]));
        struct http_exchange *exchange = take(&world);
        assert_string_equal(http_header(exchange, "x-say"), "hello");
        finish(exchange, "later");
        struct reply reply = client_read(&client, false);
        assert_is(&reply, 201, "later");
    }
    client_close(&client);
    http_stop(world.server, 1.0);
}

static void an_answer_may_come_before_the_handler_returns(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 1, 8);
    struct client client = client_dial(world.port);
    for (int i = 0; i < 200; i++) {
        struct reply reply = client_ask(&client, "GET", "/early", "");
        assert_is(&reply, 200, "early");
    }
    client_close(&client);
    http_stop(world.server, 1.0);
}

static void a_waiting_answer_is_not_timed_out(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 1, 8);
    struct client client = client_dial(world.port);
    assert_true(client_say(&client, "GET /park HTTP/1.1\r\nHost: h\r\n\r\n"));
    struct http_exchange *exchange = take(&world);
    pause_ms(6000); /* the timeout is 2 s; a client that owes a head is cut off after 5 s */
    finish(exchange, "patient");
    struct reply reply = client_read(&client, false);
    assert_is(&reply, 201, "patient");
    client_close(&client);
    http_stop(world.server, 1.0);
}

static void requests_behind_a_waiting_one_keep_their_order(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct client client = client_dial(world.port);
    assert_true(client_say(&client, "GET /park HTTP/1.1\r\nHost: h\r\n\r\n"
                                    "GET /slow?ms=5 HTTP/1.1\r\nHost: h\r\nX-Say: two\r\n\r\n"
                                    "GET /quick HTTP/1.1\r\nHost: h\r\n\r\n"));
    pause_ms(50);
    finish(take(&world), "one");
    struct reply reply = client_read(&client, false);
    assert_is(&reply, 201, "one");
    reply = client_read(&client, false);
    assert_is(&reply, 200, "two");
    reply = client_read(&client, false);
    assert_is(&reply, 200, "quick");
    client_close(&client);
    http_stop(world.server, 1.0);
}

static void a_client_that_goes_while_waiting_hurts_nobody(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 64);
    for (int i = 0; i < 30; i++) {
        struct client client = client_dial(world.port);
        const struct linger reset = {.l_onoff = 1, .l_linger = 0};
        assert_true(client_say(&client, "GET /%s HTTP/1.1\r\nHost: h\r\n\r\n",
                               i % 3 == 0   ? "park"
                               : i % 3 == 1 ? "slow?ms=20"
                                            : "slow-park"));
        struct http_exchange *exchange = i % 3 == 1 ? NULL : take(&world);
        if (i % 2 == 0)
            (void)setsockopt(client.fd, SOL_SOCKET, SO_LINGER, &reset, sizeof reset);
        client_close(&client);
        pause_ms(2);
        if (exchange != NULL)
            finish(exchange, "alone");
    }
    struct reply reply = ask_once(world.port, "GET", "/quick", "");
    assert_is(&reply, 200, "quick");
    http_stop(world.server, 2.0);
}

/* ---- overload ---------------------------------------------------------------------------------
 */

struct crowd {
    uint16_t port;
    atomic_uint taken, refused, else_;
};

static void *ask_slowly(void *context)
{
    struct crowd *crowd = context;
    struct reply reply = ask_once(crowd->port, "GET", "/slow?ms=50", "X-Say: here\r\n");
    bool taken = reply.status == 200 && strcmp(reply.body, "{\"is\":\"here\"}") == 0;
    bool refused = reply.status == 503 && reply_has(&reply, "Retry-After", "2") &&
                   strstr(reply.body, "/problems/overloaded") != NULL;
    (void)atomic_fetch_add(taken ? &crowd->taken : refused ? &crowd->refused : &crowd->else_, 1);
    reply_free(&reply);
    return NULL;
}

static void what_does_not_fit_in_the_queue_is_told_to_come_back(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct crowd crowd = {.port = world.port};
    pthread_t threads[MANY];
    for (int i = 0; i < MANY; i++)
        assert_int_equal(pthread_create(&threads[i], NULL, ask_slowly, &crowd), 0);
    /* The quick ones do not wait behind the slow. */
    struct reply reply = ask_once(world.port, "GET", "/quick", "");
    assert_is(&reply, 200, "quick");
    for (int i = 0; i < MANY; i++)
        (void)pthread_join(threads[i], NULL);
    assert_int_equal(crowd.else_, 0);
    assert_int_equal(crowd.taken + crowd.refused, MANY);
    assert_true(crowd.taken >= 10 && crowd.refused >= 1);
    reply = ask_once(world.port, "GET", "/slow?ms=1", "X-Say: after\r\n");
    assert_is(&reply, 200, "after");
    http_stop(world.server, 1.0);
}

static void a_bounded_queue_holds_exactly_its_bound(void **state)
{
    (void)state;
    struct world world;
    struct client clients[5];
    world_begin(&world, 1, 3);
    for (unsigned i = 0; i < 5; i++) {
        clients[i] = client_dial(world.port);
        assert_true(client_say(&clients[i], "GET /gated HTTP/1.1\r\nHost: h\r\n\r\n"));
        while (i == 0 && atomic_load(&world.application.slow_begun) == 0)
            pause_ms(1);
        pause_ms(20);
    }
    struct http_counts counts;
    http_count(world.server, &counts);
    assert_int_equal(counts.waiting, 3);
    assert_int_equal(counts.in_flight, 4);
    struct reply reply = client_read(&clients[4], false);
    assert_true(reply_is_problem(&reply, 503, "overloaded"));
    reply_free(&reply);
    atomic_store(&world.application.gate, true);
    for (int i = 0; i < 4; i++) {
        reply = client_read(&clients[i], false);
        assert_is(&reply, 200, "gated");
    }
    for (int i = 0; i < 5; i++)
        client_close(&clients[i]);
    http_stop(world.server, 1.0);
}

/* ---- streams ----------------------------------------------------------------------------------
 */

static void wait_for_streams(struct world *world, unsigned count)
{
    for (int turn = 0; turn < 5000 && atomic_load(&world->application.streams_done) < count; turn++)
        pause_ms(1);
    assert_int_equal(atomic_load(&world->application.streams_done), count);
}

static void a_stream_arrives_whole(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    const size_t sizes[] = {0, 1, 1000, 40000, 1000000};
    unsigned count = 0;
    struct client client = client_dial(world.port);
    for (int is_slow = 0; is_slow < 2; is_slow++)
        for (size_t i = 0; i < sizeof sizes / sizeof sizes[0]; i++) {
            char target[64];
            (void)snprintf(target, sizeof target, "/%sstream?size=%zu", is_slow ? "slow-" : "",
                           sizes[i]);
            struct reply reply = client_ask(&client, "GET", target, "");
            assert_int_equal(reply.status, 200);
            assert_false(reply.cut);
            assert_int_equal(reply.size, sizes[i]);
            for (size_t at = 0; at < sizes[i]; at++)
                if (reply.body[at] != (char)('a' + (sizes[i] - at) % 26))
                    fail_msg("byte %zu of %zu", at, sizes[i]);
            reply_free(&reply);
            wait_for_streams(&world, ++count);
            reply = ask_once(world.port, "HEAD", target, "");
            assert_int_equal(reply.status, 200);
            assert_true(reply_has(&reply, "Content-Type", "text/csv"));
            reply_free(&reply);
            wait_for_streams(&world, ++count);
        }
    client_close(&client);
    http_stop(world.server, 1.0);
}

static void a_stream_that_fails_is_cut(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    const char *const targets[] = {"/stream?fails&size=100000", "/slow-stream?fails&size=100000"};
    for (unsigned i = 0; i < 2; i++) {
        struct client client = client_dial(world.port);
        struct reply reply = client_ask(&client, "GET", targets[i], "");
        assert_int_equal(reply.status, 200);
        assert_true(reply.cut);
        assert_int_equal(reply.size, 100000);
        reply_free(&reply);
        wait_for_streams(&world, i + 1);
        client_close(&client);
    }
    http_stop(world.server, 1.0);
}

static void a_stream_ends_when_its_reader_goes(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    const char *const targets[] = {"/stream?size=50000000", "/slow-stream?slow&size=50000000"};
    for (unsigned i = 0; i < 6; i++) {
        struct client client = client_dial(world.port);
        assert_true(client_say(&client, "GET %s HTTP/1.1\r\nHost: h\r\n\r\n", targets[i % 2]));
        assert_true(client_hear(&client));
        client_close(&client);
        wait_for_streams(&world, i + 1);
    }
    http_stop(world.server, 1.0);
}

/* ---- stopping ---------------------------------------------------------------------------------
 */

struct stop {
    struct http_server *server;
    double grace_s, took_s;
};

static void *stop_server(void *context)
{
    struct stop *stop = context;
    double began = base_clock_monotonic_s();
    http_stop(stop->server, stop->grace_s);
    stop->took_s = base_clock_monotonic_s() - began;
    return NULL;
}

static pthread_t stop_begin(struct stop *stop)
{
    pthread_t thread;
    assert_int_equal(pthread_create(&thread, NULL, stop_server, stop), 0);
    pause_ms(100);
    return thread;
}

static bool can_dial(uint16_t port)
{
    const struct sockaddr_in address = {
        .sin_family = AF_INET, .sin_port = htons(port), .sin_addr.s_addr = htonl(INADDR_LOOPBACK)};
    int fd = socket(AF_INET, SOCK_STREAM, 0);
    bool can = connect(fd, (const struct sockaddr *)&address, sizeof address) == 0;
    (void)close(fd);
    return can;
}

static void what_is_in_flight_may_finish(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct client waiting = client_dial(world.port), idle = client_dial(world.port);
    struct reply reply = client_ask(&idle, "GET", "/quick", "");
    reply_free(&reply);
    assert_true(client_say(&waiting, "GET /park HTTP/1.1\r\nHost: h\r\n\r\n"));
    struct http_exchange *exchange = take(&world);
    struct stop stop = {world.server, 10.0, 0.0};
    pthread_t thread = stop_begin(&stop);
    assert_false(can_dial(world.port));
    reply = client_ask(&idle, "GET", "/quick", "");
    assert_true(reply_has(&reply, "Connection", "close"));
    assert_is(&reply, 200, "quick");
    finish(exchange, "in time");
    reply = client_read(&waiting, false);
    assert_is(&reply, 201, "in time");
    (void)pthread_join(thread, NULL);
    assert_true(stop.took_s < 5.0);
    assert_true(client_is_closed(&idle));
    client_close(&waiting);
    client_close(&idle);
}

static void what_nobody_answers_is_told_that_the_server_stops(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct client clients[3];
    for (int i = 0; i < 3; i++) {
        clients[i] = client_dial(world.port);
        assert_true(client_say(&clients[i], "GET /%s HTTP/1.1\r\nHost: h\r\nX-Say: a\r\n\r\n",
                               i == 1 ? "slow-park" : "park"));
    }
    struct http_exchange *first = take(&world), *second = take(&world), *third = take(&world);
    assert_string_equal(http_header(first, "X-Say"), "a");
    struct stop stop = {world.server, 0.2, 0.0};
    pthread_t thread = stop_begin(&stop);
    for (int i = 0; i < 3; i++) {
        struct reply reply = client_read(&clients[i], false);
        assert_int_equal(reply.status, 503);
        assert_non_null(strstr(reply.body, "/problems/stopping"));
        reply_free(&reply);
        client_close(&clients[i]);
    }
    (void)pthread_join(thread, NULL);
    /* Their handlers come to their end after the server has gone. */
    assert_string_equal(http_header(first, "X-Say"), "a");
    assert_null(http_header(second, "X-Say"));
    assert_string_equal(http_address(second), "127.0.0.1");
    finish(first, "too late");
    finish(second, "too late");
    struct base_error error;
    (void)base_fail(&error, BASE_CANCELLED, "The server has stopped.");
    (void)http_answer_error(third, &error);
    http_resume(third);
}

static void a_worker_is_waited_for_and_its_queue_refused(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 1, 8);
    struct client running = client_dial(world.port), queued = client_dial(world.port);
    assert_true(client_say(&running, "GET /gated HTTP/1.1\r\nHost: h\r\n\r\n"));
    while (atomic_load(&world.application.slow_begun) == 0)
        pause_ms(1);
    assert_true(client_say(&queued, "GET /gated HTTP/1.1\r\nHost: h\r\n\r\n"));
    pause_ms(50);
    struct stop stop = {world.server, 0.0, 0.0};
    pthread_t thread = stop_begin(&stop);
    pause_ms(100);
    atomic_store(&world.application.gate, true);
    struct reply reply = client_read(&running, false);
    assert_is(&reply, 200, "gated");
    reply = client_read(&queued, false);
    assert_true(reply_is_problem(&reply, 503, "stopping"));
    reply_free(&reply);
    (void)pthread_join(thread, NULL);
    assert_int_equal(atomic_load(&world.application.slow_begun), 1);
    client_close(&running);
    client_close(&queued);
}

static void streams_under_way_end_with_the_server(void **state)
{
    (void)state;
    struct world world;
    world_begin(&world, 2, 8);
    struct client clients[4];
    for (int i = 0; i < 4; i++) {
        clients[i] = client_dial(world.port);
        assert_true(client_say(&clients[i],
                               "GET /%s?slow&size=100000000 HTTP/1.1\r\nHost: h\r\n\r\n",
                               i % 2 == 0 ? "slow-stream" : "stream"));
        assert_true(client_hear(&clients[i]));
    }
    http_stop(world.server, 0.1);
    assert_int_equal(atomic_load(&world.application.streams_done), 4);
    for (int i = 0; i < 4; i++)
        client_close(&clients[i]);
}

/* Start, some traffic of every kind, stop at a random moment: nothing hangs, leaks or breaks. */
static void stopping_in_the_middle_of_anything_is_safe(void **state)
{
    (void)state;
    unsigned seed = 4711;
    for (int round = 0; round < 25; round++) {
        struct world world;
        struct client clients[12];
        world_begin(&world, 2, 4);
        atomic_store(&world.application.gate, true);
        static const char *const targets[] = {"/quick",
                                              "/slow?ms=5",
                                              "/park",
                                              "/gated",
                                              "/early",
                                              "/slow-stream?slow&size=300000",
                                              "/stream?size=3000000",
                                              "/slow-park"};
        for (int i = 0; i < 12; i++) {
            clients[i] = client_dial(world.port);
            assert_true(client_say(&clients[i], "GET %s HTTP/1.1\r\nHost: h\r\n\r\n",
                                   targets[(unsigned)rand_r(&seed) % 8]));
        }
        (void)usleep((unsigned)rand_r(&seed) % 20000);
        struct stop stop = {world.server, 0.02, 0.0};
        pthread_t thread;
        assert_int_equal(pthread_create(&thread, NULL, stop_server, &stop), 0);
        (void)usleep((unsigned)rand_r(&seed) % 40000);
        for (int i = 0; i < 12; i++)
            client_close(&clients[i]);
        (void)pthread_join(thread, NULL);
        for (size_t i = 0; i < world.application.parked_count; i++)
            finish(world.application.parked[i], "at last");
        assert_true(stop.took_s < 10.0);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(an_answer_may_come_from_another_thread),
        cmocka_unit_test(an_answer_may_come_before_the_handler_returns),
        cmocka_unit_test(a_waiting_answer_is_not_timed_out),
        cmocka_unit_test(requests_behind_a_waiting_one_keep_their_order),
        cmocka_unit_test(a_client_that_goes_while_waiting_hurts_nobody),
        cmocka_unit_test(what_does_not_fit_in_the_queue_is_told_to_come_back),
        cmocka_unit_test(a_bounded_queue_holds_exactly_its_bound),
        cmocka_unit_test(a_stream_arrives_whole),
        cmocka_unit_test(a_stream_that_fails_is_cut),
        cmocka_unit_test(a_stream_ends_when_its_reader_goes),
        cmocka_unit_test(what_is_in_flight_may_finish),
        cmocka_unit_test(what_nobody_answers_is_told_that_the_server_stops),
        cmocka_unit_test(a_worker_is_waited_for_and_its_queue_refused),
        cmocka_unit_test(streams_under_way_end_with_the_server),
        cmocka_unit_test(stopping_in_the_middle_of_anything_is_safe),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
