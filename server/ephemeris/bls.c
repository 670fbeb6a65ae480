#include "ebbmark/bls.h"

#include <assert.h>
#include <math.h>
#include <stdatomic.h>
#include <stdint.h>
#include <stdlib.h>

#define PERIODS_A_BLOCK 32
#define CYCLES_MOST 2147483648.0
/* A box that leaves less than this share of the weight outside has nothing to be compared with. */
#define OUTSIDE_LEAST 1e-9
/* Its multiple cuts 26 bits off a double (Dekker's splitting). */
#define SPLITTER 134217729.0

/* Of one bin while folding; of all bins up to and with it afterwards. */
struct bin {
    double light, weight;
};

struct point {
    double since;         /* d since the first time */
    double light, weight; /* weight x (flux - mean), weight; all weights sum to 1 */
};

struct work {
    const struct ephemeris_bls_search *search;
    struct ephemeris_bls_box *out;
    struct point *points;
    size_t count;
    double first, total; /* first time; sum of the weights before they were made to sum to 1 */
    double width;        /* of a bin, d */
    size_t *lengths;     /* of the durations, in bins */
    size_t longest;
    atomic_bool cancelled, no_memory;
};

/* Where the best box of a period is. Its merit is kept as a fraction, so that no box costs a
 * division. */
struct place {
    double over, under;
    double light, weight;
    size_t start, duration;
};

static size_t bins_of(double period, double width)
{
    return (size_t)ceil(period / width);
}

/* Add up the light of each bin of the folded period. The period is taken in two parts of 26 bits,
 * so that whole cycles of it are exact, and what is left when they are taken off loses nothing. */
static void fold(const struct work *work, double period, struct bin *bins, size_t count)
{
    double scaled = SPLITTER * period;
    double high = scaled - (scaled - period), low = period - high, rate = 1.0 / period;
    for (size_t i = 0; i < count; i++)
        bins[i] = (struct bin){0};
    struct bin sum = {0};
    size_t last = 0;
    for (size_t i = 0; i < work->count; i++) {
        const struct point *point = &work->points[i];
        double cycle = (double)(int64_t)(point->since * rate);
        double phase = (point->since - cycle * high) - cycle * low;
        if (phase < 0.0)
            phase += period;
        else if (phase >= period)
            phase -= period;
        size_t at = (size_t)(phase / work->width);
        if (at >= count)
            at = count - 1;
        if (at != last) { /* points of one bin mostly follow each other */
            bins[last].light += sum.light;
            bins[last].weight += sum.weight;
            sum = (struct bin){0};
            last = at;
        }
        sum.light += point->light;
        sum.weight += point->weight;
    }
    bins[last].light += sum.light;
    bins[last].weight += sum.weight;
}

/* Lay the ring's beginning behind its end and sum: sums[i] holds the bins before bin i. */
static void sum_up(const struct bin *bins, size_t count, size_t longest, struct bin *sums)
{
    struct bin sum = {0};
    size_t at = 0;
    for (size_t i = 0; i <= count + longest; i++) {
        sums[i] = sum;
        sum.light += bins[at].light;
        sum.weight += bins[at].weight;
        if (++at == count)
            at = 0;
    }
}

/* With light and weight of the whole being 0 and 1, a box of light s and weight w has the depth
 * -s / (w (1 - w)), the log-likelihood s^2 / (2 w (1 - w)^2) and the squared SNR s^2 / (w (1 - w)).
 */
static void try_duration(const struct bin *sums, size_t count, size_t length, size_t duration,
                         bool likelihood, struct place *best)
{
    for (size_t i = 0; i < count; i++) {
        double light = sums[i + length].light - sums[i].light;
        double weight = sums[i + length].weight - sums[i].weight;
        double outside = 1.0 - weight;
        double under = weight * outside * (likelihood ? outside : 1.0);
        if (light * light * best->under > best->over * under && light < 0.0 &&
            outside > OUTSIDE_LEAST && weight > 0.0)
            *best = (struct place){.over = light * light,
                                   .under = under,
                                   .light = light,
                                   .weight = weight,
                                   .start = i,
                                   .duration = duration};
    }
}

