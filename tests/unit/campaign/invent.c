#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <dirent.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include "ebbmark/invent.h"
#include "ebbmark/lightcurve_read.h"
#include "ebbmark/text.h"

#define PATH_SIZE 300

struct places {
    char first[40], second[40];
};

static int make_places(void **state)
{
    struct places *places = calloc(1, sizeof *places);
    (void)snprintf(places->first, sizeof places->first, "/tmp/ebbmark-invent-XXXXXX");
    (void)snprintf(places->second, sizeof places->second, "/tmp/ebbmark-invent-XXXXXX");
    *state = places;
    return mkdtemp(places->first) == NULL || mkdtemp(places->second) == NULL;
}

static int remove_places(void **state)
{
    struct places *places = *state;
    char command[128];
    (void)snprintf(command, sizeof command, "rm -rf '%s' '%s'", places->first, places->second);
    int status = system(command);
    free(places);
    return status;
}

static struct base_text read_whole(const char *folder, const char *name)
{
    char path[PATH_SIZE], buffer[65536];
    struct base_text text = {0};
    (void)snprintf(path, sizeof path, "%s/%s", folder, name);
    FILE *file = fopen(path, "rb");
    if (file == NULL)
        fail_msg("%s is not there", path);
    for (size_t got; (got = fread(buffer, 1, sizeof buffer, file)) > 0;)
        base_text_add_bytes(&text, buffer, got);
    (void)fclose(file);
    return text;
}

/* True when the file is the same in both folders. */
static bool same_file(const char *first, const char *second, const char *name)
{
    struct base_text a = read_whole(first, name), b = read_whole(second, name);
    bool same = a.length == b.length && memcmp(a.data, b.data, a.length) == 0;
    base_text_free(&a);
    base_text_free(&b);
    return same;
}

/* How many files of the survey in `first` are there in `second` with other bytes. */
static size_t count_differences(const char *first, const char *second, size_t *files)
{
    static const char *const lists[] = {"stars.csv", "truth.csv", "lures.csv", "README.md"};
    char path[PATH_SIZE], name[PATH_SIZE];
    size_t differences = 0;
    for (size_t i = 0; i < 4; i++)
        differences += same_file(first, second, lists[i]) ? 0 : 1;
    *files = 4;
    (void)snprintf(path, sizeof path, "%s/light-curves", first);
    DIR *folder = opendir(path);
    assert_non_null(folder);
    for (const struct dirent *entry; (entry = readdir(folder)) != NULL;) {
        if (entry->d_name[0] == '.')
            continue;
        (void)snprintf(name, sizeof name, "light-curves/%s", entry->d_name);
        differences += same_file(first, second, name) ? 0 : 1;
        ++*files;
    }
    (void)closedir(folder);
    return differences;
}

static void the_same_seed_gives_the_same_bytes(void **state)
{
    struct places *places = *state;
    size_t files;
    assert_true(campaign_invent(places->first, 7, NULL));
    assert_true(campaign_invent(places->second, 7, NULL));
    assert_int_equal(count_differences(places->first, places->second, &files), 0);
    assert_int_equal(files, 4 + 64 + 8 + 1);
    assert_true(campaign_invent(places->second, 8, NULL));
    assert_int_equal(count_differences(places->first, places->second, &files), files);
}

static void the_demo_data_are_what_the_generator_writes(void **state)
{
    struct places *places = *state;
    size_t files;
    assert_true(campaign_invent(places->first, INVENT_SEED_DEFAULT, NULL));
    assert_int_equal(count_differences(places->first, "demo-data", &files), 0);
}

static void no_file_tells_when_it_was_made(void **state)
{
    struct places *places = *state;
    assert_true(campaign_invent(places->first, 7, NULL));
    struct base_text text = read_whole(places->first, "light-curves/RB-0001.fits");
    assert_null(memmem(text.data, text.length, "DATE", 4));
    assert_int_equal(text.length % 2880, 0);
    base_text_free(&text);
}

/* All light curves of a survey. */
struct curves {
    struct lightcurve_raw list[INVENT_STARS + 1];
    size_t count, files;
};

static bool take(void *context, const char *label, const void *data, size_t size,
                 const struct base_error *reason)
{
    static const struct lightcurve_mapping mapping;
    struct curves *curves = context;
    struct lightcurve_reading reading;
    struct base_error error = {0};
    if (data == NULL)
        fail_msg("%s: %s", label, reason->sentence);
    if (!lightcurve_read_bytes(label, data, size, &mapping, &reading, &error))
        fail_msg("%s: %s", label, error.sentence);
    curves->files++;
    for (size_t i = 0; i < reading.count; i++) {
        assert_true(curves->count < INVENT_STARS);
        curves->list[curves->count++] = reading.curves[i];
    }
    free(reading.curves);
    return true;
}

static const struct lightcurve_raw *find(const struct curves *curves, const char *star)
{
    for (size_t i = 0; i < curves->count; i++)
        if (strcmp(curves->list[i].star.name, star) == 0)
            return &curves->list[i];
    fail_msg("no light curve of %s", star);
    return NULL;
}

static void read_survey(const char *folder, struct curves *curves)
{
    char path[PATH_SIZE];
    (void)snprintf(path, sizeof path, "%s/light-curves", folder);
    assert_true(campaign_invent(folder, 7, NULL));
    assert_true(lightcurve_walk(path, take, curves, NULL));
}

static void free_curves(struct curves *curves)
{
    for (size_t i = 0; i < curves->count; i++)
        lightcurve_raw_free(&curves->list[i]);
}

