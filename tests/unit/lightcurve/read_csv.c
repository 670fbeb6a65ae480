#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>

#include "lightcurve/read_support.h"

static const struct lightcurve_mapping defaults;

static bool read_sized(const char *data, size_t size, struct lightcurve_reading *out,
                       struct base_error *error)
{
    /* A copy of the exact size, so that the sanitizer sees any step past the end. */
    char *copy = malloc(size);
    memcpy(copy, data, size);
    bool ok = lightcurve_read_bytes("b/RB-0003.csv", copy, size, &defaults, out, error);
    free(copy);
    return ok;
}

static bool read_string(const char *text, struct lightcurve_reading *out, struct base_error *error)
{
    return read_sized(text, strlen(text), out, error);
}

/* Reads two points, (1.5, 10) and (2.5, 20), of one star. */
static void check_two_points(const char *text, const char *star, const char *reference)
{
    struct lightcurve_reading reading;
    struct base_error error = {0};
    if (!read_string(text, &reading, &error))
        fail_msg("%s: %s", text, error.sentence);
    assert_int_equal(reading.count, 1);
    assert_int_equal(reading.curves[0].count, 2);
    assert_string_equal(reading.curves[0].star.name, star);
    assert_string_equal(reading.curves[0].time_reference, reference);
    if (fabs(reading.curves[0].time[0] - 1.5) > 1e-12 ||
        fabs(reading.curves[0].time[1] - 2.5) > 1e-12)
        fail_msg("%s: times %.15g and %.15g", text, reading.curves[0].time[0],
                 reading.curves[0].time[1]);
    assert_true(reading.curves[0].flux[0] == 10.0 && reading.curves[0].flux[1] == 20.0);
    lightcurve_reading_free(&reading);
}

static void csv_is_read_in_the_forms_that_programs_write(void **state)
{
    (void)state;
    check_two_points("time,flux\n1.5,10\n2.5,20\n", "RB-0003", "unstated");
    check_two_points("time,flux\r\n1.5,10\r\n2.5,20", "RB-0003", "unstated");
    check_two_points("time,flux\r1.5,10\r2.5,20\r", "RB-0003", "unstated");
    check_two_points("\xef\xbb\xbfTime,Flux\n1.5,10\n2.5,20\n", "RB-0003", "unstated");
    check_two_points("\"time\",\"flux\"\n\"1.5\" , \"10\"\n 2.5 ,\"20\"\n", "RB-0003", "unstated");
    check_two_points("time\tflux\n1.5\t10\n2.5\t20\n", "RB-0003", "unstated");
    check_two_points("time;flux\n1.5;1e1\n2.5;+20.0\n", "RB-0003", "unstated");
    check_two_points("\n  \n# made by hand\ntime,flux\n\n1.5,10\n\n2.5,20\n", "RB-0003",
                     "unstated");
    check_two_points("# made by hand\n# time [BJD-2457000],flux\n1.5,10\n2.5,20\n", "RB-0003",
                     "BJD - 2457000");
    check_two_points("note,flux,star,time\n\"a,\nb\",10,RB \"9\",1.5\n,20,RB \"9\",2.5\n",
                     "RB \"9\"", "unstated");
}

static void units_in_the_header_are_read(void **state)
{
    (void)state;
    check_two_points("time [BJD-2457000],flux [e-/s]\n1.5,10\n2.5,20\n", "RB-0003",
                     "BJD - 2457000");
    check_two_points("time (BJD_TDB - 2457000.5),flux\n1.5,10\n2.5,20\n", "RB-0003",
                     "BJD_TDB - 2457000.5");
    check_two_points("time (BJD(TDB)-2460000),flux\n1.5,10\n2.5,20\n", "RB-0003",
                     "BJD_TDB - 2460000");
    check_two_points("\"time [HJD (UTC) - 2450000, days]\",flux\n1.5,10\n2.5,20\n", "RB-0003",
                     "HJD_UTC - 2450000");
    check_two_points("time [MJD],flux\n1.5,10\n2.5,20\n", "RB-0003", "MJD");
    check_two_points("time [h],flux\n36,10\n60,20\n", "RB-0003", "unstated");
    check_two_points("time [s],flux\n129600,10\n216000,20\n", "RB-0003", "unstated");
    check_two_points("time [XJD],flux\n1.5,10\n2.5,20\n", "RB-0003", "XJD");
    struct lightcurve_reading reading;
    struct base_error error;
    assert_fails(read_string("time [parsec],flux\n1,2\n", &reading, &error), error, BASE_INVALID,
                 "\"parsec\" is not a unit of time");
}

