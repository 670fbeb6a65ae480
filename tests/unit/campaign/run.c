/* Consensus runs: who is counted, what is kept, and that the same reviews give the same bits. */
#include "support.h"

#include <gsl/gsl_randist.h>
#include <math.h>

#include "../../../server/campaign/run.h"

struct scene {
    struct place place;
    struct base_arena *arena;
    int64_t people[16];
    uint64_t sent;
};

static void start(struct scene *scene, unsigned stars, unsigned segments, unsigned people)
{
    struct base_error error = {0};
    *scene = (struct scene){0};
    place_open(&scene->place);
    (void)add_flat_stars(&scene->place, "first", 1, stars, segments);
    assert_ok(handout_refresh(scene->place.campaign->handout, &error), error);
    change_setting(&scene->place, "run_after_reviews", "0");
    change_setting(&scene->place, "run_after_minutes", "0");
    for (unsigned i = 0; i < people; i++) {
        char handle[32];
        (void)snprintf(handle, sizeof handle, "person %u", i);
        scene->people[i] = add_person(&scene->place, handle);
    }
    scene->arena = base_arena_new(0);
}

static void stop(struct scene *scene)
{
    base_arena_free(scene->arena);
    place_close(&scene->place);
}

static struct store_mark box(double starts, double ends)
{
    return (struct store_mark){
        .starts_d = starts, .ends_d = ends, .low = 0.99, .high = 1.0, .sure = true};
}

static void look(struct scene *scene, unsigned person, int64_t segment,
                 const struct store_mark *marks, size_t count)
{
    review_segment(&scene->place, scene->people[person], segment, ++scene->sent, marks, count);
}

static int64_t run(struct scene *scene)
{
    struct base_error error = {0};
    int64_t number = 0;
    assert_ok(campaign_run(scene->place.campaign, NULL, NULL, &number, &error), error);
    return number;
}

static struct store_candidate *candidates(struct scene *scene, int64_t number, size_t *count)
{
    struct base_error error = {0};
    struct store_candidate *rows = NULL;
    const struct store_candidate_query query = {.run = number,
                                                .star = "",
                                                .batch = "",
                                                .verdict = "",
                                                .order = STORE_BY_TIME,
                                                .ascending = true};
    assert_ok(
        store_candidates_find(scene->place.store, scene->arena, &query, &rows, count, NULL, &error),
        error);
    return rows;
}

static void a_run_over_nothing_is_a_run(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct store_run stored;
    size_t count = 1;
    start(&scene, 1, 1, 0);
    int64_t number = run(&scene);
    (void)candidates(&scene, number, &count);
    assert_int_equal(count, 0);
    assert_ok(store_run_read(scene.place.store, scene.arena, number, &stored, &error), error);
    assert_int_equal(stored.reviews, 0);
    assert_non_null(strstr(stored.fit, "\"groups\":0"));
    assert_non_null(strstr(stored.settings, "\"method\":"));
    stop(&scene);
}

static void everybody_who_looked_counts_once(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0;
    start(&scene, 1, 2, 6);
    /* Segments are 0 to 9.75 d and 10 to 19.75 d. A dip at 5 d that three of five mark. */
    const struct store_mark marks[] = {box(4.9, 5.1), box(4.88, 5.12), box(4.92, 5.2)};
    for (unsigned i = 0; i < 3; i++)
        look(&scene, i, 1, &marks[i], 1);
    look(&scene, 3, 1, NULL, 0);
    look(&scene, 4, 1, NULL, 0);
    /* One who looked at the other segment only, and one who looked twice at this. */
    look(&scene, 5, 2, NULL, 0);
    look(&scene, 4, 1, NULL, 0);
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_int_equal(count, 1);
    assert_int_equal(found[0].looks, 5);
    assert_int_equal(found[0].marks, 3);
    assert_int_equal(found[0].id, 1);
    /* The middle of three: equal weights, or nearly so. */
    assert_true(found[0].starts_d == 4.9 && found[0].ends_d == 5.12);
    assert_true(found[0].spread_starts_d > 0.0);
    assert_true(found[0].probability > 0.0 && found[0].probability < 1.0);
    assert_int_equal(found[0].transits, 1);
    assert_true(isnan(found[0].period_d));
    stop(&scene);
}

