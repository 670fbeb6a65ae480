/* A disk that fails: SQLite's file layer is wrapped so that the n-th write or sync fails, for every
 * n that one change comes to. A change that failed is not there, one that was acknowledged is, and
 * work goes on once the disk does. */
#include "support.h"

#include <sqlite3.h>

/* ---- the wrapped file layer ---- */

enum failing { NOTHING, WRITES, SYNCS, READS, ROOM, SHARED };

/* Which calls fail: the one after `left` more of its kind, and all later ones where `lasting`. The
 * store calls from one thread in these tests. */
static struct {
    enum failing what;
    int left;
    bool lasting;
    unsigned failed;
} plan;

static void plan_failure(enum failing what, int left, bool lasting)
{
    plan.what = what;
    plan.left = left;
    plan.lasting = lasting;
    plan.failed = 0;
}

static bool fails_now(enum failing what)
{
    if (plan.what != what || plan.left-- > 0)
        return false;
    if (!plan.lasting && plan.failed > 0)
        return false;
    plan.failed++;
    return true;
}

struct wrapped {
    sqlite3_file file;
    sqlite3_file *real; /* stands right behind this struct */
};

static sqlite3_file *real_of(sqlite3_file *file)
{
    return ((struct wrapped *)file)->real;
}

static int wrap_close(sqlite3_file *file)
{
    return real_of(file)->pMethods->xClose(real_of(file));
}

static int wrap_read(sqlite3_file *file, void *out, int size, sqlite3_int64 at)
{
    if (fails_now(READS))
        return SQLITE_IOERR_READ;
    return real_of(file)->pMethods->xRead(real_of(file), out, size, at);
}

static int wrap_write(sqlite3_file *file, const void *data, int size, sqlite3_int64 at)
{
    if (fails_now(WRITES))
        return SQLITE_IOERR_WRITE;
    if (fails_now(ROOM)) {
        /* A disk that fills up may take a part of a write. */
        (void)real_of(file)->pMethods->xWrite(real_of(file), data, size / 2, at);
        return SQLITE_FULL;
    }
    return real_of(file)->pMethods->xWrite(real_of(file), data, size, at);
}

static int wrap_truncate(sqlite3_file *file, sqlite3_int64 size)
{
    return real_of(file)->pMethods->xTruncate(real_of(file), size);
}

static int wrap_sync(sqlite3_file *file, int flags)
{
    if (fails_now(SYNCS))
        return SQLITE_IOERR_FSYNC;
    return real_of(file)->pMethods->xSync(real_of(file), flags);
}

static int wrap_size(sqlite3_file *file, sqlite3_int64 *size)
{
    return real_of(file)->pMethods->xFileSize(real_of(file), size);
}

static int wrap_lock(sqlite3_file *file, int kind)
{
    return real_of(file)->pMethods->xLock(real_of(file), kind);
}

static int wrap_unlock(sqlite3_file *file, int kind)
{
    return real_of(file)->pMethods->xUnlock(real_of(file), kind);
}

static int wrap_reserved(sqlite3_file *file, int *out)
{
    return real_of(file)->pMethods->xCheckReservedLock(real_of(file), out);
}

static int wrap_control(sqlite3_file *file, int what, void *argument)
{
    return real_of(file)->pMethods->xFileControl(real_of(file), what, argument);
}

static int wrap_sector(sqlite3_file *file)
{
    return real_of(file)->pMethods->xSectorSize(real_of(file));
}

static int wrap_traits(sqlite3_file *file)
{
    return real_of(file)->pMethods->xDeviceCharacteristics(real_of(file));
}

static int wrap_shm_map(sqlite3_file *file, int region, int size, int extend, void volatile **out)
{
    if (extend != 0 && fails_now(SHARED))
        return SQLITE_IOERR_SHMSIZE;
    return real_of(file)->pMethods->xShmMap(real_of(file), region, size, extend, out);
}

static int wrap_shm_lock(sqlite3_file *file, int offset, int count, int flags)
{
    return real_of(file)->pMethods->xShmLock(real_of(file), offset, count, flags);
}

static void wrap_shm_barrier(sqlite3_file *file)
{
    real_of(file)->pMethods->xShmBarrier(real_of(file));
}

