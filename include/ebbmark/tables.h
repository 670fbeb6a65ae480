/*
 * The tables that leave the program: one table of columns (name, type, unit, UCD, description) and
 * the way from a store's row to its cells for each. The API, the command line and the pages all use
 * these, so that a column stands once. The rows themselves are in server/campaign/tables.c.
 */
#ifndef EBBMARK_TABLES_H
#define EBBMARK_TABLES_H

#include "ebbmark/campaign.h"
#include "ebbmark/export.h"

/* What every list of candidates is shown and exported with. */
#define CAMPAIGN_CAUTION                                                                           \
    "A candidate is not a confirmed planet: false positives such as eclipsing binaries and "       \
    "instrument artefacts remain, and confirmation needs independent follow-up."

enum campaign_table { CAMPAIGN_CANDIDATES, CAMPAIGN_REVIEWERS, CAMPAIGN_REVIEWS };

/* A table, and which one a name ("candidates") stands for: false when there is none such. */
const struct export_table *campaign_table(enum campaign_table which);
bool campaign_table_read(const char *name, enum campaign_table *out);

#define CAMPAIGN_CELLS_MAX 48       /* columns of the widest table */
#define CAMPAIGN_CELL_TEXT_SIZE 160 /* for a text that is made for its cell */

/* One row as cells, in the order of the table's columns. Texts point into the store's row or into
 * `made`, so the cells live as long as both. */
struct campaign_cells {
    struct export_cell cells[CAMPAIGN_CELLS_MAX];
    char made[2][CAMPAIGN_CELL_TEXT_SIZE];
};
void campaign_candidate_cells(const struct store_candidate *row, struct campaign_cells *out);
/* `named`: may this person's handle leave the program (store_person.credit)? If not, "person-12"
 * stands for it. */
void campaign_reviewer_cells(const struct store_skill *row, int64_t run, bool named,
                             struct campaign_cells *out);
void campaign_review_cells(const struct store_review_row *row, bool named,
                           struct campaign_cells *out);

/* The names of a candidate's flags, in order of their bits, with a blank between; "" for none. */
char *campaign_flags_text(unsigned flags, char text[CAMPAIGN_CELL_TEXT_SIZE]);

/* Write a whole table of a run (0: the current one) to a sink, with the run, its time and the
 * caution as facts. Candidates come by falling probability. Handles of people who did not ask for
 * credit are left out. Memory stays flat. BASE_NOT_FOUND when there is no such run, or no run yet
 * and the table needs one; whatever the sink fails with. */
bool campaign_table_write(struct campaign *campaign, enum campaign_table which, int64_t run,
                          enum export_format format, export_sink *sink, void *context,
                          struct base_error *error);

#endif