/* A light curve whose second segment begins before the first ends: marks meet in the overlap. */
static void add_overlapping_star(struct scene *scene, const char *name, const char *reference)
{
    static double time[400];
    static float zero[400];
    struct base_error error = {0};
    int64_t id = 0;
    bool resumed;
    static unsigned batch = 0;
    char batch_name[32], label[64];
    (void)snprintf(batch_name, sizeof batch_name, "batch %u", ++batch);
    (void)snprintf(label, sizeof label, "%u %s", batch, name);
    for (size_t i = 0; i < 400; i++)
        time[i] = 0.05 * (double)i;
    const struct store_span spans[] = {{0, 220, 0.0, 10.95}, {200, 200, 10.0, 19.95}};
    const struct store_light_curve_new curve = {.star = {name, NAN, NAN, NAN, NAN, NAN, NAN},
                                                .time_reference = reference,
                                                .points = {400, time, zero, zero, NULL},
                                                .median_flux = 1.0,
                                                .cadence_d = 0.05,
                                                .noise_point = 1e-3,
                                                .noise_window = {1e-3, 1e-3, 1e-3, 1e-3},
                                                .segments = spans,
                                                .segment_count = 2};
    struct store_file_new file = {.label = label,
                                  .reason = "",
                                  .outcome = STORE_FILE_LOADED,
                                  .bytes = 1,
                                  .curves = &curve,
                                  .curve_count = 1};
    (void)snprintf((char *)file.sha256, sizeof file.sha256, "%.30s", label);
    assert_ok(store_batch_begin(scene->place.store, batch_name, "a test", 1, &id, &resumed, &error),
              error);
    file.batch = id;
    assert_ok(store_files_add(scene->place.store, &file, 1, &error), error);
    assert_ok(store_batch_finish(scene->place.store, id, 2, &error), error);
    assert_ok(handout_refresh(scene->place.campaign->handout, &error), error);
}

static void marks_in_overlapping_segments_meet(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0;
    start(&scene, 0, 1, 4);
    add_overlapping_star(&scene, "RB-9001", "BJD_TDB - 2457000");
    const struct store_mark mark = box(10.3, 10.6);
    look(&scene, 0, 1, &mark, 1);
    look(&scene, 0, 2, &mark, 1); /* the same person, the same dip, on the other segment */
    look(&scene, 1, 2, &mark, 1);
    look(&scene, 2, 1, NULL, 0);
    look(&scene, 2, 2, NULL, 0);
    /* 10.9 to 11.4 d: segment 1 covers a tenth of it, so who saw only that did not see it. */
    const struct store_mark edge = box(10.9, 11.4);
    look(&scene, 3, 2, &edge, 1);
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_int_equal(count, 2);
    assert_int_equal(found[0].looks, 4);
    assert_int_equal(found[0].marks, 2); /* people, not marks */
    struct store_candidate_mark *members = NULL;
    size_t member_count = 0;
    struct base_error error = {0};
    assert_ok(store_candidate_marks(scene.place.store, scene.arena, 0, found[0].id, &members,
                                    &member_count, &error),
              error);
    assert_int_equal(member_count, 3);
    assert_int_equal(found[1].looks, 4);
    assert_int_equal(found[1].marks, 1);
    stop(&scene);
}

static void one_who_saw_less_than_half_is_not_counted(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0;
    start(&scene, 0, 1, 2);
    add_overlapping_star(&scene, "RB-9001", "BJD_TDB - 2457000");
    const struct store_mark edge = box(10.9, 11.4);
    look(&scene, 0, 1, NULL, 0); /* up to 10.95 d */
    look(&scene, 1, 2, &edge, 1);
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_int_equal(count, 1);
    assert_int_equal(found[0].looks, 1);
    stop(&scene);
}

