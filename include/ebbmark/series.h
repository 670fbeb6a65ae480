/*
 * Linking the dips of one star into series that repeat. All periods that explain pairs of similar
 * depth and duration are tried; a period is the worse for every predicted dip that falls on data
 * and is not there. Pure; thread-safe; the same input gives the same bits.
 */
#ifndef EBBMARK_SERIES_H
#define EBBMARK_SERIES_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/arena.h"
#include "ebbmark/error.h"

#define EPHEMERIS_EVENTS_MOST 2000 /* of one star in one call */
#define EPHEMERIS_SERIES_MOST 16   /* that repeat, of one star; what is left counts as single */
#define EPHEMERIS_TIME_MOST_D 1e9  /* of any time, either side of 0 */
#define EPHEMERIS_ALIASES_LISTED 32
#define EPHEMERIS_RANGES_LISTED 32

/* A straight line through mid-times: mid = epoch_d + cycle x period_d, with the cycle counted from
 * the epoch, which is the mid-time nearest the weighted middle. Errors are one sigma and follow
 * from the mid-times' own errors; a poor chi2 says that those are too small or that the times
 * wander. */
struct ephemeris_line {
    double period_d, period_error_d;
    double epoch_d, epoch_error_d;
    double covariance_d2; /* of epoch and period */
    double chi2;
    size_t freedom; /* mid-times - 2 */
};

/* Fit the line by weighted least squares: n >= 2 mid-times with errors > 0, all finite, at whole
 * cycles of which two differ. Moves the cycles' origin to the epoch: *origin (may be NULL) is the
 * given cycle that the epoch belongs to. */
void ephemeris_line_fit(const double *mid_d, const double *mid_error_d, const int64_t *cycle,
                        size_t n, struct ephemeris_line *out, int64_t *origin);

/* Mid-time of a cycle counted from the epoch, and its one-sigma error. */
double ephemeris_line_mid_d(const struct ephemeris_line *line, int64_t cycle);
double ephemeris_line_mid_error_d(const struct ephemeris_line *line, int64_t cycle);

/* A candidate. It is left out where its time is not a number of at most EPHEMERIS_TIME_MOST_D, or
 * mid_error_d, depth or duration_d is not one from 1e-9 to 1e9: nothing can be said of its period.
 * The errors of depth and duration may be NAN where they are not known. */
struct ephemeris_event {
    double mid_d, mid_error_d;
    double depth, depth_error; /* relative */
    double duration_d, duration_error_d;
    double probability; /* that it is a dip, 0 to 1 */
};

/* When the star was looked at: the times (d, increasing) of all points in which a dip would have
 * become a candidate, had it been there. */
struct ephemeris_watch {
    const double *time;
    size_t count;
    double cadence_d; /* > 0 */
};

struct ephemeris_link_rules {
    double period_least_d; /* never less than twice the duration either */
    double chance_missed;  /* that a dip on data did not become a candidate, above 0, below 1 */
    double depth_spread;   /* of ln depth within a series, beyond its error */
    double duration_spread;
    double evidence_least; /* ln of the odds against chance that makes a series */
    double share_least;    /* an alias survives with this share of the best one's likelihood */
    double excluded_below; /* a single dip's period is excluded by misses as unlikely as this */
};

/* Periods from 0.2 d; 0.05 missed; spreads of 0.1 and 0.2; evidence 3 (20 to 1); shares of 1 %;
 * excluded below 10 %. Common practice, no source. */
extern const struct ephemeris_link_rules ephemeris_link_rules_usual;

struct ephemeris_alias {
    struct ephemeris_line line;
    size_t missing;  /* predicted dips on data that are not there */
    double evidence; /* ln of the odds of this series against dips at random */
    double share;    /* of all surviving periods of the series, 0 to 1 */
};

struct ephemeris_range {
    double from_d, to_d; /* to_d may be INFINITY */
};

struct ephemeris_series {
    size_t *member; /* places in the array of events, by time */
    int64_t *cycle; /* of each member, from the epoch of alias[0]; NULL when single */
    size_t members;
    /* A series that repeats: the surviving periods, likeliest first; alias[0] is the ephemeris. */
    struct ephemeris_alias *alias;
    size_t aliases;   /* listed, at most EPHEMERIS_ALIASES_LISTED; 0 when single */
    size_t surviving; /* in all */
    /* A single dip: the periods that the data still allow, short to long, the widest (in ln) where
     * more than EPHEMERIS_RANGES_LISTED; the last one has no end. None for others. */
    struct ephemeris_range *range;
    size_t ranges;
};

struct ephemeris_linked {
    struct ephemeris_series *series; /* repeating ones by evidence, then single dips by time */
    size_t count;
};

/* Link `count` events, in any order. Every event that is not left out is in exactly one series. The
 * result lives in `arena`. BASE_TOO_LARGE beyond EPHEMERIS_EVENTS_MOST, BASE_INVALID for rules,
 * times or probabilities out of range, BASE_MEMORY. */
bool ephemeris_series_link(const struct ephemeris_event *event, size_t count,
                           const struct ephemeris_watch *watch,
                           const struct ephemeris_link_rules *rules, struct base_arena *arena,
                           struct ephemeris_linked *out, struct base_error *error);

#endif
