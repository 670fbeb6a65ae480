/* What a rehearsal reviewer sees and marks. Nothing here knows of the server or of any truth. */
#include "ebbmark/rehearse.h"

#include <gsl/gsl_randist.h>
#include <gsl/gsl_sort.h>
#include <gsl/gsl_statistics_double.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/lightcurve.h"
#include "ebbmark/lightcurve_measure.h"

#define HOURS 24.0

static const double lengths_h[] = {1.0, 1.4, 2.0, 2.8, 4.0, 5.6, 8.0, 13.0};
#define LENGTHS (sizeof lengths_h / sizeof lengths_h[0])

/* The arrays of one look. */
struct view {
    size_t n;
    const double *time;
    double *flat; /* trend-removed flux */
    double *sums; /* n + 1: running sums of flat - 1 */
    bool *taken;  /* points that an earlier, stronger feature owns */
    struct lightcurve_noise noise;
};

/* Does [first, last) touch a point that is taken? */
static bool touches_taken(const struct view *view, size_t first, size_t last)
{
    for (size_t i = first; i < last; i++)
        if (view->taken[i])
            return true;
    return false;
}

static double mean_below(const struct view *view, size_t first, size_t last)
{
    return -(view->sums[last] - view->sums[first]) / (double)(last - first);
}

/* The strongest free box of one length, kept in *best when it beats it. */
static void search_length(const struct view *view, double length_d, struct rehearse_feature *best,
                          size_t *best_first, size_t *best_last)
{
    size_t expected = (size_t)(length_d / view->noise.cadence_d);
    size_t last = 0;
    for (size_t first = 0; first < view->n; first++) {
        while (last < view->n && view->time[last] < view->time[first] + length_d)
            last++;
        size_t points = last - first;
        if (points < 3 || 2 * points < expected)
            continue;
        double depth = mean_below(view, first, last);
        double snr = depth / lightcurve_noise_of_mean(&view->noise, length_d, points);
        if (!(snr > best->snr) || touches_taken(view, first, last))
            continue;
        *best = (struct rehearse_feature){.starts_d = view->time[first],
                                          .ends_d = view->time[last - 1],
                                          .depth = depth,
                                          .snr = snr};
        *best_first = first;
        *best_last = last;
    }
}

/* Own the points of a feature and half its length on either side. */
static void take_points(struct view *view, const struct rehearse_feature *feature)
{
    double margin = 0.5 * (feature->ends_d - feature->starts_d);
    for (size_t i = 0; i < view->n; i++)
        if (view->time[i] >= feature->starts_d - margin &&
            view->time[i] <= feature->ends_d + margin)
            view->taken[i] = true;
}

/* The median step, not the mean: gaps must not count. NAN when there is no memory. */
static double median_step(const double *time, size_t n)
{
    double *steps = malloc((n - 1) * sizeof *steps);
    if (steps == NULL)
        return NAN;
    for (size_t i = 0; i + 1 < n; i++)
        steps[i] = time[i + 1] - time[i];
    gsl_sort(steps, 1, n - 1);
    double median = gsl_stats_median_from_sorted_data(steps, 1, n - 1);
    free(steps);
    return median;
}