static void times_of_two_references_never_meet(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0;
    start(&scene, 0, 1, 2);
    add_overlapping_star(&scene, "RB-9001", "BJD_TDB - 2457000");
    add_overlapping_star(&scene, "RB-9001", "HJD_UTC - 2400000");
    const struct store_mark mark = box(5.0, 5.3);
    look(&scene, 0, 1, &mark, 1);
    look(&scene, 1, 3, &mark, 1); /* the first segment of the second light curve */
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_int_equal(count, 2);
    assert_string_not_equal(found[0].time_reference, found[1].time_reference);
    assert_int_equal(found[0].looks, 1);
    assert_int_equal(found[1].looks, 1);
    /* Nor do they count as dips of other stars, which they are not. */
    assert_int_equal(found[0].other_stars, 0);
    stop(&scene);
}

static void dips_of_other_stars_at_the_same_time_are_counted(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0;
    start(&scene, 5, 1, 4);
    /* Four stars dip together, one at another time; everybody marks all of it. */
    for (unsigned person = 0; person < 4; person++)
        for (int64_t star = 1; star <= 5; star++) {
            const struct store_mark marks[] = {
                star < 5 ? box(3.0, 3.2) : box(6.0, 6.2),
                box(8.0 + 0.3 * (double)star, 8.2 + 0.3 * (double)star)};
            look(&scene, person, star, marks, 2);
        }
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_int_equal(count, 10);
    unsigned together = 0;
    for (size_t i = 0; i < count; i++) {
        bool same_time = found[i].starts_d < 4.0;
        together += same_time ? 1 : 0;
        if (found[i].probability < 0.5)
            fail_msg("marked by all, and yet %f", found[i].probability);
        assert_int_equal(found[i].other_stars, same_time ? 3 : 0);
    }
    assert_int_equal(together, 4);
    stop(&scene);
}

/* ---- the same bits ---- */

/* Reviews as people would make them: dips at fixed places, marked with sloppy edges by most, and
 * chance marks. */
static void make_crowd(struct scene *scene, unsigned stars, unsigned segments, unsigned people)
{
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    gsl_rng_set(random, 11);
    for (int64_t segment = 1; segment <= (int64_t)stars * segments; segment++)
        for (unsigned person = 0; person < people; person++) {
            double begins = 10.0 * (double)((segment - 1) % segments);
            struct store_mark marks[4];
            size_t count = 0;
            for (unsigned dip = 0; dip < 2; dip++) {
                double mid = begins + 2.0 + 4.0 * dip + 0.1 * (double)(segment % 7);
                if (gsl_rng_uniform(random) < 0.75 - 0.03 * person)
                    marks[count++] = box(mid - 0.15 - gsl_ran_gaussian(random, 0.03),
                                         mid + 0.15 + gsl_ran_gaussian(random, 0.03));
            }
            if (gsl_rng_uniform(random) < 0.2) {
                double at = begins + 9.0 * gsl_rng_uniform(random);
                marks[count++] = box(at, at + 0.25);
            }
            look(scene, person, segment, marks, count);
        }
    gsl_rng_free(random);
}

