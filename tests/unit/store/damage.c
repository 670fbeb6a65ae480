/* Databases that were cut short or overwritten in places: errors, never a crash, never a value that
 * was not stored. */
#include "support.h"

#include <fcntl.h>
#include <sqlite3.h>
#include <sys/stat.h>
#include <sys/wait.h>

static const struct store_options plain = {.readers = 1};

static void run_sql(const char *path, const char *sql)
{
    sqlite3 *db = NULL;
    assert_int_equal(sqlite3_open(path, &db), SQLITE_OK);
    if (sqlite3_exec(db, sql, NULL, NULL, NULL) != SQLITE_OK)
        fail_msg("%s: %s", sql, sqlite3_errmsg(db));
    assert_int_equal(sqlite3_close(db), SQLITE_OK);
}

static bool visit_row(void *context, const struct store_review_row *row)
{
    (void)row;
    (*(size_t *)context)++;
    return true;
}

static bool visit_segment(void *context, const struct store_open_segment *segment)
{
    (void)segment;
    (*(size_t *)context)++;
    return true;
}

static bool is_told(bool ok, enum base_error_kind *worst)
{
    if (!ok && error.kind != BASE_NOT_FOUND) {
        *worst = error.kind;
        assert_true(strlen(error.sentence) > 10);
    }
    return ok;
}

/* Ask for everything. Returns the kind of a failure, BASE_NONE when there was none. */
static enum base_error_kind ask_everything(struct store *store, const char *public_id)
{
    struct base_arena *arena = base_arena_new(64u << 20);
    enum base_error_kind worst = BASE_NONE;
    struct store_batch *batches;
    struct store_file *files;
    struct store_star *stars;
    struct store_light_curve *curves;
    struct store_points points;
    struct store_segment segment;
    struct store_person *people;
    struct store_look *looks;
    struct store_mark *marks;
    struct store_candidate *rows;
    struct store_own_review *own;
    struct store_own_totals totals;
    struct store_counts counts;
    size_t count, marked, seen = 0;
    int64_t total;
    const struct store_candidate_query query = {.star = "", .batch = "", .verdict = ""};
    assert_non_null(arena);
    (void)is_told(store_batches_list(store, arena, &batches, &count, &error), &worst);
    (void)is_told(store_batch_files(store, arena, 1, 0, 100, &files, &count, &error), &worst);
    (void)is_told(store_stars_list(store, arena, 0, 100, &stars, &count, &error), &worst);
    (void)is_told(store_light_curves_of_star(store, arena, 1, &curves, &count, &error), &worst);
    (void)is_told(store_points_read(store, arena, 1, &points, &error), &worst);
    (void)is_told(store_segment_by_public_id(store, arena, public_id, &segment, &error), &worst);
    (void)is_told(store_people_list(store, arena, 0, 100, &people, &count, &error), &worst);
    (void)is_told(
        store_star_looks(store, arena, 1, INT64_MAX, &looks, &count, &marks, &marked, &error),
        &worst);
    (void)is_told(store_person_record(store, arena, 1, 0, 100, &totals, &own, &count, &error),
                  &worst);
    (void)is_told(store_candidates_find(store, arena, &query, &rows, &count, &total, &error),
                  &worst);
    (void)is_told(store_reviews_each(store, INT64_MAX, visit_row, &seen, &error), &worst);
    (void)is_told(store_segments_open_each(store, visit_segment, &seen, &error), &worst);
    (void)is_told(store_count(store, &counts, &error), &worst);
    base_arena_free(arena);
    return worst;
}

/* A campaign of some size, closed, and the id of a segment of it. */
static void fill_and_close(struct place *place, char public_id[STORE_PUBLIC_ID_SIZE])
{
    struct store_segment segment;
    struct store_candidate candidates[200];
    for (unsigned i = 0; i < 200; i++) {
        char key[16];
        (void)snprintf(key, sizeof key, "key-%u", i);
        struct store_review_new review = a_review(place, key, (unsigned char)i);
        must(add_review(place->store, &review, &error));
        candidates[i] = (struct store_candidate){
            .id = 1 + (int64_t)i, .star = 1, .light_curve = 1, .probability = 0.5};
    }
    struct store_run_new run = {.run = {.newest_review = 200, .settings = "{}", .fit = "{}"},
                                .candidates = candidates,
                                .candidate_count = 200};
    must(store_run_add(place->store, &run, &error));
    must(store_segment_by_id(place->store, place->arena, 1, &segment, &error));
    memcpy(public_id, segment.public_id, sizeof segment.public_id);
    close_store(place);
}

