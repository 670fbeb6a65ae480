/*
 * What a whole consensus run costs, from the stored reviews to the stored candidates: for so many
 * stars (600, or the first argument) and for ten times as many, ten reviewers each. Prints figures
 * and changes nothing.
 */
#include <ftw.h>
#include <gsl/gsl_randist.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/resource.h>
#include <sys/stat.h>
#include <unistd.h>

#include "../../server/campaign/inside.h"
#include "ebbmark/clock.h"

#define POINTS 1440 /* 30 d at half an hour, two segments */
#define PEOPLE 10
#define AT_ONCE 200

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

/* Stars with a dip of 3 h in each segment, in noise. */
static void add_stars(struct store *store, size_t stars, gsl_rng *random)
{
    static double time[POINTS];
    static float flux[POINTS], trend[POINTS];
    const struct store_span spans[] = {{0, POINTS / 2, 0.0, 14.98},
                                       {POINTS / 2, POINTS / 2, 15.0, 29.98}};
    struct base_error error = {0};
    int64_t batch = 0;
    bool resumed;
    stop_if(!store_batch_begin(store, "bench", "bench", 1, &batch, &resumed, &error), &error);
    for (size_t s = 0; s < stars; s++) {
        char name[32];
        for (size_t i = 0; i < POINTS; i++) {
            time[i] = (double)i / 48.0;
            double off = fmin(fabs(time[i] - 5.0), fabs(time[i] - 20.0));
            flux[i] = (float)(gsl_ran_gaussian(random, 1e-3) - (off < 0.0625 ? 4e-3 : 0.0));
        }
        (void)snprintf(name, sizeof name, "RB-%zu", s);
        const struct store_light_curve_new curve = {.star = {name, NAN, NAN, NAN, NAN, NAN, NAN},
                                                    .time_reference = "BJD_TDB - 2457000",
                                                    .points = {POINTS, time, flux, trend, NULL},
                                                    .median_flux = 1.0,
                                                    .cadence_d = 1.0 / 48.0,
                                                    .noise_point = 1e-3,
                                                    .noise_window = {7e-4, 4e-4, 3e-4, 2e-4},
                                                    .segments = spans,
                                                    .segment_count = 2};
        struct store_file_new file = {.batch = batch,
                                      .label = name,
                                      .reason = "",
                                      .outcome = STORE_FILE_LOADED,
                                      .curves = &curve,
                                      .curve_count = 1};
        memcpy(file.sha256, name, sizeof name);
        stop_if(!store_files_add(store, &file, 1, &error), &error);
    }
    stop_if(!store_batch_finish(store, batch, 2, &error), &error);
}

/* One review: the dip by most, and a chance mark by some. */
static size_t draw(int64_t segment, gsl_rng *random, struct store_mark marks[2])
{
    double begins = segment % 2 == 1 ? 0.0 : 15.0;
    size_t count = 0;
    if (gsl_rng_uniform(random) < 0.8) {
        double from = begins + 4.93 + gsl_ran_gaussian(random, 0.02);
        marks[count++] = (struct store_mark){.starts_d = from,
                                             .ends_d = from + 0.14 + 0.02 * gsl_rng_uniform(random),
                                             .low = 0.99,
                                             .high = 1.0};
    }
    if (gsl_rng_uniform(random) < 0.1) {
        double from = begins + 14.0 * gsl_rng_uniform(random);
        marks[count++] =
            (struct store_mark){.starts_d = from, .ends_d = from + 0.3, .low = 0.99, .high = 1.0};
    }
    return count;
}

static void add_reviews(struct store *store, size_t segments, const int64_t *people,
                        gsl_rng *random)
{
    static struct store_review_new reviews[AT_ONCE];
    static struct store_mark marks[AT_ONCE][2];
    static char keys[AT_ONCE][32];
    struct store_review_new *list[AT_ONCE];
    struct base_error error = {0};
    size_t waiting = 0;
    for (uint64_t n = 0; n < segments * PEOPLE; n++) {
        struct store_review_new *review = list[waiting] = &reviews[waiting];
        *review = (struct store_review_new){.person = people[n % PEOPLE],
                                            .segment = (int64_t)(n / PEOPLE) + 1,
                                            .key = keys[waiting],
                                            .submitted_ms = 1,
                                            .marks = marks[waiting]};
        (void)snprintf(keys[waiting], sizeof keys[0], "k%llu", (unsigned long long)n);
        memcpy(review->lease, &n, sizeof n);
        review->mark_count = draw(review->segment, random, marks[waiting]);
        if (++waiting == AT_ONCE || n + 1 == segments * PEOPLE) {
            stop_if(!store_reviews_add(store, list, waiting, &error), &error);
            waiting = 0;
        }
    }
}

static double measure(size_t stars, unsigned threads)
{
    char folder[] = "/tmp/ebbmark-bench-XXXXXX", path[64];
    struct base_error error = {0};
    struct store *store = NULL;
    struct base_pool *pool = NULL;
    struct campaign *campaign = NULL;
    struct store_counts counts;
    struct rusage usage;
    int64_t people[PEOPLE], run = 0;
    const struct store_options options = {.readers = threads + 4};
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    if (mkdtemp(folder) == NULL)
        exit(1);
    (void)snprintf(path, sizeof path, "%s/campaign.db", folder);
    stop_if(!store_open(path, &options, &store, &error) ||
                !base_pool_open(&pool, threads, 64, &error),
            &error);
    add_stars(store, stars, random);
    stop_if(!campaign_open(store, pool, NULL, &campaign, &error), &error);
    for (size_t i = 0; i < PEOPLE; i++) {
        char handle[32];
        (void)snprintf(handle, sizeof handle, "person %zu", i);
        stop_if(!campaign_person_add(campaign, handle, NULL, STORE_REVIEWER, &people[i], &error),
                &error);
    }
    add_reviews(store, 2 * stars, people, random);
    double began = base_clock_monotonic_s();
    stop_if(!campaign_run(campaign, NULL, NULL, &run, &error), &error);
    double took = base_clock_monotonic_s() - began;
    stop_if(!store_count(store, &counts, &error), &error);
    (void)getrusage(RUSAGE_SELF, &usage);
    (void)printf("%8lld reviews, %8lld marks: %8.2f s, %7.1f us a review, %ld MB at most\n",
                 (long long)counts.reviews, (long long)counts.marks, took,
                 1e6 * took / (double)counts.reviews, usage.ru_maxrss / 1000);
    campaign_close(campaign);
    base_pool_close(pool);
    store_close(store);
    gsl_rng_free(random);
    (void)nftw(folder, remove_one, 8, FTW_DEPTH | FTW_PHYS);
    return took;
}

int main(int argc, char **argv)
{
    size_t stars = argc > 1 ? strtoul(argv[1], NULL, 10) : 600;
    long processors = sysconf(_SC_NPROCESSORS_ONLN);
    unsigned threads = processors < 1 ? 1 : processors > 64 ? 64 : (unsigned)processors;
    if (stars == 0)
        return 2;
    double once = measure(stars, threads);
    double tenfold = measure(10 * stars, threads);
    (void)printf("ten times the reviews take %.1f times as long\n", tenfold / once);
    return 0;
}