/* Same values, bit for bit; NAN equals NAN. Texts and the run's number are left out. */
static void assert_same_candidate(const struct store_candidate *a, const struct store_candidate *b)
{
    const double left[] = {a->starts_d,
                           a->ends_d,
                           a->mid_d,
                           a->mid_error_d,
                           a->probability,
                           a->log_odds,
                           a->term_looks,
                           a->term_time,
                           a->term_snr,
                           a->term_prior,
                           a->snr,
                           a->depth_ppm,
                           a->depth_error_ppm,
                           a->duration_h,
                           a->duration_error_h,
                           a->ingress_fraction,
                           a->covered,
                           a->gap_distance_d,
                           a->asymmetry,
                           a->spread_starts_d,
                           a->spread_ends_d,
                           a->marks_only_probability};
    const double right[] = {b->starts_d,
                            b->ends_d,
                            b->mid_d,
                            b->mid_error_d,
                            b->probability,
                            b->log_odds,
                            b->term_looks,
                            b->term_time,
                            b->term_snr,
                            b->term_prior,
                            b->snr,
                            b->depth_ppm,
                            b->depth_error_ppm,
                            b->duration_h,
                            b->duration_error_h,
                            b->ingress_fraction,
                            b->covered,
                            b->gap_distance_d,
                            b->asymmetry,
                            b->spread_starts_d,
                            b->spread_ends_d,
                            b->marks_only_probability};
    for (size_t i = 0; i < sizeof left / sizeof left[0]; i++)
        if (isnan(left[i]))
            assert_true(isnan(right[i]));
        else
            assert_memory_equal(&left[i], &right[i], sizeof left[i]);
    assert_int_equal(a->id, b->id);
    assert_int_equal(a->star, b->star);
    assert_int_equal(a->light_curve, b->light_curve);
    assert_int_equal(a->looks, b->looks);
    assert_int_equal(a->marks, b->marks);
    assert_int_equal(a->flags, b->flags);
    assert_int_equal(a->other_stars, b->other_stars);
}

static void two_runs_over_the_same_reviews_are_the_same(void **state)
{
    (void)state;
    struct scene scene;
    size_t count = 0, again_count = 0;
    start(&scene, 20, 3, 7);
    make_crowd(&scene, 20, 3, 7);
    int64_t first = run(&scene), second = run(&scene);
    assert_int_equal(second, first + 1);
    const struct store_candidate *one = candidates(&scene, first, &count);
    const struct store_candidate *two = candidates(&scene, second, &again_count);
    assert_true(count > 120);
    assert_int_equal(count, again_count);
    for (size_t i = 0; i < count; i++)
        assert_same_candidate(&one[i], &two[i]);
    stop(&scene);
}

static void the_number_of_threads_changes_no_bit(void **state)
{
    (void)state;
    static const unsigned threads[] = {0, 1, 5};
    struct scene scene;
    size_t count = 0;
    start(&scene, 20, 3, 7);
    make_crowd(&scene, 20, 3, 7);
    const struct store_candidate *one = candidates(&scene, run(&scene), &count);
    for (size_t t = 0; t < 3; t++) {
        struct base_error error = {0};
        size_t other_count = 0;
        place_shut(&scene.place);
        base_pool_close(scene.place.pool);
        scene.place.pool = NULL;
        if (threads[t] > 0)
            assert_ok(base_pool_open(&scene.place.pool, threads[t], 64, &error), error);
        place_open_again(&scene.place);
        const struct store_candidate *other = candidates(&scene, run(&scene), &other_count);
        assert_int_equal(count, other_count);
        for (size_t i = 0; i < count; i++)
            assert_same_candidate(&one[i], &other[i]);
    }
    stop(&scene);
}

static int by_time(const void *a, const void *b)
{
    const struct store_candidate *left = a, *right = b;
    if (left->mid_d < right->mid_d || left->mid_d > right->mid_d)
        return left->mid_d < right->mid_d ? -1 : 1;
    return (left->id > right->id) - (left->id < right->id);
}

static void a_past_run_can_be_computed_again(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct run_result result;
    struct store_run stored;
    size_t count = 0;
    start(&scene, 10, 2, 8);
    make_crowd(&scene, 10, 2, 5);
    int64_t first = run(&scene);
    const struct store_candidate *then = candidates(&scene, first, &count);
    const struct store_mark more = box(1.0, 1.4);
    for (unsigned person = 5; person < 8; person++)
        for (int64_t segment = 1; segment <= 20; segment += 2)
            look(&scene, person, segment, &more, 1);
    (void)run(&scene);
    assert_ok(store_run_read(scene.place.store, scene.arena, first, &stored, &error), error);
    const struct run_order order = {0};
    assert_ok(run_compute(scene.place.campaign, &order, stored.newest_review, &result, &error),
              error);
    assert_int_equal(result.sum.candidates.count, count);
    struct store_candidate *now = result.sum.candidates.items;
    qsort(now, count, sizeof *now, by_time);
    for (size_t i = 0; i < count; i++)
        assert_same_candidate(&then[i], &now[i]);
    run_result_free(&result);
    stop(&scene);
}

