/*
 * What the headers of a FITS file say, checked against the bytes that are there. Private to the
 * room. cfitsio reads a table's values only after this has found its sizes to be true.
 */
#ifndef EBBMARK_SERVER_LIGHTCURVE_FITS_LAYOUT_H
#define EBBMARK_SERVER_LIGHTCURVE_FITS_LAYOUT_H

#include "read.h"

#define LIGHTCURVE_FITS_BLOCK 2880
#define LIGHTCURVE_FITS_CARDS_MAX 50000 /* cards of one header */
#define LIGHTCURVE_FITS_PARTS_MAX 10000 /* header and data units looked through */
#define LIGHTCURVE_FITS_COLUMNS_MAX 999 /* FITS 4.0, section 7.3.1 */
#define LIGHTCURVE_FITS_TEXT 72         /* a card's string value with its NUL */

struct lightcurve_fits_column {
    char name[LIGHTCURVE_COLUMN_SIZE]; /* TTYPEn */
    char unit[LIGHTCURVE_COLUMN_SIZE]; /* TUNITn */
    char type;                         /* the letter of TFORMn; 0 when there is none */
    uint64_t repeat;
    bool scaled; /* TSCALn or TZEROn is there */
};

/* Where times are counted from, whole or as integer and fraction (BJDREF, BJDREFI, BJDREFF …). */
struct lightcurve_fits_epoch {
    double bjd, bjd_i, bjd_f, mjd, mjd_i, mjd_f, jd, jd_i, jd_f;
};

/* Header keywords that matter to a light curve. Numbers are NAN and texts empty where absent. */
struct lightcurve_fits_facts {
    struct lightcurve_fits_epoch epoch;
    double time_zero; /* TIMEZERO or TIMEOFFS, added to every time, in the header's time unit */
    char time_system[LIGHTCURVE_FITS_TEXT]; /* TIMESYS */
    char time_frame[LIGHTCURVE_FITS_TEXT];  /* TIMEREF or TREFPOS: where the clock is thought */
    char time_unit[LIGHTCURVE_FITS_TEXT];   /* TIMEUNIT */
    char star[LIGHTCURVE_FITS_TEXT];
    double ra_deg, dec_deg, magnitude, temperature_k, radius_rsun;
};

/* One header and data unit. */
struct lightcurve_fits_part {
    int number; /* 1 is the primary */
    bool is_table;
    uint64_t data_at, row_bytes, rows;
    size_t column_count;
    struct lightcurve_fits_column *columns; /* LIGHTCURVE_FITS_COLUMNS_MAX of them, in the walk */
    struct lightcurve_fits_facts facts;     /* its own, and the primary's where it has none */
};

struct lightcurve_fits_walk {
    const unsigned char *data;
    size_t size, at;
    const struct lightcurve_mapping *mapping;
    struct lightcurve_fits_facts primary;
    struct lightcurve_fits_part part;
};

/* Begin at the primary header; mapping's keywords are checked (BASE_INVALID naming the field). */
bool lightcurve_fits_open(struct lightcurve_fits_walk *walk, const unsigned char *data, size_t size,
                          const struct lightcurve_mapping *mapping, struct base_error *error);
/* Go on to the next unit, left in walk->part; *found is false at the end. BASE_INVALID
 * "Truncated: …" or what contradicts the standard, BASE_TOO_LARGE past a limit. */
bool lightcurve_fits_next(struct lightcurve_fits_walk *walk, bool *found, struct base_error *error);
void lightcurve_fits_close(struct lightcurve_fits_walk *walk);

/* Does the header say from when times are counted? */
bool lightcurve_fits_epoch_known(const struct lightcurve_fits_epoch *epoch);

#endif
