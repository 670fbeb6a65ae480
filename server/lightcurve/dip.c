/*
 * Measuring one dip: which points are taken, which of box and trapezoid is kept, and what follows.
 */
#include "dip.h"

#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve_measure.h"
#include "robust.h"

#define BESIDE_LENGTHS 1.5      /* data taken either side, in interval lengths … */
#define BESIDE_LEAST_D 0.3      /* … but at least this */
#define INSIDE_LEAST 3          /* points in the interval */
#define POINTS_LEAST 10         /* points in all */
#define POINTS_FITTED_MOST 4000 /* more are averaged down to about so many */
#define AWAY_LENGTHS 1.25       /* so many lengths off, a point cannot be part of the dip */
#define OUTLIER_SIGMAS 6.0
#define OUTLIERS_MOST 0.4      /* more than this share beside the dip are no outliers */
#define SIDE_POINTS_LEAST 3    /* on both sides, for a slope … */
#define SIDE_LENGTH_LEAST 0.25 /* … over this share of the interval */
#define MID_REACH 0.25         /* the middle may lie outside the interval by so many lengths */
#define LENGTH_SHORTEST 0.2    /* box lengths tried, in interval lengths */
#define LENGTH_LONGEST 3.0
#define TRAPEZOID_GAIN 2.0 /* chi2 that one parameter more must be worth (Akaike 1974) */

/* What was asked for. */
struct task {
    const double *time, *flux, *error;
    size_t n;
    double gap_d, starts_d, ends_d;
    const struct lightcurve_noise *noise;
    double cadence_d;
    size_t first, end; /* points taken: [first, end) */
};

