/*
 * From a light curve to the ranked list. Once on a mission's light curve of a known hot Jupiter
 * (mission archive, public; read where it lies), against the published ephemeris; and once on a
 * star made here, which needs nothing from outside.
 */
#include "support.h"

#include <gsl/gsl_randist.h>
#include <math.h>

#define REVIEWERS 10
#define DIPS_MAX 64

/* What is there to be found. */
struct truth {
    double mids[DIPS_MAX];
    size_t count;
    double duration_d, snr;
};

static const char *shared_data(void)
{
    const char *folder = getenv("EBBMARK_SHARED_DATA");
    return folder != NULL ? folder : "../shared/data";
}

static void load_path(struct place *place, const char *path)
{
    struct campaign_load_progress progress;
    struct base_error error = {0};
    const struct campaign_load_options options = {
        .batch = "stars", .paths = &path, .path_count = 1};
    assert_ok(campaign_load(place->campaign, &options, &progress, &error), error);
    assert_int_equal(progress.files_loaded, 1);
}

static struct store_mark mark_at(double mid, double duration, double starts, double ends)
{
    return (struct store_mark){.starts_d = fmax(mid - 0.5 * duration, starts),
                               .ends_d = fmin(mid + 0.5 * duration, ends),
                               .low = 0.96,
                               .high = 1.0,
                               .sure = true};
}

/* One reviewer's marks on one segment: most dips, with edges off by the scatter that the design's
 * simulation gives (0.12 + 1/SNR lengths, widened by about 0.15), and now and then a chance mark.
 */
static size_t marks_of(const struct store_segment *segment, const struct truth *truth,
                       gsl_rng *random, struct store_mark marks[50])
{
    size_t count = 0;
    double scatter = (0.12 + 1.0 / truth->snr) * truth->duration_d;
    for (size_t i = 0; i < truth->count && count < 48; i++) {
        double half = 0.5 * truth->duration_d;
        if (truth->mids[i] - half < segment->starts_d || truth->mids[i] + half > segment->ends_d ||
            gsl_rng_uniform(random) > 0.85)
            continue;
        double wide = fabs(0.15 + gsl_ran_gaussian(random, 0.15)) * truth->duration_d;
        double from = truth->mids[i] - half - 0.5 * wide + gsl_ran_gaussian(random, scatter);
        double to = truth->mids[i] + half + 0.5 * wide + gsl_ran_gaussian(random, scatter);
        if (to - from > 0.02)
            marks[count++] =
                mark_at(0.5 * (from + to), to - from, segment->starts_d, segment->ends_d);
    }
    for (unsigned chance = gsl_ran_poisson(random, 0.3); chance > 0; chance--) {
        double at = segment->starts_d + 0.05 +
                    (segment->ends_d - segment->starts_d - 0.1) * gsl_rng_uniform(random);
        marks[count++] = mark_at(at, 0.08, segment->starts_d, segment->ends_d);
    }
    return count;
}

/* Everybody looks at every segment. */
static void review_all(struct place *place, const struct truth *truth)
{
    struct base_error error = {0};
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    struct base_arena *arena = base_arena_new(0);
    struct id_list segments = open_segments(place);
    uint64_t number = 0;
    gsl_rng_set(random, 2);
    for (unsigned r = 0; r < REVIEWERS; r++) {
        char handle[32];
        (void)snprintf(handle, sizeof handle, "person %u", r);
        int64_t person = add_person(place, handle);
        for (size_t s = 0; s < segments.count; s++) {
            struct store_segment segment;
            struct store_mark marks[50];
            assert_ok(store_segment_by_id(place->store, arena, segments.ids[s], &segment, &error),
                      error);
            size_t count = marks_of(&segment, truth, random, marks);
            assert_ok(campaign_review_check(place->campaign, &segment, marks, count, &error),
                      error);
            review_segment(place, person, segment.id, ++number, marks, count);
        }
    }
    free(segments.ids);
    base_arena_free(arena);
    gsl_rng_free(random);
}

/* How much of [mid - half, mid + half] data cover. */
static double covered(const struct store_points *points, double cadence, double mid, double half)
{
    size_t inside = 0;
    for (size_t i = 0; i < points->count; i++)
        inside += fabs(points->time[i] - mid) <= half ? 1 : 0;
    return (double)inside * cadence / (2.0 * half);
}

/* Run, and hold the likely candidates against the truth; `within` in days. Candidates that are
 * likely and no dip fail. */
