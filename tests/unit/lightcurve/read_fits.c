#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <pthread.h>

#include "lightcurve/read_support.h"

static const struct lightcurve_mapping defaults;

static bool read_text(const struct base_text *file, struct lightcurve_reading *out,
                      struct base_error *error)
{
    /* A copy of the exact size, so that the sanitizer sees any step past the end. */
    unsigned char *copy = malloc(file->length);
    memcpy(copy, file->data, file->length);
    bool ok =
        lightcurve_read_bytes("folder/RB-0007.fits", copy, file->length, &defaults, out, error);
    free(copy);
    return ok;
}

static bool read_mapped(const struct base_text *file, const struct lightcurve_mapping *mapping,
                        struct lightcurve_reading *out, struct base_error *error)
{
    return lightcurve_read_bytes("RB-0007.fits", file->data, file->length, mapping, out, error);
}

#define FOUR_COLUMNS                                                                               \
    "TTYPE1  = 'TIME'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX'\nTFORM2  = 'E'\n"                           \
    "TTYPE3  = 'FLUX_ERR'\nTFORM3  = '1E'\nTTYPE4  = 'QUALITY'\nTFORM4  = 'J'\n"

/* Three rows of time, flux, error and quality, the second without a flux. */
static void small_file(struct base_text *file, const char *primary_cards, const char *table_cards)
{
    primary(file, primary_cards);
    struct base_text more = {0};
    base_text_add(&more, FOUR_COLUMNS);
    base_text_add(&more, table_cards);
    table_header(file, "20", "3", "4", more.data);
    base_text_free(&more);
    for (int i = 0; i < 3; i++) {
        real64(file, 100.0 + 0.5 * i);
        real32(file, i == 1 ? NAN : 1000.0f + (float)i);
        real32(file, 2.5f);
        whole(file, 4, i == 2 ? 128 : 0);
    }
    pad(file, '\0');
}

static void a_light_curve_is_read_with_its_star_and_time_reference(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, "OBJECT  = 'RB-0042'\nTEFF    =               5700.5",
               "BJDREFI =              2460000\nBJDREFF =                 0.25\n"
               "TIMESYS = 'TDB'\nTIMEUNIT= 'd'\nRA_OBJ  =               123.5\n"
               "DEC_OBJ =                -12.25");
    assert_true(read_text(&file, &reading, &error));
    assert_int_equal(reading.count, 1);
    const struct lightcurve_raw *curve = reading.curves;
    assert_string_equal(curve->star.name, "RB-0042");
    assert_string_equal(curve->time_reference, "BJD_TDB - 2460000.25");
    assert_true(curve->star.ra_deg == 123.5 && curve->star.dec_deg == -12.25);
    assert_true(curve->star.temperature_k == 5700.5);
    assert_true(isnan(curve->star.radius_rsun) && isnan(curve->star.magnitude));
    assert_int_equal(curve->count, 3);
    assert_true(curve->time[2] == 101.0 && curve->flux[0] == 1000.0 && isnan(curve->flux[1]));
    assert_true(curve->error[1] == 2.5);
    assert_int_equal(curve->quality[1], 0);
    assert_int_equal(curve->quality[2], 128);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void a_star_without_a_name_is_named_after_its_file(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, NULL, "");
    assert_true(read_text(&file, &reading, &error));
    assert_string_equal(reading.curves[0].star.name, "RB-0007");
    assert_string_equal(reading.curves[0].time_reference, "unstated");
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

/* One column FLUX of the type, three values, and TIME. */
static void typed_file(struct base_text *file, const char *form, const char *more,
                       const int64_t values[3])
{
    char header[512];
    int bytes = form[0] == 'B' ? 1 : form[0] == 'I' ? 2 : form[0] == 'J' || form[0] == 'E' ? 4 : 8;
    char row[8];
    (void)snprintf(row, sizeof row, "%d", 8 + bytes);
    (void)snprintf(header, sizeof header,
                   "TTYPE1  = 'TIME'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX'\nTFORM2  = '%s'\n%s", form,
                   more);
    primary(file, NULL);
    table_header(file, row, "3", "2", header);
    for (int i = 0; i < 3; i++) {
        real64(file, i);
        if (form[0] == 'E')
            real32(file, (float)values[i]);
        else if (form[0] == 'D')
            real64(file, (double)values[i]);
        else
            whole(file, bytes, values[i]);
    }
    pad(file, '\0');
}

