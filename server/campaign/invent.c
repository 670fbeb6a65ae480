#include "invent_inside.h"

#include <assert.h>
#include <errno.h>
#include <gsl/gsl_randist.h>
#include <inttypes.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

#include "ebbmark/text.h"

#define SINGLE_CSV 8 /* stars with a CSV file of their own; as many share one */
#define TOGETHER "reedbed-east.csv"

/* How many stars of each kind; the rest have no dip. */
static const size_t kind_counts[] = {
    [INVENT_REPEATING] = 22, [INVENT_TWO] = 2, [INVENT_SINGLE] = 11, [INVENT_ECLIPSING] = 4};

/* The texts that grow star by star. */
struct survey {
    const char *folder;
    char *curves; /* folder of the light curves */
    uint64_t seed;
    struct base_text stars, truth, lures, together;
    size_t dips, lure_count, with_dips;
};

static bool make_folder(const char *path, struct base_error *error)
{
    if (mkdir(path, 0777) == 0 || errno == EEXIST)
        return true;
    return base_fail_errno(error, errno, "Making the folder %s", path);
}

static void add_number(struct base_text *text, double value)
{
    char number[BASE_NUMBER_SIZE];
    base_text_add(text, base_text_number(number, value));
}

static void add_catalogue_row(struct base_text *text, const struct lightcurve_star *about)
{
    const double values[] = {about->ra_deg,        about->dec_deg,     about->magnitude,
                             about->temperature_k, about->radius_rsun, about->mass_msun};
    base_text_add(text, about->name);
    for (size_t i = 0; i < sizeof values / sizeof values[0]; i++) {
        base_text_add_char(text, ',');
        add_number(text, values[i]);
    }
    base_text_add_char(text, '\n');
}

static void add_truth_rows(struct survey *survey, const struct invent_star *star)
{
    const char *name = star->about.name;
    survey->with_dips += star->dip_count > 0 ? 1 : 0;
    for (size_t i = 0; i < star->dip_count; i++) {
        const struct invent_dip *dip = &star->dips[i];
        base_text_add_format(&survey->truth, "%s,%.5f,%.0f,%.3f,", name, dip->mid_d,
                             dip->depth * 1e6, dip->duration_d * 24.0);
        if (dip->period_d > 0.0)
            base_text_add_format(&survey->truth, "%.6f", dip->period_d);
        base_text_add_format(&survey->truth, ",%.1f,%s\n", dip->snr,
                             dip->eclipse ? "eclipse" : "transit");
        survey->dips++;
    }
    for (size_t i = 0; i < star->lure_count; i++) {
        base_text_add_format(&survey->lures, "%s,%.5f,%.3f,%s\n", name, star->lures[i].mid_d,
                             star->lures[i].duration_d * 24.0, star->lures[i].kind);
        survey->lure_count++;
    }
}

/* One CSV line a cadence; `named` begins it with the star. */
static void add_csv_rows(struct base_text *text, const struct invent_star *star, bool named)
{
    for (size_t i = 0; i < star->count; i++) {
        if (named)
            base_text_add_format(text, "%s,", star->about.name);
        base_text_add_format(text, "%.6f,", star->time[i]);
        if (isfinite(star->flux[i]))
            base_text_add_format(text, "%.2f,%.2f", star->flux[i], star->error[i]);
        else
            base_text_add(text, ",");
        base_text_add_format(text, ",%" PRId32 "\n", star->quality[i]);
    }
}

#define CSV_COLUMNS "time [BJD_TDB - 2460000],flux [e-/s],flux_err [e-/s],quality\n"

static bool fail_memory(struct base_error *error)
{
    return base_fail(error, BASE_MEMORY, "There is not enough memory to write the survey.");
}

/* The last stars come as CSV: some in a file of their own, some together; the others as FITS. */
static bool write_curve(struct survey *survey, const struct invent_star *star, size_t index,
                        struct base_error *error)
{
    char name[LIGHTCURVE_NAME_SIZE + 8];
    if (index >= INVENT_STARS - SINGLE_CSV) {
        add_csv_rows(&survey->together, star, true);
        return true;
    }
    bool ok = false;
    struct base_text text = {0};
    unsigned char *data = NULL;
    size_t size = 0;
    if (index >= INVENT_STARS - 2 * SINGLE_CSV) {
        base_text_add(&text, CSV_COLUMNS);
        add_csv_rows(&text, star, false);
        (void)snprintf(name, sizeof name, "%s.csv", star->about.name);
        ok = !text.failed ? invent_file_write(survey->curves, name, text.data, text.length, error)
                          : fail_memory(error);
    } else {
        (void)snprintf(name, sizeof name, "%s.fits", star->about.name);
        ok = invent_fits_make(star, &data, &size, error) &&
             invent_file_write(survey->curves, name, data, size, error);
    }
    free(data);
    base_text_free(&text);
    return ok;
}

/* Which star is of which kind: a shuffled list. */
static bool deal_kinds(uint64_t seed, enum invent_kind kinds[INVENT_STARS],
                       struct base_error *error)
{
    gsl_rng *random = invent_random(seed, 0);
    if (random == NULL)
        return fail_memory(error);
    size_t at = 0;
    for (size_t kind = 0; kind < sizeof kind_counts / sizeof kind_counts[0]; kind++)
        for (size_t i = 0; i < kind_counts[kind]; i++)
            kinds[at++] = (enum invent_kind)kind;
    while (at < INVENT_STARS)
        kinds[at++] = INVENT_NOTHING;
    gsl_ran_shuffle(random, kinds, INVENT_STARS, sizeof kinds[0]);
    gsl_rng_free(random);
    return true;
}

