#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include "simulation.h"

/* ---- fitting ---- */

static struct consensus_output fit_with(const struct consensus_input *input,
                                        struct consensus_settings settings)
{
    struct consensus_output out;
    struct base_error error = {0};
    assert_true(consensus_fit(input, &settings, &out, &error));
    return out;
}

static struct consensus_output fit(const struct consensus_input *input)
{
    return fit_with(input, CONSENSUS_SETTINGS_DEFAULT);
}

static void is_rate(const struct consensus_rate *rate, double most)
{
    assert_true(rate->low >= 0.0 && rate->low <= rate->value + 1e-12 &&
                rate->value <= rate->high + 1e-12 && rate->high <= most);
}

/* Everything that comes out is in its range and finite. */
static void is_sane(const struct consensus_input *input, const struct consensus_output *out)
{
    for (size_t g = 0; g < input->item_count; g++) {
        const struct consensus_answer *answer = &out->answers[g];
        assert_true(answer->probability >= 0.0 && answer->probability <= 1.0);
        assert_true(fabs(answer->probability + answer->lure + answer->nothing - 1.0) < 1e-9);
        assert_true(isfinite(answer->log_odds));
        assert_true(fabs(answer->term_looks + answer->term_time + answer->term_snr +
                         answer->term_prior - answer->log_odds) < 1e-6);
        assert_true(answer->marks_only_probability >= 0.0 && answer->marks_only_probability <= 1.0);
        assert_true(answer->low >= 0.0 && answer->low <= answer->probability &&
                    answer->probability <= answer->high && answer->high <= 1.0);
    }
    for (size_t j = 0; j < input->people; j++) {
        const struct consensus_skill *skill = &out->skills[j];
        is_rate(&skill->hit, 1.0);
        is_rate(&skill->hit_snr5, 1.0);
        is_rate(&skill->hit_snr20, 1.0);
        is_rate(&skill->lure, 1.0);
        is_rate(&skill->chance, 1.0);
        is_rate(&skill->chance_per_30_d, INFINITY);
        assert_true(skill->weight >= 0.0 && skill->weight <= 1.0);
        assert_true(skill->hit_snr5.value <= skill->hit.value || out->common.beta < 0.0);
    }
    assert_true(isfinite(out->log_likelihood) && isfinite(out->unmarked_dips));
    assert_true(out->prior > 0.0 && out->prior < 1.0);
}

static struct simulation campaign(uint64_t seed, size_t segments, double looks)
{
    struct sim_settings settings = sim_standard(seed, looks);
    settings.segments = segments;
    return sim_new(&settings);
}

/* ---- small and odd campaigns ---- */

/* One star in two segments, ten reviewers with a review of each; nine dips in each that nearly all
 * mark, and some places that one or two marked. */
static void ten_see_one_star(bool measured, uint64_t seed)
{
    struct consensus_item items[24] = {0};
    struct consensus_look looks[240] = {0};
    double days[10];
    for (int j = 0; j < 10; j++)
        days[j] = 54.0;
    for (size_t g = 0, n = 0; g < 24; g++) {
        bool dip = g < 18;
        double snr = dip ? 8.0 + 10.0 * sim_uniform(&seed) : 1.0 + sim_uniform(&seed);
        items[g] = (struct consensus_item){
            .first_look = n, .looks = 10, .snr = measured ? snr : NAN, .duration_d = 0.2};
        int first = (int)(10.0 * sim_uniform(&seed));
        bool second = sim_uniform(&seed) < 0.4;
        for (int j = 0; j < 10; j++, n++) {
            bool marked =
                dip ? sim_uniform(&seed) < 0.93 : j == first || (second && j == (first + 1) % 10);
            looks[n] = (struct consensus_look){.person = j, .marked = marked, .sure = marked};
            if (marked)
                looks[n].centre_d = (float)((dip ? 0.02 : 0.05) * sim_normal(&seed));
        }
    }
    const struct consensus_input input = {.items = items,
                                          .item_count = 24,
                                          .looks = looks,
                                          .look_count = 240,
                                          .people = 10,
                                          .days_looked = days,
                                          .days_total = 54.0};
    struct consensus_output out = fit(&input);
    is_sane(&input, &out);
    for (size_t g = 0; g < 24; g++)
        assert_true(g < 18 ? out.answers[g].probability > 0.9 : out.answers[g].probability < 0.5);
    consensus_output_free(&out);
}

