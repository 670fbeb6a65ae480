/* Loading batches: good and bad files, again, stopped and resumed, with a full disk. */
#include "support.h"

#include <gsl/gsl_randist.h>
#include <math.h>

#define POINTS 1500 /* a star: 30 d at half an hour */

/* A star's CSV; the number decides its noise, so that no two files are the same. */
static void write_star(const char *folder, unsigned number, size_t points)
{
    char path[320];
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    gsl_rng_set(random, number);
    (void)snprintf(path, sizeof path, "%s/star-%04u.csv", folder, number);
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    (void)fprintf(file, "time [BJD-2460000],flux\n");
    for (size_t i = 0; i < points; i++)
        (void)fprintf(file, "%.4f,%.3f\n", 0.02 * (double)i,
                      1000.0 + gsl_ran_gaussian(random, 1.0));
    (void)fclose(file);
    gsl_rng_free(random);
}

static void write_text(const char *folder, const char *name, const char *text)
{
    char path[320];
    (void)snprintf(path, sizeof path, "%s/%s", folder, name);
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    (void)fputs(text, file);
    (void)fclose(file);
}

/* What was told during a load. */
struct listener {
    unsigned calls, stop_at; /* 0: never */
    uint64_t last_done;
    bool went_back;
    unsigned refused;
    char labels[16][320], reasons[16][600];
};

static bool hear(void *context, const struct campaign_load_progress *progress)
{
    struct listener *listener = context;
    listener->went_back = listener->went_back || progress->files_done < listener->last_done ||
                          progress->files_done > progress->files_total;
    listener->last_done = progress->files_done;
    return ++listener->calls != listener->stop_at;
}

static void hear_refused(void *context, const char *label, const char *reason)
{
    struct listener *listener = context;
    if (listener->refused < 16) {
        (void)snprintf(listener->labels[listener->refused], 320, "%s", label);
        (void)snprintf(listener->reasons[listener->refused], 600, "%s", reason);
    }
    listener->refused++;
}

static bool load(struct place *place, const char *batch, const char *path,
                 struct listener *listener, struct campaign_load_progress *result,
                 struct base_error *error)
{
    const struct campaign_load_options options = {.batch = batch,
                                                  .paths = &path,
                                                  .path_count = 1,
                                                  .progress = hear,
                                                  .refused = hear_refused,
                                                  .context = listener};
    return campaign_load(place->campaign, &options, result, error);
}

static void make_folder(const struct place *place, const char *name, char out[256])
{
    (void)snprintf(out, 256, "%s/%s", place->folder, name);
    assert_int_equal(mkdir(out, 0700), 0);
}

static void a_folder_is_loaded_with_its_segments_trend_and_noise(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[256];
    place_open(&place);
    make_folder(&place, "stars", folder);
    for (unsigned i = 0; i < 5; i++)
        write_star(folder, i, POINTS);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_loaded, 5);
    assert_int_equal(result.files_done, 5);
    assert_int_equal(result.files_total, 5);
    assert_int_equal(result.bytes_done, result.bytes_total);
    assert_int_equal(result.stars, 5);
    assert_int_equal(result.points, 5 * POINTS);
    assert_true(result.points_per_second > 0.0);
    assert_false(listener.went_back);
    struct base_arena *arena = base_arena_new(0);
    struct store_star star;
    struct store_light_curve *curves = NULL;
    struct store_segment *segments = NULL;
    struct store_points points;
    size_t count = 0;
    assert_ok(store_star_by_name(place.store, arena, "star-0003", &star, &error), error);
    assert_ok(store_light_curves_of_star(place.store, arena, star.id, &curves, &count, &error),
              error);
    assert_int_equal(count, 1);
    assert_int_equal(curves[0].count, POINTS);
    /* The noise that was put in: 1 in 1000. 1,500 points tell it to some per cent. */
    assert_true(fabs(curves[0].noise_point - 1e-3) < 1e-4);
    assert_true(fabs(curves[0].median_flux - 1000.0) < 1.0);
    assert_true(fabs(curves[0].cadence_d - 0.02) < 1e-9);
    assert_ok(store_points_read(place.store, arena, curves[0].id, &points, &error), error);
    for (size_t i = 0; i < points.count; i++)
        assert_true(fabs((double)points.trend[i]) < 1e-3);
    assert_ok(store_segments_of_star(place.store, arena, star.id, &segments, &count, &error),
              error);
    assert_int_equal(count, 2); /* 30 d in segments of 15 */
    assert_true(segments[0].open);
    assert_true(segments[0].first == 0 && segments[1].first + segments[1].count == POINTS);
    assert_int_equal(campaign_figures_now(place.campaign).segments_queued, 10);
    base_arena_free(arena);
    place_close(&place);
}

