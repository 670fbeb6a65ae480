/* The columns of the tables that leave the program, each once, with the cell it is made from. */
#include "ebbmark/tables.h"

#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "ebbmark/clock.h"

/* X(name, type, field of the cell, value, unit, UCD, digits, sentence). `row` is the store's row;
 * `given` what was passed beside it. Times of stars are in days from the time reference. UCDs are
 * words of the IVOA's list; "" where it has none that fits. */
/* clang-format off */
#define CANDIDATE_COLUMNS(X) \
    X(candidate, INTEGER, integer, row->id, "", "meta.id;meta.main", 0, "Number of the candidate; the same from run to run.") \
    X(run, INTEGER, integer, row->run, "", "meta.version", 0, "Number of the consensus run.") \
    X(star, TEXT, text, row->star_name, "", "meta.id;src", 0, "Name of the star.") \
    X(ra, REAL, real, row->ra_deg, "deg", "pos.eq.ra;meta.main", 0, "Right ascension, ICRS.") \
    X(dec, REAL, real, row->dec_deg, "deg", "pos.eq.dec;meta.main", 0, "Declination, ICRS.") \
    X(batch, TEXT, text, row->batch_name, "", "meta.dataset", 0, "Batch that the light curve was loaded with.") \
    X(starts, REAL, real, row->starts_d, "d", "time.start", 0, "Start of the group of marks: median weighted by skill.") \
    X(ends, REAL, real, row->ends_d, "d", "time.end", 0, "End of the group of marks: median weighted by skill.") \
    X(mid_time, REAL, real, row->mid_d, "d", "time.epoch", 0, "Middle of the dip as measured; of the marks where nothing was measured.") \
    X(mid_time_error, REAL, real, row->mid_error_d, "d", "stat.error;time.epoch", 4, "One-sigma error of mid_time.") \
    X(time_reference, TEXT, text, row->time_reference, "", "time.scale", 0, "What starts, ends, mid_time and epoch are counted in and from.") \
    X(probability, REAL, real, row->probability, "", "stat.probability;meta.main", 9, "Probability that this is a real dimming, from marks and photometry.") \
    X(log_odds, REAL, real, row->log_odds, "", "stat.likelihood", 9, "Natural logarithm of the odds behind probability.") \
    X(marks_only_probability, REAL, real, row->marks_only_probability, "", "stat.probability", 9, "The same from the marks alone, without the photometry's say.") \
    X(term_looks, REAL, real, row->term_looks, "", "", 6, "Part of log_odds from who marked and who did not.") \
    X(term_time, REAL, real, row->term_time, "", "", 6, "Part of log_odds from how well the marks agree in time.") \
    X(term_snr, REAL, real, row->term_snr, "", "", 6, "Part of log_odds from the measured SNR.") \
    X(term_prior, REAL, real, row->term_prior, "", "", 6, "Part of log_odds from how common dips are.") \
    X(looks, INTEGER, integer, row->looks, "", "meta.number", 0, "Reviewers who looked at the place.") \
    X(marks, INTEGER, integer, row->marks, "", "meta.number", 0, "Reviewers among them who marked it.") \
    X(snr, REAL, real, row->snr, "", "stat.snr", 4, "Depth over the error of the mean flux across the dip, correlated noise included.") \
    X(depth_ppm, REAL, real, row->depth_ppm, "1e-6", "src.var.amplitude", 6, "Depth of the dip relative to the flux around it.") \
    X(depth_error_ppm, REAL, real, row->depth_error_ppm, "1e-6", "stat.error;src.var.amplitude", 3, "One-sigma error of depth_ppm.") \
    X(duration_h, REAL, real, row->duration_h, "h", "time.duration", 6, "First to last contact.") \
    X(duration_error_h, REAL, real, row->duration_error_h, "h", "stat.error;time.duration", 3, "One-sigma error of duration_h.") \
    X(ingress_fraction, REAL, real, row->ingress_fraction, "", "", 4, "Time of ingress over duration: 0 a box, 0.5 a V.") \
    X(covered, REAL, real, row->covered, "", "", 4, "Fraction of the dip that data cover.") \
    X(gap_distance_d, REAL, real, row->gap_distance_d, "d", "time.interval", 4, "From the dip's nearer end to the nearest gap or end of data.") \
    X(asymmetry, REAL, real, row->asymmetry, "", "", 4, "Mean of the second half minus that of the first, over the depth.") \
    X(spread_starts_d, REAL, real, row->spread_starts_d, "d", "stat.stdev;time.start", 4, "Robust scatter of the marks' starts.") \
    X(spread_ends_d, REAL, real, row->spread_ends_d, "d", "stat.stdev;time.end", 4, "Robust scatter of the marks' ends.") \
    X(period_d, REAL, real, row->period_d, "d", "time.period", 0, "Period of the series the candidate is part of; none while it is single.") \
    X(period_error_d, REAL, real, row->period_error_d, "d", "stat.error;time.period", 3, "One-sigma error of period_d.") \
    X(epoch, REAL, real, row->epoch_d, "d", "time.epoch", 0, "Reference mid-time of the series.") \
    X(transits, INTEGER, integer, row->transits, "", "meta.number", 0, "Dips in the series; 1 for a single one.") \
    X(other_stars, INTEGER, integer, row->other_stars, "", "meta.number", 0, "Candidates of probability 0.5 or more on other stars within half a duration: many point to the instrument.") \
    X(flags, TEXT, text, campaign_flags_text(row->flags, out->made[0]), "", "meta.code", 0, "What to be careful about, by name, with blanks between.") \
    X(verdict, TEXT, text, row->verdict, "", "meta.code.status", 0, "The science team's latest verdict: keep, reject or unsure; empty while there is none.")

