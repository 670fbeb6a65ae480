/* Writing whole tables: rows from the store through the columns of tables.c to a sink. */
#include <assert.h>
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/clock.h"
#include "ebbmark/tables.h"
#include "inside.h"
#include "vector.h"

#define ROWS_AT_ONCE 5000

struct job {
    struct campaign *campaign;
    struct store_run run; /* id 0: none */
    struct export_writer *writer;
    struct vector credited;  /* int64_t, ascending: people who may be named */
    struct base_error error; /* of a row, inside a visit */
};

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory to write a table.");
    return false;
}

/* ---- who may be named ---- */

static bool list_credited(struct job *job, struct base_error *error)
{
    bool ok = true;
    int64_t after = 0;
    for (size_t count = 1; ok && count > 0;) {
        struct base_arena *arena = base_arena_new(0);
        struct store_person *people = NULL;
        ok = arena != NULL ? store_people_list(job->campaign->store, arena, after, ROWS_AT_ONCE,
                                               &people, &count, error)
                           : no_memory(error);
        for (size_t i = 0; ok && i < count; i++) {
            after = people[i].id;
            int64_t *named = people[i].credit ? vector_add(&job->credited, 1) : NULL;
            if (named != NULL)
                *named = people[i].id;
            else if (people[i].credit)
                ok = no_memory(error);
        }
        base_arena_free(arena);
    }
    return ok;
}

static int compare_ids(const void *a, const void *b)
{
    int64_t left = *(const int64_t *)a, right = *(const int64_t *)b;
    return (left > right) - (left < right);
}

static bool is_credited(const struct job *job, int64_t person)
{
    return job->credited.count > 0 && bsearch(&person, job->credited.items, job->credited.count,
                                              sizeof person, compare_ids) != NULL;
}

/* ---- rows ---- */

static bool write_candidates(struct job *job, struct base_error *error)
{
    struct store_candidate_query query = {.run = job->run.id,
                                          .star = "",
                                          .batch = "",
                                          .verdict = "",
                                          .order = STORE_BY_PROBABILITY,
                                          .limit = ROWS_AT_ONCE};
    bool ok = true;
    for (size_t count = 1; ok && count > 0; query.offset += (int64_t)count) {
        struct base_arena *arena = base_arena_new(0);
        struct store_candidate *rows = NULL;
        struct campaign_cells cells;
        ok = arena != NULL ? store_candidates_find(job->campaign->store, arena, &query, &rows,
                                                   &count, NULL, error)
                           : no_memory(error);
        for (size_t i = 0; ok && i < count; i++) {
            campaign_candidate_cells(&rows[i], &cells);
            ok = export_row(job->writer, cells.cells, error);
        }
        base_arena_free(arena);
    }
    return ok;
}

static bool write_reviewers(struct job *job, struct base_error *error)
{
    struct base_arena *arena = base_arena_new(0);
    struct store_skill *rows = NULL;
    struct campaign_cells cells;
    size_t count = 0;
    bool ok = arena != NULL ? store_skills_list(job->campaign->store, arena, job->run.id, &rows,
                                                &count, error)
                            : no_memory(error);
    for (size_t i = 0; ok && i < count; i++) {
        campaign_reviewer_cells(&rows[i], job->run.id, is_credited(job, rows[i].person), &cells);
        ok = export_row(job->writer, cells.cells, error);
    }
    base_arena_free(arena);
    return ok;
}

static bool write_review(void *context, const struct store_review_row *row)
{
    struct job *job = context;
    struct campaign_cells cells;
    campaign_review_cells(row, is_credited(job, row->person), &cells);
    return export_row(job->writer, cells.cells, &job->error);
}

/* All reviews up to the run's newest, or all there are where no run was asked for. */
static bool write_reviews(struct job *job, struct base_error *error)
{
    int64_t newest = job->run.newest_review, count = 0;
    if (job->run.id == 0 && !store_reviews_high_water(job->campaign->store, &newest, &count, error))
        return false;
    if (!store_reviews_each(job->campaign->store, newest, write_review, job, error))
        return false;
    if (job->error.kind != BASE_NONE && error != NULL)
        *error = job->error;
    return job->error.kind == BASE_NONE;
}

/* ---- the whole ---- */

/* The run that the table is of. The table of reviews needs none and, unless one was named, has
 * none. */
static bool find_run(struct job *job, struct base_arena *arena, enum campaign_table which,
                     int64_t run, struct base_error *error)
{
    if (run == 0 && which == CAMPAIGN_REVIEWS)
        return true;
    if (run == 0 && !store_run_current(job->campaign->store, &run, error))
        return false;
    if (run == 0)
        return base_fail(error, BASE_NOT_FOUND, "There is no consensus run yet.");
    return store_run_read(job->campaign->store, arena, run, &job->run, error);
}

bool campaign_table_write(struct campaign *campaign, enum campaign_table which, int64_t run,
                          enum export_format format, export_sink *sink, void *context,
                          struct base_error *error)
{
    struct job job = {.campaign = campaign, .credited = VECTOR_OF(int64_t)};
    struct base_arena *arena = base_arena_new(0);
    bool ok = arena != NULL ? find_run(&job, arena, which, run, error) && list_credited(&job, error)
                            : no_memory(error);
    char number[24], finished[BASE_CLOCK_SIZE], reviews[24];
    (void)snprintf(number, sizeof number, "%" PRId64, job.run.id);
    (void)snprintf(reviews, sizeof reviews, "%" PRId64, job.run.reviews);
    const struct export_fact facts[] = {
        {"caution", CAMPAIGN_CAUTION},
        {"run", number},
        {"finished", base_clock_rfc3339(finished, job.run.finished_ms)},
        {"reviews", reviews}};
    size_t fact_count = job.run.id == 0 ? 1 : sizeof facts / sizeof facts[0];
    ok = ok && export_open(&job.writer, format, campaign_table(which), facts, fact_count, sink,
                           context, error);
    if (ok) {
        ok = which == CAMPAIGN_CANDIDATES  ? write_candidates(&job, error)
             : which == CAMPAIGN_REVIEWERS ? write_reviewers(&job, error)
                                           : write_reviews(&job, error);
        ok = ok && export_finish(job.writer, error);
        export_close(job.writer);
    }
    vector_free(&job.credited);
    base_arena_free(arena);
    return ok;
}