static int wrap_shm_unmap(sqlite3_file *file, int forget)
{
    return real_of(file)->pMethods->xShmUnmap(real_of(file), forget);
}

static const sqlite3_io_methods methods = {.iVersion = 2,
                                           .xClose = wrap_close,
                                           .xRead = wrap_read,
                                           .xWrite = wrap_write,
                                           .xTruncate = wrap_truncate,
                                           .xSync = wrap_sync,
                                           .xFileSize = wrap_size,
                                           .xLock = wrap_lock,
                                           .xUnlock = wrap_unlock,
                                           .xCheckReservedLock = wrap_reserved,
                                           .xFileControl = wrap_control,
                                           .xSectorSize = wrap_sector,
                                           .xDeviceCharacteristics = wrap_traits,
                                           .xShmMap = wrap_shm_map,
                                           .xShmLock = wrap_shm_lock,
                                           .xShmBarrier = wrap_shm_barrier,
                                           .xShmUnmap = wrap_shm_unmap};

static sqlite3_vfs layer, *below;

static int wrap_open(sqlite3_vfs *vfs, const char *name, sqlite3_file *file, int flags, int *got)
{
    struct wrapped *wrapped = (struct wrapped *)file;
    (void)vfs;
    wrapped->real = (sqlite3_file *)(wrapped + 1);
    int code = below->xOpen(below, name, wrapped->real, flags, got);
    wrapped->file.pMethods = wrapped->real->pMethods != NULL ? &methods : NULL;
    return code;
}

static int install_layer(void **state)
{
    (void)state;
    below = sqlite3_vfs_find(NULL);
    if (below == NULL)
        return -1;
    layer = *below;
    layer.zName = "failing";
    layer.szOsFile = (int)sizeof(struct wrapped) + below->szOsFile;
    layer.xOpen = wrap_open;
    layer.pNext = NULL;
    return sqlite3_vfs_register(&layer, 1) == SQLITE_OK ? 0 : -1;
}

static int remove_layer(void **state)
{
    (void)state;
    return sqlite3_vfs_unregister(&layer) == SQLITE_OK ? 0 : -1;
}

/* ---- the tests ---- */

#define CALLS_MAX 400

static void assert_reviews(struct place *place, int64_t wanted)
{
    struct store_counts counts;
    struct store_segment segment;
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, wanted);
    assert_int_equal(counts.marks, wanted);
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(segment.looks, wanted);
}

/* One review a turn, with the n-th call failing, until a turn comes to fewer calls than n. */
static void sweep_reviews(struct place *place, enum failing what, enum base_error_kind kind)
{
    int64_t taken = 0;
    unsigned failures = 0;
    int left = 0;
    bool failed = true;
    for (; failed && left < CALLS_MAX; left++) {
        char key[16];
        (void)snprintf(key, sizeof key, "k%d", left);
        struct store_review_new review = a_review(place, key, (unsigned char)left);
        error = (struct base_error){0};
        plan_failure(what, left, false);
        bool ok = add_review(place->store, &review, &error);
        failed = plan.failed > 0;
        plan_failure(NOTHING, 0, false);
        assert_true(ok || failed);
        if (!ok && error.kind != kind)
            fail_msg("call %d: %s: %s", left, base_error_kind_name(error.kind), error.sentence);
        assert_int_equal(review.outcome, ok ? STORE_REVIEW_TAKEN : 0);
        failures += ok ? 0 : 1;
        taken += ok ? 1 : 0;
        assert_reviews(place, taken);
        if (!ok) {
            must(add_review(place->store, &review, &error));
            assert_int_equal(review.outcome, STORE_REVIEW_TAKEN);
            taken++;
        }
    }
    assert_true(failures > 0);
    assert_true(left < CALLS_MAX);
    reopen(place);
    assert_reviews(place, taken);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
}

static void a_write_that_fails_stores_nothing_and_the_next_works(void **state)
{
    sweep_reviews(*state, WRITES, BASE_IO);
}

static void a_sync_that_fails_stores_nothing_and_the_next_works(void **state)
{
    sweep_reviews(*state, SYNCS, BASE_IO);
}

static void a_write_cut_short_by_a_full_disk_stores_nothing_and_the_next_works(void **state)
{
    sweep_reviews(*state, ROOM, BASE_DISK_FULL);
}

