/* Processes killed in mid-write, at moments that differ from run to run: what was acknowledged is
 * there, once, and nothing is there in part. */
#include "support.h"

#include <fcntl.h>
#include <signal.h>
#include <sys/wait.h>
#include <time.h>

#define KILLS 20
#define GROUP_MAX 30
#define REVIEWS_MAX 200000

static const struct store_options plain = {.readers = 1};

/* What a child tells after each acknowledgement: the number in the key, and the review's id. */
struct told {
    uint32_t number;
    int64_t review;
};

static uint32_t random_below(uint32_t *seed, uint32_t limit)
{
    *seed = *seed * 1664525u + 1013904223u;
    return (*seed >> 8) % limit;
}

static struct store_review_new numbered(const struct place *place, uint32_t number, char key[16])
{
    (void)snprintf(key, 16, "k%u", number);
    struct store_review_new review = a_review(place, key, 0);
    memcpy(review.lease, &number, sizeof number);
    memcpy(review.body_hash, &number, sizeof number);
    return review;
}

static bool tell_group(int tell, uint32_t first, const struct store_review_new *reviews,
                       uint32_t count)
{
    struct told told[GROUP_MAX];
    for (uint32_t i = 0; i < count; i++)
        told[i] = (struct told){first + i, reviews[i].review};
    return write(tell, told, count * sizeof told[0]) == (ssize_t)(count * sizeof told[0]);
}

/* The child: store groups of reviews until killed, opening anew from time to time, so that the WAL
 * is also copied back at some of the moments. */
static _Noreturn void review_until_killed(const struct place *place, uint32_t first, uint32_t seed,
                                          int tell)
{
    struct store *store = NULL;
    for (uint32_t turn = 0;; turn++) {
        if (turn % 20 == 0) {
            store_close(store);
            if (!store_open(place->path, &plain, &store, NULL))
                _exit(2);
        }
        struct store_review_new reviews[GROUP_MAX], *each[GROUP_MAX];
        char keys[GROUP_MAX][16];
        uint32_t count = 1 + random_below(&seed, GROUP_MAX);
        for (uint32_t i = 0; i < count; i++) {
            reviews[i] = numbered(place, first + i, keys[i]);
            each[i] = &reviews[i];
        }
        if (!store_reviews_add(store, each, count, NULL) ||
            !tell_group(tell, first, reviews, count))
            _exit(3);
        first += count;
    }
}

/* Start a child, let it run for some milliseconds, kill it, and give what it told. */
static size_t run_and_kill(const struct place *place, uint32_t first, uint32_t *seed,
                           struct told *told, size_t room)
{
    int pipes[2], status;
    assert_int_equal(pipe(pipes), 0);
    (void)fcntl(pipes[1], F_SETPIPE_SZ, 1 << 20);
    pid_t child = fork();
    assert_true(child >= 0);
    if (child == 0)
        review_until_killed(place, first, *seed, pipes[1]);
    (void)close(pipes[1]);
    (void)usleep(5000 + random_below(seed, 120000));
    assert_int_equal(kill(child, SIGKILL), 0);
    assert_int_equal(waitpid(child, &status, 0), child);
    assert_true(WIFSIGNALED(status));
    size_t bytes = 0;
    ssize_t got;
    while ((got = read(pipes[0], (char *)told + bytes, room * sizeof *told - bytes)) > 0)
        bytes += (size_t)got;
    (void)close(pipes[0]);
    return bytes / sizeof *told;
}

struct rows {
    int64_t last, rows;
    bool in_order;
};

static bool count_row(void *context, const struct store_review_row *row)
{
    struct rows *rows = context;
    rows->in_order = rows->in_order && row->review == rows->last + 1 && row->mark != NULL;
    rows->last = row->review;
    rows->rows++;
    return true;
}

/* As many marks and looks as reviews, each review with its one mark, no id missing. */
static int64_t assert_nothing_in_part(struct place *place)
{
    struct rows rows = {.in_order = true};
    struct store_counts counts;
    struct store_segment segment;
    must(store_reviews_each(place->store, INT64_MAX, count_row, &rows, &error));
    assert_true(rows.in_order);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.reviews, rows.rows);
    assert_int_equal(counts.marks, rows.rows);
    must(store_segment_by_id(place->store, place->arena, place->segment.id, &segment, &error));
    assert_int_equal(segment.looks, rows.rows);
    return rows.rows;
}

static void an_acknowledged_review_survives_kill_9_and_is_there_once(void **state)
{
    struct place *place = *state;
    static struct told told[REVIEWS_MAX];
    size_t acknowledged = 0;
    uint32_t seed = (uint32_t)time(NULL) ^ (uint32_t)getpid(), began = seed;
    close_store(place);
    for (int i = 0; i < KILLS; i++) {
        /* Numbers of this child start where nothing that the last one did without telling is. */
        uint32_t first = (uint32_t)(i + 1) * 1000000u;
        acknowledged +=
            run_and_kill(place, first, &seed, told + acknowledged, REVIEWS_MAX - acknowledged);
        place->store = open_store(place->path);
        assert_true(assert_nothing_in_part(place) >= (int64_t)acknowledged);
        close_store(place);
    }
    print_message("# seed %u: %zu reviews acknowledged over %d kills\n", began, acknowledged,
                  KILLS);
    assert_true(acknowledged > 0);
    place->store = open_store(place->path);
    int64_t before = assert_nothing_in_part(place);
    for (size_t i = 0; i < acknowledged; i++) {
        char key[16];
        struct store_review_new again = numbered(place, told[i].number, key);
        must(add_review(place->store, &again, &error));
        assert_int_equal(again.outcome, STORE_REVIEW_REPEATED);
        assert_int_equal(again.review, told[i].review);
    }
    assert_int_equal(assert_nothing_in_part(place), before);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
}

