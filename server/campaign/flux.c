#include "inside.h"

bool campaign_flux_read(struct campaign *campaign, struct base_arena *arena,
                        const struct store_segment *segment, enum campaign_view view,
                        struct campaign_flux *out, struct base_error *error)
{
    struct store_light_curve curve;
    struct store_points points;
    if (!store_light_curve_read(campaign->store, arena, segment->light_curve, &curve, error) ||
        !store_points_read(campaign->store, arena, segment->light_curve, &points, error))
        return false;
    if (segment->first > points.count || segment->count > points.count - segment->first)
        return base_fail(error, BASE_CORRUPT, "A segment reaches past its light curve's end.");
    double *flux = base_arena_take_array(arena, segment->count, sizeof *flux);
    if (flux == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to read a segment's flux.");
    for (size_t i = 0; i < segment->count; i++) {
        size_t at = segment->first + i;
        flux[i] = 1.0 + (double)points.flux[at];
        if (view == CAMPAIGN_TREND_REMOVED)
            flux[i] /= 1.0 + (double)points.trend[at];
    }
    *out = (struct campaign_flux){.count = segment->count,
                                  .time = points.time + segment->first,
                                  .flux = flux,
                                  .median_flux = curve.median_flux,
                                  .noise_point = curve.noise_point,
                                  .starts_d = segment->starts_d,
                                  .time_reference = curve.time_reference};
    return true;
}