static size_t first_not_before(const double *time, size_t n, double at)
{
    size_t low = 0, high = n;
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        if (time[middle] < at)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

/* Choose the points: the interval and its surroundings as far as the nearest gap. False when they
 * are too few. */
static bool choose_points(struct task *task)
{
    double length = task->ends_d - task->starts_d;
    if (!(length > 0.0) || !isfinite(length))
        return false;
    double beside = fmax(BESIDE_LENGTHS * length, BESIDE_LEAST_D);
    size_t inside = first_not_before(task->time, task->n, task->starts_d);
    size_t after = first_not_before(task->time, task->n, nextafter(task->ends_d, INFINITY));
    if (after < inside + INSIDE_LEAST)
        return false;
    size_t least = first_not_before(task->time, task->n, task->starts_d - beside);
    size_t most = first_not_before(task->time, task->n, task->ends_d + beside);
    task->first = inside;
    while (task->first > least &&
           task->time[task->first] - task->time[task->first - 1] <= task->gap_d)
        task->first--;
    task->end = after;
    while (task->end < most && task->time[task->end] - task->time[task->end - 1] <= task->gap_d)
        task->end++;
    return task->end - task->first >= POINTS_LEAST;
}

/* The usual step and the point noise, from the points themselves where nobody said. */
static double usual_step(const struct task *task, double *scratch)
{
    if (task->noise->cadence_d > 0.0 && isfinite(task->noise->cadence_d))
        return task->noise->cadence_d;
    size_t count = task->end - task->first - 1;
    for (size_t i = 0; i < count; i++)
        scratch[i] = task->time[task->first + i + 1] - task->time[task->first + i];
    return lightcurve_median(scratch, count);
}

static double usual_noise(const struct task *task, double *scratch, double *more)
{
    if (task->noise->point > 0.0 && isfinite(task->noise->point))
        return task->noise->point;
    size_t count = task->end - task->first - 1;
    for (size_t i = 0; i < count; i++)
        scratch[i] = task->flux[task->first + i + 1] - task->flux[task->first + i];
    double middle = lightcurve_median(scratch, count);
    return LIGHTCURVE_MAD_TO_SIGMA * lightcurve_mad(scratch, count, middle, more) / sqrt(2.0);
}

/* A single point that stands far above the median of the five around it, as a particle's hit does.
 * Low points are never taken for outliers here. */
static bool is_spike(const struct task *task, size_t i, double sigma)
{
    double near[5];
    size_t low = i >= task->first + 2 ? i - 2 : task->first, count = 0;
    for (size_t j = low; j < task->end && j <= i + 2; j++)
        near[count++] = task->flux[j];
    return sigma > 0.0 && task->flux[i] - lightcurve_median(near, count) > OUTLIER_SIGMAS * sigma;
}

static bool is_beside(const struct task *task, size_t i)
{
    double away = AWAY_LENGTHS * (task->ends_d - task->starts_d);
    return task->time[i] < task->starts_d - away || task->time[i] > task->ends_d + away;
}

/* The band of flux that points well beside the interval must lie in, so that a neighbouring dip
 * does not pull the level. Infinite where too many would be lost. */
static void find_band(const struct task *task, double sigma, double *values, double *scratch,
                      double *low, double *high)
{
    size_t count = 0, lost = 0;
    *low = -INFINITY;
    *high = INFINITY;
    for (size_t i = task->first; i < task->end; i++)
        if (is_beside(task, i))
            values[count++] = task->flux[i];
    if (count == 0)
        return;
    double middle = lightcurve_median(values, count);
    double spread = LIGHTCURVE_MAD_TO_SIGMA * lightcurve_mad(values, count, middle, scratch);
    double reach = OUTLIER_SIGMAS * fmax(spread, sigma);
    for (size_t i = 0; i < count; i++)
        lost += fabs(values[i] - middle) > reach;
    if (!(reach > 0.0) || (double)lost > OUTLIERS_MOST * (double)count)
        return;
    *low = middle - reach;
    *high = middle + reach;
}

/* Average neighbours so that about POINTS_FITTED_MOST are left; never across a break. */
static void average_down(struct dip_points *points)
{
    size_t held = (points->count + POINTS_FITTED_MOST - 1) / POINTS_FITTED_MOST;
    if (held <= 1)
        return;
    double longest = 2.0 * (double)held * points->cadence_d;
    size_t made = 0;
    for (size_t i = 0, end; i < points->count; i = end) {
        double weight = 0.0, time = 0.0, flux = 0.0, starts = points->time[i];
        for (end = i; end < points->count && end < i + held; end++) {
            if (points->time[end] - starts > longest)
                break;
            weight += points->weight[end];
            time += points->weight[end] * (points->time[end] - starts);
            flux += points->weight[end] * points->flux[end];
        }
        points->time[made] = starts + time / weight;
        points->flux[made] = flux / weight;
        points->weight[made++] = weight;
    }
    points->count = made;
    points->cadence_d *= (double)held;
}

/* Errors as weights. Given errors keep their ratios, and their median becomes sigma. */
static void weigh(const struct task *task, double sigma, double *scratch, struct dip_points *points,
                  const size_t *place)
{
    double unit = 1.0;
    if (task->error != NULL) {
        for (size_t i = 0; i < points->count; i++)
            scratch[i] = task->error[place[i]];
        unit = lightcurve_median(scratch, points->count);
    }
    for (size_t i = 0; i < points->count; i++) {
        double error = task->error != NULL ? task->error[place[i]] / unit * sigma : sigma;
        points->weight[i] = error > 0.0 && isfinite(error) ? 1.0 / (error * error) : 0.0;
    }
}

/* Count time from the weighted mean, and see whether there is data on both sides. */
static void centre(const struct task *task, struct dip_points *points)
{
    double weight = 0.0, moment = 0.0, first = points->time[0];
    for (size_t i = 0; i < points->count; i++) {
        weight += points->weight[i];
        moment += points->weight[i] * (points->time[i] - first);
    }
    points->origin_d = first + moment / weight;
    for (size_t i = 0; i < points->count; i++)
        points->time[i] -= points->origin_d;
    double starts = task->starts_d - points->origin_d, ends = task->ends_d - points->origin_d;
    double least = SIDE_LENGTH_LEAST * (ends - starts);
    size_t n = points->count, before = 0, after = 0;
    while (before < n && points->time[before] < starts)
        before++;
    while (after < n && points->time[n - 1 - after] > ends)
        after++;
    points->slope = before >= SIDE_POINTS_LEAST && after >= SIDE_POINTS_LEAST &&
                    starts - points->time[0] >= least && points->time[n - 1] - ends >= least;
}

/* Gather the points to fit. `room` holds 5 x (end - first) values, `place` end - first. */
static void gather(struct task *task, double *room, size_t *place, struct dip_points *points)
{
    size_t most = task->end - task->first;
    double *scratch = room + 3 * most, *more = room + 4 * most;
    *points = (struct dip_points){.time = room, .flux = room + most, .weight = room + 2 * most};
    task->cadence_d = points->cadence_d = usual_step(task, scratch);
    double sigma = usual_noise(task, scratch, more), low, high;
    find_band(task, sigma, scratch, more, &low, &high);
    for (size_t i = task->first; i < task->end; i++) {
        bool outside = task->flux[i] < low || task->flux[i] > high;
        if ((outside && is_beside(task, i)) || is_spike(task, i, sigma))
            continue;
        points->time[points->count] = task->time[i];
        points->flux[points->count] = task->flux[i];
        place[points->count++] = i;
    }
    points->scaled = sigma > 0.0;
    weigh(task, points->scaled ? sigma : 1.0, scratch, points, place);
    average_down(points);
    centre(task, points);
}

static struct dip_bounds bounds_of(const struct task *task, const struct dip_points *points)
{
    double starts = task->starts_d - points->origin_d, ends = task->ends_d - points->origin_d;
    double length = ends - starts;
    return (struct dip_bounds){.starts_d = starts,
                               .ends_d = ends,
                               .mid_least_d = starts - MID_REACH * length,
                               .mid_most_d = ends + MID_REACH * length,
                               .length_least_d = LENGTH_SHORTEST * length,
                               .length_most_d = LENGTH_LONGEST * length};
}

/* ---- what the fit says ------------------------------------------------------------------- */

static void take_nothing(const struct task *task, const struct dip_points *points,
                         struct lightcurve_dip *out)
{
    double weight = 0.0, flux = 0.0;
    for (size_t i = 0; i < points->count; i++) {
        weight += points->weight[i];
        flux += points->weight[i] * points->flux[i];
    }
    out->shape = LIGHTCURVE_DIP_BOX;
    out->mid_d = 0.5 * (task->starts_d + task->ends_d);
    out->duration_d = task->ends_d - task->starts_d;
    out->depth = 0.0;
    out->level = flux / weight;
    out->slope = 0.0;
    out->ingress_fraction = 0.0;
}

/* chi2 per degree of freedom, at least 1 where the noise is known: the unit in which gains count.
 */
static double unit_of(const struct dip_points *points, double chi2)
{
    double spare = (double)points->count - DIP_PARAMETERS;
    double unit = spare > 0.0 ? chi2 / spare : 0.0;
    return points->scaled ? fmax(unit, 1.0) : unit;
}

/* Is the trapezoid worth its parameter, with chi2 counted in the scatter that there is? */
static bool is_trapezoid(const struct dip_points *points, const struct dip_box *box,
                         const struct dip_trapezoid *fit)
{
    return fit->found && box->chi2 - fit->chi2 > TRAPEZOID_GAIN * unit_of(points, fit->chi2);
}

static void take_box(const struct dip_points *points, const struct dip_box *box,
                     struct lightcurve_dip *out)
{
    double mid = 0.5 * (box->starts_d + box->ends_d);
    double edges = hypot(box->starts_error_d, box->ends_error_d);
    out->shape = LIGHTCURVE_DIP_BOX;
    out->mid_d = points->origin_d + mid;
    out->mid_error_d = 0.5 * edges;
    out->duration_d = box->ends_d - box->starts_d;
    out->duration_error_d = edges;
    out->ingress_fraction = 0.0;
    out->level = box->level + box->slope * mid;
    out->slope = box->slope;
    out->depth = box->depth / out->level;
    out->depth_error = box->depth_error / out->level;
    out->chi2 = box->chi2;
}

/* NAN for what stands at a limit: the data did not say how far it goes. */
static double error_of(const struct dip_trapezoid *fit, int parameter)
{
    double variance = fit->covariance[parameter][parameter];
    return variance > 0.0 ? sqrt(variance) : NAN;
}

static void take_trapezoid(const struct dip_points *points, const struct dip_box *box,
                           const struct dip_trapezoid *fit, struct lightcurve_dip *out)
{
    const double *value = fit->value;
    out->shape = LIGHTCURVE_DIP_TRAPEZOID;
    out->mid_d = points->origin_d + value[DIP_MID];
    out->mid_error_d = error_of(fit, DIP_MID);
    if (isnan(out->mid_error_d))
        out->mid_error_d = 0.5 * hypot(box->starts_error_d, box->ends_error_d);
    out->duration_d = value[DIP_LENGTH];
    out->duration_error_d = error_of(fit, DIP_LENGTH);
    out->ingress_fraction = value[DIP_INGRESS];
    out->level = value[DIP_LEVEL];
    out->slope = value[DIP_SLOPE];
    out->depth = value[DIP_DEPTH] / out->level;
    double variance = fit->covariance[DIP_DEPTH][DIP_DEPTH] -
                      2.0 * out->depth * fit->covariance[DIP_DEPTH][DIP_LEVEL] +
                      out->depth * out->depth * fit->covariance[DIP_LEVEL][DIP_LEVEL];
    out->depth_error = sqrt(variance) / out->level;
    out->chi2 = fit->chi2;
}

/* Let the errors of length and depth hold what an ingress that can hardly be seen leaves open. A
 * box's own errors know nothing of it; a trapezoid's do, as far as its curvature tells. */
static void widen_errors(const struct dip_points *points, const struct dip_bounds *bounds,
                         const struct dip_box *box, struct lightcurve_dip *dip)
{
    double longer, deeper;
    struct dip_kept kept = {dip->duration_d, dip->depth * dip->level, dip->chi2};
    dip_trapezoid_spread(points, bounds, box, &kept, unit_of(points, dip->chi2), &longer, &deeper);
    deeper /= dip->level;
    if (dip->shape == LIGHTCURVE_DIP_BOX) {
        dip->duration_error_d = hypot(dip->duration_error_d, longer);
        dip->depth_error = hypot(dip->depth_error, deeper);
    } else {
        dip->duration_error_d = fmax(dip->duration_error_d, longer);
        dip->depth_error = fmax(dip->depth_error, deeper);
    }
}

static size_t points_within(const struct task *task, double mid_d, double length_d)
{
    double starts = mid_d - 0.5 * length_d, ends = mid_d + 0.5 * length_d;
    return first_not_before(task->time, task->n, nextafter(ends, INFINITY)) -
           first_not_before(task->time, task->n, starts);
}

/* How much of T14 lies within half a cadence of a point. */
static double covered_share(const struct task *task, const struct lightcurve_dip *dip)
{
    double starts = dip->mid_d - 0.5 * dip->duration_d, ends = dip->mid_d + 0.5 * dip->duration_d;
    double half = 0.5 * task->cadence_d, covered = 0.0, until = starts;
    for (size_t i = first_not_before(task->time, task->n, starts - half);
         i < task->n && task->time[i] <= ends + half; i++) {
        double from = fmax(task->time[i] - half, until), to = fmin(task->time[i] + half, ends);
        if (to > from)
            covered += to - from;
        until = fmax(until, to);
    }
    return fmin(covered / dip->duration_d, 1.0);
}

/* From `at` to the nearest gap or end of data in the direction of step; 0 when `at` lies in one. */
static double room_before_gap(const struct task *task, double at, bool forward)
{
    const double *time = task->time;
    size_t after = first_not_before(time, task->n, at);
    if (after == 0 || after == task->n)
        return 0.0;
    if (time[after] > at && time[after] - time[after - 1] > task->gap_d)
        return 0.0;
    if (forward)
        return time[lightcurve_stretch_end(time, task->n, after, task->gap_d) - 1] - at;
    size_t first = after - 1;
    while (first > 0 && time[first] - time[first - 1] <= task->gap_d)
        first--;
    return at - time[first];
}

/* How the second half of the dip differs from the first, in depths. */
static double asymmetry_of(const struct dip_points *points, const struct lightcurve_dip *dip)
{
    double sum[2] = {0.0, 0.0}, weight[2] = {0.0, 0.0};
    for (size_t i = 0; i < points->count; i++) {
        double since = points->time[i] + points->origin_d - dip->mid_d;
        if (fabs(since) > 0.5 * dip->duration_d)
            continue;
        int half = since > 0.0;
        sum[half] += points->weight[i] * (points->flux[i] - dip->level - dip->slope * since);
        weight[half] += points->weight[i];
    }
    if (weight[0] <= 0.0 || weight[1] <= 0.0 || dip->depth == 0.0)
        return NAN;
    return (sum[1] / weight[1] - sum[0] / weight[0]) / (dip->depth * dip->level);
}

/* Errors from the curvature assume white noise of the size given. They grow by what the windows
 * show above that, or by the scatter about the fit, whichever is more. */
static void scale_errors(const struct task *task, const struct dip_points *points,
                         struct lightcurve_dip *out)
{
    double factor = sqrt(unit_of(points, out->chi2));
    if (!points->scaled) {
        out->mid_error_d = out->duration_error_d = out->depth_error = NAN;
        return;
    }
    double length = out->duration_d * (1.0 - out->ingress_fraction); /* at half depth */
    size_t inside = points_within(task, out->mid_d, length);
    if (inside > 0) {
        double white = task->noise->point / sqrt((double)inside);
        double of_mean = lightcurve_noise_of_mean(task->noise, length, inside);
        if (white > 0.0)
            factor = fmax(factor, of_mean / white);
        out->snr = of_mean > 0.0 ? out->depth / of_mean : NAN;
    }
    out->mid_error_d *= factor;
    out->duration_error_d *= factor;
    out->depth_error *= factor;
}

static void nothing_measured(struct lightcurve_dip *out)
{
    *out = (struct lightcurve_dip){.mid_d = NAN,
                                   .mid_error_d = NAN,
                                   .duration_d = NAN,
                                   .duration_error_d = NAN,
                                   .ingress_fraction = NAN,
                                   .depth = NAN,
                                   .depth_error = NAN,
                                   .level = NAN,
                                   .slope = NAN,
                                   .snr = NAN,
                                   .chi2 = NAN,
                                   .chi2_box = NAN,
                                   .covered = NAN,
                                   .gap_distance_d = NAN,
                                   .v_shape = NAN,
                                   .asymmetry = NAN};
}

/* Fit and fill `out`. False when out of memory. */
static bool measure(struct task *task, double *room, size_t *place, struct lightcurve_dip *out)
{
    struct dip_points points;
    struct dip_box box;
    struct dip_trapezoid trapezoid;
    gather(task, room, place, &points);
    if (points.count < POINTS_LEAST)
        return true;
    struct dip_bounds bounds = bounds_of(task, &points);
    if (!dip_box_search(&points, &bounds, &box))
        return false;
    if (!box.found) {
        take_nothing(task, &points, out);
    } else {
        dip_trapezoid_fit(&points, &bounds, &box, &trapezoid);
        out->chi2_box = box.chi2;
        if (is_trapezoid(&points, &box, &trapezoid))
            take_trapezoid(&points, &box, &trapezoid, out);
        else
            take_box(&points, &box, out);
        widen_errors(&points, &bounds, &box, out);
    }
    if (!(out->level > 0.0)) {
        nothing_measured(out);
        return true;
    }
    out->points = task->end - task->first;
    out->points_in = points_within(task, out->mid_d, out->duration_d);
    out->covered = covered_share(task, out);
    scale_errors(task, &points, out);
    double starts = out->mid_d - 0.5 * out->duration_d, ends = out->mid_d + 0.5 * out->duration_d;
    out->gap_distance_d =
        fmin(room_before_gap(task, starts, false), room_before_gap(task, ends, true));
    out->v_shape = 2.0 * out->ingress_fraction;
    out->asymmetry = asymmetry_of(&points, out);
    return true;
}

bool lightcurve_dip_measure(const double *time, const double *flux, const double *error, size_t n,
                            double gap_d, double starts_d, double ends_d,
                            const struct lightcurve_noise *noise, struct lightcurve_dip *out,
                            struct base_error *err)
{
    struct task task = {.time = time,
                        .flux = flux,
                        .error = error,
                        .n = n,
                        .gap_d = gap_d,
                        .starts_d = starts_d,
                        .ends_d = ends_d,
                        .noise = noise};
    nothing_measured(out);
    if (!choose_points(&task))
        return true;
    size_t most = task.end - task.first;
    double *room = calloc(most, 5 * sizeof *room);
    size_t *place = calloc(most, sizeof *place);
    bool ok = room != NULL && place != NULL && measure(&task, room, place, out);
    if (!ok) {
        nothing_measured(out);
        base_fail(err, BASE_MEMORY, "Not enough memory to measure a dip over %zu points.", most);
    }
    free(place);
    free(room);
    return ok;
}

double lightcurve_dip_model(const struct lightcurve_dip *dip, double time_d)
{
    double since = time_d - dip->mid_d;
    double shape = dip_trapezoid_shape(since, dip->duration_d, dip->ingress_fraction);
    return dip->level + dip->slope * since - dip->depth * dip->level * shape;
}
