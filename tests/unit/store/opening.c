#include "support.h"

#include <fcntl.h>
#include <sqlite3.h>
#include <sys/stat.h>
#include <sys/wait.h>

#include "../../../server/store/migrate.h"

static const struct store_options plain = {.readers = 1};

/* ---- whose file it is ---- */

static void write_file(const char *path, const char *text, size_t times)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    for (size_t i = 0; i < times; i++)
        assert_true(fputs(text, file) >= 0);
    assert_int_equal(fclose(file), 0);
}

static void run_sql(const char *path, const char *sql)
{
    sqlite3 *db = NULL;
    assert_int_equal(sqlite3_open(path, &db), SQLITE_OK);
    assert_int_equal(sqlite3_exec(db, sql, NULL, NULL, NULL), SQLITE_OK);
    assert_int_equal(sqlite3_close(db), SQLITE_OK);
}

static size_t read_whole(const char *path, unsigned char *bytes, size_t size)
{
    FILE *file = fopen(path, "r");
    assert_non_null(file);
    size_t length = fread(bytes, 1, size, file);
    assert_int_equal(fclose(file), 0);
    return length;
}

/* The file is refused as this kind, and neither it nor its folder has changed. */
static void assert_left_alone(const struct place *place, const char *path)
{
    static unsigned char before[1 << 16], after[1 << 16];
    struct store *store;
    char lock[160];
    size_t length = read_whole(path, before, sizeof before);
    must_fail(store_open(path, &plain, &store, &error), BASE_INVALID);
    assert_null(store);
    assert_int_equal(read_whole(path, after, sizeof after), length);
    assert_memory_equal(before, after, length);
    (void)snprintf(lock, sizeof lock, "%s.lock", path);
    assert_int_equal(access(lock, F_OK), -1);
    (void)place;
}

static void a_file_that_is_no_database_is_refused_and_left_alone(void **state)
{
    struct place *place = *state;
    const char *path = in_folder(place, "notes.txt");
    write_file(path, "these are notes\n", 100);
    assert_left_alone(place, path);
    assert_non_null(strstr(error.sentence, "not an Ebbmark database"));
    const char *brief = in_folder(place, "brief");
    write_file(brief, "x", 1);
    assert_left_alone(place, brief);
}

static void a_database_of_another_program_is_refused_and_left_alone(void **state)
{
    struct place *place = *state;
    const char *rollback = in_folder(place, "rollback.db"), *wal = in_folder(place, "wal.db");
    run_sql(rollback, "CREATE TABLE book (title TEXT); INSERT INTO book VALUES ('x')");
    assert_left_alone(place, rollback);
    assert_non_null(strstr(error.sentence, "another program"));
    run_sql(wal, "PRAGMA journal_mode = WAL; CREATE TABLE book (title TEXT)");
    assert_left_alone(place, wal);
    const char *marked = in_folder(place, "marked.db");
    run_sql(marked, "PRAGMA application_id = 77");
    assert_left_alone(place, marked);
}

/* Another program's database of which all that matters still stands in the WAL, as after a kill. */
static void a_foreign_database_with_a_wal_is_refused_and_its_wal_is_kept(void **state)
{
    struct place *place = *state;
    const char *path = in_folder(place, "killed.db"), *wal = in_folder(place, "killed.db-wal");
    sqlite3 *db = NULL;
    pid_t child = fork();
    if (child == 0) {
        bool ok = sqlite3_open(path, &db) == SQLITE_OK &&
                  sqlite3_exec(db,
                               "PRAGMA journal_mode = WAL; CREATE TABLE book (title TEXT);"
                               "INSERT INTO book VALUES ('kept')",
                               NULL, NULL, NULL) == SQLITE_OK;
        _exit(ok ? 0 : 1);
    }
    int status;
    assert_int_equal(waitpid(child, &status, 0), child);
    assert_int_equal(status, 0);
    struct stat before, after;
    assert_int_equal(stat(wal, &before), 0);
    assert_true(before.st_size > 0);
    struct store *store;
    must_fail(store_open(path, &plain, &store, &error), BASE_INVALID);
    assert_int_equal(stat(wal, &after), 0);
    assert_int_equal(after.st_size, before.st_size);
}

static void a_newer_database_is_refused_and_told_apart(void **state)
{
    struct place *place = *state;
    struct store *store;
    close_store(place);
    run_sql(place->path, "PRAGMA user_version = 999");
    must_fail(store_open(place->path, &plain, &store, &error), BASE_INVALID);
    assert_non_null(strstr(error.sentence, "newer"));
    assert_non_null(strstr(error.sentence, "999"));
    char back[64];
    (void)snprintf(back, sizeof back, "PRAGMA user_version = %d", store_version_newest());
    run_sql(place->path, back);
    place->store = open_store(place->path);
}

