/*
 * What a lease costs when a large campaign is open: 3 million open segments (or as many as the
 * first argument says), 2,000 people. Prints figures; holds nothing against a limit. Needs about 1
 * GB of disk under /tmp and half a minute.
 */
#include <ftw.h>
#include <inttypes.h>
#include <math.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include "../../server/campaign/inside.h"
#include "ebbmark/clock.h"

#define SEGMENTS_A_CURVE 1000
#define CURVES_A_FILE 100
#define PEOPLE 2000
#define LEASES 200000
#define THREADS 4

static void stop_if(bool failed, const struct base_error *error)
{
    if (!failed)
        return;
    (void)fprintf(stderr, "bench: %s\n", error->sentence);
    exit(1);
}

static int remove_one(const char *path, const struct stat *about, int kind, struct FTW *where)
{
    (void)about;
    (void)kind;
    (void)where;
    return remove(path);
}

/* Memory of this process in MB. */
static double memory_mb(void)
{
    long pages = 0;
    FILE *file = fopen("/proc/self/statm", "r");
    if (file == NULL || fscanf(file, "%*d %ld", &pages) != 1)
        pages = 0;
    if (file != NULL)
        (void)fclose(file);
    return (double)pages * (double)sysconf(_SC_PAGESIZE) / 1e6;
}

/* A campaign of one batch: curves of SEGMENTS_A_CURVE segments of one point, CURVES_A_FILE a file.
 */
static void fill(struct store *store, size_t curves)
{
    static double time[SEGMENTS_A_CURVE];
    static float zero[SEGMENTS_A_CURVE];
    static struct store_span spans[SEGMENTS_A_CURVE];
    static char names[CURVES_A_FILE][32];
    struct store_light_curve_new of_file[CURVES_A_FILE];
    struct base_error error = {0};
    int64_t batch = 0;
    bool resumed;
    for (size_t i = 0; i < SEGMENTS_A_CURVE; i++) {
        time[i] = 15.0 * (double)i;
        spans[i] = (struct store_span){i, 1, time[i], time[i] + 14.9};
    }
    stop_if(!store_batch_begin(store, "bench", "bench", 1, &batch, &resumed, &error), &error);
    for (size_t c = 0; c < curves;) {
        struct store_file_new file = {.batch = batch,
                                      .label = names[0],
                                      .reason = "",
                                      .outcome = STORE_FILE_LOADED,
                                      .curves = of_file};
        for (; c < curves && file.curve_count < CURVES_A_FILE; c++) {
            char *name = names[file.curve_count];
            (void)snprintf(name, sizeof names[0], "RB-%zu", c);
            of_file[file.curve_count++] =
                (struct store_light_curve_new){.star = {name, NAN, NAN, NAN, NAN, NAN, NAN},
                                               .time_reference = "BJD_TDB - 2457000",
                                               .points = {SEGMENTS_A_CURVE, time, zero, zero, NULL},
                                               .median_flux = 1.0,
                                               .cadence_d = 15.0,
                                               .noise_point = 1e-3,
                                               .segments = spans,
                                               .segment_count = SEGMENTS_A_CURVE};
        }
        memcpy(file.sha256, names[0], sizeof file.sha256);
        stop_if(!store_files_add(store, &file, 1, &error), &error);
    }
    stop_if(!store_batch_finish(store, batch, 2, &error), &error);
}

/* Leases whole, with the segment read from the store and the text sealed. */
struct worker {
    struct campaign *campaign;
    int64_t first_person;
    size_t leases;
};

static void *take_leases(void *argument)
{
    const struct worker *worker = argument;
    struct base_arena *arena = base_arena_new(0);
    for (size_t i = 0; arena != NULL && i < worker->leases; i++) {
        struct campaign_lease lease;
        struct base_error error = {0};
        bool found = false;
        int64_t person = worker->first_person + (int64_t)(i % (PEOPLE / THREADS));
        bool ok = campaign_lease_take(worker->campaign, arena, person, &lease, &found, &error);
        stop_if(!ok || !found, &error);
        handout_review_taken(worker->campaign->handout, person, lease.segment.id);
        base_arena_reset(arena);
    }
    base_arena_free(arena);
    return NULL;
}

