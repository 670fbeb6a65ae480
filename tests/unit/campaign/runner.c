/* When consensus runs happen: by hand, by themselves, one at a time. */
#include "support.h"

#include <signal.h>
#include <sys/resource.h>

#include "../../../server/campaign/inside.h"

static struct campaign_run_state wait_until_idle(struct place *place)
{
    double until = base_clock_monotonic_s() + 30.0;
    struct campaign_run_state state = campaign_run_state_now(place->campaign);
    while (state.working && base_clock_monotonic_s() < until) {
        (void)usleep(2000);
        state = campaign_run_state_now(place->campaign);
    }
    assert_false(state.working);
    return state;
}

/* Wait until there is a run of at least this number. */
static void wait_for_run(struct place *place, int64_t least)
{
    struct base_error error = {0};
    double until = base_clock_monotonic_s() + 30.0;
    int64_t run = 0;
    while (run < least && base_clock_monotonic_s() < until) {
        (void)usleep(2000);
        assert_ok(store_run_current(place->store, &run, &error), error);
    }
    assert_true(run >= least);
}

static void start(struct place *place)
{
    place_open(place);
    (void)add_flat_stars(place, "first", 1, 2, 5);
}

static void a_run_asked_for_is_done_in_the_background(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    start(&place);
    assert_false(campaign_run_state_now(place.campaign).working);
    assert_ok(campaign_run_ask(place.campaign, &error), error);
    assert_true(campaign_run_state_now(place.campaign).working ||
                campaign_figures_now(place.campaign).runs_done == 1);
    wait_for_run(&place, 1);
    assert_string_equal(wait_until_idle(&place).last_error, "");
    assert_int_equal(campaign_figures_now(place.campaign).runs_done, 1);
    place_close(&place);
}

/* Everything asked for from inside a run comes while one is at work. */
struct inside_run {
    struct campaign *campaign;
    unsigned calls;
    double last;
};

static void ask_from_inside(void *context, double fraction, const char *stage)
{
    struct inside_run *inside = context;
    struct base_error error = {0};
    int64_t run = 0;
    assert_true(fraction >= inside->last && fraction <= 1.0);
    assert_true(stage[0] != '\0');
    inside->last = fraction;
    inside->calls++;
    assert_false(campaign_run(inside->campaign, NULL, NULL, &run, &error));
    assert_int_equal(error.kind, BASE_BUSY);
    assert_false(campaign_run_ask(inside->campaign, &error));
    assert_int_equal(error.kind, BASE_CONFLICT);
    const struct campaign_run_state state = campaign_run_state_now(inside->campaign);
    assert_true(state.working);
    assert_string_equal(state.stage, stage);
}

static void there_is_one_run_at_a_time_and_it_says_how_far_it_is(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    int64_t run = 0;
    start(&place);
    int64_t person = add_person(&place, "one");
    review_segment(&place, person, 1, 1, NULL, 0);
    struct inside_run inside = {.campaign = place.campaign};
    assert_ok(campaign_run(place.campaign, ask_from_inside, &inside, &run, &error), error);
    assert_int_equal(run, 1);
    assert_true(inside.calls >= 5);
    assert_true(inside.last == 1.0);
    assert_false(campaign_run_state_now(place.campaign).working);
    place_close(&place);
}

static void a_run_starts_after_enough_reviews(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    struct store_run run;
    start(&place);
    change_setting(&place, "run_after_minutes", "0");
    change_setting(&place, "run_after_reviews", "6");
    int64_t person = add_person(&place, "one"), current = 1;
    for (uint64_t i = 1; i <= 5; i++)
        review_segment(&place, person, (int64_t)i, i, NULL, 0);
    (void)usleep(100000);
    assert_ok(store_run_current(place.store, &current, &error), error);
    assert_int_equal(current, 0);
    review_segment(&place, person, 6, 6, NULL, 0);
    wait_for_run(&place, 1);
    struct base_arena *arena = base_arena_new(0);
    assert_ok(store_run_read(place.store, arena, 1, &run, &error), error);
    assert_int_equal(run.reviews, 6);
    base_arena_free(arena);
    (void)wait_until_idle(&place);
    place_close(&place);
}

static void lowering_the_number_makes_a_run_due_at_once(void **state)
{
    (void)state;
    struct place place;
    start(&place);
    change_setting(&place, "run_after_minutes", "0");
    change_setting(&place, "run_after_reviews", "1000");
    int64_t person = add_person(&place, "one");
    for (uint64_t i = 1; i <= 4; i++)
        review_segment(&place, person, (int64_t)i, i, NULL, 0);
    (void)usleep(50000);
    change_setting(&place, "run_after_reviews", "3");
    wait_for_run(&place, 1);
    (void)wait_until_idle(&place);
    place_close(&place);
}

static void a_run_that_fails_says_why_and_the_next_may_work(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    start(&place);
    int64_t person = add_person(&place, "one");
    const struct store_mark mark = {.starts_d = 1, .ends_d = 2, .low = 0, .high = 1};
    review_segment(&place, person, 1, 1, &mark, 1);
    /* No file may grow: the run is computed and cannot be stored. */
    (void)signal(SIGXFSZ, SIG_IGN);
    struct rlimit before, tight;
    assert_int_equal(getrlimit(RLIMIT_FSIZE, &before), 0);
    tight = before;
    tight.rlim_cur = 1;
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &tight), 0);
    assert_ok(campaign_run_ask(place.campaign, &error), error);
    struct campaign_run_state after = wait_until_idle(&place);
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &before), 0);
    assert_true(strlen(after.last_error) > 10);
    assert_int_equal(campaign_figures_now(place.campaign).runs_failed, 1);
    assert_ok(campaign_run_ask(place.campaign, &error), error);
    wait_for_run(&place, 1);
    assert_string_equal(wait_until_idle(&place).last_error, "");
    place_close(&place);
}

static void closing_does_not_wait_for_a_run_that_was_just_asked_for(void **state)
{
    (void)state;
    for (int i = 0; i < 20; i++) {
        struct place place;
        struct base_error error = {0};
        start(&place);
        assert_ok(campaign_run_ask(place.campaign, &error), error);
        (void)usleep((useconds_t)(i * 200));
        double began = base_clock_monotonic_s();
        place_shut(&place);
        assert_true(base_clock_monotonic_s() - began < 5.0);
        place_close(&place);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_run_asked_for_is_done_in_the_background),
        cmocka_unit_test(there_is_one_run_at_a_time_and_it_says_how_far_it_is),
        cmocka_unit_test(a_run_starts_after_enough_reviews),
        cmocka_unit_test(lowering_the_number_makes_a_run_due_at_once),
        cmocka_unit_test(a_run_that_fails_says_why_and_the_next_may_work),
        cmocka_unit_test(closing_does_not_wait_for_a_run_that_was_just_asked_for),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
