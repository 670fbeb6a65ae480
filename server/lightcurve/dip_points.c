/*
 * Which points a dip is fitted to, and their running totals.
 */
#include "dip.h"

#include <math.h>
#include <stdlib.h>

#include "robust.h"

#define BESIDE_LENGTHS 1.5      /* data taken either side, in interval lengths … */
#define BESIDE_LEAST_D 0.3      /* … but at least this */
#define INSIDE_LEAST 3          /* points in the interval */
#define POINTS_FITTED_MOST 4000 /* more are averaged down to about so many */
#define AWAY_LENGTHS 1.25       /* so many lengths off, a point cannot be part of the dip */
#define OUTLIER_SIGMAS 6.0
#define OUTLIERS_MOST 0.4      /* more than this share beside the dip are no outliers */
#define SIDE_POINTS_LEAST 3    /* on both sides, for a slope … */
#define SIDE_LENGTH_LEAST 0.25 /* … over this share of the interval */

bool dip_points_choose(struct dip_task *task)
{
    double length = task->ends_d - task->starts_d;
    if (!(length > 0.0) || !isfinite(length))
        return false;
    double beside = fmax(BESIDE_LENGTHS * length, BESIDE_LEAST_D);
    size_t inside = lightcurve_first_not_before(task->time, 0, task->n, task->starts_d);
    size_t after =
        lightcurve_first_not_before(task->time, 0, task->n, nextafter(task->ends_d, INFINITY));
    if (after < inside + INSIDE_LEAST)
        return false;
    size_t least = lightcurve_first_not_before(task->time, 0, task->n, task->starts_d - beside);
    size_t most = lightcurve_first_not_before(task->time, 0, task->n, task->ends_d + beside);
    task->first = inside;
    while (task->first > least &&
           task->time[task->first] - task->time[task->first - 1] <= task->gap_d)
        task->first--;
    task->end = after;
    while (task->end < most && task->time[task->end] - task->time[task->end - 1] <= task->gap_d)
        task->end++;
    return task->end - task->first >= DIP_POINTS_LEAST;
}

/* The usual step and the point noise, from the points themselves where nobody said. */
static double usual_step(const struct dip_task *task, double *scratch)
{
    if (task->noise->cadence_d > 0.0 && isfinite(task->noise->cadence_d))
        return task->noise->cadence_d;
    size_t count = task->end - task->first - 1;
    for (size_t i = 0; i < count; i++)
        scratch[i] = task->time[task->first + i + 1] - task->time[task->first + i];
    return lightcurve_median(scratch, count);
}

static double usual_noise(const struct dip_task *task, double *scratch, double *more)
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
static bool is_spike(const struct dip_task *task, size_t i, double sigma)
{
    double near[5];
    size_t low = i >= task->first + 2 ? i - 2 : task->first, count = 0;
    for (size_t j = low; j < task->end && j <= i + 2; j++)
        near[count++] = task->flux[j];
    return sigma > 0.0 && task->flux[i] - lightcurve_median(near, count) > OUTLIER_SIGMAS * sigma;
}

static bool is_beside(const struct dip_task *task, size_t i)
{
    double away = AWAY_LENGTHS * (task->ends_d - task->starts_d);
    return task->time[i] < task->starts_d - away || task->time[i] > task->ends_d + away;
}

/* The band of flux that points well beside the interval must lie in, so that a neighbouring dip
 * does not pull the level. Infinite where too many would be lost. */
