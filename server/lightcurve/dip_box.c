/*
 * The box search. With the line through all points taken out first, and time counted from its
 * weighted mean, a box over [first, end) changes chi2 by (sum w r)^2 / norm, where norm = W - W^2 /
 * W_all - (sum w t)^2 / (sum w t^2)_all; sums over any range come from the points' running totals,
 * so that each box costs the same whatever its length.
 */
#include "dip.h"
#include "robust.h"
#include <math.h>

#define LENGTH_RATIO 1.1    /* of one box length tried to the next */
#define STEPS_A_LENGTH 12.0 /* positions tried in one box length */
#define LIKENESS_LEAST 0.15 /* common part over union of a box and the marked interval */
#define LENGTH_SPREAD 0.6   /* usual scatter of marks: of the log of their length … */
#define MID_SPREAD 0.4      /* … and of their middle, in their length; from memory */
#define BOX_POINTS_LEAST 2
#define BESIDE_SHARE 0.4      /* least norm, in the weight inside */
#define BESIDE_LEAST 3        /* points outside the box */
#define BESIDE_LEAST_A_SIDE 2 /* on each side, where a slope is fitted */
#define EDGE_REACH 400        /* edge positions either side that are weighed for the error */

/* The line through all points, and what the search needs beside it. */
struct search {
    const struct dip_points *points;
    const struct dip_bounds *bounds;
    struct dip_sums all;
    double slope, chi2; /* of the line; its level at the origin is the base */
    double rounding;    /* a gain no larger than this is none */
    double unit;        /* chi2 that one sigma is worth */
};

/* Where a box that takes in the point `first` starts: midway to the point before it, but never more
 * than half a cadence away. */
static double start_of(const struct dip_points *points, size_t first)
{
    double reach = 0.5 * points->cadence_d;
    if (first > 0)
        reach = fmin(reach, 0.5 * (points->time[first] - points->time[first - 1]));
    return points->time[first] - reach;
}

static double end_of(const struct dip_points *points, size_t end)
{
    double reach = 0.5 * points->cadence_d;
    if (end < points->count)
        reach = fmin(reach, 0.5 * (points->time[end] - points->time[end - 1]));
    return points->time[end - 1] + reach;
}

static struct search search_of(const struct dip_points *points, const struct dip_bounds *bounds)
{
    struct search search = {
        .points = points, .bounds = bounds, .all = points->total[points->count]};
    if (points->slope && search.all.wtt > 0.0)
        search.slope = search.all.wft / search.all.wtt;
    search.chi2 = fmax(search.all.wff - search.slope * search.all.wft, 0.0);
    search.rounding = 1e-20 * search.all.w * points->base * points->base;
    search.unit = points->scaled ? 1.0 : search.chi2 / (double)points->count;
    return search;
}

/* What the box over [first, end) takes from chi2, and its depth with the depth's variance. -1 where
 * too little lies beside the box to tell it from the line: the variance is w / norm times that of
 * the mean inside. */
static double gain_of(const struct search *search, size_t first, size_t end, double *depth,
                      double *variance)
{
    const struct dip_sums *from = &search->points->total[first], *to = &search->points->total[end];
    double w = to->w - from->w, m = to->wt - from->wt;
    double r = to->wf - from->wf - search->slope * m;
    double norm = w - w * w / search->all.w;
    if (search->points->slope)
        norm -= m * m / search->all.wtt;
    *depth = 0.0;
    *variance = INFINITY;
    if (!(norm > BESIDE_SHARE * w))
        return -1.0;
    *depth = -r / norm;
    *variance = 1.0 / norm;
    return r * r / norm;
}

/* Is there enough inside, enough beside, and is this still the thing that was marked? */
static bool allowed(const struct search *search, size_t first, size_t end)
{
    const struct dip_points *points = search->points;
    const struct dip_bounds *bounds = search->bounds;
    size_t before = first, after = points->count - end;
    if (end < first + BOX_POINTS_LEAST || before + after < BESIDE_LEAST)
        return false;
    if (points->slope && (before < BESIDE_LEAST_A_SIDE || after < BESIDE_LEAST_A_SIDE))
        return false;
    double starts = start_of(points, first), ends = end_of(points, end);
    double mid = 0.5 * (starts + ends);
    if (mid < bounds->mid_least_d || mid > bounds->mid_most_d)
        return false;
    double common = fmin(ends, bounds->ends_d) - fmax(starts, bounds->starts_d);
    double both = fmax(ends, bounds->ends_d) - fmin(starts, bounds->starts_d);
    return common >= LIKENESS_LEAST * both;
}

struct best {
    size_t first, end;
    double score; /* gain less penalty */
};

/* How much less likely, in chi2, a mark is to mean a box of other length or place. Without this the
 * best of some thousand boxes would stand out of pure noise by several sigma. */
static double penalty(const struct search *search, size_t first, size_t end)
{
    const struct dip_bounds *bounds = search->bounds;
    double starts = start_of(search->points, first), ends = end_of(search->points, end);
    double length = bounds->ends_d - bounds->starts_d;
    double longer = log((ends - starts) / length) / LENGTH_SPREAD;
    double off = 0.5 * (starts + ends - bounds->starts_d - bounds->ends_d);
    double later = off / (MID_SPREAD * length);
    return search->unit * (longer * longer + later * later);
}

/* Keep [first, end) if it is allowed, of the sign asked for, and takes more than the best so far.
 */
