#include "read.h"

#include "ebbmark/text.h"

#include <assert.h>
#include <math.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define NO_MEMORY "There is not enough memory to hold the light curves of this file."

_Static_assert(crypto_shorthash_KEYBYTES == sizeof((struct lightcurve_gather *)0)->key,
               "the gather's key is the hash's");

void lightcurve_gather_start(struct lightcurve_gather *gather, bool with_error, bool with_quality)
{
    *gather = (struct lightcurve_gather){.with_error = with_error, .with_quality = with_quality};
    randombytes_buf(gather->key, sizeof gather->key);
}

void lightcurve_gather_free(struct lightcurve_gather *gather)
{
    for (size_t i = 0; i < gather->count; i++)
        lightcurve_raw_free(&gather->curves[i]);
    free(gather->curves);
    free(gather->capacity);
    free(gather->slots);
    *gather = (struct lightcurve_gather){0};
}

/* The slot that holds this name, or the empty one where it belongs. */
static size_t slot_of(const struct lightcurve_gather *gather, const char *name, size_t length)
{
    unsigned char hash[crypto_shorthash_BYTES];
    crypto_shorthash(hash, (const unsigned char *)name, length, gather->key);
    uint64_t at;
    memcpy(&at, hash, sizeof at);
    size_t mask = gather->slot_count - 1;
    for (size_t slot = (size_t)at & mask;; slot = (slot + 1) & mask) {
        uint32_t found = gather->slots[slot];
        if (found == 0)
            return slot;
        const char *other = gather->curves[found - 1].star.name;
        if (memcmp(other, name, length) == 0 && other[length] == '\0')
            return slot;
    }
}

/* Double the tables. They are kept at most half full, so that slot_of always ends. */
static bool widen(struct lightcurve_gather *gather, struct base_error *error)
{
    size_t room = gather->room == 0 ? 8 : gather->room * 2;
    struct lightcurve_raw *curves = realloc(gather->curves, room * sizeof *curves);
    if (curves != NULL)
        gather->curves = curves;
    size_t *capacity = realloc(gather->capacity, room * sizeof *capacity);
    if (capacity != NULL)
        gather->capacity = capacity;
    uint32_t *slots = calloc(room * 2, sizeof *slots);
    if (curves == NULL || capacity == NULL || slots == NULL) {
        free(slots);
        return base_fail(error, BASE_MEMORY, NO_MEMORY);
    }
    free(gather->slots);
    gather->slots = slots;
    gather->slot_count = room * 2;
    gather->room = room;
    for (size_t i = 0; i < gather->count; i++) {
        const char *name = gather->curves[i].star.name;
        slots[slot_of(gather, name, strlen(name))] = (uint32_t)(i + 1);
    }
    return true;
}

static bool name_is_fit(const char *name, size_t length, struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    if (length == 0)
        return base_fail(error, BASE_INVALID, "The star's name is empty.");
    if (length >= LIGHTCURVE_NAME_SIZE)
        return base_fail(error, BASE_INVALID,
                         "The star's name \"%s\" is longer than %d bytes, the limit.",
                         lightcurve_quote(quoted, name, length), LIGHTCURVE_NAME_SIZE - 1);
    bool plain = base_text_is_utf8(name, length);
    for (size_t i = 0; i < length && plain; i++)
        plain = (unsigned char)name[i] >= 0x20 && name[i] != 0x7f;
    if (!plain)
        return base_fail(error, BASE_INVALID,
                         "The star's name \"%s\" holds bytes that are not UTF-8 text.",
                         lightcurve_quote(quoted, name, length));
    return true;
}

bool lightcurve_gather_star(struct lightcurve_gather *gather, const char *name, size_t length,
                            size_t *index, struct base_error *error)
{
    if (!name_is_fit(name, length, error))
        return false;
    if (gather->count == gather->room && !widen(gather, error))
        return false;
    size_t slot = slot_of(gather, name, length);
    if (gather->slots[slot] != 0) {
        *index = gather->slots[slot] - 1;
        return true;
    }
    if (gather->count == LIGHTCURVE_STARS_PER_FILE_MAX)
        return base_fail(error, BASE_TOO_LARGE, "The file holds more than %d stars, the limit.",
                         LIGHTCURVE_STARS_PER_FILE_MAX);
    struct lightcurve_raw *curve = &gather->curves[gather->count];
    *curve = (struct lightcurve_raw){.star = {.ra_deg = NAN,
                                              .dec_deg = NAN,
                                              .magnitude = NAN,
                                              .temperature_k = NAN,
                                              .radius_rsun = NAN,
                                              .mass_msun = NAN}};
    memcpy(curve->star.name, name, length);
    gather->capacity[gather->count] = 0;
    *index = gather->count++;
    gather->slots[slot] = (uint32_t)(*index + 1);
    return true;
}

