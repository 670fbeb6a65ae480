/* Reviews made elsewhere: a CSV file of looks and marks becomes reviews like any others. */
#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <sodium.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "ebbmark/clock.h"
#include "inside.h"
#include "records.h"

#define GROUP_MAX 256 /* reviews stored at once */
#define GROUP_BYTES (8u << 20)
#define AGREE_LEAST 0.5 /* of the look and of the segment must be shared */
#define KEY_BYTES_MAX 200

/* X(column): what a file must have. */
/* clang-format off */
#define COLUMNS(X) \
    X(review) X(reviewer) X(star) X(segment_starts) X(segment_ends) X(submitted) \
    X(mark_starts) X(mark_ends) X(mark_low) X(mark_high) X(certainty)
/* clang-format on */

enum column {
#define X(name) AT_##name,
    COLUMNS(X)
#undef X
        COLUMN_COUNT
};
static const char *const column_names[] = {
#define X(name) #name,
    COLUMNS(X)
#undef X
};

/* The look that is being put together from its rows. Texts and marks are from the arena. */
struct look {
    bool any;
    uint64_t line; /* of its first row */
    const char *texts[AT_submitted + 1];
    double starts_d, ends_d;
    int64_t submitted_ms;
    struct vector marks; /* struct store_mark */
    bool empty_row;      /* a row without a mark was seen */
    struct base_error problem;
};

struct adding {
    struct campaign *campaign;
    struct base_arena *arena; /* of the looks that are not stored yet */
    struct records records;
    size_t at[COLUMN_COUNT];
    struct look look;
    struct store_review_new reviews[GROUP_MAX];
    uint64_t lines[GROUP_MAX];
    size_t count;
    void (*refused)(void *context, uint64_t line, const char *reason);
    void *context;
    struct campaign_reviews_added *out;
};

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory to add reviews.");
    return false;
}

static void refuse(struct adding *adding, uint64_t line, const char *reason)
{
    adding->out->refused++;
    if (adding->refused != NULL)
        adding->refused(adding->context, line, reason);
}

/* ---- reading rows ---- */

static bool read_header(struct adding *adding, struct base_error *error)
{
    bool more = false;
    if (!records_next(&adding->records, &more, error))
        return false;
    for (size_t c = 0; c < COLUMN_COUNT; c++) {
        size_t i = 0, fields = more ? records_fields(&adding->records) : 0;
        while (i < fields && strcmp(records_field(&adding->records, i), column_names[c]) != 0)
            i++;
        if (i == fields)
            return base_fail(error, BASE_INVALID, "Line 1: there is no column %s.",
                             column_names[c]);
        adding->at[c] = i;
    }
    return true;
}

static const char *cell(const struct adding *adding, enum column column)
{
    return records_field(&adding->records, adding->at[column]);
}

static bool read_real(const struct adding *adding, enum column column, double *out,
                      struct base_error *problem)
{
    const char *text = cell(adding, column);
    if (!base_text_read_number(text, out) || !isfinite(*out))
        return base_fail(problem, BASE_INVALID, "%s is not a number: '%.60s'.",
                         column_names[column], text);
    return true;
}

/* Seconds east of UTC from "Z" or "+hh:mm". */
static bool read_zone(const char *text, long *seconds)
{
    *seconds = 0;
    if (strcmp(text, "Z") == 0 || strcmp(text, "z") == 0)
        return true;
    static const char form[] = "+00:00";
    if (strlen(text) != strlen(form) || (text[0] != '+' && text[0] != '-'))
        return false;
    for (size_t i = 1; i < strlen(form); i++)
        if (form[i] == '0' ? text[i] < '0' || text[i] > '9' : text[i] != form[i])
            return false;
    long hours = 10L * (text[1] - '0') + (text[2] - '0');
    long minutes = 10L * (text[4] - '0') + (text[5] - '0');
    if (hours > 23 || minutes > 59)
        return false;
    *seconds = (text[0] == '-' ? -1L : 1L) * (hours * 3600L + minutes * 60L);
    return true;
}

