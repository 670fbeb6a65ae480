/* The tables that leave the program, and reviews that come from elsewhere. */
#include "support.h"

#include <math.h>

#include "ebbmark/tables.h"
#include "ebbmark/text.h"

static bool gather(void *context, const void *data, size_t size, struct base_error *error)
{
    (void)error;
    base_text_add_bytes(context, data, size);
    return true;
}

static struct base_text write_table(struct place *place, enum campaign_table table,
                                    enum export_format format)
{
    struct base_text out = {0};
    struct base_error error = {0};
    assert_ok(campaign_table_write(place->campaign, table, 0, format, gather, &out, &error), error);
    return out;
}

static size_t count_of(const char *text, const char *part)
{
    size_t count = 0;
    for (const char *at = strstr(text, part); at != NULL; at = strstr(at + 1, part))
        count++;
    return count;
}

/* The least columns that the interface promises. */
static void the_candidates_table_has_the_promised_columns(void **state)
{
    (void)state;
    static const char *const promised[] = {"candidate",
                                           "run",
                                           "star",
                                           "ra",
                                           "dec",
                                           "starts",
                                           "ends",
                                           "mid_time",
                                           "time_reference",
                                           "probability",
                                           "log_odds",
                                           "marks_only_probability",
                                           "looks",
                                           "marks",
                                           "snr",
                                           "depth_ppm",
                                           "depth_error_ppm",
                                           "duration_h",
                                           "duration_error_h",
                                           "period_d",
                                           "period_error_d",
                                           "epoch",
                                           "transits",
                                           "other_stars",
                                           "flags",
                                           "verdict"};
    const struct export_table *table = campaign_table(CAMPAIGN_CANDIDATES);
    for (size_t i = 0; i < sizeof promised / sizeof promised[0]; i++) {
        size_t found = 0;
        for (size_t c = 0; c < table->column_count; c++)
            found += strcmp(table->columns[c].name, promised[i]) == 0 ? 1 : 0;
        assert_int_equal(found, 1);
    }
    enum campaign_table which;
    assert_true(campaign_table_read("reviews", &which));
    assert_int_equal(which, CAMPAIGN_REVIEWS);
    assert_false(campaign_table_read("review", &which));
}

static void every_column_is_described_and_named_once(void **state)
{
    (void)state;
    for (int t = CAMPAIGN_CANDIDATES; t <= CAMPAIGN_REVIEWS; t++) {
        const struct export_table *table = campaign_table((enum campaign_table)t);
        for (size_t c = 0; c < table->column_count; c++) {
            assert_true(strlen(table->columns[c].description) > 10);
            for (size_t other = 0; other < c; other++)
                assert_string_not_equal(table->columns[c].name, table->columns[other].name);
        }
    }
}

static const struct export_cell *cell_of(const struct campaign_cells *row, const char *name)
{
    const struct export_table *table = campaign_table(CAMPAIGN_CANDIDATES);
    for (size_t c = 0; c < table->column_count; c++)
        if (strcmp(table->columns[c].name, name) == 0)
            return &row->cells[c];
    fail_msg("no column %s", name);
    return NULL;
}

static void a_candidates_cells_are_its_values(void **state)
{
    (void)state;
    const struct store_candidate candidate = {.id = 12,
                                              .run = 3,
                                              .star_name = "RB-0001",
                                              .mid_d = 1354.5,
                                              .depth_ppm = 2500.0,
                                              .period_d = NAN,
                                              .other_stars = 4,
                                              .flags = 1 | 4 | 32,
                                              .verdict = "keep"};
    struct campaign_cells row;
    campaign_candidate_cells(&candidate, &row);
    assert_int_equal(cell_of(&row, "candidate")->integer, 12);
    assert_int_equal(cell_of(&row, "other_stars")->integer, 4);
    assert_true(cell_of(&row, "mid_time")->real == 1354.5);
    assert_true(cell_of(&row, "depth_ppm")->real == 2500.0);
    assert_int_equal(isnan(cell_of(&row, "period_d")->real) != 0, 1);
    assert_string_equal(cell_of(&row, "star")->text, "RB-0001");
    assert_string_equal(cell_of(&row, "flags")->text, "near_gap v_shaped lopsided");
    assert_string_equal(cell_of(&row, "verdict")->text, "keep");
}