#define REVIEWER_COLUMNS(X) \
    X(person, INTEGER, integer, row->person, "", "meta.id;meta.main", 0, "Number of the reviewer.") \
    X(reviewer, TEXT, text, name_of(row->person, row->handle, named, out->made[0]), "", "meta.id", 0, "Handle of a reviewer who asked for credit; else a stand-in.") \
    X(run, INTEGER, integer, run, "", "meta.version", 0, "Number of the consensus run.") \
    X(looks, INTEGER, integer, row->looks, "", "meta.number", 0, "Segments looked at.") \
    X(marks, INTEGER, integer, row->marks, "", "meta.number", 0, "Marks drawn.") \
    X(days_looked, REAL, real, row->days_looked, "d", "time.duration", 6, "Length of light curve looked at.") \
    X(hit, REAL, real, row->hit, "", "stat.probability", 6, "Estimated rate of marking a dip of SNR 10 that is there.") \
    X(hit_low, REAL, real, row->hit_low, "", "stat.probability;stat.min", 6, "Lower end of hit's 90 % interval.") \
    X(hit_high, REAL, real, row->hit_high, "", "stat.probability;stat.max", 6, "Upper end of hit's 90 % interval.") \
    X(chance, REAL, real, row->chance, "", "stat.probability", 6, "Estimated rate of marking what others marked and is no dip.") \
    X(chance_low, REAL, real, row->chance_low, "", "stat.probability;stat.min", 6, "Lower end of chance's 90 % interval.") \
    X(chance_high, REAL, real, row->chance_high, "", "stat.probability;stat.max", 6, "Upper end of chance's 90 % interval.") \
    X(weight, REAL, real, row->weight, "", "stat.weight", 6, "What the reviewer's edges weigh in a candidate's interval.")

/* The first eleven are what `reviews --add` reads. */
#define REVIEW_COLUMNS(X) \
    X(review, INTEGER, integer, row->review, "", "meta.id;meta.main", 0, "Number of the review: one finished look at one segment.") \
    X(reviewer, TEXT, text, name_of(row->person, row->handle, named, out->made[0]), "", "meta.id", 0, "Handle of a reviewer who asked for credit; else a stand-in.") \
    X(star, TEXT, text, row->star, "", "meta.id;src", 0, "Name of the star.") \
    X(segment_starts, REAL, real, row->segment_starts_d, "d", "time.start", 0, "Start of the stretch that was shown.") \
    X(segment_ends, REAL, real, row->segment_ends_d, "d", "time.end", 0, "End of the stretch that was shown.") \
    X(submitted, TEXT, text, base_clock_rfc3339(out->made[1], row->submitted_ms), "", "time.epoch;meta.record", 0, "When the review was sent, UTC.") \
    X(mark_starts, REAL, real, row->mark != NULL ? row->mark->starts_d : NAN, "d", "time.start", 0, "Start of the mark; empty for a look without marks.") \
    X(mark_ends, REAL, real, row->mark != NULL ? row->mark->ends_d : NAN, "d", "time.end", 0, "End of the mark.") \
    X(mark_low, REAL, real, row->mark != NULL ? row->mark->low : NAN, "", "phot.flux;stat.min", 0, "Lower edge of the mark, flux relative to the star's median.") \
    X(mark_high, REAL, real, row->mark != NULL ? row->mark->high : NAN, "", "phot.flux;stat.max", 0, "Upper edge of the mark, flux relative to the star's median.") \
    X(certainty, TEXT, text, row->mark == NULL ? NULL : row->mark->sure ? "sure" : "unsure", "", "meta.code", 0, "How certain the reviewer was of the mark.") \
    X(mark, INTEGER, integer, row->mark != NULL ? row->mark->id : 0, "", "meta.id", 0, "Number of the mark; 0 for a look without marks.") \
    X(person, INTEGER, integer, row->person, "", "meta.id", 0, "Number of the reviewer.") \
    X(segment, TEXT, text, row->segment, "", "meta.id", 0, "Name of the segment.") \
    X(time_reference, TEXT, text, row->time_reference, "", "time.scale", 0, "What the times are counted in and from.") \
    X(break, BOOLEAN, boolean, (row->conditions & STORE_BREAK) != 0, "", "meta.code", 0, "The reviewer noted a break in the data.") \
    X(keeps_changing, BOOLEAN, boolean, (row->conditions & STORE_KEEPS_CHANGING) != 0, "", "meta.code", 0, "The reviewer noted a star that keeps changing.") \
    X(seconds, REAL, real, row->seconds, "s", "time.duration", 6, "Time spent looking, as the page measured it.")
