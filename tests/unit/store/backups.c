#include "support.h"

#include <fcntl.h>
#include <pthread.h>
#include <sys/stat.h>

static const struct store_options plain = {.readers = 1};

static int64_t reviews_in(const char *path)
{
    struct store *store = open_store(path);
    int64_t newest, count;
    must(store_reviews_high_water(store, &newest, &count, &error));
    store_close(store);
    return count;
}

static bool exists(const struct place *place, const char *name)
{
    return access(in_folder(place, name), F_OK) == 0;
}

static void add_numbered(struct place *place, unsigned number)
{
    char key[16];
    (void)snprintf(key, sizeof key, "k%u", number);
    struct store_review_new review = a_review(place, key, 0);
    memcpy(review.lease, &number, sizeof number);
    must(add_review(place->store, &review, &error));
}

static void a_copy_is_one_sound_file_for_its_owner_and_never_overwrites(void **state)
{
    struct place *place = *state;
    struct stat status;
    int version;
    char copy[128];
    (void)snprintf(copy, sizeof copy, "%s", in_folder(place, "copy.db"));
    add_numbered(place, 1);
    must(store_backup(place->store, copy, &error));
    assert_int_equal(stat(copy, &status), 0);
    assert_int_equal(status.st_mode & 0777, 0600);
    assert_false(exists(place, "copy.db-wal") || exists(place, "copy.db-shm") ||
                 exists(place, "copy.db.part"));
    must(store_backup_check(copy, &version, &error));
    assert_int_equal(version, store_version_newest());
    assert_false(exists(place, "copy.db-wal") || exists(place, "copy.db.lock"));
    must_fail(store_backup(place->store, copy, &error), BASE_CONFLICT);
    must_fail(store_backup(place->store, place->path, &error), BASE_CONFLICT);
    assert_int_equal(reviews_in(copy), 1);
}

static void a_copy_that_cannot_be_made_is_said(void **state)
{
    struct place *place = *state;
    must_fail(store_backup(place->store, in_folder(place, "no/folder/copy.db"), &error),
              BASE_NOT_FOUND);
    add_numbered(place, 1); /* and the store goes on */
}

/* What is left of a copy that was cut short does not stand in the way of the next. */
static void a_copy_cut_short_does_not_hinder_the_next(void **state)
{
    struct place *place = *state;
    int fd = open(in_folder(place, "copy.db.part"), O_WRONLY | O_CREAT, 0600);
    assert_true(fd >= 0);
    assert_int_equal(write(fd, "half", 4), 4);
    assert_int_equal(close(fd), 0);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
}

static void what_is_no_backup_is_told(void **state)
{
    struct place *place = *state;
    int version;
    const char *text = in_folder(place, "text");
    int fd = open(text, O_WRONLY | O_CREAT, 0600);
    assert_int_equal(close(fd), 0);
    must_fail(store_backup_check(text, &version, &error), BASE_INVALID);
    must_fail(store_backup_check(in_folder(place, "none"), &version, &error), BASE_NOT_FOUND);
}

/* ---- a copy while others write ---- */

struct busy {
    struct place *place;
    bool stop; /* set and read with __atomic calls */
    unsigned added;
};

static void *keep_adding(void *argument)
{
    struct busy *busy = argument;
    while (!__atomic_load_n(&busy->stop, __ATOMIC_ACQUIRE))
        add_numbered(busy->place, ++busy->added);
    return NULL;
}

