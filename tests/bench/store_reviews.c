/*
 * How fast reviews are stored durably, 100 a transaction, against a bare loop of prepared SQLite
 * statements that writes the same rows into the same schema on the same disk. Prints one line and
 * changes nothing that stays.
 *
 *     store_reviews [FOLDER]      FOLDER on the disk to measure, default /tmp
 */
#include <math.h>
#include <sodium.h>
#include <sqlite3.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

#include "ebbmark/clock.h"
#include "ebbmark/store.h"

#define PEOPLE 500
#define STARS 2500
#define SEGMENTS_EACH 4
#define REVIEWS 40000
#define GROUP 100
#define MARKS_MAX 2
#define ROUNDS 3
#define POINTS 120

static void stop(const char *what, const char *why)
{
    (void)fprintf(stderr, "store_reviews: %s: %s\n", what, why);
    exit(1);
}

struct made {
    struct store_review_new review;
    char key[37];
    struct store_mark marks[MARKS_MAX];
};

/* Random people, segments, keys and leases; 0, 1 or 2 marks in turn. The same every time. */
static struct made *make_reviews(void)
{
    static const unsigned char seed[randombytes_SEEDBYTES] = "store_reviews";
    static unsigned char random[REVIEWS][48];
    struct made *made = calloc(REVIEWS, sizeof *made);
    if (made == NULL)
        stop("reviews", "no memory");
    randombytes_buf_deterministic(random, sizeof random, seed);
    for (size_t i = 0; i < REVIEWS; i++) {
        struct made *one = &made[i];
        const unsigned char *r = random[i];
        (void)sodium_bin2hex(one->key, sizeof one->key, r, 18);
        for (size_t k = 0; k < MARKS_MAX; k++)
            one->marks[k] = (struct store_mark){.starts_d = 100.0 + r[44 + k] / 32.0,
                                                .ends_d = 100.2 + r[44 + k] / 32.0,
                                                .low = 0.99,
                                                .high = 1.0,
                                                .sure = r[46] % 2 == 0};
        one->review = (struct store_review_new){.person = 1 + (r[40] * 256 + r[41]) % PEOPLE,
                                                .segment = 1 + (r[42] * 256 + r[43]) %
                                                                   (STARS * SEGMENTS_EACH),
                                                .key = one->key,
                                                .submitted_ms = 1700000000000 + (int64_t)i,
                                                .seconds = 7.5,
                                                .marks = one->marks,
                                                .mark_count = i % (MARKS_MAX + 1)};
        memcpy(one->review.lease, r + 18, sizeof one->review.lease);
        memcpy(one->review.body_hash, r + 8, sizeof one->review.body_hash);
    }
    return made;
}

static void add_stars(struct store *store, int64_t batch)
{
    static double time[POINTS];
    static float flat[POINTS];
    struct store_span spans[SEGMENTS_EACH];
    struct base_error error = {0};
    for (size_t i = 0; i < POINTS; i++)
        time[i] = 100.0 + 0.02 * (double)i;
    for (size_t i = 0; i < SEGMENTS_EACH; i++)
        spans[i] = (struct store_span){0, POINTS, 100.0, 110.0};
    for (int i = 0; i < STARS; i++) {
        char name[16];
        (void)snprintf(name, sizeof name, "RB-%04d", i);
        const struct store_light_curve_new curve = {
            .star = {name, NAN, NAN, NAN, NAN, NAN, NAN},
            .time_reference = "BJD_TDB - 2460000",
            .points = {.count = POINTS, .time = time, .flux = flat, .trend = flat},
            .median_flux = 1.0,
            .cadence_d = 0.02,
            .segments = spans,
            .segment_count = SEGMENTS_EACH};
        struct store_file_new file = {.batch = batch,
                                      .label = name,
                                      .reason = "",
                                      .outcome = STORE_FILE_LOADED,
                                      .curves = &curve,
                                      .curve_count = 1};
        memcpy(file.sha256, name, sizeof name);
        if (!store_files_add(store, &file, 1, &error))
            stop("stars", error.sentence);
    }
}

