#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/tables.h"
#include "ebbmark/text.h"
#include "inside.h"

#define LIMIT_MAX 1000
#define OFFSET_MAX 100000000

static const struct {
    const char *name;
    enum store_candidate_order order;
} orders[] = {{"probability", STORE_BY_PROBABILITY},
              {"snr", STORE_BY_SNR},
              {"depth", STORE_BY_DEPTH},
              {"duration", STORE_BY_DURATION},
              {"star", STORE_BY_STAR},
              {"time", STORE_BY_TIME},
              {"looks", STORE_BY_LOOKS},
              {"marks", STORE_BY_MARKS}};

static bool sort_read(struct http_exchange *exchange, struct store_candidate_query *query)
{
    const char *text = http_query(exchange, "sort");
    if (text == NULL)
        text = "-probability";
    query->ascending = text[0] != '-';
    if (text[0] == '-')
        text++;
    for (size_t i = 0; i < sizeof orders / sizeof orders[0]; i++)
        if (strcmp(orders[i].name, text) == 0) {
            query->order = orders[i].order;
            return true;
        }
    (void)http_answer_problem(exchange, "invalid", "sort",
                              "sort is probability, snr, depth, duration, star, time, looks or "
                              "marks, with - before it for falling.");
    return false;
}

static const char *text_query(struct http_exchange *exchange, const char *name)
{
    const char *text = http_query(exchange, name);
    return text != NULL ? text : "";
}

static bool query_read(struct http_exchange *exchange, struct store_candidate_query *query)
{
    int64_t limit;
    *query = (struct store_candidate_query){.star = text_query(exchange, "star"),
                                            .batch = text_query(exchange, "batch"),
                                            .verdict = text_query(exchange, "verdict")};
    static const char *const verdicts[] = {"", "none", "keep", "reject", "unsure"};
    size_t i = 0;
    while (i < 5 && strcmp(verdicts[i], query->verdict) != 0)
        i++;
    if (i == 5) {
        (void)http_answer_problem(exchange, "invalid", "verdict",
                                  "verdict is keep, reject, unsure or none.");
        return false;
    }
    if (!http_query_real(exchange, "min_probability", 0.0, 1.0, 0.0, &query->min_probability) ||
        !http_query_integer(exchange, "run", 1, INT64_MAX, 0, &query->run) ||
        !http_query_integer(exchange, "limit", 1, LIMIT_MAX, 100, &limit) ||
        !cursor_read(exchange, &query->offset) || !sort_read(exchange, query))
        return false;
    if (query->offset > OFFSET_MAX) {
        (void)http_answer_problem(exchange, "invalid", "cursor", "There is no such page.");
        return false;
    }
    query->limit = (size_t)limit;
    return true;
}

static json_t *cell_json(const struct export_column *column, const struct export_cell *cell)
{
    if (cell->null)
        return json_null();
    switch (column->type) {
    case EXPORT_INTEGER:
        return json_integer(cell->integer);
    case EXPORT_REAL:
        return json_number(cell->real);
    case EXPORT_BOOLEAN:
        return json_boolean(cell->boolean);
    default:
        return cell->text == NULL ? json_null() : json_string(cell->text);
    }
}

static json_t *candidate_json(const struct store_candidate *row)
{
    const struct export_table *table = campaign_table(CAMPAIGN_CANDIDATES);
    struct campaign_cells cells;
    json_t *object = json_object();
    campaign_candidate_cells(row, &cells);
    for (size_t i = 0; i < table->column_count; i++)
        (void)json_object_set_new(object, table->columns[i].name,
                                  cell_json(&table->columns[i], &cells.cells[i]));
    return object;
}

static json_t *run_json(struct store *store, struct base_arena *arena, int64_t number,
                        struct base_error *error)
{
    struct store_run run;
    if (number == 0)
        return json_null();
    return store_run_read(store, arena, number, &run, error)
               ? json_pack("{s:I,s:o,s:I}", "run", (json_int_t)run.id, "finished",
                           json_time(run.finished_ms), "reviews", (json_int_t)run.reviews)
               : NULL;
}

static enum http_result list_json(struct http_exchange *exchange, struct api_server *api,
                                  struct store_candidate_query *query)
{
    struct store *store = campaign_store(api->campaign);
    struct store_candidate *rows;
    size_t count;
    int64_t total = 0;
    struct base_error error = {0};
    if ((query->run == 0 && !store_run_current(store, &query->run, &error)))
        return http_answer_error(exchange, &error);
    json_t *run = run_json(store, http_arena(exchange), query->run, &error);
    if (run == NULL ||
        !store_candidates_find(store, http_arena(exchange), query, &rows, &count, &total, &error)) {
        json_decref(run);
        return http_answer_error(exchange, &error);
    }
    json_t *list = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(list, candidate_json(&rows[i]));
    int64_t reached = query->offset + (int64_t)count;
    return answer_json(exchange, 200,
                       json_pack("{s:o,s:I,s:o,s:o,s:s}", "run", run, "total", (json_int_t)total,
                                 "candidates", list, "next", cursor_make(reached < total, reached),
                                 "caution", CAMPAIGN_CAUTION));
}

static bool to_text(void *context, const void *data, size_t size, struct base_error *error)
{
    struct base_text *text = context;
    base_text_add_bytes(text, data, size);
    return !text->failed || base_fail(error, BASE_MEMORY, "There is no memory for the table.");
}