static void a_copy_made_while_reviews_come_in_is_of_one_moment(void **state)
{
    struct place *place = *state;
    struct busy busy = {.place = place};
    pthread_t thread;
    struct store *store = NULL;
    struct store_counts counts;
    struct store_segment segment;
    assert_int_equal(pthread_create(&thread, NULL, keep_adding, &busy), 0);
    for (int i = 0; i < 10; i++) {
        char name[32];
        struct base_error why = {0};
        (void)snprintf(name, sizeof name, "copy-%d.db", i);
        if (!store_backup(place->store, in_folder(place, name), &why))
            fail_msg("%s", why.sentence);
    }
    __atomic_store_n(&busy.stop, true, __ATOMIC_RELEASE);
    assert_int_equal(pthread_join(thread, NULL), 0);
    int64_t last = 0;
    for (int i = 0; i < 10; i++) {
        char name[32];
        (void)snprintf(name, sizeof name, "copy-%d.db", i);
        must(store_open(in_folder(place, name), &plain, &store, &error));
        must(store_count(store, &counts, &error));
        must(store_segment_by_id(store, place->arena, 1, &segment, &error));
        assert_int_equal(counts.reviews, counts.marks);
        assert_int_equal(counts.reviews, segment.looks);
        assert_true(counts.reviews >= last && counts.reviews <= (int64_t)busy.added);
        last = counts.reviews;
        store_close(store);
    }
    assert_true(busy.added > 0);
}

/* ---- putting back ---- */

static void a_restored_backup_takes_the_place_and_what_was_there_is_kept(void **state)
{
    struct place *place = *state;
    bool replaced = false;
    add_numbered(place, 1);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
    add_numbered(place, 2);
    must_fail(store_restore(in_folder(place, "copy.db"), place->path, 77, &replaced, &error),
              BASE_CONFLICT);
    close_store(place);
    must(store_restore(in_folder(place, "copy.db"), place->path, 77, &replaced, &error));
    assert_true(replaced);
    assert_int_equal(reviews_in(place->path), 1);
    assert_int_equal(reviews_in(in_folder(place, "campaign.db.replaced-77")), 2);
    assert_false(exists(place, "campaign.db.restored"));
    must(store_restore(in_folder(place, "copy.db"), in_folder(place, "new.db"), 78, &replaced,
                       &error));
    assert_false(replaced);
    assert_int_equal(reviews_in(in_folder(place, "new.db")), 1);
}

static void a_damaged_backup_is_not_put_back(void **state)
{
    struct place *place = *state;
    struct stat status;
    bool replaced = true;
    char copy[128];
    (void)snprintf(copy, sizeof copy, "%s", in_folder(place, "copy.db"));
    must(store_backup(place->store, copy, &error));
    add_numbered(place, 1);
    close_store(place);
    assert_int_equal(stat(copy, &status), 0);
    assert_int_equal(truncate(copy, status.st_size - 5000), 0);
    must_fail(store_restore(copy, place->path, 77, &replaced, &error), BASE_CORRUPT);
    assert_false(replaced);
    assert_int_equal(reviews_in(place->path), 1);
    must_fail(
        store_restore(in_folder(place, "none"), in_folder(place, "new.db"), 77, &replaced, &error),
        BASE_NOT_FOUND);
    assert_false(exists(place, "new.db") || exists(place, "new.db.lock"));
}

/* The usual reason for putting a backup back: what is there cannot be opened. */
static void a_damaged_database_gives_way_to_its_backup(void **state)
{
    struct place *place = *state;
    struct store *store;
    bool replaced = false;
    add_numbered(place, 1);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
    close_store(place);
    assert_int_equal(truncate(place->path, 5000), 0);
    must_fail(store_open(place->path, &plain, &store, &error), BASE_CORRUPT);
    must(store_restore(in_folder(place, "copy.db"), place->path, 77, &replaced, &error));
    assert_true(replaced);
    assert_int_equal(reviews_in(place->path), 1);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(a_copy_is_one_sound_file_for_its_owner_and_never_overwrites),
        IN_PLACE(a_copy_that_cannot_be_made_is_said),
        IN_PLACE(a_copy_cut_short_does_not_hinder_the_next),
        IN_PLACE(what_is_no_backup_is_told),
        IN_PLACE(a_copy_made_while_reviews_come_in_is_of_one_moment),
        IN_PLACE(a_restored_backup_takes_the_place_and_what_was_there_is_kept),
        IN_PLACE(a_damaged_backup_is_not_put_back),
        IN_PLACE(a_damaged_database_gives_way_to_its_backup),
    };
    return cmocka_run_group_tests_name("store: backups", tests, NULL, NULL);
}