static void every_mark_is_in_one_candidate_named_by_its_oldest(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct store_counts counts;
    size_t count = 0, marks = 0;
    start(&scene, 10, 3, 6);
    make_crowd(&scene, 10, 3, 6);
    const struct store_candidate *found = candidates(&scene, run(&scene), &count);
    assert_ok(store_count(scene.place.store, &counts, &error), error);
    bool *seen = calloc((size_t)counts.marks + 1, sizeof *seen);
    assert_non_null(seen);
    for (size_t i = 0; i < count; i++) {
        struct store_candidate_mark *members = NULL;
        size_t member_count = 0;
        assert_ok(store_candidate_marks(scene.place.store, scene.arena, 0, found[i].id, &members,
                                        &member_count, &error),
                  error);
        assert_true(member_count >= 1 && found[i].marks <= (int64_t)member_count);
        assert_true(found[i].looks >= found[i].marks);
        for (size_t m = 0; m < member_count; m++) {
            assert_true(members[m].mark.id >= found[i].id);
            assert_false(seen[members[m].mark.id]);
            seen[members[m].mark.id] = true;
        }
        assert_true(seen[found[i].id]);
        marks += member_count;
    }
    assert_int_equal(marks, counts.marks);
    free(seen);
    stop(&scene);
}

static void skills_add_up_what_people_did(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct store_skill *skills = NULL;
    size_t count = 0;
    int64_t marks = 0;
    struct store_counts counts;
    start(&scene, 6, 3, 4);
    make_crowd(&scene, 6, 3, 4);
    (void)run(&scene);
    assert_ok(store_skills_list(scene.place.store, scene.arena, 0, &skills, &count, &error), error);
    assert_ok(store_count(scene.place.store, &counts, &error), error);
    assert_int_equal(count, 4);
    for (size_t i = 0; i < count; i++) {
        assert_int_equal(skills[i].looks, 18);
        assert_true(fabs(skills[i].days_looked - 18 * 9.75) < 1e-9);
        assert_true(skills[i].hit_low <= skills[i].hit && skills[i].hit <= skills[i].hit_high);
        marks += skills[i].marks;
    }
    assert_int_equal(marks, counts.marks);
    stop(&scene);
}

/* ---- settling ---- */

static bool is_open(struct scene *scene, int64_t segment)
{
    struct base_error error = {0};
    struct store_segment read;
    assert_ok(store_segment_by_id(scene->place.store, scene->arena, segment, &read, &error), error);
    assert_int_equal(read.open, handout_is_open(scene->place.campaign->handout, segment));
    return read.open;
}

static void a_segment_settles_when_it_is_decided_and_opens_when_in_doubt(void **state)
{
    (void)state;
    struct scene scene;
    start(&scene, 1, 40, 12);
    change_setting(&scene.place, "looks_least", "4");
    /* A crowd that agrees on 38 segments; segment 39 has too few looks, on segment 40 half of the
     * people see something. */
    for (unsigned person = 0; person < 6; person++)
        for (int64_t segment = 1; segment <= 40; segment++) {
            double begins = 10.0 * (double)(segment - 1);
            struct store_mark dip = box(begins + 3.0, begins + 3.3);
            struct store_mark doubt = box(begins + 6.0, begins + 6.3);
            if (segment == 39 && person >= 3)
                continue;
            if (segment == 40)
                look(&scene, person, segment, &doubt, person % 2 == 0 ? 1 : 0);
            else
                look(&scene, person, segment, &dip, segment % 2 == 0 ? 1 : 0);
        }
    (void)run(&scene);
    for (int64_t segment = 1; segment <= 38; segment++)
        assert_false(is_open(&scene, segment));
    assert_true(is_open(&scene, 39));
    /* Half of an able crowd: whatever it is, a look more would help. */
    size_t count = 0;
    const struct store_candidate *found = candidates(&scene, 0, &count);
    double doubtful = found[count - 1].probability;
    assert_int_equal(is_open(&scene, 40), doubtful >= 0.02 && doubtful <= 0.98);
    /* New marks on a settled segment, by people who held it from before: doubt again. */
    const struct store_mark late = box(5.0, 5.3);
    for (unsigned person = 6; person < 12; person++)
        look(&scene, person, 1, &late, person % 2 == 0 ? 1 : 0);
    (void)run(&scene);
    found = candidates(&scene, 0, &count);
    double again = NAN;
    for (size_t i = 0; i < count; i++)
        if (found[i].starts_d > 4.9 && found[i].ends_d < 5.4)
            again = found[i].probability;
    assert_true(again >= 0.0);
    assert_int_equal(is_open(&scene, 1), again >= 0.02 && again <= 0.98);
    stop(&scene);
}