static void errors_quality_and_missing_values_are_read(void **state)
{
    (void)state;
    struct lightcurve_reading reading;
    struct base_error error = {0};
    assert_true(read_string("time,raw_flux,flux_err,raw_flux_err,quality\n"
                            "1,2,0.5,0.25,0\n2,,0.5,,\n3,NaN,1,null,4294967295\n"
                            "4,n/a,1,--,0.5\n5,6,7,8,-1\n6,inf,1,1,1e300\n",
                            &reading, &error));
    const struct lightcurve_raw *curve = reading.curves;
    assert_int_equal(curve->count, 6);
    assert_true(isnan(curve->flux[1]) && isnan(curve->flux[2]) && isnan(curve->flux[3]));
    assert_true(isinf(curve->flux[5]));
    assert_true(curve->error[0] == 0.25 && isnan(curve->error[1]) && curve->error[4] == 8.0);
    assert_int_equal(curve->quality[0], 0);
    assert_int_equal(curve->quality[1], 0);
    assert_int_equal(curve->quality[2], -1);
    assert_int_equal(curve->quality[3], INT32_MIN);
    assert_int_equal(curve->quality[4], -1);
    assert_int_equal(curve->quality[5], INT32_MIN);
    lightcurve_reading_free(&reading);
}

/* The quick way for plain decimals must give the same bits as strtod. */
static void numbers_are_read_to_the_last_bit(void **state)
{
    (void)state;
    static const char *const texts[] = {"2457000.123456789",
                                        "0.1",
                                        "-0.0",
                                        "9007199254740993",
                                        "123456789012345678",
                                        "1234567890123456789012345",
                                        "0.000000000000000001",
                                        "1.7976931348623157e308",
                                        "4.9406564584124654e-324",
                                        "-1354.1074130860343",
                                        "+.5",
                                        "5.",
                                        "1E5",
                                        "72057594037927945"};
    for (size_t i = 0; i < sizeof texts / sizeof texts[0]; i++) {
        struct lightcurve_reading reading;
        struct base_error error = {0};
        char text[128];
        (void)snprintf(text, sizeof text, "time,flux\n1,%s\n", texts[i]);
        assert_true(read_string(text, &reading, &error));
        double wanted = strtod(texts[i], NULL);
        if (memcmp(&wanted, reading.curves[0].flux, sizeof wanted) != 0)
            fail_msg("%s is read as %.17g", texts[i], reading.curves[0].flux[0]);
        lightcurve_reading_free(&reading);
    }
}

static void many_stars_in_one_file_are_told_apart(void **state)
{
    (void)state;
    struct base_text text = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    base_text_add(&text, "star,time,flux\n");
    for (int t = 0; t < 3; t++)
        for (int s = 0; s < 500; s++)
            base_text_add_format(&text, "RB-%04d,%d,%d\n", s, t, 10 * s + t);
    assert_true(read_string(text.data, &reading, &error));
    assert_int_equal(reading.count, 500);
    for (int s = 0; s < 500; s++) {
        char name[16];
        (void)snprintf(name, sizeof name, "RB-%04d", s);
        assert_string_equal(reading.curves[s].star.name, name);
        assert_int_equal(reading.curves[s].count, 3);
        assert_true(reading.curves[s].flux[2] == 10.0 * s + 2.0);
    }
    lightcurve_reading_free(&reading);
    base_text_free(&text);
}

static void check_refused(const char *text, enum base_error_kind kind, const char *sentence)
{
    struct lightcurve_reading reading;
    struct base_error error;
    assert_fails(read_string(text, &reading, &error), error, kind, sentence);
    assert_null(reading.curves);
    assert_int_equal(reading.count, 0);
}