/* clang-format on */

#define COLUMN(name, type, field, value, unit, ucd, digits, sentence)                              \
    {#name, EXPORT_##type, unit, ucd, sentence, digits},
static const struct export_column candidate_columns[] = {CANDIDATE_COLUMNS(COLUMN)};
static const struct export_column reviewer_columns[] = {REVIEWER_COLUMNS(COLUMN)};
static const struct export_column review_columns[] = {REVIEW_COLUMNS(COLUMN)};

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))
_Static_assert(COUNT(candidate_columns) <= CAMPAIGN_CELLS_MAX, "candidates fit their cells");
_Static_assert(COUNT(review_columns) <= CAMPAIGN_CELLS_MAX, "reviews fit their cells");

static const struct export_table tables[] = {
    [CAMPAIGN_CANDIDATES] = {"candidates",
                             "Places on light curves that reviewers marked, with the probability "
                             "that a real dimming is there.",
                             candidate_columns, COUNT(candidate_columns)},
    [CAMPAIGN_REVIEWERS] = {"reviewers", "How far each reviewer can be trusted.", reviewer_columns,
                            COUNT(reviewer_columns)},
    [CAMPAIGN_REVIEWS] = {"reviews",
                          "Every look with its marks: a row a mark, or one row for a look without.",
                          review_columns, COUNT(review_columns)}};

const struct export_table *campaign_table(enum campaign_table which)
{
    assert((size_t)which < COUNT(tables));
    return &tables[which];
}

bool campaign_table_read(const char *name, enum campaign_table *out)
{
    for (size_t i = 0; i < COUNT(tables); i++)
        if (strcmp(tables[i].name, name) == 0) {
            *out = (enum campaign_table)i;
            return true;
        }
    return false;
}

char *campaign_flags_text(unsigned flags, char text[CAMPAIGN_CELL_TEXT_SIZE])
{
    static const struct {
        unsigned bit;
        const char *name;
    } names[] = {
#define X(bit, name, sentence) {bit, #name},
        CAMPAIGN_FLAGS(X)
#undef X
    };
    size_t length = 0;
    text[0] = '\0';
    for (size_t i = 0; i < COUNT(names); i++) {
        if ((flags & names[i].bit) == 0)
            continue;
        int added = snprintf(text + length, CAMPAIGN_CELL_TEXT_SIZE - length, "%s%s",
                             length > 0 ? " " : "", names[i].name);
        assert(added > 0 && (size_t)added < CAMPAIGN_CELL_TEXT_SIZE - length);
        length += (size_t)added;
    }
    return text;
}

/* The handle, or what stands for it when the person did not ask for credit, or has left. */
static const char *name_of(int64_t person, const char *handle, bool named,
                           char made[CAMPAIGN_CELL_TEXT_SIZE])
{
    if (named && handle != NULL && handle[0] != '\0')
        return handle;
    (void)snprintf(made, CAMPAIGN_CELL_TEXT_SIZE, "person-%" PRId64, person);
    return made;
}

#define CELL(name, type, field, value, unit, ucd, digits, sentence)                                \
    out->cells[at++] = (struct export_cell){.field = (value)};

void campaign_candidate_cells(const struct store_candidate *row, struct campaign_cells *out)
{
    size_t at = 0;
    CANDIDATE_COLUMNS(CELL)
    assert(at == COUNT(candidate_columns));
}

void campaign_reviewer_cells(const struct store_skill *row, int64_t run, bool named,
                             struct campaign_cells *out)
{
    size_t at = 0;
    REVIEWER_COLUMNS(CELL)
    assert(at == COUNT(reviewer_columns));
}

void campaign_review_cells(const struct store_review_row *row, bool named,
                           struct campaign_cells *out)
{
    size_t at = 0;
    REVIEW_COLUMNS(CELL)
    assert(at == COUNT(review_columns));
}