static void check_typed(const char *form, const char *more, const int64_t values[3],
                        const double wanted[3])
{
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    typed_file(&file, form, more, values);
    if (!read_text(&file, &reading, &error))
        fail_msg("%s %s: %s", form, more, error.sentence);
    for (int i = 0; i < 3; i++)
        if (isnan(wanted[i]) ? !isnan(reading.curves[0].flux[i])
                             : reading.curves[0].flux[i] != wanted[i])
            fail_msg("%s %s: row %d is %g, not %g", form, more, i, reading.curves[0].flux[i],
                     wanted[i]);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void every_numeric_column_type_is_read(void **state)
{
    (void)state;
    const int64_t values[3] = {1, 2, 100};
    const double same[3] = {1, 2, 100};
    const double scaled[3] = {12, 14, 210};
    static const char *const forms[] = {"B", "I", "J", "K", "E", "D"};
    for (size_t i = 0; i < 6; i++) {
        check_typed(forms[i], "", values, same);
        check_typed(forms[i], "TSCAL2  =                  2.0\nTZERO2  =                 10.0",
                    values, scaled);
    }
}

static void null_values_of_integer_columns_are_missing(void **state)
{
    (void)state;
    const int64_t values[3] = {1, 7, 9};
    const double wanted[3] = {1, NAN, 9};
    const double wanted_scaled[3] = {0.5, NAN, 4.5};
    static const char *const forms[] = {"B", "I", "J", "K"};
    for (size_t i = 0; i < 4; i++) {
        check_typed(forms[i], "TNULL2  =                    7", values, wanted);
        check_typed(forms[i], "TNULL2  =                    7\nTSCAL2  =                  0.5",
                    values, wanted_scaled);
    }
}

/* FITS 4.0, section 5.2.5: an unsigned integer is a signed one with a fixed TZERO. */
static void unsigned_columns_are_read(void **state)
{
    (void)state;
    const int64_t from16[3] = {-32768, 0, 32767};
    const double wanted16[3] = {0, 32768, 65535};
    check_typed("I", "TZERO2  =                32768", from16, wanted16);
    const int64_t from32[3] = {INT32_MIN, 0, INT32_MAX};
    const double wanted32[3] = {0, 2147483648.0, 4294967295.0};
    check_typed("J", "TZERO2  =           2147483648", from32, wanted32);
    const int64_t from64[3] = {INT64_MIN, 0, INT64_MIN + 5};
    const double wanted64[3] = {0, 9223372036854775808.0, 5};
    check_typed("K", "TZERO2  =  9223372036854775808", from64, wanted64);
    const int64_t from8[3] = {0, 128, 255};
    const double wanted8[3] = {-128, 0, 127};
    check_typed("B", "TZERO2  =                 -128", from8, wanted8);
}

static void check_quality(const char *form, const char *more, int bytes, int64_t value,
                          int32_t wanted)
{
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    char header[512], row[8];
    (void)snprintf(row, sizeof row, "%d", 16 + bytes);
    (void)snprintf(header, sizeof header,
                   "TTYPE1  = 'TIME'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX'\nTFORM2  = 'D'\n"
                   "TTYPE3  = 'QUALITY'\nTFORM3  = '%s'\n%s",
                   form, more);
    primary(&file, NULL);
    table_header(&file, row, "1", "3", header);
    real64(&file, 1.0);
    real64(&file, 1.0);
    if (form[0] == 'D')
        real64(&file, (double)value);
    else
        whole(&file, bytes, value);
    pad(&file, '\0');
    if (!read_text(&file, &reading, &error))
        fail_msg("%s: %s", form, error.sentence);
    if (reading.curves[0].quality[0] != wanted)
        fail_msg("%s %lld gives %d, not %d", form, (long long)value, reading.curves[0].quality[0],
                 wanted);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void quality_flags_keep_their_bits_whatever_their_width(void **state)
{
    (void)state;
    check_quality("B", "", 1, 255, 255);
    check_quality("I", "", 2, 16384, 16384);
    check_quality("J", "", 4, -1, -1);
    check_quality("J", "TZERO3  =           2147483648", 4, 0, INT32_MIN);
    check_quality("K", "", 8, 5, 5);
    check_quality("K", "", 8, 1ll << 40, INT32_MIN);
    check_quality("K", "TZERO3  =  9223372036854775808", 8, 0, INT32_MIN);
    check_quality("D", "", 8, 4, 4);
}

static void a_file_cut_short_anywhere_is_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    small_file(&file, NULL, "");
    size_t data_ends = 2 * 2880 + 60;
    for (size_t length = 1; length < data_ends; length++) {
        struct base_text cut = {.data = file.data, .length = length};
        error = (struct base_error){0};
        assert_false(read_text(&cut, &reading, &error));
        assert_null(reading.curves);
        assert_int_equal(error.kind, BASE_INVALID);
        if (length >= 9 && length != 2880 && strstr(error.sentence, "Truncated") == NULL)
            fail_msg("%zu bytes: %s", length, error.sentence);
    }
    base_text_free(&file);
}

static void a_file_without_its_last_padding_is_read(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, NULL, "");
    file.length = 2 * 2880 + 60;
    assert_true(read_text(&file, &reading, &error));
    assert_int_equal(reading.curves[0].count, 3);
    assert_true(reading.curves[0].time[2] == 101.0);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void check_refused(const char *row_bytes, const char *rows, const char *fields,
                          const char *columns, enum base_error_kind kind, const char *sentence)
{
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    primary(&file, NULL);
    table_header(&file, row_bytes, rows, fields, columns);
    for (int i = 0; i < 6; i++)
        real64(&file, i);
    pad(&file, '\0');
    assert_fails(read_text(&file, &reading, &error), error, kind, sentence);
    base_text_free(&file);
}

#define TIME_AND "TTYPE1  = 'TIME'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX'\n"

static void absurd_sizes_are_refused(void **state)
{
    (void)state;
    const char *good = TIME_AND "TFORM2  = 'D'";
    check_refused("16", "1000000000000000", "2", good, BASE_INVALID,
                  "Truncated: the header states 1000000000000000 rows of 16 bytes");
    check_refused("16", "999999999999999999", "2", good, BASE_INVALID, "Truncated");
    check_refused("16", "99999999999999999999", "2", good, BASE_INVALID, "NAXIS2 is not a size");
    check_refused("16", "-3", "2", good, BASE_INVALID, "NAXIS2 is not a size");
    check_refused("1000000000000000", "3", "2", good, BASE_INVALID, "take 16 bytes a row");
    check_refused("16", "3", "2", TIME_AND "TFORM2  = '99999999999999999999D'", BASE_INVALID,
                  "Column 2 of the table in part 2 has no TFORM that can be read");
    check_refused("16", "3", "2", TIME_AND "TFORM2  = '999999999999999D'", BASE_INVALID,
                  "bytes a row");
    check_refused("16", "3", "2", TIME_AND "TFORM2  = '0D'", BASE_INVALID, "bytes a row");
    check_refused("16", "3", "1000000", good, BASE_INVALID, "contradicts the FITS standard");
    check_refused("16", "3", "-1", good, BASE_INVALID, "TFIELDS is not a whole number");
    check_refused("16", "3", "'2'", good, BASE_INVALID, "TFIELDS is not a whole number");
    check_refused("16", "3", "3", good, BASE_INVALID, "Column 3");
    check_refused("16", "3", "2", TIME_AND "TFORM2  = 'W'", BASE_INVALID, "Column 2");
}

/* Found by fuzzing: cfitsio takes such a unit for an image and then divides by its cell size, 0. */
static void a_table_whose_sizes_stand_out_of_place_is_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    primary(&file, NULL);
    cards(&file, "XTENSION= 'BINTABLE'\nBITPIX  =                    8\n"
                 "NAXIS   =                    2\nNAXIS1  =                   16\n"
                 "NAXIS2  =                    3\nPCOUNT  =                    0\n"
                 "GCOUNT  =                    1\nCOMMENT between\n"
                 "TFIELDS =                    2\n" TIME_AND "TFORM2  = 'D'\nEND");
    pad(&file, ' ');
    for (int i = 0; i < 6; i++)
        real64(&file, i);
    pad(&file, '\0');
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID,
                 "contradicts the FITS standard");
    base_text_free(&file);
}

