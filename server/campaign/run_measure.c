/* Measuring the candidates of one star on its light curves. */
#include <math.h>

#include "ebbmark/lightcurve_measure.h"
#include "run.h"

/* Thresholds of the flags: common practice, no source. */
#define GAP_NEAR 0.5 /* of the duration */
#define COVERED_LEAST 0.5
#define V_SHAPE 0.9
#define V_SHAPE_SNR 8.0 /* below it the shape is anybody's guess */
#define LOPSIDED 0.3
#define LOPSIDED_SIGMA 3.0

/* A light curve as plain arrays, trend removed. */
struct flat {
    size_t count;
    const double *time;
    double *flux, *error; /* error NULL: none */
    double gap_d;
    struct lightcurve_noise noise;
};

static bool read_flat(struct store *store, struct base_arena *arena,
                      const struct store_light_curve *curve, struct flat *out,
                      struct base_error *error)
{
    struct store_points points;
    if (!store_points_read(store, arena, curve->id, &points, error))
        return false;
    *out = (struct flat){.count = points.count,
                         .time = points.time,
                         .flux = base_arena_take_array(arena, points.count, sizeof(double)),
                         .gap_d = lightcurve_gap_d(curve->cadence_d),
                         .noise = {.point = curve->noise_point, .cadence_d = curve->cadence_d}};
    if (points.error != NULL)
        out->error = base_arena_take_array(arena, points.count, sizeof(double));
    if (out->flux == NULL || (points.error != NULL && out->error == NULL))
        return base_fail(error, BASE_MEMORY, "There is no memory to measure a light curve.");
    for (size_t i = 0; i < points.count; i++) {
        double trend = 1.0 + (double)points.trend[i];
        out->flux[i] = (1.0 + (double)points.flux[i]) / trend;
        if (out->error != NULL)
            out->error[i] = (double)points.error[i] / trend;
    }
    for (size_t i = 0; i < LIGHTCURVE_NOISE_WINDOWS; i++)
        out->noise.window[i] = curve->noise_window[i];
    return true;
}

static unsigned flags_of(const struct lightcurve_dip *dip)
{
    enum {
#define X(bit, name, sentence) FLAG_##name = (bit),
        CAMPAIGN_FLAGS(X)
#undef X
    };
    unsigned flags = 0;
    if (dip->shape == LIGHTCURVE_DIP_NONE)
        return FLAG_not_measured;
    if (dip->gap_distance_d < GAP_NEAR * dip->duration_d)
        flags |= FLAG_near_gap;
    if (dip->covered < COVERED_LEAST)
        flags |= FLAG_little_data;
    if (dip->depth < 0.0)
        flags |= FLAG_brightening;
    if (dip->v_shape >= V_SHAPE && dip->snr >= V_SHAPE_SNR)
        flags |= FLAG_v_shaped;
    /* Each half's mean has sqrt 2 times the error of the whole's, so their difference over the
     * depth has an error of 2 / SNR. */
    if (dip->snr > 0.0 && fabs(dip->asymmetry) > LOPSIDED &&
        fabs(dip->asymmetry) > LOPSIDED_SIGMA * 2.0 / dip->snr)
        flags |= FLAG_lopsided;
    return flags;
}

static void put(const struct lightcurve_dip *dip, struct store_candidate *candidate,
                struct consensus_item *item)
{
    candidate->flags = flags_of(dip);
    if (dip->shape == LIGHTCURVE_DIP_NONE)
        return;
    candidate->mid_d = dip->mid_d;
    candidate->mid_error_d = dip->mid_error_d;
    candidate->snr = dip->snr;
    candidate->depth_ppm = 1e6 * dip->depth;
    candidate->depth_error_ppm = 1e6 * dip->depth_error;
    candidate->duration_h = 24.0 * dip->duration_d;
    candidate->duration_error_h = 24.0 * dip->duration_error_d;
    candidate->ingress_fraction = dip->ingress_fraction;
    candidate->covered = dip->covered;
    candidate->gap_distance_d = dip->gap_distance_d;
    candidate->asymmetry = dip->asymmetry;
    item->snr = dip->snr;
}

/* Measure those candidates that lie on this light curve. */
static bool measure_on(const struct store_light_curve *curve, const struct flat *flat,
                       struct store_candidate *candidates, struct consensus_item *items,
                       size_t count, struct base_error *error)
{
    for (size_t i = 0; i < count; i++) {
        if (candidates[i].light_curve != curve->id)
            continue;
        struct lightcurve_dip dip;
        if (!lightcurve_dip_measure(flat->time, flat->flux, flat->error, flat->count, flat->gap_d,
                                    candidates[i].starts_d, candidates[i].ends_d, &flat->noise,
                                    &dip, error))
            return false;
        put(&dip, &candidates[i], &items[i]);
    }
    return true;
}

bool run_measure(const struct run_pass *pass, struct store_candidate *candidates,
                 struct consensus_item *items, size_t count, const struct store_light_curve *curves,
                 size_t curve_count, struct base_error *error)
{
    bool ok = true;
    for (size_t c = 0; ok && c < curve_count; c++) {
        size_t mine = 0;
        for (size_t i = 0; i < count; i++)
            mine += candidates[i].light_curve == curves[c].id ? 1 : 0;
        if (mine == 0)
            continue;
        struct base_arena *arena = base_arena_new(0);
        struct flat flat;
        ok = arena != NULL
                 ? read_flat(pass->store, arena, &curves[c], &flat, error) &&
                       measure_on(&curves[c], &flat, candidates, items, count, error)
                 : base_fail(error, BASE_MEMORY, "There is no memory to measure a light curve.");
        base_arena_free(arena);
    }
    return ok;
}
