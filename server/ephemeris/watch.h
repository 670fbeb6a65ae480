/* Whether a predicted dip falls on data. Private to the room; belongs to one thread. */
#ifndef EPHEMERIS_WATCH_H
#define EPHEMERIS_WATCH_H

#include "ebbmark/series.h"

/* A time without a gap that a dip could hide in. */
struct watch_stretch {
    double starts_d, ends_d;
};

struct watch {
    const struct ephemeris_watch *data;
    struct watch_stretch *stretch; /* by time */
    size_t stretches;
    double first_d, last_d, length_d; /* of the data; length without the gaps */
};

/* BASE_INVALID for times that do not increase or a cadence that is not above 0. Free it with
 * watch_close, also after a failure. No data is no error: nothing falls on it. */
bool watch_open(struct watch *watch, const struct ephemeris_watch *data, struct base_error *error);
void watch_close(struct watch *watch);

/* The chance (0 to 1) that data cover at least half of a dip predicted at mid_d with an error. */
double watch_chance_covered(const struct watch *watch, double mid_d, double error_d,
                            double duration_d);

/* Call visit(context, cycle) for each cycle of the line whose dip may touch data, until it gives
 * false. */
void watch_each_cycle(const struct watch *watch, const struct ephemeris_line *line,
                      double duration_d, bool (*visit)(void *context, int64_t cycle),
                      void *context);

#endif