/* kill -9 cannot show this, since what was written but not synced outlives a process. */
static void each_change_is_synced_before_it_is_acknowledged(void **state)
{
    struct place *place = *state;
    for (unsigned i = 0; i < 10; i++) {
        char key[16];
        (void)snprintf(key, sizeof key, "k%u", i);
        struct store_review_new review = a_review(place, key, (unsigned char)i);
        plan_failure(SYNCS, CALLS_MAX, false);
        must(add_review(place->store, &review, &error));
        assert_true(plan.left < CALLS_MAX);
        plan_failure(SYNCS, CALLS_MAX, false);
        must(store_person_set_credit(place->store, place->person, i % 2 == 0, &error));
        assert_true(plan.left < CALLS_MAX);
        plan_failure(NOTHING, 0, false);
    }
}

static void a_disk_that_stays_broken_is_told_each_time_until_it_is_mended(void **state)
{
    struct place *place = *state;
    struct store_review_new review = a_review(place, "k", 1);
    plan_failure(WRITES, 0, true);
    for (int i = 0; i < 5; i++) {
        must_fail(add_review(place->store, &review, &error), BASE_IO);
        assert_reviews(place, 0);
    }
    must_fail(add_star(place->store, place->batch, "RB-0002", 2, &error), BASE_IO);
    must_fail(store_person_set_credit(place->store, place->person, true, &error), BASE_IO);
    plan_failure(NOTHING, 0, false);
    must(add_review(place->store, &review, &error));
    assert_reviews(place, 1);
}

static void a_read_that_fails_is_told_and_the_next_works(void **state)
{
    struct place *place = *state;
    struct store_points points;
    unsigned failures = 0;
    bool failed = true;
    for (int left = 0; failed && left < CALLS_MAX; left++) {
        reopen(place); /* nothing is left in memory */
        error = (struct base_error){0};
        plan_failure(READS, left, false);
        bool ok = store_points_read(place->store, place->arena, 1, &points, &error);
        failed = plan.failed > 0;
        plan_failure(NOTHING, 0, false);
        assert_true(ok || (failed && error.kind == BASE_IO));
        failures += ok ? 0 : 1;
        must(store_points_read(place->store, place->arena, 1, &points, &error));
    }
    assert_true(failures > 0);
}

static void opening_fails_with_the_disk_and_works_after_it(void **state)
{
    static const struct {
        enum failing what;
        enum base_error_kind kind;
    } cases[] = {{READS, BASE_IO},
                 {WRITES, BASE_IO},
                 {SYNCS, BASE_IO},
                 {ROOM, BASE_DISK_FULL},
                 {SHARED, BASE_DISK_FULL}};
    struct place *place = *state;
    const struct store_options options = {.readers = 2};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        unsigned failures = 0;
        bool failed = true;
        for (int left = 0; failed && left < CALLS_MAX; left++) {
            char name[32];
            struct store *store = NULL;
            (void)snprintf(name, sizeof name, "new-%zu-%d.db", i, left);
            error = (struct base_error){0};
            plan_failure(cases[i].what, left, false);
            bool ok = store_open(in_folder(place, name), &options, &store, &error);
            failed = plan.failed > 0;
            plan_failure(NOTHING, 0, false);
            if (!ok) {
                failures++;
                if (error.kind != cases[i].kind)
                    fail_msg("%s: %s: %s", name, base_error_kind_name(error.kind), error.sentence);
                must(store_open(in_folder(place, name), &options, &store, &error));
            }
            assert_int_equal(store_version(store), store_version_newest());
            store_close(store);
        }
        assert_true(failures > 0);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(a_write_that_fails_stores_nothing_and_the_next_works),
        IN_PLACE(a_sync_that_fails_stores_nothing_and_the_next_works),
        IN_PLACE(a_write_cut_short_by_a_full_disk_stores_nothing_and_the_next_works),
        IN_PLACE(each_change_is_synced_before_it_is_acknowledged),
        IN_PLACE(a_disk_that_stays_broken_is_told_each_time_until_it_is_mended),
        IN_PLACE(a_read_that_fails_is_told_and_the_next_works),
        IN_EMPTY(opening_fails_with_the_disk_and_works_after_it),
    };
    return cmocka_run_group_tests_name("store: a failing disk", tests, install_layer, remove_layer);
}
