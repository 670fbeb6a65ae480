/* A small disk that is filled to the brim: nothing acknowledged is lost, and work goes on once
 * there is room again. The disk is a tmpfs in a mount namespace of this process, so that it goes
 * away with it; where neither root nor a user namespace allows that, these tests are skipped and
 * say so. */
#include "support.h"

#include <errno.h>
#include <fcntl.h>
#include <sched.h>
#include <sys/mount.h>
#include <sys/stat.h>

#define DISK_SIZE "size=12m,mode=0777"
#define GROUP 20

static char disk[] = "/tmp/ebbmark-disk-XXXXXX"; /* where it is mounted */
static bool has_disk;

static bool write_text(const char *path, const char *text)
{
    int fd = open(path, O_WRONLY | O_CLOEXEC);
    bool ok = fd >= 0 && write(fd, text, strlen(text)) == (ssize_t)strlen(text);
    if (fd >= 0)
        (void)close(fd);
    return ok;
}

/* A mount namespace of our own: as root, else as root of a user namespace. */
static bool enter_namespace(void)
{
    if (unshare(CLONE_NEWNS) == 0)
        return true;
    char uids[32], gids[32];
    (void)snprintf(uids, sizeof uids, "0 %u 1", (unsigned)getuid());
    (void)snprintf(gids, sizeof gids, "0 %u 1", (unsigned)getgid());
    return unshare(CLONE_NEWUSER | CLONE_NEWNS) == 0 && write_text("/proc/self/uid_map", uids) &&
           write_text("/proc/self/setgroups", "deny") && write_text("/proc/self/gid_map", gids);
}

static int mount_disk(void **state)
{
    (void)state;
    if (mkdtemp(disk) == NULL)
        return -1;
    has_disk = enter_namespace() && mount("none", "/", NULL, MS_REC | MS_PRIVATE, NULL) == 0 &&
               mount("tmpfs", disk, "tmpfs", 0, DISK_SIZE) == 0;
    if (!has_disk)
        (void)fprintf(stderr, "# no small disk can be mounted here: %s\n", strerror(errno));
    return 0;
}

static int unmount_disk(void **state)
{
    (void)state;
    if (has_disk)
        (void)umount2(disk, MNT_DETACH);
    return rmdir(disk);
}

static int open_on_disk(void **state)
{
    struct place *place = new_place(has_disk ? disk : "/tmp");
    if (has_disk)
        fill_place(place);
    *state = place;
    return 0;
}

/* Leave this many bytes free, less what the file system needs to round. */
static void fill_disk(const struct place *place, size_t leave)
{
    static const char block[4096];
    int fd = open(in_folder(place, "filler"), O_WRONLY | O_CREAT | O_CLOEXEC, 0600);
    assert_true(fd >= 0);
    while (write(fd, block, sizeof block) > 0)
        ;
    assert_int_equal(errno, ENOSPC);
    struct stat status;
    assert_int_equal(fstat(fd, &status), 0);
    assert_int_equal(ftruncate(fd, status.st_size - (off_t)leave), 0);
    assert_int_equal(close(fd), 0);
}

static void free_disk(const struct place *place)
{
    assert_int_equal(unlink(in_folder(place, "filler")), 0);
}

/* The database is sound as a whole: a verified copy of it can be made on another disk. */
static void assert_sound(struct place *place)
{
    char folder[] = "/tmp/ebbmark-store-XXXXXX", copy[64];
    assert_non_null(mkdtemp(folder));
    (void)snprintf(copy, sizeof copy, "%s/copy.db", folder);
    must(store_backup(place->store, copy, &error));
    assert_int_equal(unlink(copy), 0);
    assert_int_equal(rmdir(folder), 0);
}

static bool add_group(struct place *place, unsigned first, struct base_error *why)
{
    struct store_review_new reviews[GROUP], *each[GROUP];
    static char keys[GROUP][16];
    for (unsigned i = 0; i < GROUP; i++) {
        (void)snprintf(keys[i], sizeof keys[i], "k%u", first + i);
        reviews[i] = a_review(place, keys[i], 0);
        memcpy(reviews[i].lease, &(unsigned){first + i}, sizeof first);
        each[i] = &reviews[i];
    }
    bool ok = store_reviews_add(place->store, each, GROUP, why);
    for (unsigned i = 0; i < GROUP; i++)
        assert_int_equal(reviews[i].outcome, ok ? STORE_REVIEW_TAKEN : 0);
    return ok;
}