/* RFC 3339 into unix milliseconds. */
static bool read_time(const char *text, int64_t *out)
{
    struct tm parts = {0};
    const char *at = strptime(text, "%Y-%m-%dT%H:%M:%S", &parts);
    long zone = 0, thousandths = 0, unit = 100;
    if (at == NULL)
        return false;
    if (*at == '.')
        for (at++; *at >= '0' && *at <= '9'; at++, unit /= 10)
            thousandths += unit * (*at - '0');
    if (!read_zone(at, &zone))
        return false;
    *out = ((int64_t)timegm(&parts) - zone) * 1000 + thousandths;
    return true;
}

/* Begin a look with the row at hand. What is wrong with it is kept for when its rows are over. */
static bool begin_look(struct adding *adding, struct base_error *error)
{
    struct look *look = &adding->look;
    look->any = true;
    look->line = adding->records.line;
    look->marks.count = 0;
    look->empty_row = false;
    look->problem = (struct base_error){0};
    for (enum column c = AT_review; c <= AT_submitted; c++) {
        look->texts[c] = base_arena_copy_text(adding->arena, cell(adding, c));
        if (look->texts[c] == NULL)
            return no_memory(error);
    }
    if (read_real(adding, AT_segment_starts, &look->starts_d, &look->problem) &&
        read_real(adding, AT_segment_ends, &look->ends_d, &look->problem) &&
        !read_time(look->texts[AT_submitted], &look->submitted_ms))
        (void)base_fail(&look->problem, BASE_INVALID,
                        "submitted is not a time like 2026-12-01T12:00:00Z: '%.60s'.",
                        look->texts[AT_submitted]);
    return true;
}

static bool read_mark(const struct adding *adding, struct store_mark *mark,
                      struct base_error *problem)
{
    const char *certainty = cell(adding, AT_certainty);
    mark->sure = strcmp(certainty, "unsure") != 0;
    if (mark->sure && certainty[0] != '\0' && strcmp(certainty, "sure") != 0)
        return base_fail(problem, BASE_INVALID, "certainty is sure or unsure, not '%.60s'.",
                         certainty);
    return read_real(adding, AT_mark_starts, &mark->starts_d, problem) &&
           read_real(adding, AT_mark_ends, &mark->ends_d, problem) &&
           read_real(adding, AT_mark_low, &mark->low, problem) &&
           read_real(adding, AT_mark_high, &mark->high, problem);
}

/* Take the row's mark into the look, or note that it has none. */
static bool take_row(struct adding *adding, struct base_error *error)
{
    struct look *look = &adding->look;
    for (enum column c = AT_review; c <= AT_submitted; c++)
        if (strcmp(look->texts[c], cell(adding, c)) != 0 && look->problem.kind == BASE_NONE)
            (void)base_fail(&look->problem, BASE_INVALID, "The rows of this review differ in %s.",
                            column_names[c]);
    bool empty = true;
    for (enum column c = AT_mark_starts; c <= AT_certainty; c++)
        empty = empty && cell(adding, c)[0] == '\0';
    look->empty_row = look->empty_row || empty;
    /* More rows than a review may hold are counted no further: it is refused anyway. */
    if (empty || look->problem.kind != BASE_NONE || look->marks.count > GROUP_MAX)
        return true;
    struct store_mark *mark = vector_add(&look->marks, 1);
    if (mark == NULL)
        return no_memory(error);
    (void)read_mark(adding, mark, &look->problem);
    return true;
}

/* ---- from a look to a review ---- */

/* The reviewer's id; made where the handle is new. */
static bool find_reviewer(struct adding *adding, const char *handle, int64_t *id,
                          struct base_error *error)
{
    struct campaign *campaign = adding->campaign;
    char key[256];
    struct store_person person;
    struct base_error problem = {0};
    if (!campaign_handle_key(handle, key, error))
        return false;
    if (store_person_by_key(campaign->store, adding->arena, key, &person, &problem)) {
        *id = person.id;
        return true;
    }
    if (problem.kind == BASE_NOT_FOUND)
        return store_person_add(campaign->store, handle, key, "", STORE_REVIEWER,
                                base_clock_unix_ms(), id, error);
    *error = problem;
    return false;
}

