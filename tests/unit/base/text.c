#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/arena.h"
#include "ebbmark/clock.h"
#include "ebbmark/text.h"

static void a_number_reads_back_as_the_same_double(void **state)
{
    (void)state;
    const double values[] = {0.0, -0.0, 0.1, 1.0 / 3.0, 2455804.515752, 5e-324, 1.7e308, -84e-6};
    for (size_t i = 0; i < sizeof values / sizeof values[0]; i++) {
        char buffer[BASE_NUMBER_SIZE];
        double back = 7.0;
        assert_true(base_text_read_number(base_text_number(buffer, values[i]), &back));
        assert_memory_equal(&back, &values[i], sizeof back);
    }
    char buffer[BASE_NUMBER_SIZE];
    assert_string_equal(base_text_number(buffer, 0.1), "0.1");
    assert_string_equal(base_text_number(buffer, NAN), "");
}

static void what_is_not_wholly_a_number_is_refused(void **state)
{
    (void)state;
    const char *const refused[] = {"", " ", "1,5", "1 2", "0x10", "abc", "1e", "--1", "1.2.3"};
    double out = 0.0;
    for (size_t i = 0; i < sizeof refused / sizeof refused[0]; i++)
        assert_false(base_text_read_number(refused[i], &out));
    assert_true(base_text_read_number(" -2.5e3 ", &out));
    assert_true(out == -2500.0);
}

static void hexadecimal_goes_there_and_back(void **state)
{
    (void)state;
    const unsigned char bytes[] = {0x00, 0x7f, 0x80, 0xff};
    char hex[9];
    base_text_hex(hex, bytes, sizeof bytes);
    assert_string_equal(hex, "007f80ff");
    unsigned char back[4];
    assert_true(base_text_unhex(back, sizeof back, hex));
    assert_memory_equal(back, bytes, sizeof back);
    assert_false(base_text_unhex(back, sizeof back, "007f80f"));
    assert_false(base_text_unhex(back, sizeof back, "007f80ff0"));
    assert_false(base_text_unhex(back, sizeof back, "007g80ff"));
}

/* Cases of ill-formed sequences after The Unicode Standard, table 3-7. */
static void ill_formed_utf8_is_told_from_well_formed(void **state)
{
    (void)state;
    const char *const good[] = {
        "", "plain", "\xc3\xa9", "\xe2\x82\xac", "\xf0\x9f\x8c\x8a", "\xed\x9f\xbf"};
    const char *const bad[] = {"\x80",         "\xc0\xaf",         "\xe0\x9f\xbf",
                               "\xed\xa0\x80", "\xf4\x90\x80\x80", "\xe2\x82",
                               "a\xff"};
    for (size_t i = 0; i < sizeof good / sizeof good[0]; i++)
        assert_true(base_text_is_utf8(good[i], strlen(good[i])));
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++)
        assert_false(base_text_is_utf8(bad[i], strlen(bad[i])));
    assert_false(base_text_is_utf8("a\0b", 3));
}

static void a_text_grows_by_pieces(void **state)
{
    (void)state;
    struct base_text text = {0};
    for (int i = 0; i < 1000; i++)
        base_text_add_format(&text, "%03d,", i);
    assert_false(text.failed);
    assert_int_equal(text.length, 4000);
    assert_memory_equal(text.data + 3996, "999,", 5);
    base_text_free(&text);
    assert_null(text.data);
}

static void an_arena_keeps_its_limit(void **state)
{
    (void)state;
    struct base_arena *arena = base_arena_new(1000);
    assert_non_null(base_arena_take(arena, 600));
    assert_null(base_arena_take(arena, 600));
    assert_null(base_arena_take_array(arena, SIZE_MAX / 2, 4));
    base_arena_reset(arena);
    char *text = base_arena_format(arena, "%s %d", "segment", 7);
    assert_string_equal(text, "segment 7");
    base_arena_free(arena);
}

static void an_arena_gives_zeroed_memory_after_a_reset(void **state)
{
    (void)state;
    struct base_arena *arena = base_arena_new(0);
    memset(base_arena_take(arena, 64), 0xff, 64);
    base_arena_reset(arena);
    const unsigned char zero[64] = {0};
    assert_memory_equal(base_arena_take(arena, 64), zero, 64);
    base_arena_free(arena);
}

/* Values from RFC 3339's subject, the POSIX epoch and leap-year rules. */
static void times_of_day_are_written_in_utc(void **state)
{
    (void)state;
    char buffer[BASE_CLOCK_SIZE];
    assert_string_equal(base_clock_rfc3339(buffer, 0), "1970-01-01T00:00:00.000Z");
    assert_string_equal(base_clock_rfc3339(buffer, 951782400123), "2000-02-29T00:00:00.123Z");
    assert_string_equal(base_clock_rfc3339(buffer, -1), "1969-12-31T23:59:59.999Z");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_number_reads_back_as_the_same_double),
        cmocka_unit_test(what_is_not_wholly_a_number_is_refused),
        cmocka_unit_test(hexadecimal_goes_there_and_back),
        cmocka_unit_test(ill_formed_utf8_is_told_from_well_formed),
        cmocka_unit_test(a_text_grows_by_pieces),
        cmocka_unit_test(an_arena_keeps_its_limit),
        cmocka_unit_test(an_arena_gives_zeroed_memory_after_a_reset),
        cmocka_unit_test(times_of_day_are_written_in_utc),
    };
    return cmocka_run_group_tests_name("base: texts, arenas, clocks", tests, NULL, NULL);
}
