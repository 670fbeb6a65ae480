/* The rehearsal itself: each reviewer joins, and then looks and answers until nothing is left. */
#include "ebbmark/rehearse.h"

#include <assert.h>
#include <inttypes.h>
#include <jansson.h>
#include <math.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "ebbmark/lightcurve_pack.h"
#include "rehearse_client.h"

#define MARKS_MOST 50
#define LEAST_SNR 3.0

/* Shared by the threads; the lock guards what changes. */
struct rehearsal {
    const struct rehearse_options *options;
    double began_s;
    pthread_mutex_t lock;
    unsigned next_reviewer;
    struct rehearse_totals totals;
    bool stopped;
    struct base_error error; /* of the first thread that failed */
};

/* One reviewer at work, on one thread. */
struct reviewer {
    struct rehearsal *rehearsal;
    unsigned index;
    gsl_rng *random;
    struct rehearse_character character;
    struct rehearse_client client;
};

static bool unexpected(const struct rehearse_client *client, const char *doing,
                       struct base_error *error)
{
    return base_fail(error, BASE_IO, "The server answered %ld to %s: %.200s", client->status, doing,
                     client->body.data != NULL ? client->body.data : "");
}

/* The last answer as JSON; NULL (and an error) when it is none. */
static json_t *answer_json(const struct rehearse_client *client, const char *doing,
                           struct base_error *error)
{
    json_t *json = json_loadb(client->body.data != NULL ? client->body.data : "",
                              client->body.length, 0, NULL);
    if (json == NULL)
        (void)unexpected(client, doing, error);
    return json;
}

static bool join(struct reviewer *reviewer, struct base_error *error)
{
    json_t *nobody = json_object();
    bool ok = nobody != NULL ? rehearse_client_send(&reviewer->client, "POST", "/api/v1/people",
                                                    nobody, NULL, error)
                             : base_fail(error, BASE_MEMORY, "There is no memory for a request.");
    json_decref(nobody);
    if (ok && reviewer->client.status != 201)
        ok = unexpected(&reviewer->client, "joining", error);
    return ok;
}

/* Take a lease. *lease is NULL when nothing is left. */
static bool take_lease(struct reviewer *reviewer, json_t **lease, struct base_error *error)
{
    *lease = NULL;
    if (!rehearse_client_send(&reviewer->client, "POST", "/api/v1/leases", NULL, NULL, error))
        return false;
    if (reviewer->client.status == 204)
        return true;
    if (reviewer->client.status != 201)
        return unexpected(&reviewer->client, "a request for a segment", error);
    *lease = answer_json(&reviewer->client, "a request for a segment", error);
    return *lease != NULL;
}

static json_t *marks_as_json(const struct rehearse_mark *marks, size_t count)
{
    json_t *array = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(
            array, json_pack("{s:f,s:f,s:f,s:f,s:s}", "starts", marks[i].starts_d, "ends",
                             marks[i].ends_d, "low", marks[i].low, "high", marks[i].high,
                             "certainty", marks[i].sure ? "sure" : "unsure"));
    return array;
}

/* Fetch the leased segment's flux, look at it, and decide on marks. */
static bool look(struct reviewer *reviewer, const json_t *lease, struct rehearse_mark *marks,
                 size_t *count, struct base_error *error)
{
    const char *path =
        json_string_value(json_object_get(json_object_get(lease, "segment"), "flux"));
    if (path == NULL || path[0] != '/')
        return base_fail(error, BASE_IO, "The server's lease names no flux to look at.");
    if (!rehearse_client_send(&reviewer->client, "GET", path, NULL, NULL, error))
        return false;
    if (reviewer->client.status != 200)
        return unexpected(&reviewer->client, "a request for flux", error);
    double *time = NULL, *flux = NULL, noise = 0.0;
    size_t n = 0, feature_count = 0;
    struct rehearse_feature features[REHEARSE_FEATURES_MAX];
    bool ok = lightcurve_unpack((const unsigned char *)reviewer->client.body.data,
                                reviewer->client.body.length, &time, &flux, &n, &noise, error) &&
              rehearse_look(time, flux, n, LEAST_SNR, features, &feature_count, error);
    if (ok)
        *count = rehearse_marks(&reviewer->character, features, feature_count, time, flux, n,
                                reviewer->random, marks, MARKS_MOST);
    free(flux);
    free(time);
    return ok;
}

/* Send the review; a lease that ran out or was used meanwhile is no failure. */
static bool answer(struct reviewer *reviewer, const json_t *lease,
                   const struct rehearse_mark *marks, size_t count, unsigned number,
                   struct base_error *error)
{
    char key[96];
    (void)snprintf(key, sizeof key, "rehearsal-%" PRIx64 "-%u-%u-%lx",
                   reviewer->rehearsal->options->seed, reviewer->index, number,
                   gsl_rng_get(reviewer->random));
    json_t *review =
        json_pack("{s:O,s:o,s:[],s:f}", "lease", json_object_get(lease, "lease"), "marks",
                  marks_as_json(marks, count), "conditions", "seconds", 8.0 + 6.0 * (double)count);
    bool ok = review != NULL ? rehearse_client_send(&reviewer->client, "POST", "/api/v1/reviews",
                                                    review, key, error)
                             : base_fail(error, BASE_MEMORY, "There is no memory for a review.");
    json_decref(review);
    if (ok && reviewer->client.status != 201 && reviewer->client.status != 409)
        ok = unexpected(&reviewer->client, "a review", error);
    return ok;
}