static void every_star_can_be_loaded_and_stands_in_the_catalogue(void **state)
{
    struct places *places = *state;
    struct curves curves = {0};
    struct lightcurve_catalogue catalogue;
    char path[PATH_SIZE];
    read_survey(places->first, &curves);
    (void)snprintf(path, sizeof path, "%s/stars.csv", places->first);
    assert_true(lightcurve_catalogue_read(path, &catalogue, NULL));
    assert_int_equal(curves.count, INVENT_STARS);
    assert_int_equal(curves.files, 64 + 8 + 1);
    assert_int_equal(catalogue.count, INVENT_STARS);
    for (size_t i = 0; i < curves.count; i++) {
        const struct lightcurve_raw *curve = &curves.list[i];
        const struct lightcurve_star *star =
            lightcurve_catalogue_find(&catalogue, curve->star.name);
        struct lightcurve clean;
        assert_non_null(star);
        assert_string_equal(curve->time_reference, "BJD_TDB - 2460000");
        if (!isnan(curve->star.ra_deg))
            assert_true(curve->star.ra_deg == star->ra_deg &&
                        curve->star.temperature_k == star->temperature_k);
        assert_true(star->magnitude > 9 && star->radius_rsun > 0.2 && star->mass_msun > 0.2);
        assert_true(lightcurve_clean(curve, LIGHTCURVE_QUALITY_MASK_DEFAULT, &clean, NULL));
        assert_true(clean.count > 900 && clean.dropped_flagged > 0);
        lightcurve_free(&clean);
    }
    lightcurve_catalogue_free(&catalogue);
    free_curves(&curves);
}

/* Mean of the usable flux with low <= |time - mid| < high; NAN with fewer than 2 values. */
static double mean_within(const struct lightcurve_raw *curve, double mid, double low, double high)
{
    double sum = 0.0;
    size_t count = 0;
    for (size_t i = 0; i < curve->count; i++) {
        double away = fabs(curve->time[i] - mid);
        if (away >= low && away < high && curve->quality[i] == 0 && isfinite(curve->flux[i])) {
            sum += curve->flux[i];
            count++;
        }
    }
    return count < 2 ? NAN : sum / (double)count;
}

/* Spots and flares disturb a plain mean, so this asks it of most dips, and of their sum. */
static void the_dips_of_the_truth_are_in_the_light_curves(void **state)
{
    struct places *places = *state;
    struct curves curves = {0};
    read_survey(places->first, &curves);
    struct base_text truth = read_whole(places->first, "truth.csv");
    size_t seen = 0, measured = 0, listed = 0;
    double sum = 0.0, wanted = 0.0;
    char *rest = NULL;
    char *line = strtok_r(truth.data, "\n", &rest);
    assert_string_equal(line, "star,mid_time,depth_ppm,duration_h,period_d,snr,kind");
    for (; (line = strtok_r(NULL, "\n", &rest)) != NULL; listed++) {
        char star[32], kind[16];
        double mid, depth_ppm, hours, snr;
        const char *tail = strrchr(line, ',');
        assert_int_equal(sscanf(line, "%31[^,],%lf,%lf,%lf,", star, &mid, &depth_ppm, &hours), 4);
        (void)snprintf(kind, sizeof kind, "%s", tail + 1);
        while (*--tail != ',') {
        }
        snr = strtod(tail + 1, NULL);
        assert_true(hours > 0.5 && hours < 24.0 && depth_ppm > 50.0 && snr > 0.0);
        if (snr < 8.0 || strcmp(kind, "transit") != 0)
            continue;
        const struct lightcurve_raw *curve = find(&curves, star);
        double inside = mean_within(curve, mid, 0.0, hours / 24.0 * 0.35);
        double level = mean_within(curve, mid, hours / 24.0 * 0.55, hours / 24.0 * 1.1);
        if (isnan(inside) || isnan(level))
            continue;
        double depth = (level - inside) / level * 1e6;
        measured++;
        seen += depth > 0.5 * depth_ppm ? 1 : 0;
        sum += depth;
        wanted += depth_ppm;
    }
    assert_true(listed > 120 && measured > 30);
    if ((double)seen < 0.85 * (double)measured)
        fail_msg("%zu of %zu dips are seen", seen, measured);
    if (fabs(sum / wanted - 1.0) > 0.15)
        fail_msg("the mean depth is %.2f of what the truth states", sum / wanted);
    base_text_free(&truth);
    free_curves(&curves);
}

static void a_folder_that_cannot_be_written_is_an_error(void **state)
{
    struct places *places = *state;
    struct base_error error = {0};
    char path[PATH_SIZE];
    (void)snprintf(path, sizeof path, "%s/none/deeper", places->first);
    assert_false(campaign_invent(path, 7, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    (void)snprintf(path, sizeof path, "%s/file", places->first);
    FILE *file = fopen(path, "wb");
    (void)fclose(file);
    error = (struct base_error){0};
    assert_false(campaign_invent(path, 7, &error));
    assert_int_equal(error.kind, BASE_IO);
}

#define IN_PLACES(test) cmocka_unit_test_setup_teardown(test, make_places, remove_places)

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACES(the_same_seed_gives_the_same_bytes),
        IN_PLACES(the_demo_data_are_what_the_generator_writes),
        IN_PLACES(no_file_tells_when_it_was_made),
        IN_PLACES(every_star_can_be_loaded_and_stands_in_the_catalogue),
        IN_PLACES(the_dips_of_the_truth_are_in_the_light_curves),
        IN_PLACES(a_folder_that_cannot_be_written_is_an_error),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
