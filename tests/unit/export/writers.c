#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <string.h>

#include "ebbmark/export.h"
#include "ebbmark/text.h"

static const struct export_column columns[] = {
    {"candidate", EXPORT_INTEGER, "", "meta.id", "Number.", 0},
    {"depth_ppm", EXPORT_REAL, "1e-6", "", "Depth.", 4},
    {"star", EXPORT_TEXT, "", "meta.id;src", "Star <name>.", 0},
    {"sure", EXPORT_BOOLEAN, "", "", "Is it?", 0},
};
static const struct export_table table = {"candidates", "Dips & lures.", columns, 4};
static const struct export_fact facts[] = {{"run", "3"}};

static bool gather(void *context, const void *data, size_t size, struct base_error *error)
{
    (void)error;
    base_text_add_bytes(context, data, size);
    return true;
}

static struct base_text write_rows(enum export_format format)
{
    const struct export_cell rows[][4] = {
        {{.integer = 12}, {.real = 1234.5678}, {.text = "RB-0001, \"big\""}, {.boolean = true}},
        {{.integer = -1}, {.real = NAN}, {.text = "=1+1&<\n"}, {.null = true}},
    };
    struct base_text out = {0};
    struct export_writer *writer;
    assert_true(export_open(&writer, format, &table, facts, 1, gather, &out, NULL));
    for (size_t i = 0; i < 2; i++)
        assert_true(export_row(writer, rows[i], NULL));
    assert_true(export_finish(writer, NULL));
    export_close(writer);
    return out;
}

static void csv_quotes_and_defuses_formulas(void **state)
{
    (void)state;
    struct base_text out = write_rows(EXPORT_CSV);
    assert_string_equal(out.data, "candidate,depth_ppm,star,sure\r\n"
                                  "12,1235,\"RB-0001, \"\"big\"\"\",true\r\n"
                                  "-1,,\"'=1+1&<\n\",\r\n");
    base_text_free(&out);
}

static void json_escapes_and_says_null(void **state)
{
    (void)state;
    struct base_text out = write_rows(EXPORT_JSON);
    assert_non_null(strstr(out.data, "\"about\":{\"run\":\"3\"}"));
    assert_non_null(strstr(out.data, "{\"candidate\":12,\"depth_ppm\":1235,"
                                     "\"star\":\"RB-0001, \\\"big\\\"\",\"sure\":true}"));
    assert_non_null(strstr(out.data, "{\"candidate\":-1,\"depth_ppm\":null,"
                                     "\"star\":\"=1+1&<\\u000a\",\"sure\":null}"));
    base_text_free(&out);
}

static void votable_escapes_markup(void **state)
{
    (void)state;
    struct base_text out = write_rows(EXPORT_VOTABLE);
    assert_non_null(strstr(out.data, "<INFO name=\"run\" value=\"3\"/>"));
    assert_non_null(strstr(out.data, "<DESCRIPTION>Star &lt;name&gt;.</DESCRIPTION>"));
    assert_non_null(strstr(out.data, "<TD>-1</TD><TD></TD><TD>=1+1&amp;&lt;\n</TD><TD></TD>"));
    base_text_free(&out);
}

static bool refuse(void *context, const void *data, size_t size, struct base_error *error)
{
    (void)data;
    (void)size;
    ++*(int *)context;
    return base_fail(error, BASE_DISK_FULL, "The disk is full.");
}

static void a_sink_that_fails_stops_the_writer_with_its_reason(void **state)
{
    (void)state;
    int calls = 0;
    struct export_writer *writer;
    assert_true(export_open(&writer, EXPORT_CSV, &table, NULL, 0, refuse, &calls, NULL));
    struct base_error error = {0};
    assert_false(export_finish(writer, &error));
    assert_int_equal(error.kind, BASE_DISK_FULL);
    assert_int_equal(calls, 1);
    export_close(writer);
}

static void formats_are_known_by_name(void **state)
{
    (void)state;
    enum export_format format;
    assert_true(export_format_read("votable", &format));
    assert_int_equal(format, EXPORT_VOTABLE);
    assert_false(export_format_read("xls", &format));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(csv_quotes_and_defuses_formulas),
        cmocka_unit_test(json_escapes_and_says_null),
        cmocka_unit_test(votable_escapes_markup),
        cmocka_unit_test(a_sink_that_fails_stops_the_writer_with_its_reason),
        cmocka_unit_test(formats_are_known_by_name),
    };
    return cmocka_run_group_tests_name("export: writers", tests, NULL, NULL);
}