static void a_folder_and_a_missing_file_are_refused_where_one_must_exist(void **state)
{
    struct place *place = *state;
    struct store *store;
    const struct store_options strict = {.readers = 1, .must_exist = true};
    must_fail(store_open(place->folder, &plain, &store, &error), BASE_INVALID);
    must_fail(store_open(in_folder(place, "none.db"), &strict, &store, &error), BASE_NOT_FOUND);
    assert_int_equal(access(in_folder(place, "none.db"), F_OK), -1);
    assert_int_equal(access(in_folder(place, "none.db.lock"), F_OK), -1);
    must_fail(store_open(in_folder(place, "no/such/folder.db"), &plain, &store, &error),
              BASE_NOT_FOUND);
}

static void a_new_database_is_for_its_owner_only(void **state)
{
    struct place *place = *state;
    struct stat status;
    assert_int_equal(stat(place->path, &status), 0);
    assert_int_equal(status.st_mode & 0777, 0600);
    assert_int_equal(stat(in_folder(place, "campaign.db-wal"), &status), 0);
    assert_int_equal(status.st_mode & 0777, 0600);
}

/* ---- one process at a time ---- */

static void a_second_opener_is_told_who_has_the_database(void **state)
{
    struct place *place = *state;
    struct store *second;
    char pid[32], link[128];
    (void)snprintf(pid, sizeof pid, "process %d", (int)getpid());
    must_fail(store_open(place->path, &plain, &second, &error), BASE_CONFLICT);
    assert_non_null(strstr(error.sentence, pid));
    assert_non_null(strstr(error.sentence, "stop that"));
    (void)snprintf(link, sizeof link, "%s/other-name.db", place->folder);
    assert_int_equal(symlink(place->path, link), 0);
    must_fail(store_open(link, &plain, &second, &error), BASE_CONFLICT);
}

/* In a child: open, tell, wait to be told, end without closing. */
static _Noreturn void hold(const char *path, int tell, int wait)
{
    struct store *store = NULL;
    char byte = 'n';
    if (store_open(path, &plain, &store, NULL))
        byte = 'y';
    if (write(tell, &byte, 1) != 1 || read(wait, &byte, 1) < 0)
        _exit(2);
    _exit(0);
}

static void a_second_process_is_refused_until_the_first_has_ended(void **state)
{
    struct place *place = *state;
    struct store *store;
    int tell[2], wait[2], status;
    char byte, pid[32];
    close_store(place);
    assert_int_equal(pipe(tell), 0);
    assert_int_equal(pipe(wait), 0);
    pid_t child = fork();
    if (child == 0) {
        (void)close(wait[1]);
        hold(place->path, tell[1], wait[0]);
    }
    assert_int_equal(read(tell[0], &byte, 1), 1);
    assert_int_equal(byte, 'y');
    must_fail(store_open(place->path, &plain, &store, &error), BASE_CONFLICT);
    (void)snprintf(pid, sizeof pid, "process %d", (int)child);
    assert_non_null(strstr(error.sentence, pid));
    (void)close(wait[1]);
    assert_int_equal(waitpid(child, &status, 0), child);
    assert_int_equal(status, 0);
    place->store = open_store(place->path);
    for (int i = 0; i < 2; i++)
        (void)close(tell[i]);
    (void)close(wait[0]);
}

static void being_ready_notices_that_the_lock_was_removed(void **state)
{
    struct place *place = *state;
    must(store_ready(place->store, &error));
    assert_int_equal(unlink(in_folder(place, "campaign.db.lock")), 0);
    must_fail(store_ready(place->store, &error), BASE_CONFLICT);
}

/* ---- migrations ---- */

#define SECOND "ALTER TABLE star ADD COLUMN colour REAL; CREATE TABLE extra (a INTEGER)"
#define BROKEN "CREATE TABLE extra (a INTEGER); INSERT INTO nowhere VALUES (1)"

/* A step that was applied already, and would fail, then one more. */
static bool migrate_once_more(struct place *place, const char *sql)
{
    const int newest = store_version_newest();
    const struct store_migration steps[] = {
        {newest, "applied", "SELECT no_such_column FROM it_is_never_run"},
        {newest + 1, "next", sql},
        {0, NULL, NULL}};
    error = (struct base_error){0};
    return migrate_forward(place->store, steps, &error);
}

static const char *next_backup(const struct place *place)
{
    char name[64];
    (void)snprintf(name, sizeof name, "campaign.db.before-%04d", store_version_newest() + 1);
    return in_folder(place, name);
}