static void columns_of_the_wrong_kind_are_refused(void **state)
{
    (void)state;
    check_refused("16", "3", "2", TIME_AND "TFORM2  = '8A'", BASE_INVALID,
                  "The flux column FLUX holds 8 text a row");
    check_refused("24", "2", "2", TIME_AND "TFORM2  = '2D'", BASE_INVALID, "2 numbers a row");
    check_refused("9", "2", "2", TIME_AND "TFORM2  = 'L'", BASE_INVALID, "logical values");
    check_refused("16", "2", "2", TIME_AND "TFORM2  = 'C'", BASE_INVALID, "complex numbers");
    check_refused("16", "2", "2", TIME_AND "TFORM2  = '1PD(9)'", BASE_INVALID, "varying length");
    check_refused("9", "2", "2", TIME_AND "TFORM2  = '1X'", BASE_INVALID, "single bits");
    check_refused("16", "2", "2",
                  "TTYPE1  = 'TIME'\nTFORM1  = '8A'\nTTYPE2  = 'FLUX'\nTFORM2  = 'D'", BASE_INVALID,
                  "The time column TIME holds");
}

static void a_table_without_the_columns_says_which_is_missing(void **state)
{
    (void)state;
    check_refused(
        "16", "3", "2", "TTYPE1  = 'TIME'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX_ERR'\nTFORM2  = 'D'",
        BASE_INVALID, "No flux column: no name ends in FLUX (the columns are TIME, FLUX_ERR)");
    check_refused("16", "3", "2",
                  "TTYPE1  = 'CLOCK'\nTFORM1  = 'D'\nTTYPE2  = 'FLUX'\nTFORM2  = 'D'", BASE_INVALID,
                  "No time column");
    check_refused("16", "0", "2", TIME_AND "TFORM2  = 'D'", BASE_INVALID, "has no rows");
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    primary(&file, NULL);
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID, "No binary table");
    base_text_free(&file);
}