/* The star's segment that shares most with the look. */
static bool find_segment(struct adding *adding, const struct look *look, struct store_segment *out,
                         struct base_error *error)
{
    struct store *store = adding->campaign->store;
    struct store_star star;
    struct store_segment *segments = NULL;
    size_t count = 0;
    struct base_error problem = {0};
    if (!store_star_by_name(store, adding->arena, look->texts[AT_star], &star, &problem)) {
        if (problem.kind == BASE_NOT_FOUND)
            return base_fail(error, BASE_INVALID, "There is no star '%.60s'.",
                             look->texts[AT_star]);
        *error = problem;
        return false;
    }
    if (!store_segments_of_star(store, adding->arena, star.id, &segments, &count, error))
        return false;
    double most = 0.0;
    for (size_t i = 0; i < count; i++) {
        double shared =
            fmin(segments[i].ends_d, look->ends_d) - fmax(segments[i].starts_d, look->starts_d);
        if (shared > most && shared >= AGREE_LEAST * (look->ends_d - look->starts_d) &&
            shared >= AGREE_LEAST * (segments[i].ends_d - segments[i].starts_d)) {
            most = shared;
            *out = segments[i];
        }
    }
    return most > 0.0 || base_fail(error, BASE_INVALID,
                                   "No segment of %.60s shares at least half with %g to %g d.",
                                   look->texts[AT_star], look->starts_d, look->ends_d);
}

/* The SHA-256 of all that the look says. */
static void hash_look(const struct look *look, unsigned char out[STORE_HASH_SIZE])
{
    crypto_hash_sha256_state state;
    (void)crypto_hash_sha256_init(&state);
    for (enum column c = AT_review; c <= AT_submitted; c++)
        (void)crypto_hash_sha256_update(&state, (const unsigned char *)look->texts[c],
                                        strlen(look->texts[c]) + 1);
    const struct store_mark *marks = look->marks.items;
    for (size_t i = 0; i < look->marks.count; i++) {
        const double values[] = {marks[i].starts_d, marks[i].ends_d, marks[i].low, marks[i].high,
                                 marks[i].sure ? 1.0 : 0.0};
        (void)crypto_hash_sha256_update(&state, (const unsigned char *)values, sizeof values);
    }
    (void)crypto_hash_sha256_final(&state, out);
}

/* There is no lease; what stands for its nonce is made from the reviewer and the key. */
static void stand_in_lease(int64_t person, const char *key, unsigned char lease[16])
{
    unsigned char hash[crypto_hash_sha256_BYTES];
    crypto_hash_sha256_state state;
    (void)crypto_hash_sha256_init(&state);
    (void)crypto_hash_sha256_update(&state, (const unsigned char *)&person, sizeof person);
    (void)crypto_hash_sha256_update(&state, (const unsigned char *)key, strlen(key));
    (void)crypto_hash_sha256_final(&state, hash);
    memcpy(lease, hash, 16);
}

/* What a look says of itself must make sense before anything is looked up. */
static bool check_look(const struct look *look, struct base_error *error)
{
    if (look->problem.kind != BASE_NONE) {
        *error = look->problem;
        return false;
    }
    if (look->texts[AT_review][0] == '\0')
        return base_fail(error, BASE_INVALID, "The review has no name.");
    if (!(look->starts_d < look->ends_d))
        return base_fail(error, BASE_INVALID, "segment_ends must come after segment_starts.");
    if (look->empty_row && look->marks.count > 0)
        return base_fail(error, BASE_INVALID, "The review has rows with a mark and rows without.");
    return true;
}

static bool make_review(struct adding *adding, struct store_review_new *out,
                        struct base_error *error)
{
    struct look *look = &adding->look;
    struct store_segment segment = {0};
    *out = (struct store_review_new){.submitted_ms = look->submitted_ms,
                                     .mark_count = look->marks.count};
    if (!check_look(look, error) || !find_segment(adding, look, &segment, error))
        return false;
    hash_look(look, out->body_hash);
    if (!campaign_review_check(adding->campaign, &segment, look->marks.items, look->marks.count,
                               error))
        return false;
    out->segment = segment.id;
    out->key = base_arena_format(adding->arena, "elsewhere:%s", look->texts[AT_review]);
    out->marks = base_arena_copy(adding->arena, look->marks.items,
                                 look->marks.count * sizeof(struct store_mark));
    if (out->key == NULL || out->marks == NULL)
        return no_memory(error);
    if (strlen(out->key) > KEY_BYTES_MAX)
        return base_fail(error, BASE_INVALID, "The review's name is longer than %d bytes.",
                         KEY_BYTES_MAX - (int)strlen("elsewhere:"));
    if (!find_reviewer(adding, look->texts[AT_reviewer], &out->person, error))
        return false;
    stand_in_lease(out->person, out->key, out->lease);
    return true;
}

