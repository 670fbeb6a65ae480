#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/lightcurve.h"
#include "robust.h"

/* A point on its way from the file's order to the order of time. */
struct point {
    double time, flux, error;
    size_t place; /* in the file */
};

static int compare_points(const void *left, const void *right)
{
    const struct point *a = left, *b = right;
    if (a->time != b->time)
        return a->time < b->time ? -1 : 1;
    return (a->place > b->place) - (a->place < b->place);
}

void lightcurve_free(struct lightcurve *curve)
{
    free(curve->time);
    free(curve->flux);
    free(curve->error);
    *curve = (struct lightcurve){0};
}

double lightcurve_gap_d(double cadence_d)
{
    return fmax(0.5, 10.0 * cadence_d);
}

/* Copy what is usable into `points`, counting the rest in `out`. */
static size_t gather(const struct lightcurve_raw *raw, uint32_t quality_mask, struct point *points,
                     struct lightcurve *out)
{
    size_t n = 0;
    for (size_t i = 0; i < raw->count; i++) {
        if (!(fabs(raw->time[i]) <= LIGHTCURVE_TIME_MAX_D) || !isfinite(raw->flux[i]))
            out->dropped_nonfinite++;
        else if (raw->quality != NULL && ((uint32_t)raw->quality[i] & quality_mask) != 0)
            out->dropped_flagged++;
        else
            points[n++] = (struct point){raw->time[i], raw->flux[i],
                                         raw->error != NULL ? raw->error[i] : NAN, i};
    }
    return n;
}

/* Sort by time and keep the first of equal times. */
static size_t order(struct point *points, size_t n, struct lightcurve *out)
{
    bool sorted = true;
    for (size_t i = 1; i < n && sorted; i++)
        sorted = points[i - 1].time <= points[i].time;
    if (!sorted)
        qsort(points, n, sizeof *points, compare_points);
    size_t kept = 0;
    for (size_t i = 0; i < n; i++)
        if (kept == 0 || points[i].time != points[kept - 1].time)
            points[kept++] = points[i];
    out->dropped_repeats += n - kept;
    return kept;
}

/* Take out what lies so far from the median that no narrower type holds it: a filler value. */
static size_t drop_fillers(struct point *points, size_t n, double median, struct lightcurve *out)
{
    size_t kept = 0;
    for (size_t i = 0; i < n; i++)
        if (fabs(points[i].flux / median) <= LIGHTCURVE_FLUX_MAX)
            points[kept++] = points[i];
    out->dropped_nonfinite += n - kept;
    return kept;
}

/* The reason why what is left cannot be used, or true. */
static bool enough(const struct lightcurve_raw *raw, const struct lightcurve *out, size_t n,
                   struct base_error *error)
{
    if (out->dropped_nonfinite == raw->count)
        return base_fail(error, BASE_INVALID,
                         "All values are missing: none of the %zu points has a finite flux and a "
                         "time within %g d of the reference.",
                         raw->count, LIGHTCURVE_TIME_MAX_D);
    if (n == 1 && out->dropped_repeats > 0)
        return base_fail(error, BASE_INVALID,
                         "Times do not increase after sorting: all %zu usable points have the "
                         "same time.",
                         out->dropped_repeats + 1);
    if (n < LIGHTCURVE_POINTS_MIN)
        return base_fail(error, BASE_INVALID,
                         "Only %zu of %zu points are usable (%zu without finite values, %zu "
                         "flagged, %zu repeats of a time); at least %d are needed.",
                         n, raw->count, out->dropped_nonfinite, out->dropped_flagged,
                         out->dropped_repeats, LIGHTCURVE_POINTS_MIN);
    return true;
}

static double median_flux(const struct point *points, size_t n, double *scratch)
{
    for (size_t i = 0; i < n; i++)
        scratch[i] = points[i].flux;
    return lightcurve_median(scratch, n);
}

static double median_step(const struct point *points, size_t n, double *scratch)
{
    for (size_t i = 1; i < n; i++)
        scratch[i - 1] = points[i].time - points[i - 1].time;
    return lightcurve_median(scratch, n - 1);
}

/* An error that is missing or not positive becomes the median of the others; with no good error at
 * all the light curve has none. */
static void take_errors(const struct point *points, size_t n, double *scratch,
                        struct lightcurve *out)
{
    size_t good = 0;
    for (size_t i = 0; i < n; i++) {
        double relative = points[i].error / out->median_flux;
        out->error[i] = relative > 0.0 && relative <= LIGHTCURVE_FLUX_MAX ? relative : 0.0;
        if (out->error[i] > 0.0)
            scratch[good++] = out->error[i];
    }
    if (good == 0) {
        free(out->error);
        out->error = NULL;
        return;
    }
    double usual = lightcurve_median(scratch, good);
    for (size_t i = 0; i < n; i++)
        if (out->error[i] == 0.0)
            out->error[i] = usual;
}

/* Fill the arrays of `out`, which are of n points or more. */
static void fill(const struct point *points, size_t n, double *scratch, struct lightcurve *out)
{
    out->count = n;
    for (size_t i = 0; i < n; i++) {
        out->time[i] = points[i].time;
        out->flux[i] = points[i].flux / out->median_flux;
    }
    if (out->error != NULL)
        take_errors(points, n, scratch, out);
    out->cadence_d = median_step(points, n, scratch);
}

/* What lightcurve_clean does once there is room: `points` and `scratch` hold raw->count items. */
static bool clean(const struct lightcurve_raw *raw, uint32_t quality_mask, struct point *points,
                  double *scratch, struct lightcurve *out, struct base_error *error)
{
    size_t n = order(points, gather(raw, quality_mask, points, out), out);
    if (!enough(raw, out, n, error))
        return false;
    double median = median_flux(points, n, scratch);
    if (!isnormal(median) || median < 0.0)
        return base_fail(error, BASE_INVALID,
                         "The median flux is %g; relative flux needs a positive one.", median);
    n = drop_fillers(points, n, median, out);
    if (!enough(raw, out, n, error))
        return false;
    out->median_flux = median_flux(points, n, scratch);
    fill(points, n, scratch, out);
    return true;
}

bool lightcurve_clean(const struct lightcurve_raw *raw, uint32_t quality_mask,
                      struct lightcurve *out, struct base_error *error)
{
    *out = (struct lightcurve){0};
    if (raw->count == 0)
        return base_fail(error, BASE_INVALID, "The light curve holds no points.");
    if (raw->count > LIGHTCURVE_POINTS_MAX)
        return base_fail(error, BASE_TOO_LARGE,
                         "The light curve holds %zu points; the most allowed is %d.", raw->count,
                         LIGHTCURVE_POINTS_MAX);
    out->star = raw->star;
    memcpy(out->time_reference, raw->time_reference, sizeof out->time_reference);
    struct point *points = calloc(raw->count, sizeof *points);
    double *scratch = calloc(raw->count, sizeof *scratch);
    out->time = calloc(raw->count, sizeof *out->time);
    out->flux = calloc(raw->count, sizeof *out->flux);
    out->error = raw->error != NULL ? calloc(raw->count, sizeof *out->error) : NULL;
    bool ok;
    if (points == NULL || scratch == NULL || out->time == NULL || out->flux == NULL ||
        (raw->error != NULL && out->error == NULL))
        ok = base_fail(error, BASE_MEMORY, "Not enough memory to clean %zu points.", raw->count);
    else
        ok = clean(raw, quality_mask, points, scratch, out, error);
    free(scratch);
    free(points);
    if (!ok)
        lightcurve_free(out);
    return ok;
}