/* The filtered rows as a file, all of them. */
static enum http_result list_file(struct http_exchange *exchange, struct api_server *api,
                                  struct store_candidate_query *query, enum export_format format)
{
    static const struct export_fact facts[] = {{"caution", CAMPAIGN_CAUTION}};
    struct store_candidate *rows;
    size_t count;
    struct base_error error = {0};
    struct base_text text = {0};
    struct export_writer *writer = NULL;
    query->limit = 0;
    query->offset = 0;
    bool ok = store_candidates_find(campaign_store(api->campaign), http_arena(exchange), query,
                                    &rows, &count, NULL, &error) &&
              export_open(&writer, format, campaign_table(CAMPAIGN_CANDIDATES), facts, 1, to_text,
                          &text, &error);
    for (size_t i = 0; ok && i < count; i++) {
        struct campaign_cells cells;
        campaign_candidate_cells(&rows[i], &cells);
        ok = export_row(writer, cells.cells, &error);
    }
    ok = ok && export_finish(writer, &error);
    export_close(writer);
    if (ok)
        http_answer_header(exchange, "Content-Disposition",
                           format == EXPORT_CSV    ? "attachment; filename=\"candidates.csv\""
                           : format == EXPORT_JSON ? "attachment; filename=\"candidates.json\""
                                                   : "attachment; filename=\"candidates.vot\"");
    enum http_result result =
        ok ? http_answer_bytes(exchange, 200, export_media_type(format), text.data, text.length)
           : http_answer_error(exchange, &error);
    base_text_free(&text);
    return result;
}

static enum http_result list(struct http_exchange *exchange, void *context)
{
    static const char *const types[] = {"application/json", "text/csv",
                                        "application/x-votable+xml"};
    const char *format = http_query(exchange, "format");
    struct store_candidate_query query;
    enum export_format file = EXPORT_CSV;
    if (!query_read(exchange, &query))
        return HTTP_ANSWERED;
    if (format == NULL) {
        int type = http_accept_best(exchange, types, 3);
        if (type < 0)
            return http_answer_problem(exchange, "not_acceptable", NULL,
                                       "Candidates come as JSON, CSV or VOTable.");
        if (type == 0)
            return list_json(exchange, context, &query);
        file = type == 1 ? EXPORT_CSV : EXPORT_VOTABLE;
    } else if (strcmp(format, "json") == 0) {
        return list_json(exchange, context, &query);
    } else if (!export_format_read(format, &file)) {
        return http_answer_problem(exchange, "invalid", "format",
                                   "format is json, csv or votable.");
    }
    return list_file(exchange, context, &query, file);
}

static json_t *marks_json(const struct store_candidate_mark *marks, size_t count)
{
    json_t *list = json_array();
    for (size_t i = 0; i < count; i++) {
        json_t *mark = json_mark(&marks[i].mark);
        (void)json_object_set_new(mark, "person", json_integer(marks[i].person));
        (void)json_object_set_new(mark, "handle", json_text(marks[i].handle));
        (void)json_object_set_new(mark, "weight", json_number(marks[i].weight));
        (void)json_array_append_new(list, mark);
    }
    return list;
}

static json_t *verdicts_json(const struct store_verdict *verdicts, size_t count)
{
    json_t *list = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(list, json_pack("{s:s,s:s,s:o,s:I,s:o}", "verdict",
                                                    verdicts[i].verdict, "note", verdicts[i].note,
                                                    "handle", json_text(verdicts[i].handle),
                                                    "person", (json_int_t)verdicts[i].person,
                                                    "given", json_time(verdicts[i].given_ms)));
    return list;
}

static enum http_result one(struct http_exchange *exchange, void *context)
{
    struct store *store = campaign_store(((struct api_server *)context)->campaign);
    struct base_arena *arena = http_arena(exchange);
    int64_t id, run;
    struct store_candidate row;
    struct store_candidate_mark *marks;
    struct store_verdict *verdicts;
    size_t mark_count, verdict_count;
    struct base_error error = {0};
    if (!path_number(exchange, "id", &id) ||
        !http_query_integer(exchange, "run", 1, INT64_MAX, 0, &run))
        return HTTP_ANSWERED;
    if (!store_candidate_read(store, arena, run, id, &row, &error) ||
        !store_candidate_marks(store, arena, row.run, id, &marks, &mark_count, &error) ||
        !store_verdicts_list(store, arena, id, &verdicts, &verdict_count, &error))
        return http_answer_error(exchange, &error);
    json_t *answer = candidate_json(&row);
    (void)json_object_set_new(answer, "marked_by", marks_json(marks, mark_count));
    (void)json_object_set_new(answer, "verdicts", verdicts_json(verdicts, verdict_count));
    (void)json_object_set_new(answer, "terms",
                              json_pack("{s:o,s:o,s:o,s:o}", "looks", json_number(row.term_looks),
                                        "time", json_number(row.term_time), "snr",
                                        json_number(row.term_snr), "prior",
                                        json_number(row.term_prior)));
    (void)json_object_set_new(answer, "caution", json_string(CAMPAIGN_CAUTION));
    return answer_json(exchange, 200, answer);
}

const struct http_route api_candidates_routes[] = {
    {"GET", "/api/v1/candidates", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/candidates/{id}", HTTP_SCIENCE, HTTP_SLOW, 0, one},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
