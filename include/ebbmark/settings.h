/*
 * The campaign's settings: one table with name, type, default, range, unit and a sentence each.
 * Help, checks, the API and the Campaign page are made from it.
 *
 * EBBMARK_SETTING(name, kind, default, least, most, unit, sentence); kind is integer or real.
 */
#ifndef EBBMARK_SETTINGS_H
#define EBBMARK_SETTINGS_H

#include <stdbool.h>
#include <stdint.h>

#include "ebbmark/error.h"

/* clang-format off */
#define EBBMARK_SETTINGS(X) \
    X(open_to_join,        integer, 1,     0,    1,      "",        "Whether new people may join by themselves (1) or only by an admin's hand (0).") \
    X(looks_least,         integer, 6,     1,    1000,   "looks",   "How many looks a segment needs at least before it can settle.") \
    X(looks_most,          integer, 15,    1,    1000,   "looks",   "How many looks a segment gets at most.") \
    X(lease_minutes,       integer, 15,    1,    1440,   "minutes", "How long a handed-out segment is held for its reviewer.") \
    X(run_after_reviews,   integer, 500,   0,    10000000, "reviews", "A consensus run starts by itself after this many new reviews; 0: never.") \
    X(run_after_minutes,   integer, 30,    0,    10080,  "minutes", "A consensus run starts by itself this long after a new review; 0: never.") \
    X(segment_days,        real,    15,    1,    1000,   "d",       "Length of a segment cut from a light curve at loading.") \
    X(overlap_days,        real,    0.75,  0,    100,    "d",       "How much neighbouring segments share.") \
    X(trend_window_days,   real,    1.5,   0.1,  100,    "d",       "Width of the window that follows the star's own changes.") \
    X(quality_mask,        integer, 4294967295, 0, 4294967295, "bits", "Cadences with any of these quality bits are dropped at loading.") \
    X(session_days,        integer, 30,    1,    400,    "d",       "How long a browser stays signed in.") \
    X(marks_most,          integer, 50,    1,    50,     "marks",   "The most marks that one review may hold.")
/* clang-format on */

#define EBBMARK_SETTING_FIELD_integer int64_t
#define EBBMARK_SETTING_FIELD_real double

struct campaign_settings {
#define X(name, kind, standard, least, most, unit, sentence) EBBMARK_SETTING_FIELD_##kind name;
    EBBMARK_SETTINGS(X)
#undef X
};

/* One row of the table, for listing. */
struct campaign_setting {
    const char *name;
    bool is_real;
    double standard, least, most;
    const char *unit, *sentence;
};
extern const struct campaign_setting campaign_setting_table[];
extern const unsigned campaign_setting_count;

/* The value of row `index` of the table; every setting is a number. */
double campaign_setting_value(const struct campaign_settings *settings, unsigned index);

#endif