/* Move one array to a new capacity; on failure the old one stays. */
static bool resize(void **array, size_t capacity, size_t item)
{
    void *moved = realloc(*array, capacity * item);
    if (moved == NULL)
        return false;
    *array = moved;
    return true;
}

static bool resize_curve(struct lightcurve_gather *gather, size_t index, size_t capacity)
{
    struct lightcurve_raw *curve = &gather->curves[index];
    void *time = curve->time, *flux = curve->flux, *error = curve->error, *quality = curve->quality;
    bool ok = resize(&time, capacity, sizeof(double));
    ok = ok && resize(&flux, capacity, sizeof(double));
    if (gather->with_error)
        ok = ok && resize(&error, capacity, sizeof(double));
    if (gather->with_quality)
        ok = ok && resize(&quality, capacity, sizeof(int32_t));
    curve->time = time;
    curve->flux = flux;
    curve->error = error;
    curve->quality = quality;
    if (ok)
        gather->capacity[index] = capacity;
    return ok;
}

bool lightcurve_gather_reserve(struct lightcurve_gather *gather, size_t index, size_t more,
                               struct base_error *error)
{
    assert(index < gather->count);
    size_t count = gather->curves[index].count;
    if (more > LIGHTCURVE_POINTS_MAX || count + more > LIGHTCURVE_POINTS_MAX)
        return base_fail(error, BASE_TOO_LARGE,
                         "The light curve has more than %d points, the limit.",
                         LIGHTCURVE_POINTS_MAX);
    if (gather->points + more > LIGHTCURVE_FILE_POINTS_MAX)
        return base_fail(error, BASE_TOO_LARGE, "The file has more than %d points, the limit.",
                         LIGHTCURVE_FILE_POINTS_MAX);
    size_t capacity = gather->capacity[index];
    if (count + more <= capacity)
        return true;
    capacity = capacity < 32 ? 32 : capacity * 2;
    if (capacity < count + more)
        capacity = count + more;
    if (!resize_curve(gather, index, capacity))
        return base_fail(error, BASE_MEMORY, NO_MEMORY);
    return true;
}

bool lightcurve_gather_point(struct lightcurve_gather *gather, size_t index, double time,
                             double flux, double point_error, int32_t quality,
                             struct base_error *error)
{
    struct lightcurve_raw *curve = &gather->curves[index];
    if ((curve->count == gather->capacity[index] || curve->count >= LIGHTCURVE_POINTS_MAX ||
         gather->points >= LIGHTCURVE_FILE_POINTS_MAX) &&
        !lightcurve_gather_reserve(gather, index, 1, error))
        return false;
    size_t at = curve->count++;
    gather->points++;
    curve->time[at] = time;
    curve->flux[at] = flux;
    if (gather->with_error)
        curve->error[at] = point_error;
    if (gather->with_quality)
        curve->quality[at] = quality;
    return true;
}

static bool has_value(const struct lightcurve_raw *curve)
{
    for (size_t i = 0; i < curve->count; i++)
        if (isfinite(curve->time[i]) && isfinite(curve->flux[i]))
            return true;
    return false;
}

bool lightcurve_gather_finish(struct lightcurve_gather *gather, const char *reference,
                              struct lightcurve_reading *out, struct base_error *error)
{
    if (gather->points == 0)
        return base_fail(error, BASE_INVALID, "The file holds column names but no data.");
    bool any = false;
    for (size_t i = 0; i < gather->count; i++) {
        any = any || has_value(&gather->curves[i]);
        (void)snprintf(gather->curves[i].time_reference, LIGHTCURVE_REFERENCE_SIZE, "%s",
                       reference[0] == '\0' ? LIGHTCURVE_REFERENCE_UNSTATED : reference);
    }
    if (!any)
        return base_fail(error, BASE_INVALID,
                         "All values are missing: no row has both a time and a flux.");
    out->curves = gather->curves;
    out->count = gather->count;
    gather->curves = NULL;
    gather->count = 0;
    lightcurve_gather_free(gather);
    return true;
}

int32_t lightcurve_quality_fold(int64_t flags)
{
    uint32_t low = (uint32_t)((uint64_t)flags & 0xffffffffu);
    if (flags > (int64_t)UINT32_MAX || flags < INT32_MIN)
        low |= 0x80000000u;
    int32_t folded;
    memcpy(&folded, &low, sizeof folded);
    return folded;
}

int32_t lightcurve_quality_of_number(double flags)
{
    if (isnan(flags))
        return 0;
    if (flags != floor(flags) || fabs(flags) > 9e15)
        return INT32_MIN;
    return lightcurve_quality_fold((int64_t)flags);
}
