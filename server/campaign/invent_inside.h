/* What the makers of the invented survey share. Private to the room. */
#ifndef CAMPAIGN_INVENT_INSIDE_H
#define CAMPAIGN_INVENT_INSIDE_H

#include <gsl/gsl_rng.h>
#include <stdio.h>

#include "ebbmark/invent.h"
#include "ebbmark/lightcurve.h"

#define INVENT_CADENCE_D (1.0 / 48.0)
#define INVENT_STARTS_D 905.25 /* first cadence, in the survey's time */
#define INVENT_LENGTH_D 27.0
#define INVENT_POINTS 1296
#define INVENT_REFERENCE_D 2460000 /* times are BJD_TDB minus this */
#define INVENT_GAP_STARTS_D (INVENT_STARTS_D + 12.9)
#define INVENT_GAP_ENDS_D (INVENT_STARTS_D + 14.1)
#define INVENT_DIPS_MAX 96
#define INVENT_LURES_MAX 8

/* Why a cadence is flagged. */
enum invent_flag { INVENT_UNGUIDED = 1, INVENT_MOONLIT = 2 };

enum invent_kind {
    INVENT_NOTHING,   /* no dip at all */
    INVENT_REPEATING, /* one transiting body, several transits */
    INVENT_TWO,       /* two such bodies */
    INVENT_SINGLE,    /* one transit of a long period */
    INVENT_ECLIPSING  /* two stars: deep V-shaped eclipses, and shallower ones between */
};

struct invent_dip {
    double mid_d, depth, duration_d; /* depth relative, duration from first to last contact */
    double period_d;                 /* 0: only one transit falls into the data */
    double snr;                      /* expected, against white and correlated noise */
    bool eclipse;
};

struct invent_lure {
    double mid_d, duration_d;
    const char *kind; /* "instrument", "ramp", "recovery" */
};

/* One star with its light curve and the truth about it. Large: kept on the heap. */
struct invent_star {
    struct lightcurve_star about;
    enum invent_kind kind;
    double level;                 /* electrons per second */
    double white, red, red_d;     /* noise per cadence, correlated noise and its time, relative */
    size_t count;                 /* cadences in the file */
    double time[INVENT_POINTS];   /* d since the reference */
    double signal[INVENT_POINTS]; /* relative flux without noise, while it is made */
    double flux[INVENT_POINTS];   /* electrons per second; NAN where it is missing */
    double error[INVENT_POINTS];
    int32_t quality[INVENT_POINTS];
    struct invent_dip dips[INVENT_DIPS_MAX];
    size_t dip_count;
    struct invent_lure lures[INVENT_LURES_MAX];
    size_t lure_count;
};

/* Random numbers for one purpose, so that a change to one star leaves the others as they are.
 * Freed by the caller; NULL when out of memory. */
gsl_rng *invent_random(uint64_t seed, size_t purpose);

/* Make star number `index` (from 0). BASE_MEMORY. */
bool invent_star_make(uint64_t seed, size_t index, enum invent_kind kind, struct invent_star *star,
                      struct base_error *error);

/* Put transits or eclipses into star->signal and tell of them in star->dips. */
void invent_dips_add(struct invent_star *star, gsl_rng *random);

/* Put what the star and the instrument do into star->signal (spots, flares; shared dips, ramps,
 * recoveries, which are told of in star->lures). */
void invent_weather_add(struct invent_star *star, size_t index, gsl_rng *random);

/* Log-uniform between two positive numbers; uniform between two numbers. */
double invent_log_uniform(gsl_rng *random, double low, double high);
double invent_uniform(gsl_rng *random, double low, double high);

/* Is there a usable cadence within half a cadence of that time? */
bool invent_covers(const struct invent_star *star, double time_d);

/* Write a file whole: to a neighbouring name, then renamed. */
bool invent_file_write(const char *folder, const char *name, const void *data, size_t size,
                       struct base_error *error);
/* A star's FITS file in memory, malloc'd for the caller; no card of it depends on the clock. */
bool invent_fits_make(const struct invent_star *star, unsigned char **data, size_t *size,
                      struct base_error *error);

#endif
