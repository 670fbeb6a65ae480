/* The tests that look at the folded light curve. */
#include <assert.h>
#include <gsl/gsl_cdf.h>
#include <math.h>
#include <stdlib.h>

#include "ebbmark/impostor.h"

#define BOX_BINS 4         /* bins of one duration when all phases are looked at */
#define OWN_DURATIONS 0.75 /* the series' own dips reach so far from their middle */
#define DURATIONS_LEAST 4.0
#define BINS_MOST 4194304.0
#define COVERED_LEAST 0.5 /* of the points that a box holds on average */
#define POINTS_LEAST 3.0
#define MAD_TO_SIGMA 1.4826

/* Time from the nearest dip of the series, -P/2 to P/2. */
static double since_dip(const struct ephemeris_folding *folding, double time_d)
{
    return remainder(time_d - folding->epoch_d, folding->period_d);
}

static bool is_own(const struct ephemeris_folding *folding, double since_d)
{
    return fabs(since_d) < OWN_DURATIONS * folding->duration_d;
}

struct mean {
    double sum, count;
};

/* Mean of the points beside the series' own dips. */
static struct mean level_of(const struct ephemeris_folding *folding)
{
    struct mean level = {0};
    for (size_t i = 0; i < folding->count; i++)
        if (!is_own(folding, since_dip(folding, folding->time[i]))) {
            level.sum += folding->flux[i];
            level.count += 1.0;
        }
    return level;
}

/* Depth of a box below the level in units of its points' own noise; NAN with too few points. */
static double score_of(const struct ephemeris_folding *folding, struct mean box, struct mean level)
{
    double usual = level.count * folding->duration_d /
                   (folding->period_d - 2.0 * OWN_DURATIONS * folding->duration_d);
    if (box.count < POINTS_LEAST || box.count < COVERED_LEAST * usual)
        return NAN;
    return (level.sum / level.count - box.sum / box.count) * sqrt(box.count) / folding->point_error;
}

static void fill_secondary(const struct ephemeris_folding *folding, struct mean box,
                           struct mean level, double phase, double scale, double places,
                           struct ephemeris_secondary *out)
{
    double score = score_of(folding, box, level);
    *out = (struct ephemeris_secondary){
        .phase = phase, .depth = NAN, .depth_error = NAN, .sigma = NAN, .chance = NAN};
    if (isnan(score))
        return;
    out->depth = level.sum / level.count - box.sum / box.count;
    out->depth_error = scale * folding->point_error / sqrt(box.count);
    out->sigma = score / scale;
    out->chance = -expm1(places * log1p(-gsl_cdf_ugaussian_Q(out->sigma)));
}

static int by_value(const void *left, const void *right)
{
    double a = *(const double *)left, b = *(const double *)right;
    return (a > b) - (a < b);
}

/* How much wider the scores scatter than noise of single points would have them, at least 1. A few
 * boxes that hold a real dip do not count. Sorts the scores. */
static double scatter_of(double *score, size_t count)
{
    if (count < 2)
        return 1.0;
    qsort(score, count, sizeof *score, by_value);
    double median = score[count / 2];
    for (size_t i = 0; i < count; i++)
        score[i] = fabs(score[i] - median);
    qsort(score, count, sizeof *score, by_value);
    return fmax(1.0, MAD_TO_SIGMA * score[count / 2]);
}

static struct mean box_at_half(const struct ephemeris_folding *folding)
{
    struct mean box = {0};
    for (size_t i = 0; i < folding->count; i++) {
        double since = since_dip(folding, folding->time[i]);
        if (0.5 * folding->period_d - fabs(since) < 0.5 * folding->duration_d) {
            box.sum += folding->flux[i];
            box.count += 1.0;
        }
    }
    return box;
}

static void fold_into(const struct ephemeris_folding *folding, struct mean *bin, size_t bins)
{
    for (size_t i = 0; i < folding->count; i++) {
        double phase = since_dip(folding, folding->time[i]) / folding->period_d;
        phase -= floor(phase);
        size_t at = (size_t)(phase * (double)bins);
        if (at >= bins)
            at = bins - 1;
        bin[at].sum += folding->flux[i];
        bin[at].count += 1.0;
    }
}