static bool prepare(struct view *view, const double *flux, struct base_error *error)
{
    size_t n = view->n;
    double cadence = median_step(view->time, n);
    view->flat = malloc(n * sizeof *view->flat);
    view->sums = calloc(n + 1, sizeof *view->sums);
    view->taken = calloc(n, sizeof *view->taken);
    if (isnan(cadence) || view->flat == NULL || view->sums == NULL || view->taken == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to look at a segment.");
    double gap_d = lightcurve_gap_d(cadence);
    if (!lightcurve_trend(view->time, flux, n, LIGHTCURVE_TREND_WINDOW_D, gap_d, view->flat, error))
        return false;
    for (size_t i = 0; i < n; i++)
        view->flat[i] = flux[i] / view->flat[i];
    for (size_t i = 0; i < n; i++)
        view->sums[i + 1] = view->sums[i] + view->flat[i] - 1.0;
    return lightcurve_noise_measure(view->time, view->flat, n, cadence, gap_d, &view->noise, error);
}

/* How unlike the two halves are: 0 for a transit, towards 1 for a ramp. */
static double asymmetry_of(const struct view *view, size_t first, size_t last)
{
    size_t middle = first + (last - first) / 2;
    double whole = mean_below(view, first, last);
    if (middle == first || whole <= 0.0)
        return 0.0;
    return fabs(mean_below(view, first, middle) - mean_below(view, middle, last)) / whole;
}

bool rehearse_look(const double *time, const double *flux, size_t n, double least_snr,
                   struct rehearse_feature *found, size_t *count, struct base_error *error)
{
    *count = 0;
    if (n < 10)
        return true;
    struct view view = {.n = n, .time = time};
    bool ok = prepare(&view, flux, error);
    while (ok && *count < REHEARSE_FEATURES_MAX) {
        struct rehearse_feature best = {.snr = least_snr};
        size_t first = 0, last = 0;
        for (size_t i = 0; i < LENGTHS; i++)
            search_length(&view, lengths_h[i] / HOURS, &best, &first, &last);
        if (last == 0)
            break;
        best.asymmetry = asymmetry_of(&view, first, last);
        take_points(&view, &best);
        found[(*count)++] = best;
    }
    free(view.taken);
    free(view.sums);
    free(view.flat);
    return ok;
}

struct rehearse_character rehearse_character_of(unsigned index, gsl_rng *random)
{
    /* Twenty reviewers hold one who marks at random and one who never marks; common practice, no
     * source. */
    static const struct rehearse_character kinds[] = {
        {"steady", 1.0, 2.0, 2.4, 0.004, 0.12},      {"keen", 2.2, 3.0, 2.4, 0.002, 0.08},
        {"hasty", -0.2, 1.0, 2.4, 0.006, 0.25},      {"steady", 1.2, 2.0, 2.4, 0.004, 0.12},
        {"easily drawn", 1.4, 0.0, 1.6, 0.02, 0.20}, {"random", -2.5, 0.0, 0.3, 0.13, 0.60},
        {"never marks", -7.0, 0.0, 0.0, 0.0, 0.10}};
    static const unsigned char turn[20] = {0, 1, 3, 2, 0, 3, 4, 1, 0, 5,
                                           3, 2, 0, 1, 3, 4, 0, 2, 6, 3};
    struct rehearse_character character = kinds[turn[index % sizeof turn]];
    if (character.hit_logit > -2.0)
        character.hit_logit += gsl_ran_gaussian(random, 0.5);
    return character;
}

/* Low and high of the flux inside a box, a little widened, as a hand would draw it. */
static void box_heights(struct rehearse_mark *mark, const double *time, const double *flux,
                        size_t n)
{
    double low = INFINITY, high = -INFINITY;
    for (size_t i = 0; i < n; i++)
        if (time[i] >= mark->starts_d && time[i] <= mark->ends_d) {
            low = fmin(low, flux[i]);
            high = fmax(high, flux[i]);
        }
    if (!isfinite(low)) {
        low = 0.99;
        high = 1.0;
    }
    double margin = 0.05 * (high - low);
    mark->low = low - margin;
    mark->high = high + margin;
}

/* Put the box inside the segment and give it at least one cadence. */
static bool box_fit_in(struct rehearse_mark *mark, const double *time, size_t n)
{
    double cadence = (time[n - 1] - time[0]) / (double)(n - 1);
    mark->starts_d = fmax(mark->starts_d, time[0]);
    mark->ends_d = fmin(mark->ends_d, time[n - 1]);
    return mark->ends_d - mark->starts_d >= cadence;
}

static struct rehearse_mark drawn_around(const struct rehearse_feature *feature,
                                         const struct rehearse_character *character,
                                         gsl_rng *random)
{
    double length = feature->ends_d - feature->starts_d;
    double scatter = (character->edge_scatter + 1.0 / fmax(feature->snr, 4.0)) * length;
    double widened = fabs(gsl_ran_gaussian(random, 0.15) + 0.15) * length;
    return (struct rehearse_mark){
        .starts_d = feature->starts_d - widened + gsl_ran_gaussian(random, scatter),
        .ends_d = feature->ends_d + widened + gsl_ran_gaussian(random, scatter),
        .sure = feature->snr > 8.0 || gsl_rng_uniform(random) < 0.3};
}

size_t rehearse_marks(const struct rehearse_character *character,
                      const struct rehearse_feature *features, size_t feature_count,
                      const double *time, const double *flux, size_t n, gsl_rng *random,
                      struct rehearse_mark *marks, size_t most)
{
    size_t count = 0;
    if (n < 2)
        return 0;
    for (size_t i = 0; i < feature_count && count < most; i++) {
        double logit = character->hit_logit +
                       character->snr_slope * log(fmax(features[i].snr, 1.0) / 10.0) -
                       character->doubt * features[i].asymmetry;
        if (gsl_rng_uniform(random) >= 1.0 / (1.0 + exp(-logit)))
            continue;
        marks[count] = drawn_around(&features[i], character, random);
        if (box_fit_in(&marks[count], time, n))
            box_heights(&marks[count++], time, flux, n);
    }
    unsigned chances = gsl_ran_poisson(random, character->chance_per_d * (time[n - 1] - time[0]));
    for (unsigned i = 0; i < chances && count < most; i++) {
        double length = 0.25 * exp(gsl_ran_gaussian(random, 0.7));
        double middle = time[0] + gsl_rng_uniform(random) * (time[n - 1] - time[0]);
        marks[count] = (struct rehearse_mark){.starts_d = middle - 0.5 * length,
                                              .ends_d = middle + 0.5 * length};
        if (box_fit_in(&marks[count], time, n))
            box_heights(&marks[count++], time, flux, n);
    }
    return count;
}