/* The decision itself, with probabilities set by hand: closed when sure, opened when in doubt, and
 * never opened where the batch was withdrawn. */
static void doubt_alone_opens_a_settled_segment(void **state)
{
    (void)state;
    struct scene scene;
    struct base_error error = {0};
    struct run_result result;
    const struct run_order order = {0};
    start(&scene, 1, 2, 6);
    change_setting(&scene.place, "looks_least", "2");
    const struct store_mark mark = box(3.0, 3.3);
    for (unsigned person = 0; person < 6; person++)
        look(&scene, person, 1, &mark, 1);
    assert_ok(run_compute(scene.place.campaign, &order, 6, &result, &error), error);
    struct store_candidate *only = result.sum.candidates.items;
    assert_int_equal(result.sum.candidates.count, 1);
    for (size_t i = 0; i < result.people_count; i++)
        result.fit.skills[i].hit.value = 0.9;
    only->probability = 0.999;
    assert_ok(run_settle(scene.place.campaign, &result, &error), error);
    assert_false(is_open(&scene, 1));
    assert_true(is_open(&scene, 2));
    only->probability = 0.5;
    assert_ok(run_settle(scene.place.campaign, &result, &error), error);
    assert_true(is_open(&scene, 1));
    only->probability = 0.001;
    assert_ok(run_settle(scene.place.campaign, &result, &error), error);
    assert_false(is_open(&scene, 1));
    /* People who find one dip in ten may have missed it all: more looks. */
    for (size_t i = 0; i < result.people_count; i++)
        result.fit.skills[i].hit.value = 0.1;
    only->probability = 0.999;
    assert_ok(run_settle(scene.place.campaign, &result, &error), error);
    assert_true(is_open(&scene, 1));
    assert_ok(campaign_batch_withdraw(scene.place.campaign, 1, &error), error);
    assert_ok(run_settle(scene.place.campaign, &result, &error), error);
    assert_false(is_open(&scene, 1));
    run_result_free(&result);
    stop(&scene);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_run_over_nothing_is_a_run),
        cmocka_unit_test(everybody_who_looked_counts_once),
        cmocka_unit_test(marks_in_overlapping_segments_meet),
        cmocka_unit_test(one_who_saw_less_than_half_is_not_counted),
        cmocka_unit_test(times_of_two_references_never_meet),
        cmocka_unit_test(dips_of_other_stars_at_the_same_time_are_counted),
        cmocka_unit_test(two_runs_over_the_same_reviews_are_the_same),
        cmocka_unit_test(the_number_of_threads_changes_no_bit),
        cmocka_unit_test(a_past_run_can_be_computed_again),
        cmocka_unit_test(every_mark_is_in_one_candidate_named_by_its_oldest),
        cmocka_unit_test(skills_add_up_what_people_did),
        cmocka_unit_test(a_segment_settles_when_it_is_decided_and_opens_when_in_doubt),
        cmocka_unit_test(doubt_alone_opens_a_settled_segment),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