/* Count what was acknowledged, tell the caller, and hear whether to go on. */
static bool count_in(struct rehearsal *rehearsal, bool taken, size_t marks)
{
    (void)pthread_mutex_lock(&rehearsal->lock);
    rehearsal->totals.reviews += taken ? 1 : 0;
    rehearsal->totals.marks += taken ? marks : 0;
    const struct rehearse_options *options = rehearsal->options;
    if (!rehearsal->stopped && options->progress != NULL &&
        !options->progress(options->context, rehearsal->totals.reviews, rehearsal->totals.marks,
                           base_clock_monotonic_s() - rehearsal->began_s)) {
        rehearsal->stopped = true;
        (void)base_fail(&rehearsal->error, BASE_CANCELLED, "The rehearsal was stopped.");
    }
    bool go_on = !rehearsal->stopped;
    (void)pthread_mutex_unlock(&rehearsal->lock);
    return go_on;
}

static bool review_all(struct reviewer *reviewer, struct base_error *error)
{
    unsigned most = reviewer->rehearsal->options->looks;
    bool ok = join(reviewer, error);
    for (unsigned number = 0; ok && (most == 0 || number < most); number++) {
        struct rehearse_mark marks[MARKS_MOST];
        size_t count = 0;
        json_t *lease = NULL;
        ok = take_lease(reviewer, &lease, error);
        if (lease == NULL)
            break;
        ok = look(reviewer, lease, marks, &count, error) &&
             answer(reviewer, lease, marks, count, number, error);
        json_decref(lease);
        if (ok && !count_in(reviewer->rehearsal, reviewer->client.status == 201, count))
            break;
    }
    return ok;
}

static bool one_reviewer(struct rehearsal *rehearsal, unsigned index, struct base_error *error)
{
    struct reviewer reviewer = {
        .rehearsal = rehearsal, .index = index, .random = gsl_rng_alloc(gsl_rng_mt19937)};
    if (reviewer.random == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for a rehearsal reviewer.");
    gsl_rng_set(reviewer.random, (unsigned long)(rehearsal->options->seed * 1000003u + index + 1));
    reviewer.character = rehearse_character_of(index, reviewer.random);
    bool ok = rehearse_client_open(&reviewer.client, rehearsal->options->server, error) &&
              review_all(&reviewer, error);
    rehearse_client_close(&reviewer.client);
    gsl_rng_free(reviewer.random);
    return ok;
}

static void *worker(void *argument)
{
    struct rehearsal *rehearsal = argument;
    for (;;) {
        (void)pthread_mutex_lock(&rehearsal->lock);
        bool done = rehearsal->stopped || rehearsal->next_reviewer == rehearsal->options->reviewers;
        unsigned index = done ? 0 : rehearsal->next_reviewer++;
        (void)pthread_mutex_unlock(&rehearsal->lock);
        if (done)
            return NULL;
        struct base_error error = {0};
        bool ok = one_reviewer(rehearsal, index, &error);
        (void)pthread_mutex_lock(&rehearsal->lock);
        rehearsal->totals.people += ok ? 1 : 0;
        if (!ok && !rehearsal->stopped) {
            rehearsal->stopped = true;
            rehearsal->error = error;
        }
        (void)pthread_mutex_unlock(&rehearsal->lock);
    }
}

bool rehearse_run(const struct rehearse_options *options, struct rehearse_totals *totals,
                  struct base_error *error)
{
    assert(options->threads >= 1 && options->threads <= 64 && options->reviewers >= 1);
    struct rehearsal rehearsal = {
        .options = options, .began_s = base_clock_monotonic_s(), .lock = PTHREAD_MUTEX_INITIALIZER};
    pthread_t threads[64];
    unsigned started = 0;
    bool ok = curl_global_init(CURL_GLOBAL_DEFAULT) == CURLE_OK ||
              base_fail(error, BASE_MEMORY, "libcurl could not start.");
    while (ok && started < options->threads) {
        int failed = pthread_create(&threads[started], NULL, worker, &rehearsal);
        if (failed == 0)
            started++;
        else
            ok = base_fail_errno(error, failed, "Starting a rehearsal thread");
    }
    if (!ok) {
        (void)pthread_mutex_lock(&rehearsal.lock);
        rehearsal.stopped = true;
        (void)pthread_mutex_unlock(&rehearsal.lock);
    }
    for (unsigned i = 0; i < started; i++)
        (void)pthread_join(threads[i], NULL);
    curl_global_cleanup();
    *totals = rehearsal.totals;
    totals->seconds = base_clock_monotonic_s() - rehearsal.began_s;
    if (ok && rehearsal.stopped) {
        *error = rehearsal.error;
        ok = false;
    }
    return ok;
}