static void a_table_of_nothing_but_missing_values_is_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    primary(&file, NULL);
    table_header(&file, "16", "2", "2", TIME_AND "TFORM2  = 'D'");
    for (int i = 0; i < 2; i++) {
        real64(&file, i == 0 ? NAN : 1.0);
        real64(&file, i == 0 ? 1.0 : NAN);
    }
    pad(&file, '\0');
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID, "All values are missing");
    base_text_free(&file);
}

static void the_longest_flux_name_is_taken_and_no_error_column(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    primary(&file, NULL);
    table_header(&file, "48", "1", "6",
                 "TTYPE1  = 'Time'\nTFORM1  = 'D'\nTTYPE2  = 'RAW_FLUX'\nTFORM2  = 'D'\n"
                 "TTYPE3  = 'CLEAN_FLUX'\nTFORM3  = 'D'\nTTYPE4  = 'OTHER_FLUX'\nTFORM4  = 'D'\n"
                 "TTYPE5  = 'ERR_CLEANED_FLUX'\nTFORM5  = 'D'\nTTYPE6  = 'clean_flux_err'\n"
                 "TFORM6  = 'D'");
    for (int i = 1; i <= 6; i++)
        real64(&file, i);
    pad(&file, '\0');
    assert_true(read_text(&file, &reading, &error));
    assert_true(reading.curves[0].flux[0] == 3.0);
    assert_true(reading.curves[0].error[0] == 6.0);
    assert_null(reading.curves[0].quality);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void columns_and_keywords_can_be_named(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    struct lightcurve_mapping mapping = {.time = "clock",
                                         .flux = "level",
                                         .error = "-",
                                         .quality = "FLAG",
                                         .key_name = "TARGET",
                                         .key_magnitude = "MAG"};
    primary(&file, "TARGET  = 'it''s RB-9'\nOBJECT  = 'not this'\nMAG     =               1.15D1");
    table_header(&file, "26", "1", "4",
                 "TTYPE1  = 'CLOCK'\nTFORM1  = 'D'\nTTYPE2  = 'LEVEL'\nTFORM2  = 'D'\n"
                 "TTYPE3  = 'LEVEL_ERR'\nTFORM3  = 'D'\nTTYPE4  = 'FLAG'\nTFORM4  = 'I'");
    real64(&file, 5.0);
    real64(&file, 6.0);
    real64(&file, 7.0);
    whole(&file, 2, 3);
    pad(&file, '\0');
    assert_true(read_mapped(&file, &mapping, &reading, &error));
    assert_string_equal(reading.curves[0].star.name, "it's RB-9");
    assert_true(reading.curves[0].star.magnitude == 11.5);
    assert_true(reading.curves[0].time[0] == 5.0 && reading.curves[0].flux[0] == 6.0);
    assert_null(reading.curves[0].error);
    assert_int_equal(reading.curves[0].quality[0], 3);
    lightcurve_reading_free(&reading);
    (void)snprintf(mapping.error, sizeof mapping.error, "LEVEL_SD");
    assert_fails(read_mapped(&file, &mapping, &reading, &error), error, BASE_INVALID,
                 "No column is named \"LEVEL_SD\"");
    (void)snprintf(mapping.key_name, sizeof mapping.key_name, "no good");
    assert_fails(read_mapped(&file, &mapping, &reading, &error), error, BASE_INVALID,
                 "A FITS keyword has at most 8 characters");
    assert_string_equal(error.field, "key_name");
    base_text_free(&file);
}

static void the_first_table_with_both_columns_is_taken(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    primary(&file, NULL);
    table_header(&file, "8", "2", "1", "TTYPE1  = 'TIME'\nTFORM1  = 'D'");
    real64(&file, 1.0);
    real64(&file, 2.0);
    pad(&file, '\0');
    cards(&file, "XTENSION= 'IMAGE   '\nBITPIX  =                  -32\n"
                 "NAXIS   =                    2\nNAXIS1  =                   40\n"
                 "NAXIS2  =                   40\nPCOUNT  =                    0\n"
                 "GCOUNT  =                    1\nEND");
    pad(&file, ' ');
    for (int i = 0; i < 1600; i++)
        real32(&file, 0.0f);
    pad(&file, '\0');
    for (int t = 0; t < 2; t++) {
        table_header(&file, "16", "1", "2", TIME_AND "TFORM2  = 'D'");
        real64(&file, 10.0 + t);
        real64(&file, 20.0 + t);
        pad(&file, '\0');
    }
    assert_true(read_text(&file, &reading, &error));
    assert_true(reading.curves[0].time[0] == 10.0 && reading.curves[0].flux[0] == 20.0);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void check_reference(const char *primary_cards, const char *table_cards, const char *wanted,
                            double first_time)
{
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, primary_cards, table_cards);
    if (!read_text(&file, &reading, &error))
        fail_msg("%s: %s", table_cards, error.sentence);
    assert_string_equal(reading.curves[0].time_reference, wanted);
    if (fabs(reading.curves[0].time[0] - first_time) > 1e-12)
        fail_msg("%s: the first time is %.15g", table_cards, reading.curves[0].time[0]);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void time_references_are_worded_in_one_way(void **state)
{
    (void)state;
    check_reference(NULL, "TUNIT1  = 'BJD - 2457000, days'\nTIMESYS = 'TDB'", "BJD_TDB - 2457000",
                    100.0);
    check_reference(NULL, "TUNIT1  = 'BJD - 2457000, days'", "BJD - 2457000", 100.0);
    check_reference(NULL,
                    "MJDREFI =                55197\nMJDREFF =       7.6601852D-4\n"
                    "TIMESYS = 'TT'",
                    "MJD_TT - 55197.00076601852", 100.0);
    check_reference(NULL, "MJDREF  =              58849.0\nTIMESYS = 'UTC'", "MJD_UTC - 58849",
                    100.0);
    check_reference(NULL,
                    "MJDREF  =              58849.0\nTIMEREF = 'SOLARSYSTEM'\nTIMESYS = 'TDB'",
                    "BMJD_TDB - 58849", 100.0);
    check_reference("BJDREFI =              2454833\nTIMESYS = 'TDB'", "", "BJD_TDB - 2454833",
                    100.0);
    check_reference("BJDREFI =              2454833\nBJDREFF =                 0.75",
                    "BJDREFI =              2460000", "BJD - 2460000", 100.0);
    check_reference(NULL, "TUNIT1  = 'HJD_UTC'", "HJD_UTC", 100.0);
    check_reference(NULL, "JDREF   =            2400000.5\nTIMESYS = 'nobody knows'",
                    "JD - 2400000.5", 100.0);
    check_reference(NULL, "TUNIT1  = 'd'", "unstated", 100.0);
}

static void times_in_other_units_become_days(void **state)
{
    (void)state;
    check_reference(NULL, "TIMEUNIT= 's'\nMJDREF  =                50000", "MJD - 50000",
                    100.0 / 86400.0);
    check_reference(NULL, "TUNIT1  = 'h'\nTIMEUNIT= 's'", "unstated", 100.0 / 24.0);
    check_reference(NULL, "TIMEUNIT= 'd'\nTIMEZERO=                  7.5", "unstated", 107.5);
    check_reference(NULL, "TUNIT1  = 'min'\nTIMEOFFS=                  7.5", "unstated",
                    100.0 / 1440.0 + 7.5);
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    small_file(&file, NULL, "TUNIT1  = 'furlong'");
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID,
                 "unit \"furlong\" is not a unit of time");
    base_text_free(&file);
}

static void many_stars_in_one_table_are_told_apart_by_a_star_column(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    struct lightcurve_mapping mapping = {.star = "STAR"};
    static const char *const names[] = {"RB-1  ", "RB-22 ", "RB-1  ", "RB-333"};
    primary(&file, NULL);
    table_header(&file, "22", "4", "3", TIME_AND "TFORM2  = 'D'\nTTYPE3  = 'STAR'\nTFORM3  = '6A'");
    for (int i = 0; i < 4; i++) {
        real64(&file, i);
        real64(&file, 10.0 * i);
        base_text_add(&file, names[i]);
    }
    pad(&file, '\0');
    assert_true(read_mapped(&file, &mapping, &reading, &error));
    assert_int_equal(reading.count, 3);
    assert_string_equal(reading.curves[0].star.name, "RB-1");
    assert_int_equal(reading.curves[0].count, 2);
    assert_true(reading.curves[0].time[1] == 2.0 && reading.curves[0].flux[1] == 20.0);
    assert_string_equal(reading.curves[2].star.name, "RB-333");
    assert_true(reading.curves[2].flux[0] == 30.0);
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void header_values_out_of_range_are_taken_as_unknown(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, NULL,
               "RA_OBJ  =                  360\nDEC_OBJ =                 -91\n"
               "TEFF    =                   -1\nRADIUS  = 'large'");
    assert_true(read_text(&file, &reading, &error));
    assert_true(isnan(reading.curves[0].star.ra_deg) && isnan(reading.curves[0].star.dec_deg));
    assert_true(isnan(reading.curves[0].star.temperature_k));
    assert_true(isnan(reading.curves[0].star.radius_rsun));
    lightcurve_reading_free(&reading);
    base_text_free(&file);
}

static void a_star_name_that_is_too_long_or_not_text_is_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    small_file(&file,
               "OBJECT  = 'aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa'",
               "");
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID, "longer than 63 bytes");
    file.length = 0;
    small_file(&file, "OBJECT  = 'RB\xff'", "");
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID, "not UTF-8");
    base_text_free(&file);
}