static void a_star_seen_by_ten_has_its_dips_and_not_the_chance_marks(void **state)
{
    (void)state;
    for (uint64_t seed = 1; seed <= 20; seed++) {
        ten_see_one_star(true, seed);
        ten_see_one_star(false, seed);
    }
}

static void nobody_and_nothing_give_an_empty_answer(void **state)
{
    (void)state;
    struct consensus_input input = {0};
    struct consensus_output out = fit(&input);
    is_sane(&input, &out);
    assert_true(out.converged);
    consensus_output_free(&out);
    struct consensus_item item = {.snr = 12.0, .duration_d = 0.1};
    input.items = &item;
    input.item_count = 1;
    out = fit(&input);
    is_sane(&input, &out);
    consensus_output_free(&out);
}

static void one_reviewer_alone_gives_sane_numbers(void **state)
{
    (void)state;
    struct consensus_item items[5];
    struct consensus_look looks[5];
    double days = 27.0;
    for (size_t g = 0; g < 5; g++) {
        items[g] = (struct consensus_item){
            .first_look = g, .looks = 1, .snr = 3.0 + 4.0 * (double)g, .duration_d = 0.2};
        looks[g] = (struct consensus_look){.marked = 1, .sure = 1};
    }
    const struct consensus_input input = {.items = items,
                                          .item_count = 5,
                                          .looks = looks,
                                          .look_count = 5,
                                          .people = 1,
                                          .days_looked = &days,
                                          .days_total = 27.0};
    struct consensus_output out = fit(&input);
    is_sane(&input, &out);
    /* One word alone is no proof, nor is a reviewer of five marks known. */
    assert_true(out.skills[0].hit.high - out.skills[0].hit.low > 0.2);
    consensus_output_free(&out);
}

static void only_random_markers_make_no_candidates(void **state)
{
    (void)state;
    struct sim_settings settings = sim_standard(5, 8.0);
    settings.segments = 400;
    settings.people = 60;
    settings.random = 1.0;
    settings.never = 0.0;
    struct simulation sim = sim_new(&settings);
    struct consensus_output out = fit(&sim.input);
    is_sane(&sim.input, &out);
    size_t likely = 0, nothing = 0;
    for (size_t g = 0; g < sim.input.item_count; g++)
        if (sim.truth[g].survey && sim.truth[g].class == SIM_NOTHING) {
            nothing++;
            likely += out.answers[g].probability > 0.5;
        }
    assert_true(nothing > 1000 && likely * 100 < nothing);
    consensus_output_free(&out);
    sim_free(&sim);
}

static void a_hundred_thousand_reviewers_of_one_review_give_sane_numbers(void **state)
{
    (void)state;
    const size_t people = 100000, each = 10, n = people / each;
    struct consensus_item *items = calloc(n, sizeof *items);
    struct consensus_look *looks = calloc(people, sizeof *looks);
    double *days = calloc(people, sizeof *days);
    assert_true(items != NULL && looks != NULL && days != NULL);
    uint64_t state_of = 3;
    for (size_t g = 0; g < n; g++) {
        bool dip = g % 4 == 0;
        items[g] = (struct consensus_item){.first_look = g * each,
                                           .looks = each,
                                           .snr = dip ? 15.0 : 1.0 + fabs(sim_normal(&state_of)),
                                           .duration_d = 0.2};
        for (size_t k = 0; k < each; k++) {
            size_t at = g * each + k;
            looks[at].person = (int32_t)at;
            looks[at].marked = dip ? sim_uniform(&state_of) < 0.8 : k == 0;
            days[at] = 27.0;
        }
    }
    const struct consensus_input input = {.items = items,
                                          .item_count = n,
                                          .looks = looks,
                                          .look_count = people,
                                          .people = people,
                                          .days_looked = days,
                                          .days_total = 27.0 * (double)n};
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    settings.rounds_max = 20;
    struct consensus_output out = fit_with(&input, settings);
    is_sane(&input, &out);
    for (size_t g = 0; g < n; g++)
        assert_true((out.answers[g].probability > 0.5) == (g % 4 == 0));
    consensus_output_free(&out);
    free(items);
    free(looks);
    free(days);
}

