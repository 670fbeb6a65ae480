#include "watch.h"

#include <math.h>
#include <stdlib.h>

#define CADENCE_MOST_D 1.0
#define GAP_CADENCES 10.0
#define GAP_LEAST_D 0.5
#define COVERED_LEAST 0.5
/* A prediction surer than this share of the duration is looked up at one place only. */
#define SURE_SHARE 0.25
#define CYCLE_MOST 9e15 /* beyond this a double holds no whole numbers */

static bool check_times(const struct ephemeris_watch *data, struct base_error *error)
{
    if (!(data->cadence_d > 0.0 && data->cadence_d <= CADENCE_MOST_D))
        return base_fail(error, BASE_INVALID, "The cadence %g d is not above 0 and at most %g d.",
                         data->cadence_d, CADENCE_MOST_D);
    for (size_t i = 0; i < data->count; i++)
        if (!(fabs(data->time[i]) <= EPHEMERIS_TIME_MOST_D) ||
            (i > 0 && !(data->time[i] >= data->time[i - 1])))
            return base_fail(error, BASE_INVALID,
                             "Time %zu of the star's points is not a number of at most %g d, or "
                             "comes before the one before it.",
                             i, EPHEMERIS_TIME_MOST_D);
    return true;
}

bool watch_open(struct watch *watch, const struct ephemeris_watch *data, struct base_error *error)
{
    *watch = (struct watch){.data = data};
    if (!check_times(data, error))
        return false;
    if (data->count == 0)
        return true;
    double gap = fmax(GAP_CADENCES * data->cadence_d, GAP_LEAST_D);
    size_t count = 1;
    for (size_t i = 1; i < data->count; i++)
        count += data->time[i] - data->time[i - 1] > gap;
    watch->stretch = calloc(count, sizeof *watch->stretch);
    if (watch->stretch == NULL)
        return base_fail(error, BASE_MEMORY, "No memory for %zu stretches of data.", count);
    watch->first_d = data->time[0];
    watch->last_d = data->time[data->count - 1];
    for (size_t i = 0; i < data->count; i++) {
        if (i == 0 || data->time[i] - data->time[i - 1] > gap)
            watch->stretch[watch->stretches++].starts_d = data->time[i];
        watch->stretch[watch->stretches - 1].ends_d = data->time[i];
    }
    for (size_t i = 0; i < watch->stretches; i++)
        watch->length_d += watch->stretch[i].ends_d - watch->stretch[i].starts_d + data->cadence_d;
    return true;
}

void watch_close(struct watch *watch)
{
    free(watch->stretch);
    watch->stretch = NULL;
}

static size_t points_before(const struct ephemeris_watch *data, double time_d)
{
    size_t low = 0, high = data->count;
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        if (data->time[middle] < time_d)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

static bool is_covered(const struct watch *watch, double mid_d, double duration_d)
{
    size_t points = points_before(watch->data, mid_d + 0.5 * duration_d) -
                    points_before(watch->data, mid_d - 0.5 * duration_d);
    return points > 0 && (double)points * watch->data->cadence_d >= COVERED_LEAST * duration_d;
}

double watch_chance_covered(const struct watch *watch, double mid_d, double error_d,
                            double duration_d)
{
    /* The middles of nine parts of a normal distribution that are equally likely. */
    static const double place[] = {-1.593, -0.967, -0.589, -0.282, 0.0, 0.282, 0.589, 0.967, 1.593};
    const size_t places = sizeof place / sizeof place[0];
    if (error_d <= SURE_SHARE * duration_d)
        return is_covered(watch, mid_d, duration_d) ? 1.0 : 0.0;
    size_t covered = 0;
    for (size_t i = 0; i < places; i++)
        covered += is_covered(watch, mid_d + place[i] * error_d, duration_d);
    return (double)covered / (double)places;
}

void watch_each_cycle(const struct watch *watch, const struct ephemeris_line *line,
                      double duration_d, bool (*visit)(void *context, int64_t cycle), void *context)
{
    double done = -INFINITY;
    for (size_t i = 0; i < watch->stretches; i++) {
        double starts = watch->stretch[i].starts_d - duration_d - line->epoch_d;
        double ends = watch->stretch[i].ends_d + duration_d - line->epoch_d;
        double from = fmax(ceil(starts / line->period_d), done + 1.0);
        double to = floor(ends / line->period_d);
        if (!(fabs(from) <= CYCLE_MOST && fabs(to) <= CYCLE_MOST))
            continue;
        for (int64_t cycle = (int64_t)from; cycle <= (int64_t)to; cycle++)
            if (!visit(context, cycle))
                return;
        done = fmax(done, to);
    }
}
