/*
 * The whole list of candidates as CSV or VOTable, pulled by the client: some rows at a time are
 * read from the store and written, so that memory stays flat however long the list is. The run is
 * fixed at the beginning, and a run never changes.
 */
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "candidates.h"
#include "ebbmark/clock.h"
#include "ebbmark/tables.h"
#include "ebbmark/text.h"

#define ROWS_AT_ONCE 200

/* One thread at a time. */
struct table {
    struct store *store;
    struct store_candidate_query query; /* its texts are copies, in `texts` */
    struct base_arena *texts, *rows;
    struct export_fact facts[3];
    struct export_writer *writer;
    struct base_text ready; /* written and not yet handed out, from `given` on */
    size_t given;
    bool ended;
};

static bool take_bytes(void *context, const void *data, size_t size, struct base_error *error)
{
    struct table *table = context;
    base_text_add_bytes(&table->ready, data, size);
    return !table->ready.failed ||
           base_fail(error, BASE_MEMORY, "There is no memory to write a table.");
}

/* Write some more rows, or the end. */
static bool write_more(struct table *table, struct base_error *error)
{
    struct store_candidate *found = NULL;
    size_t count = 0;
    table->ready.length = table->given = 0;
    base_arena_reset(table->rows);
    bool ok =
        table->query.run == 0 || store_candidates_find(table->store, table->rows, &table->query,
                                                       &found, &count, NULL, error);
    for (size_t i = 0; ok && i < count; i++) {
        struct campaign_cells cells;
        campaign_candidate_cells(&found[i], &cells);
        ok = export_row(table->writer, cells.cells, error);
    }
    table->query.offset += (int64_t)count;
    table->ended = count < table->query.limit;
    return ok && (!table->ended || export_finish(table->writer, error));
}

static long next(void *state, char *buffer, size_t room)
{
    struct table *table = state;
    struct base_error error = {0};
    /* A writer may keep what it has, so one turn need not give a byte. */
    while (table->given == table->ready.length && !table->ended)
        if (!write_more(table, &error))
            return -1;
    size_t left = table->ready.length - table->given;
    size_t size = left < room ? left : room;
    if (size > 0)
        memcpy(buffer, table->ready.data + table->given, size);
    table->given += size;
    return (long)size;
}

static void done(void *state)
{
    struct table *table = state;
    export_close(table->writer);
    base_text_free(&table->ready);
    base_arena_free(table->rows);
    base_arena_free(table->texts);
    free(table);
}

/* What outlives the call is copied. */
static bool copy_texts(struct table *table, const struct candidates_question *question)
{
    struct base_arena *texts = table->texts;
    char moment[BASE_CLOCK_SIZE];
    table->query = question->query;
    table->query.star = base_arena_copy_text(texts, question->query.star);
    table->query.batch = base_arena_copy_text(texts, question->query.batch);
    table->query.verdict = base_arena_copy_text(texts, question->query.verdict);
    table->facts[0] = (struct export_fact){
        "run", question->run.id == 0 ? "none yet"
                                     : base_arena_format(texts, "%" PRId64, question->run.id)};
    table->facts[1] = (struct export_fact){
        "finished",
        question->run.id == 0
            ? ""
            : base_arena_copy_text(texts, base_clock_rfc3339(moment, question->run.finished_ms))};
    table->facts[2] = (struct export_fact){"caution", CAMPAIGN_CAUTION};
    return table->query.star != NULL && table->query.batch != NULL &&
           table->query.verdict != NULL && table->facts[0].value != NULL &&
           table->facts[1].value != NULL;
}

static bool open_table(struct table *table, struct store *store,
                       const struct candidates_question *question, enum export_format format,
                       struct base_error *error)
{
    table->store = store;
    table->texts = base_arena_new(0);
    table->rows = base_arena_new(0);
    if (table->texts == NULL || table->rows == NULL || !copy_texts(table, question))
        return base_fail(error, BASE_MEMORY, "There is no memory to write a table.");
    table->query.offset = 0;
    table->query.limit = ROWS_AT_ONCE;
    return export_open(&table->writer, format, campaign_table(CAMPAIGN_CANDIDATES), table->facts,
                       sizeof table->facts / sizeof table->facts[0], take_bytes, table, error);
}

enum http_result candidates_answer_table(struct api_call *call,
                                         const struct candidates_question *question,
                                         enum export_format format)
{
    struct table *table = calloc(1, sizeof *table);
    if (table == NULL) {
        (void)base_fail(&call->error, BASE_MEMORY, "There is no memory to write a table.");
        return api_call_end(call);
    }
    if (!open_table(table, call->store, question, format, &call->error)) {
        done(table);
        return api_call_end(call);
    }
    http_answer_header(call->exchange, "Content-Disposition",
                       format == EXPORT_CSV ? "attachment; filename=\"candidates.csv\""
                                            : "attachment; filename=\"candidates.xml\"");
    http_answer_header(call->exchange, "Vary", "Accept");
    return http_answer_stream(call->exchange, 200, export_media_type(format), next, done, table);
}