static struct ephemeris_bls_box box_of(const struct work *work, const struct place *best,
                                       double period)
{
    struct ephemeris_bls_box box = {.mid_d = work->first};
    if (best->over > 0.0) {
        double inside = best->weight, outside = 1.0 - inside;
        box.depth = -best->light / (inside * outside);
        box.depth_error = sqrt(1.0 / (inside * outside * work->total));
        box.snr = box.depth / box.depth_error;
        box.log_likelihood = 0.5 * inside * work->total * box.depth * box.depth;
        box.duration_d = work->search->duration[best->duration];
        box.mid_d =
            work->first + fmod((double)best->start * work->width + 0.5 * box.duration_d, period);
        box.power = work->search->objective == EPHEMERIS_BLS_SNR ? box.snr : box.log_likelihood;
    }
    return box;
}

static void search_block(void *context, size_t block)
{
    struct work *work = context;
    const struct ephemeris_bls_search *search = work->search;
    if (!work->cancelled && search->cancelled != NULL && search->cancelled(search->context))
        work->cancelled = true;
    if (work->cancelled || work->no_memory)
        return;
    size_t from = block * PERIODS_A_BLOCK, to = from + PERIODS_A_BLOCK, most = 0;
    if (to > search->periods)
        to = search->periods;
    for (size_t i = from; i < to; i++)
        if (bins_of(search->period[i], work->width) > most)
            most = bins_of(search->period[i], work->width);
    struct bin *bins = calloc(2 * most + work->longest + 1, sizeof *bins);
    if (bins == NULL) {
        work->no_memory = true;
        return;
    }
    struct bin *sums = bins + most;
    for (size_t i = from; i < to; i++) {
        size_t count = bins_of(search->period[i], work->width);
        struct place best = {.under = 1.0};
        fold(work, search->period[i], bins, count);
        sum_up(bins, count, work->longest, sums);
        for (size_t d = 0; d < search->durations; d++) {
            if (search->objective == EPHEMERIS_BLS_LIKELIHOOD)
                try_duration(sums, count, work->lengths[d], d, true, &best);
            else
                try_duration(sums, count, work->lengths[d], d, false, &best);
        }
        work->out[i] = box_of(work, &best, search->period[i]);
    }
    free(bins);
}

static bool check_data(const struct ephemeris_bls_data *data, double *first, double *last,
                       struct base_error *error)
{
    if (data->count < 2)
        return base_fail(error, BASE_INVALID,
                         "A period search needs at least 2 points; there are %zu.", data->count);
    *first = *last = data->time[0];
    for (size_t i = 0; i < data->count; i++) {
        double sigma = data->error == NULL ? 1.0 : data->error[i];
        if (!isfinite(data->time[i]) || !isfinite(data->flux[i]) || !isfinite(sigma) ||
            !(sigma > 0.0))
            return base_fail(error, BASE_INVALID,
                             "Point %zu of the light curve has no finite time and flux with an "
                             "error above 0; take it out.",
                             i);
        *first = fmin(*first, data->time[i]);
        *last = fmax(*last, data->time[i]);
    }
    return true;
}

