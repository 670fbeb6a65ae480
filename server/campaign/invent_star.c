#include "invent_inside.h"

#include <assert.h>
#include <gsl/gsl_randist.h>
#include <math.h>
#include <string.h>

/* The main sequence in steps, for made-up stars that hang together: temperature (K), mass and
 * radius (Sun = 1). Rounded, from memory. */
static const double sequence[][3] = {{3500, 0.40, 0.40}, {4000, 0.60, 0.58}, {4500, 0.70, 0.68},
                                     {5000, 0.80, 0.78}, {5500, 0.93, 0.92}, {5800, 1.00, 1.00},
                                     {6200, 1.15, 1.20}, {6600, 1.32, 1.38}};
#define SEQUENCE (sizeof sequence / sizeof sequence[0])

/* The middle of the field. Made up like the rest. */
#define FIELD_RA_DEG 211.0
#define FIELD_DEC_DEG (-57.5)

gsl_rng *invent_random(uint64_t seed, size_t purpose)
{
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);
    if (random == NULL)
        return NULL;
    /* Mixed as in SplitMix64's finisher (Steele, Lea & Flood 2014), since neighbouring seeds of the
     * generator itself would give related sequences. */
    uint64_t mixed = seed + 0x9e3779b97f4a7c15u * (purpose + 1);
    mixed = (mixed ^ (mixed >> 30)) * 0xbf58476d1ce4e5b9u;
    mixed = (mixed ^ (mixed >> 27)) * 0x94d049bb133111ebu;
    gsl_rng_set(random, (unsigned long)((mixed ^ (mixed >> 31)) & 0xffffffffu));
    return random;
}

double invent_uniform(gsl_rng *random, double low, double high)
{
    return low + (high - low) * gsl_rng_uniform(random);
}

double invent_log_uniform(gsl_rng *random, double low, double high)
{
    return exp(invent_uniform(random, log(low), log(high)));
}

/* Rounded to so many decimals, so that the catalogue and the FITS header state the same value. */
static double rounded(double value, int decimals)
{
    double scale = pow(10.0, decimals);
    return round(value * scale) / scale;
}

static void make_about(struct lightcurve_star *about, size_t index, gsl_rng *random)
{
    (void)snprintf(about->name, sizeof about->name, "RB-%04zu", index + 1);
    about->ra_deg = rounded(FIELD_RA_DEG + invent_uniform(random, -2.5, 2.5), 5);
    about->dec_deg = rounded(FIELD_DEC_DEG + invent_uniform(random, -1.3, 1.3), 5);
    about->magnitude = rounded(14.2 - 3.6 * pow(gsl_rng_uniform(random), 2.0), 2);
    double temperature = invent_uniform(random, 3600.0, 6550.0);
    size_t step = 1;
    while (step < SEQUENCE - 1 && sequence[step][0] < temperature)
        step++;
    double part =
        (temperature - sequence[step - 1][0]) / (sequence[step][0] - sequence[step - 1][0]);
    double mass = sequence[step - 1][1] + part * (sequence[step][1] - sequence[step - 1][1]);
    double radius = sequence[step - 1][2] + part * (sequence[step][2] - sequence[step - 1][2]);
    about->temperature_k = rounded(temperature, 0);
    about->mass_msun = rounded(mass * (1.0 + gsl_ran_gaussian(random, 0.03)), 3);
    about->radius_rsun = rounded(radius * (1.0 + gsl_ran_gaussian(random, 0.04)), 3);
}

/* The times that a file has: all but the common gap and up to two gaps of the star's own. */
static void make_times(struct invent_star *star, gsl_rng *random)
{
    double gap_starts[2], gap_ends[2];
    for (int i = 0; i < 2; i++) {
        bool there = gsl_rng_uniform(random) < 0.3;
        gap_starts[i] = INVENT_STARTS_D + invent_uniform(random, 0.0, INVENT_LENGTH_D);
        gap_ends[i] = gap_starts[i] + (there ? invent_log_uniform(random, 0.15, 1.4) : 0.0);
    }
    star->count = 0;
    for (size_t i = 0; i < INVENT_POINTS; i++) {
        double time = INVENT_STARTS_D + (double)i * INVENT_CADENCE_D;
        bool gap = time >= INVENT_GAP_STARTS_D && time < INVENT_GAP_ENDS_D;
        for (int g = 0; g < 2; g++)
            gap = gap || (time >= gap_starts[g] && time < gap_ends[g]);
        if (gap)
            continue;
        star->time[star->count] = time;
        star->signal[star->count] = 1.0;
        star->count++;
    }
}