static struct mean box_from(const struct mean *bin, size_t first)
{
    struct mean box = {0};
    for (size_t i = first; i < first + BOX_BINS; i++) {
        box.sum += bin[i].sum;
        box.count += bin[i].count;
    }
    return box;
}

/* Boxes beside the series' own dips: scores of all, and which is deepest. */
static size_t score_boxes(const struct ephemeris_folding *folding, const struct mean *bin,
                          size_t bins, struct mean level, double *score, size_t *deepest)
{
    double width = folding->period_d / (double)bins, best = -INFINITY;
    size_t scores = 0;
    for (size_t i = 0; i + BOX_BINS <= bins; i++) {
        double from = (double)i * width, to = (double)(i + BOX_BINS) * width;
        double own = OWN_DURATIONS * folding->duration_d;
        double found = score_of(folding, box_from(bin, i), level);
        if (from < own || to > folding->period_d - own || isnan(found))
            continue;
        score[scores++] = found;
        if (found > best) {
            best = found;
            *deepest = i;
        }
    }
    return scores;
}

bool ephemeris_secondary_find(const struct ephemeris_folding *folding,
                              struct ephemeris_secondary *half, struct ephemeris_secondary *best,
                              struct base_error *error)
{
    assert(folding->point_error > 0.0);
    double durations = folding->period_d / folding->duration_d;
    if (!(folding->duration_d > 0.0) || !isfinite(folding->period_d) ||
        !isfinite(folding->epoch_d) || !(durations >= DURATIONS_LEAST))
        return base_fail(error, BASE_INVALID,
                         "A period of %g d has no room to look for a second dip of %g d.",
                         folding->period_d, folding->duration_d);
    size_t bins = (size_t)fmin(nearbyint(BOX_BINS * durations), BINS_MOST);
    struct mean *bin = calloc(bins, sizeof *bin);
    double *score = calloc(bins, sizeof *score);
    bool ok = bin != NULL && score != NULL;
    if (ok) {
        struct mean level = level_of(folding);
        size_t deepest = 0;
        fold_into(folding, bin, bins);
        size_t scores = score_boxes(folding, bin, bins, level, score, &deepest);
        double scale = scatter_of(score, scores);
        fill_secondary(folding, box_at_half(folding), level, 0.5, scale, 1.0, half);
        struct mean box = scores > 0 ? box_from(bin, deepest) : (struct mean){0};
        double phase = ((double)deepest + 0.5 * BOX_BINS) / (double)bins;
        fill_secondary(folding, box, level, phase, scale, (double)scores, best);
    } else {
        base_fail(error, BASE_MEMORY, "No memory to fold a light curve at %g d.",
                  folding->period_d);
    }
    free(score);
    free(bin);
    return ok;
}

/* ---- shape ---- */

#define SHAPE_BINS 96      /* across the dip and as much beside it */
#define SHAPE_REACH 1.2    /* durations either side of the middle */
#define SHAPE_FRACTIONS 51 /* ingress / T14 from 0 to 0.5 */
#define SHAPE_LENGTHS 56   /* T14 from 0.5 to 1.6 durations */
#define SHAPE_SHORTEST 0.5
#define SHAPE_LONGEST 1.6

struct shape_fit {
    double chi2, depth;
};

/* How far in the trapezoid of depth 1 is, at a time from its middle. */
static double blocked_at(double since_d, double total_d, double ingress_fraction)
{
    double inside = 0.5 * total_d - fabs(since_d);
    if (inside <= 0.0)
        return 0.0;
    return inside >= ingress_fraction * total_d ? 1.0 : inside / (ingress_fraction * total_d);
}

/* Depth and level by least squares for one trapezoid; chi2 INFINITY where data do not tell the
 * inside from the outside. */