static void a_header_without_an_end_is_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    card(&file, "SIMPLE  =                    T");
    card(&file, "BITPIX  =                    8");
    card(&file, "NAXIS   =                    0");
    for (int i = 0; i < 60000; i++)
        card(&file, "COMMENT and so on");
    pad(&file, ' ');
    assert_fails(read_text(&file, &reading, &error), error, BASE_TOO_LARGE,
                 "more than 50000 cards");
    file.length = 40 * 2880;
    assert_fails(read_text(&file, &reading, &error), error, BASE_INVALID, "Truncated");
    base_text_free(&file);
}

static void a_compressed_file_is_read_but_not_one_compressed_twice(void **state)
{
    (void)state;
    struct base_text file = {0}, once = {0}, twice = {0};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    small_file(&file, NULL, "");
    gzip(file.data, file.length, &once);
    gzip(once.data, once.length, &twice);
    assert_true(lightcurve_read_bytes("night 3: a/RB-0008.FITS.gz", once.data, once.length,
                                      &defaults, &reading, &error));
    assert_int_equal(reading.curves[0].count, 3);
    assert_string_equal(reading.curves[0].star.name, "RB-0008");
    lightcurve_reading_free(&reading);
    assert_fails(read_text(&twice, &reading, &error), error, BASE_INVALID, "compressed twice");
    for (size_t length = 3; length < once.length; length++) {
        struct base_text cut = {.data = once.data, .length = length};
        assert_fails(read_text(&cut, &reading, &error), error, BASE_INVALID, "Truncated");
    }
    base_text_free(&file);
    base_text_free(&once);
    base_text_free(&twice);
}

