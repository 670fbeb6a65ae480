#include "ebbmark/settings.h"

#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "ebbmark/text.h"
#include "inside.h"

#define REAL_integer false
#define REAL_real true
const struct campaign_setting campaign_setting_table[] = {
#define X(name, kind, standard, least, most, unit, sentence)                                       \
    {#name, REAL_##kind, standard, least, most, unit, sentence},
    EBBMARK_SETTINGS(X)
#undef X
};
const unsigned campaign_setting_count =
    sizeof campaign_setting_table / sizeof campaign_setting_table[0];

double campaign_setting_value(const struct campaign_settings *settings, unsigned index)
{
    assert(index < campaign_setting_count);
    const double values[] = {
#define X(name, kind, standard, least, most, unit, sentence) (double)settings->name,
        EBBMARK_SETTINGS(X)
#undef X
    };
    return values[index];
}

static struct campaign_settings settings_standard(void)
{
    return (struct campaign_settings){
#define X(name, kind, standard, least, most, unit, sentence) .name = (standard),
        EBBMARK_SETTINGS(X)
#undef X
    };
}

static unsigned index_of(const char *name)
{
    unsigned i = 0;
    while (i < campaign_setting_count && strcmp(campaign_setting_table[i].name, name) != 0)
        i++;
    return i;
}

static void put(struct campaign_settings *settings, unsigned index, double value)
{
    unsigned at = 0;
#define X(name, kind, standard, least, most, unit, sentence)                                       \
    if (at++ == index)                                                                             \
        settings->name = (EBBMARK_SETTING_FIELD_##kind)value;
    EBBMARK_SETTINGS(X)
#undef X
}

/* The number that `text` states for a row of the table, within its range. */
static bool read_value(unsigned index, const char *text, double *out, struct base_error *error)
{
    const struct campaign_setting *row = &campaign_setting_table[index];
    double value = NAN;
    bool number = base_text_read_number(text, &value) && isfinite(value) &&
                  (row->is_real || !(fabs(value - rint(value)) > 0.0));
    if (!number || value < row->least || value > row->most) {
        char least[BASE_NUMBER_SIZE], most[BASE_NUMBER_SIZE];
        return base_fail_field(
            error, BASE_INVALID, row->name, "%s is a %s from %s to %s%s%s.", row->name,
            row->is_real ? "number" : "whole number", base_text_number(least, row->least),
            base_text_number(most, row->most), row->unit[0] != '\0' ? " " : "", row->unit);
    }
    *out = value;
    return true;
}

/* What one setting demands of another. `name` is the one that is being changed. */
static bool fit_together(const struct campaign_settings *settings, const char *name,
                         struct base_error *error)
{
    if (settings->looks_least > settings->looks_most)
        return base_fail_field(error, BASE_INVALID, name,
                               "looks_least (%" PRId64 ") may not be over looks_most (%" PRId64
                               ").",
                               settings->looks_least, settings->looks_most);
    if (settings->overlap_days > settings->segment_days / 2)
        return base_fail_field(error, BASE_INVALID, name,
                               "overlap_days (%g) may be at most half of segment_days (%g).",
                               settings->overlap_days, settings->segment_days);
    return true;
}

/* Put one stored setting in force. A name or value that this version does not take is told to the
 * log and left: the database may have been used by another version. */
static void take_stored(struct campaign *campaign, const struct store_setting *stored)
{
    struct base_error error = {0};
    double value = 0.0;
    unsigned index = index_of(stored->name);
    if (index < campaign_setting_count && read_value(index, stored->value, &value, &error))
        put(&campaign->settings, index, value);
    else
        base_log_line(campaign->log, BASE_LOG_WARNING, "setting_not_taken", "name", stored->name,
                      "value", stored->value, (const char *)NULL);
}

bool settings_read(struct campaign *campaign, struct base_error *error)
{
    campaign->settings = settings_standard();
    struct base_arena *arena = base_arena_new(0);
    if (arena == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to read the settings.");
    struct store_setting *stored = NULL;
    size_t count = 0;
    bool ok = store_settings_read(campaign->store, arena, &stored, &count, error);
    for (size_t i = 0; ok && i < count; i++)
        take_stored(campaign, &stored[i]);
    struct base_error unfit;
    if (ok && !fit_together(&campaign->settings, "", &unfit)) {
        campaign_tell(campaign, BASE_LOG_WARNING, "settings_do_not_fit", "detail", unfit.sentence);
        campaign->settings = settings_standard();
    }
    base_arena_free(arena);
    return ok;
}

struct campaign_settings campaign_settings_now(struct campaign *campaign)
{
    (void)pthread_mutex_lock(&campaign->settings_lock);
    const struct campaign_settings settings = campaign->settings;
    (void)pthread_mutex_unlock(&campaign->settings_lock);
    return settings;
}

bool campaign_setting_change(struct campaign *campaign, const char *name, const char *value,
                             int64_t person, struct base_error *error)
{
    unsigned index = index_of(name);
    if (index == campaign_setting_count)
        return base_fail_field(error, BASE_NOT_FOUND, name, "There is no setting %s.", name);
    double number = 0.0;
    if (!read_value(index, value, &number, error))
        return false;
    char text[BASE_NUMBER_SIZE];
    (void)base_text_number(text, number);
    (void)pthread_mutex_lock(&campaign->settings_lock);
    struct campaign_settings changed = campaign->settings;
    put(&changed, index, number);
    bool ok = fit_together(&changed, name, error) &&
              store_setting_write(campaign->store, name, text, person, error);
    if (ok)
        campaign->settings = changed;
    (void)pthread_mutex_unlock(&campaign->settings_lock);
    if (ok)
        runner_look_again(campaign->runner);
    return ok;
}
