/*
 * Reading light curves from files: FITS (through cfitsio), CSV, folders and archives (.zip, .tar,
 * .tar.gz through libarchive), and the star catalogue that comes beside them. Input is hostile:
 * every limit has a name here and an error that states it. Pure but for the files it is asked to
 * read; safe from several threads with different arguments.
 */
#ifndef EBBMARK_LIGHTCURVE_READ_H
#define EBBMARK_LIGHTCURVE_READ_H

#include "ebbmark/lightcurve.h"

#define LIGHTCURVE_FILE_BYTES_MAX (2ull << 30) /* one light-curve file, unpacked */
#define LIGHTCURVE_CSV_COLUMNS_MAX 1000        /* columns of a CSV */
#define LIGHTCURVE_CSV_LINE_MAX (1u << 20)     /* bytes of one CSV line */
#define LIGHTCURVE_STARS_PER_FILE_MAX 100000   /* stars in one file */
#define LIGHTCURVE_FILE_POINTS_MAX 100000000   /* points in one file, over all its stars */
#define LIGHTCURVE_ARCHIVE_FILES_MAX 2000000   /* entries of one archive */
#define LIGHTCURVE_ARCHIVE_RATIO_MAX 200       /* unpacked over packed bytes, past 64 MiB */
#define LIGHTCURVE_CATALOGUE_ROWS_MAX 5000000

/* Which columns and header keywords to take; empty means the defaults of the design:
 * time: a column named TIME (any case); flux: a column whose name ends in FLUX and is not an error
 * column, the longest such name, the first of equals; quality: QUALITY, or none; error: the flux
 * column's name followed by _ERR, or none; star: STAR in a CSV, none in FITS. A column that is
 * named must be there; "-" for error, quality or star means that there is none. In FITS the columns
 * hold one number a row (star: text); in CSV a name stands without its unit, `time [d]` being
 * "time". */
struct lightcurve_mapping {
    char time[72], flux[72], error[72], quality[72], star[72]; /* column names */
    char key_name[12], key_ra[12], key_dec[12], key_magnitude[12], key_temperature[12],
        key_radius[12]; /* FITS header keywords; defaults OBJECT RA_OBJ DEC_OBJ (none) TEFF RADIUS
                         */
};

/* What one file held. Owned by the struct; free with lightcurve_reading_free. */
struct lightcurve_reading {
    struct lightcurve_raw *curves;
    size_t count; /* at least 1 on success */
};
void lightcurve_reading_free(struct lightcurve_reading *reading);

/* Read one FITS or CSV file held in memory. `name` is used for messages and, where nothing else
 * names the star, its base name without the extension does. The kind is told from the content, not
 * the name: FITS begins with "SIMPLE  =" (gzip-compressed FITS and CSV are accepted).
 * Times are turned into days where the column's unit, or else TIMEUNIT, is another (d where none is
 * stated), and TIMEZERO is added. The reference is worded like "BJD_TDB - 2457000", from BJDREF*,
 * MJDREF* or JDREF* with TIMESYS and TIMEREF, else from the unit's text, else it is "unstated".
 * Star properties outside their range in a FITS header are taken as unknown.
 * Errors are BASE_INVALID ("no flux column", "truncated: …", "line 12: …"), BASE_TOO_LARGE or
 * BASE_MEMORY, never a crash. On failure `out` is zeroed. */
bool lightcurve_read_bytes(const char *name, const void *data, size_t size,
                           const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                           struct base_error *error);

/* One file found by a walk: `label` is the path shown to people ("night1.zip: a/b.csv"). Data is
 * valid during the call only. `data` is NULL when the entry could not be read; `reason` then says
 * why (too large, unsafe path, truncated archive). Return false to stop the walk. */
typedef bool lightcurve_visit(void *context, const char *label, const void *data, size_t size,
                              const struct base_error *reason);

/* Visit every light-curve file of a path: the file itself, a folder in the order of its sorted
 * names (recursively; links in it are not followed), or the entries of an archive, which may be
 * bare or in a folder, but not in an archive. Names that start with a dot, directories, README* and
 * non-regular entries are passed over. Labels begin with the path as given. Returns false
 * when the path itself cannot be read; a bad entry is reported to the visitor and does not stop
 * the walk. A visitor that stops gives BASE_CANCELLED. */
bool lightcurve_walk(const char *path, lightcurve_visit *visit, void *context,
                     struct base_error *error);

/* How many files a walk of `path` would visit, for a progress bar: for an archive its entries. */
bool lightcurve_walk_count(const char *path, size_t *files, uint64_t *bytes,
                           struct base_error *error);

/* A star catalogue: CSV with a header; column `star` (or name), and any of ra, dec, magnitude,
 * temperature, radius, mass. Sorted by name. A bad row (not a number, out of range, a name that
 * stands twice) refuses the catalogue with its line. Free with lightcurve_catalogue_free. */
struct lightcurve_catalogue {
    struct lightcurve_star *stars;
    size_t count;
};
bool lightcurve_catalogue_read(const char *path, struct lightcurve_catalogue *out,
                               struct base_error *error);
void lightcurve_catalogue_free(struct lightcurve_catalogue *catalogue);

/* The entry of that exact name, or NULL. */
const struct lightcurve_star *
lightcurve_catalogue_find(const struct lightcurve_catalogue *catalogue, const char *name);

#endif
