#include "support.h"

static const struct campaign_setting *row_of(const char *name, unsigned *index)
{
    for (unsigned i = 0; i < campaign_setting_count; i++)
        if (strcmp(campaign_setting_table[i].name, name) == 0) {
            *index = i;
            return &campaign_setting_table[i];
        }
    return NULL;
}

static void defaults_are_in_force_and_in_range(void **state)
{
    (void)state;
    struct place place;
    place_open(&place);
    const struct campaign_settings settings = campaign_settings_now(place.campaign);
    assert_int_equal(settings.looks_most, 15);
    assert_true(settings.segment_days == 15.0);
    assert_int_equal(settings.quality_mask, 4294967295);
    for (unsigned i = 0; i < campaign_setting_count; i++) {
        const struct campaign_setting *row = &campaign_setting_table[i];
        assert_true(campaign_setting_value(&settings, i) == row->standard);
        assert_true(row->least <= row->standard && row->standard <= row->most);
        assert_true(strlen(row->sentence) > 20);
    }
    place_close(&place);
}

static void a_changed_setting_outlives_a_restart(void **state)
{
    (void)state;
    struct place place;
    unsigned index = 0;
    place_open(&place);
    change_setting(&place, "lease_minutes", "7");
    change_setting(&place, "trend_window_days", "2.25");
    place_shut(&place);
    place_open_again(&place);
    const struct campaign_settings settings = campaign_settings_now(place.campaign);
    assert_int_equal(settings.lease_minutes, 7);
    assert_true(settings.trend_window_days == 2.25);
    assert_non_null(row_of("trend_window_days", &index));
    assert_true(campaign_setting_value(&settings, index) == 2.25);
    place_close(&place);
}

static void the_ends_of_every_range_are_taken_and_what_lies_past_them_is_not(void **state)
{
    (void)state;
    struct place place;
    place_open(&place);
    for (unsigned i = 0; i < campaign_setting_count; i++) {
        const struct campaign_setting *row = &campaign_setting_table[i];
        const double past[] = {row->least - 1.0, row->most + 1.0};
        for (size_t k = 0; k < 2; k++) {
            struct base_error error = {0};
            char text[64];
            (void)snprintf(text, sizeof text, "%.10g", past[k]);
            assert_false(campaign_setting_change(place.campaign, row->name, text, 0, &error));
            assert_int_equal(error.kind, BASE_INVALID);
            assert_string_equal(error.field, row->name);
            (void)snprintf(text, sizeof text, "%.10g to %.10g", row->least, row->most);
            assert_non_null(strstr(error.sentence, text));
        }
    }
    change_setting(&place, "session_days", "1");
    change_setting(&place, "session_days", "400");
    change_setting(&place, "looks_most", "1000");
    change_setting(&place, "looks_least", "1000");
    place_close(&place);
}

static void what_is_no_number_is_refused(void **state)
{
    (void)state;
    static const char *const bad[] = {"",    " ",   "many",    "1.5", "0x10",
                                      "nan", "inf", "5 looks", "1e99"};
    struct place place;
    place_open(&place);
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct base_error error = {0};
        assert_false(campaign_setting_change(place.campaign, "looks_most", bad[i], 0, &error));
        assert_int_equal(error.kind, BASE_INVALID);
    }
    struct base_error error = {0};
    assert_false(campaign_setting_change(place.campaign, "colour", "1", 0, &error));
    assert_int_equal(error.kind, BASE_NOT_FOUND);
    assert_int_equal(campaign_settings_now(place.campaign).looks_most, 15);
    place_close(&place);
}

static void settings_that_do_not_fit_together_are_refused(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    place_open(&place);
    assert_false(campaign_setting_change(place.campaign, "looks_least", "16", 0, &error));
    assert_string_equal(error.field, "looks_least");
    assert_false(campaign_setting_change(place.campaign, "looks_most", "5", 0, &error));
    assert_false(campaign_setting_change(place.campaign, "overlap_days", "7.6", 0, &error));
    assert_false(campaign_setting_change(place.campaign, "segment_days", "1", 0, &error));
    change_setting(&place, "overlap_days", "7.5");
    place_close(&place);
}

static void a_stored_value_that_makes_no_sense_falls_back(void **state)
{
    (void)state;
    struct place place;
    struct base_error error = {0};
    place_open(&place);
    assert_ok(store_setting_write(place.store, "lease_minutes", "yesterday", 0, &error), error);
    assert_ok(store_setting_write(place.store, "from_the_future", "3", 0, &error), error);
    assert_ok(store_setting_write(place.store, "session_days", "9", 0, &error), error);
    place_shut(&place);
    place_open_again(&place);
    assert_int_equal(campaign_settings_now(place.campaign).lease_minutes, 15);
    assert_int_equal(campaign_settings_now(place.campaign).session_days, 9);
    place_close(&place);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(defaults_are_in_force_and_in_range),
        cmocka_unit_test(a_changed_setting_outlives_a_restart),
        cmocka_unit_test(the_ends_of_every_range_are_taken_and_what_lies_past_them_is_not),
        cmocka_unit_test(what_is_no_number_is_refused),
        cmocka_unit_test(settings_that_do_not_fit_together_are_refused),
        cmocka_unit_test(a_stored_value_that_makes_no_sense_falls_back),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