static void more_points_than_the_limit_are_refused(void **state)
{
    (void)state;
    struct base_text file = {0};
    struct lightcurve_reading reading;
    struct base_error error;
    char rows[16];
    (void)snprintf(rows, sizeof rows, "%d", LIGHTCURVE_POINTS_MAX + 1);
    primary(&file, NULL);
    table_header(&file, "2", rows, "2",
                 "TTYPE1  = 'TIME'\nTFORM1  = 'B'\nTTYPE2  = 'FLUX'\nTFORM2  = 'B'");
    for (int i = 0; i <= LIGHTCURVE_POINTS_MAX; i++)
        whole(&file, 2, i);
    pad(&file, '\0');
    assert_fails(read_text(&file, &reading, &error), error, BASE_TOO_LARGE,
                 "The table has 5000001 rows; the limit is 5000000");
    base_text_free(&file);
}

struct reader {
    const struct base_text *file;
    int wrong;
};

static void *read_many_times(void *context)
{
    struct reader *reader = context;
    for (int i = 0; i < 200; i++) {
        struct lightcurve_reading reading;
        struct base_error error = {0};
        if (!read_mapped(reader->file, &defaults, &reading, &error) ||
            reading.curves[0].count != 3 || reading.curves[0].time[2] != 101.0 ||
            reading.curves[0].quality[2] != 128)
            reader->wrong++;
        lightcurve_reading_free(&reading);
    }
    return NULL;
}

