/*
 * How fast a page of 100 out of 100,000 candidates is found in each order, with and without
 * filters, and how long a review waits while a run of that size is stored. Prints a table and
 * changes nothing that stays.
 *
 *     store_candidates [FOLDER]      FOLDER on the disk to measure, default /tmp
 */
#include <math.h>
#include <pthread.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/clock.h"
#include "ebbmark/store.h"

#define STARS 5000
#define SEGMENTS_EACH 4
#define CANDIDATES 100000
#define MARKS_EACH 3
#define GROUP 1000
#define POINTS 120
#define PAGE 100
#define TURNS 7
#define WANTED_MS 100.0

static void must(bool ok, const struct base_error *error)
{
    if (ok)
        return;
    (void)fprintf(stderr, "store_candidates: %s\n", error->sentence);
    exit(1);
}

static struct base_error error;

static void add_stars(struct store *store, int64_t batch)
{
    static double time[POINTS];
    static float flat[POINTS];
    struct store_span spans[SEGMENTS_EACH];
    for (size_t i = 0; i < POINTS; i++)
        time[i] = 100.0 + 0.02 * (double)i;
    for (size_t i = 0; i < SEGMENTS_EACH; i++)
        spans[i] = (struct store_span){0, POINTS, 100.0, 110.0};
    for (int i = 0; i < STARS; i++) {
        char name[16];
        (void)snprintf(name, sizeof name, "RB-%04d", (i * 37) % STARS);
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
        must(store_files_add(store, &file, 1, &error), &error);
    }
}

static void add_reviews(struct store *store, int64_t person, size_t first, size_t count)
{
    static struct store_review_new reviews[GROUP];
    static struct store_review_new *each[GROUP];
    static char keys[GROUP][40];
    static const struct store_mark marks[MARKS_EACH] = {{.starts_d = 101, .ends_d = 101.2},
                                                        {.starts_d = 103, .ends_d = 103.2},
                                                        {.starts_d = 105, .ends_d = 105.2}};
    for (size_t i = 0; i < count; i++) {
        (void)snprintf(keys[i], sizeof keys[i], "%zu", first + i);
        reviews[i] = (struct store_review_new){
            .person = person,
            .segment = 1 + (int64_t)((first + i) % (STARS * SEGMENTS_EACH)),
            .key = keys[i],
            .marks = marks,
            .mark_count = MARKS_EACH};
        randombytes_buf(reviews[i].lease, sizeof reviews[i].lease);
        each[i] = &reviews[i];
    }
    must(store_reviews_add(store, each, count, &error), &error);
}

/* Some values are missing, others tie, as in a real run. */
static struct store_run_new make_run(void)
{
    struct store_candidate *candidates = calloc(CANDIDATES, sizeof *candidates);
    struct store_member *members = calloc((size_t)CANDIDATES * MARKS_EACH, sizeof *members);
    if (candidates == NULL || members == NULL)
        exit(1);
    for (size_t i = 0; i < CANDIDATES; i++) {
        int64_t star = 1 + (int64_t)(i % (STARS * SEGMENTS_EACH)) / SEGMENTS_EACH;
        double u = (double)((i * 7919) % CANDIDATES) / CANDIDATES;
        candidates[i] = (struct store_candidate){.id = 1 + (int64_t)(i * MARKS_EACH),
                                                 .star = star,
                                                 .light_curve = star,
                                                 .starts_d = 101,
                                                 .ends_d = 101.2,
                                                 .mid_d = 100.0 + 30.0 * u,
                                                 .probability = u * u * u,
                                                 .snr = i % 10 == 0 ? NAN : 4.0 + 30.0 * u,
                                                 .depth_ppm = i % 10 == 0 ? NAN : 9000.0 * u,
                                                 .duration_h = 1.0 + 9.0 * u,
                                                 .period_d = NAN,
                                                 .looks = (int64_t)(i % 13),
                                                 .marks = MARKS_EACH};
        for (size_t k = 0; k < MARKS_EACH; k++)
            members[i * MARKS_EACH + k] =
                (struct store_member){candidates[i].id, candidates[i].id + (int64_t)k};
    }
    return (struct store_run_new){
        .run = {.newest_review = CANDIDATES, .settings = "{}", .fit = "{}"},
        .candidates = candidates,
        .candidate_count = CANDIDATES,
        .members = members,
        .member_count = (size_t)CANDIDATES * MARKS_EACH};
}

/* Another thread goes on storing reviews, one at a time, and keeps the longest wait. */
struct other {
    struct store *store;
    int64_t person;
    double longest_s;
    bool stop; /* set and read with __atomic calls */
};