static void assert_reviews(struct place *place, unsigned wanted)
{
    struct store_counts counts;
    struct store_segment segment;
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, wanted);
    assert_int_equal(counts.marks, wanted);
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(segment.looks, wanted);
}

static void reviews_on_a_full_disk_are_refused_whole_and_taken_when_there_is_room(void **state)
{
    struct place *place = *state;
    unsigned taken = 0;
    if (!has_disk)
        skip();
    fill_disk(place, 1 << 20);
    error = (struct base_error){0};
    while (taken < 100000 && add_group(place, taken, &error))
        taken += GROUP;
    assert_int_equal(error.kind, BASE_DISK_FULL);
    assert_non_null(strstr(error.sentence, "full"));
    assert_true(taken > 0);
    assert_reviews(place, taken);
    must_fail(add_group(place, taken, &error), BASE_DISK_FULL);
    must_fail(store_ready(place->store, &error), BASE_DISK_FULL);
    assert_reviews(place, taken);
    free_disk(place);
    must(store_ready(place->store, &error));
    must(add_group(place, taken, &error));
    taken += GROUP;
    assert_reviews(place, taken);
    assert_sound(place);
}

static void a_store_closed_on_a_full_disk_opens_again_with_all_it_had(void **state)
{
    struct place *place = *state;
    unsigned taken = 0;
    if (!has_disk)
        skip();
    fill_disk(place, 1 << 20);
    while (taken < 100000 && add_group(place, taken, &error))
        taken += GROUP;
    fill_disk(place, 0);
    close_store(place);
    free_disk(place);
    place->store = open_store(place->path);
    assert_reviews(place, taken);
    must(add_group(place, taken, &error));
    assert_sound(place);
}

/* Random flux, so that compressing it makes no room. */
static bool add_noisy_star(struct place *place, unsigned number)
{
    static double time[4000];
    static float flux[4000];
    static uint32_t bits = 1;
    char name[16];
    for (size_t i = 0; i < 4000; i++) {
        time[i] = (double)i;
        bits = bits * 1664525u + 1013904223u;
        memcpy(&flux[i], &bits, sizeof bits);
    }
    (void)snprintf(name, sizeof name, "noisy-%u", number);
    const struct store_span span = {0, 4000, 0.0, 3999.0};
    const struct store_light_curve_new curve = {.star = {name, NAN, NAN, NAN, NAN, NAN, NAN},
                                                .time_reference = REFERENCE,
                                                .points = {4000, time, flux, flux, NULL},
                                                .segments = &span,
                                                .segment_count = 1};
    struct store_file_new file = {.batch = place->batch,
                                  .label = name,
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .curves = &curve,
                                  .curve_count = 1};
    memcpy(file.sha256, name, sizeof name);
    return store_files_add(place->store, &file, 1, &error);
}

static void files_on_a_full_disk_are_there_whole_or_not_at_all(void **state)
{
    struct place *place = *state;
    struct store_file *files;
    struct store_points points;
    struct store_counts counts;
    size_t count;
    unsigned loaded = 0;
    if (!has_disk)
        skip();
    fill_disk(place, 2 << 20);
    error = (struct base_error){0};
    while (loaded < 1000 && add_noisy_star(place, loaded))
        loaded++;
    assert_int_equal(error.kind, BASE_DISK_FULL);
    assert_true(loaded > 0);
    must_fail(add_noisy_star(place, loaded), BASE_DISK_FULL);
    must(store_batch_files(place->store, place->arena, place->batch, 0, 2000, &files, &count,
                           &error));
    assert_int_equal(count, loaded + 1);
    for (unsigned i = 0; i <= loaded; i++)
        must(store_points_read(place->store, place->arena, 1 + (int64_t)i, &points, &error));
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.stars, loaded + 1);
    assert_int_equal(counts.light_curves, loaded + 1);
    assert_int_equal(counts.segments, loaded + 1);
    free_disk(place);
    must(add_noisy_star(place, loaded));
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.segments, loaded + 2);
    assert_sound(place);
}