/* Two people on two segments; one asked for credit. */
static void make_reviews(struct place *place)
{
    struct base_error error = {0};
    place_open(place);
    (void)add_flat_stars(place, "first", 1, 2, 2);
    int64_t one = add_person(place, "brisk tern"), two = add_person(place, "calm eider");
    assert_ok(store_person_set_credit(place->store, one, true, &error), error);
    const struct store_mark marks[] = {
        {.starts_d = 1.25, .ends_d = 1.5, .low = 0.99, .high = 1.001, .sure = true},
        {.starts_d = 4.0, .ends_d = 4.125, .low = 0.98, .high = 1.0, .sure = false}};
    review_segment(place, one, 1, 1, marks, 2);
    review_segment(place, two, 1, 2, marks, 1);
    review_segment(place, two, 3, 3, NULL, 0);
}

static void exports_name_only_people_who_asked_for_credit(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    int64_t run = 0;
    make_reviews(&place);
    struct base_text none = {0};
    assert_false(campaign_table_write(place.campaign, CAMPAIGN_REVIEWERS, 0, EXPORT_CSV, gather,
                                      &none, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    assert_ok(campaign_run(place.campaign, NULL, NULL, &run, &error), error);
    for (int t = CAMPAIGN_REVIEWERS; t <= CAMPAIGN_REVIEWS; t++) {
        struct base_text out = write_table(&place, (enum campaign_table)t, EXPORT_CSV);
        assert_non_null(strstr(out.data, "brisk tern"));
        assert_null(strstr(out.data, "calm eider"));
        assert_non_null(strstr(out.data, "person-2"));
        base_text_free(&out);
    }
    base_text_free(&none);
    place_close(&place);
}

static void candidates_come_with_their_run_and_the_caution(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    int64_t run = 0;
    make_reviews(&place);
    assert_ok(campaign_run(place.campaign, NULL, NULL, &run, &error), error);
    struct base_text json = write_table(&place, CAMPAIGN_CANDIDATES, EXPORT_JSON);
    assert_non_null(strstr(json.data, "not a confirmed planet"));
    assert_non_null(strstr(json.data, "\"run\":\"1\""));
    assert_int_equal(count_of(json.data, "RB-00001"), 2);
    struct base_text csv = write_table(&place, CAMPAIGN_CANDIDATES, EXPORT_CSV);
    assert_int_equal(count_of(csv.data, "\r\n"), 3); /* a header and two candidates */
    base_text_free(&csv);
    base_text_free(&json);
    place_close(&place);
}

static bool full_sink(void *context, const void *data, size_t size, struct base_error *error)
{
    (void)data;
    size_t *left = context;
    if (size > *left)
        return base_fail(error, BASE_DISK_FULL, "The disk is full.");
    *left -= size;
    return true;
}

static void a_sink_that_fails_ends_the_table(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    int64_t run = 0;
    make_reviews(&place);
    assert_ok(campaign_run(place.campaign, NULL, NULL, &run, &error), error);
    struct base_text whole = write_table(&place, CAMPAIGN_REVIEWS, EXPORT_CSV);
    for (size_t room = 0; room < whole.length; room += 7) {
        size_t left = room;
        error = (struct base_error){0};
        assert_false(campaign_table_write(place.campaign, CAMPAIGN_REVIEWS, 0, EXPORT_CSV,
                                          full_sink, &left, &error));
        assert_int_equal(error.kind, BASE_DISK_FULL);
    }
    size_t left = whole.length;
    assert_ok(campaign_table_write(place.campaign, CAMPAIGN_REVIEWS, 0, EXPORT_CSV, full_sink,
                                   &left, &error),
              error);
    base_text_free(&whole);
    place_close(&place);
}

/* ---- reviews from elsewhere ---- */

struct refusals {
    unsigned count;
    uint64_t lines[32];
    char reasons[32][BASE_SENTENCE_SIZE];
};

static void hear_refused(void *context, uint64_t line, const char *reason)
{
    struct refusals *refusals = context;
    assert_true(refusals->count < 32);
    refusals->lines[refusals->count] = line;
    (void)snprintf(refusals->reasons[refusals->count++], BASE_SENTENCE_SIZE, "%s", reason);
}

static bool add_text(struct place *place, const char *text, size_t size, struct refusals *refusals,
                     struct campaign_reviews_added *added, struct base_error *error)
{
    char path[256];
    (void)snprintf(path, sizeof path, "%s/reviews.csv", place->folder);
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    assert_int_equal(fwrite(text, 1, size, file), size);
    (void)fclose(file);
    *refusals = (struct refusals){0};
    return campaign_reviews_add_file(place->campaign, path, hear_refused, refusals, added, error);
}

#define HEADER                                                                                     \
    "review,reviewer,star,segment_starts,segment_ends,submitted,mark_starts,mark_ends,mark_low,"   \
    "mark_high,certainty\n"

static void an_exported_table_of_reviews_can_be_added_elsewhere(void **state)
{
    (void)state;
    struct place from, to;
    struct base_error error = {0};
    struct refusals refusals;
    struct campaign_reviews_added added;
    struct store_look *looks = NULL;
    struct store_mark *marks = NULL;
    size_t look_count = 0, mark_count = 0;
    make_reviews(&from);
    struct base_text csv = write_table(&from, CAMPAIGN_REVIEWS, EXPORT_CSV);
    place_open(&to);
    (void)add_flat_stars(&to, "the same stars", 1, 2, 2);
    assert_ok(add_text(&to, csv.data, csv.length, &refusals, &added, &error), error);
    assert_int_equal(added.reviews, 3);
    assert_int_equal(added.marks, 3);
    assert_int_equal(added.refused + added.repeated, 0);
    struct base_arena *arena = base_arena_new(0);
    assert_ok(store_star_looks(to.store, arena, 1, 1000, &looks, &look_count, &marks, &mark_count,
                               &error),
              error);
    assert_int_equal(look_count, 2);
    assert_int_equal(mark_count, 3);
    assert_true(marks[0].starts_d == 1.25 && marks[0].ends_d == 1.5 && marks[0].sure);
    assert_true(marks[1].high == 1.0 && !marks[1].sure);
    assert_true(base_clock_unix_ms() - looks[0].submitted_ms < 60000);
    /* Once more changes nothing. */
    assert_ok(add_text(&to, csv.data, csv.length, &refusals, &added, &error), error);
    assert_int_equal(added.reviews, 0);
    assert_int_equal(added.repeated, 3);
    base_arena_free(arena);
    base_text_free(&csv);
    place_close(&to);
    place_close(&from);
}

static void reviews_that_do_not_fit_are_refused_by_line(void **state)
{
    (void)state;
    static const char text[] = HEADER
        "a,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,1,1.2,0.9,1,sure\n"    /* 2: good */
        "a,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,2,2.2,0.9,1,unsure\n"  /* of the same */
        "b,tern,RB-99999,0,9.75,2026-01-02T03:04:05Z,1,1.2,0.9,1,sure\n"    /* 4: no such star */
        "c,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,1,99,0.9,1,sure\n"     /* 5: outside */
        "d,tern,RB-00001,200,209,2026-01-02T03:04:05Z,,,,,\n"               /* 6: no segment */
        "e,tern,RB-00001,0,9.75,yesterday,,,,,\n"                           /* 7: time */
        "f,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,one,1.2,0.9,1,sure\n"  /* 8: number */
        "g,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,1,1.2,0.9,1,perhaps\n" /* 9: certainty */
        "h,,RB-00001,0,9.75,2026-01-02T03:04:05Z,,,,,\n"                    /* 10: nobody */
        "i,tern,RB-00001,0,9.75,2026-01-02T03:04:05Z,1,1.2,0.9,1,sure\n"    /* 11: differs */
        "i,tern,RB-00002,0,9.75,2026-01-02T03:04:05Z,1,1.2,0.9,1,sure\n"
        "a,tern,RB-00002,0,9.75,2026-01-02T03:04:05Z,,,,,\n" /* 13: name used */
        ",tern,RB-00002,0,9.75,2026-01-02T03:04:05Z,,,,,\n"  /* 14: no name */
        "\"j, the last\",\"tern\",RB-00002,0.5,9,2026-01-02T05:04:05.25+02:00,,,,,\n"; /* good */
    static const uint64_t refused_lines[] = {4, 5, 6, 7, 8, 9, 10, 11, 14, 13};
    struct place place;
    struct base_error error = {0};
    struct refusals refusals;
    struct campaign_reviews_added added;
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 2, 2);
    assert_ok(add_text(&place, text, sizeof text - 1, &refusals, &added, &error), error);
    assert_int_equal(added.reviews, 2);
    assert_int_equal(added.marks, 2);
    assert_int_equal(added.refused, 10);
    for (size_t i = 0; i < 10; i++) {
        assert_int_equal(refusals.lines[i], refused_lines[i]);
        assert_true(strlen(refusals.reasons[i]) > 12);
    }
    struct base_arena *arena = base_arena_new(0);
    struct store_own_totals totals;
    struct store_own_review *own = NULL;
    size_t count = 0;
    assert_ok(store_person_record(place.store, arena, 1, 0, 10, &totals, &own, &count, &error),
              error);
    assert_int_equal(count, 2);
    assert_int_equal(own[0].submitted_ms, 1767323045250); /* 2026-01-02T03:04:05.250Z */
    base_arena_free(arena);
    place_close(&place);
}

static void a_file_that_makes_no_sense_names_its_line(void **state)
{
    (void)state;
    static const struct {
        const char *text;
        const char *said;
    } bad[] = {{"", "Line 1"},
               {"review,reviewer\n", "Line 1"},
               {HEADER "a,\"tern\n", "Line 2"},
               {HEADER "\n\na,\"tern\"s,x\n", "Line 4"},
               {HEADER "\xff\xfe\n", "Line 2"}};
    struct place place;
    struct refusals refusals;
    struct campaign_reviews_added added;
    place_open(&place);
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct base_error error = {0};
        assert_false(add_text(&place, bad[i].text, strlen(bad[i].text), &refusals, &added, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_non_null(strstr(error.sentence, bad[i].said));
    }
    struct base_error error = {0};
    static const char zero[] = HEADER "a,b\0c,d\n";
    assert_false(add_text(&place, zero, sizeof zero - 1, &refusals, &added, &error));
    char *wide = calloc(1, 200000);
    assert_non_null(wide);
    (void)strcpy(wide, HEADER);
    memset(wide + strlen(wide), 'x', 100000);
    assert_false(add_text(&place, wide, strlen(wide), &refusals, &added, &error));
    assert_non_null(strstr(error.sentence, "65536"));
    (void)strcpy(wide, HEADER);
    size_t at = strlen(wide);
    memset(wide + at, ',', 300);
    wide[at + 300] = '\0';
    assert_false(add_text(&place, wide, strlen(wide), &refusals, &added, &error));
    assert_non_null(strstr(error.sentence, "200"));
    free(wide);
    assert_false(campaign_reviews_add_file(place.campaign, "/tmp/ebbmark-no-such-file", NULL, NULL,
                                           &added, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    place_close(&place);
}

/* More than one store transaction holds, with reviewers that come and come again. */
static void many_reviews_are_added_in_groups(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct refusals refusals;
    struct campaign_reviews_added added;
    struct base_text text = {0};
    struct store_counts counts;
    place_open(&place);
    (void)add_flat_stars(&place, "first", 1, 10, 2);
    base_text_add(&text, HEADER);
    for (unsigned i = 0; i < 1000; i++)
        base_text_add_format(&text,
                             "r%u,Tern %u,RB-%05u,0,9.75,2026-01-02T03:04:05Z,1,1.5,0.9,1,\n", i,
                             i % 30, i % 10 + 1);
    assert_ok(add_text(&place, text.data, text.length, &refusals, &added, &error), error);
    assert_int_equal(added.reviews, 1000);
    assert_ok(store_count(place.store, &counts, &error), error);
    assert_int_equal(counts.people, 30);
    assert_int_equal(counts.marks, 1000);
    base_text_free(&text);
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_candidates_table_has_the_promised_columns),
        cmocka_unit_test(every_column_is_described_and_named_once),
        cmocka_unit_test(a_candidates_cells_are_its_values),
        cmocka_unit_test(exports_name_only_people_who_asked_for_credit),
        cmocka_unit_test(candidates_come_with_their_run_and_the_caution),
        cmocka_unit_test(a_sink_that_fails_ends_the_table),
        cmocka_unit_test(an_exported_table_of_reviews_can_be_added_elsewhere),
        cmocka_unit_test(reviews_that_do_not_fit_are_refused_by_line),
        cmocka_unit_test(a_file_that_makes_no_sense_names_its_line),
        cmocka_unit_test(many_reviews_are_added_in_groups),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