static void points_that_were_overwritten_are_told(void **state)
{
    struct place *place = *state;
    static const char *const spoils[] = {
        "UPDATE points SET checksum = checksum + 1",
        "UPDATE points SET packed = zeroblob(length(packed))",
        "UPDATE points SET packed = substr(packed, 1, length(packed) - 1)",
        "UPDATE points SET packed = x''",
        "UPDATE points SET has_error = 1",
        "UPDATE light_curve SET count = count + 1",
        "UPDATE light_curve SET count = 9000000000",
        "DELETE FROM points",
    };
    close_store(place);
    for (size_t i = 0; i < sizeof spoils / sizeof spoils[0]; i++) {
        struct store *store = NULL;
        struct store_points points;
        char copy[160], command[900];
        (void)snprintf(copy, sizeof copy, "%s/spoiled-%zu.db", place->folder, i);
        (void)snprintf(command, sizeof command, "cp %s %s", place->path, copy);
        assert_int_equal(system(command), 0);
        run_sql(copy, spoils[i]);
        must(store_open(copy, &plain, &store, &error));
        must_fail(store_points_read(store, place->arena, 1, &points, &error), BASE_CORRUPT);
        store_close(store);
    }
    place->store = open_store(place->path);
}

static void flip_bit(sqlite3 *db, int at)
{
    sqlite3_blob *blob = NULL;
    unsigned char byte;
    assert_int_equal(sqlite3_blob_open(db, "main", "points", "packed", 1, 1, &blob), SQLITE_OK);
    assert_int_equal(sqlite3_blob_read(blob, &byte, 1, at / 8), SQLITE_OK);
    byte ^= (unsigned char)(1u << (at % 8));
    assert_int_equal(sqlite3_blob_write(blob, &byte, 1, at / 8), SQLITE_OK);
    assert_int_equal(sqlite3_blob_close(blob), SQLITE_OK);
}

static void each_flipped_bit_of_the_points_is_noticed(void **state)
{
    struct place *place = *state;
    sqlite3 *db = NULL;
    sqlite3_stmt *row = NULL;
    struct store_points points;
    assert_int_equal(sqlite3_open(place->path, &db), SQLITE_OK);
    assert_int_equal(sqlite3_busy_timeout(db, 5000), SQLITE_OK);
    assert_int_equal(sqlite3_prepare_v2(db, "SELECT length(packed) FROM points", -1, &row, NULL),
                     SQLITE_OK);
    assert_int_equal(sqlite3_step(row), SQLITE_ROW);
    int bits = 8 * sqlite3_column_int(row, 0);
    assert_int_equal(sqlite3_finalize(row), SQLITE_OK);
    assert_true(bits > 800);
    for (int at = 0; at < bits; at += 1 + bits / 300) {
        flip_bit(db, at);
        must_fail(store_points_read(place->store, place->arena, 1, &points, &error), BASE_CORRUPT);
        flip_bit(db, at);
    }
    assert_int_equal(sqlite3_close(db), SQLITE_OK);
    must(store_points_read(place->store, place->arena, 1, &points, &error));
}

static void a_database_cut_short_is_told_and_not_made_worse(void **state)
{
    struct place *place = *state;
    char public_id[STORE_PUBLIC_ID_SIZE];
    struct stat whole;
    fill_and_close(place, public_id);
    assert_int_equal(stat(place->path, &whole), 0);
    size_t told = 0, tries = 0;
    for (off_t size = whole.st_size - 1; size > 0; size -= whole.st_size / 23) {
        struct store *store = NULL;
        char copy[160], command[900];
        (void)snprintf(copy, sizeof copy, "%s/cut-%zu.db", place->folder, tries++);
        (void)snprintf(command, sizeof command, "cp %s %s", place->path, copy);
        assert_int_equal(system(command), 0);
        assert_int_equal(truncate(copy, size), 0);
        error = (struct base_error){0};
        enum base_error_kind kind;
        if (store_open(copy, &plain, &store, &error))
            kind = ask_everything(store, public_id);
        else
            kind = error.kind;
        if (kind != BASE_CORRUPT && !(kind == BASE_INVALID && size < 100))
            fail_msg("cut to %ld of %ld bytes: %s: %s", (long)size, (long)whole.st_size,
                     base_error_kind_name(kind), error.sentence);
        told++;
        store_close(store);
    }
    assert_int_equal(told, tries);
    int version;
    must_fail(store_backup_check(in_folder(place, "cut-3.db"), &version, &error), BASE_CORRUPT);
    place->store = open_store(place->path);
}

/* Damage that no question happens to meet is found when a copy is made, which is then not kept. */
static void a_copy_of_a_damaged_database_is_not_kept(void **state)
{
    struct place *place = *state;
    int version;
    struct store_review_new review = a_review(place, "k1", 1);
    must(add_review(place->store, &review, &error));
    close_store(place);
    run_sql(place->path, "PRAGMA writable_schema = ON; UPDATE sqlite_schema SET sql ="
                         " 'CREATE INDEX mark_review ON mark (starts)' WHERE name = 'mark_review'");
    place->store = open_store(place->path);
    must_fail(store_backup(place->store, in_folder(place, "copy.db"), &error), BASE_CORRUPT);
    assert_int_equal(access(in_folder(place, "copy.db"), F_OK), -1);
    assert_int_equal(access(in_folder(place, "copy.db.part"), F_OK), -1);
    close_store(place);
    must_fail(store_backup_check(place->path, &version, &error), BASE_CORRUPT);
    place->store = open_store(place->path);
}