static void a_run_on_a_full_disk_is_not_seen_and_can_be_stored_later(void **state)
{
    struct place *place = *state;
    static struct store_candidate candidates[2000];
    int64_t current;
    unsigned taken = 0;
    if (!has_disk)
        skip();
    for (; taken < 2000; taken += GROUP)
        must(add_group(place, taken, &error));
    for (unsigned i = 0; i < 2000; i++)
        candidates[i] = (struct store_candidate){.id = 1 + (int64_t)i,
                                                 .star = place->segment.star,
                                                 .light_curve = 1,
                                                 .probability = 0.5,
                                                 .period_d = NAN};
    struct store_run_new run = {.run = {.newest_review = 2000, .settings = "{}", .fit = "{}"},
                                .candidates = candidates,
                                .candidate_count = 2000};
    fill_disk(place, 400 << 10);
    must_fail(store_run_add(place->store, &run, &error), BASE_DISK_FULL);
    must(store_run_current(place->store, &current, &error));
    assert_int_equal(current, 0);
    free_disk(place);
    must(store_run_add(place->store, &run, &error));
    assert_int_equal(run.run.id, 1);
    must(store_run_current(place->store, &current, &error));
    assert_int_equal(current, 1);
    assert_sound(place);
}

static void a_backup_that_does_not_fit_leaves_nothing_behind(void **state)
{
    struct place *place = *state;
    if (!has_disk)
        skip();
    for (unsigned i = 0; i < 2000; i += GROUP)
        must(add_group(place, i, &error));
    fill_disk(place, 100 << 10);
    must_fail(store_backup(place->store, in_folder(place, "copy.db"), &error), BASE_DISK_FULL);
    assert_int_equal(access(in_folder(place, "copy.db"), F_OK), -1);
    assert_int_equal(access(in_folder(place, "copy.db.part"), F_OK), -1);
    free_disk(place);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
}

static void a_database_made_on_a_full_disk_fails_and_succeeds_later(void **state)
{
    struct place *place = *state;
    const struct store_options options = {.readers = 1};
    struct store *store = NULL;
    if (!has_disk)
        skip();
    fill_disk(place, 8 << 10);
    must_fail(store_open(in_folder(place, "new.db"), &options, &store, &error), BASE_DISK_FULL);
    free_disk(place);
    must(store_open(in_folder(place, "new.db"), &options, &store, &error));
    store_close(store);
}

static void a_read_only_disk_is_said(void **state)
{
    struct place *place = *state;
    const struct store_options options = {.readers = 1};
    struct store *store = NULL;
    if (!has_disk)
        skip();
    close_store(place);
    assert_int_equal(mount(NULL, disk, NULL, MS_REMOUNT | MS_RDONLY, DISK_SIZE), 0);
    must_fail(store_open(place->path, &options, &store, &error), BASE_DENIED);
    assert_non_null(strstr(error.sentence, "Read-only"));
    assert_int_equal(mount(NULL, disk, NULL, MS_REMOUNT, DISK_SIZE), 0);
    place->store = open_store(place->path);
}

int main(void)
{
#define ON_DISK(test) cmocka_unit_test_setup_teardown(test, open_on_disk, close_place)
    const struct CMUnitTest tests[] = {
        ON_DISK(reviews_on_a_full_disk_are_refused_whole_and_taken_when_there_is_room),
        ON_DISK(a_store_closed_on_a_full_disk_opens_again_with_all_it_had),
        ON_DISK(files_on_a_full_disk_are_there_whole_or_not_at_all),
        ON_DISK(a_run_on_a_full_disk_is_not_seen_and_can_be_stored_later),
        ON_DISK(a_backup_that_does_not_fit_leaves_nothing_behind),
        ON_DISK(a_database_made_on_a_full_disk_fails_and_succeeds_later),
        ON_DISK(a_read_only_disk_is_said),
    };
    return cmocka_run_group_tests_name("store: a full disk", tests, mount_disk, unmount_disk);
}
