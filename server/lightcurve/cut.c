/*
 * Cutting a light curve into segments. Islands are what gaps longer than a segment leave; each is
 * walked from its start, always choosing the number of segments that share what is left evenly.
 */
#include <math.h>
#include <stdlib.h>

#include "ebbmark/lightcurve.h"
#include "robust.h"

/* What is left becomes one segment while it is no longer than this, in segments. */
#define LONGEST_LAST 1.25

struct cutter {
    const struct lightcurve *curve;
    const struct lightcurve_cut_settings *settings;
    double gap_d;
    struct lightcurve_span *spans;
    size_t count, room;
};

static bool add_span(struct cutter *cutter, size_t first, size_t end, struct base_error *error)
{
    if (cutter->count == cutter->room) {
        size_t room = cutter->room == 0 ? 8 : 2 * cutter->room;
        struct lightcurve_span *spans = reallocarray(cutter->spans, room, sizeof *spans);
        if (spans == NULL)
            return base_fail(error, BASE_MEMORY, "Not enough memory for %zu segments.", room);
        cutter->spans = spans;
        cutter->room = room;
    }
    const double *time = cutter->curve->time;
    cutter->spans[cutter->count++] =
        (struct lightcurve_span){first, end - first, time[first], time[end - 1]};
    return true;
}

/* The point after the gap nearest to `boundary`, of the gaps within a quarter of a segment of it
 * that leave at least least_d on both sides; 0 when there is none. Of equals the longer. */
static size_t gap_near(const struct cutter *cutter, size_t first, size_t end, double boundary)
{
    const double *time = cutter->curve->time;
    double reach = 0.25 * cutter->settings->length_d, least = cutter->settings->least_d;
    double nearest = INFINITY, longest = 0.0;
    size_t found = 0;
    size_t after = lightcurve_first_not_before(time, first + 1, end, boundary - reach);
    for (; after < end && time[after - 1] <= boundary + reach; after++) {
        double before_d = time[after - 1], length = time[after] - before_d;
        if (length <= cutter->gap_d || before_d - time[first] < least ||
            time[end - 1] - time[after] < least)
            continue;
        double off = fmax(fmax(before_d - boundary, boundary - time[after]), 0.0);
        if (off < nearest || (off == nearest && length > longest)) {
            nearest = off;
            longest = length;
            found = after;
        }
    }
    return found;
}

/* Cut the island [first, end). Every turn adds a segment with at least one new point. */
static bool cut_island(struct cutter *cutter, size_t first, size_t end, struct base_error *error)
{
    const double *time = cutter->curve->time;
    double length = cutter->settings->length_d, overlap = cutter->settings->overlap_d;
    size_t covered = first;
    for (;;) {
        double left = time[end - 1] - time[first];
        double exact = (left - overlap) / (length - overlap);
        if (exact <= LONGEST_LAST)
            return add_span(cutter, first, end, error);
        double pieces = fmax(round(exact), 2.0);
        double boundary = time[first] + (left + (pieces - 1.0) * overlap) / pieces;
        size_t after = gap_near(cutter, first, end, boundary), next = after;
        if (after == 0) {
            after = lightcurve_first_not_before(time, first, end, nextafter(boundary, INFINITY));
            next = lightcurve_first_not_before(time, first + 1, after, boundary - overlap);
        }
        if (after <= covered)
            after = covered + 1;
        if (!add_span(cutter, first, after, error))
            return false;
        if (after == end)
            return true;
        covered = after;
        first = next;
    }
}

static size_t longest_island(const struct lightcurve *curve, double parting_d)
{
    size_t longest = 0;
    double length = -1.0;
    for (size_t first = 0, end; first < curve->count; first = end) {
        end = lightcurve_stretch_end(curve->time, curve->count, first, parting_d);
        if (curve->time[end - 1] - curve->time[first] > length) {
            length = curve->time[end - 1] - curve->time[first];
            longest = first;
        }
    }
    return longest;
}

static bool check_settings(const struct lightcurve_cut_settings *settings, struct base_error *error)
{
    if (!(settings->length_d >= 1.0 && settings->length_d <= 1000.0))
        return base_fail_field(error, BASE_INVALID, "length_d",
                               "A segment's length is %g d; it must lie from 1 to 1000 d.",
                               settings->length_d);
    if (!(settings->overlap_d >= 0.0 && settings->overlap_d <= 0.5 * settings->length_d))
        return base_fail_field(error, BASE_INVALID, "overlap_d",
                               "The overlap is %g d; it must lie from 0 to half the segment's "
                               "length, %g d.",
                               settings->overlap_d, 0.5 * settings->length_d);
    if (!(settings->least_d >= 0.0 && settings->least_d <= settings->length_d))
        return base_fail_field(error, BASE_INVALID, "least_d",
                               "The shortest stretch is %g d; it must lie from 0 to the segment's "
                               "length, %g d.",
                               settings->least_d, settings->length_d);
    return true;
}

bool lightcurve_cut(const struct lightcurve *curve, const struct lightcurve_cut_settings *settings,
                    struct lightcurve_span **out, size_t *count, size_t *dropped_points,
                    struct base_error *error)
{
    *out = NULL;
    *count = *dropped_points = 0;
    if (!check_settings(settings, error))
        return false;
    struct cutter cutter = {
        .curve = curve, .settings = settings, .gap_d = lightcurve_gap_d(curve->cadence_d)};
    double parting_d = fmax(settings->length_d, cutter.gap_d);
    size_t spared = longest_island(curve, parting_d);
    bool ok = true;
    for (size_t first = 0, end; ok && first < curve->count; first = end) {
        end = lightcurve_stretch_end(curve->time, curve->count, first, parting_d);
        if (curve->time[end - 1] - curve->time[first] < settings->least_d && first != spared)
            *dropped_points += end - first;
        else
            ok = cut_island(&cutter, first, end, error);
    }
    if (ok) {
        *out = cutter.spans;
        *count = cutter.count;
    } else {
        free(cutter.spans);
        *dropped_points = 0;
    }
    return ok;
}
