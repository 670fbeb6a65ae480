/*
 * What the handlers share: one call (a request on its way through a handler), reading its input,
 * and making the JSON of its answer.
 *
 * A handler is a chain of steps that each return false on failure; api_call_end then answers with
 * the first thing that went wrong.
 */
#ifndef API_CALL_H
#define API_CALL_H

#include "ebbmark/campaign.h"
#include "ebbmark/export.h"
#include "ebbmark/http.h"
#include "ebbmark/store.h"

struct flux_kept;
struct metrics_counts;
struct segment_bounds;

/* What all handlers are given. Set by api_start and left as it is; what it points to guards
 * itself. */
struct api {
    struct campaign *campaign;
    struct store *store;
    struct base_pool *workers; /* make flux that is not kept yet */
    struct flux_kept *flux;
    struct http_kept_body *description; /* openapi.json */
    struct segment_bounds *bounds;
    struct metrics_counts *counts;
    double began_s; /* monotonic */
};

/* On the handler's stack; one thread. */
struct api_call {
    struct api *api;
    struct campaign *campaign;
    struct store *store;
    struct http_exchange *exchange;
    struct base_arena *arena;
    int64_t person; /* 0: nobody */
    struct base_error error;
    bool answered;
    json_t *faults; /* [{"field", "detail"}…]; NULL: none */
};

/* The first step of every handler. False when there is no memory for the arena. */
bool api_call_begin(struct api_call *call, struct http_exchange *exchange, void *context);
/* The same for a handler that may come to its end without an arena; and the arena, should it need
 * one after all. */
void api_call_begin_bare(struct api_call *call, struct http_exchange *exchange, void *context);
bool api_call_arena(struct api_call *call);
/* The last step after a failure: answer with it, unless that was done already. */
enum http_result api_call_end(struct api_call *call);

/* ---- the address ---- */

/* A positive whole number and nothing else. */
bool api_number_read(const char *text, int64_t *out);
/* A positive whole number in the path; anything else names nothing: BASE_NOT_FOUND with the
 * sentence. */
bool api_call_number(struct api_call *call, const char *part, const char *missing, int64_t *out);

/* The query has no field but these (ended by NULL). */
bool api_call_query(struct api_call *call, const char *const *names);
/* ?limit and ?cursor, and nothing else, of a list by ascending or descending id. `after` is 0 at
 * its beginning. */
#define API_LIMIT_DEFAULT 100
#define API_LIMIT_MOST 1000
struct api_page {
    size_t limit;
    int64_t after;
};
bool api_call_page(struct api_call *call, struct api_page *out);
bool api_call_limit(struct api_call *call, size_t *limit);
/* One item more than the page holds was asked for: leave it off, and say whether it was there. */
bool api_page_cut(const struct api_page *page, size_t *count);
/* The cursor of the page that follows an item, or null when there is none. */
json_t *api_page_next(bool more, int64_t last);

/* ---- the body ---- */

/* The body as an object; with may_be_absent, no body is an object without members (NULL). */
bool api_call_body(struct api_call *call, bool may_be_absent, json_t **out);
/* No body, or an object without members. */
bool api_call_no_body(struct api_call *call);

/* An object being read: `prefix` ("marks[2].", or "") goes before the names of its members. */
struct api_input {
    struct api_call *call;
    json_t *object;
    const char *prefix;
};
/* Note a fault; the first API_FAULTS_MOST of them are told. */
#define API_FAULTS_MOST 20
void api_input_fault(const struct api_input *input, const char *name, const char *format, ...)
    __attribute__((format(printf, 3, 4)));
/* A member that is not in the list (ended by NULL) is a fault, so that a misspelt one shows. */
void api_input_only(const struct api_input *input, const char *const *names);
/* Each of these notes a fault when the member is of another kind, out of its range, or missing
 * though required; otherwise they set *out and return true. Missing and not required: false. A text
 * that is not required may be null, which is as good as missing. */
bool api_input_text(const struct api_input *input, const char *name, bool required,
                    size_t bytes_most, const char **out);
bool api_input_number(const struct api_input *input, const char *name, bool required, double least,
                      double most, double *out);
bool api_input_boolean(const struct api_input *input, const char *name, bool *out);
/* One of the words (ended by NULL); its place in the list. */
bool api_input_word(const struct api_input *input, const char *name, bool required,
                    const char *const *words, size_t *out);
bool api_input_array(const struct api_input *input, const char *name, bool required, json_t **out);
/* False when there were faults: they are the answer. */
bool api_input_end(struct api_call *call);

/* ---- JSON of answers: NULL only when there is no memory ---- */

json_t *api_number(double value);           /* null when not finite */
json_t *api_text(const char *text);         /* bytes that are no UTF-8 become question marks */
json_t *api_moment(int64_t unix_ms);        /* RFC 3339; null for 0 */
json_t *api_text_or_null(const char *text); /* null for "" */
json_t *api_person(const struct store_person *person);
json_t *api_mark(const struct store_mark *mark); /* starts, ends, low, high, certainty */
json_t *api_rate(double value, double low, double high);
/* An array of make(item) over `count` items of `size` bytes. */
json_t *api_list(const void *items, size_t count, size_t size, json_t *(*make)(const void *item));
/* The first object with the members of the second, which count more. Takes both. */
json_t *api_joined(json_t *object, json_t *more);
/* One row of a table, each column a member. */
json_t *api_cells(const struct export_table *table, const struct export_cell *cells);
/* A consensus run without its settings and fit. */
json_t *api_run(const struct store_run *run);

extern const char *const api_role_words[];    /* by enum store_role - 1; ended by NULL */
extern const char *const api_verdict_words[]; /* ended by NULL */

/* A new session for a person, with its cookie on the answer. */
bool api_session_give(struct api_call *call, const struct store_person *person);

#endif