static void assert_found(struct place *place, const struct truth *truth, double within,
                         double depth_least_ppm, double depth_most_ppm, double hours_least,
                         double hours_most)
{
    struct base_error error = {0};
    struct base_arena *arena = base_arena_new(0);
    struct store_candidate *rows = NULL;
    const struct store_candidate_query query = {
        .star = "", .batch = "", .verdict = "", .order = STORE_BY_TIME, .ascending = true};
    size_t count = 0;
    int64_t run = 0;
    bool found[DIPS_MAX] = {false};
    assert_ok(campaign_run(place->campaign, NULL, NULL, &run, &error), error);
    assert_ok(store_candidates_find(place->store, arena, &query, &rows, &count, NULL, &error),
              error);
    for (size_t i = 0; i < count; i++) {
        const struct store_candidate *c = &rows[i];
        size_t nearest = 0;
        for (size_t k = 1; k < truth->count; k++)
            if (fabs(c->mid_d - truth->mids[k]) < fabs(c->mid_d - truth->mids[nearest]))
                nearest = k;
        double off = fabs(c->mid_d - truth->mids[nearest]);
        if (c->probability <= 0.5)
            continue;
        if (off > within)
            fail_msg("likely (%.3f) and no dip: %.4f, %.1f min from one", c->probability, c->mid_d,
                     off * 1440.0);
        assert_false(found[nearest]);
        found[nearest] = true;
        assert_true(c->probability > 0.9);
        if (c->depth_ppm < depth_least_ppm || c->depth_ppm > depth_most_ppm ||
            c->duration_h < hours_least || c->duration_h > hours_most)
            fail_msg("the dip at %.4f measures %.0f ppm and %.2f h", c->mid_d, c->depth_ppm,
                     c->duration_h);
        assert_true(c->snr > 5.0 && c->depth_error_ppm > 0.0 && c->mid_error_d > 0.0);
        assert_int_equal(c->flags & (4 | 8 | 16), 0); /* measured, no V, no brightening */
    }
    for (size_t k = 0; k < truth->count; k++)
        if (!found[k])
            fail_msg("the dip at %.4f was not found", truth->mids[k]);
    base_arena_free(arena);
}

/* Mid-times that data cover from end to end, from an ephemeris. Some flagged cadences may lack. */
static void predict(struct place *place, double epoch, double period, struct truth *truth)
{
    struct base_error error = {0};
    struct base_arena *arena = base_arena_new(0);
    struct store_light_curve curve;
    struct store_points points;
    assert_ok(store_light_curve_read(place->store, arena, 1, &curve, &error), error);
    assert_ok(store_points_read(place->store, arena, 1, &points, &error), error);
    for (double n = ceil((curve.starts_d - epoch) / period);
         epoch + n * period < curve.ends_d && truth->count < DIPS_MAX; n += 1.0)
        if (covered(&points, curve.cadence_d, epoch + n * period, 0.5 * truth->duration_d) > 0.85)
            truth->mids[truth->count++] = epoch + n * period;
    base_arena_free(arena);
}

/* T0 = 2455804.515752 BJD_TDB and P = 1.338231466 d: Bouma et al. 2019, quoted from memory. An
 * independent trapezoid fit gave 18 whole transits within 1.1 min of it, 2.52 to 2.75 % deep and
 * 2.05 to 2.20 h long. */
static void eighteen_transits_of_a_known_planet_lead_the_list(void **state)
{
    (void)state;
    char path[512];
    struct place place;
    struct truth truth = {.duration_d = 2.12 / 24.0, .snr = 30.0};
    (void)snprintf(path, sizeof path, "%s/light-curves/tic402026209-s02.fits", shared_data());
    if (access(path, R_OK) != 0) {
        print_message("%s is not there\n", path);
        skip();
    }
    place_open(&place);
    load_path(&place, path);
    predict(&place, 2455804.515752 - 2457000.0, 1.338231466, &truth);
    assert_int_equal(truth.count, 18);
    review_all(&place, &truth);
    assert_found(&place, &truth, 3.0 / 1440.0, 24000.0, 28000.0, 1.9, 2.4);
    place_close(&place);
}

/* The same with a star made here: 2 % deep trapezoids of 3 h every 2.7 d on a star that varies, in
 * noise of 2,000 ppm a point. Their mid-times, depth and length are what was put in. */
static void dips_put_into_a_made_star_lead_the_list(void **state)
{
    (void)state;
    enum { POINTS = 3900 }; /* 27 d at 10 min */
    struct place place;
    struct truth truth = {.duration_d = 3.0 / 24.0, .snr = 40.0};
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    char path[256];
    place_open(&place);
    (void)snprintf(path, sizeof path, "%s/RB-0007.csv", place.folder);
    for (unsigned i = 0; i < 10; i++)
        truth.mids[truth.count++] = 1.3 + 2.7 * i;
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    (void)fprintf(file, "time [BJD-2460000],flux\n");
    for (size_t i = 0; i < POINTS; i++) {
        double t = (double)i / 144.0, flux = 1.0;
        for (size_t k = 0; k < truth.count; k++) {
            double from_edge = 0.5 * truth.duration_d - fabs(t - truth.mids[k]);
            if (from_edge > 0.0)
                flux -= 0.02 * fmin(from_edge / (0.15 * truth.duration_d), 1.0);
        }
        flux *= 1.0 + 0.004 * sin(t * 0.7);
        (void)fprintf(file, "%.6f,%.7f\n", t, flux + gsl_ran_gaussian(random, 2e-3));
    }
    (void)fclose(file);
    load_path(&place, path);
    review_all(&place, &truth);
    assert_found(&place, &truth, 5.0 / 1440.0, 18000.0, 22000.0, 2.7, 3.3);
    gsl_rng_free(random);
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(eighteen_transits_of_a_known_planet_lead_the_list),
        cmocka_unit_test(dips_put_into_a_made_star_lead_the_list),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