/* Bytes overwritten at random. What is read may be wrong where SQLite itself cannot know, but every
 * verb ends, with or without an error. */
static void a_database_overwritten_in_places_never_crashes_us(void **state)
{
    struct place *place = *state;
    char public_id[STORE_PUBLIC_ID_SIZE];
    struct stat whole;
    uint32_t seed = 12345;
    fill_and_close(place, public_id);
    assert_int_equal(stat(place->path, &whole), 0);
    size_t told = 0;
    for (int i = 0; i < 150; i++) {
        struct store *store = NULL;
        char copy[160], command[900];
        (void)snprintf(copy, sizeof copy, "%s/spoiled.db", place->folder);
        (void)snprintf(command, sizeof command, "rm -f %s* && cp %s %s", copy, place->path, copy);
        assert_int_equal(system(command), 0);
        int fd = open(copy, O_RDWR | O_CLOEXEC);
        for (int k = 0; k < 40; k++) {
            seed = seed * 1664525u + 1013904223u;
            unsigned char byte = (unsigned char)(seed >> 24);
            off_t at = 100 + (off_t)((seed >> 4) % (uint32_t)(whole.st_size - 100));
            assert_int_equal(pwrite(fd, &byte, 1, at), 1);
        }
        assert_int_equal(close(fd), 0);
        error = (struct base_error){0};
        if (!store_open(copy, &plain, &store, &error) ||
            ask_everything(store, public_id) != BASE_NONE)
            told++;
        store_close(store);
    }
    assert_true(told > 0);
    place->store = open_store(place->path);
}

/* A child that stores reviews and ends without closing leaves them all in the WAL. */
static void leave_wal(const struct place *place, unsigned count)
{
    int status;
    pid_t child = fork();
    if (child == 0) {
        struct store *store = NULL;
        bool ok = store_open(place->path, &plain, &store, NULL);
        for (unsigned i = 0; ok && i < count; i++) {
            char key[16];
            (void)snprintf(key, sizeof key, "k%u", i);
            struct store_review_new review = a_review(place, key, (unsigned char)i);
            ok = add_review(store, &review, NULL);
        }
        _exit(ok ? 0 : 1);
    }
    assert_int_equal(waitpid(child, &status, 0), child);
    assert_int_equal(status, 0);
}

/* What a torn write after power loss leaves: the transactions before the tear, whole. */
static void a_wal_cut_short_gives_the_transactions_before_the_cut(void **state)
{
    struct place *place = *state;
    struct stat wal;
    int64_t last = 20;
    close_store(place);
    leave_wal(place, 20);
    assert_int_equal(stat(in_folder(place, "campaign.db-wal"), &wal), 0);
    size_t opened = 0;
    for (off_t size = wal.st_size; size >= 0; size -= 1 + wal.st_size / 29) {
        struct store *store = NULL;
        struct store_counts counts;
        char copy[160], command[900];
        (void)snprintf(copy, sizeof copy, "%s/cut.db", place->folder);
        (void)snprintf(command, sizeof command, "rm -f %s* && cp %s %s && cp %s-wal %s-wal", copy,
                       place->path, copy, place->path, copy);
        assert_int_equal(system(command), 0);
        (void)snprintf(command, sizeof command, "%s-wal", copy);
        assert_int_equal(truncate(command, size), 0);
        must(store_open(copy, &plain, &store, &error));
        must(store_count(store, &counts, &error));
        assert_true(counts.reviews <= last);
        assert_int_equal(counts.marks, counts.reviews);
        last = counts.reviews;
        must(store_backup(store, in_folder(place, "check.db"), &error));
        assert_int_equal(unlink(in_folder(place, "check.db")), 0);
        store_close(store);
        opened++;
    }
    assert_true(opened > 20);
    assert_true(last < 2);
    place->store = open_store(place->path);
    struct store_counts counts;
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, 20);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(points_that_were_overwritten_are_told),
        IN_PLACE(each_flipped_bit_of_the_points_is_noticed),
        IN_PLACE(a_database_cut_short_is_told_and_not_made_worse),
        IN_PLACE(a_copy_of_a_damaged_database_is_not_kept),
        IN_PLACE(a_database_overwritten_in_places_never_crashes_us),
        IN_PLACE(a_wal_cut_short_gives_the_transactions_before_the_cut),
    };
    return cmocka_run_group_tests_name("store: damaged files", tests, NULL, NULL);
}