static int64_t number_of(const char *path, const char *sql)
{
    sqlite3 *db = NULL;
    sqlite3_stmt *row = NULL;
    assert_int_equal(sqlite3_open_v2(path, &db, SQLITE_OPEN_READONLY, NULL), SQLITE_OK);
    assert_int_equal(sqlite3_prepare_v2(db, sql, -1, &row, NULL), SQLITE_OK);
    assert_int_equal(sqlite3_step(row), SQLITE_ROW);
    int64_t number = sqlite3_column_int64(row, 0);
    (void)sqlite3_finalize(row);
    (void)sqlite3_close(db);
    return number;
}

static void a_new_database_is_at_the_newest_version_and_keeps_no_backup(void **state)
{
    struct place *place = *state;
    assert_int_equal(store_version(place->store), store_version_newest());
    assert_true(store_version_newest() >= 1);
    assert_int_equal(access(in_folder(place, "campaign.db.before-0001"), F_OK), -1);
    assert_int_equal(number_of(place->path, "SELECT count(*) FROM schema_migration"),
                     store_version_newest());
    assert_int_equal(number_of(place->path, "PRAGMA user_version"), store_version_newest());
}

static void a_migration_makes_a_whole_backup_first_and_is_recorded(void **state)
{
    struct place *place = *state;
    struct store_review_new review = a_review(place, "k1", 1);
    const char *extra = "SELECT count(*) FROM sqlite_schema WHERE name = 'extra'";
    const int newest = store_version_newest();
    must(add_review(place->store, &review, &error));
    must(migrate_once_more(place, SECOND));
    assert_int_equal(store_version(place->store), newest + 1);
    int version = 0;
    must(store_backup_check(next_backup(place), &version, &error));
    assert_int_equal(version, newest);
    assert_int_equal(number_of(next_backup(place), "SELECT count(*) FROM review"), 1);
    assert_int_equal(number_of(next_backup(place), extra), 0);
    assert_int_equal(number_of(place->path, extra), 1);
    assert_int_equal(number_of(place->path, "SELECT count(*) FROM review"), 1);
    assert_int_equal(number_of(place->path, "SELECT count(*) FROM schema_migration"), newest + 1);
    assert_int_equal(number_of(place->path, "PRAGMA user_version"), newest + 1);
    struct store *store;
    close_store(place);
    must_fail(store_open(place->path, &plain, &store, &error), BASE_INVALID);
}

static void a_migration_that_fails_changes_nothing_and_can_be_tried_again(void **state)
{
    struct place *place = *state;
    const int newest = store_version_newest();
    assert_false(migrate_once_more(place, BROKEN));
    assert_non_null(strstr(error.sentence, "nowhere"));
    assert_int_equal(store_version(place->store), newest);
    assert_int_equal(number_of(place->path, "PRAGMA user_version"), newest);
    assert_int_equal(
        number_of(place->path, "SELECT count(*) FROM sqlite_schema WHERE name = 'extra'"), 0);
    must(migrate_once_more(place, SECOND));
    assert_int_equal(store_version(place->store), newest + 1);
}

static void a_migration_whose_backup_cannot_be_made_is_not_begun(void **state)
{
    struct place *place = *state;
    assert_int_equal(mkdir(next_backup(place), 0700), 0); /* a folder stands in its place */
    assert_false(migrate_once_more(place, SECOND));
    assert_int_equal(number_of(place->path, "PRAGMA user_version"), store_version_newest());
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_EMPTY(a_file_that_is_no_database_is_refused_and_left_alone),
        IN_EMPTY(a_database_of_another_program_is_refused_and_left_alone),
        IN_EMPTY(a_foreign_database_with_a_wal_is_refused_and_its_wal_is_kept),
        IN_PLACE(a_newer_database_is_refused_and_told_apart),
        IN_EMPTY(a_folder_and_a_missing_file_are_refused_where_one_must_exist),
        IN_PLACE(a_new_database_is_for_its_owner_only),
        IN_PLACE(a_second_opener_is_told_who_has_the_database),
        IN_PLACE(a_second_process_is_refused_until_the_first_has_ended),
        IN_PLACE(being_ready_notices_that_the_lock_was_removed),
        IN_PLACE(a_new_database_is_at_the_newest_version_and_keeps_no_backup),
        IN_PLACE(a_migration_makes_a_whole_backup_first_and_is_recorded),
        IN_PLACE(a_migration_that_fails_changes_nothing_and_can_be_tried_again),
        IN_PLACE(a_migration_whose_backup_cannot_be_made_is_not_begun),
    };
    return cmocka_run_group_tests_name("store: opening and migrating", tests, NULL, NULL);
}