static void bad_files_among_good_ones_are_refused_with_their_reasons(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[256];
    place_open(&place);
    make_folder(&place, "mixed", folder);
    write_star(folder, 1, POINTS);
    write_star(folder, 2, POINTS);
    write_star(folder, 3, 40);
    write_text(folder, "empty.csv", "");
    write_text(folder, "words.csv", "time,flux\nearly,bright\n");
    write_text(folder, "no-flux.csv", "time,height\n1,2\n");
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_loaded, 2);
    assert_int_equal(result.files_refused, 4);
    assert_int_equal(listener.refused, 4);
    for (unsigned i = 0; i < 4; i++) {
        assert_non_null(strstr(listener.labels[i], "mixed/"));
        assert_true(strlen(listener.reasons[i]) > 10);
    }
    struct base_arena *arena = base_arena_new(0);
    struct store_file *files = NULL;
    size_t count = 0;
    assert_ok(store_batch_files(place.store, arena, 1, 0, 100, &files, &count, &error), error);
    assert_int_equal(count, 6);
    for (size_t i = 0; i < count; i++) {
        bool star = strstr(files[i].label, "star-0001") != NULL ||
                    strstr(files[i].label, "star-0002") != NULL;
        assert_int_equal(files[i].outcome, star ? STORE_FILE_LOADED : STORE_FILE_REFUSED);
        assert_int_equal(files[i].reason[0] == '\0', star);
    }
    base_arena_free(arena);
    place_close(&place);
}