static void find_band(const struct dip_task *task, double sigma, double *values, double *scratch,
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
static void weigh(const struct dip_task *task, double sigma, double *scratch,
                  struct dip_points *points, const size_t *place)
{
    double unit = NAN;
    bool given = task->error != NULL && points->count > 0;
    if (given) {
        for (size_t i = 0; i < points->count; i++)
            scratch[i] = task->error[place[i]];
        unit = lightcurve_median(scratch, points->count);
    }
    for (size_t i = 0; i < points->count; i++) {
        double ratio = given && unit > 0.0 ? task->error[place[i]] / unit : 1.0;
        double error = ratio > 0.0 && isfinite(ratio) ? ratio * sigma : sigma;
        points->weight[i] = 1.0 / (error * error);
    }
}

/* Count time and flux from their weighted means, so that sums of squares keep their digits. */
static void centre(struct dip_points *points)
{
    double weight = 0.0, moment = 0.0, flux = 0.0, first = points->time[0];
    for (size_t i = 0; i < points->count; i++) {
        weight += points->weight[i];
        moment += points->weight[i] * (points->time[i] - first);
        flux += points->weight[i] * points->flux[i];
    }
    points->origin_d = first + moment / weight;
    points->base = flux / weight;
    for (size_t i = 0; i < points->count; i++) {
        points->time[i] -= points->origin_d;
        points->flux[i] -= points->base;
    }
}

/* Is there data enough on both sides of the interval for a slope? */
static bool has_sides(const struct dip_task *task, const struct dip_points *points)
{
    double starts = task->starts_d - points->origin_d, ends = task->ends_d - points->origin_d;
    double least = SIDE_LENGTH_LEAST * (ends - starts);
    size_t n = points->count, before = 0, after = 0;
    while (before < n && points->time[before] < starts)
        before++;
    while (after < n && points->time[n - 1 - after] > ends)
        after++;
    return before >= SIDE_POINTS_LEAST && after >= SIDE_POINTS_LEAST &&
           starts - points->time[0] >= least && points->time[n - 1] - ends >= least;
}

static void add_up(struct dip_points *points)
{
    points->total[0] = (struct dip_sums){0};
    for (size_t i = 0; i < points->count; i++) {
        double w = points->weight[i], t = points->time[i], f = points->flux[i];
        struct dip_sums sums = points->total[i];
        sums.w += w;
        sums.wt += w * t;
        sums.wtt += w * t * t;
        sums.wf += w * f;
        sums.wft += w * f * t;
        sums.wff += w * f * f;
        points->total[i + 1] = sums;
    }
}

/* Take those of the task's points that are no outliers. `place` says which they are. */
static void take_points(const struct dip_task *task, double sigma, double *scratch, double *more,
                        struct dip_points *points, size_t *place)
{
    double low, high;
    find_band(task, sigma, scratch, more, &low, &high);
    for (size_t i = task->first; i < task->end; i++) {
        bool outside = task->flux[i] < low || task->flux[i] > high;
        if ((outside && is_beside(task, i)) || is_spike(task, i, sigma))
            continue;
        points->time[points->count] = task->time[i];
        points->flux[points->count] = task->flux[i];
        place[points->count++] = i;
    }
}

bool dip_points_gather(struct dip_task *task, struct dip_points *points)
{
    size_t most = task->end - task->first;
    *points = (struct dip_points){0};
    double *scratch = calloc(most, 2 * sizeof *scratch);
    size_t *place = calloc(most, sizeof *place);
    points->time = calloc(most, 3 * sizeof *points->time);
    points->total = calloc(most + 1, sizeof *points->total);
    bool ok = scratch != NULL && place != NULL && points->time != NULL && points->total != NULL;
    if (ok) {
        points->flux = points->time + most;
        points->weight = points->flux + most;
        task->cadence_d = points->cadence_d = usual_step(task, scratch);
        double sigma = usual_noise(task, scratch, scratch + most);
        points->scaled = sigma > 0.0;
        take_points(task, sigma, scratch, scratch + most, points, place);
        weigh(task, points->scaled ? sigma : 1.0, scratch, points, place);
        average_down(points);
        if (points->count > 0)
            centre(points);
        add_up(points);
        points->slope = points->count > 0 && has_sides(task, points);
    }
    free(place);
    free(scratch);
    return ok;
}

void dip_points_free(struct dip_points *points)
{
    free(points->total);
    free(points->time);
    *points = (struct dip_points){0};
}
