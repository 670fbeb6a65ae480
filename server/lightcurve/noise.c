#include <assert.h>
#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve_measure.h"
#include "robust.h"

#define WINDOWS_LEAST 8 /* a scatter of fewer windows says nothing */
#define HIGH_SIGMAS 5.0 /* points higher than this are left out of window means */
#define HOURS_A_DAY 24.0

const double lightcurve_noise_window_h[LIGHTCURVE_NOISE_WINDOWS] = {1.0, 3.0, 6.0, 13.0};

/* Scatter of point-to-point steps that cross no gap; NAN where there are fewer than two. */
static double point_noise(const double *time, const double *flat, size_t n, double gap_d,
                          double *steps, double *scratch)
{
    size_t count = 0;
    for (size_t i = 1; i < n; i++)
        if (time[i] - time[i - 1] <= gap_d)
            steps[count++] = flat[i] - flat[i - 1];
    if (count < 2)
        return NAN;
    double middle = lightcurve_median(steps, count);
    return LIGHTCURVE_MAD_TO_SIGMA * lightcurve_mad(steps, count, middle, scratch) / sqrt(2.0);
}

/* The level above which a point counts as a high outlier. */
static double ceiling_of(const double *flat, size_t n, double *values, double *scratch)
{
    for (size_t i = 0; i < n; i++)
        values[i] = flat[i];
    double middle = lightcurve_median(values, n);
    double sigma = LIGHTCURVE_MAD_TO_SIGMA * lightcurve_mad(values, n, middle, scratch);
    return sigma > 0.0 ? middle + HIGH_SIGMAS * sigma : INFINITY;
}

/* Means over windows of width_d in one stretch, half a window apart, that hold at least `least`
 * points not above the ceiling. Returns how many; `means` has room for 3 n (a point is in two
 * windows, rounding may put it in a third). */
static size_t window_means(const double *time, const double *flat, size_t n, double width_d,
                           double least, double ceiling, double *means)
{
    size_t count = 0, first = 0;
    for (size_t k = 0; first < n; k++) {
        double starts = time[0] + 0.5 * (double)k * width_d;
        while (first < n && time[first] < starts)
            first++;
        double sum = 0.0, held = 0.0;
        for (size_t i = first; i < n && time[i] < starts + width_d; i++)
            if (flat[i] <= ceiling) {
                sum += flat[i];
                held += 1.0;
            }
        if (held > 0.0 && held >= least)
            means[count++] = sum / held;
    }
    return count;
}

/* Robust scatter of the means over windows of width_d; NAN where windows are too few. */
static double window_noise(const double *time, const double *flat, size_t n, double width_d,
                           double cadence_d, double gap_d, double ceiling, double *means,
                           double *scratch)
{
    if (!(cadence_d > 0.0) || width_d < cadence_d)
        return NAN;
    double least = 0.5 * width_d / cadence_d;
    size_t count = 0;
    for (size_t first = 0, end; first < n; first = end) {
        end = lightcurve_stretch_end(time, n, first, gap_d);
        count += window_means(time + first, flat + first, end - first, width_d, least, ceiling,
                              means + count);
    }
    if (count < WINDOWS_LEAST)
        return NAN;
    double middle = lightcurve_median(means, count);
    return LIGHTCURVE_MAD_TO_SIGMA * lightcurve_mad(means, count, middle, scratch);
}

bool lightcurve_noise_measure(const double *time, const double *flat, size_t n, double cadence_d,
                              double gap_d, struct lightcurve_noise *out, struct base_error *error)
{
    *out = (struct lightcurve_noise){.point = NAN, .cadence_d = cadence_d};
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        out->window[w] = NAN;
    if (n == 0)
        return true;
    double *values = calloc(n, 6 * sizeof *values);
    if (values == NULL)
        return base_fail(error, BASE_MEMORY, "Not enough memory for the noise of %zu points.", n);
    double *scratch = values + 3 * n;
    out->point = point_noise(time, flat, n, gap_d, values, scratch);
    double ceiling = ceiling_of(flat, n, values, scratch);
    for (size_t w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++)
        out->window[w] = window_noise(time, flat, n, lightcurve_noise_window_h[w] / HOURS_A_DAY,
                                      cadence_d, gap_d, ceiling, values, scratch);
    free(values);
    return true;
}

/* The scatter at a length beyond the windows measured: what the nearest window holds above white
 * noise stays, and the white part goes with the number of points (the one-number description of
 * Pont, Zucker & Queloz 2006). */
static double beyond(const struct lightcurve_noise *noise, size_t w, double white)
{
    double held = lightcurve_noise_window_h[w] / HOURS_A_DAY / noise->cadence_d;
    double red2 = noise->window[w] * noise->window[w] - noise->point * noise->point / held;
    return sqrt(fmax(red2, 0.0) + white * white);
}

double lightcurve_noise_of_mean(const struct lightcurve_noise *noise, double duration_d,
                                size_t points)
{
    assert(points > 0);
    if (isnan(noise->point))
        return NAN;
    double white = noise->point / sqrt((double)points);
    double length_h = duration_d * HOURS_A_DAY;
    int below = -1, above = -1;
    for (int w = 0; w < LIGHTCURVE_NOISE_WINDOWS; w++) {
        if (isnan(noise->window[w]))
            continue;
        if (lightcurve_noise_window_h[w] <= length_h)
            below = w;
        else if (above < 0)
            above = w;
    }
    double scatter = white;
    if (below >= 0 && above >= 0) {
        double from = log(lightcurve_noise_window_h[below]);
        double share = (log(length_h) - from) / (log(lightcurve_noise_window_h[above]) - from);
        scatter = noise->window[below] + share * (noise->window[above] - noise->window[below]);
        if (noise->window[below] > 0.0 && noise->window[above] > 0.0)
            scatter =
                noise->window[below] * pow(noise->window[above] / noise->window[below], share);
    } else if (below >= 0 || above >= 0) {
        scatter = beyond(noise, (size_t)(below >= 0 ? below : above), white);
    }
    return fmax(scatter, white);
}