static struct shape_fit fit_trapezoid(const struct mean *bin, double width_d, double point_error,
                                      double total_d, double ingress_fraction)
{
    double n = 0.0, x = 0.0, xx = 0.0, y = 0.0, xy = 0.0, yy = 0.0;
    for (size_t i = 0; i < SHAPE_BINS; i++) {
        double since = ((double)i + 0.5 - 0.5 * SHAPE_BINS) * width_d;
        double blocked = blocked_at(since, total_d, ingress_fraction);
        if (bin[i].count < 1.0)
            continue;
        double value = bin[i].sum / bin[i].count; /* flux - 1 */
        n += bin[i].count;
        x += bin[i].count * blocked;
        xx += bin[i].count * blocked * blocked;
        y += bin[i].count * value;
        xy += bin[i].count * blocked * value;
        yy += bin[i].count * value * value;
    }
    double spread = xx - x * x / n, product = xy - x * y / n;
    if (!(spread > 1e-6 * n))
        return (struct shape_fit){.chi2 = INFINITY};
    return (struct shape_fit){.chi2 = (yy - y * y / n - product * product / spread) /
                                      (point_error * point_error),
                              .depth = -product / spread};
}

/* The best chi2 for each ingress fraction over all lengths; fills the best of all. */
static double profile_shapes(const struct mean *bin, const struct ephemeris_folding *folding,
                             double *chi2, size_t *best, struct ephemeris_shape *out)
{
    double width = 2.0 * SHAPE_REACH * folding->duration_d / SHAPE_BINS, least = INFINITY;
    for (size_t f = 0; f < SHAPE_FRACTIONS; f++) {
        double fraction = 0.5 * (double)f / (SHAPE_FRACTIONS - 1);
        chi2[f] = INFINITY;
        for (size_t l = 0; l < SHAPE_LENGTHS; l++) {
            double length =
                SHAPE_SHORTEST + (SHAPE_LONGEST - SHAPE_SHORTEST) * (double)l / (SHAPE_LENGTHS - 1);
            double total = length * folding->duration_d;
            struct shape_fit fit = fit_trapezoid(bin, width, folding->point_error, total, fraction);
            chi2[f] = fmin(chi2[f], fit.chi2);
            if (fit.chi2 < least) {
                least = fit.chi2;
                *best = f;
                out->duration_d = total;
                out->depth = fit.depth;
            }
        }
    }
    return least;
}

void ephemeris_shape_fit(const struct ephemeris_folding *folding, struct ephemeris_shape *out)
{
    assert(folding->duration_d > 0.0 && folding->period_d > 0.0 && folding->point_error > 0.0);
    struct mean bin[SHAPE_BINS] = {0};
    double chi2[SHAPE_FRACTIONS], reach = SHAPE_REACH * folding->duration_d, filled = 0.0;
    size_t best = 0;
    *out = (struct ephemeris_shape){.v_shape = NAN,
                                    .low = NAN,
                                    .high = NAN,
                                    .duration_d = NAN,
                                    .depth = NAN,
                                    .v_worse_sigma = NAN};
    for (size_t i = 0; i < folding->count; i++) {
        double at = (since_dip(folding, folding->time[i]) + reach) / (2.0 * reach) * SHAPE_BINS;
        if (at >= 0.0 && at < SHAPE_BINS) {
            bin[(size_t)at].sum += folding->flux[i] - 1.0;
            bin[(size_t)at].count += 1.0;
        }
    }
    for (size_t i = 0; i < SHAPE_BINS; i++)
        filled += bin[i].count > 0.0;
    if (filled < COVERED_LEAST * SHAPE_BINS)
        return;
    double least = profile_shapes(bin, folding, chi2, &best, out);
    if (isinf(least))
        return;
    double scale = fmax(1.0, least / fmax(filled - 4.0, 1.0));
    size_t low = best, high = best;
    while (low > 0 && chi2[low - 1] <= least + scale)
        low--;
    while (high + 1 < SHAPE_FRACTIONS && chi2[high + 1] <= least + scale)
        high++;
    out->v_shape = (double)best / (SHAPE_FRACTIONS - 1);
    out->low = (double)low / (SHAPE_FRACTIONS - 1);
    out->high = (double)high / (SHAPE_FRACTIONS - 1);
    out->v_worse_sigma = sqrt(fmax(chi2[SHAPE_FRACTIONS - 1] - least, 0.0) / scale);
}
