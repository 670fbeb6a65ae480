#include <inttypes.h>
#include <math.h>
#include <stdio.h>

#include "inside.h"

#define SLACK_D 0.01

static bool at_fault(struct base_error *error, size_t mark, const char *part, const char *why)
{
    char field[BASE_FIELD_SIZE];
    (void)snprintf(field, sizeof field, "marks[%zu].%s", mark, part);
    return base_fail_field(error, BASE_INVALID, field, "%s %s.", field, why);
}

static bool outside(struct base_error *error, size_t mark, const char *part,
                    const struct store_segment *segment)
{
    char field[BASE_FIELD_SIZE];
    (void)snprintf(field, sizeof field, "marks[%zu].%s", mark, part);
    return base_fail_field(error, BASE_INVALID, field,
                           "%s lies outside the segment, which goes from %.5f to %.5f d.", field,
                           segment->starts_d, segment->ends_d);
}

static bool within(const struct store_segment *segment, double time)
{
    return time >= segment->starts_d - SLACK_D && time <= segment->ends_d + SLACK_D;
}

static bool check_mark(const struct store_segment *segment, struct store_mark *mark, size_t index,
                       struct base_error *error)
{
    if (!isfinite(mark->starts_d))
        return at_fault(error, index, "starts", "must be a finite number");
    if (!isfinite(mark->ends_d))
        return at_fault(error, index, "ends", "must be a finite number");
    if (!isfinite(mark->low))
        return at_fault(error, index, "low", "must be a finite number");
    if (!isfinite(mark->high))
        return at_fault(error, index, "high", "must be a finite number");
    if (!(mark->starts_d < mark->ends_d))
        return at_fault(error, index, "ends", "must come after the mark's start");
    if (!within(segment, mark->starts_d))
        return outside(error, index, "starts", segment);
    if (!within(segment, mark->ends_d))
        return outside(error, index, "ends", segment);
    if (mark->low > mark->high)
        return at_fault(error, index, "low", "may not be above the mark's high");
    mark->starts_d = fmax(mark->starts_d, segment->starts_d);
    mark->ends_d = fmin(mark->ends_d, segment->ends_d);
    /* A mark that lay wholly in the slack has nothing left. */
    if (!(mark->starts_d < mark->ends_d))
        return outside(error, index, "starts", segment);
    return true;
}

bool campaign_review_check(struct campaign *campaign, const struct store_segment *segment,
                           struct store_mark *marks, size_t count, struct base_error *error)
{
    int64_t most = campaign_settings_now(campaign).marks_most;
    if (count > (size_t)most)
        return base_fail_field(error, BASE_INVALID, "marks",
                               "A review holds at most %" PRId64 " marks, this one has %zu.", most,
                               count);
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++)
        ok = check_mark(segment, &marks[i], i, error);
    return ok;
}