static void an_index_out_of_range_is_refused(void **state)
{
    (void)state;
    struct consensus_item item = {.looks = 1, .snr = 5.0, .duration_d = 0.1};
    struct consensus_look look = {.person = 1, .marked = 1};
    double days = 27.0;
    struct consensus_input input = {.items = &item,
                                    .item_count = 1,
                                    .looks = &look,
                                    .look_count = 1,
                                    .people = 1,
                                    .days_looked = &days,
                                    .days_total = 27.0};
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    struct consensus_output out;
    struct base_error error = {0};
    assert_false(consensus_fit(&input, &settings, &out, &error));
    assert_int_equal(error.kind, BASE_INVALID);
    assert_null(out.answers);
    look.person = 0;
    item.looks = 2;
    assert_false(consensus_fit(&input, &settings, &out, &error));
    assert_int_equal(error.kind, BASE_INVALID);
}

/* ---- what a fit must always do ---- */

static void the_same_bits_come_out_on_one_two_and_three_threads(void **state)
{
    (void)state;
    struct simulation sim = campaign(7, 500, 8.0);
    struct consensus_output alone = fit(&sim.input);
    for (unsigned threads = 2; threads <= 3; threads++) {
        struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
        struct base_error error = {0};
        assert_true(base_pool_open(&settings.pool, threads, 8, &error));
        struct consensus_output out = fit_with(&sim.input, settings);
        base_pool_close(settings.pool);
        assert_int_equal(out.rounds, alone.rounds);
        assert_memory_equal(out.answers, alone.answers, sim.input.item_count * sizeof *out.answers);
        assert_memory_equal(out.skills, alone.skills, sim.input.people * sizeof *out.skills);
        assert_memory_equal(&out.common, &alone.common, sizeof out.common);
        consensus_output_free(&out);
    }
    consensus_output_free(&alone);
    sim_free(&sim);
}

struct climb {
    double least_step, last;
    unsigned rounds;
};

static void watch_climb(void *context, unsigned round, double penalised)
{
    struct climb *climb = context;
    if (round > 1)
        climb->least_step = fmin(climb->least_step, (penalised - climb->last) / fabs(penalised));
    climb->last = penalised;
    climb->rounds = round;
}

static void the_penalised_likelihood_never_falls_while_the_population_is_held(void **state)
{
    (void)state;
    for (uint64_t seed = 1; seed <= 3; seed++) {
        struct simulation sim = campaign(seed, 400, seed == 1 ? 4.0 : 8.0);
        struct climb climb = {0};
        struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
        settings.hold = 1;
        settings.watch = watch_climb;
        settings.watch_context = &climb;
        struct consensus_output out = fit_with(&sim.input, settings);
        assert_true(out.converged);
        assert_true(climb.rounds > 5);
        assert_true(climb.least_step >= -1e-12);
        consensus_output_free(&out);
        sim_free(&sim);
    }
}

static void a_warm_start_reaches_the_same_answer(void **state)
{
    (void)state;
    struct simulation sim = campaign(11, 400, 8.0), before = campaign(11, 300, 8.0);
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    settings.tolerance = 1e-10;
    settings.rounds_max = 3000;
    struct consensus_output cold = fit_with(&sim.input, settings);
    struct consensus_output early = fit_with(&before.input, settings);
    /* Reviewers who are new since, and one who is not known any more. */
    early.people[3].hit_logit = NAN;
    const struct consensus_start start = {&early.common, early.people, before.input.people - 20};
    settings.start = &start;
    struct consensus_output warm = fit_with(&sim.input, settings);
    assert_true(cold.converged && warm.converged);
    for (size_t g = 0; g < sim.input.item_count; g++)
        assert_true(fabs(warm.answers[g].probability - cold.answers[g].probability) < 2e-3);
    for (size_t j = 0; j < sim.input.people; j++)
        assert_true(fabs(warm.skills[j].hit.value - cold.skills[j].hit.value) < 2e-3);
    consensus_output_free(&warm);
    consensus_output_free(&early);
    consensus_output_free(&cold);
    sim_free(&sim);
    sim_free(&before);
}