static void write_readme(const struct survey *survey, struct base_text *text)
{
    base_text_add(text, "# The Long Reach survey, field Reedbed\n\n"
                        "**All of this is invented.** No star here exists, nothing was observed, "
                        "and no real survey,\nperson or data stands behind it. The coordinates are "
                        "places on the sky only in form.\n\n");
    base_text_add_format(
        text,
        "It was made by `ebbmark invent --output FOLDER --seed %" PRIu64 "`; the same seed gives "
        "the same bytes.\n\n"
        "The story: Long Reach is a small array on an island far enough south that the winter "
        "night lasts for\nweeks. It watched %d stars for %.0f days, one brightness every half "
        "hour, but for a common gap of\n%.1f days in the middle. Times are BJD_TDB - %d.\n\n",
        survey->seed, INVENT_STARS, INVENT_LENGTH_D, INVENT_GAP_ENDS_D - INVENT_GAP_STARTS_D,
        INVENT_REFERENCE_D);
    base_text_add(
        text, "| file | holds |\n| --- | --- |\n"
              "| light-curves/ | one FITS file a star, some CSV, and one CSV with several stars |\n"
              "| stars.csv | the catalogue: place, brightness, temperature, radius, mass |\n"
              "| truth.csv | every dip of which the data cover at least half: star, mid_time, "
              "depth_ppm, duration_h (first to last contact), period_d (empty for a single dip), "
              "the snr expected from the noise that was put in, and kind |\n"
              "| lures.csv | what was put in to draw marks without being a dip of a star: star, "
              "mid_time, duration_h, kind |\n\n");
    base_text_add_format(
        text, "There are %zu dips on %zu stars, and %zu lures; %zu stars have no dip.\n\n",
        survey->dips, survey->with_dips, survey->lure_count, INVENT_STARS - survey->with_dips);
    base_text_add(
        text,
        "How a light curve was made: a star from rounded main-sequence values; transits by the "
        "program's own\nmodel (quadratic limb darkening, averaged over the half hour), their depth "
        "chosen for an SNR of 4.5 to\n35 a dip; eclipses of grazing pairs; spots that turn with "
        "the star and fade; on some, pulsation; flares,\nmostly on cool stars; then the "
        "instrument: two faults that dim a third of the stars at one moment\n(instrument), "
        "settling after the gap and drooping before it (ramp), pixels that drop and recover\n"
        "(recovery), gaps, missing and flagged values (1 unguided, 2 moonlit), stray high points; "
        "then noise\nthat grows with magnitude, on two stars in five with a part that is "
        "correlated over hours.\n\n"
        "What the demo finds here says that the program works, and nothing about any survey's "
        "yield. On real\ndata a candidate is not a confirmed planet.\n");
}

static bool write_text(const struct survey *survey, const char *name, const struct base_text *text,
                       struct base_error *error)
{
    if (text->failed)
        return fail_memory(error);
    return invent_file_write(survey->folder, name, text->data, text->length, error);
}

static bool write_lists(struct survey *survey, struct base_error *error)
{
    struct base_text readme = {0};
    write_readme(survey, &readme);
    bool ok = !survey->together.failed || fail_memory(error);
    ok = ok &&
         invent_file_write(survey->curves, TOGETHER, survey->together.data, survey->together.length,
                           error) &&
         write_text(survey, "stars.csv", &survey->stars, error) &&
         write_text(survey, "truth.csv", &survey->truth, error) &&
         write_text(survey, "lures.csv", &survey->lures, error) &&
         write_text(survey, "README.md", &readme, error);
    base_text_free(&readme);
    return ok;
}

static bool write_stars(struct survey *survey, struct base_error *error)
{
    bool ok = false;
    enum invent_kind kinds[INVENT_STARS] = {INVENT_NOTHING};
    struct invent_star *star = calloc(1, sizeof *star);
    if (star == NULL)
        return fail_memory(error);
    if (!deal_kinds(survey->seed, kinds, error))
        goto end;
    base_text_add(&survey->stars, "star,ra [deg],dec [deg],magnitude,temperature [K],"
                                  "radius [solRad],mass [solMass]\n");
    base_text_add(&survey->truth, "star,mid_time,depth_ppm,duration_h,period_d,snr,kind\n");
    base_text_add(&survey->lures, "star,mid_time,duration_h,kind\n");
    base_text_add(&survey->together, "star," CSV_COLUMNS);
    for (size_t i = 0; i < INVENT_STARS; i++) {
        if (!invent_star_make(survey->seed, i, kinds[i], star, error) ||
            !write_curve(survey, star, i, error))
            goto end;
        add_catalogue_row(&survey->stars, &star->about);
        add_truth_rows(survey, star);
    }
    ok = true;
end:
    free(star);
    return ok;
}

bool campaign_invent(const char *folder, uint64_t seed, struct base_error *error)
{
    assert(folder != NULL);
    struct base_text curves = {0};
    struct survey survey = {.folder = folder, .seed = seed};
    base_text_add_format(&curves, "%s/light-curves", folder);
    survey.curves = curves.data;
    bool ok = !curves.failed || fail_memory(error);
    ok = ok && make_folder(folder, error) && make_folder(survey.curves, error) &&
         write_stars(&survey, error) && write_lists(&survey, error);
    base_text_free(&survey.stars);
    base_text_free(&survey.truth);
    base_text_free(&survey.lures);
    base_text_free(&survey.together);
    base_text_free(&curves);
    return ok;
}
