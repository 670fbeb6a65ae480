#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <pthread.h>
#include <stdatomic.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/log.h"
#include "ebbmark/pool.h"

#define BLOCKS 997

static void square(void *context, size_t i)
{
    ((size_t *)context)[i] += i * i;
}

static void every_block_runs_once_whatever_the_threads(void **state)
{
    (void)state;
    for (unsigned threads = 0; threads <= 3; threads++) {
        struct base_pool *pool = NULL;
        if (threads > 0)
            assert_true(base_pool_open(&pool, threads, 4, NULL));
        size_t results[BLOCKS] = {0};
        base_pool_for(pool, BLOCKS, square, results);
        for (size_t i = 0; i < BLOCKS; i++)
            assert_int_equal(results[i], i * i);
        base_pool_close(pool);
    }
}

static void *loop_in_a_thread(void *pool)
{
    for (int round = 0; round < 50; round++) {
        size_t results[BLOCKS] = {0};
        base_pool_for(pool, BLOCKS, square, results);
        for (size_t i = 0; i < BLOCKS; i++)
            if (results[i] != i * i)
                return pool;
    }
    return NULL;
}

static void several_loops_share_one_pool(void **state)
{
    (void)state;
    struct base_pool *pool;
    assert_true(base_pool_open(&pool, 2, 4, NULL));
    pthread_t threads[4];
    for (int i = 0; i < 4; i++)
        assert_int_equal(pthread_create(&threads[i], NULL, loop_in_a_thread, pool), 0);
    for (int i = 0; i < 4; i++) {
        void *bad;
        assert_int_equal(pthread_join(threads[i], &bad), 0);
        assert_null(bad);
    }
    base_pool_close(pool);
}

struct gate {
    pthread_mutex_t closed;
    atomic_int done;
};

static void wait_at_gate(void *context)
{
    struct gate *gate = context;
    pthread_mutex_lock(&gate->closed);
    pthread_mutex_unlock(&gate->closed);
    atomic_fetch_add(&gate->done, 1);
}

static void a_full_queue_is_said_to_be_busy_and_what_it_took_is_done(void **state)
{
    (void)state;
    struct gate gate = {.closed = PTHREAD_MUTEX_INITIALIZER};
    struct base_pool *pool;
    assert_true(base_pool_open(&pool, 1, 3, NULL));
    pthread_mutex_lock(&gate.closed);
    int taken = 0;
    struct base_error error = {0};
    while (taken < 10 && base_pool_submit(pool, wait_at_gate, &gate, &error))
        taken++;
    assert_in_range(taken, 3, 4); /* three wait, and one may be at work */
    assert_int_equal(error.kind, BASE_BUSY);
    pthread_mutex_unlock(&gate.closed);
    base_pool_close(pool);
    assert_int_equal(atomic_load(&gate.done), taken);
}

static void hostile_text_cannot_forge_a_log_line(void **state)
{
    (void)state;
    int ends[2];
    assert_int_equal(pipe(ends), 0);
    struct base_log log = {.fd = ends[1], .least = BASE_LOG_INFO};
    base_log_line(&log, BASE_LOG_DEBUG, "dropped", NULL);
    base_log_line(&log, BASE_LOG_INFO, "sign_in", "handle", "a\"}\n{\"level\":\"error\xff", NULL);
    close(ends[1]);
    char text[512] = {0};
    assert_true(read(ends[0], text, sizeof text - 1) > 0);
    close(ends[0]);
    assert_ptr_equal(strchr(text, '\n'), text + strlen(text) - 1);
    assert_non_null(strstr(text, "\"handle\":\"a\\\"}\\u000a{\\\"level\\\":\\\"error\\u00ff\"}"));
    assert_null(strstr(text, "dropped"));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(every_block_runs_once_whatever_the_threads),
        cmocka_unit_test(several_loops_share_one_pool),
        cmocka_unit_test(a_full_queue_is_said_to_be_busy_and_what_it_took_is_done),
        cmocka_unit_test(hostile_text_cannot_forge_a_log_line),
    };
    return cmocka_run_group_tests_name("base: pool, log", tests, NULL, NULL);
}