static void dips_and_lures_do_not_change_places(void **state)
{
    (void)state;
    for (uint64_t seed = 21; seed <= 24; seed++) {
        struct sim_settings settings = sim_standard(seed, 8.0);
        settings.segments = 500;
        /* Half of them without any control to go by. */
        settings.injected = settings.inverted = seed % 2 == 0 ? 0.05 : 0.0;
        struct simulation sim = sim_new(&settings);
        struct consensus_output out = fit(&sim.input);
        double dip[2] = {0.0}, lure[2] = {0.0};
        for (size_t g = 0; g < sim.input.item_count; g++) {
            if (!sim.truth[g].survey || sim.truth[g].again)
                continue;
            double *sum = sim.truth[g].class == SIM_DIP    ? dip
                          : sim.truth[g].class == SIM_LURE ? lure
                                                           : NULL;
            if (sum != NULL) {
                sum[0] += out.answers[g].probability;
                sum[1] += 1.0;
            }
        }
        assert_true(dip[0] / dip[1] > lure[0] / lure[1] + 0.3);
        assert_true(out.common.hit_mean > out.common.lure_mean);
        consensus_output_free(&out);
        sim_free(&sim);
    }
}

/* ---- against what was simulated ---- */

struct cover {
    size_t inside, of;
};

static void count_cover(struct cover *cover, const struct consensus_rate *rate, double truth)
{
    cover->of++;
    cover->inside += truth >= rate->low && truth <= rate->high;
}

static void covers_nine_of_ten(const struct cover *cover)
{
    double share = (double)cover->inside / (double)cover->of;
    assert_true(share > 0.85 && share < 0.95);
}

/* No reviewers out of the ordinary, so that the population is as the model has it. */
static void what_was_simulated_is_found_again(void **state)
{
    (void)state;
    struct cover hit = {0}, lure = {0}, chance = {0};
    for (uint64_t seed = 61; seed <= 63; seed++) {
        struct sim_settings settings = sim_standard(seed, 10.0);
        settings.segments = 1200;
        settings.people = 120;
        settings.random = settings.never = 0.0;
        settings.dip_effect_sd = 0.5;
        struct simulation sim = sim_new(&settings);
        struct consensus_output out = fit(&sim.input);
        is_sane(&sim.input, &out);
        assert_true(out.common.beta > 1.9 && out.common.beta < 2.9);
        assert_true(fabs(out.common.hit_mean - 0.6) < 0.3);
        assert_true(fabs(out.common.lure_mean + 1.3) < 0.5);
        assert_true(fabs(out.common.hit_sd - 0.8) < 0.25);
        assert_true(out.common.tau_lure > 0.5 && out.common.tau_lure < 1.4);
        double shown = 0.0;
        for (size_t g = 0; g < sim.input.item_count; g++)
            shown += sim.truth[g].survey ? out.answers[g].probability : 0.0;
        shown += out.unmarked_dips;
        assert_true(fabs(shown / (double)sim.survey_dips - 1.0) < 0.15);
        for (size_t j = 0; j < sim.input.people; j++) {
            count_cover(&hit, &out.skills[j].hit, sim_logistic(sim.people[j].a));
            count_cover(&lure, &out.skills[j].lure, sim_logistic(sim.people[j].b));
            count_cover(&chance, &out.skills[j].chance_per_30_d,
                        sim.people[j].chance * 30.0 / SIM_SEGMENT_D);
        }
        consensus_output_free(&out);
        sim_free(&sim);
    }
    covers_nine_of_ten(&hit);
    covers_nine_of_ten(&lure);
    covers_nine_of_ten(&chance);
}

static void known_truth_is_kept(void **state)
{
    (void)state;
    struct simulation sim = campaign(41, 400, 8.0);
    struct consensus_output out = fit(&sim.input);
    size_t dips = 0, others = 0;
    for (size_t g = 0; g < sim.input.item_count; g++) {
        if (sim.items[g].known == CONSENSUS_DIP) {
            assert_true(out.answers[g].probability == 1.0);
            dips++;
        } else if (sim.items[g].known == CONSENSUS_NOT_DIP) {
            assert_true(out.answers[g].probability == 0.0);
            others++;
        }
    }
    assert_true(dips > 30 && others > 10);
    consensus_output_free(&out);
    sim_free(&sim);
}

/* A miss teaches as much as a hit: without the injected dips that nobody marked, hit rates would be
 * read off too high. */
