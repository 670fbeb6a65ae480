#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <pthread.h>
#include <stdlib.h>
#include <string.h>

#include "../../../server/api/flux_kept.h"

#define SIZE 1000u

static struct http_kept_body *body_of(unsigned char first)
{
    unsigned char data[SIZE];
    memset(data, first, sizeof data);
    struct http_kept_body *body =
        http_kept_make("application/octet-stream", data, sizeof data, "\"x\"", "private");
    assert_non_null(body);
    return body;
}

static void put(struct flux_kept *kept, uint64_t id, unsigned view, enum flux_form form,
                int64_t segment)
{
    const struct flux_key key = {id, view, form};
    struct http_kept_body *body = body_of((unsigned char)id);
    flux_kept_put(kept, &key, segment, body);
    http_kept_drop(body);
}

/* The segment of a kept body; 0 when there is none. */
static int64_t find(struct flux_kept *kept, uint64_t id, unsigned view, enum flux_form form)
{
    const struct flux_key key = {id, view, form};
    struct http_kept_body *body = NULL;
    int64_t segment = 0;
    if (!flux_kept_find(kept, &key, &segment, &body))
        return 0;
    assert_true(http_kept_size(body) >= SIZE);
    http_kept_drop(body);
    return segment;
}

static void what_was_put_is_found_under_its_own_key_only(void **state)
{
    struct flux_kept *kept = flux_kept_new(1u << 20);
    (void)state;
    put(kept, 0x1234567890abcdefu, 0, FLUX_PACKED, 7);
    assert_int_equal(find(kept, 0x1234567890abcdefu, 0, FLUX_PACKED), 7);
    assert_int_equal(find(kept, 0x1234567890abcdefu, 1, FLUX_PACKED), 0);
    assert_int_equal(find(kept, 0x1234567890abcdefu, 0, FLUX_JSON), 0);
    assert_int_equal(find(kept, 0x1234567890abcdeeu, 0, FLUX_PACKED), 0);
    const struct flux_kept_figures figures = flux_kept_figures_now(kept);
    assert_int_equal(figures.bodies, 1);
    assert_int_equal(figures.found, 1);
    assert_int_equal(figures.missed, 3);
    flux_kept_free(kept);
}

static void putting_the_same_twice_keeps_it_once(void **state)
{
    struct flux_kept *kept = flux_kept_new(1u << 20);
    (void)state;
    put(kept, 16, 0, FLUX_PACKED, 1);
    put(kept, 16, 0, FLUX_PACKED, 2);
    assert_int_equal(flux_kept_figures_now(kept).bodies, 1);
    assert_int_equal(find(kept, 16, 0, FLUX_PACKED), 1);
    flux_kept_free(kept);
}

static void the_bytes_stay_within_what_was_allowed(void **state)
{
    size_t most = 200000;
    struct flux_kept *kept = flux_kept_new(most);
    (void)state;
    for (uint64_t id = 1; id <= 2000; id++) {
        put(kept, id, 0, FLUX_PACKED, (int64_t)id);
        assert_true(flux_kept_figures_now(kept).bytes <= most);
    }
    const struct flux_kept_figures figures = flux_kept_figures_now(kept);
    assert_true(figures.bodies > 16 && figures.bodies < 2000);
    assert_int_equal(find(kept, 2000, 0, FLUX_PACKED), 2000);
    assert_int_equal(find(kept, 1, 0, FLUX_PACKED), 0);
    flux_kept_free(kept);
}

static void what_was_asked_for_lately_stays(void **state)
{
    struct flux_kept *kept = flux_kept_new(200000);
    (void)state;
    /* Multiples of the number of shards, so that all fall on one. */
    put(kept, 16, 0, FLUX_PACKED, 16);
    for (uint64_t i = 2; i < 100; i++) {
        put(kept, 16 * i, 0, FLUX_PACKED, 1);
        assert_int_equal(find(kept, 16, 0, FLUX_PACKED), 16);
    }
    assert_int_equal(find(kept, 32, 0, FLUX_PACKED), 0);
    flux_kept_free(kept);
}

static void a_body_that_would_push_out_all_others_is_not_kept(void **state)
{
    struct flux_kept *kept = flux_kept_new(16 * 1500);
    (void)state;
    put(kept, 1, 0, FLUX_PACKED, 1);
    assert_int_equal(find(kept, 1, 0, FLUX_PACKED), 0);
    assert_int_equal(flux_kept_figures_now(kept).bytes, 0);
    flux_kept_free(kept);
}

static void a_body_in_hand_outlives_the_keeper(void **state)
{
    struct flux_kept *kept = flux_kept_new(1u << 20);
    const struct flux_key key = {5, 0, FLUX_PACKED};
    struct http_kept_body *body = NULL;
    int64_t segment;
    (void)state;
    put(kept, 5, 0, FLUX_PACKED, 5);
    assert_true(flux_kept_find(kept, &key, &segment, &body));
    flux_kept_free(kept);
    assert_true(http_kept_size(body) >= SIZE);
    http_kept_drop(body);
}

static void *use(void *context)
{
    struct flux_kept *kept = context;
    for (uint64_t round = 0; round < 3000; round++) {
        uint64_t id = round * 7919u % 400u;
        if (find(kept, id, 0, FLUX_PACKED) == 0)
            put(kept, id, 0, FLUX_PACKED, (int64_t)id + 1);
    }
    return NULL;
}

static void many_threads_may_use_it_at_once(void **state)
{
    struct flux_kept *kept = flux_kept_new(200000);
    pthread_t threads[4];
    (void)state;
    for (size_t i = 0; i < 4; i++)
        assert_int_equal(pthread_create(&threads[i], NULL, use, kept), 0);
    for (size_t i = 0; i < 4; i++)
        assert_int_equal(pthread_join(threads[i], NULL), 0);
    const struct flux_kept_figures figures = flux_kept_figures_now(kept);
    assert_true(figures.bytes <= 200000);
    assert_true(figures.found + figures.missed == 4 * 3000);
    flux_kept_free(kept);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(what_was_put_is_found_under_its_own_key_only),
        cmocka_unit_test(putting_the_same_twice_keeps_it_once),
        cmocka_unit_test(the_bytes_stay_within_what_was_allowed),
        cmocka_unit_test(what_was_asked_for_lately_stays),
        cmocka_unit_test(a_body_that_would_push_out_all_others_is_not_kept),
        cmocka_unit_test(a_body_in_hand_outlives_the_keeper),
        cmocka_unit_test(many_threads_may_use_it_at_once),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