static void the_same_bytes_are_loaded_once(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    struct store_counts counts;
    char folder[256], from[320], to[320];
    place_open(&place);
    make_folder(&place, "stars", folder);
    for (unsigned i = 0; i < 3; i++)
        write_star(folder, i, POINTS);
    /* A twin within the batch: star-0001 under another name. */
    (void)snprintf(from, sizeof from, "%s/star-0001.csv", folder);
    (void)snprintf(to, sizeof to, "%s/twin.csv", folder);
    assert_int_equal(link(from, to), 0);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_loaded, 3);
    assert_int_equal(result.files_repeated, 1);
    assert_ok(load(&place, "second", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_loaded, 0);
    assert_int_equal(result.files_repeated, 4);
    assert_ok(store_count(place.store, &counts, &error), error);
    assert_int_equal(counts.light_curves, 3);
    /* A finished batch keeps its name. */
    assert_false(load(&place, "first", folder, &listener, &result, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
    place_close(&place);
}

static void a_twin_of_a_bad_file_is_refused_too(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[256], from[320], to[320];
    place_open(&place);
    make_folder(&place, "stars", folder);
    write_star(folder, 1, POINTS);
    write_star(folder, 2, 50);
    (void)snprintf(from, sizeof from, "%s/star-0002.csv", folder);
    (void)snprintf(to, sizeof to, "%s/twin.csv", folder);
    assert_int_equal(link(from, to), 0);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_refused, 2);
    assert_int_equal(result.files_repeated, 0);
    place_close(&place);
}

static void stars_of_one_file_that_cannot_be_used_are_left_out(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char path[320];
    const char *const paths[] = {path};
    place_open(&place);
    (void)snprintf(path, sizeof path, "%s/many.csv", place.folder);
    FILE *file = fopen(path, "w");
    (void)fprintf(file, "star,time,flux\n");
    for (unsigned star = 0; star < 4; star++)
        for (unsigned i = 0; i < (star == 2 ? 20u : 400u); i++)
            (void)fprintf(file, "RB-%04u,%.3f,%.3f\n", star, 0.05 * i, 1.0 + 1e-3 * (i % 7));
    (void)fclose(file);
    char catalogue[320];
    (void)snprintf(catalogue, sizeof catalogue, "%s/stars.catalogue", place.folder);
    file = fopen(catalogue, "w");
    (void)fprintf(file, "star,ra,dec,radius\nRB-0001,123.5,-4.25,0.8\n");
    (void)fclose(file);
    const struct campaign_load_options options = {.batch = "first",
                                                  .paths = paths,
                                                  .path_count = 1,
                                                  .catalogue = catalogue,
                                                  .refused = hear_refused,
                                                  .context = &listener};
    assert_ok(campaign_load(place.campaign, &options, &result, &error), error);
    assert_int_equal(result.files_loaded, 1);
    assert_int_equal(result.files_refused, 0);
    assert_int_equal(result.stars, 3);
    assert_int_equal(result.stars_left_out, 1);
    assert_int_equal(listener.refused, 1);
    assert_non_null(strstr(listener.reasons[0], "1 of 4 stars"));
    struct base_arena *arena = base_arena_new(0);
    struct store_star star;
    assert_ok(store_star_by_name(place.store, arena, "RB-0001", &star, &error), error);
    assert_true(star.properties.ra_deg == 123.5 && star.properties.radius_rsun == 0.8);
    assert_true(isnan(star.properties.magnitude));
    base_arena_free(arena);
    place_close(&place);
}

static void a_path_that_is_not_there_begins_nothing(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    struct store_batch *batches = NULL;
    size_t count = 1;
    place_open(&place);
    assert_false(load(&place, "first", "/tmp/ebbmark-no-such-folder", &listener, &result, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    struct base_arena *arena = base_arena_new(0);
    assert_ok(store_batches_list(place.store, arena, &batches, &count, &error), error);
    assert_int_equal(count, 0);
    base_arena_free(arena);
    place_close(&place);
}

static void a_batch_of_which_nothing_loads_can_be_mended(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[256];
    place_open(&place);
    make_folder(&place, "stars", folder);
    write_star(folder, 1, 50);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_refused, 1);
    write_star(folder, 1, POINTS);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_loaded, 1);
    struct base_arena *arena = base_arena_new(0);
    struct store_file *files = NULL;
    size_t count = 0;
    assert_ok(store_batch_files(place.store, arena, 1, 0, 10, &files, &count, &error), error);
    assert_int_equal(count, 1);
    assert_int_equal(files[0].outcome, STORE_FILE_LOADED);
    base_arena_free(arena);
    place_close(&place);
}

/* Every star once, with one light curve, and the batch ready. */
static void assert_whole(struct place *place, size_t stars)
{
    struct base_error error = {0};
    struct store_counts counts;
    struct store_batch *batches = NULL;
    size_t count = 0;
    struct base_arena *arena = base_arena_new(0);
    assert_ok(store_count(place->store, &counts, &error), error);
    assert_int_equal(counts.stars, stars);
    assert_int_equal(counts.light_curves, stars);
    assert_ok(store_batches_list(place->store, arena, &batches, &count, &error), error);
    assert_int_equal(count, 1);
    assert_int_equal(batches[0].state, STORE_BATCH_READY);
    assert_int_equal(batches[0].files_loaded, stars);
    base_arena_free(arena);
}

static void a_stopped_load_goes_on_where_it_was(void **state)
{
    (void)state;
    enum { STARS = 260 };
    struct place place;
    struct campaign_load_progress result;
    struct base_error error = {0};
    struct store_counts counts;
    char folder[256];
    place_open(&place);
    make_folder(&place, "stars", folder);
    for (unsigned i = 0; i < STARS; i++)
        write_star(folder, i, 200);
    struct listener listener = {.stop_at = 3};
    assert_false(load(&place, "first", folder, &listener, &result, &error));
    assert_int_equal(error.kind, BASE_CANCELLED);
    assert_in_range(result.files_loaded, 1, STARS - 1);
    /* What was told is on the disk, and nobody is handed any of it yet. */
    assert_ok(store_count(place.store, &counts, &error), error);
    assert_int_equal(counts.light_curves, result.files_loaded);
    assert_int_equal(counts.open_segments, 0);
    uint64_t before = result.files_loaded;
    place_shut(&place);
    place_open_again(&place);
    listener = (struct listener){0};
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_int_equal(result.files_repeated, before);
    assert_int_equal(result.files_loaded, STARS - before);
    assert_whole(&place, STARS);
    assert_int_equal(campaign_figures_now(place.campaign).segments_queued, STARS);
    place_close(&place);
}

static void a_full_disk_leaves_a_batch_that_can_be_resumed(void **state)
{
    enum { STARS = 300 };
    const char *disk = *state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[] = "/tmp/ebbmark-campaign-stars-XXXXXX";
    if (disk == NULL) {
        print_message("a small disk could not be mounted here; that needs root\n");
        skip();
    }
    assert_non_null(mkdtemp(folder));
    for (unsigned i = 0; i < STARS; i++)
        write_star(folder, i, POINTS);
    place_open_in(&place, disk);
    assert_false(load(&place, "first", folder, &listener, &result, &error));
    assert_int_equal(error.kind, BASE_DISK_FULL);
    assert_true(result.files_loaded < STARS);
    assert_int_equal(mount("tmpfs", disk, "tmpfs", MS_REMOUNT, "size=80m"), 0);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_whole(&place, STARS);
    place_close(&place);
    folder_remove(folder);
}

/* Without a pool all runs on the calling thread; the result is the same. */
static void a_load_needs_no_pool(void **state)
{
    (void)state;
    struct place place;
    struct listener listener = {0};
    struct campaign_load_progress result;
    struct base_error error = {0};
    char folder[256];
    place_open(&place);
    place_shut(&place);
    base_pool_close(place.pool);
    place.pool = NULL;
    place_open_again(&place);
    make_folder(&place, "stars", folder);
    for (unsigned i = 0; i < 100; i++)
        write_star(folder, i, 200);
    assert_ok(load(&place, "first", folder, &listener, &result, &error), error);
    assert_whole(&place, 100);
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_folder_is_loaded_with_its_segments_trend_and_noise),
        cmocka_unit_test(bad_files_among_good_ones_are_refused_with_their_reasons),
        cmocka_unit_test(the_same_bytes_are_loaded_once),
        cmocka_unit_test(a_twin_of_a_bad_file_is_refused_too),
        cmocka_unit_test(stars_of_one_file_that_cannot_be_used_are_left_out),
        cmocka_unit_test(a_path_that_is_not_there_begins_nothing),
        cmocka_unit_test(a_batch_of_which_nothing_loads_can_be_mended),
        cmocka_unit_test(a_stopped_load_goes_on_where_it_was),
        cmocka_unit_test_setup_teardown(a_full_disk_leaves_a_batch_that_can_be_resumed, mount_disk,
                                        unmount_disk),
        cmocka_unit_test(a_load_needs_no_pool),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