static void several_threads_read_at_once(void **state)
{
    (void)state;
    struct base_text file = {0};
    pthread_t threads[4];
    struct reader readers[4] = {0};
    small_file(&file, NULL, "");
    for (int i = 0; i < 4; i++) {
        readers[i].file = &file;
        assert_int_equal(pthread_create(&threads[i], NULL, read_many_times, &readers[i]), 0);
    }
    for (int i = 0; i < 4; i++) {
        assert_int_equal(pthread_join(threads[i], NULL), 0);
        assert_int_equal(readers[i].wrong, 0);
    }
    base_text_free(&file);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_light_curve_is_read_with_its_star_and_time_reference),
        cmocka_unit_test(a_star_without_a_name_is_named_after_its_file),
        cmocka_unit_test(every_numeric_column_type_is_read),
        cmocka_unit_test(null_values_of_integer_columns_are_missing),
        cmocka_unit_test(unsigned_columns_are_read),
        cmocka_unit_test(quality_flags_keep_their_bits_whatever_their_width),
        cmocka_unit_test(a_file_cut_short_anywhere_is_refused),
        cmocka_unit_test(a_file_without_its_last_padding_is_read),
        cmocka_unit_test(absurd_sizes_are_refused),
        cmocka_unit_test(a_table_whose_sizes_stand_out_of_place_is_refused),
        cmocka_unit_test(columns_of_the_wrong_kind_are_refused),
        cmocka_unit_test(a_table_without_the_columns_says_which_is_missing),
        cmocka_unit_test(a_table_of_nothing_but_missing_values_is_refused),
        cmocka_unit_test(the_longest_flux_name_is_taken_and_no_error_column),
        cmocka_unit_test(columns_and_keywords_can_be_named),
        cmocka_unit_test(the_first_table_with_both_columns_is_taken),
        cmocka_unit_test(time_references_are_worded_in_one_way),
        cmocka_unit_test(times_in_other_units_become_days),
        cmocka_unit_test(many_stars_in_one_table_are_told_apart_by_a_star_column),
        cmocka_unit_test(header_values_out_of_range_are_taken_as_unknown),
        cmocka_unit_test(a_star_name_that_is_too_long_or_not_text_is_refused),
        cmocka_unit_test(a_header_without_an_end_is_refused),
        cmocka_unit_test(a_compressed_file_is_read_but_not_one_compressed_twice),
        cmocka_unit_test(more_points_than_the_limit_are_refused),
        cmocka_unit_test(several_threads_read_at_once),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
