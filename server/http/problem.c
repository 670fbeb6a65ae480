#include "problem.h"

#include <assert.h>
#include <stdio.h>
#include <string.h>

#include "answer.h"
#include "ebbmark/text.h"
#include "server.h"

static const struct http_problem_kind kinds[] = {
#define X(kind, status, retry_after_s, title) {#kind, status, retry_after_s, title},
#include "problems.def"
#undef X
};

const struct http_problem_kind *http_problem_kinds(size_t *count)
{
    *count = sizeof kinds / sizeof kinds[0];
    return kinds;
}

const struct http_problem_kind *http_problem_find(const char *kind)
{
    for (size_t i = 0; i < sizeof kinds / sizeof kinds[0]; i++)
        if (strcmp(kinds[i].kind, kind) == 0)
            return &kinds[i];
    assert(!"a kind of problem that problems.def has not");
    return &kinds[0];
}

json_t *http_problem_json(const struct http_problem_kind *kind, const char *detail, json_t *fields)
{
    json_t *problem =
        json_pack("{s:o*, s:s, s:i, s:s*}", "type", json_sprintf("/problems/%s", kind->kind),
                  "title", kind->title, "status", (int)kind->status, "detail", detail);
    if (fields != NULL && json_object_set_new(problem, "fields", fields) != 0) {
        json_decref(problem);
        problem = NULL;
    }
    return problem;
}

static bool header_is_set(const struct http_exchange *exchange, const char *name)
{
    for (const struct http_pair *at = exchange->extra; at != NULL; at = at->next)
        if (strcmp(at->name, name) == 0)
            return true;
    return false;
}

/* Takes `fields`. */
static enum http_result answer(struct http_exchange *exchange, const char *kind_name,
                               const char *detail, json_t *fields)
{
    const struct http_problem_kind *kind = http_problem_find(kind_name);
    if (kind->retry_after_s > 0 && !header_is_set(exchange, "Retry-After")) {
        char seconds[16];
        (void)snprintf(seconds, sizeof seconds, "%u", kind->retry_after_s);
        http_answer_header(exchange, "Retry-After", seconds);
    }
    if (kind->status == 401)
        http_answer_header(exchange, "WWW-Authenticate", "Bearer realm=\"Ebbmark\"");
    json_t *problem = http_problem_json(kind, detail, fields);
    char *text = problem == NULL ? NULL : json_dumps(problem, JSON_COMPACT);
    json_decref(problem);
    struct MHD_Response *response =
        text == NULL ? NULL
                     : MHD_create_response_from_buffer(strlen(text), text, MHD_RESPMEM_MUST_FREE);
    http_response_header(exchange, response, "Content-Type", "application/problem+json");
    http_answer_set(exchange, kind->status, response);
    return HTTP_ANSWERED;
}

/* Make a sentence that quotes somebody's input, and was perhaps cut, sound UTF-8: JSON takes no
 * other. */
static void mend(char *text)
{
    size_t length = strlen(text);
    for (unsigned cut = 0; cut < 3 && length > 0 && !base_text_is_utf8(text, length); cut++)
        text[--length] = '\0';
    if (!base_text_is_utf8(text, length))
        for (size_t i = 0; i < length; i++)
            if ((unsigned char)text[i] >= 0x80)
                text[i] = '?';
}

enum http_result http_answer_problem(struct http_exchange *exchange, const char *kind,
                                     const char *field, const char *detail_format, ...)
{
    char detail[BASE_SENTENCE_SIZE];
    va_list list;
    va_start(list, detail_format);
    (void)vsnprintf(detail, sizeof detail, detail_format, list);
    va_end(list);
    mend(detail);
    json_t *fields = NULL;
    if (field != NULL && field[0] != '\0')
        fields = json_pack("[{s:s, s:s}]", "field", field, "detail", detail);
    return answer(exchange, kind, detail, fields);
}

enum http_result http_answer_fields(struct http_exchange *exchange, json_t *fields)
{
    size_t count = json_array_size(fields);
    const char *first = json_string_value(json_object_get(json_array_get(fields, 0), "detail"));
    char detail[BASE_SENTENCE_SIZE];
    if (count == 1 && first != NULL)
        (void)snprintf(detail, sizeof detail, "%s", first);
    else
        (void)snprintf(detail, sizeof detail, "%zu fields are not valid.", count);
    mend(detail);
    return answer(exchange, "invalid", detail, fields);
}

/* The kind of problem that an error is told as; NULL: a fault of ours, not told in full. */
static const char *kind_of_error(enum base_error_kind kind)
{
    switch (kind) {
    case BASE_INVALID:
        return "invalid";
    case BASE_DENIED:
        return "not_allowed";
    case BASE_NOT_FOUND:
        return "not_found";
    case BASE_CONFLICT:
        return "conflict";
    case BASE_TOO_LARGE:
        return "too_large";
    case BASE_DISK_FULL:
        return "disk_full";
    case BASE_BUSY:
        return "overloaded";
    case BASE_NONE:
    case BASE_MEMORY:
    case BASE_IO:
    case BASE_CORRUPT:
    case BASE_CANCELLED:
    case BASE_INTERNAL:
        break;
    }
    return NULL;
}

enum http_result http_answer_error(struct http_exchange *exchange, const struct base_error *error)
{
    const char *kind = kind_of_error(error->kind);
    if (kind == NULL || error->kind == BASE_DISK_FULL)
        base_log_line(exchange->server->log, BASE_LOG_ERROR, "request_failed", "request",
                      exchange->id, "address", exchange->address, "kind",
                      base_error_kind_name(error->kind), "sentence", error->sentence, NULL);
    if (kind == NULL)
        return http_answer_problem(exchange, "internal", NULL,
                                   "Something failed here and was written to the log. When you "
                                   "ask for help, name the request %s.",
                                   exchange->id);
    return http_answer_problem(exchange, kind, error->field, "%s", error->sentence);
}
