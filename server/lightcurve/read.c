#include "read.h"

#include <assert.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

void lightcurve_raw_free(struct lightcurve_raw *raw)
{
    if (raw == NULL)
        return;
    free(raw->time);
    free(raw->flux);
    free(raw->error);
    free(raw->quality);
    *raw = (struct lightcurve_raw){0};
}

void lightcurve_reading_free(struct lightcurve_reading *reading)
{
    if (reading == NULL)
        return;
    for (size_t i = 0; i < reading->count; i++)
        lightcurve_raw_free(&reading->curves[i]);
    free(reading->curves);
    *reading = (struct lightcurve_reading){0};
}

/* Cut `ending` off the text when it ends so, in any case, and something is left. */
static void cut_ending(char *text, const char *ending)
{
    size_t length = strlen(text), cut = strlen(ending);
    if (length > cut && strcasecmp(text + length - cut, ending) == 0)
        text[length - cut] = '\0';
}

/* The star's name for want of a better one: "night1.zip: a/RB-0001.csv.gz" gives "RB-0001". A name
 * too long for a star is cut, which only shows where the file holds no name. */
static void name_of_label(const char *label, char star[LIGHTCURVE_NAME_SIZE])
{
    static const char *const endings[] = {".gz", ".fits", ".fit", ".fts", ".csv", ".tsv", ".txt"};
    char name[512];
    const char *base = strrchr(label, '/');
    base = base == NULL ? label : base + 1;
    const char *entry = strstr(base, ": ");
    base = entry == NULL ? base : entry + 2;
    size_t length = strnlen(base, sizeof name - 1);
    memcpy(name, base, length);
    name[length] = '\0';
    for (size_t i = 0; i < sizeof endings / sizeof endings[0]; i++)
        cut_ending(name, endings[i]);
    length = strnlen(name, LIGHTCURVE_NAME_SIZE - 1);
    while (length > 0 && ((unsigned char)name[length] & 0xc0) == 0x80)
        length--; /* never through the middle of a character */
    memcpy(star, name, length);
    star[length] = '\0';
}

/* FITS 4.0, section 4.4.1: the first card is SIMPLE, with its value indicator in place. */
static bool is_fits(const unsigned char *data, size_t size)
{
    return size >= 9 && memcmp(data, "SIMPLE  =", 9) == 0;
}

static bool read_plain(const char *name, const unsigned char *data, size_t size,
                       const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                       struct base_error *error)
{
    char star[LIGHTCURVE_NAME_SIZE];
    name_of_label(name, star);
    if (lightcurve_archive_is(data, size))
        return base_fail(error, BASE_INVALID,
                         "This is an archive inside an archive or sent as a light curve, which is "
                         "not unpacked.");
    if (lightcurve_gzip_is(data, size))
        return base_fail(error, BASE_INVALID,
                         "The file is compressed twice; only one layer of "
                         "gzip is unpacked.");
    if (is_fits(data, size))
        return lightcurve_read_fits(star, data, size, mapping, out, error);
    return lightcurve_read_csv(star, (const char *)data, size, mapping, out, error);
}

bool lightcurve_read_bytes(const char *name, const void *data, size_t size,
                           const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                           struct base_error *error)
{
    assert(name != NULL && (data != NULL || size == 0) && mapping != NULL && out != NULL);
    *out = (struct lightcurve_reading){0};
    if (size == 0)
        return base_fail(error, BASE_INVALID, "The file is empty.");
    if (size > LIGHTCURVE_FILE_BYTES_MAX)
        return base_fail(error, BASE_TOO_LARGE, "The file is larger than %llu bytes, the limit.",
                         LIGHTCURVE_FILE_BYTES_MAX);
    if (!lightcurve_gzip_is(data, size))
        return read_plain(name, data, size, mapping, out, error);
    unsigned char *unpacked = NULL;
    size_t unpacked_size = 0;
    bool ok = lightcurve_gzip_unpack(data, size, &unpacked, &unpacked_size, error) &&
              read_plain(name, unpacked, unpacked_size, mapping, out, error);
    free(unpacked);
    return ok;
}