static bool try_box(const struct search *search, size_t first, size_t end, double sign,
                    struct best *best)
{
    double depth, variance;
    if (!allowed(search, first, end))
        return false;
    double score = gain_of(search, first, end, &depth, &variance);
    if (score <= fmax(best->score, search->rounding) || depth * sign <= 0.0)
        return false;
    score -= penalty(search, first, end);
    if (score <= best->score)
        return false;
    *best = (struct best){first, end, score};
    return true;
}

/* Boxes of one length at every place the bounds allow. */
static void search_places(const struct search *search, double sign, double length,
                          struct best *best)
{
    const struct dip_bounds *bounds = search->bounds;
    double step = length / STEPS_A_LENGTH;
    size_t places = (size_t)((bounds->mid_most_d - bounds->mid_least_d) / step) + 1;
    for (size_t i = 0; i < places; i++) {
        double mid = bounds->mid_least_d + (double)i * step;
        size_t first = lightcurve_first_not_before(search->points->time, 0, search->points->count,
                                                   mid - 0.5 * length);
        size_t end = lightcurve_first_not_before(search->points->time, 0, search->points->count,
                                                 mid + 0.5 * length);
        try_box(search, first, end, sign, best);
    }
}

static struct best search_grid(const struct search *search, double sign)
{
    const struct dip_bounds *bounds = search->bounds;
    struct best best = {.score = -INFINITY};
    double span = log(bounds->length_most_d / bounds->length_least_d);
    size_t lengths = (size_t)(span / log(LENGTH_RATIO)) + 1;
    for (size_t i = 0; i < lengths; i++)
        search_places(search, sign, bounds->length_least_d * pow(LENGTH_RATIO, (double)i), &best);
    return best;
}

/* Move either edge, by strides that shrink, while that takes more. */
static void climb(const struct search *search, double sign, struct best *best)
{
    for (size_t stride = 8; stride > 0; stride /= 2) {
        bool moved = true;
        while (moved) {
            size_t first = best->first, end = best->end;
            moved = false;
            if (first >= stride)
                moved |= try_box(search, first - stride, end, sign, best);
            moved |= try_box(search, first + stride, end, sign, best);
            if (end > first + stride)
                moved |= try_box(search, first, end - stride, sign, best);
            if (end + stride <= search->points->count)
                moved |= try_box(search, first, end + stride, sign, best);
        }
    }
}

/* The spread of one edge with the other held: every position weighed by exp(-delta chi2 / 2), and
 * the width of a cadence within which the edge cannot be seen. */
static double edge_error(const struct search *search, const struct best *best, bool start)
{
    const struct dip_points *points = search->points;
    size_t here = start ? best->first : best->end;
    size_t low = here > EDGE_REACH ? here - EDGE_REACH : 0, high = here + EDGE_REACH;
    if (start && high > best->end - 1)
        high = best->end - 1;
    if (!start && low < best->first + 1)
        low = best->first + 1;
    double weights = 0.0, first_moment = 0.0, second_moment = 0.0, of_depth, of_variance;
    double kept = gain_of(search, best->first, best->end, &of_depth, &of_variance);
    double at = start ? start_of(points, here) : end_of(points, here);
    for (size_t edge = low; edge <= high && edge <= points->count; edge++) {
        size_t first = start ? edge : best->first, end = start ? best->end : edge;
        double depth, variance, gain = gain_of(search, first, end, &depth, &variance);
        if (gain < 0.0)
            continue;
        double weight = exp(0.5 * fmin(gain - kept, 0.0));
        double off = (start ? start_of(points, first) : end_of(points, end)) - at;
        weights += weight;
        first_moment += weight * off;
        second_moment += weight * off * off;
    }
    double mean = first_moment / weights;
    double variance = fmax(second_moment / weights - mean * mean, 0.0);
    return sqrt(variance + points->cadence_d * points->cadence_d / 12.0);
}

static void fill_box(const struct search *search, const struct best *best, struct dip_box *box)
{
    double variance = NAN;
    double gain = gain_of(search, best->first, best->end, &box->depth, &variance);
    const struct dip_sums *from = &search->points->total[best->first];
    const struct dip_sums *to = &search->points->total[best->end];
    double w = to->w - from->w, m = to->wt - from->wt;
    box->found = true;
    box->first = best->first;
    box->end = best->end;
    box->starts_d = start_of(search->points, best->first);
    box->ends_d = end_of(search->points, best->end);
    box->depth_error = sqrt(variance);
    box->level = box->depth * w / search->all.w;
    box->slope = search->slope;
    if (search->points->slope)
        box->slope += box->depth * m / search->all.wtt;
    box->chi2 = fmax(search->chi2 - gain, 0.0);
    box->starts_error_d = edge_error(search, best, true);
    box->ends_error_d = edge_error(search, best, false);
}

/* Does the marked interval itself stand above its surroundings? */
static bool marked_is_high(const struct search *search)
{
    size_t first = lightcurve_first_not_before(search->points->time, 0, search->points->count,
                                               search->bounds->starts_d);
    size_t end = lightcurve_first_not_before(search->points->time, 0, search->points->count,
                                             search->bounds->ends_d);
    double depth, variance;
    return end > first && gain_of(search, first, end, &depth, &variance) > 0.0 && depth < 0.0;
}

void dip_box_search(const struct dip_points *points, const struct dip_bounds *bounds,
                    struct dip_box *box)
{
    struct search search = search_of(points, bounds);
    *box = (struct dip_box){0};
    struct best best = search_grid(&search, 1.0);
    double sign = 1.0;
    if (marked_is_high(&search)) {
        struct best bump = search_grid(&search, -1.0);
        if (bump.score > best.score) {
            best = bump;
            sign = -1.0;
        }
    }
    if (best.end > 0) {
        climb(&search, sign, &best);
        fill_box(&search, &best, box);
    }
}
