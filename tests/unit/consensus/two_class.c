#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/consensus_model.h"

/* A generator of the test's own, so that every machine sees the same looks. */
static double draw(uint64_t *state)
{
    *state = *state * 6364136223846793005u + 1442695040888963407u;
    return (double)(*state >> 11) / 9007199254740992.0;
}

struct scene {
    struct consensus_item *items;
    struct consensus_look *looks;
    double *days;
    struct consensus_input input;
};

static struct scene scene_new(size_t items, size_t looks, size_t people)
{
    struct scene scene = {.items = calloc(items + 1, sizeof *scene.items),
                          .looks = calloc(looks + 1, sizeof *scene.looks),
                          .days = calloc(people + 1, sizeof *scene.days)};
    assert_true(scene.items != NULL && scene.looks != NULL && scene.days != NULL);
    for (size_t j = 0; j < people; j++)
        scene.days[j] = 27.0;
    scene.input = (struct consensus_input){.items = scene.items,
                                           .looks = scene.looks,
                                           .people = people,
                                           .days_looked = scene.days,
                                           .days_total = 27.0};
    return scene;
}

static void scene_free(struct scene *scene)
{
    free(scene->items);
    free(scene->looks);
    free(scene->days);
}

static void put_item(struct scene *scene, uint8_t known)
{
    scene->items[scene->input.item_count++] = (struct consensus_item){
        .first_look = scene->input.look_count, .snr = NAN, .duration_d = 0.2, .known = known};
}

static void put_look(struct scene *scene, int32_t person, bool marked)
{
    scene->looks[scene->input.look_count++] =
        (struct consensus_look){.person = person, .marked = marked, .sure = marked};
    scene->items[scene->input.item_count - 1].looks++;
}

static struct consensus_output fit(const struct scene *scene)
{
    struct consensus_output out;
    struct base_error error = {0};
    const struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    assert_true(consensus_fit_two_class(&scene->input, &settings, &out, &error));
    for (size_t i = 0; i < scene->input.item_count; i++)
        assert_true(out.answers[i].probability >= 0.0 && out.answers[i].probability <= 1.0 &&
                    isfinite(out.answers[i].log_odds));
    for (size_t j = 0; j < scene->input.people; j++) {
        const struct consensus_rate *hit = &out.skills[j].hit, *chance = &out.skills[j].chance;
        assert_true(hit->low >= 0.0 && hit->low <= hit->value && hit->value <= hit->high &&
                    hit->high <= 1.0);
        assert_true(chance->low >= 0.0 && chance->low <= chance->value &&
                    chance->value <= chance->high && chance->high <= 1.0);
    }
    return out;
}

/* One star in two segments, ten reviewers with a review of each; nine dips in each that nearly all
 * mark, and some places that one or two marked. */
static void a_star_seen_by_ten_has_its_dips_and_not_the_chance_marks(void **state)
{
    (void)state;
    for (uint64_t seed = 1; seed <= 20; seed++) {
        uint64_t random = seed;
        struct scene scene = scene_new(24, 240, 10);
        for (int g = 0; g < 24; g++) {
            put_item(&scene, CONSENSUS_FREE);
            int32_t first = (int32_t)(10.0 * draw(&random));
            bool second = draw(&random) < 0.4;
            for (int32_t j = 0; j < 10; j++)
                put_look(&scene, j,
                         g < 18 ? draw(&random) < 0.93
                                : j == first || (second && j == (first + 1) % 10));
        }
        struct consensus_output out = fit(&scene);
        for (int g = 0; g < 18; g++)
            assert_true(out.answers[g].probability > 0.9);
        for (int g = 18; g < 24; g++)
            assert_true(out.answers[g].probability < 0.5);
        consensus_output_free(&out);
        scene_free(&scene);
    }
}

static void nobody_and_nothing_give_an_empty_answer(void **state)
{
    (void)state;
    struct scene scene = scene_new(1, 1, 0);
    struct consensus_output out = fit(&scene);
    assert_true(isfinite(out.prior) && isfinite(out.log_likelihood) && out.converged);
    consensus_output_free(&out);
    put_item(&scene, CONSENSUS_FREE);
    out = fit(&scene);
    consensus_output_free(&out);
    scene_free(&scene);
}

static void a_newcomer_is_near_the_crowd(void **state)
{
    (void)state;
    uint64_t random = 4;
    struct scene scene = scene_new(101, 1100, 11);
    for (int g = 0; g < 100; g++) {
        put_item(&scene, CONSENSUS_FREE);
        bool dip = draw(&random) < 0.4;
        for (int32_t j = 0; j < 10; j++)
            put_look(&scene, j, draw(&random) < (dip ? 0.8 : 0.1));
    }
    put_item(&scene, CONSENSUS_FREE);
    put_look(&scene, 10, false);
    struct consensus_output out = fit(&scene);
    assert_true(fabs(out.skills[10].hit.value - 0.8) < 0.15);
    assert_true(out.skills[10].hit.high - out.skills[10].hit.low >
                2.0 * (out.skills[0].hit.high - out.skills[0].hit.low));
    consensus_output_free(&out);
    scene_free(&scene);
}

static void known_answers_are_kept_and_teach(void **state)
{
    (void)state;
    struct scene scene = scene_new(60, 180, 3);
    for (int g = 0; g < 60; g++) {
        put_item(&scene, g < 20 ? CONSENSUS_DIP : g < 40 ? CONSENSUS_NOT_DIP : CONSENSUS_FREE);
        bool dip = g < 20 || (g >= 40 && g % 2 == 0);
        put_look(&scene, 0, dip);
        put_look(&scene, 1, !dip);
        put_look(&scene, 2, g % 3 == 0);
    }
    struct consensus_output out = fit(&scene);
    for (int g = 0; g < 60; g++) {
        if (g < 20)
            assert_true(out.answers[g].probability == 1.0);
        else if (g < 40)
            assert_true(out.answers[g].probability == 0.0);
        else
            assert_true((out.answers[g].probability > 0.5) == (g % 2 == 0));
    }
    assert_true(out.skills[0].hit.value > 0.8 && out.skills[1].chance.value > 0.8);
    assert_true(out.skills[0].weight > out.skills[1].weight);
    consensus_output_free(&out);
    scene_free(&scene);
}

static void an_index_out_of_range_is_refused(void **state)
{
    (void)state;
    struct scene scene = scene_new(1, 1, 1);
    put_item(&scene, CONSENSUS_FREE);
    put_look(&scene, 0, true);
    scene.looks[0].person = 1;
    struct consensus_output out;
    struct base_error error = {0};
    const struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    assert_false(consensus_fit_two_class(&scene.input, &settings, &out, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    scene.looks[0].person = 0;
    scene.items[0].looks = 2;
    assert_false(consensus_fit_two_class(&scene.input, &settings, &out, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    scene_free(&scene);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_star_seen_by_ten_has_its_dips_and_not_the_chance_marks),
        cmocka_unit_test(nobody_and_nothing_give_an_empty_answer),
        cmocka_unit_test(a_newcomer_is_near_the_crowd),
        cmocka_unit_test(known_answers_are_kept_and_teach),
        cmocka_unit_test(an_index_out_of_range_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