/* A campaign without reviews. */
static void make_database(const char *path)
{
    struct store *store = NULL;
    struct base_error error = {0};
    const struct store_options options = {.readers = 1};
    int64_t id;
    bool resumed;
    if (!store_open(path, &options, &store, &error) ||
        !store_batch_begin(store, "bench", "", 1, &id, &resumed, &error))
        stop("database", error.sentence);
    add_stars(store, id);
    for (int i = 0; i < PEOPLE; i++) {
        char handle[16];
        (void)snprintf(handle, sizeof handle, "p%d", i);
        if (!store_person_add(store, handle, handle, "", STORE_REVIEWER, 1, &id, &error))
            stop("people", error.sentence);
    }
    store_close(store);
}

/* What a way of storing cost; the processor's time hardly depends on what else the machine does. */
struct cost {
    double rate;   /* reviews a second */
    double cpu_us; /* of the processor, a review */
};

static struct cost cost_since(double began_s, clock_t began)
{
    return (struct cost){REVIEWS / (base_clock_monotonic_s() - began_s),
                         1e6 * (double)(clock() - began) / CLOCKS_PER_SEC / REVIEWS};
}

/* The best of several rounds. */
static void keep_best(struct cost *best, struct cost cost)
{
    best->rate = fmax(best->rate, cost.rate);
    best->cpu_us = best->cpu_us > 0.0 ? fmin(best->cpu_us, cost.cpu_us) : cost.cpu_us;
}

static struct cost through_store(const char *path, struct made *made)
{
    struct store *store = NULL;
    struct base_error error = {0};
    const struct store_options options = {.readers = 1};
    if (!store_open(path, &options, &store, &error))
        stop("opening", error.sentence);
    double began_s = base_clock_monotonic_s();
    clock_t began = clock();
    for (size_t i = 0; i < REVIEWS; i += GROUP) {
        struct store_review_new *group[GROUP];
        for (size_t k = 0; k < GROUP; k++)
            group[k] = &made[i + k].review;
        if (!store_reviews_add(store, group, GROUP, &error))
            stop("reviews", error.sentence);
    }
    struct cost cost = cost_since(began_s, began);
    store_close(store);
    return cost;
}

static sqlite3_stmt *prepare(sqlite3 *db, const char *sql)
{
    sqlite3_stmt *statement = NULL;
    if (sqlite3_prepare_v3(db, sql, -1, SQLITE_PREPARE_PERSISTENT, &statement, NULL) != SQLITE_OK)
        stop(sql, sqlite3_errmsg(db));
    return statement;
}

static void step(sqlite3 *db, sqlite3_stmt *statement)
{
    if (sqlite3_step(statement) != SQLITE_DONE)
        stop("bare SQLite", sqlite3_errmsg(db));
    (void)sqlite3_reset(statement);
}

struct bare {
    sqlite3 *db;
    sqlite3_stmt *begin, *commit, *review, *mark, *looks;
};

static void bare_insert(const struct bare *bare, const struct store_review_new *one)
{
    (void)sqlite3_bind_int64(bare->review, 1, one->person);
    (void)sqlite3_bind_int64(bare->review, 2, one->segment);
    (void)sqlite3_bind_text(bare->review, 3, one->key, -1, SQLITE_STATIC);
    (void)sqlite3_bind_blob(bare->review, 4, one->body_hash, STORE_HASH_SIZE, SQLITE_STATIC);
    (void)sqlite3_bind_blob(bare->review, 5, one->lease, sizeof one->lease, SQLITE_STATIC);
    (void)sqlite3_bind_int64(bare->review, 6, one->submitted_ms);
    (void)sqlite3_bind_double(bare->review, 7, one->seconds);
    step(bare->db, bare->review);
    int64_t id = sqlite3_last_insert_rowid(bare->db);
    for (size_t k = 0; k < one->mark_count; k++) {
        (void)sqlite3_bind_int64(bare->mark, 1, id);
        (void)sqlite3_bind_double(bare->mark, 2, one->marks[k].starts_d);
        (void)sqlite3_bind_double(bare->mark, 3, one->marks[k].ends_d);
        (void)sqlite3_bind_double(bare->mark, 4, one->marks[k].low);
        (void)sqlite3_bind_double(bare->mark, 5, one->marks[k].high);
        (void)sqlite3_bind_int(bare->mark, 6, one->marks[k].sure);
        step(bare->db, bare->mark);
    }
    (void)sqlite3_bind_int64(bare->looks, 1, one->segment);
    step(bare->db, bare->looks);
}

