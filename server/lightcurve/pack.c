#include "ebbmark/lightcurve_pack.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

static const char magic[4] = {'E', 'B', 'F', '1'};

static void put32(unsigned char *out, uint32_t value)
{
    for (int i = 0; i < 4; i++)
        out[i] = (unsigned char)(value >> (8 * i));
}

static uint32_t get32(const unsigned char *data)
{
    uint32_t value = 0;
    for (int i = 0; i < 4; i++)
        value |= (uint32_t)data[i] << (8 * i);
    return value;
}

static void put_float(unsigned char *out, double value)
{
    float narrow = (float)value;
    uint32_t bits;
    memcpy(&bits, &narrow, sizeof bits);
    put32(out, bits);
}

static double get_float(const unsigned char *data)
{
    uint32_t bits = get32(data);
    float narrow;
    memcpy(&narrow, &bits, sizeof narrow);
    return narrow;
}

static void put_double(unsigned char *out, double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    put32(out, (uint32_t)bits);
    put32(out + 4, (uint32_t)(bits >> 32));
}

static double get_double(const unsigned char *data)
{
    uint64_t bits = get32(data) | (uint64_t)get32(data + 4) << 32;
    double value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

size_t lightcurve_pack_size(size_t n)
{
    return LIGHTCURVE_PACK_HEAD + 8 * n;
}

void lightcurve_pack(const double *time, const double *flux, size_t n, double median_flux,
                     double noise, unsigned char *out)
{
    assert(n <= LIGHTCURVE_POINTS_MAX);
    double reference = n > 0 ? floor(time[0]) : 0.0;
    memcpy(out, magic, sizeof magic);
    put32(out + 4, (uint32_t)n);
    put_double(out + 8, reference);
    put_double(out + 16, median_flux);
    put_float(out + 24, noise);
    put32(out + 28, 0);
    unsigned char *days = out + LIGHTCURVE_PACK_HEAD, *levels = days + 4 * n;
    for (size_t i = 0; i < n; i++) {
        put_float(days + 4 * i, time[i] - reference);
        put_float(levels + 4 * i, flux[i] - 1.0);
    }
}

/* The head of a body that may hold anything; `n` and `reference` on success. */
static bool read_head(const unsigned char *data, size_t size, size_t *n, double *reference,
                      struct base_error *error)
{
    if (size < LIGHTCURVE_PACK_HEAD || memcmp(data, magic, sizeof magic) != 0)
        return base_fail(error, BASE_INVALID,
                         "This is not packed flux: it does not begin with "
                         "the letters EBF1 and a whole head.");
    *n = get32(data + 4);
    if (*n > LIGHTCURVE_POINTS_MAX)
        return base_fail(error, BASE_INVALID,
                         "The packed flux claims %zu points; at most %d are "
                         "allowed.",
                         *n, LIGHTCURVE_POINTS_MAX);
    if (size != lightcurve_pack_size(*n))
        return base_fail(error, BASE_INVALID,
                         "The packed flux claims %zu points, which take %zu bytes, but is %zu "
                         "bytes long.",
                         *n, lightcurve_pack_size(*n), size);
    *reference = get_double(data + 8);
    if (!(fabs(*reference) <= LIGHTCURVE_TIME_MAX_D) || !isfinite(get_double(data + 16)) ||
        isinf(get_float(data + 24)) || get_float(data + 24) < 0.0 || get32(data + 28) != 0)
        return base_fail(error, BASE_INVALID,
                         "The head of the packed flux holds a value that no "
                         "light curve has.");
    return true;
}

static bool read_points(const unsigned char *data, size_t n, double reference, double *time,
                        double *flux, struct base_error *error)
{
    const unsigned char *days = data + LIGHTCURVE_PACK_HEAD, *levels = days + 4 * n;
    for (size_t i = 0; i < n; i++) {
        double since = get_float(days + 4 * i), level = get_float(levels + 4 * i);
        if (!isfinite(since) || !isfinite(level))
            return base_fail(error, BASE_INVALID,
                             "Point %zu of the packed flux is not a finite number.", i);
        time[i] = reference + since;
        flux[i] = 1.0 + level;
        if (i > 0 && time[i] < time[i - 1])
            return base_fail(error, BASE_INVALID,
                             "Point %zu of the packed flux is earlier than the one before it.", i);
    }
    return true;
}

bool lightcurve_unpack(const unsigned char *data, size_t size, double **time, double **flux,
                       size_t *n, double *noise, struct base_error *error)
{
    *time = *flux = NULL;
    *n = 0;
    *noise = NAN;
    size_t count = 0;
    double reference = 0.0;
    if (!read_head(data, size, &count, &reference, error))
        return false;
    double *times = calloc(count + 1, sizeof *times), *fluxes = calloc(count + 1, sizeof *fluxes);
    bool ok = false;
    if (times == NULL || fluxes == NULL) {
        base_fail(error, BASE_MEMORY, "Not enough memory for %zu points.", count);
        goto out;
    }
    if (!read_points(data, count, reference, times, fluxes, error))
        goto out;
    *time = times;
    *flux = fluxes;
    *n = count;
    *noise = get_float(data + 24);
    times = fluxes = NULL;
    ok = true;
out:
    free(fluxes);
    free(times);
    return ok;
}
