#include "load.h"

#include <math.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory to load this light curve.");
    return false;
}

static void refuse(struct load_file *file, const struct base_error *why)
{
    file->outcome = STORE_FILE_REFUSED;
    (void)snprintf(file->reason, sizeof file->reason, "%s", why->sentence);
}

bool load_file_open(struct load_file *file, const char *label, const void *data, size_t size,
                    bool lent, const struct base_error *reason)
{
    *file = (struct load_file){.label = strdup(label), .data = data, .size = size};
    if (file->label == NULL)
        return false;
    if (data == NULL) {
        refuse(file, reason);
        file->size = 0;
    } else if (!lent) {
        file->copy = malloc(size > 0 ? size : 1);
        if (file->copy == NULL)
            return false;
        memcpy(file->copy, data, size);
        file->data = file->copy;
    }
    return true;
}

static void curve_free(struct load_curve *curve)
{
    lightcurve_free(&curve->curve);
    free(curve->flux);
    free(curve->trend);
    free(curve->sigma);
    free(curve->spans);
}

void load_file_free(struct load_file *file)
{
    for (size_t i = 0; file->curves != NULL && i < file->reading.count; i++)
        curve_free(&file->curves[i]);
    free(file->curves);
    free(file->ready);
    lightcurve_reading_free(&file->reading);
    free(file->copy);
    free(file->label);
    *file = (struct load_file){0};
}

/* ---- step one ---- */

void load_file_read(struct load_file *file, const struct load_recipe *recipe)
{
    int64_t batch = 0;
    struct base_error why = {0};
    if (file->outcome == STORE_FILE_REFUSED)
        return;
    (void)crypto_hash_sha256(file->sha256, file->data, file->size);
    enum store_file_outcome seen = STORE_FILE_UNKNOWN;
    if (!store_file_seen(recipe->store, file->sha256, &seen, &batch, &file->error)) {
        file->failed = true;
    } else if (seen == STORE_FILE_LOADED) {
        file->outcome = STORE_FILE_REPEATED;
        (void)snprintf(file->reason, sizeof file->reason, "%s",
                       batch == recipe->batch ? "These bytes are in this batch already."
                                              : "These bytes are in another batch already.");
    } else if (!lightcurve_read_bytes(file->label, file->data, file->size, recipe->mapping,
                                      &file->reading, &why)) {
        refuse(file, &why);
    } else {
        file->curves = calloc(file->reading.count, sizeof *file->curves);
        if (file->curves == NULL) {
            lightcurve_reading_free(&file->reading);
            file->failed = true;
            (void)no_memory(&file->error);
        }
    }
    free(file->copy);
    file->copy = NULL;
    file->data = NULL;
}

/* ---- step two ---- */

/* What the catalogue knows of the star fills in what the file does not. */
static void fill_in(struct lightcurve_star *star, const struct lightcurve_catalogue *catalogue)
{
    const struct lightcurve_star *known = lightcurve_catalogue_find(catalogue, star->name);
    if (known == NULL)
        return;
    const double *from[] = {&known->ra_deg,        &known->dec_deg,     &known->magnitude,
                            &known->temperature_k, &known->radius_rsun, &known->mass_msun};
    double *to[] = {&star->ra_deg,        &star->dec_deg,     &star->magnitude,
                    &star->temperature_k, &star->radius_rsun, &star->mass_msun};
    for (size_t i = 0; i < sizeof to / sizeof to[0]; i++)
        if (isnan(*to[i]))
            *to[i] = *from[i];
}

static bool cut(struct load_curve *out, const struct load_recipe *recipe)
{
    struct lightcurve_span *spans = NULL;
    size_t dropped = 0;
    if (!lightcurve_cut(&out->curve, &recipe->cut, &spans, &out->span_count, &dropped, &out->error))
        return false;
    out->spans = calloc(out->span_count > 0 ? out->span_count : 1, sizeof *out->spans);
    for (size_t i = 0; out->spans != NULL && i < out->span_count; i++)
        out->spans[i] =
            (struct store_span){spans[i].first, spans[i].count, spans[i].starts_d, spans[i].ends_d};
    free(spans);
    if (out->spans != NULL && out->span_count == 0)
        return base_fail(&out->error, BASE_INVALID, "No stretch of data is long enough to show.");
    return out->spans != NULL || no_memory(&out->error);
}

