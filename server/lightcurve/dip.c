/*
 * Measuring one dip: which points are taken, which of box and trapezoid is kept, and what follows.
 */
#include "dip.h"

#include <math.h>

#include "robust.h"

#define MID_REACH 0.25      /* the middle may lie outside the interval by so many lengths */
#define LENGTH_SHORTEST 0.2 /* box lengths tried, in interval lengths */
#define LENGTH_LONGEST 3.0
#define TRAPEZOID_GAIN 2.0 /* chi2 that one parameter more must be worth (Akaike 1974) */

static struct dip_bounds bounds_of(const struct dip_task *task, const struct dip_points *points)
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

static void take_nothing(const struct dip_task *task, const struct dip_points *points,
                         struct lightcurve_dip *out)
{
    out->shape = LIGHTCURVE_DIP_BOX;
    out->mid_d = 0.5 * (task->starts_d + task->ends_d);
    out->duration_d = task->ends_d - task->starts_d;
    out->depth = 0.0;
    out->level = points->base;
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
    out->level = points->base + box->level + box->slope * mid;
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
    out->level = points->base + value[DIP_LEVEL];
    out->slope = value[DIP_SLOPE];
    out->depth = value[DIP_DEPTH] / out->level;
    double variance = fit->covariance[DIP_DEPTH][DIP_DEPTH] -
                      2.0 * out->depth * fit->covariance[DIP_DEPTH][DIP_LEVEL] +
                      out->depth * out->depth * fit->covariance[DIP_LEVEL][DIP_LEVEL];
    out->depth_error = sqrt(variance) / out->level;
    out->chi2 = fit->chi2;
}

/* Let the errors hold what an ingress that can hardly be seen leaves open. A box's own errors know
 * nothing of it; a trapezoid's do, as far as its curvature tells. */
static void widen_errors(const struct dip_points *points, const struct dip_bounds *bounds,
                         const struct dip_box *box, struct lightcurve_dip *dip)
{
    struct dip_kept kept = {dip->mid_d - points->origin_d, dip->duration_d, dip->depth * dip->level,
                            dip->chi2};
    struct dip_spread spread =
        dip_trapezoid_spread(points, bounds, box, &kept, unit_of(points, dip->chi2));
    bool boxed = dip->shape == LIGHTCURVE_DIP_BOX;
    double (*join)(double, double) = boxed ? hypot : fmax;
    dip->mid_error_d = join(dip->mid_error_d, spread.mid_d);
    dip->duration_error_d = join(dip->duration_error_d, spread.length_d);
    dip->depth_error = join(dip->depth_error, spread.depth / dip->level);
}

static size_t points_within(const struct dip_task *task, double mid_d, double length_d)
{
    double starts = mid_d - 0.5 * length_d, ends = mid_d + 0.5 * length_d;
    return lightcurve_first_not_before(task->time, 0, task->n, nextafter(ends, INFINITY)) -
           lightcurve_first_not_before(task->time, 0, task->n, starts);
}

/* How much of T14 lies within half a cadence of a point. */
static double covered_share(const struct dip_task *task, const struct lightcurve_dip *dip)
{
    double starts = dip->mid_d - 0.5 * dip->duration_d, ends = dip->mid_d + 0.5 * dip->duration_d;
    double half = 0.5 * task->cadence_d, covered = 0.0, until = starts;
    for (size_t i = lightcurve_first_not_before(task->time, 0, task->n, starts - half);
         i < task->n && task->time[i] <= ends + half; i++) {
        double from = fmax(task->time[i] - half, until), to = fmin(task->time[i] + half, ends);
        if (to > from)
            covered += to - from;
        until = fmax(until, to);
    }
    return fmin(covered / dip->duration_d, 1.0);
}

/* From `at` to the nearest gap or end of data in the direction of step; 0 when `at` lies in one. */
static double room_before_gap(const struct dip_task *task, double at, bool forward)
{
    const double *time = task->time;
    size_t after = lightcurve_first_not_before(time, 0, task->n, at);
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
        sum[half] +=
            points->weight[i] * (points->base + points->flux[i] - dip->level - dip->slope * since);
        weight[half] += points->weight[i];
    }
    if (weight[0] <= 0.0 || weight[1] <= 0.0 || dip->depth == 0.0)
        return NAN;
    return (sum[1] / weight[1] - sum[0] / weight[0]) / (dip->depth * dip->level);
}

/* Errors from the curvature assume white noise of the size given. They grow by what the windows
 * show above that, or by the scatter about the fit, whichever is more. */
static void scale_errors(const struct dip_task *task, const struct dip_points *points,
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

/* What follows from the shape that was kept. */
static void fill_rest(const struct dip_task *task, const struct dip_points *points,
                      struct lightcurve_dip *out)
{
    out->points = task->end - task->first;
    out->points_in = points_within(task, out->mid_d, out->duration_d);
    out->covered = covered_share(task, out);
    scale_errors(task, points, out);
    double starts = out->mid_d - 0.5 * out->duration_d, ends = out->mid_d + 0.5 * out->duration_d;
    out->gap_distance_d =
        fmin(room_before_gap(task, starts, false), room_before_gap(task, ends, true));
    out->v_shape = 2.0 * out->ingress_fraction;
    out->asymmetry = asymmetry_of(points, out);
}

static void measure(const struct dip_task *task, const struct dip_points *points,
                    struct lightcurve_dip *out)
{
    struct dip_bounds bounds = bounds_of(task, points);
    struct dip_box box;
    struct dip_trapezoid trapezoid;
    dip_box_search(points, &bounds, &box);
    if (!box.found) {
        take_nothing(task, points, out);
    } else {
        dip_trapezoid_fit(points, &bounds, &box, &trapezoid);
        out->chi2_box = box.chi2;
        if (is_trapezoid(points, &box, &trapezoid))
            take_trapezoid(points, &box, &trapezoid, out);
        else
            take_box(points, &box, out);
        widen_errors(points, &bounds, &box, out);
    }
    if (out->level > 0.0)
        fill_rest(task, points, out);
    else
        nothing_measured(out);
}

bool lightcurve_dip_measure(const double *time, const double *flux, const double *error, size_t n,
                            double gap_d, double starts_d, double ends_d,
                            const struct lightcurve_noise *noise, struct lightcurve_dip *out,
                            struct base_error *err)
{
    struct dip_task task = {.time = time,
                            .flux = flux,
                            .error = error,
                            .n = n,
                            .gap_d = gap_d,
                            .starts_d = starts_d,
                            .ends_d = ends_d,
                            .noise = noise};
    struct dip_points points;
    nothing_measured(out);
    if (!dip_points_choose(&task))
        return true;
    bool ok = dip_points_gather(&task, &points);
    if (!ok)
        base_fail(err, BASE_MEMORY, "Not enough memory to measure a dip over %zu points.",
                  task.end - task.first);
    else if (points.count >= DIP_POINTS_LEAST)
        measure(&task, &points, out);
    dip_points_free(&points);
    return ok;
}

double lightcurve_dip_model(const struct lightcurve_dip *dip, double time_d)
{
    double since = time_d - dip->mid_d;
    double shape = dip_trapezoid_shape(since, dip->duration_d, dip->ingress_fraction);
    return dip->level + dip->slope * since - dip->depth * dip->level * shape;
}