/* ---- a database that is just being made ---- */

static void a_process_killed_while_it_makes_a_database_leaves_one_that_opens(void **state)
{
    struct place *place = *state;
    uint32_t seed = (uint32_t)time(NULL) ^ (uint32_t)getpid();
    for (int i = 0; i < KILLS; i++) {
        char name[32];
        struct store *store = NULL;
        int status;
        (void)snprintf(name, sizeof name, "new-%d.db", i);
        const char *path = in_folder(place, name);
        pid_t child = fork();
        if (child == 0)
            _exit(store_open(path, &plain, &store, NULL) ? 0 : 1);
        (void)usleep(random_below(&seed, 30000));
        (void)kill(child, SIGKILL);
        assert_int_equal(waitpid(child, &status, 0), child);
        must(store_open(path, &plain, &store, &error));
        assert_int_equal(store_version(store), store_version_newest());
        store_close(store);
    }
}

/* ---- loads and runs ---- */

static struct store_run_new make_run(const struct place *place, struct store_candidate *candidates,
                                     struct store_member *members, size_t count)
{
    for (size_t i = 0; i < count; i++) {
        candidates[i] = (struct store_candidate){.id = 1 + (int64_t)i,
                                                 .star = place->segment.star,
                                                 .light_curve = 1,
                                                 .probability = 0.5};
        members[i] = (struct store_member){1 + (int64_t)i, 1 + (int64_t)i};
    }
    return (struct store_run_new){.run = {.newest_review = 1, .settings = "{}", .fit = "{}"},
                                  .candidates = candidates,
                                  .candidate_count = count,
                                  .members = members,
                                  .member_count = count};
}

#define CANDIDATES 3000

static _Noreturn void load_and_run_until_killed(const struct place *place, unsigned first)
{
    static struct store_candidate candidates[CANDIDATES];
    static struct store_member members[CANDIDATES];
    struct store *store = NULL;
    if (!store_open(place->path, &plain, &store, NULL))
        _exit(2);
    for (unsigned i = first;; i++) {
        char name[24];
        (void)snprintf(name, sizeof name, "RB-1%u", i);
        struct store_run_new run = make_run(place, candidates, members, CANDIDATES);
        /* A hash of one byte throughout: files whose number ends alike have the same bytes. */
        if (!add_star(store, place->batch, name, (unsigned char)i, NULL) ||
            !store_run_add(store, &run, NULL))
            _exit(3);
    }
}

static void assert_runs_and_files_whole(struct place *place)
{
    struct store_batch *batches;
    struct store_file *files;
    struct store_run *runs;
    struct store_candidate *rows;
    struct store_points points;
    struct store_counts counts;
    size_t count, run_count;
    int64_t total, loaded = 0;
    base_arena_reset(place->arena);
    must(store_batches_list(place->store, place->arena, &batches, &count, &error));
    must(store_batch_files(place->store, place->arena, place->batch, 0, 100000, &files, &count,
                           &error));
    for (size_t i = 0; i < count; i++)
        loaded += files[i].outcome == STORE_FILE_LOADED ? 1 : 0;
    assert_int_equal(batches[0].files_loaded, loaded);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.stars, loaded);
    assert_int_equal(counts.light_curves, loaded);
    assert_int_equal(counts.segments, loaded);
    for (int64_t i = 1; i <= loaded; i++)
        must(store_points_read(place->store, place->arena, i, &points, &error));
    must(store_runs_list(place->store, place->arena, 0, 100000, &runs, &run_count, &error));
    for (size_t i = 0; i < run_count; i++) {
        const struct store_candidate_query query = {
            .run = runs[i].id, .star = "", .batch = "", .verdict = "", .limit = 1};
        assert_int_equal(runs[i].id, (int64_t)(run_count - i)); /* numbers without a hole */
        must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total,
                                   &error));
        assert_int_equal(total, CANDIDATES);
    }
}

static void loads_and_runs_killed_halfway_are_there_whole_or_not_at_all(void **state)
{
    struct place *place = *state;
    uint32_t seed = (uint32_t)time(NULL) ^ (uint32_t)getpid();
    for (uint32_t i = 0; i < CANDIDATES; i++) {
        char key[16];
        struct store_review_new review = numbered(place, i, key);
        must(add_review(place->store, &review, &error));
    }
    close_store(place);
    for (unsigned i = 0; i < KILLS; i++) {
        int status;
        pid_t child = fork();
        if (child == 0)
            load_and_run_until_killed(place, 2 + 8 * i);
        (void)usleep(20000 + random_below(&seed, 300000));
        assert_int_equal(kill(child, SIGKILL), 0);
        assert_int_equal(waitpid(child, &status, 0), child);
        assert_true(WIFSIGNALED(status));
        place->store = open_store(place->path);
        assert_runs_and_files_whole(place);
        close_store(place);
    }
    place->store = open_store(place->path);
    must(store_backup(place->store, in_folder(place, "copy.db"), &error));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(an_acknowledged_review_survives_kill_9_and_is_there_once),
        IN_EMPTY(a_process_killed_while_it_makes_a_database_leaves_one_that_opens),
        IN_PLACE(loads_and_runs_killed_halfway_are_there_whole_or_not_at_all),
    };
    return cmocka_run_group_tests_name("store: killed in mid-write", tests, NULL, NULL);
}