static void bad_csv_is_refused_with_its_line(void **state)
{
    (void)state;
    check_refused(" ", BASE_INVALID, "no header line");
    check_refused("# nothing\n", BASE_INVALID, "no header line");
    check_refused("1.5,10\n2.5,20\n", BASE_INVALID, "Line 1: there is no header");
    check_refused("time,flux\n", BASE_INVALID, "column names but no data");
    check_refused("time,brightness\n1,2\n", BASE_INVALID, "No flux column");
    check_refused("t,flux\n1,2\n", BASE_INVALID, "No time column");
    check_refused("time,flux\n1,2\n1.5,bright\n", BASE_INVALID,
                  "Line 3: the flux \"bright\" is not a number");
    check_refused("time,flux\n1,2\n\n1.5 h,3\n", BASE_INVALID,
                  "Line 4: the time \"1.5 h\" is not a number");
    check_refused("time,flux\n0x10,3\n", BASE_INVALID, "Line 2: the time \"0x10\"");
    check_refused("time,flux\n1,2,3\n", BASE_INVALID, "Line 2 has 3 fields where the header has 2");
    check_refused("time,flux\n1,2\n1\n", BASE_INVALID, "Line 3 has 1 fields");
    check_refused("time,flux\n1,\"2\n3,4\n", BASE_INVALID,
                  "Truncated: line 2 has a quotation mark that is not closed");
    check_refused("time,flux\n1,\"2\"3\n", BASE_INVALID, "Line 2: text follows a closing");
    check_refused("time,flux\n1,\n,2\nnan,nan\n", BASE_INVALID, "All values are missing");
    check_refused("star,time,flux\n,1,2\n", BASE_INVALID, "Line 2: The star's name is empty");
    check_refused("star,time,flux\nRB\xff,1,2\n", BASE_INVALID, "not UTF-8");
    check_refused("time,flux\n\"a\nb\",2\n", BASE_INVALID, "Line 2: the time \"a?b\"");
    check_refused("time,flux\n\"1\",\"a\nb\"\n1,x\n", BASE_INVALID, "Line 2: the flux");
    check_refused("time,flux\n\"1\r\n\",2\n1,x\n", BASE_INVALID, "Line 4: the flux \"x\"");
}

static void nul_bytes_are_refused(void **state)
{
    (void)state;
    struct lightcurve_reading reading;
    struct base_error error;
    static const char plain[] = "time,flux\n1,2\n3,\0004\n";
    assert_fails(read_sized(plain, sizeof plain - 1, &reading, &error), error, BASE_INVALID,
                 "Line 3: a NUL byte");
    static const char quoted[] = "time,flux\n\"1\0\",2\n";
    assert_fails(read_sized(quoted, sizeof quoted - 1, &reading, &error), error, BASE_INVALID,
                 "Line 2: a NUL byte");
    static const char utf16[] = "\xff\xfet\0i\0m\0e\0,\0f\0l\0u\0x\0\n\0";
    assert_fails(read_sized(utf16, sizeof utf16 - 1, &reading, &error), error, BASE_INVALID,
                 "Line 1: a NUL byte");
}

static void a_million_columns_are_refused(void **state)
{
    (void)state;
    struct base_text text = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    base_text_add(&text, "time,flux");
    for (int i = 0; i < 1000000; i++)
        base_text_add(&text, ",c");
    assert_fails(read_string(text.data, &reading, &error), error, BASE_TOO_LARGE,
                 "Line 1 has more than 1000 columns");
    text.length = 0;
    base_text_add(&text, "time,flux");
    for (int i = 2; i < 1000; i++)
        base_text_add(&text, ",c");
    base_text_add(&text, "\n1,2");
    for (int i = 2; i < 1000; i++)
        base_text_add(&text, ",");
    error = (struct base_error){0};
    assert_true(read_string(text.data, &reading, &error));
    lightcurve_reading_free(&reading);
    base_text_free(&text);
}

