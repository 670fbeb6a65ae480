/* The ranked list, and everything about one candidate. */
#include "candidates.h"

#include <inttypes.h>
#include <math.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/tables.h"
#include "ebbmark/text.h"
#include "routes.h"
#include "verdicts.h"

/* ---- the question --------------------------------------------------------------------------- */

/* ?run, or the current one. No run at all is no failure: run.id is 0 then. */
static bool read_run(struct api_call *call, struct store_run *out)
{
    int64_t run = 0;
    *out = (struct store_run){0};
    call->answered = !http_query_integer(call->exchange, "run", 1, INT64_MAX, 0, &run);
    return !call->answered && (run != 0 || store_run_current(call->store, &run, &call->error)) &&
           (run == 0 || store_run_read(call->store, call->arena, run, out, &call->error));
}

static bool read_sort(struct api_call *call, struct store_candidate_query *query)
{
    static const char *const names[] = {[STORE_BY_PROBABILITY] = "probability",
                                        [STORE_BY_SNR] = "snr",
                                        [STORE_BY_DEPTH] = "depth",
                                        [STORE_BY_DURATION] = "duration",
                                        [STORE_BY_STAR] = "star",
                                        [STORE_BY_TIME] = "time",
                                        [STORE_BY_LOOKS] = "looks",
                                        [STORE_BY_MARKS] = "marks"};
    const char *sort = http_query(call->exchange, "sort");
    if (sort == NULL)
        sort = "-probability";
    query->ascending = sort[0] != '-';
    sort += query->ascending ? 0 : 1;
    for (size_t i = 0; i < sizeof names / sizeof names[0]; i++)
        if (strcmp(names[i], sort) == 0) {
            query->order = (enum store_candidate_order)i;
            return true;
        }
    return base_fail_field(&call->error, BASE_INVALID, "sort",
                           "sort must be probability, snr, depth, duration, star, time, looks or "
                           "marks; a minus before it puts the highest first.");
}

static bool read_filters(struct api_call *call, struct store_candidate_query *query)
{
    const char *star = http_query(call->exchange, "star");
    const char *batch = http_query(call->exchange, "batch");
    const char *verdict = http_query(call->exchange, "verdict");
    query->star = star == NULL ? "" : star;
    query->batch = batch == NULL ? "" : batch;
    query->verdict = verdict == NULL ? "" : verdict;
    call->answered =
        !http_query_real(call->exchange, "min_probability", 0.0, 1.0, 0.0, &query->min_probability);
    if (call->answered)
        return false;
    bool known = query->verdict[0] == '\0' || strcmp(query->verdict, "none") == 0;
    for (size_t i = 0; !known && api_verdict_words[i] != NULL; i++)
        known = strcmp(api_verdict_words[i], query->verdict) == 0;
    return known || base_fail_field(&call->error, BASE_INVALID, "verdict",
                                    "verdict must be keep, reject, unsure or none.");
}

/* A page goes on in the run and the order that its list began with: the cursor holds the run, how
 * many rows to pass over, and a digest of the question. */
#define DIGEST_SIZE 8

static bool digest_of(const struct store_candidate_query *query, char out[2 * DIGEST_SIZE + 1])
{
    struct base_text text = {0};
    unsigned char digest[crypto_generichash_BYTES_MIN];
    base_text_add_format(&text, "%d%c%a\n%s\n%s\n%s", (int)query->order,
                         query->ascending ? '+' : '-', query->min_probability, query->star,
                         query->batch, query->verdict);
    bool ok =
        !text.failed && crypto_generichash(digest, sizeof digest, (const unsigned char *)text.data,
                                           text.length, NULL, 0) == 0;
    base_text_free(&text);
    base_text_hex(out, digest, ok ? DIGEST_SIZE : 0);
    return ok;
}

/* Take a cursor apart: "<run>.<rows passed over>.<digest>". */
static bool cut_cursor(const char *cursor, const char *digest, int64_t *run, int64_t *offset)
{
    char text[96];
    char *rest = NULL;
    if (strlen(cursor) >= sizeof text)
        return false;
    memcpy(text, cursor, strlen(cursor) + 1);
    const char *first = strtok_r(text, ".", &rest);
    const char *second = strtok_r(NULL, ".", &rest);
    return first != NULL && second != NULL && api_number_read(first, run) &&
           api_number_read(second, offset) && strcmp(rest, digest) == 0;
}

static bool read_cursor(struct api_call *call, struct candidates_question *question)
{
    const char *cursor = http_query(call->exchange, "cursor");
    if (cursor == NULL)
        return true;
    char digest[2 * DIGEST_SIZE + 1];
    int64_t run;
    if (!digest_of(&question->query, digest))
        return base_fail(&call->error, BASE_MEMORY, "There is no memory to read a cursor.");
    if (!cut_cursor(cursor, digest, &run, &question->query.offset))
        return base_fail_field(&call->error, BASE_INVALID, "cursor",
                               "This cursor is not one that this list gave for this question.");
    return question->run.id == run ||
           store_run_read(call->store, call->arena, run, &question->run, &call->error);
}

static bool read_question(struct api_call *call, struct candidates_question *out)
{
    static const char *const names[] = {
        "min_probability", "star",   "batch",  "verdict", "run", "sort",
        "limit",           "cursor", "format", NULL};
    *out = (struct candidates_question){0};
    bool ok = api_call_query(call, names) && read_run(call, &out->run) &&
              read_sort(call, &out->query) && read_filters(call, &out->query) &&
              api_call_limit(call, &out->query.limit) && read_cursor(call, out);
    out->query.run = out->run.id;
    return ok;
}