static struct cost through_sqlite(const char *path, const struct made *made)
{
    struct bare bare = {0};
    if (sqlite3_open(path, &bare.db) != SQLITE_OK ||
        sqlite3_exec(bare.db,
                     "PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL;"
                     "PRAGMA foreign_keys = ON; PRAGMA cache_size = -65536;"
                     "PRAGMA wal_autocheckpoint = 10000",
                     NULL, NULL, NULL) != SQLITE_OK)
        stop("bare SQLite", sqlite3_errmsg(bare.db));
    bare.begin = prepare(bare.db, "BEGIN IMMEDIATE");
    bare.commit = prepare(bare.db, "COMMIT");
    bare.review = prepare(bare.db, "INSERT INTO review (person, segment, key, body_hash, lease,"
                                   " late, submitted_ms, seconds, conditions)"
                                   " VALUES (?, ?, ?, ?, ?, 0, ?, ?, 0)");
    bare.mark = prepare(bare.db, "INSERT INTO mark (review, starts, ends, low, high, sure)"
                                 " VALUES (?, ?, ?, ?, ?, ?)");
    bare.looks = prepare(bare.db, "UPDATE segment SET looks = looks + 1 WHERE id = ?");
    double began_s = base_clock_monotonic_s();
    clock_t began = clock();
    for (size_t i = 0; i < REVIEWS; i += GROUP) {
        step(bare.db, bare.begin);
        for (size_t k = 0; k < GROUP; k++)
            bare_insert(&bare, &made[i + k].review);
        step(bare.db, bare.commit);
    }
    struct cost cost = cost_since(began_s, began);
    sqlite3_stmt *const all[] = {bare.begin, bare.commit, bare.review, bare.mark, bare.looks};
    for (size_t i = 0; i < sizeof all / sizeof all[0]; i++)
        (void)sqlite3_finalize(all[i]);
    (void)sqlite3_close(bare.db);
    return cost;
}

static void remove_database(const char *path)
{
    static const char *const parts[] = {"", "-wal", "-shm", ".lock"};
    for (size_t i = 0; i < sizeof parts / sizeof parts[0]; i++) {
        char part[256];
        (void)snprintf(part, sizeof part, "%s%s", path, parts[i]);
        (void)unlink(part);
    }
}

int main(int argc, char **argv)
{
    char folder[128], path[160];
    (void)snprintf(folder, sizeof folder, "%.100s/ebbmark-bench-XXXXXX",
                   argc > 1 ? argv[1] : "/tmp");
    if (sodium_init() < 0 || mkdtemp(folder) == NULL)
        stop(folder, "cannot be made");
    (void)snprintf(path, sizeof path, "%s/bench.db", folder);
    struct made *made = make_reviews();
    struct cost ours = {0}, bare = {0};
    for (int round = 0; round < ROUNDS; round++) {
        make_database(path);
        keep_best(&ours, through_store(path, made));
        remove_database(path);
        make_database(path);
        keep_best(&bare, through_sqlite(path, made));
        remove_database(path);
    }
    (void)rmdir(folder);
    free(made);
    (void)printf("reviews stored durably, %d a transaction, best of %d:\n", GROUP, ROUNDS);
    (void)printf("  store        %7.0f/s  %5.1f us of processor each\n", ours.rate, ours.cpu_us);
    (void)printf("  bare SQLite  %7.0f/s  %5.1f us of processor each, the same rows\n", bare.rate,
                 bare.cpu_us);
    (void)printf("  ratio           %.2f   %.2f\n", ours.rate / bare.rate,
                 bare.cpu_us / ours.cpu_us);
    return 0;
}
