#include "single.h"

#include <math.h>
#include <stdlib.h>

#define STEP 0.25 /* of the duration: how far a step in period moves the farthest dip */
#define STEPS_MOST 200000

struct misses {
    const struct watch *watch;
    const struct ephemeris_line *line;
    double duration_d, chance_missed, excluded_below, chance;
};

static bool count_miss(void *context, int64_t cycle)
{
    struct misses *misses = context;
    if (cycle != 0 && watch_chance_covered(misses->watch, ephemeris_line_mid_d(misses->line, cycle),
                                           0.0, misses->duration_d) > 0.0)
        misses->chance *= misses->chance_missed;
    return misses->chance >= misses->excluded_below;
}

static bool is_allowed(const struct watch *watch, const struct ephemeris_link_rules *rules,
                       double mid_d, double duration_d, double period_d)
{
    struct ephemeris_line line = {.period_d = period_d, .epoch_d = mid_d};
    struct misses misses = {.watch = watch,
                            .line = &line,
                            .duration_d = duration_d,
                            .chance_missed = rules->chance_missed,
                            .excluded_below = rules->excluded_below,
                            .chance = 1.0};
    watch_each_cycle(watch, &line, duration_d, count_miss, &misses);
    return misses.chance >= rules->excluded_below;
}

static double width_of(const struct ephemeris_range *range)
{
    return log(range->to_d / range->from_d);
}

/* Add a range behind the others; where there are too many, the narrowest goes. */
static void add_range(struct ephemeris_series *series, struct ephemeris_range range)
{
    series->range[series->ranges++] = range;
    if (series->ranges <= EPHEMERIS_RANGES_LISTED)
        return;
    size_t narrowest = 0;
    for (size_t i = 1; i < series->ranges; i++)
        if (width_of(&series->range[i]) < width_of(&series->range[narrowest]))
            narrowest = i;
    series->ranges--;
    for (size_t i = narrowest; i < series->ranges; i++)
        series->range[i] = series->range[i + 1];
}

bool single_ranges(const struct watch *watch, const struct ephemeris_link_rules *rules,
                   double mid_d, double duration_d, struct base_arena *arena,
                   struct ephemeris_series *series, struct base_error *error)
{
    series->range =
        base_arena_take_array(arena, EPHEMERIS_RANGES_LISTED + 1, sizeof *series->range);
    if (series->range == NULL)
        return base_fail(error, BASE_MEMORY, "No memory for the periods of a single dip.");
    double least = fmax(rules->period_least_d, 2.0 * duration_d), beyond = least;
    if (watch->stretches > 0)
        beyond = fmax(mid_d - watch->first_d, watch->last_d - mid_d) + duration_d;
    double range = log(beyond / least);
    size_t steps = 0;
    if (range > 0.0)
        steps = (size_t)fmin(ceil(range * beyond / (STEP * duration_d)), STEPS_MOST);
    double from = NAN;
    for (size_t step = 0; step < steps; step++) {
        double period = least * exp(range * ((double)step / (double)steps));
        bool allowed = is_allowed(watch, rules, mid_d, duration_d, period);
        if (allowed && isnan(from))
            from = period;
        if (!allowed && !isnan(from)) {
            double to = least * exp(range * (((double)step - 1.0) / (double)steps));
            if (to > from)
                add_range(series, (struct ephemeris_range){from, to});
            from = NAN;
        }
    }
    add_range(series, (struct ephemeris_range){isnan(from) ? fmax(beyond, least) : from, INFINITY});
    return true;
}
