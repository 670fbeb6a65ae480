#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <gsl/gsl_randist.h>
#include <math.h>

#include "ebbmark/rehearse.h"

#define POINTS 720 /* 15 d at half an hour */

struct scene {
    double time[POINTS], flux[POINTS];
    gsl_rng *random;
};

/* A star that varies by 0.3 %, with noise of 300 ppm and one dip of 5,000 ppm and 5 h at day 7. */
static void paint(struct scene *scene, double depth)
{
    scene->random = gsl_rng_alloc(gsl_rng_mt19937);
    gsl_rng_set(scene->random, 7);
    for (size_t i = 0; i < POINTS; i++) {
        double t = (double)i / 48.0;
        scene->time[i] = t;
        scene->flux[i] = 1.0 + 0.003 * sin(t * 1.1) + gsl_ran_gaussian(scene->random, 3e-4);
        if (fabs(t - 7.0) < 2.5 / 24.0)
            scene->flux[i] -= depth;
    }
}

static void a_dip_on_a_changing_star_is_seen_first(void **state)
{
    (void)state;
    struct scene scene;
    paint(&scene, 5e-3);
    struct rehearse_feature found[REHEARSE_FEATURES_MAX];
    size_t count = 0;
    assert_true(rehearse_look(scene.time, scene.flux, POINTS, 5.0, found, &count, NULL));
    assert_true(count >= 1);
    assert_true(found[0].starts_d < 7.0 && found[0].ends_d > 7.0);
    assert_true(fabs(found[0].starts_d - (7.0 - 2.5 / 24.0)) < 0.1);
    assert_true(found[0].depth > 3e-3 && found[0].depth < 6e-3);
    assert_true(found[0].snr > 10.0);
    gsl_rng_free(scene.random);
}

static void where_nothing_is_little_stands_out(void **state)
{
    (void)state;
    struct scene scene;
    paint(&scene, 0.0);
    struct rehearse_feature found[REHEARSE_FEATURES_MAX];
    size_t count = 0;
    assert_true(rehearse_look(scene.time, scene.flux, POINTS, 6.0, found, &count, NULL));
    assert_true(count <= 1);
    gsl_rng_free(scene.random);
}

/* Over many looks a keen reviewer marks a strong dip nearly always, and who never marks never. */
static void characters_differ_in_what_they_mark(void **state)
{
    (void)state;
    struct scene scene;
    paint(&scene, 5e-3);
    struct rehearse_feature found[REHEARSE_FEATURES_MAX];
    struct rehearse_mark marks[50];
    size_t count = 0, keen_marks = 0, never_marks = 0;
    assert_true(rehearse_look(scene.time, scene.flux, POINTS, 5.0, found, &count, NULL));
    const struct rehearse_character keen = {"keen", 2.2, 3.0, 2.4, 0.0, 0.08};
    const struct rehearse_character never = {"never marks", -7.0, 0.0, 0.0, 0.0, 0.1};
    for (int look = 0; look < 200; look++) {
        keen_marks += rehearse_marks(&keen, found, 1, scene.time, scene.flux, POINTS, scene.random,
                                     marks, 50);
        never_marks += rehearse_marks(&never, found, 1, scene.time, scene.flux, POINTS,
                                      scene.random, marks, 50);
    }
    assert_true(keen_marks > 170);
    assert_true(never_marks < 5);
    gsl_rng_free(scene.random);
}

static void every_mark_lies_inside_the_segment(void **state)
{
    (void)state;
    struct scene scene;
    paint(&scene, 5e-3);
    const struct rehearse_character wild = {"random", -2.5, 0.0, 0.3, 2.0, 0.6};
    struct rehearse_mark marks[50];
    for (int look = 0; look < 200; look++) {
        size_t count =
            rehearse_marks(&wild, NULL, 0, scene.time, scene.flux, POINTS, scene.random, marks, 50);
        for (size_t i = 0; i < count; i++) {
            assert_true(marks[i].starts_d >= scene.time[0]);
            assert_true(marks[i].ends_d <= scene.time[POINTS - 1]);
            assert_true(marks[i].starts_d < marks[i].ends_d);
            assert_true(marks[i].low <= marks[i].high);
        }
    }
    gsl_rng_free(scene.random);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_dip_on_a_changing_star_is_seen_first),
        cmocka_unit_test(where_nothing_is_little_stands_out),
        cmocka_unit_test(characters_differ_in_what_they_mark),
        cmocka_unit_test(every_mark_lies_inside_the_segment),
    };
    return cmocka_run_group_tests_name("campaign: rehearsal reviewers", tests, NULL, NULL);
}