/* ?format, or else what Accept likes best. */
static bool read_format(struct api_call *call, enum export_format *out)
{
    static const char *const types[] = {"application/json", "text/csv",
                                        "application/x-votable+xml"};
    static const enum export_format formats[] = {EXPORT_JSON, EXPORT_CSV, EXPORT_VOTABLE};
    const char *format = http_query(call->exchange, "format");
    if (format != NULL)
        return export_format_read(format, out) ||
               base_fail_field(&call->error, BASE_INVALID, "format",
                               "format must be json, csv or votable.");
    int best = http_accept_best(call->exchange, types, sizeof types / sizeof types[0]);
    if (best >= 0) {
        *out = formats[best];
        return true;
    }
    (void)http_answer_problem(call->exchange, "not_acceptable", NULL,
                              "Candidates can be had as JSON, CSV or VOTable.");
    call->answered = true;
    return false;
}

/* ---- the list ------------------------------------------------------------------------------- */

static json_t *candidate_row(const void *item)
{
    struct campaign_cells cells;
    campaign_candidate_cells(item, &cells);
    return api_cells(campaign_table(CAMPAIGN_CANDIDATES), cells.cells);
}

static json_t *run_json(const struct store_run *run)
{
    return run->id == 0
               ? json_null()
               : json_pack("{s:I, s:o, s:I}", "run", (json_int_t)run->id, "finished",
                           api_moment(run->finished_ms), "reviews", (json_int_t)run->reviews);
}

static json_t *next_json(const struct candidates_question *question, size_t count, int64_t total)
{
    char digest[2 * DIGEST_SIZE + 1];
    int64_t offset = question->query.offset + (int64_t)count;
    if (count == 0 || offset >= total)
        return json_null();
    return digest_of(&question->query, digest)
               ? json_sprintf("%" PRId64 ".%" PRId64 ".%s", question->run.id, offset, digest)
               : NULL;
}

static enum http_result answer_page(struct api_call *call,
                                    const struct candidates_question *question)
{
    struct store_candidate *found = NULL;
    size_t count = 0;
    int64_t total = 0;
    if (question->run.id != 0 && !store_candidates_find(call->store, call->arena, &question->query,
                                                        &found, &count, &total, &call->error))
        return api_call_end(call);
    http_answer_header(call->exchange, "Vary", "Accept");
    return http_answer_json(call->exchange, 200,
                            json_pack("{s:o, s:I, s:o, s:o, s:s}", "run", run_json(&question->run),
                                      "total", (json_int_t)total, "candidates",
                                      api_list(found, count, sizeof *found, candidate_row), "next",
                                      next_json(question, count, total), "caution",
                                      CAMPAIGN_CAUTION));
}

/* GET /candidates */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct candidates_question question;
    enum export_format format;
    bool ok = api_call_begin(&call, exchange, context) && read_format(&call, &format) &&
              read_question(&call, &question);
    if (!ok)
        return api_call_end(&call);
    return format == EXPORT_JSON ? answer_page(&call, &question)
                                 : candidates_answer_table(&call, &question, format);
}

/* ---- one ------------------------------------------------------------------------------------ */

static json_t *mark_json(const void *item)
{
    const struct store_candidate_mark *mark = item;
    return api_joined(json_pack("{s:I, s:o, s:o}", "person", (json_int_t)mark->person, "handle",
                                api_text_or_null(mark->handle), "weight", api_number(mark->weight)),
                      api_mark(&mark->mark));
}

static json_t *terms_json(const struct store_candidate *candidate)
{
    return json_pack("{s:o, s:o, s:o, s:o}", "looks", api_number(candidate->term_looks), "time",
                     api_number(candidate->term_time), "snr", api_number(candidate->term_snr),
                     "prior", api_number(candidate->term_prior));
}

/* GET /candidates/{id} */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_run run;
    struct store_candidate candidate;
    struct store_candidate_mark *marks = NULL;
    struct store_verdict *verdicts = NULL;
    size_t mark_count = 0, verdict_count = 0;
    static const char *const names[] = {"run", NULL};
    int64_t id;
    bool ok =
        api_call_begin(&call, exchange, context) &&
        api_call_number(&call, "id", "There is no such candidate.", &id) &&
        api_call_query(&call, names) && read_run(&call, &run) &&
        store_candidate_read(call.store, call.arena, run.id, id, &candidate, &call.error) &&
        store_candidate_marks(call.store, call.arena, run.id, id, &marks, &mark_count,
                              &call.error) &&
        store_verdicts_list(call.store, call.arena, id, &verdicts, &verdict_count, &call.error);
    if (!ok)
        return api_call_end(&call);
    json_t *more = json_pack("{s:o, s:o, s:o, s:s}", "marked_by",
                             api_list(marks, mark_count, sizeof *marks, mark_json), "terms",
                             terms_json(&candidate), "verdicts",
                             api_list(verdicts, verdict_count, sizeof *verdicts, api_verdict),
                             "caution", CAMPAIGN_CAUTION);
    return http_answer_json(exchange, 200, api_joined(candidate_row(&candidate), more));
}

const struct http_route api_candidates_routes[] = {
    {"GET", "/api/v1/candidates", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/candidates/{id}", HTTP_SCIENCE, HTTP_SLOW, 0, show},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
