/*
 * The trend. The biweight location is exact at anchors a fiftieth of the window apart and linear
 * between them, so that the cost is about fifty windows' worth of work a window, whatever the
 * cadence. Within half a window of a stretch's end the window cannot be centred; there the last
 * whole window is used, and a robust line through it carries the trend to the end: a shorter window
 * would follow a dip that lies at the end.
 */
#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve_measure.h"
#include "robust.h"

#define ANCHORS_A_WINDOW 50
#define SLOPE_BINS 15 /* the line through a window is that of the medians of so many parts */

struct stretch {
    const double *time, *flux;
    size_t count;
    double window_d;
    double *values, *scratch; /* room for `count` each */
};

/* A line that stands in for the centred window near an end. */
struct line {
    double at_d, level, slope;
};

static double line_at(const struct line *line, double time_d)
{
    return line->level + line->slope * (time_d - line->at_d);
}

/* The biweight location of points [low, high) after taking out a slope about at_d. */
static double location(const struct stretch *stretch, size_t low, size_t high, double slope,
                       double at_d)
{
    for (size_t i = low; i < high; i++)
        stretch->values[i - low] = stretch->flux[i] - slope * (stretch->time[i] - at_d);
    return lightcurve_biweight(stretch->values, high - low, stretch->scratch);
}

/* Cut points [low, high) into bins of equal length and give the mean time and the median flux of
 * each that holds data. Returns how many do. */
static size_t bin_medians(const struct stretch *stretch, size_t low, size_t high,
                          double time[SLOPE_BINS], double level[SLOPE_BINS])
{
    size_t bins = 0, first = low;
    double start = stretch->time[low], width = (stretch->time[high - 1] - start) / SLOPE_BINS;
    for (size_t b = 1; b <= SLOPE_BINS && first < high; b++) {
        size_t end = first;
        double sum = 0.0;
        while (end < high && (b == SLOPE_BINS || stretch->time[end] < start + (double)b * width)) {
            stretch->values[end - first] = stretch->flux[end];
            sum += stretch->time[end++] - start;
        }
        if (end > first) {
            time[bins] = sum / (double)(end - first);
            level[bins++] = lightcurve_median(stretch->values, end - first);
        }
        first = end;
    }
    return bins;
}

/* The slope by repeated medians (Siegel 1982, Biometrika 69, 242) through the bins' medians, which
 * a dip in a few bins hardly moves. 0 with fewer than three bins that hold data. */
static double robust_slope(const struct stretch *stretch, size_t low, size_t high)
{
    double time[SLOPE_BINS], level[SLOPE_BINS], slope[SLOPE_BINS], middle[SLOPE_BINS];
    size_t bins = bin_medians(stretch, low, high, time, level);
    if (bins < 3)
        return 0.0;
    for (size_t i = 0; i < bins; i++) {
        size_t others = 0;
        for (size_t j = 0; j < bins; j++)
            if (j != i)
                slope[others++] = (level[j] - level[i]) / (time[j] - time[i]);
        middle[i] = lightcurve_median(slope, others);
    }
    return lightcurve_median(middle, bins);
}

/* The line for the end of the stretch that points [low, high) lie at. Where they fill a window, the
 * line starts from what the centred window gives, so that the trend has no step there. */
static struct line end_line(const struct stretch *stretch, size_t low, size_t high)
{
    double span = stretch->time[high - 1] - stretch->time[low];
    double whole = stretch->time[stretch->count - 1] - stretch->time[0];
    struct line line = {.at_d = stretch->time[low] + 0.5 * span};
    if (whole >= 0.5 * stretch->window_d)
        line.slope = robust_slope(stretch, low, high);
    if (whole <= stretch->window_d) {
        line.level = location(stretch, low, high, line.slope, line.at_d);
    } else {
        double half = 0.5 * stretch->window_d;
        line.at_d = low == 0 ? stretch->time[0] + half : stretch->time[stretch->count - 1] - half;
        line.level = location(stretch, low, high, 0.0, line.at_d);
    }
    return line;
}

/* The next anchor: the last point within an anchor's spacing of this one, or the next point. */
static size_t next_anchor(const struct stretch *stretch, size_t anchor)
{
    double until = stretch->time[anchor] + stretch->window_d / ANCHORS_A_WINDOW;
    size_t next = anchor + 1;
    while (next + 1 < stretch->count && stretch->time[next + 1] <= until)
        next++;
    return next;
}

static struct line early_line(const struct stretch *stretch)
{
    size_t high = 1;
    while (high < stretch->count && stretch->time[high] <= stretch->time[0] + stretch->window_d)
        high++;
    return end_line(stretch, 0, high);
}

static struct line late_line(const struct stretch *stretch)
{
    size_t low = stretch->count - 1;
    while (low > 0 &&
           stretch->time[low - 1] >= stretch->time[stretch->count - 1] - stretch->window_d)
        low--;
    return end_line(stretch, low, stretch->count);
}

static void trend_of_stretch(const struct stretch *stretch, double *trend)
{
    const double *time = stretch->time;
    size_t n = stretch->count, low = 0, high = 0, last = 0;
    double half = 0.5 * stretch->window_d, first_d = time[0], last_d = time[n - 1];
    struct line early = early_line(stretch), late = late_line(stretch);
    for (size_t anchor = 0; anchor < n; anchor = next_anchor(stretch, anchor)) {
        double here = time[anchor], level;
        if (here < first_d + half && here - first_d <= last_d - here) {
            level = line_at(&early, here);
        } else if (here > last_d - half) {
            level = line_at(&late, here);
        } else {
            while (time[low] < here - half)
                low++;
            while (high < n && time[high] <= here + half)
                high++;
            level = location(stretch, low, high, 0.0, here);
        }
        trend[anchor] = level;
        for (size_t i = last + 1; i < anchor; i++)
            trend[i] =
                trend[last] + (level - trend[last]) * (time[i] - time[last]) / (here - time[last]);
        last = anchor;
    }
}

bool lightcurve_trend(const double *time, const double *flux, size_t n, double window_d,
                      double gap_d, double *trend, struct base_error *error)
{
    if (n == 0)
        return true;
    double *room = calloc(n, 2 * sizeof *room);
    if (room == NULL)
        return base_fail(error, BASE_MEMORY, "Not enough memory for the trend of %zu points.", n);
    for (size_t first = 0, end; first < n; first = end) {
        end = lightcurve_stretch_end(time, n, first, gap_d);
        struct stretch stretch = {.time = time + first,
                                  .flux = flux + first,
                                  .count = end - first,
                                  .window_d = window_d,
                                  .values = room,
                                  .scratch = room + n};
        trend_of_stretch(&stretch, trend + first);
    }
    free(room);
    return true;
}