/* A line of exactly the limit is read, one byte more is not; quoted or plain. */
static void a_line_past_the_limit_is_refused(void **state)
{
    (void)state;
    for (int quoted = 0; quoted < 2; quoted++)
        for (int more = 0; more < 2; more++) {
            struct base_text text = {0};
            struct lightcurve_reading reading;
            struct base_error error = {0};
            base_text_add(&text, "time,flux,note\n");
            size_t start = text.length;
            base_text_add(&text, quoted ? "1,2,\"" : "1,2,");
            while (text.length - start <
                   LIGHTCURVE_CSV_LINE_MAX + (unsigned)more - (unsigned)quoted)
                base_text_add_char(&text, 'x');
            base_text_add(&text, quoted ? "\"" : "");
            base_text_add(&text, "\n3,4,\n");
            bool ok = read_string(text.data, &reading, &error);
            assert_true(ok == (more == 0));
            if (more == 1) {
                assert_int_equal(error.kind, BASE_TOO_LARGE);
                assert_non_null(strstr(error.sentence, "Line 2 is longer than 1048576 bytes"));
            }
            lightcurve_reading_free(&reading);
            base_text_free(&text);
        }
}

static void more_stars_than_the_limit_are_refused(void **state)
{
    (void)state;
    struct base_text text = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    base_text_add(&text, "star,time,flux\n");
    for (int i = 0; i <= LIGHTCURVE_STARS_PER_FILE_MAX; i++)
        base_text_add_format(&text, "%d,1,1\n", i);
    assert_fails(read_string(text.data, &reading, &error), error, BASE_TOO_LARGE,
                 "more than 100000 stars");
    base_text_free(&text);
}

static void a_packed_file_that_unpacks_beyond_all_measure_is_refused(void **state)
{
    (void)state;
    struct base_text packed = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    size_t size = 80u << 20;
    char *zeros = calloc(1, size);
    gzip(zeros, size, &packed);
    assert_true(packed.length < size / LIGHTCURVE_ARCHIVE_RATIO_MAX);
    assert_fails(read_sized(packed.data, packed.length, &reading, &error), error, BASE_TOO_LARGE,
                 "more than 200 times its packed size");
    free(zeros);
    base_text_free(&packed);
}

static void gzip_members_one_after_another_are_one_file(void **state)
{
    (void)state;
    struct base_text packed = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    gzip("time,flux\n1,", 12, &packed);
    gzip("2\n3,4\n", 6, &packed);
    assert_true(read_sized(packed.data, packed.length, &reading, &error));
    assert_int_equal(reading.curves[0].count, 2);
    lightcurve_reading_free(&reading);
    packed.data[packed.length - 6] ^= 1; /* the checksum */
    assert_fails(read_sized(packed.data, packed.length, &reading, &error), error, BASE_INVALID,
                 "gzip data are damaged");
    base_text_free(&packed);
}

static void an_archive_is_no_light_curve(void **state)
{
    (void)state;
    struct lightcurve_reading reading;
    struct base_error error;
    char tar[1024] = "a.csv";
    memcpy(tar + 257, "ustar", 5);
    assert_fails(read_sized("PK\x03\x04 and so on", 14, &reading, &error), error, BASE_INVALID,
                 "archive");
    assert_fails(read_sized(tar, sizeof tar, &reading, &error), error, BASE_INVALID, "archive");
    struct base_text packed = {0};
    gzip(tar, sizeof tar, &packed);
    assert_fails(read_sized(packed.data, packed.length, &reading, &error), error, BASE_INVALID,
                 "archive");
    base_text_free(&packed);
}

static void an_empty_file_is_refused(void **state)
{
    (void)state;
    struct lightcurve_reading reading;
    struct base_error error;
    assert_fails(lightcurve_read_bytes("x", NULL, 0, &defaults, &reading, &error), error,
                 BASE_INVALID, "The file is empty");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(csv_is_read_in_the_forms_that_programs_write),
        cmocka_unit_test(units_in_the_header_are_read),
        cmocka_unit_test(errors_quality_and_missing_values_are_read),
        cmocka_unit_test(numbers_are_read_to_the_last_bit),
        cmocka_unit_test(many_stars_in_one_file_are_told_apart),
        cmocka_unit_test(bad_csv_is_refused_with_its_line),
        cmocka_unit_test(nul_bytes_are_refused),
        cmocka_unit_test(a_million_columns_are_refused),
        cmocka_unit_test(a_line_past_the_limit_is_refused),
        cmocka_unit_test(more_stars_than_the_limit_are_refused),
        cmocka_unit_test(a_packed_file_that_unpacks_beyond_all_measure_is_refused),
        cmocka_unit_test(gzip_members_one_after_another_are_one_file),
        cmocka_unit_test(an_archive_is_no_light_curve),
        cmocka_unit_test(an_empty_file_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