/* Flag a few cadences without guiding, and an hour or two of moonlight that the whole field has. */
static void make_flags(struct invent_star *star, gsl_rng *random)
{
    for (size_t i = 0; i < star->count; i++) {
        double day = star->time[i] - INVENT_STARTS_D;
        star->quality[i] = gsl_rng_uniform(random) < 0.006 ? INVENT_UNGUIDED : 0;
        if (day > 22.30 && day < 22.42)
            star->quality[i] |= INVENT_MOONLIT;
    }
}

bool invent_covers(const struct invent_star *star, double time_d)
{
    size_t low = 0, high = star->count;
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        if (star->time[middle] < time_d - 0.5 * INVENT_CADENCE_D)
            low = middle + 1;
        else
            high = middle;
    }
    return low < star->count && star->time[low] <= time_d + 0.5 * INVENT_CADENCE_D &&
           star->quality[low] == 0;
}

/* Noise per cadence of a star of that magnitude: photons, and a floor that the air sets. */
static void make_noise(struct invent_star *star, gsl_rng *random)
{
    double photons = 230e-6 * pow(10.0, 0.2 * (star->about.magnitude - 12.0));
    star->white = hypot(photons, 110e-6) * invent_uniform(random, 0.9, 1.25);
    bool correlated = gsl_rng_uniform(random) < 0.4;
    star->red = correlated ? star->white * invent_uniform(random, 0.25, 0.7) : 0.0;
    star->red_d = invent_log_uniform(random, 0.08, 0.5);
}

/* Turn the signal into what the instrument writes: noise that forgets itself over red_d (an
 * Ornstein-Uhlenbeck process), white noise, and values spoilt where guiding was lost or the moon
 * shone. */
static void measure(struct invent_star *star, gsl_rng *random)
{
    double red = gsl_ran_gaussian(random, star->red);
    for (size_t i = 0; i < star->count; i++) {
        double step = i == 0 ? 0.0 : star->time[i] - star->time[i - 1];
        double kept = exp(-step / star->red_d);
        red = red * kept + gsl_ran_gaussian(random, star->red * sqrt(1.0 - kept * kept));
        double relative = star->signal[i] + red + gsl_ran_gaussian(random, star->white);
        double spoilt = gsl_ran_gaussian(random, 0.01);
        double stray = gsl_rng_uniform(random);
        if ((star->quality[i] & INVENT_UNGUIDED) != 0)
            relative -= fabs(spoilt);
        if ((star->quality[i] & INVENT_MOONLIT) != 0)
            relative += 0.004;
        if (stray < 0.0012) /* a cosmic ray */
            relative += 8.0 * star->white * (1.0 + 1000.0 * stray);
        bool missing = stray > 0.9975;
        star->flux[i] = missing ? NAN : star->level * relative;
        star->error[i] = missing ? NAN : star->level * star->white;
    }
}

bool invent_star_make(uint64_t seed, size_t index, enum invent_kind kind, struct invent_star *star,
                      struct base_error *error)
{
    assert(index < INVENT_STARS);
    gsl_rng *random = invent_random(seed, index + 1);
    if (random == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to invent a star.");
    *star = (struct invent_star){.kind = kind};
    make_about(&star->about, index, random);
    star->level = rounded(12000.0 * pow(10.0, -0.4 * (star->about.magnitude - 12.0)), 0);
    make_noise(star, random);
    make_times(star, random);
    make_flags(star, random);
    invent_dips_add(star, random);
    invent_weather_add(star, index, random);
    measure(star, random);
    gsl_rng_free(random);
    return true;
}