/* ---- storing ---- */

static void account(struct adding *adding, const struct store_review_new *review, uint64_t line)
{
    switch (review->outcome) {
    case STORE_REVIEW_TAKEN:
        adding->out->reviews++;
        adding->out->marks += review->mark_count;
        handout_review_taken(adding->campaign->handout, review->person, review->segment);
        runner_reviews_taken(adding->campaign->runner, 1);
        break;
    case STORE_REVIEW_REPEATED:
        adding->out->repeated++;
        break;
    default:
        refuse(adding, line,
               "Another review of this name and reviewer is there already; the rows of one review "
               "stand together.");
    }
}

static bool store_group(struct adding *adding, struct base_error *error)
{
    struct store_review_new *reviews[GROUP_MAX];
    for (size_t i = 0; i < adding->count; i++)
        reviews[i] = &adding->reviews[i];
    bool ok = adding->count == 0 ||
              store_reviews_add(adding->campaign->store, reviews, adding->count, error);
    for (size_t i = 0; ok && i < adding->count; i++)
        account(adding, &adding->reviews[i], adding->lines[i]);
    adding->count = 0;
    base_arena_reset(adding->arena);
    return ok;
}

/* The look's rows are over: make a review of it, or refuse it. */
static bool end_look(struct adding *adding, struct base_error *error)
{
    struct base_error problem = {0};
    if (!adding->look.any)
        return true;
    adding->look.any = false;
    if (make_review(adding, &adding->reviews[adding->count], &problem)) {
        adding->lines[adding->count++] = adding->look.line;
        return true;
    }
    if (problem.kind == BASE_INVALID) {
        refuse(adding, adding->look.line, problem.sentence);
        return true;
    }
    if (error != NULL)
        *error = problem;
    return false;
}

static bool belongs(const struct adding *adding)
{
    return adding->look.any &&
           strcmp(adding->look.texts[AT_review], cell(adding, AT_review)) == 0 &&
           strcmp(adding->look.texts[AT_reviewer], cell(adding, AT_reviewer)) == 0;
}

/* Looks that were refused take memory too until the next group is stored. */
static bool group_is_full(const struct adding *adding)
{
    return adding->count == GROUP_MAX || base_arena_used(adding->arena) > GROUP_BYTES;
}

static bool add_records(struct adding *adding, struct base_error *error)
{
    bool ok = read_header(adding, error), more = true;
    while (ok && (ok = records_next(&adding->records, &more, error)) && more) {
        if (!belongs(adding)) {
            ok = end_look(adding, error) &&
                 (!group_is_full(adding) || store_group(adding, error)) &&
                 begin_look(adding, error);
        }
        ok = ok && take_row(adding, error);
    }
    /* What was whole before a bad line is kept: the sentence names the line to mend, and the
     * mended file can be added again. */
    struct base_error *later = ok ? error : NULL;
    bool rest = (!ok || end_look(adding, later)) && store_group(adding, later);
    return ok && rest;
}

bool campaign_reviews_add_file(struct campaign *campaign, const char *path,
                               void (*refused)(void *context, uint64_t line, const char *reason),
                               void *context, struct campaign_reviews_added *out,
                               struct base_error *error)
{
    *out = (struct campaign_reviews_added){0};
    struct adding *adding = calloc(1, sizeof *adding);
    if (adding == NULL)
        return no_memory(error);
    adding->campaign = campaign;
    adding->refused = refused;
    adding->context = context;
    adding->out = out;
    adding->look.marks = VECTOR_OF(struct store_mark);
    adding->arena = base_arena_new(0);
    bool ok = adding->arena != NULL || no_memory(error);
    if (ok) {
        ok = records_open(&adding->records, path, error) && add_records(adding, error);
        records_close(&adding->records);
    }
    vector_free(&adding->look.marks);
    base_arena_free(adding->arena);
    free(adding);
    return ok;
}