/* The trend, and the noise once it is divided out. */
static bool flatten(struct load_curve *out, const struct load_recipe *recipe)
{
    const struct lightcurve *curve = &out->curve;
    double gap_d = lightcurve_gap_d(curve->cadence_d);
    double *trend = calloc(curve->count, sizeof *trend);
    double *flat = calloc(curve->count, sizeof *flat);
    out->flux = calloc(curve->count, sizeof *out->flux);
    out->trend = calloc(curve->count, sizeof *out->trend);
    if (curve->error != NULL)
        out->sigma = calloc(curve->count, sizeof *out->sigma);
    bool ok = trend != NULL && flat != NULL && out->flux != NULL && out->trend != NULL &&
              (curve->error == NULL || out->sigma != NULL);
    if (!ok)
        (void)no_memory(&out->error);
    ok = ok && lightcurve_trend(curve->time, curve->flux, curve->count, recipe->trend_window_d,
                                gap_d, trend, &out->error);
    for (size_t i = 0; ok && i < curve->count; i++) {
        flat[i] = curve->flux[i] / trend[i];
        out->flux[i] = (float)(curve->flux[i] - 1.0);
        out->trend[i] = (float)(trend[i] - 1.0);
        if (out->sigma != NULL)
            out->sigma[i] = (float)curve->error[i];
    }
    ok = ok && lightcurve_noise_measure(curve->time, flat, curve->count, curve->cadence_d, gap_d,
                                        &out->noise, &out->error);
    free(flat);
    free(trend);
    return ok;
}

void load_file_prepare(struct load_file *file, size_t index, const struct load_recipe *recipe)
{
    struct load_curve *out = &file->curves[index];
    struct lightcurve_raw *raw = &file->reading.curves[index];
    out->ok = lightcurve_clean(raw, recipe->quality_mask, &out->curve, &out->error);
    lightcurve_raw_free(raw);
    if (out->ok) {
        fill_in(&out->curve.star, recipe->catalogue);
        out->ok = cut(out, recipe) && flatten(out, recipe);
    }
    free(out->curve.flux);
    free(out->curve.error);
    out->curve.flux = out->curve.error = NULL;
}

/* ---- step three ---- */

static struct store_light_curve_new as_stored(const struct load_curve *from)
{
    const struct lightcurve *curve = &from->curve;
    struct store_light_curve_new out = {.star = {.name = curve->star.name,
                                                 .ra_deg = curve->star.ra_deg,
                                                 .dec_deg = curve->star.dec_deg,
                                                 .magnitude = curve->star.magnitude,
                                                 .temperature_k = curve->star.temperature_k,
                                                 .radius_rsun = curve->star.radius_rsun,
                                                 .mass_msun = curve->star.mass_msun},
                                        .time_reference = curve->time_reference,
                                        .points = {.count = curve->count,
                                                   .time = curve->time,
                                                   .flux = from->flux,
                                                   .trend = from->trend,
                                                   .error = from->sigma},
                                        .median_flux = curve->median_flux,
                                        .cadence_d = curve->cadence_d,
                                        .noise_point = from->noise.point,
                                        .segments = from->spans,
                                        .segment_count = from->span_count};
    for (size_t i = 0; i < LIGHTCURVE_NOISE_WINDOWS; i++)
        out.noise_window[i] = from->noise.window[i];
    return out;
}

/* With no curve left the file is refused for the reason of its first; with some left out, it says
 * so. */
static void judge(struct load_file *file)
{
    const struct load_curve *bad = NULL;
    for (size_t i = 0; i < file->reading.count; i++) {
        bad = bad == NULL && !file->curves[i].ok ? &file->curves[i] : bad;
        file->stars_left_out += file->curves[i].ok ? 0 : 1;
    }
    file->outcome = STORE_FILE_LOADED;
    if (bad != NULL && file->stars_left_out == file->reading.count) {
        file->stars_left_out = 0;
        refuse(file, &bad->error);
    } else if (bad != NULL) {
        (void)snprintf(file->reason, sizeof file->reason,
                       "%zu of %zu stars were left out; the first: %s", file->stars_left_out,
                       file->reading.count, bad->error.sentence);
    }
}

bool load_file_finish(struct load_file *file, const struct load_recipe *recipe,
                      struct store_file_new *out, struct base_error *error)
{
    if (file->twin != NULL && file->twin->outcome == STORE_FILE_REFUSED) {
        file->outcome = STORE_FILE_REFUSED;
        (void)snprintf(file->reason, sizeof file->reason, "%s", file->twin->reason);
    }
    if (file->outcome == STORE_FILE_UNKNOWN)
        judge(file);
    if (file->outcome == STORE_FILE_LOADED) {
        file->ready = calloc(file->reading.count, sizeof *file->ready);
        if (file->ready == NULL)
            return no_memory(error);
        for (size_t i = 0; i < file->reading.count; i++)
            if (file->curves[i].ok)
                file->ready[file->ready_count++] = as_stored(&file->curves[i]);
    }
    *out = (struct store_file_new){.batch = recipe->batch,
                                   .label = file->label,
                                   .reason = file->reason,
                                   .outcome = file->outcome,
                                   .bytes = (int64_t)file->size,
                                   .curves = file->ready,
                                   .curve_count = file->ready_count};
    memcpy(out->sha256, file->sha256, sizeof out->sha256);
    return true;
}