static bool check_search(const struct ephemeris_bls_search *search, double length, double *shortest,
                         struct base_error *error)
{
    double longest = 0.0;
    *shortest = INFINITY;
    if (search->periods == 0 || search->durations == 0 || search->oversample == 0)
        return base_fail(error, BASE_INVALID,
                         "A period search needs at least one period, one duration and one bin to "
                         "the shortest duration.");
    for (size_t i = 0; i < search->durations; i++) {
        if (!isfinite(search->duration[i]) || !(search->duration[i] > 0.0))
            return base_fail(error, BASE_INVALID, "Duration %g d is not above 0.",
                             search->duration[i]);
        *shortest = fmin(*shortest, search->duration[i]);
        longest = fmax(longest, search->duration[i]);
    }
    for (size_t i = 0; i < search->periods; i++) {
        double period = search->period[i];
        if (!isfinite(period) || !(period > longest))
            return base_fail(error, BASE_INVALID,
                             "Period %g d is not above the longest duration, %g d.", period,
                             longest);
        if (period / *shortest * search->oversample > EPHEMERIS_BLS_BINS_MOST)
            return base_fail(error, BASE_TOO_LARGE,
                             "Period %g d has more than %d bins of %g d; take fewer bins to the "
                             "shortest duration.",
                             period, EPHEMERIS_BLS_BINS_MOST, *shortest / search->oversample);
        if (length / period > CYCLES_MOST)
            return base_fail(error, BASE_TOO_LARGE,
                             "Period %g d fits more than %.0f times into the data's %g d.", period,
                             CYCLES_MOST, length);
    }
    return true;
}

static void fill_points(struct work *work, const struct ephemeris_bls_data *data)
{
    double sum = 0.0, level = data->flux[0];
    for (size_t i = 0; i < data->count; i++) {
        double sigma = data->error == NULL ? 1.0 : data->error[i];
        work->points[i].since = data->time[i] - work->first;
        work->points[i].weight = 1.0 / (sigma * sigma);
        work->total += work->points[i].weight;
        sum += work->points[i].weight * (data->flux[i] - level);
    }
    level += sum / work->total;
    for (size_t i = 0; i < data->count; i++) {
        work->points[i].weight /= work->total;
        work->points[i].light = work->points[i].weight * (data->flux[i] - level);
    }
}

bool ephemeris_bls_power(const struct ephemeris_bls_data *data,
                         const struct ephemeris_bls_search *search, struct base_pool *pool,
                         struct ephemeris_bls_box *out, struct base_error *error)
{
    struct work work = {.search = search, .out = out, .count = data->count};
    double last = 0.0, shortest = 0.0;
    if (!check_data(data, &work.first, &last, error) ||
        !check_search(search, last - work.first, &shortest, error))
        return false;
    bool ok = true;
    work.width = shortest / search->oversample;
    work.points = calloc(data->count, sizeof *work.points);
    work.lengths = calloc(search->durations, sizeof *work.lengths);
    if (work.points == NULL || work.lengths == NULL) {
        ok = base_fail(error, BASE_MEMORY, "No memory for a period search over %zu points.",
                       data->count);
    } else {
        fill_points(&work, data);
        for (size_t i = 0; i < search->durations; i++) {
            work.lengths[i] = (size_t)lround(search->duration[i] / work.width);
            if (work.lengths[i] > work.longest)
                work.longest = work.lengths[i];
        }
        base_pool_for(pool, (search->periods + PERIODS_A_BLOCK - 1) / PERIODS_A_BLOCK, search_block,
                      &work);
        if (work.cancelled)
            ok = base_fail(error, BASE_CANCELLED, "The period search was stopped.");
        else if (work.no_memory)
            ok = base_fail(error, BASE_MEMORY, "No memory for a period search up to %g d.",
                           search->period[search->periods - 1]);
    }
    free(work.lengths);
    free(work.points);
    return ok;
}

size_t ephemeris_bls_grid(double least_d, double most_d, double shortest_duration_d,
                          double length_d, double *period, size_t room)
{
    assert(least_d > 0.0 && most_d > least_d && isfinite(most_d) && shortest_duration_d > 0.0 &&
           length_d > 0.0);
    double range = log(most_d / least_d);
    double steps = ceil(range / log1p(EPHEMERIS_BLS_DRIFT * shortest_duration_d / length_d));
    if (!(steps < EPHEMERIS_BLS_PERIODS_MOST - 1))
        steps = EPHEMERIS_BLS_PERIODS_MOST - 1;
    size_t count = (size_t)steps + 1;
    for (size_t i = 0; i < count && i < room; i++)
        period[i] = i + 1 == count ? most_d : least_d * exp(range * ((double)i / steps));
    return count;
}