static void *keep_reviewing(void *argument)
{
    struct other *other = argument;
    for (size_t i = 0; !__atomic_load_n(&other->stop, __ATOMIC_ACQUIRE); i++) {
        double began = base_clock_monotonic_s();
        add_reviews(other->store, other->person, CANDIDATES + i, 1);
        other->longest_s = fmax(other->longest_s, base_clock_monotonic_s() - began);
        (void)usleep(1000);
    }
    return NULL;
}

static void measure_run(struct store *store, int64_t person, struct store_run_new *run)
{
    struct other other = {.store = store, .person = person};
    pthread_t thread;
    if (pthread_create(&thread, NULL, keep_reviewing, &other) != 0)
        exit(1);
    double began = base_clock_monotonic_s();
    must(store_run_add(store, run, &error), &error);
    double took = base_clock_monotonic_s() - began;
    __atomic_store_n(&other.stop, true, __ATOMIC_RELEASE);
    (void)pthread_join(thread, NULL);
    (void)printf("run of %d candidates with %d marks stored in %.2f s; a review meanwhile waited "
                 "%.3f s at most\n",
                 CANDIDATES, CANDIDATES * MARKS_EACH, took, other.longest_s);
}

static double find(struct store *store, struct store_candidate_query query)
{
    struct base_arena *arena = base_arena_new(0);
    struct store_candidate *rows;
    size_t count;
    int64_t total;
    double began = base_clock_monotonic_s();
    must(store_candidates_find(store, arena, &query, &rows, &count, &total, &error), &error);
    double took = base_clock_monotonic_s() - began;
    base_arena_free(arena);
    return 1e3 * took;
}

static bool measure_find(struct store *store)
{
    static const char *const names[] = {"probability", "SNR",  "depth", "duration",
                                        "star",        "time", "looks", "marks"};
    bool ok = true;
    (void)printf("%-12s %10s %10s %10s %10s %10s %10s %10s  ms\n", "order", "falling", "rising",
                 "p >= 0.9", "no verdict", "keep", "batch", "row 99900");
    for (size_t i = 0; i < sizeof names / sizeof names[0]; i++) {
        const struct store_candidate_query plain = {.star = "",
                                                    .batch = "",
                                                    .verdict = "",
                                                    .order = (enum store_candidate_order)i,
                                                    .limit = PAGE};
        struct store_candidate_query rising = plain, least = plain, none = plain, keep = plain,
                                     batch = plain, far = plain;
        rising.ascending = true;
        least.min_probability = 0.9;
        none.verdict = "none";
        keep.verdict = "keep";
        batch.batch = "bench";
        far.offset = CANDIDATES - PAGE;
        const struct store_candidate_query queries[] = {plain, rising, least, none,
                                                        keep,  batch,  far};
        (void)printf("%-12s", names[i]);
        for (size_t k = 0; k < sizeof queries / sizeof queries[0]; k++) {
            double ms = INFINITY; /* the best of some: the machine may have other work */
            for (int turn = 0; turn < TURNS; turn++)
                ms = fmin(ms, find(store, queries[k]));
            ok = ok && ms < WANTED_MS;
            (void)printf(" %10.1f", ms);
        }
        (void)printf("\n");
    }
    return ok;
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
    if (mkdtemp(folder) == NULL)
        return 1;
    (void)snprintf(path, sizeof path, "%s/bench.db", folder);
    struct store *store = NULL;
    const struct store_options options = {.readers = 1};
    int64_t batch, person, id;
    bool resumed;
    must(store_open(path, &options, &store, &error), &error);
    must(store_batch_begin(store, "bench", "", 1, &batch, &resumed, &error), &error);
    add_stars(store, batch);
    must(store_person_add(store, "Ada", "ada", "", STORE_SCIENCE, 1, &person, &error), &error);
    for (size_t i = 0; i < CANDIDATES; i += GROUP)
        add_reviews(store, person, i, GROUP);
    struct store_run_new run = make_run();
    measure_run(store, person, &run);
    for (int i = 0; i < 50; i++)
        must(store_verdict_add(store, 1 + 3 * i, person, "keep", "", 1, &id, &error), &error);
    bool ok = measure_find(store);
    (void)printf("%s under %.0f ms\n", ok ? "all" : "NOT all", WANTED_MS);
    store_close(store);
    remove_database(path);
    (void)rmdir(folder);
    free((void *)run.candidates);
    free((void *)run.members);
    return 0;
}