/* Only the queue's part: find, note, and take the look. */
static void queue_alone(struct campaign *campaign)
{
    struct base_error error = {0};
    double began = base_clock_monotonic_s();
    for (size_t i = 0; i < LEASES; i++) {
        int64_t segment = 0;
        bool found = false;
        const struct handout_wish wish = {.person = 1 + (int64_t)(i % PEOPLE),
                                          .looks_most = 15,
                                          .now_ms = 1000 + (int64_t)i,
                                          .expires_ms = 901000 + (int64_t)i};
        bool ok = handout_take(campaign->handout, &wish, &segment, &found, &error);
        stop_if(!ok || !found, &error);
        if (i % 4 != 0)
            handout_review_taken(campaign->handout, wish.person, segment);
        else
            handout_give_back(campaign->handout, wish.person, segment, true);
    }
    (void)printf("queue alone                %8.2f us a lease\n",
                 1e6 * (base_clock_monotonic_s() - began) / LEASES);
}

/* The worst that a pick can meet: one person has seen the whole lowest level but 20 segments of it,
 * so tries fail and the level is walked. Everything else has had more looks. */
static void keen_person(struct campaign *campaign, size_t segments, size_t seen)
{
    struct base_error error = {0};
    const struct handout_wish wish = {
        .person = PEOPLE + 1, .looks_most = 15, .now_ms = 1000, .expires_ms = 901000};
    double worst = 0.0, sum = 0.0;
    int64_t segment = 0;
    bool found = false;
    /* From here on the person is remembered, and what they review is noted. */
    stop_if(!handout_take(campaign->handout, &wish, &segment, &found, &error), &error);
    handout_give_back(campaign->handout, PEOPLE + 1, segment, true);
    for (size_t i = 1; i <= segments; i++)
        for (unsigned look = 0; look < (i <= seen ? 1 : 8); look++)
            handout_review_taken(campaign->handout, i + 20 <= seen ? PEOPLE + 1 : PEOPLE + 2,
                                 (int64_t)i);
    for (size_t i = 0; i < 50; i++) {
        double began = base_clock_monotonic_s();
        stop_if(!handout_take(campaign->handout, &wish, &segment, &found, &error), &error);
        double took = base_clock_monotonic_s() - began;
        worst = took > worst ? took : worst;
        sum += took;
    }
    (void)printf("one who saw all %6zu     %8.2f us a lease, the slowest %.2f ms\n", seen,
                 1e6 * sum / 50.0, 1e3 * worst);
}

int main(int argc, char **argv)
{
    size_t segments = argc > 1 ? strtoul(argv[1], NULL, 10) : 3000000;
    char folder[] = "/tmp/ebbmark-bench-XXXXXX", path[64];
    struct base_error error = {0};
    struct store *store = NULL;
    struct campaign *campaign = NULL;
    const struct store_options options = {.readers = THREADS + 4};
    if (mkdtemp(folder) == NULL)
        return 1;
    (void)snprintf(path, sizeof path, "%s/campaign.db", folder);
    stop_if(!store_open(path, &options, &store, &error), &error);
    double began = base_clock_monotonic_s();
    fill(store, (segments + SEGMENTS_A_CURVE - 1) / SEGMENTS_A_CURVE);
    (void)printf("%zu segments stored in %.1f s\n", segments, base_clock_monotonic_s() - began);
    double before = memory_mb();
    began = base_clock_monotonic_s();
    stop_if(!campaign_open(store, NULL, NULL, &campaign, &error), &error);
    (void)printf("queue built in             %8.2f s, %.0f MB\n", base_clock_monotonic_s() - began,
                 memory_mb() - before);
    queue_alone(campaign);
    for (unsigned threads = 1; threads <= THREADS; threads += THREADS - 1) {
        pthread_t ids[THREADS];
        struct worker workers[THREADS];
        began = base_clock_monotonic_s();
        for (unsigned t = 0; t < threads; t++) {
            workers[t] =
                (struct worker){campaign, 1 + (int64_t)t * (PEOPLE / THREADS), LEASES / threads};
            if (pthread_create(&ids[t], NULL, take_leases, &workers[t]) != 0)
                return 1;
        }
        for (unsigned t = 0; t < threads; t++)
            (void)pthread_join(ids[t], NULL);
        double took = base_clock_monotonic_s() - began;
        (void)printf("whole lease, %u thread%s     %8.2f us a lease, %.0f a second\n", threads,
                     threads == 1 ? " " : "s", 1e6 * took / LEASES, LEASES / took);
    }
    keen_person(campaign, segments, segments / 60);
    (void)printf("memory at the end          %8.0f MB\n", memory_mb() - before);
    campaign_close(campaign);
    store_close(store);
    (void)nftw(folder, remove_one, 8, FTW_DEPTH | FTW_PHYS);
    return 0;
}