static void injected_dips_that_nobody_marked_lower_the_hit_rates(void **state)
{
    (void)state;
    struct simulation sim = campaign(43, 600, 4.0);
    struct consensus_output with = fit(&sim.input);
    size_t kept = 0;
    for (size_t g = 0; g < sim.input.item_count; g++) {
        bool marked = false;
        for (size_t k = 0; k < sim.items[g].looks; k++)
            marked |= sim.looks[sim.items[g].first_look + k].marked;
        if (marked)
            sim.items[kept++] = sim.items[g];
    }
    assert_true(kept < sim.input.item_count);
    sim.input.item_count = kept;
    struct consensus_output without = fit(&sim.input);
    assert_true(with.common.hit_mean < without.common.hit_mean);
    consensus_output_free(&with);
    consensus_output_free(&without);
    sim_free(&sim);
}

static void certainty_helps_to_tell_dips(void **state)
{
    (void)state;
    double loss[2] = {0.0, 0.0};
    struct sim_settings settings = sim_standard(47, 5.0);
    settings.segments = 800;
    settings.certainty = true;
    struct simulation sim = sim_new(&settings);
    for (int blind = 0; blind < 2; blind++) {
        for (size_t k = 0; blind && k < sim.input.look_count; k++)
            sim.looks[k].sure = sim.looks[k].marked;
        struct consensus_output out = fit(&sim.input);
        if (!blind)
            assert_true(out.common.sure[0] > out.common.sure[1] &&
                        out.common.sure[1] > out.common.sure[2]);
        for (size_t g = 0; g < sim.input.item_count; g++) {
            bool dip = sim.truth[g].class == SIM_DIP && !sim.truth[g].again;
            double p = fmin(fmax(out.answers[g].probability, 1e-4), 1.0 - 1e-4);
            if (sim.truth[g].survey)
                loss[blind] -= dip ? log(p) : log1p(-p);
        }
        consensus_output_free(&out);
    }
    sim_free(&sim);
    assert_true(loss[0] < loss[1]);
}

static void partners_who_mark_together_are_not_believed(void **state)
{
    (void)state;
    struct sim_settings settings = sim_standard(53, 8.0);
    settings.segments = 600;
    settings.people = 80;
    settings.in_pairs = 0.2;
    struct simulation sim = sim_new(&settings);
    struct consensus_output out = fit(&sim.input);
    double partners = 0.0, others = 0.0, partner_count = 0.0;
    for (size_t j = 0; j < settings.people; j++) {
        bool partner = sim.people[j].partner >= 0;
        *(partner ? &partners : &others) += out.people[j].log_together;
        partner_count += partner;
    }
    assert_true(partners / partner_count > others / (80.0 - partner_count) + 0.5);
    size_t false_ones = 0, several = 0;
    for (size_t g = 0; g < sim.input.item_count; g++) {
        double marks = 0.0;
        for (size_t k = 0; k < sim.items[g].looks; k++)
            marks += sim.looks[sim.items[g].first_look + k].marked;
        if (sim.truth[g].survey && sim.truth[g].class == SIM_NOTHING && marks > 1.0) {
            several++;
            false_ones += out.answers[g].probability > 0.5;
        }
    }
    assert_true(several > 50 && false_ones * 20 < several);
    consensus_output_free(&out);
    sim_free(&sim);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_star_seen_by_ten_has_its_dips_and_not_the_chance_marks),
        cmocka_unit_test(nobody_and_nothing_give_an_empty_answer),
        cmocka_unit_test(one_reviewer_alone_gives_sane_numbers),
        cmocka_unit_test(only_random_markers_make_no_candidates),
        cmocka_unit_test(a_hundred_thousand_reviewers_of_one_review_give_sane_numbers),
        cmocka_unit_test(an_index_out_of_range_is_refused),
        cmocka_unit_test(the_same_bits_come_out_on_one_two_and_three_threads),
        cmocka_unit_test(the_penalised_likelihood_never_falls_while_the_population_is_held),
        cmocka_unit_test(a_warm_start_reaches_the_same_answer),
        cmocka_unit_test(dips_and_lures_do_not_change_places),
        cmocka_unit_test(what_was_simulated_is_found_again),
        cmocka_unit_test(known_truth_is_kept),
        cmocka_unit_test(injected_dips_that_nobody_marked_lower_the_hit_rates),
        cmocka_unit_test(certainty_helps_to_tell_dips),
        cmocka_unit_test(partners_who_mark_together_are_not_believed),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
